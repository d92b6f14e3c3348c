"""Where nothing can be written, the thing that was asked for is named, and nothing else is said."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import stand_in

from sweep.__main__ import main
from sweep.places import can_be_written
from sweep.store.atlas import create_atlas

ROOT = Path(__file__).parents[1]
MAP = ("map", "flat", "-x", "kp", "-y", "gain")


@pytest.fixture
def shelf(tmp_path):
    """A shelf with a computed atlas; the values are made up."""
    config = stand_in.flat(4, 3)
    atlas = create_atlas(tmp_path / "shelf" / "flat.zarr", config, (4, 3))
    values = np.full((4, 3), -0.1, np.float32)
    for tile in atlas.tiling:
        stand_in.write_tile(atlas, tile, dict.fromkeys(config.measures, values))
    return tmp_path / "shelf"


def failed(capsys, *arguments):
    """Stderr of a command that must end with 2."""
    code = main([str(argument) for argument in arguments])
    captured = capsys.readouterr()
    assert (code, captured.out) == (2, "")
    assert "partial" not in captured.err
    assert "check that it is there" not in captured.err
    return captured.err


def test_a_map_that_cannot_be_written_names_its_file_and_the_folder(capsys, shelf, monkeypatch):
    def refuse(_path, _data):
        raise PermissionError(13, "Permission denied", "map.png.partial")

    monkeypatch.setattr(Path, "write_bytes", refuse)
    target = shelf / "map.png"
    err = failed(capsys, *MAP, "-o", target, "--shelf", shelf)
    assert f"writing the map to {target}: expected that its folder {shelf} can be written" in err
    assert "the system says: Permission denied" in err


def test_a_map_onto_a_folder_is_refused_and_leaves_nothing_behind(capsys, shelf):
    (shelf / "map.png").mkdir()
    err = failed(capsys, *MAP, "-o", shelf / "map.png", "--shelf", shelf)
    assert f"writing the map to {shelf / 'map.png'}" in err
    assert sorted(path.name for path in shelf.iterdir()) == ["flat.zarr", "map.png"]


def test_a_starter_config_in_no_folder_says_which_folder_is_missing(capsys, tmp_path):
    err = failed(capsys, "new", tmp_path / "none" / "x.toml")
    assert f"writing a starter config to {tmp_path / 'none' / 'x.toml'}" in err
    assert f"expected a folder {tmp_path / 'none'} that can be written" in err
    assert "there is no such folder" in err


def test_a_starter_config_below_a_file_says_what_the_system_says(capsys, tmp_path):
    (tmp_path / "file").write_text("")
    err = failed(capsys, "new", tmp_path / "file" / "x.toml")
    assert "the system says: Not a directory" in err


def test_a_memo_that_can_keep_nothing_says_so(capsys, tmp_path, monkeypatch):
    (tmp_path / "file").write_text("")
    monkeypatch.delenv("SWEEP_MEMO", raising=False)
    for home, writable in ((tmp_path / "file", False), (tmp_path / "none" / "yet", True)):
        monkeypatch.setenv("XDG_CACHE_HOME", str(home))
        assert main(["memo"]) == 0
        assert ("Nothing can be kept there" in capsys.readouterr().out) is not writable
        assert main(["memo", "--json"]) == 0
        assert json.loads(capsys.readouterr().out)["writable"] is writable


def test_a_folder_of_somebody_else_cannot_be_written(tmp_path, monkeypatch):
    assert can_be_written(tmp_path / "a" / "b")
    monkeypatch.setattr(os, "access", lambda _path, mode: not mode & os.W_OK)
    assert not can_be_written(tmp_path / "a" / "b")


def test_a_map_is_drawn_without_a_word_where_matplotlib_can_keep_nothing(shelf):
    gone = dict.fromkeys(("HOME", "XDG_CACHE_HOME", "XDG_CONFIG_HOME"), "/dev/null/none")
    environment = {k: v for k, v in os.environ.items() if k != "MPLCONFIGDIR"} | gone
    target = shelf / "map.png"
    done = subprocess.run(
        [sys.executable, "-m", "sweep", *MAP, "-o", target, "--shelf", shelf],
        cwd=ROOT,
        env=environment,
        capture_output=True,
        text=True,
    )
    assert (done.returncode, done.stderr.strip()) == (0, f"Wrote {target}")
