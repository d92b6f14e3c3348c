"""What can go wrong, and the exit code that each kind ends with.

::

    SweepError
    ├── InputError          2    what was asked cannot be done as asked
    │   ├── ConfigError          a config with one or more mistakes, all listed
    │   ├── QuantityError        a number or text that is not the quantity that is needed
    │   ├── QuestionError        a question that the atlas cannot be asked
    │   └── ResourceError        the disk (or another resource) will not hold the answer
    ├── AtlasError          3    the atlas cannot give the answer
    │   └── DamagedAtlas         stored bytes that are not what was written
    └── Interrupted         130  stopped on request; running again resumes

An answer in which too little is computed is printed and ends with 3 too, and is not an error.
Exit code 0 is success and 1 is kept for a requirement that is not met, which is an answer and not
an error.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


class SweepError(Exception):
    """The root of the tree.

    Parameters
    ----------
    message
        What was attempted, on what, what was expected and what was found.
    where
        The config paths, files, axes or tiles concerned.
    remedy
        What to do next, as an imperative sentence.
    """

    kind = "error"
    exit_code = 2

    def __init__(self, message: str, *, where: Sequence[str] = (), remedy: str = "") -> None:
        super().__init__(message)
        self.message = message
        self.where = tuple(where)
        self.remedy = remedy

    def __str__(self) -> str:
        return f"{self.message}\n  -> {self.remedy}" if self.remedy else self.message


class InputError(SweepError):
    """What was asked cannot be done as asked."""

    kind = "input"
    exit_code = 2


@dataclass(frozen=True)
class Problem:
    """One mistake in a config."""

    path: str
    """Dotted TOML path, such as ``axes.kp.step``; empty for the file as a whole."""
    found: str
    """What stands there, shortened to one line."""
    expected: str
    """What is allowed, with its unit and range."""
    remedy: str = ""
    """What to write instead, such as the key that was probably meant."""

    def __str__(self) -> str:
        place = self.path or "the file"
        text = (
            f"{place}: found {self.found}; expected {self.expected}"
            if self.found
            else (f"{place}: {self.expected}")
        )
        return f"{text}\n      -> {self.remedy}" if self.remedy else text


class ConfigError(InputError):
    """A config with one or more mistakes; ``problems`` holds every one of them."""

    kind = "config"

    def __init__(self, source: str, problems: Sequence[Problem]) -> None:
        self.source = source
        self.problems = tuple(problems)
        count = len(self.problems)
        lines = "\n".join(f"  - {problem}" for problem in self.problems)
        super().__init__(
            f"{source} has {count} mistake{'s' if count != 1 else ''}:\n{lines}",
            where=[problem.path for problem in self.problems],
            remedy="mend the config and run `sweep plan` on it again; nothing was written",
        )


class QuantityError(InputError):
    """A number or text that is not the quantity that is needed."""

    kind = "quantity"

    def __init__(self, found: str, expected: str, remedy: str = "") -> None:
        self.found = found
        self.expected = expected
        super().__init__(f"found {found}; expected {expected}", remedy=remedy)


class QuestionError(InputError):
    """A question that the atlas cannot be asked, such as a value off an axis."""

    kind = "question"


class ResourceError(InputError):
    """A resource, such as free disk space, that will not hold what was asked for."""

    kind = "resource"


class AtlasError(SweepError):
    """The atlas cannot give the answer."""

    kind = "atlas"
    exit_code = 3


class DamagedAtlas(AtlasError):
    """Stored bytes that are not what was written."""

    kind = "damaged"


class Interrupted(SweepError):
    """Stopped on request; running again resumes."""

    kind = "interrupted"
    exit_code = 130
