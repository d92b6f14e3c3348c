"""A question's own words given back: an axis and its values spelled as they were asked.

Who asks at a sample rate is answered in rates, and a bare number is given back with the unit that
it was taken in.
"""

from __future__ import annotations

from decimal import Decimal

from sweep.errors import QuantityError
from sweep.grid import Axis
from sweep.quantities import format_quantity, parse_quantity, reciprocal, split_quantity, to_float

_DIGITS = 10
"""Of a number that is given back: a slip in the ninth digit is seen."""


def is_rate(axis: Axis, name: str) -> bool:
    """Whether a question calls a sample period by its rate."""
    return name == "sample_rate" != axis.name


def spell_value(axis: Axis, name: str, asked: object) -> str:
    """One value as it was asked: a bare number with its unit, a text as it was written.

    Parameters
    ----------
    axis
        That the value is on.
    name
        How the question spelled the axis; empty when as it is called.
    asked
        A number in the unit of the axis (of its rate), or a text.
    """
    if axis.labels is not None or not isinstance(asked, str | float | int):
        return str(asked)
    unit, shown = ("Hz", "") if is_rate(axis, name) else (axis.unit, axis.display_unit)
    try:
        if isinstance(asked, str) and split_quantity(asked).unit:
            return asked.strip()
        return format_quantity(parse_quantity(asked, unit), unit, shown, digits=_DIGITS)
    except QuantityError:
        return str(asked)


def spell_asked(axis: Axis, name: str, asked: object) -> str:
    """Axis and value as they were asked; a rate with its period beside it.

    Examples
    --------
    >>> import numpy as np
    >>> period = Axis("sample_period", ("sample_period",), np.array([0.001, 0.008]), "design", 0,
    ...     unit="s", display_unit="ms")
    >>> spell_asked(period, "sample_rate", "50Hz")
    'sample_rate = 50Hz (20 ms)'
    >>> spell_asked(period, "", 0.0025)
    'sample_period = 2.5 ms'
    """
    text = f"{name or axis.name} = {spell_value(axis, name, asked)}"
    if not is_rate(axis, name) or not isinstance(asked, str | float | int):
        return text
    try:
        rate = parse_quantity(asked, "Hz")
    except QuantityError:
        return text
    return f"{text} ({format_quantity(reciprocal(rate), 's', axis.display_unit)})" if rate else text


def spell_node(axis: Axis, name: str, node: int, *, digits: int | None = 6) -> str:
    """A node's coordinate in the question's words, with its unit; or its row's label."""
    if axis.labels is not None:
        return axis.labels[node]
    value = float(axis.coordinates[node])
    if is_rate(axis, name):
        return format_quantity(to_float(reciprocal(Decimal(repr(value)))), "Hz", digits=digits)
    return format_quantity(value, axis.unit, axis.display_unit, digits=digits)


def spell_ends(axis: Axis, name: str) -> tuple[str, str]:
    """The lower and the upper end of an axis in the question's words."""
    ends = spell_node(axis, name, 0), spell_node(axis, name, len(axis) - 1)
    return ends[::-1] if is_rate(axis, name) else ends
