"""What is judged, and against what: from names, values and files to designs and demands."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from sweep.config import Case
from sweep.errors import QuestionError
from sweep.query.judging.judge import AskedDesign, Weights, named_designs
from sweep.query.judging.schedule import read_schedule, read_weights
from sweep.query.question import Demand
from sweep.query.requirement import Asked as Required
from sweep.query.requirement import find_case
from sweep.query.select import Asked, resolve_names
from sweep.query.shake import Asked as Shaking

if TYPE_CHECKING:
    from sweep.store.atlas import StoredAtlas

UNNAMED = "the design asked for"
"""What a design is called that is given by its values alone."""


def gather_designs(
    stored: StoredAtlas,
    names: Sequence[str],
    at: Mapping[str, Asked],
    schedule: Path | None,
) -> list[AskedDesign]:
    """The designs of a question: named, given by values, rows of a table, else all of the atlas.

    Parameters
    ----------
    stored
        The atlas.
    names
        Designs that it holds; with ``at`` as well each of them is changed to these values.
    at
        Values of design axes.
    schedule
        A CSV file, a design in every row.

    Raises
    ------
    QuestionError
        For a name that the atlas does not hold, a mistake in the table, and two designs of one
        name.
    """
    found: list[AskedDesign] = []
    if names or not (at or schedule):
        found += named_designs(stored, names)
    if at and names:
        found = [_changed(design, stored, at) for design in found]
    elif at:
        found.append(AskedDesign(UNNAMED, dict(at)))
    if schedule:
        found += read_schedule(schedule, stored.grid)
    _check_names(found, schedule)
    return found


def _check_names(designs: Sequence[AskedDesign], schedule: Path | None) -> None:
    """Refuse two verdicts under one name, of which nobody could tell the one from the other."""
    counts = Counter(design.name for design in designs)
    for name, times in counts.items():
        if times > 1:
            rows = f" (a row of {schedule} is one of them)" if schedule else ""
            raise QuestionError(
                f"judging {len(designs)} designs: {times} of them are called {name}{rows}; "
                "expected a name of its own for each",
                where=[name],
                remedy="label the row otherwise" if schedule else f"name {name} once",
            )


def gather_demands(
    cases: Sequence[Case],
    names: Sequence[str],
    over: Mapping[str, Asked],
    require: Required,
    shake: Shaking,
) -> list[Demand]:
    """The demands of a question: named cases, or its own box and bounds, else every case.

    Raises
    ------
    QuestionError
        For a case that the atlas does not hold.
    """
    chosen: list[Case | None] = [find_case(cases, name) for name in names]
    if not chosen and not (over or require):
        chosen = list(cases)
    return [Demand(case, over, require, shake) for case in chosen or [None]]


def gather_weights(stored: StoredAtlas, weights: Weights | Path | str | None) -> Weights | None:
    """Weights of rows, from a mapping or a CSV file."""
    if isinstance(weights, Path | str):
        return read_weights(Path(weights), stored.grid)
    return weights


def as_names(names: str | Sequence[str]) -> tuple[str, ...]:
    """One name, several, or (empty) none.

    >>> as_names("slow"), as_names(""), as_names(["slow", "quick"])
    (('slow',), (), ('slow', 'quick'))
    """
    if isinstance(names, str):
        return (names,) if names else ()
    return tuple(names)


def _changed(design: AskedDesign, stored: StoredAtlas, at: Mapping[str, Asked]) -> AskedDesign:
    changed = resolve_names(stored.grid, at)
    kept = {name: value for name, value in design.at.items() if name not in changed}
    named = ", ".join(f"{name}={value}" for name, value in at.items())
    return replace(design, name=f"{design.name} with {named}", at=kept | dict(at))
