"""How far a design is from instability, axis by axis, and which tolerance brings it nearest.

Along a design axis the others stay at the design and the box counts at its worst. Along a tolerance
axis the distance counts from the end of the box outward, with the other tolerances at their worst
over the box. A distance ends where `sweep.query.stability.limits` ends a stretch: at the boundary,
and before what is unknown or cannot be built.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from sweep.grid import Axis
from sweep.query.answers import End
from sweep.query.answers.judge import Distance, Hurt
from sweep.query.blocks import Indices, Readable, read_nodes
from sweep.query.extremes import find_extremes
from sweep.query.judging.held_block import hold
from sweep.query.scope import Scope
from sweep.query.select import Value, gain_changes_structure, value_at
from sweep.query.stability.walk import LimitsQuestion, Walk
from sweep.query.worst import LOG_RADIUS, find_excluded
from sweep.vocabulary import LoopStructure

GAINS = ("controller.kp", "controller.ki", "controller.kd", "plant.gain")
"""Parameters whose ratios are also given in dB."""


@dataclass(frozen=True)
class Line:
    """All nodes along one axis through a design, the box at its worst at each."""

    walk: Walk
    """The line with its stable stretches."""
    first: int
    """Lowest node of the design, or of the box, on the axis."""
    last: int
    """Highest one."""
    source: Readable
    """From where single nodes of it are read: few are needed."""

    @property
    def axis(self) -> Axis:
        """Along which it runs."""
        return self.walk.axis


def walk_lines(
    stored: Readable, block: Readable | None, structure: LoopStructure, scope: Scope
) -> list[Line]:
    """The lines through a design: design axes first, then tolerances; none along unordered rows.

    Parameters
    ----------
    stored
        The atlas.
    block
        The same, holding the design at every node of the tolerances; `None` when these are too many
        to be held.
    structure
        Of its loop.
    scope
        One design and its box.
    """
    tolerances = scope.tolerances
    order = [i for i in range(len(scope.spans)) if i not in tolerances] + list(tolerances)
    found = []
    for along in order:
        axis = scope.grid.axes[along]
        if not axis.is_row_axis or axis.ordered:
            found.append(
                _line(stored, block if along in tolerances else None, structure, scope, along)
            )
    return found


def _line(
    stored: Readable, block: Readable | None, structure: LoopStructure, scope: Scope, along: int
) -> Line:
    axis = scope.grid.axes[along]
    nodes = scope.spans[along]
    spans = list(scope.spans)
    spans[along] = np.arange(len(axis), dtype=np.intp)
    box = tuple(i for i in scope.box if i != along)
    source = hold(stored, spans) if block is None else block
    line = Scope(scope.grid, tuple(spans), box, {})
    (found,) = find_extremes(source, line, [LOG_RADIUS])
    worst = found.worst[LOG_RADIUS].astype(np.float64).reshape(-1)
    worst[found.unknown.reshape(-1) > 0] = np.nan
    question = LimitsQuestion(scope.grid, along, tuple(spans), box, {}, (), ())
    place = {i: int(spans[i][0]) for i in range(len(spans)) if i != along and i not in box}
    breaks = frozenset(gain_changes_structure(scope.grid, axis))
    which = found.which[LOG_RADIUS].reshape(-1)
    excluded = np.broadcast_to(find_excluded(structure, line), line.design_shape).reshape(-1)
    walk = Walk(question, axis, breaks, worst, which, excluded, place)
    return Line(walk, int(nodes[0]), int(nodes[-1]), block or stored)


def find_distances(lines: list[Line], scope: Scope) -> tuple[Distance, ...]:
    """Distances along every line, down before up.

    Only for a design that is known to be stable at every node of its box, and that can be built.
    """
    return tuple(distance for line in lines for distance in _both_ways(line, scope))


def _both_ways(line: Line, scope: Scope) -> Iterator[Distance]:
    walk = line.walk
    nodes = walk.nodes_to_read()
    angles: dict[tuple[int, ...], float] = {}
    if nodes:
        values = read_nodes(line.source, "mode_angle", np.array(nodes, dtype=np.intp))
        angles = dict(zip(nodes, values.tolist(), strict=True))
    stretches = list(zip(walk.runs(), walk.intervals(angles), strict=True))
    (low,) = (interval.low for (a, b), interval in stretches if a <= line.first <= b)
    (high,) = (interval.high for (a, b), interval in stretches if a <= line.last <= b)
    yield _distance(line, scope, "down", low)
    yield _distance(line, scope, "up", high)


def _distance(line: Line, scope: Scope, direction: Literal["down", "up"], end: End) -> Distance:
    axis = line.axis
    node = line.first if direction == "down" else line.last
    start = scope.at[axis.name] if axis.role == "design" else value_at(axis, node)
    by, percent, db = _measure(axis, start, end.value)
    return Distance(
        axis=axis.name,
        role=axis.role,
        direction=direction,
        start=start,
        to=end.value,
        end=end.end,
        by=by,
        percent=percent,
        db=db,
        kind=end.kind,
        hz=end.hz,
        between=end.between,
        worst=dict(end.worst),
    )


def _measure(
    axis: Axis, start: Value, to: Value
) -> tuple[float | None, float | None, float | None]:
    """Distance in the unit of the axis, in percent, and in dB."""
    if isinstance(start, str) or isinstance(to, str):
        return None, None, None
    by = abs(to - start)
    percent = 100 * by / abs(start) if start != 0 else None
    is_gain = axis.sets[0] in GAINS and start * to > 0
    return by, percent, 20 * math.log10(to / start) if is_gain else None


def largest_step(lines: list[Line], distances: tuple[Distance, ...]) -> float | None:
    """The largest difference of log_radius between the two nodes of a boundary; `None` for none."""
    steps = []
    twice = [line for line in lines for _ in ("down", "up")]
    for line, distance in zip(twice, distances, strict=True):
        if distance.end == "boundary" and distance.between is not None:
            worst = line.walk.worst
            stable, other = (_node_at(line.axis, value) for value in distance.between)
            steps.append(abs(float(worst[other] - worst[stable])))
    return max(steps, default=None)


def _node_at(axis: Axis, value: Value) -> int:
    if axis.labels is not None:
        return axis.labels.index(str(value))
    return int(np.searchsorted(axis.coordinates, value))


def find_hurts(block: Readable, scope: Scope) -> tuple[Hurt, ...]:
    """What each tolerance does alone, the worst first; ties in the order of the axes.

    Only tolerances with more than one node in the box. The others stand at their nominal node, or
    at the node of the box nearest to it.
    """
    middle = {i: nominal_node(scope.grid.axes[i], scope.spans[i]) for i in scope.tolerances}
    nominal, _, _ = _worst_along(block, scope, middle, -1)
    found = []
    for along in scope.tolerances:
        axis = scope.grid.axes[along]
        if len(scope.spans[along]) > 1:
            alone, node, unknown = _worst_along(block, scope, middle, along)
            found.append(Hurt(axis.name, alone, value_at(axis, node), nominal, unknown))
    return tuple(sorted(found, key=lambda hurt: (math.isnan(hurt.alone), -hurt.alone)))


def nominal_node(axis: Axis, nodes: Indices) -> int:
    """The nominal node, or that of ``nodes`` which lies nearest to it; the lower of two."""
    return int(nodes[np.abs(nodes - axis.nominal).argmin()])


def _worst_along(
    block: Readable, scope: Scope, middle: Mapping[int, int], along: int
) -> tuple[float, int, int]:
    """Largest log_radius with every tolerance but one in the middle, where on it, unknown nodes."""
    spans = list(scope.spans)
    for axis, nominal in middle.items():
        if axis != along:
            spans[axis] = np.array([nominal], dtype=np.intp)
    narrowed = replace(scope, spans=tuple(spans))
    (found,) = find_extremes(block, narrowed, [LOG_RADIUS])
    node = narrowed.box_node(int(found.which[LOG_RADIUS].item()))
    unknown = int(found.unknown.item())
    return float(found.worst[LOG_RADIUS].item()), node.get(along, -1), unknown
