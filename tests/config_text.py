"""One sound config to vary, and how tests read a variation of it."""

from pathlib import Path

import pytest

from sweep.config import Config, parse_config
from sweep.errors import ConfigError, Problem

BASE = """\
title = "Test stand"

[plant]
kind = "oscillator"
natural_frequency = "50 Hz"

[controller]
kind = "pd"
kd = "1 ms"

[delay]
update = "1 sample"

[axes.sample_period]
start = "1 ms"
stop = "5 ms"
step = "0.5 ms"

[axes.kp]
start = -1
stop = 1
count = 21

[axes.damping]
values = [0.01, 0.02, 0.05]

[designs.released]
sample_period = "2 ms"
kp = 0.2

[cases.normal]
over.damping = [0.01, 0.02]
require.max_decay_time = "80 ms"
"""


def swap(*pairs: tuple[str, str]) -> str:
    """BASE with each old text, which stands in it once, replaced by a new one."""
    text = BASE
    for old, new in pairs:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    return text


def read(text: str, folder: Path = Path("nowhere")) -> Config:
    return parse_config(text, folder=folder, source="test.toml")


def problems(text: str, folder: Path = Path("nowhere")) -> dict[str, Problem]:
    """The mistakes of a text by path."""
    with pytest.raises(ConfigError) as caught:
        read(text, folder)
    return {problem.path: problem for problem in caught.value.problems}


def axis_text(body: str, name: str = "kp") -> str:
    """BASE with the nodes of one axis given by ``body``, and without designs and cases."""
    head = BASE[: BASE.index("[designs")]
    start = head.index(f"[axes.{name}]\n")
    end = head.find("\n[", start)
    return head[:start] + f"[axes.{name}]\n{body}\n" + (head[end:] if end >= 0 else "")


def coordinates(body: str, name: str = "kp", stored: str | None = None) -> list[float]:
    """Stored coordinates of the axis whose nodes are given by ``body``."""
    return read(axis_text(body, name)).grid.axis(stored or name).coordinates.tolist()
