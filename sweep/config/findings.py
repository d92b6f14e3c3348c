"""Collecting mistakes: every one of them, each with its path, what stands there and the remedy."""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Iterable, Mapping
from decimal import Decimal

from sweep.errors import ConfigError, Problem

MOST_PROBLEMS = 200
"""Mistakes listed one by one; the rest are counted."""

_NEAR = 0.78
"""Share of letters in common from which a word was probably meant: a letter or two are wrong, and
not half of them as in ``bogus`` for ``bus``."""

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]{1,60}")


class Findings:
    """The mistakes found so far in one config.

    Parameters
    ----------
    source
        Name of the config, for the message.
    """

    def __init__(self, source: str) -> None:
        self.source = source
        self._problems: list[Problem] = []
        self._count = 0

    def add(self, path: str, found: str, expected: str, remedy: str = "") -> None:
        """Note one mistake; beyond `MOST_PROBLEMS` they are only counted."""
        self._count += 1
        if self._count <= MOST_PROBLEMS:
            self._problems.append(Problem(path, found, expected, remedy))

    def __len__(self) -> int:
        return self._count

    def refuse_if_any(self) -> None:
        """Raise what was found.

        Raises
        ------
        ConfigError
            When there is at least one mistake.
        """
        if not self._count:
            return
        hidden = self._count - len(self._problems)
        problems = list(self._problems)
        if hidden:
            remedy = "mend those above first"
            problems.append(Problem("", f"{hidden} more mistakes", "none like those above", remedy))
        raise ConfigError(self.source, problems)


def describe(value: object) -> str:
    """Shorten whatever stands in a config to a few words on one line.

    >>> describe([1, 2]), describe("5 ms"), describe(True)
    ('an array of 2', '"5 ms"', 'true')
    """
    match value:
        case bool():
            return str(value).lower()
        case str():
            return _shorten(json.dumps(value[:100], ensure_ascii=False))
        case Mapping():
            return "a table" if value else "an empty table"
        case list() | tuple():
            return f"an array of {len(value)}" if value else "an empty array"
        case int() if value.bit_length() > 256:
            return "a whole number with very many digits"
        case int() | float() | Decimal():
            return _shorten(str(value))
        case None:
            return "nothing"
        case _:
            return f"{_shorten(str(value))} (a {type(value).__name__})"


def _shorten(text: str) -> str:
    shown = "".join(letter if letter.isprintable() else "?" for letter in text)
    return shown if len(shown) <= 60 else f"{shown[:57]}..."


def key_path(*parts: str | int) -> str:
    """Join the keys of a TOML path; odd keys are quoted, positions stand in brackets.

    >>> key_path("axes", "kp", "values", 3)
    'axes.kp.values[3]'
    """
    text = ""
    for part in parts:
        if isinstance(part, int):
            text += f"[{part}]"
            continue
        name = part if _BARE_KEY.fullmatch(part) else describe(part)
        text += f".{name}" if text else name
    return text


def below(place: str, name: str) -> str:
    """Extend a path by one key.

    >>> below("designs.released", "kp")
    'designs.released.kp'
    """
    return f"{place}.{key_path(name)}"


def find_near(word: object, choices: Iterable[str]) -> str:
    """Find the choice that was probably meant; empty when none is near.

    >>> find_near("Dampening", ["damping", "gain"]), find_near("bogus", ["bus", "kp"])
    ('damping', '')
    """
    if not isinstance(word, str):
        return ""
    by_folded = {_folded(choice): choice for choice in choices}
    near = difflib.get_close_matches(_folded(word), by_folded, 1, _NEAR)
    return by_folded[near[0]] if near else ""


def _folded(word: str) -> str:
    return word[:80].strip().lower().replace("-", "_").replace(" ", "_")


def suggest(word: object, choices: Iterable[str]) -> str:
    """Word the remedy that names the choice that was probably meant; empty when none is near.

    >>> suggest("dampening", ["damping", "gain"])
    '"damping" was probably meant'
    """
    near = find_near(word, choices)
    return f'"{near}" was probably meant' if near else ""


def listed(names: Iterable[str]) -> str:
    """Join names for a sentence: ``a, b or c``.

    >>> listed(["p", "pi", "pd"])
    'p, pi or pd'
    """
    items = list(names)
    if len(items) > 30:
        items = [*items[:30], f"one of {len(items) - 30} more"]
    return items[0] if len(items) == 1 else f"{', '.join(items[:-1])} or {items[-1]}"
