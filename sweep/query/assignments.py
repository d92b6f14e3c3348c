"""What the command line writes as ``NAME=VALUE,...``, taken apart."""

from __future__ import annotations

import re
from collections.abc import Iterable

from sweep.errors import QuestionError

_ASSIGNMENT = re.compile(r",(?=\s*[A-Za-z_][A-Za-z0-9_.]*\s*=)")

_FORMS = {
    "--at": ("NAME=VALUE", "kp=0.3,sample_period=5ms"),
    "--around": ("NAME=VALUE", "kp=0.3,sample_period=5ms"),
    "--over": ("NAME=LOW:HIGH", "damping=0.005:0.02,bus=0:0.5"),
    "--within": ("NAME=LOW:HIGH", "sample_period=5ms:10ms"),
    "--require": ("BOUND=VALUE", "max_decay_time=80ms"),
    "--shake": ("NAME=REACH", "kp=10%,sample_period=2%"),
}
"""By option, the form of a piece and an example."""


def parse_assignments(texts: Iterable[str], option: str = "--at") -> dict[str, str | list[str]]:
    """Read ``kp=0.3,sample_period=5ms``; a name given again collects its values in a list.

    Parameters
    ----------
    texts
        As they were given.
    option
        Whose they are, for the message.

    Raises
    ------
    QuestionError
        When a piece has no ``=`` or nothing on one side of it.

    Examples
    --------
    >>> parse_assignments(["kp=0.3,sample_period=5ms"])
    {'kp': '0.3', 'sample_period': '5ms'}
    >>> parse_assignments(["unit=A, left", "unit=B"], "--over")
    {'unit': ['A, left', 'B']}
    """
    found: dict[str, str | list[str]] = {}
    for piece in (piece for text in texts for piece in _ASSIGNMENT.split(text)):
        name, equals, value = (part.strip() for part in piece.partition("="))
        if not (name and equals and value):
            form, example = _FORMS[option]
            raise QuestionError(
                f"reading {option} {piece.strip()!r}: expected {form}, such as "
                f"{example.partition(',')[0]}",
                where=[piece.strip()],
                remedy=f"separate several by commas: {option} {example}"
                if "," in example
                else f"write {option} {example}",
            )
        earlier = found.get(name)
        if earlier is None:
            found[name] = value
        else:
            found[name] = [*(earlier if isinstance(earlier, list) else [earlier]), value]
    return found


def parse_single(texts: Iterable[str], option: str = "--at") -> dict[str, str]:
    """As `parse_assignments`, where each name has one value.

    Raises
    ------
    QuestionError
        When a name is given twice.

    Examples
    --------
    >>> parse_single(["max_decay_time=80ms,max_radius=0.9"], "--require")
    {'max_decay_time': '80ms', 'max_radius': '0.9'}
    """
    found = {}
    for name, value in parse_assignments(texts, option).items():
        if not isinstance(value, str):
            raise QuestionError(
                f"reading {option} {name}: it is given {len(value)} times",
                where=[name],
                remedy=f"give {name} once",
            )
        found[name] = value
    return found
