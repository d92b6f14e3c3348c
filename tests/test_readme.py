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


def ask(command: str, folder: Path, *, expect: int = 0) -> str:
    words = command.replace("sweep", f"{sys.executable} -m sweep", 1).split()
    environment = os.environ | {"PYTHONPATH": str(CHECKOUT)}
    done = subprocess.run(words, cwd=folder, env=environment, capture_output=True, text=True)
    assert done.returncode == expect, done.stderr
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
    answer = ask(command, desk)
    assert (desk / "mine.toml").exists() if " new " in command else answer.strip()


def test_the_limits_that_readme_prints_are_the_limits(desk):
    command = "sweep limits first-look --along sample_period --at kp=0.2,kd=0"
    shown = README.split(f"$ {command}\n")[1].split("rests on")[0]
    assert ask(command, desk).startswith(shown)


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
