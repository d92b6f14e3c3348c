"""What one design has in hand: how far its tolerance box may grow, and which tolerances it accepts.

Everything here looks at one design on the grid of its tolerance axes: every tolerance axis at every
one of its nodes, with the verdict on each combination. Nothing is said of what lies between nodes.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Axis
from sweep.query.answers.plain import plain
from sweep.query.blocks import Indices
from sweep.query.gaps import Gaps, box_without_gaps
from sweep.query.largest_box import Box
from sweep.query.select import Value, value_at
from sweep.query.verdicts import EXCLUDED, FAILS, MEETS, UNKNOWN, Codes, decide

FloatArray = NDArray[np.float64]
Mask = NDArray[np.bool_]
Node = tuple[int, ...]
"""Index along every tolerance axis."""

GrowthEnd = Literal["fails", "unknown", "axis_end", "floor"]
"""What a box that grows meets with first."""


@dataclass(frozen=True)
class InHand:
    """How far a box of tolerances may grow about its nominal; a factor of 1 is the box itself."""

    factor: float
    """The smallest factor at which a node that fails lies in the box: 0 when it fails at the
    nominal already, ``inf`` when no failing node is in the way of the box."""
    holds_to: float
    """The largest factor up to which every node that the box takes in is known to meet; at least 1
    exactly when the box itself meets, and 0 when the nominal, or a node next to it, does not meet.
    ``inf`` when nothing stops the box."""
    end: GrowthEnd
    """What there is just past ``holds_to``: a node that ``fails``, an ``unknown`` one, or the end
    of an axis. ``floor`` when nothing stops the box: each side that grew rests at its floor."""
    at: Mapping[str, Value] | None
    """The node that fails at ``factor``, by axis; ``None`` when there is none."""
    axis: str | None
    """The axis whose bound reaches it; ``None`` when there is none, or it is the nominal."""
    growing: tuple[str, ...]
    """Axes along which the box grows."""
    stopped_by: str | None
    """The axis whose bound ends the box at ``holds_to``; ``None`` when it is the nominal itself."""
    stopped_at: Mapping[str, Value] | None
    """The failing or unknown node that is then taken in; ``None`` at an axis end or a floor."""

    @property
    def percent(self) -> float:
        """What is in hand, in percent of the box; negative when the box itself does not meet."""
        return 100.0 * (self.holds_to - 1.0)

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        document: dict[str, Any] = plain(vars(self) | {"percent": self.percent})
        return document


@dataclass(frozen=True)
class Acceptance:
    """Which tolerances one design accepts: the limits for an end-of-line test.

    A unit whose every tolerance lies at a node of the box meets the requirement, with whichever row
    of the case. The box is the largest by nodes, not by what the nodes are apart.
    """

    meets: int
    """Nodes of the plain tolerance axes, at full range, that meet with every row of the box."""
    fails: int
    """Nodes that fail with some row of the box."""
    unknown: int
    """Nodes that fail with none and are unknown with some."""
    largest_box: Mapping[str, tuple[Value, Value]] | None
    """Lowest and highest node by axis, both within; ``None`` when no node meets."""
    nodes: int
    """Nodes in the box."""
    exact: bool
    """Whether it is proven that no box holds more."""
    at_most: int
    """No box of meeting nodes holds more."""
    holds_nominal: bool
    """Whether the nominal node of every axis lies in the box."""
    around_nominal: Mapping[str, tuple[Value, Value]] | None
    """The largest box that holds it, which may be that one; ``None`` when it does not meet."""
    around_nominal_nodes: int
    """Nodes in that box."""
    around_nominal_exact: bool
    """Whether it is proven that no box around the nominal holds more."""
    rows: Mapping[str, tuple[Value, ...]] = field(default_factory=dict)
    """By row axis, the rows that each counted node meets with."""

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        document: dict[str, Any] = plain(vars(self))
        return document


@dataclass(frozen=True)
class _Growth:
    """How one axis of a box grows."""

    lies: FloatArray
    """For each node the smallest factor at which it lies within the bounds; ``inf`` for never."""
    enters: FloatArray
    """For each node the factor past which it is taken in, as a bound lies past its inner neighbour;
    0 for a node that is in at every factor."""
    leaves: float
    """The factor past which a bound lies beyond the axis."""
    grows: bool
    """Whether any side grows."""


def find_in_hand(
    axes: Sequence[Axis],
    box: Sequence[Indices],
    verdict: Codes,
    floors: Sequence[float],
    gaps: Gaps | None = None,
) -> InHand | None:
    """By which factor a box of tolerances may grow about its nominal before it no longer meets.

    Along each plain axis the box from low to high becomes, at a factor s, the range from
    nominal - s (nominal - low) to nominal + s (high - nominal). The nominal is the axis's nominal
    node, or the end of the box nearest to it when that lies outside the box; towards an end of the
    box that is the nominal nothing grows. A bound between nodes takes in the next node outward, so
    that the box is known to meet up to the factor at which a bound reaches the last node before one
    that does not: ``holds_to``. That node itself lies in the box from a larger factor on:
    ``factor`` is the smallest at which a failing node does. The rows in the box count at every
    factor, other rows at none. Growth is of the nodes of the box: where a bound of the case lies
    between nodes, it is of the box that took in the next node.

    Parameters
    ----------
    axes
        Every tolerance axis.
    box
        For each axis the nodes of the box, at least one and increasing; without gaps on plain axes.
    verdict
        One code for each node of all axes, in their order.
    floors
        For each axis the lowest value that its parameter can physically have, in the axis's unit,
        such as 0 for a delay; -inf where there is none. A side that reaches its floor at the first
        node of its axis stays there, and does not leave the axis.
    gaps
        For each axis that has some, the nodes after which there is a gap that no bound may cross:
        what lies beyond counts as unknown, unless it fails. See `sweep.query.gaps`.

    Returns
    -------
    ``None`` when no side grows: there is no plain tolerance axis, or the box is one node along
    each. Of several nodes at the same factor, ``at`` is the first in C order; of several axes that
    reach it together, ``axis`` is the first. What cannot be built counts as failing.

    References
    ----------
    R. R. E. de Gaston, M. G. Safonov, Exact calculation of the multiloop stability margin, IEEE
    Transactions on Automatic Control 33 (1988), 156-171: the scale of a box of parameters, about
    its nominal, at which a loop is lost.

    Examples
    --------
    >>> axis = Axis("gain", ("plant.gain",), np.arange(1.0, 10.0), "tolerance", nominal=4)
    >>> verdict = np.where(axis.coordinates < 9.0, MEETS, FAILS).astype(np.int8)
    >>> found = find_in_hand([axis], [np.array([2, 3, 4, 5, 6])], verdict, [-np.inf])
    >>> found.holds_to, found.factor, found.end, found.at
    (1.5, 2.0, 'fails', {'gain': 9.0})
    """
    growths = [_grow(*one) for one in zip(axes, box, floors, strict=True)]
    if not any(growth.grows for growth in growths):
        return None
    lies = functools.reduce(np.maximum, np.ix_(*(growth.lies for growth in growths)))
    enters = functools.reduce(np.maximum, np.ix_(*(growth.enters for growth in growths)))
    failing = (verdict == FAILS) | (verdict == EXCLUDED)
    first = _first(lies, failing)
    beyond = np.zeros(verdict.shape, np.bool_)
    for position, along in (gaps or {}).items():
        far = _beyond(box[position], len(axes[position]), along)
        beyond |= far.reshape([-1 if i == position else 1 for i in range(len(axes))])
    unknown = (verdict == UNKNOWN) | (beyond & ~failing)
    end, holds_to, stop = _find_stop(lies, enters, failing, unknown)
    leaves = [growth.leaves for growth in growths]
    stopped_by = _reaching(axes, growths, stop, taken_in=True)
    if min(leaves) < holds_to:
        end, holds_to, stop = "axis_end", min(leaves), None
        stopped_by = axes[leaves.index(holds_to)].name
    return InHand(
        factor=math.inf if first is None else float(lies[first]),
        holds_to=holds_to,
        end=end,
        at=_values(axes, first),
        axis=_reaching(axes, growths, first, taken_in=False),
        growing=tuple(axis.name for axis, one in zip(axes, growths, strict=True) if one.grows),
        stopped_by=stopped_by,
        stopped_at=_values(axes, stop),
    )


def find_acceptance(
    axes: Sequence[Axis],
    box: Sequence[Indices],
    verdict: Codes,
    gaps: Gaps | None = None,
) -> Acceptance | None:
    """Which tolerances one design accepts, and the largest box of them.

    These are limits for an end-of-line test: every node in the box meets, so that a unit measured
    within it may be shipped, as far as the nodes tell. Plain axes count at their full range,
    whatever the case asks; row axes at the worst over their rows in the case, all of which have to
    meet.

    Parameters
    ----------
    axes
        Every tolerance axis.
    box
        For each axis the nodes of the case's box; those of plain axes play no part.
    verdict
        One code for each node of all axes, in their order. What cannot be built counts as failing.
    gaps
        For each axis that has some, the nodes after which there is a gap that no box may cross.

    Returns
    -------
    ``None`` when there is no plain tolerance axis.

    Examples
    --------
    >>> axis = Axis("gain", ("plant.gain",), np.arange(1.0, 6.0), "tolerance", nominal=0)
    >>> found = find_acceptance([axis], [np.array([0])], np.array([1, 0, 1, 1, -1], np.int8))
    >>> found.largest_box, found.holds_nominal, found.around_nominal
    ({'gain': (3.0, 4.0)}, False, {'gain': (1.0, 1.0)})
    """
    plain_axes = [axis for axis in axes if not axis.is_row_axis]
    if not plain_axes:
        return None
    codes = _worst_over_rows(axes, box, verdict)
    meets = codes == MEETS
    nominal = tuple(axis.nominal for axis in plain_axes)
    plain = [i for i, axis in enumerate(axes) if not axis.is_row_axis]
    apart = {place: gaps[i] for place, i in enumerate(plain) if gaps and i in gaps}
    largest = box_without_gaps(meets, apart)
    holds = largest is not None and _holds(largest, nominal)
    around = largest if holds else box_without_gaps(meets, apart, around=(nominal, nominal))
    return Acceptance(
        meets=int(np.count_nonzero(meets)),
        fails=int(np.count_nonzero(codes == FAILS)),
        unknown=int(np.count_nonzero(codes == UNKNOWN)),
        largest_box=_bounds(plain_axes, largest),
        nodes=largest.nodes if largest else 0,
        exact=largest is None or largest.exact,
        at_most=largest.at_most if largest else 0,
        holds_nominal=holds,
        around_nominal=_bounds(plain_axes, around),
        around_nominal_nodes=around.nodes if around else 0,
        around_nominal_exact=around is None or around.exact,
        rows={
            axis.name: tuple(value_at(axis, int(node)) for node in nodes)
            for axis, nodes in zip(axes, box, strict=True)
            if axis.is_row_axis
        },
    )


def _beyond(nodes: Indices, size: int, gaps: Indices) -> Mask:
    """Which nodes of an axis lie on the other side of a gap, as seen from a box."""
    places = np.arange(size)
    beyond = np.zeros(size, np.bool_)
    for gap in gaps:
        if nodes[-1] <= gap:
            beyond |= places > gap
        elif nodes[0] > gap:
            beyond |= places <= gap
    return beyond


def _grow(axis: Axis, nodes: Indices, floor: float) -> _Growth:
    if axis.is_row_axis:
        lies = np.full(len(axis), np.inf)
        lies[nodes] = 0.0
        return _Growth(lies, lies, math.inf, grows=False)
    first, last = int(nodes[0]), int(nodes[-1])
    nominal = min(max(axis.nominal, first), last)
    away = np.abs(axis.coordinates - axis.coordinates[nominal])
    below, into_below = _grow_side(away[nominal::-1], nominal - first)
    above, into_above = _grow_side(away[nominal:], last - nominal)
    rests = first == nominal or float(axis.coordinates[0]) <= floor
    return _Growth(
        lies=np.concatenate([below[:0:-1], above]),
        enters=np.concatenate([into_below[:0:-1], into_above]),
        leaves=min(
            math.inf if rests else float(below[-1]),
            math.inf if last == nominal else float(above[-1]),
        ),
        grows=first < last,
    )


def _grow_side(away: FloatArray, steps: int) -> tuple[FloatArray, FloatArray]:
    """From the nominal outward: the factors of `_Growth.lies` and `_Growth.enters`.

    Parameters
    ----------
    away
        Shape (n,): how far each node lies from the nominal, which is the first of them.
    steps
        Nodes from the nominal to the end of the box.
    """
    if steps == 0:
        still = np.full(len(away), np.inf)
        still[0] = 0.0
        return still, still
    lies = away / away[steps]
    return lies, np.concatenate([[0.0], lies[:-1]])


def _find_stop(
    lies: FloatArray, enters: FloatArray, failing: Mask, unknown: Mask
) -> tuple[GrowthEnd, float, Node | None]:
    """What kind of node stops the box, past which factor, and which it is.

    Of nodes taken in together, one that fails decides the verdict; then the one nearest to the
    nominal is named.
    """
    blocks = np.where(failing | unknown, enters, np.inf)
    holds_to = float(blocks.min())
    if math.isinf(holds_to):
        return "floor", holds_to, None
    together = blocks == holds_to
    stop = _first(lies, together & failing)
    return ("fails", holds_to, stop) if stop else ("unknown", holds_to, _first(lies, together))


def _first(factor: FloatArray, among: Mask) -> Node | None:
    """The node with the smallest factor, of several the first in C order; ``None`` if infinite."""
    reached = np.where(among, factor, np.inf)
    place = np.unravel_index(int(reached.argmin()), reached.shape)
    return None if np.isinf(reached[place]) else tuple(int(node) for node in place)


def _reaching(
    axes: Sequence[Axis], growths: Sequence[_Growth], node: Node | None, *, taken_in: bool
) -> str | None:
    """The axis whose bound is the last to reach a node, or with ``taken_in`` to take it in."""
    if node is None:
        return None
    ranks = [
        (float(one.enters[i]) if taken_in else 0.0, float(one.lies[i]))
        for one, i in zip(growths, node, strict=True)
    ]
    last = max(ranks)
    return axes[ranks.index(last)].name if last[1] > 0.0 else None


def _worst_over_rows(axes: Sequence[Axis], box: Sequence[Indices], verdict: Codes) -> Codes:
    """Shape of the plain axes: the verdict at the worst of the rows in the box."""
    for position, axis in enumerate(axes):
        if axis.is_row_axis:
            verdict = verdict.take(box[position], axis=position)
    tables = tuple(position for position, axis in enumerate(axes) if axis.is_row_axis)
    failing = (verdict == FAILS) | (verdict == EXCLUDED)
    return decide(failing.any(axis=tables), (verdict == UNKNOWN).any(axis=tables))


def _holds(box: Box, node: Node) -> bool:
    return all(low <= at <= high for low, at, high in zip(box.low, node, box.high, strict=True))


def _bounds(axes: Sequence[Axis], box: Box | None) -> dict[str, tuple[Value, Value]] | None:
    if box is None:
        return None
    ends = zip(axes, box.low, box.high, strict=True)
    return {axis.name: (value_at(axis, low), value_at(axis, high)) for axis, low, high in ends}


def _values(axes: Sequence[Axis], node: Node | None) -> dict[str, Value] | None:
    if node is None:
        return None
    return {axis.name: value_at(axis, at) for axis, at in zip(axes, node, strict=True)}
