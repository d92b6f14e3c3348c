"""Conditional stability: whether the loop leaves stability as its gain falls.

An actuator that saturates lets less through, as a smaller gain would. A loop that becomes unstable
at a smaller gain may therefore never come back from a large disturbance (C5 stands all the same:
saturation itself is not in the model).

All controller gains are scaled by one factor that falls from 1 to 0. At a factor where one of them
passes a node, the nodes that enclose the others decide: stability is left there only if every one
of them is known and not stable at the worst of the box. Between two such factors nothing new is
asked, since the enclosing nodes there include those at either end. Nodes at which every gain is 0
never count: there is no loop. Where a fixed gain, or a table of gains, cannot fall, the gain of the
plant does instead, if it is a tolerance: from the lower end of its box.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np

from sweep.grid import Axis, Grid
from sweep.query.answers.judge import GainFall
from sweep.query.blocks import Indices, Readable
from sweep.query.distances import Line
from sweep.query.extremes import find_extremes
from sweep.query.held_block import hold
from sweep.query.scope import Scope
from sweep.query.select import SAME_NODE, gain_changes_structure, value_at
from sweep.query.worst import LOG_RADIUS
from sweep.vocabulary import STABILITY_THRESHOLD

CONTROLLER_GAINS = ("controller.kp", "controller.ki", "controller.kd")
CANNOT_FALL = GainFall(None, stopped_by="a gain that is fixed, or set by a table")

Place = tuple[float, dict[int, tuple[int, ...]]]
"""A factor, and the nodes that enclose each scaled axis there, by position."""


@dataclass(frozen=True)
class _Ray:
    """Where the gains fall along."""

    values: Mapping[int, float]
    """Value of each scaled axis at factor 1, by position; none is 0."""
    places: tuple[Place, ...]
    """Factors below 1 that are looked at, falling."""
    stopped_by: str
    """Why not further down."""
    followed_to: float
    """Lowest factor that the nodes tell about."""


def find_gain_fall(stored: Readable, scope: Scope, lines: list[Line]) -> GainFall:
    """Whether a design leaves stability as its gain falls.

    Only for a design that is known to be stable at every node of its box.

    Parameters
    ----------
    stored
        The atlas.
    scope
        The design and its box.
    lines
        Along every axis through the design; see `sweep.query.distances.walk_lines`.
    """
    scaled = _scaled_axes(scope)
    if scaled is None:
        return _by_plant_gain(lines)
    names = tuple(scope.grid.axes[i].name for i in scaled)
    if not scaled:
        return GainFall(None, stopped_by="gains that are all 0")
    ray = _cast(scope.grid, scaled)
    if ray.followed_to >= 1.0:
        return GainFall(None, names, stopped_by=ray.stopped_by)
    verdicts = _read_places(stored, scope, ray)
    for (factor, _), verdict in zip(ray.places, verdicts, strict=True):
        if verdict is False:
            at = {scope.grid.axes[i].name: factor * value for i, value in ray.values.items()}
            return GainFall(True, names, factor, at, ray.followed_to, ray.stopped_by)
    if None in verdicts:
        return GainFall(None, names, stopped_by="nodes that are not known")
    return GainFall(False, names, None, {}, ray.followed_to, ray.stopped_by)


def _scaled_axes(scope: Scope) -> dict[int, float] | None:
    """Design axes of controller gains that are not 0, with their values; `None` if one is stuck."""
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
            found[position] = value
    return found


def _cast(grid: Grid, values: Mapping[int, float]) -> _Ray:
    """The factors at which some scaled axis passes a node, as far down as every axis tells."""
    lowest, stopped_by = 0.0, ""
    factors = set()
    for position, value in values.items():
        axis = grid.axes[position]
        passed = [float(x / value) for x in axis.coordinates if _is_between(float(x), value)]
        factors.update(passed)
        end, reason = _end_of(grid, axis, value)
        if end > lowest:
            lowest, stopped_by = end, reason
    kept = sorted((f for f in factors if f >= lowest * (1 - SAME_NODE)), reverse=True)
    return _Ray(values, tuple((f, _enclosing(grid, values, f)) for f in kept), stopped_by, lowest)


def _end_of(grid: Grid, axis: Axis, value: float) -> tuple[float, str]:
    """Down to which factor one axis tells, and why not further; 0 where it tells all."""
    same_side = [float(x / value) for x in axis.coordinates if x * value > 0]
    if any(axis.coordinates[node] == 0.0 for node in gain_changes_structure(grid, axis)):
        reason = f"{axis.name} = 0, where its term is absent and says nothing about small gains"
        return min(1.0, *same_side), reason
    if len(same_side) == len(axis):
        return min(1.0, *same_side), f"the end of the axis {axis.name}"
    return 0.0, ""


def _is_between(node: float, value: float) -> bool:
    """Whether a gain passes a node as it falls from a value to 0."""
    return node * value > 0 and abs(node) < abs(value) * (1 - SAME_NODE)


def _enclosing(
    grid: Grid, values: Mapping[int, float], factor: float
) -> dict[int, tuple[int, ...]]:
    """Nodes around a scaled gain on each axis."""
    return {
        position: _nodes_around(grid.axes[position], factor * value)
        for position, value in values.items()
    }


def _nodes_around(axis: Axis, value: float) -> tuple[int, ...]:
    x = axis.coordinates
    near = int(np.abs(x - value).argmin())
    if abs(float(x[near]) - value) <= SAME_NODE * float(x[-1] - x[0]):
        return (near,)
    high = int(np.searchsorted(x, value))
    return high - 1, high


def _read_places(stored: Readable, scope: Scope, ray: _Ray) -> list[bool | None]:
    """At each place whether the loop may still be stable; `None` where a node is not known.

    Read in groups that lie in one tile of the scaled axes, so that memory stays bounded.
    """
    found: list[bool | None] = []
    for group in _by_tile(stored, ray):
        spans = list(scope.spans)
        for position in ray.values:
            touched = [node for _, nodes in group for node in nodes[position]]
            spans[position] = np.arange(min(touched), max(touched) + 1, dtype=np.intp)
        # neighbours that nature moves to count at their worst; those of a bracket all have to fail
        box = tuple(
            i for i in scope.box if i in scope.tolerances or scope.grid.axes[i].name in scope.shaken
        )
        box = tuple(i for i in box if i not in ray.values)
        narrowed = replace(scope, spans=tuple(spans), box=box, bracketed=(), shaken=())
        (extremes,) = find_extremes(hold(stored, spans), narrowed, [LOG_RADIUS])
        worst = extremes.worst[LOG_RADIUS]
        unknown = (extremes.unknown > 0) & ~(worst >= STABILITY_THRESHOLD)
        fails = worst >= STABILITY_THRESHOLD
        for _, nodes in group:
            picked = _pick(narrowed, spans, nodes)
            found.append(_still_stable(fails[picked], unknown[picked]))
    return found


def _by_tile(stored: Readable, ray: _Ray) -> Iterator[list[Place]]:
    sizes = stored.tiling.tile_shape

    def tile(place: Place) -> tuple[int, ...]:
        return tuple(nodes[0] // sizes[position] for position, nodes in place[1].items())

    for _, group in itertools.groupby(ray.places, key=tile):
        yield list(group)


def _pick(
    scope: Scope, spans: list[Indices], nodes: Mapping[int, tuple[int, ...]]
) -> tuple[slice, ...]:
    """A place's nodes within what was reduced; all nodes of every other axis."""
    return tuple(
        slice(nodes[i][0] - int(spans[i][0]), nodes[i][-1] + 1 - int(spans[i][0]))
        if i in nodes
        else slice(None)
        for i in scope.free
    )


def _still_stable(fails: np.ndarray, unknown: np.ndarray) -> bool | None:
    if fails.all():
        return False
    return None if (fails | unknown).all() else True


def _by_plant_gain(lines: list[Line]) -> GainFall:
    """The same with the gain of the plant, where it is a tolerance.

    A node counts as soon as it is not stable for the worst of the other tolerances.
    """
    for line in lines:
        axis = line.axis
        if axis.is_row_axis or axis.role != "tolerance" or axis.sets != ("plant.gain",):
            continue
        return _along_plant_gain(line)
    return CANNOT_FALL


def _along_plant_gain(line: Line) -> GainFall:
    axis, worst = line.axis, line.walk.worst
    x = axis.coordinates
    low, high = float(x[line.first]), float(x[line.last])
    if low * high <= 0:
        return GainFall(None, (axis.name,), stopped_by="a box that holds a gain of 0")
    start, step = (line.first, -1) if low > 0 else (line.last, 1)
    value = float(x[start])
    followed, node = 1.0, start + step
    stopped_by = f"the end of the axis {axis.name}"
    while 0 <= node < len(axis):
        if float(x[node]) * value <= 0:
            followed, stopped_by = 0.0, ""
            break
        if np.isnan(worst[node]):
            return GainFall(None, (axis.name,), stopped_by="nodes that are not known")
        followed = float(x[node]) / value
        if worst[node] >= STABILITY_THRESHOLD:
            at = {axis.name: value_at(axis, node)}
            return GainFall(True, (axis.name,), followed, at, followed, "")
        node += step
    return GainFall(False, (axis.name,), None, {}, followed, stopped_by)
