"""The command `sweep memo`: what is kept, where, and forgetting it."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from sweep.__main__ import main
from sweep.query.memo import Memo

pytestmark = pytest.mark.usefixtures("memo_is_on")


def ask(capsys, *arguments):
    code = main(["memo", *arguments])
    return code, *capsys.readouterr()


@pytest.fixture
def mine(tmp_path, monkeypatch):
    """The memo that the command looks after, with two entries."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    memo = Memo()
    for n in range(2):
        memo.put(memo.key({"q": n}), {"a": np.zeros(100)})
    return memo


def test_the_command_shows_what_is_kept(mine, capsys):
    code, out, err = ask(capsys)
    assert (code, err) == (0, "")
    shown = " ".join(out.split())
    assert "answers 2" in shown
    assert "of at most 1 GB" in shown
    assert mine.folder.name in shown


def test_the_command_gives_programs_a_document(mine, capsys):
    facts = mine.facts()
    assert json.loads(ask(capsys, "--json")[1]) == {
        "folder": str(mine.folder),
        "writable": True,
        "entries": 2,
        "bytes": facts.bytes,
        "limit_bytes": 10**9,
        "enabled": True,
        "removed_entries": 0,
        "removed_bytes": 0,
    }


def test_the_command_clears_and_says_how_much(mine, capsys):
    held = mine.facts().bytes
    document = json.loads(ask(capsys, "--clear", "--json")[1])
    assert (document["entries"], document["removed_entries"]) == (0, 2)
    assert document["removed_bytes"] == held
    mine.put(mine.key({}), {"a": np.zeros(100)})
    assert "removed" in ask(capsys, "--clear")[1]
    assert mine.facts().entries == 0


def test_the_command_says_that_the_memo_is_switched_off(capsys, monkeypatch):
    monkeypatch.setenv("SWEEP_MEMO", "off")
    assert "switched off" in ask(capsys)[1]
    assert json.loads(ask(capsys, "--json")[1])["enabled"] is False


def test_a_wrong_bound_is_one_clear_line_and_exit_code_2(capsys, monkeypatch):
    monkeypatch.setenv("SWEEP_MEMO_BYTES", "much")
    code, out, err = ask(capsys)
    assert (code, out) == (2, "")
    assert "SWEEP_MEMO_BYTES" in err


def test_an_entry_that_cannot_be_removed_is_said(mine, capsys, monkeypatch):
    def denied(self, **_options):
        raise PermissionError(13, "Permission denied", str(self))

    monkeypatch.setattr(Path, "unlink", denied)
    code, _, err = ask(capsys, "--clear")
    assert code == 2
    assert str(mine.folder) in err
    assert "Permission denied" in err
