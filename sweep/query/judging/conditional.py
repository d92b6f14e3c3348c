"""Conditional stability: whether the loop leaves stability as its gain falls.

An actuator that saturates lets less through, as a smaller gain would. A loop that becomes unstable
at a smaller gain may therefore never come back from a large disturbance (C5 stands all the same:
saturation itself is not in the model).

All controller gains are scaled by one factor that falls from 1 to 0. Where a fixed gain, or a table
of gains, cannot fall, the gain of the plant does instead, if it is a tolerance: from the end of its
box that is nearest to 0. A place is a factor at which one of the scaled axes passes a node; between
places lie stretches. At either the enclosing nodes decide, as they do when a design is judged, and
bracketed and shaken axes bring all of their nodes:

- stable where every one of them is known and stable at the worst of the box;
- left where every one of them is not stable at the worst of the box;
- undecided otherwise, where an axis ends, and where a gain of 0 takes its own memory out of the
  loop, so that its node says nothing about small gains.

The loop is conditionally stable when some place is left. It is not when every stretch down to no
gain at all is stable, which is when a design anywhere on the way would be judged stable too; and
some node has to lie on the way. The node without any gain helps to tell that its last stretch is
stable, but is no place: there is no loop that could be left. Anything else cannot be told.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from sweep.grid import SAME_NODE, Axis
from sweep.query.answers.judge import GainFall
from sweep.query.blocks import Indices, Readable
from sweep.query.extremes import find_extremes
from sweep.query.judging.held_block import hold
from sweep.query.scope import Scope
from sweep.query.select import gain_changes_structure
from sweep.query.worst import LOG_RADIUS
from sweep.vocabulary import STABILITY_THRESHOLD

CONTROLLER_GAINS = ("controller.kp", "controller.ki", "controller.kd")
CANNOT_FALL = GainFall(None, stopped_by="a gain that is fixed, or set by a table")

State = Literal["stable", "left", "mixed", "unknown"]

Nodes = Mapping[int, tuple[int, int]]
"""Lowest and highest enclosing node of each scaled axis, by position."""


@dataclass(frozen=True)
class _Scaled:
    """An axis that falls."""

    axis: Axis
    value: float
    """At factor 1; not 0."""
    low: float
    """Lowest coordinate taken in at factor 1: the value, or less where it is shaken."""
    high: float
    """Highest one."""
    breaks: tuple[int, ...]
    """Nodes where the gain is 0 and its memory is absent."""


_Ray = Mapping[int, _Scaled]
"""What falls, by position."""


@dataclass(frozen=True)
class _Piece:
    """A place or a stretch on the way down."""

    top: float
    """Its factor, or the upper end of the stretch."""
    is_place: bool
    nodes: Nodes
    """Empty where they say nothing."""
    silent: str = ""
    """Why they say nothing."""


def find_gain_fall(stored: Readable, scope: Scope) -> GainFall:
    """Whether a design leaves stability as its gain falls.

    Only for a design that is known to be stable at every node of its box.

    Parameters
    ----------
    stored
        The atlas.
    scope
        The design and its box.
    """
    ray = _controller_ray(scope)
    if ray is None:
        ray = _plant_ray(scope)
        if ray is None:
            return CANNOT_FALL
    names = tuple(one.axis.name for one in ray.values())
    if not ray:
        return GainFall(None, stopped_by="gains that are all 0")
    if any(one.low * one.high <= 0 for one in ray.values()):
        return GainFall(None, names, stopped_by="a range of its gain that holds 0")
    pieces = _cut(ray)
    told = list(zip(pieces, _read(stored, scope, ray, pieces), strict=True))
    return _conclude(names, told, ray)


# --- what falls ---------------------------------------------------------------------------------


def _controller_ray(scope: Scope) -> _Ray | None:
    """Design axes of controller gains that are not 0; `None` if a gain cannot fall."""
    for fixed in scope.grid.fixed:
        if fixed.path in CONTROLLER_GAINS and fixed.value != 0.0:
            return None
    found = {}
    for position, axis in enumerate(scope.grid.axes):
        if not set(axis.sets).intersection(CONTROLLER_GAINS):
            continue
        value = scope.at.get(axis.name)
        if axis.is_row_axis or value is None or isinstance(value, str):
            return None
        if value != 0.0:
            low = high = value
            if axis.name in scope.shaken:
                low, high = _ends(axis, scope.spans[position])
            breaks = gain_changes_structure(scope.grid, axis)
            found[position] = _Scaled(axis, value, low, high, breaks)
    return found


def _plant_ray(scope: Scope) -> _Ray | None:
    """The tolerance of the plant's gain, from the end of its box that is nearest to 0."""
    for position in scope.tolerances:
        axis = scope.grid.axes[position]
        if not axis.is_row_axis and axis.sets == ("plant.gain",):
            low, high = _ends(axis, scope.spans[position])
            value = min(low, high, key=abs)
            if low * high > 0:
                low = high = value
            return {position: _Scaled(axis, value, low, high, ())}
    return None


def _ends(axis: Axis, nodes: Indices) -> tuple[float, float]:
    return float(axis.coordinates[nodes[0]]), float(axis.coordinates[nodes[-1]])


# --- the way down -------------------------------------------------------------------------------


def _cut(ray: _Ray) -> list[_Piece]:
    """Stretches and places in turn, falling; first and last a stretch."""
    factors = _factors(ray)
    pieces = []
    for top, bottom in itertools.pairwise([1.0, *factors, 0.0]):
        if top < 1.0:
            pieces.append(_piece(ray, top, top, is_place=True))
        pieces.append(_piece(ray, top, 0.5 * (top + bottom), is_place=False))
    return pieces


def _factors(ray: _Ray) -> list[float]:
    """Where an end of what is taken in of an axis passes a node, falling; each once."""
    passed = sorted(
        (
            float(x / end)
            for one in ray.values()
            for end in {one.low, one.high}
            for x in one.axis.coordinates
            if x * end > 0 and abs(x) < abs(end) * (1 - SAME_NODE)
        ),
        reverse=True,
    )
    kept: list[float] = []
    for factor in passed:
        if not kept or factor < kept[-1] * (1 - SAME_NODE):
            kept.append(factor)
    return kept


def _piece(ray: _Ray, top: float, factor: float, *, is_place: bool) -> _Piece:
    found = {}
    for position, one in ray.items():
        nodes = _enclosing(one, factor)
        if nodes is None:
            return _Piece(top, is_place, {}, f"the end of the axis {one.axis.name}")
        if any(nodes[0] <= node <= nodes[1] for node in one.breaks):
            silent = (
                f"{one.axis.name} = 0, where its term is absent and says nothing of small gains"
            )
            return _Piece(top, is_place, {}, silent)
        found[position] = nodes
    return _Piece(top, is_place, found)


def _enclosing(one: _Scaled, factor: float) -> tuple[int, int] | None:
    """Lowest and highest node around a scaled gain, which is never 0; `None` past the axis."""
    x = one.axis.coordinates
    ends = np.array([factor * one.low, factor * one.high])
    met = one.axis.snapped(ends)
    low, high = np.where(met == 0.0, ends, met)
    first, last = int(np.searchsorted(x, low, "right")) - 1, int(np.searchsorted(x, high, "left"))
    return (first, last) if first >= 0 and last < len(x) else None


# --- what the nodes say -------------------------------------------------------------------------


def _read(
    stored: Readable, scope: Scope, ray: _Ray, pieces: Sequence[_Piece]
) -> list[State | None]:
    """What every piece is; `None` where nodes say nothing.

    Read in groups that lie in one tile of the scaled axes, so that memory stays bounded.
    """
    # of tolerances the worst counts; of the nodes of a bracket, or of a shaken axis, all have to
    box = tuple(i for i in scope.tolerances if i not in ray)
    found: list[State | None] = []
    for is_silent, group in _by_tile(stored, pieces):
        if is_silent:
            found += [None] * len(group)
            continue
        spans = list(scope.spans)
        for position in ray:
            low = min(piece.nodes[position][0] for piece in group)
            high = max(piece.nodes[position][1] for piece in group)
            spans[position] = np.arange(low, high + 1, dtype=np.intp)
        narrowed = replace(scope, spans=tuple(spans), box=box, bracketed=(), shaken=())
        (extremes,) = find_extremes(hold(stored, spans), narrowed, [LOG_RADIUS])
        fails = extremes.worst[LOG_RADIUS] >= STABILITY_THRESHOLD
        unknown = (extremes.unknown > 0) & ~fails
        for piece in group:
            picked = _pick(narrowed, piece.nodes)
            found.append(_state(fails[picked], unknown[picked]))
    return found


def _by_tile(stored: Readable, pieces: Sequence[_Piece]) -> Iterator[tuple[bool, list[_Piece]]]:
    """Runs of pieces that lie in one tile, and whether they say nothing."""
    sizes = stored.tiling.tile_shape

    def tile(piece: _Piece) -> tuple[int, ...]:
        return tuple(low // sizes[position] for position, (low, _) in piece.nodes.items())

    for key, group in itertools.groupby(pieces, key=tile):
        yield not key, list(group)


def _pick(scope: Scope, nodes: Nodes) -> tuple[slice, ...]:
    """A piece's nodes within what was reduced; all nodes of every other axis."""
    picked = []
    for axis in scope.free:
        low, high = nodes.get(axis, (0, -1))
        first = int(scope.spans[axis][0])
        picked.append(slice(low - first, high + 1 - first) if axis in nodes else slice(None))
    return tuple(picked)


def _state(fails: NDArray[np.bool_], unknown: NDArray[np.bool_]) -> State:
    if fails.all():
        return "left"
    if fails.any():
        return "mixed"
    return "unknown" if unknown.any() else "stable"


# --- what follows from it -----------------------------------------------------------------------


def _conclude(
    names: tuple[str, ...], told: Sequence[tuple[_Piece, State | None]], ray: _Ray
) -> GainFall:
    """The answer from pieces, the highest first."""
    states = [state for _, state in told]
    undecided = next((i for i, state in enumerate(states) if state != "stable"), None)
    left = next((i for i, (p, s) in enumerate(told) if p.is_place and s == "left"), None)
    if left is None:
        if len(told) == 1:
            return GainFall(None, names, stopped_by="no node between its gain and none at all")
        if undecided is None:
            return GainFall(False, names, None, {}, 0.0)
        return GainFall(None, names, None, {}, *_stop(told, undecided))
    factor = told[left][0].top
    at = {one.axis.name: factor * one.value for one in ray.values()}
    followed_to, stopped_by = _stop(told, left if undecided is None else undecided)
    # in the stretch that ends at a place that is left stability is lost: that one is mixed anyway
    is_first = undecided is None or undecided >= left - 1
    return GainFall(True, names, factor, at, followed_to, "" if is_first else stopped_by)


def _stop(told: Sequence[tuple[_Piece, State | None]], undecided: int) -> tuple[float, str]:
    """Down to which factor every piece is stable, and what is in the way of the next one."""
    piece, state = told[undecided]
    followed_to = told[undecided - 1][0].top if piece.is_place else piece.top
    if state is None:
        return followed_to, piece.silent
    if state == "unknown":
        return followed_to, "nodes that are not known"
    if undecided == len(told) - 1:
        return followed_to, "the last cell, beside no gain at all, has a node that is not stable"
    return followed_to, "nodes around it of which only some are stable"
