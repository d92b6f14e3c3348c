"""One line of nodes along the asked axis: its stable stretches, their ends, and how they end."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Axis, Grid
from sweep.query.answers import CrossingKind, End, EndKind, Interval
from sweep.query.blocks import Indices
from sweep.query.select import Value, value_at
from sweep.query.stability.crossing import REACH, find_crossing, is_real
from sweep.vocabulary import STABILITY_THRESHOLD

FloatArray = NDArray[np.float64]
Angles = Mapping[tuple[int, ...], float]

SAME_MODE = 0.5
"""The frequency is interpolated between two nodes when their angles differ by less than this share;
else it is that of the node that is not stable."""


@dataclass(frozen=True)
class LimitsQuestion:
    """A question about limits, resolved to nodes of the grid."""

    grid: Grid
    """Of the atlas."""
    along: int
    """Position of the axis asked along."""
    spans: tuple[Indices, ...]
    """For each axis the nodes that take part."""
    box: tuple[int, ...]
    """Positions of the axes taken at their worst."""
    fixed_between: Mapping[str, float]
    """Axes fixed between two nodes, with the value asked."""
    nominal: tuple[str, ...]
    """Axes taken at their nominal node because the question did not name them."""
    widened: tuple[str, ...]
    """Axes of the box with a bound between nodes."""

    @property
    def rest(self) -> tuple[int, ...]:
        """Positions of the axes that tell rows apart or are fixed."""
        taken = (self.along, *self.box)
        return tuple(axis for axis in range(len(self.spans)) if axis not in taken)


@dataclass(frozen=True)
class Walk:
    """One line of nodes along the asked axis, after the worst case."""

    question: LimitsQuestion
    """What is asked."""
    axis: Axis
    """The axis asked along."""
    breaks: frozenset[int]
    """Its nodes where a gain of exactly 0 changes the loop's structure."""
    worst: FloatArray
    """Shape (n,): largest log_radius over the box; NaN where unknown."""
    which: NDArray[np.integer]
    """Shape (n,): flat index into the box of the node where it is reached."""
    excluded: NDArray[np.bool_]
    """Shape (n,): where the loop cannot be built, somewhere in the box. A stretch ends there; the
    log_radius there is known all the same and may shape the curve between two other nodes."""
    place: Mapping[int, int]
    """Node of every axis that is neither asked along nor in the box, by position."""

    def at(self) -> dict[str, Value]:
        """Where the line runs, axis by axis."""
        found: dict[str, Value] = {}
        for position, axis in enumerate(self.question.grid.axes):
            if position in self.place:
                found[axis.name] = value_at(axis, self.place[position])
            elif axis.name in self.question.fixed_between:
                found[axis.name] = self.question.fixed_between[axis.name]
        return found

    def runs(self) -> list[tuple[int, int]]:
        """Stretches of stable nodes that can be built, as (first, last)."""
        holds = (self.worst < STABILITY_THRESHOLD) & ~self.excluded
        stable = np.concatenate([[False], holds, [False]])
        edges = np.flatnonzero(stable[1:] != stable[:-1])
        return [(int(a), int(b) - 1) for a, b in zip(edges[::2], edges[1::2], strict=True)]

    def crossings(self) -> list[tuple[int, int]]:
        """Every boundary as (stable node, other node)."""
        pairs = [pair for a, b in self.runs() for pair in ((a, a - 1), (b, b + 1))]
        return [(s, o) for s, o in pairs if self._end_kind(o) == "boundary"]

    def largest_jump(self) -> float | None:
        """The largest difference of log_radius across a boundary; `None` where there is none."""
        jumps = [abs(float(self.worst[s] - self.worst[o])) for s, o in self.crossings()]
        return max(jumps, default=None)

    def nodes_to_read(self) -> list[tuple[int, ...]]:
        """Nodes whose mode angle the crossings need."""
        wanted: set[int] = set()
        for stable, other in self.crossings():
            first, last = self._window(min(stable, other))
            wanted.update(range(first, last + 1))
            wanted.update((stable, other))
        return [self._grid_node(index) for index in sorted(wanted)]

    def crossing_places(self, angles: Angles) -> list[tuple[int, float]]:
        """Every boundary as (lower node of its cell, coordinate)."""
        return [(min(s, o), self._crossing(s, o, angles)) for s, o in self.crossings()]

    def intervals(self, angles: Angles) -> tuple[Interval, ...]:
        """The stable stretches with both of their ends."""
        return tuple(
            Interval(self._end(a, a - 1, angles), self._end(b, b + 1, angles))
            for a, b in self.runs()
        )

    def _end_kind(self, other: int) -> EndKind:
        if not 0 <= other < len(self.worst):
            return "axis_end"
        if self.excluded[other]:
            return "excluded"
        return "unknown" if math.isnan(self.worst[other]) else "boundary"

    def _end(self, stable: int, other: int, angles: Angles) -> End:
        kind = self._end_kind(other)
        here = value_at(self.axis, stable)
        if kind == "axis_end":
            return End(here, kind)
        between = (here, value_at(self.axis, other))
        if kind != "boundary":
            return End(here, kind, between)
        at = self._crossing(stable, other, angles)
        x = self.axis.coordinates
        share = abs(at - float(x[stable])) / abs(float(x[other]) - float(x[stable]))
        lost, hz = self._mode(stable, other, share, angles)
        worst = self._worst_tolerance(other)
        if self.axis.is_row_axis:
            return End(here, kind, between, lost, hz, worst, share)
        return End(at, kind, between, lost, hz, worst)

    def _crossing(self, stable: int, other: int, angles: Angles) -> float:
        if stable in self.breaks:
            return float(self.axis.coordinates[stable])
        cell = min(stable, other)
        first, last = self._window(cell)
        part = slice(first, last + 1)
        angle = np.array([angles[self._grid_node(index)] for index in range(first, last + 1)])
        x, f, which = self.axis.coordinates[part], self.worst[part], self.which[part]
        return find_crossing(x, f, angle, which, cell - first, STABILITY_THRESHOLD)

    def _window(self, cell: int) -> tuple[int, int]:
        """Nodes around a cell that one formula may join, from the first to the last."""
        first, last = cell, cell + 1
        while cell - first < REACH - 1 and self._joins(first, first - 1):
            first -= 1
        while last - cell - 1 < REACH - 1 and self._joins(last, last + 1):
            last += 1
        return first, last

    def _joins(self, edge: int, further: int) -> bool:
        if edge in self.breaks or not 0 <= further < len(self.worst):
            return False
        if math.isnan(self.worst[further]):
            return False
        return further not in self.breaks or not self.worst[further] < STABILITY_THRESHOLD

    def _mode(
        self, stable: int, other: int, share: float, angles: Angles
    ) -> tuple[CrossingKind | None, float | None]:
        """How stability is lost between two nodes: the eigenvalue that is outside at the other."""
        angle = abs(angles[self._grid_node(other)])
        if math.isnan(angle):
            return None, None
        hz = angle / (2 * math.pi * self._period_s(other))
        if is_real(angle):
            if angle > 1.0:
                return "alternation", 0.5 / self._period_s(other)
            return "drift", 0.0
        before = abs(angles[self._grid_node(stable)])
        if not is_real(before) and abs(before - angle) < SAME_MODE * angle:
            hz_before = before / (2 * math.pi * self._period_s(stable))
            hz = hz_before + share * (hz - hz_before)
        return "oscillation", hz

    def _box_nodes(self, index: int) -> dict[int, int]:
        box = self.question.box
        shape = tuple(len(self.question.spans[axis]) for axis in box)
        if not box:
            return {}
        place = np.unravel_index(int(self.which[index]), shape)
        spans = self.question.spans
        return {axis: int(spans[axis][i]) for axis, i in zip(box, place, strict=True)}

    def _grid_node(self, index: int) -> tuple[int, ...]:
        """The worst node at place ``index`` of the line, as an index along every axis."""
        nodes = {**self.place, **self._box_nodes(index), self.question.along: index}
        return tuple(nodes[axis] for axis in range(len(self.question.spans)))

    def _worst_tolerance(self, index: int) -> dict[str, Value]:
        axes = self.question.grid.axes
        return {
            axes[axis].name: value_at(axes[axis], node)
            for axis, node in self._box_nodes(index).items()
        }

    def _period_s(self, index: int) -> float:
        node = self._grid_node(index)
        for axis, place in zip(self.question.grid.axes, node, strict=True):
            if "sample_period" in axis.sets:
                return float(axis.values_of("sample_period")[place])
        return next(item.value for item in self.question.grid.fixed if item.path == "sample_period")
