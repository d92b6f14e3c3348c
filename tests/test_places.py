"""Where the user's cache is, and what becomes of users who have none."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from sweep.measures.kernel_cache import kernel_folder
from sweep.places import user_cache
from sweep.query.memo import Memo


def no_home():
    raise RuntimeError("Could not determine home directory.")


def test_the_cache_is_under_the_home_folder_unless_an_absolute_path_is_named(monkeypatch):
    monkeypatch.setenv("HOME", "/home/of-a-test")
    for name in ("", "relative/path"):
        monkeypatch.setenv("XDG_CACHE_HOME", name)
        assert user_cache() == Path("/home/of-a-test/.cache/sampled-loop-atlas")


def test_a_user_without_a_home_has_a_memo_that_keeps_nothing(monkeypatch):
    monkeypatch.delenv("XDG_CACHE_HOME", raising=False)
    monkeypatch.setattr(Path, "home", no_home)
    memo = Memo()
    memo.put(memo.key({}), {"a": np.zeros(3)})
    assert memo.get(memo.key({})) is None


def test_kernels_of_a_user_without_a_home_are_kept_in_a_new_folder(monkeypatch, tmp_path):
    monkeypatch.delenv("XDG_CACHE_HOME", raising=False)
    monkeypatch.setattr(Path, "home", no_home)
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    assert kernel_folder().parent == tmp_path
