"""What is required of a design, as a question gives it: names with bounds, or a case of the atlas.

Stability is part of every requirement, and all of it where nothing else is required.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from sweep.config import Case, Requirement
from sweep.config.requirement import read_requirement
from sweep.errors import QuantityError, QuestionError
from sweep.quantities import format_quantity
from sweep.query.derived import measures_needed, spec_of
from sweep.vocabulary import STABILITY_THRESHOLD

STABLE = Requirement("log_radius", "max", STABILITY_THRESHOLD)
"""The loop is stable: log_radius strictly below the threshold."""

Asked = Mapping[str, object] | Sequence[Requirement]
"""What a question may require: bounds by name, such as ``{"max_decay_time": "80 ms"}``."""


def read_requirements(asked: Asked, held: Iterable[str], title: str) -> tuple[Requirement, ...]:
    """Requirements as given, `STABLE` first, each of them on something that the atlas can answer.

    Parameters
    ----------
    asked
        Bounds by name, or requirements.
    held
        Measures that the atlas holds.
    title
        Of the atlas, for messages.

    Raises
    ------
    QuestionError
        For a name that bounds nothing, a value that is not a quantity of that kind, and a measure
        that the atlas does not hold.
    """
    given = (
        [_read(name, value) for name, value in asked.items()]
        if isinstance(asked, Mapping)
        else list(asked)
    )
    for requirement in given:
        check_held(requirement.quantity, held, requirement.name, title)
    return (STABLE, *(item for item in given if item != STABLE))


def check_held(quantity: str, held: Iterable[str], named: str, title: str) -> None:
    """Refuse a quantity that rests on a measure which the atlas does not hold.

    Raises
    ------
    QuestionError
        Says how the measure is added.
    """
    stored = list(held)
    missing = [name for name in measures_needed(quantity) if name not in stored]
    if missing:
        raise QuestionError(
            f"asking for {named}: it needs the measure {', '.join(missing)}, and the atlas "
            f"{title!r} holds {', '.join(stored)}",
            where=missing,
            remedy=f'write names = ["{missing[0]}"] under [measures] in its config and run it '
            "again: only that measure is computed",
        )


def find_case(cases: Sequence[Case], name: str) -> Case:
    """The case of that name.

    Raises
    ------
    QuestionError
        When the atlas has none of that name; the message names those it has.
    """
    for case in cases:
        if case.name == name:
            return case
    raise QuestionError(
        f"looking for case {name!r}: this atlas holds "
        f"{', '.join(case.name for case in cases) or 'no cases'}",
        where=[name],
        remedy="name one of them, or give its box with --over and its bounds with --require",
    )


def is_violated(requirement: Requirement, worst: NDArray[np.floating]) -> NDArray[np.bool_]:
    """Where a worst value breaks a bound; never where it is NaN, which is unknown."""
    values = worst.astype(np.float64, copy=False)
    if requirement == STABLE:
        return values >= requirement.limit
    return values > requirement.limit if requirement.sense == "max" else values < requirement.limit


def requirement_text(requirement: Requirement) -> str:
    """A requirement for people.

    >>> requirement_text(Requirement("decay_time", "max", 0.08))
    'decay_time at most 80 ms'
    """
    if requirement == STABLE:
        return "stable"
    words = "at most" if requirement.sense == "max" else "at least"
    spec = spec_of(requirement.quantity)
    return f"{requirement.quantity} {words} {format_quantity(requirement.limit, spec.unit)}"


def requirement_name(requirement: Requirement) -> str:
    """As a config writes it; ``stable`` for stability, which none needs to write."""
    return "stable" if requirement == STABLE else requirement.name


def _read(name: str, value: object) -> Requirement:
    try:
        return read_requirement(name, value)
    except QuantityError as error:
        raise QuestionError(
            f"reading the requirement {name} = {value}: {error.message}",
            where=[name],
            remedy=error.remedy or "write it as in a config, such as max_decay_time=80ms",
        ) from error
