"""What a command is, and the options that several commands share."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

HALF_SAMPLE = (
    "Delay counts from the sampling instant to the instant the output changes. The hold's own half "
    'sample is in the model already: the trade\'s "1.5 samples" is a delay of 1 sample here.'
)
"""Said wherever delay is entered or shown."""

BARE_NUMBERS = (
    "A bare number is in the unit of the stored coordinate (SI; samples on a samples axis); "
    "5ms, 4kHz or 2% work too. sample_rate is another spelling of sample_period."
)


@dataclass(frozen=True)
class Command:
    """One command."""

    name: str
    """What is typed."""
    group: str
    """What one wants with it: make, look, decide or keep."""
    summary: str
    """One line for the list of commands."""
    description: str
    """A paragraph for its own help."""
    example: str
    """A command that works, with the shell's prompt left out."""
    add_options: Callable[[argparse.ArgumentParser], None]
    """Declares its arguments."""
    run: Callable[[argparse.Namespace], int]
    """Does it; returns the exit code."""


def add_json(parser: argparse.ArgumentParser) -> None:
    """Declare ``--json``."""
    parser.add_argument(
        "--json", action="store_true", help="one JSON document on stdout, for programs"
    )


def add_shelf(parser: argparse.ArgumentParser) -> None:
    """Declare ``--shelf``."""
    parser.add_argument(
        "--shelf",
        metavar="DIR",
        type=Path,
        default=Path("results"),
        help="the folder of atlases (default: results/ in the current folder)",
    )


def add_config(parser: argparse.ArgumentParser) -> None:
    """Declare the config argument."""
    parser.add_argument("config", metavar="CONFIG", type=Path, help="the TOML file of the sweep")


def add_atlas(parser: argparse.ArgumentParser) -> None:
    """Declare the atlas argument with the shelf that it is looked for on."""
    parser.add_argument(
        "atlas", metavar="ATLAS", help="a folder, or any unique part of a title or id on the shelf"
    )
    add_shelf(parser)
    add_json(parser)


def add_place(parser: argparse.ArgumentParser, *, unnamed: str) -> None:
    """Declare ``--at`` and ``--design``."""
    parser.add_argument(
        "--at",
        metavar="AXIS=VALUE,...",
        action="append",
        default=[],
        help=f"where to ask, such as kp=0.3,sample_period=5ms; {unnamed}",
    )
    parser.add_argument(
        "--design",
        metavar="NAME",
        default="",
        help="ask at a design that is stored in the atlas; --at comes on top of it",
    )


def add_over(parser: argparse.ArgumentParser) -> None:
    """Declare ``--case`` and ``--over``: the tolerance box."""
    parser.add_argument(
        "--case",
        metavar="NAME",
        default="",
        help="a case that is stored in the atlas: its tolerances, and what it requires; --over "
        "and --require come on top of it",
    )
    parser.add_argument(
        "--over",
        metavar="AXIS=LOW:HIGH,...",
        action="append",
        default=[],
        help="the tolerances to survive, such as damping=0.005:0.02,bus=0:0.5; tolerance axes that "
        "are not named count over their full range; rows: unit=A,unit=B",
    )


def add_within(parser: argparse.ArgumentParser) -> None:
    """Declare ``--within``."""
    parser.add_argument(
        "--within",
        metavar="AXIS=LOW:HIGH,...",
        action="append",
        default=[],
        help="keep a design axis to a range, such as sample_period=5ms:10ms",
    )


def add_require(parser: argparse.ArgumentParser) -> None:
    """Declare ``--require`` and ``--shake``: what a design must meet, and how far it may move."""
    parser.add_argument(
        "--require",
        metavar="BOUND=VALUE,...",
        action="append",
        default=[],
        help="bounds to meet beside those of the case (of two the stricter counts), max_ or min_ "
        "before a measure, such as max_decay_time=80ms; being stable is always required",
    )
    parser.add_argument(
        "--shake",
        metavar="AXIS=REACH,...",
        action="append",
        default=[],
        help="how far design axes may move by themselves, such as kp=10%%,sample_period=2%%: the "
        "worst neighbour counts",
    )


def add_nearest(parser: argparse.ArgumentParser) -> None:
    """Declare ``--nearest``."""
    parser.add_argument(
        "--nearest",
        action="store_true",
        help="where a value lies between nodes take the nearest node, and say so",
    )
