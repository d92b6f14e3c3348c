"""Broken configs on the command line: exit code 2, path and remedy, nothing written."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
from test_broken_configs import BROKEN

from sweep.__main__ import main


def tree(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


def test_there_are_at_least_a_hundred_broken_configs():
    assert len({name for name, _ in BROKEN}) >= 100


@pytest.mark.parametrize("content", dict(BROKEN).values(), ids=dict(BROKEN))
def test_a_broken_config_ends_with_two_and_writes_nothing(content, tmp_path, monkeypatch, capsys):
    (tmp_path / "broken.toml").write_bytes(content)
    monkeypatch.chdir(tmp_path)
    for command in ("plan", "run"):
        assert main([command, "broken.toml"]) == 2
        shown = capsys.readouterr()
        assert shown.out == ""
        assert "broken.toml" in shown.err
        assert "->" in shown.err
        assert "Traceback" not in shown.err
    assert main(["plan", "broken.toml", "--json"]) == 2
    document = json.loads(capsys.readouterr().out)
    assert document["error"] == "config"
    assert document["message"]
    assert document["remedy"]
    assert document["where"]
    assert tree(tmp_path) == ["broken.toml"]


@pytest.mark.parametrize("name", [name for name, _ in BROKEN[::40]])
def test_a_broken_config_ends_the_program_the_same_way(name, tmp_path):
    (tmp_path / "broken.toml").write_bytes(dict(BROKEN)[name])
    done = subprocess.run(
        [sys.executable, "-m", "sweep", "run", str(tmp_path / "broken.toml"), "--shelf", "results"],
        cwd=Path(__file__).parents[1],
        capture_output=True,
        text=True,
    )
    assert done.returncode == 2
    assert "Traceback" not in done.stderr
    assert tree(tmp_path) == ["broken.toml"]
