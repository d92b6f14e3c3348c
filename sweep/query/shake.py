"""Shaking a design: the worst over its neighbours on design axes as well.

A gain drifts, a clock is off by a little, a coefficient is rounded: design axes are named, with how
far each may move from where it was chosen. As with every range, a bound between nodes takes in the
next node outward. Where the range leaves the axis, or could only be closed by a node at which a
gain of 0 changes the loop's structure, part of it is unknown.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.errors import QuantityError, QuestionError
from sweep.grid import Axis, Grid
from sweep.quantities import parse_quantity, to_float
from sweep.query.blocks import Indices
from sweep.query.extremes import Extreme, Extremes, worst_place
from sweep.query.select import gain_changes_structure
from sweep.query.spoken import spell_value

Asked = Mapping[str, float | str]
"""By axis how far it may move, to either side: ``"10%"`` of the value, or a quantity."""


@dataclass(frozen=True)
class Reach:
    """How far one axis may move from a value, in the unit of the axis."""

    name: str
    """Of the axis, as the question spelled it."""
    relative: float = 0.0
    """As a share of the value."""
    absolute: float = 0.0
    """As a distance."""

    def around(self, values: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
        """The lowest and the highest value that are reached from each."""
        if self.name == "sample_rate":
            rates = 1.0 / values
            step = self.relative * rates + self.absolute
            with np.errstate(divide="ignore"):
                slowest = np.where(step < rates, 1.0 / np.maximum(rates - step, 0.0), np.inf)
            return 1.0 / (rates + step), slowest
        step = self.relative * np.abs(values) + self.absolute
        return values - step, values + step


@dataclass(frozen=True)
class Window:
    """The neighbours of some values on one axis."""

    axis: int
    """Position in the grid."""
    first: Indices
    """Shape (n,): the lowest node that each takes in."""
    last: Indices
    """Shape (n,): the highest one."""
    lost: NDArray[np.bool_]
    """Shape (n,): whether part of the range is unknown."""

    @property
    def span(self) -> Indices:
        """Every node that is needed."""
        return np.arange(self.first.min(), self.last.max() + 1, dtype=np.intp)


def read_reach(axis: Axis, name: str, asked: float | str) -> Reach:
    """How far an axis may move.

    Raises
    ------
    QuestionError
        For a tolerance axis, a row axis, and what is neither a percentage between 0 and 100 nor a
        quantity above 0.
    """
    if axis.role == "tolerance" or axis.is_row_axis:
        what = "a tolerance axis" if axis.role == "tolerance" else "a table of rows"
        raise QuestionError(
            f"shaking {name}: it is {what}",
            where=[axis.name],
            remedy="shake design axes; what nature does is the box, given with --over",
        )
    text = str(asked).strip()
    as_share = text.endswith("%")
    unit = "1" if as_share else ("Hz" if name == "sample_rate" else axis.unit)
    try:
        value = parse_quantity(text if isinstance(asked, str) else asked, unit)
    except QuantityError as error:
        raise _not_a_reach(name, asked, error.message) from error
    if not (value.is_finite() and value > 0 and (not as_share or value < 1)):
        raise _not_a_reach(name, asked, "expected a percentage below 100 or a quantity above 0")
    amount = to_float(value)
    return Reach(name, relative=amount) if as_share else Reach(name, absolute=amount)


def find_window(grid: Grid, position: int, values: NDArray[np.float64], reach: Reach) -> Window:
    """The neighbours of some values on one axis.

    Parameters
    ----------
    grid
        Of the atlas.
    position
        Of the axis.
    values
        Those that are shaken, shape (n,), increasing, within the axis.
    reach
        How far.
    """
    axis = grid.axes[position]
    x = axis.coordinates
    low, high = (axis.snapped(ends) for ends in reach.around(axis.snapped(values)))
    first = np.searchsorted(x, low, side="right") - 1
    last = np.searchsorted(x, high, side="left")
    lost = (first < 0) | (last > len(x) - 1)
    first, last = np.maximum(first, 0), np.minimum(last, len(x) - 1)
    for node in gain_changes_structure(grid, axis):
        below = (first == node) & (x[node] < low)
        above = (last == node) & (x[node] > high)
        # inside the range that node counts, but what lies beside it is unknown; outside the range
        # it is no neighbour, and says nothing about it either
        lost |= (first <= node) & (node <= last) & (first < last)
        first, last = first + below, last - above
    return Window(position, first.astype(np.intp), last.astype(np.intp), lost)


def shake_extremes(
    found: Extremes, window: Window, dimension: int
) -> tuple[Extremes, dict[Extreme, Indices]]:
    """The worst over each node's neighbours along one axis.

    Parameters
    ----------
    found
        Of the nodes ``window.span`` along dimension ``dimension``.
    window
        The neighbours.
    dimension
        Of the arrays.

    Returns
    -------
    The worst of the shaken nodes, and for each quantity the place in ``window.span`` where it is
    reached. Unknown nodes are counted over all neighbours, a lost part of a range as one more.
    """
    start = int(window.first.min())
    parts = [
        slice(int(a) - start, int(b) - start + 1)
        for a, b in zip(window.first, window.last, strict=True)
    ]
    worst, which, places = {}, {}, {}
    for item, values in found.worst.items():
        place = _worst_places(values, item.sense, parts, dimension)
        worst[item] = np.take_along_axis(values, place, axis=dimension)
        which[item] = np.take_along_axis(found.which[item], place, axis=dimension)
        places[item] = place
    unknown = np.moveaxis(found.unknown, dimension, 0)
    counted = np.stack([unknown[part].sum(axis=0, dtype=np.int64) for part in parts])
    counted += window.lost.reshape(-1, *[1] * (counted.ndim - 1))
    most = np.iinfo(np.int32).max
    held = np.minimum(np.moveaxis(counted, 0, dimension), most).astype(np.int32)
    return Extremes(worst, which, held), places


def _worst_places(
    values: NDArray[Any], sense: str, parts: list[slice], dimension: int
) -> NDArray[np.intp]:
    moved = np.moveaxis(values, dimension, -1)
    some_unknown = bool(np.isnan(moved).any())
    found = [
        part.start + worst_place(moved[..., part], sense, some_unknown=some_unknown)
        for part in parts
    ]
    return np.moveaxis(np.stack(found, axis=-1), -1, dimension)


def spell_reach(axis: Axis, name: str, asked: float | str) -> str:
    """How far an axis is shaken as it was asked: a bare number with its unit."""
    text = str(asked).strip()
    return text if text.endswith("%") else spell_value(axis, name, asked)


def _not_a_reach(name: str, asked: object, problem: str) -> QuestionError:
    return QuestionError(
        f"shaking {name} by {asked}: {problem}",
        where=[name],
        remedy=f"write --shake {name}=10%, or a distance with a unit",
    )
