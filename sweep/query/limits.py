"""The stability boundary along one axis.

First the largest ``log_radius`` over the tolerance box at each node, then interpolation between
nodes along the asked axis. Every end names its two nodes; next to an unknown node an interval ends
at its last stable node. Nothing is interpolated across a node where a gain of exactly 0 changes the
loop's structure:

- a stable node of that sort that ends an interval is the limit, since the term's memory (the
  accumulator's eigenvalue at 1, the filter's eigenvalue) is there as soon as the gain is not 0;
- one that is not stable closes the interpolation from its own side only: the memory's eigenvalue is
  not larger than the one that is already outside, so its log_radius is the limit from either side.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.errors import QuestionError
from sweep.grid import Axis, Grid
from sweep.query.answers import CrossingKind, End, EndKind, Interval, LimitsAnswer, LimitsRow
from sweep.query.cautions import BETWEEN_NODES, OVER_A_BOX
from sweep.query.crossing import REACH, find_crossing, is_real
from sweep.query.reduce import Indices, Readable, WorstLines, read_nodes, worst_over_box
from sweep.query.select import (
    Asked,
    Span,
    Value,
    find_axis,
    find_enclosing,
    find_span,
    gain_changes_structure,
    one_value,
    read_value,
    resolve_names,
    value_at,
)
from sweep.vocabulary import STABILITY_THRESHOLD

FloatArray = NDArray[np.float64]

MOST_ROWS = 200
"""Rows that an answer lists unless it is asked for more."""

NODES_AT_ONCE = 2_000_000
"""Nodes of the lines reduced together: bounds memory at about 50 MB."""


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


def resolve_limits(
    grid: Grid,
    along: str,
    at: Mapping[str, Asked],
    over: Mapping[str, Asked],
    each: Sequence[str],
    nominal: bool,
) -> LimitsQuestion:
    """Turn names and texts into nodes, or say what cannot be asked.

    Raises
    ------
    QuestionError
        For an unknown axis, one named for two purposes, a value outside its axis, rows that mean
        nothing as neighbours, or a design axis in the tolerance box.
    """
    axis = find_axis(grid, along)
    _check_can_be_walked(axis)
    fixed, ranges = resolve_names(grid, at), resolve_names(grid, over)
    listed = tuple(find_axis(grid, name).name for name in each)
    _check_one_purpose(axis.name, fixed, ranges, listed)
    spans: list[Indices] = []
    box: list[int] = []
    between: dict[str, float] = {}
    at_nominal: list[str] = []
    widened: list[str] = []
    for position, other in enumerate(grid.axes):
        everything = tuple(range(len(other)))
        span = Span(everything)
        if other.name in fixed:
            name, asked = fixed[other.name]
            span = _fixed_span(grid, other, one_value(other.name, asked), name)
            if span.widened:
                between[other.name] = read_value(other, one_value(other.name, asked), name)
                box.append(position)
        elif other.name in ranges:
            span = _box_span(other, *ranges[other.name])
            box.append(position)
            widened += [other.name] * span.widened
        elif other.name == axis.name or other.name in listed:
            pass
        elif nominal:
            span = Span((other.nominal,))
            at_nominal.append(other.name)
        elif other.role == "tolerance":
            box.append(position)
        spans.append(np.array(span.nodes, dtype=np.intp))
    return LimitsQuestion(
        grid,
        grid.names.index(axis.name),
        tuple(spans),
        tuple(box),
        between,
        tuple(at_nominal),
        tuple(widened),
    )


def find_limits(
    stored: Readable, atlas_id: str, question: LimitsQuestion, most_rows: int = MOST_ROWS
) -> LimitsAnswer:
    """Answer a question about limits.

    Parameters
    ----------
    stored
        The atlas.
    atlas_id
        Its id, for the answer.
    question
        What is asked.
    most_rows
        Rows to list; the answer says how many there are in all.
    """
    grid = question.grid
    sizes = [len(question.spans[axis]) for axis in question.rest]
    per_batch = max(1, NODES_AT_ONCE // len(question.spans[question.along]))
    rows: list[LimitsRow] = []
    for cut in _batches(sizes, min(per_batch, most_rows)):
        if len(rows) >= most_rows:
            break
        rows += _rows(stored, question, cut)
    listed = tuple(grid.axes[axis].name for axis in question.rest if len(question.spans[axis]) > 1)
    tolerances = [axis for axis in question.box if grid.axes[axis].name not in question.fixed_between]
    return LimitsAnswer(
        atlas_id=atlas_id,
        along=grid.axes[question.along].name,
        grid=grid,
        rows=tuple(rows[:most_rows]),
        rows_in_all=math.prod(sizes),
        listed=listed,
        over={grid.axes[axis].name: _box_ends(question, axis) for axis in tolerances},
        widened=question.widened,
        bracketed={
            name: _pair(grid.axis(name), question.spans[grid.names.index(name)])
            for name in question.fixed_between
        },
        nominal=question.nominal,
        cautions=OVER_A_BOX if tolerances else BETWEEN_NODES,
    )


def _check_can_be_walked(axis: Axis) -> None:
    if axis.is_row_axis and not axis.ordered:
        raise QuestionError(
            f"finding limits along {axis.name}: its rows have no order, so there is nothing "
            "between two neighbours",
            where=[axis.name],
            remedy=f"list its rows with --each {axis.name}, or say `ordered = true` in the config "
            "where neighbours mean something",
        )


def _check_one_purpose(
    along: str, fixed: Mapping[str, object], ranges: Mapping[str, object], listed: Sequence[str]
) -> None:
    purposes = [("--along", (along,)), ("--at", fixed), ("--over", ranges), ("--each", listed)]
    seen: dict[str, str] = {}
    for option, names in purposes:
        for name in names:
            if name in seen:
                raise QuestionError(
                    f"asking about {name}: it is named by {seen[name]} and by {option}",
                    where=[name],
                    remedy="name it for one purpose",
                )
            seen[name] = option


def _fixed_span(grid: Grid, axis: Axis, asked: float | str, name: str) -> Span:
    span = find_enclosing(axis, asked, name=name)
    breaks = set(gain_changes_structure(grid, axis)) if span.widened else set()
    if breaks.intersection(span.nodes):
        raise QuestionError(
            f"fixing {axis.name} = {asked}: it lies between nodes, and at the one where "
            f"{axis.name} is 0 the term is absent, which says nothing about its neighbours",
            where=[axis.name],
            remedy=f"ask at a node, or sweep {axis.name} more finely",
        )
    return span


def _box_span(axis: Axis, name: str, asked: Asked) -> Span:
    if axis.role != "tolerance":
        raise QuestionError(
            f"taking the worst over {axis.name}: it is a design axis, which the engineer chooses",
            where=[axis.name],
            remedy=f"fix it with --at {axis.name}=VALUE or list it with --each {axis.name}",
        )
    return find_span(axis, asked, name=name)


def _box_ends(question: LimitsQuestion, position: int) -> tuple[Value, ...]:
    axis, nodes = question.grid.axes[position], question.spans[position]
    if axis.is_row_axis:
        return tuple(value_at(axis, int(node)) for node in nodes)
    return _pair(axis, nodes)


def _pair(axis: Axis, nodes: Indices) -> tuple[Value, Value]:
    return value_at(axis, int(nodes[0])), value_at(axis, int(nodes[-1]))


def _batches(sizes: Sequence[int], most: int) -> Iterator[tuple[slice, ...]]:
    """Cut a box of rows, in C order, into boxes of at most ``most`` rows."""
    if math.prod(sizes) <= most:
        yield tuple(slice(0, size) for size in sizes)
        return
    outer = next(axis for axis, size in enumerate(sizes) if size > 1)
    inner = math.prod(sizes[outer + 1 :])
    step = max(1, most // inner)
    for start in range(0, sizes[outer], step):
        stop = min(start + step, sizes[outer])
        for cut in _batches([*sizes[:outer], stop - start, *sizes[outer + 1 :]], most):
            shifted = slice(cut[outer].start + start, cut[outer].stop + start)
            yield (*cut[:outer], shifted, *cut[outer + 1 :])


def _rows(
    stored: Readable, question: LimitsQuestion, cut: tuple[slice, ...]
) -> list[LimitsRow]:
    spans = list(question.spans)
    for axis, part in zip(question.rest, cut, strict=True):
        spans[axis] = spans[axis][part]
    lines = worst_over_box(stored, "log_radius", spans, question.along, question.box)
    shape = [len(spans[axis]) for axis in question.rest]
    places = [np.unravel_index(row, shape) for row in range(len(lines.worst))]
    picked = [
        {axis: int(spans[axis][i]) for axis, i in zip(question.rest, place, strict=True)}
        for place in places
    ]
    return _lines_to_rows(stored, question, lines, picked)


def _lines_to_rows(
    stored: Readable, question: LimitsQuestion, lines: WorstLines, picked: list[dict[int, int]]
) -> list[LimitsRow]:
    grid = question.grid
    axis = grid.axes[question.along]
    breaks = frozenset(gain_changes_structure(grid, axis))
    walks = [
        _Walk(question, axis, breaks, lines.worst[row], lines.which[row], place)
        for row, place in enumerate(picked)
    ]
    nodes = [node for walk in walks for node in walk.nodes_to_read()]
    angles: dict[tuple[int, ...], float] = {}
    if nodes:
        unique = np.unique(np.array(nodes, dtype=np.intp), axis=0)
        values = read_nodes(stored, "mode_angle", unique)
        angles = dict(zip(map(tuple, unique.tolist()), values.tolist(), strict=True))
    box_nodes = math.prod(len(question.spans[axis]) for axis in question.box)
    return [
        LimitsRow(
            at=walk.at(),
            intervals=walk.intervals(angles),
            nodes=box_nodes * len(axis),
            unknown=int(lines.unknown[row].sum()),
        )
        for row, walk in enumerate(walks)
    ]


@dataclass(frozen=True)
class _Walk:
    """One line of nodes along the asked axis, after the worst case."""

    question: LimitsQuestion
    axis: Axis
    breaks: frozenset[int]
    worst: FloatArray
    which: NDArray[np.int64]
    place: Mapping[int, int]

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
        """Stretches of stable nodes as (first, last)."""
        stable = np.concatenate([[False], self.worst < STABILITY_THRESHOLD, [False]])
        edges = np.flatnonzero(stable[1:] != stable[:-1])
        return [(int(a), int(b) - 1) for a, b in zip(edges[::2], edges[1::2], strict=True)]

    def crossings(self) -> list[tuple[int, int]]:
        """Every boundary as (stable node, other node)."""
        pairs = [pair for a, b in self.runs() for pair in ((a, a - 1), (b, b + 1))]
        return [(s, o) for s, o in pairs if self._end_kind(o) == "boundary"]

    def nodes_to_read(self) -> list[tuple[int, ...]]:
        """Nodes whose mode angle the crossings need."""
        wanted: set[int] = set()
        for stable, other in self.crossings():
            first, last = self._window(min(stable, other))
            wanted.update(range(first, last + 1))
            wanted.update((stable, other))
        return [self._grid_node(index) for index in sorted(wanted)]

    def intervals(self, angles: Mapping[tuple[int, ...], float]) -> tuple[Interval, ...]:
        """The stable stretches with both of their ends."""
        return tuple(
            Interval(self._end(a, a - 1, angles), self._end(b, b + 1, angles))
            for a, b in self.runs()
        )

    def _end_kind(self, other: int) -> EndKind:
        if not 0 <= other < len(self.worst):
            return "axis_end"
        return "unknown" if math.isnan(self.worst[other]) else "boundary"

    def _end(self, stable: int, other: int, angles: Mapping[tuple[int, ...], float]) -> End:
        kind = self._end_kind(other)
        here = value_at(self.axis, stable)
        if kind == "axis_end":
            return End(here, kind)
        between = (here, value_at(self.axis, other))
        if kind == "unknown":
            return End(here, kind, between)
        at = self._crossing(stable, other, angles)
        x = self.axis.coordinates
        share = abs(at - float(x[stable])) / abs(float(x[other]) - float(x[stable]))
        lost, hz = self._mode(stable, other, share, angles)
        worst = self._worst_tolerance(other)
        if self.axis.is_row_axis:
            return End(here, kind, between, lost, hz, worst, share)
        return End(at, kind, between, lost, hz, worst)

    def _crossing(
        self, stable: int, other: int, angles: Mapping[tuple[int, ...], float]
    ) -> float:
        if stable in self.breaks:
            return float(self.axis.coordinates[stable])
        cell = min(stable, other)
        first, last = self._window(cell)
        part = slice(first, last + 1)
        angle = np.array([angles[self._grid_node(index)] for index in range(first, last + 1)])
        x, f = self.axis.coordinates[part], self.worst[part]
        return find_crossing(x, f, angle, cell - first, STABILITY_THRESHOLD)

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
        self, stable: int, other: int, share: float, angles: Mapping[tuple[int, ...], float]
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
        return next(
            item.value for item in self.question.grid.fixed if item.path == "sample_period"
        )


SAME_MODE = 0.5
"""The frequency is interpolated between two nodes when their angles differ by less than this share;
else it is that of the node that is not stable."""
