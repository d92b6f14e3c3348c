"""README tells the truth: its questions run, and its Python lines too."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

CHECKOUT = Path(__file__).resolve().parents[1]
README = (CHECKOUT / "README.md").read_text(encoding="utf-8")
QUESTIONS = re.findall(r"\| `(sweep [^`]+)`", README)
NIGHT_LONG = "sweep run configs/overnight.toml"


@pytest.fixture(scope="module")
def desk(tmp_path_factory):
    """A folder with the demo configs and the two atlases that README asks."""
    folder = tmp_path_factory.mktemp("desk")
    shutil.copytree(CHECKOUT / "configs", folder / "configs")
    for name in ("first-look", "lc-filter"):
        ask(f"sweep run configs/{name}.toml", folder)
    return folder


def ask(command: str, folder: Path, *, expect: tuple[int, ...] = (0,)) -> str:
    words = command.replace("sweep", f"{sys.executable} -m sweep", 1).split()
    environment = os.environ | {"PYTHONPATH": str(CHECKOUT)}
    done = subprocess.run(words, cwd=folder, env=environment, capture_output=True, text=True)
    assert done.returncode in expect, done.stderr
    return done.stdout


def test_readme_shows_two_commands_that_stand_alone():
    lines = [
        line
        for block in re.findall(r"```sh\n(.*?)```", README, re.S)
        for line in block.splitlines()
    ]
    assert len(lines) == 2
    assert "sweep run" in lines[0]
    assert "pytest" in lines[1]
    assert all("constraints.txt" in line for line in lines)


def test_readme_asks_at_least_a_dozen_questions():
    assert len(QUESTIONS) >= 12


@pytest.mark.parametrize("command", QUESTIONS)
def test_every_question_of_readme_is_answered(desk, command):
    if command.startswith(NIGHT_LONG):
        command = command.replace("sweep run", "sweep plan").split(" --until")[0]
    # that a requirement is not met is an answer, and exit code 1
    answer = ask(command, desk, expect=(0, 1) if command.startswith("sweep judge") else (0,))
    assert (desk / "mine.toml").exists() if " new " in command else answer.strip()


def shown_answers(which: str) -> dict[str, str]:
    """Command -> what README shows of its answer, for the atlas ``which``."""
    found = re.findall(r"```\n\$ (sweep (\w+) (\S+)[^\n]*)\n(.*?)```", README, re.S)
    return {
        command: shown
        for command, kind, atlas, shown in found
        if atlas == which and kind in {"limits", "point", "judge", "robust", "choose"}
    }


FIRST_LOOK, OVERNIGHT = shown_answers("first-look"), shown_answers("overnight")


def test_readme_shows_limits_a_node_and_a_verdict_and_a_whole_review():
    assert [command.split()[1] for command in FIRST_LOOK] == ["limits", "point", "judge"]
    assert [command.split()[1] for command in OVERNIGHT] == ["judge", "robust", "choose"]


@pytest.mark.parametrize("command", FIRST_LOOK)
def test_what_readme_shows_is_what_the_atlas_answers(desk, command):
    assert ask(command, desk).startswith(FIRST_LOOK[command].rstrip())


@pytest.mark.long
def test_the_review_that_readme_shows_is_what_the_atlas_of_a_night_answers(tmp_path):
    """Sweeps 1.04e9 nodes, 5.5 GB, in three to ten minutes."""
    shutil.copytree(CHECKOUT / "configs", tmp_path / "configs")
    ask(NIGHT_LONG, tmp_path)
    for command, shown in OVERNIGHT.items():
        assert ask(command, tmp_path, expect=(0, 1)).startswith(shown.rstrip()), command


def test_the_python_lines_of_readme_run(desk):
    block = re.search(r"```python\n(.*?)```", README, re.S).group(1)
    environment = os.environ | {"PYTHONPATH": str(CHECKOUT)}
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", block],
        cwd=desk,
        env=environment,
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
