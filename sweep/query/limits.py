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

import numpy as np

from sweep.errors import QuestionError
from sweep.grid import Axis, Grid
from sweep.query.answers import LimitsAnswer, LimitsRow
from sweep.query.cautions import BETWEEN_NODES, OVER_A_BOX
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
from sweep.query.walk import LimitsQuestion, Walk

MOST_ROWS = 200
"""Rows that an answer lists unless it is asked for more."""

NODES_AT_ONCE = 2_000_000
"""Nodes of the lines reduced together: bounds memory at about 50 MB."""


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
    tolerances = [
        axis for axis in question.box if grid.axes[axis].name not in question.fixed_between
    ]
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


def _rows(stored: Readable, question: LimitsQuestion, cut: tuple[slice, ...]) -> list[LimitsRow]:
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
        Walk(question, axis, breaks, lines.worst[row], lines.which[row], place)
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
