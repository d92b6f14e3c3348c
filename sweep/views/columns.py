"""Columns of coordinates: the unit once, in the head; bare numbers below it."""

from __future__ import annotations

import numpy as np

from sweep.grid import Axis
from sweep.quantities import display_factor, display_name, format_quantity
from sweep.query.select import Value


def head(name: str, axis: Axis) -> str:
    """A column's head with the unit of its numbers."""
    unit = unit_name(axis)
    return f"{name} [{unit}]" if unit else name


def unit_name(axis: Axis) -> str:
    """The one unit in which all of an axis is shown; empty for rows and bare numbers."""
    return "" if axis.is_row_axis else display_name(axis.unit, _unit(axis))


def number(axis: Axis, value: Value) -> str:
    """A coordinate without its unit, which stands in the head of the column.

    What interpolation left of a zero is a zero: a hundred-thousandth of the finest cell.
    """
    if isinstance(value, str):
        return value
    finest = float(np.diff(axis.coordinates).min()) if len(axis) > 1 else 0.0
    shown = 0.0 if abs(value) < 1e-5 * finest else value
    return f"{shown / display_factor(axis.unit, _unit(axis)):.6g}"


def _unit(axis: Axis) -> str:
    """One unit for all of an axis: its own for people, else what suits its largest value."""
    if axis.display_unit or axis.is_row_axis:
        return axis.display_unit
    largest = float(abs(axis.coordinates).max())
    return format_quantity(largest, axis.unit).partition(" ")[2]
