"""The stability boundary along one axis.

First the largest ``log_radius`` over the tolerance box at each node, then interpolation between
nodes along the asked axis. Every end names its two nodes; next to an unknown node, and next to one
that cannot be built, an interval ends at its last stable node. Nothing is interpolated across a
node where a gain of exactly 0 changes the loop's structure:

- a stable node of that sort that ends an interval is the limit, since the term's memory (the
  accumulator's eigenvalue at 1, the filter's eigenvalue) is there as soon as the gain is not 0;
- one that is not stable closes the interpolation from its own side only: the memory's eigenvalue is
  not larger than the one that is already outside, so its log_radius is the limit from either side.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from sweep.errors import QuestionError
from sweep.grid import Axis, Grid
from sweep.query.answers import LimitsAnswer, LimitsRow
from sweep.query.blocks import Indices, Readable, read_nodes
from sweep.query.cautions import BETWEEN_NODES, OVER_A_BOX
from sweep.query.extremes import Extreme, find_extremes
from sweep.query.scope import (
    Scope,
    box_ends,
    box_span,
    check_one_purpose,
    checked_span,
    fixed_span,
)
from sweep.query.select import (
    Asked,
    Span,
    Value,
    find_axis,
    gain_changes_structure,
    one_value,
    read_value,
    resolve_names,
    value_at,
)
from sweep.query.stability.walk import LimitsQuestion, Walk
from sweep.query.worst import find_excluded
from sweep.vocabulary import LoopStructure

Number = TypeVar("Number", np.float64, np.int32, np.bool_)

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
    check_one_purpose(
        [("--along", (axis.name,)), ("--at", fixed), ("--over", ranges), ("--each", listed)]
    )
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
            span = fixed_span(grid, other, name, asked)
            if span.widened:
                between[other.name] = read_value(other, one_value(other.name, asked), name)
                box.append(position)
        elif other.name in ranges:
            span = box_span(grid, other, *ranges[other.name])
            box.append(position)
            widened += [other.name] * span.widened
        elif other.name == axis.name or other.name in listed:
            pass
        elif nominal:
            span = Span((other.nominal,))
            at_nominal.append(other.name)
        elif other.role == "tolerance":
            span = checked_span(grid, other, span)
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
    stored: Readable,
    atlas_id: str,
    question: LimitsQuestion,
    most_rows: int = MOST_ROWS,
    structure: LoopStructure | None = None,
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
    structure
        Of the loop, which tells where it cannot be built; `None` when that is to play no part.
    """
    grid = question.grid
    sizes = [len(question.spans[axis]) for axis in question.rest]
    per_batch = max(1, NODES_AT_ONCE // len(question.spans[question.along]))
    rows: list[LimitsRow] = []
    for cut in _batches(sizes, min(per_batch, most_rows)):
        if len(rows) >= most_rows:
            break
        rows += _rows(stored, question, cut, structure)
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
        over={
            grid.axes[axis].name: box_ends(grid.axes[axis], question.spans[axis])
            for axis in tolerances
        },
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
    stored: Readable,
    question: LimitsQuestion,
    cut: tuple[slice, ...],
    structure: LoopStructure | None,
) -> list[LimitsRow]:
    spans = list(question.spans)
    for axis, part in zip(question.rest, cut, strict=True):
        spans[axis] = spans[axis][part]
    lines = _worst_lines(stored, question, spans, structure)
    shape = [len(spans[axis]) for axis in question.rest]
    places = [np.unravel_index(row, shape) for row in range(len(lines.worst))]
    picked = [
        {axis: int(spans[axis][i]) for axis, i in zip(question.rest, place, strict=True)}
        for place in places
    ]
    return _lines_to_rows(stored, question, lines, picked)


@dataclass(frozen=True)
class _WorstLines:
    """The worst case over the box along every line; shape (rows, n)."""

    worst: NDArray[np.float64]
    """Largest log_radius; NaN where a node of the box is unknown."""
    which: NDArray[np.int32]
    """Flat index into the box of the node where it is reached."""
    unknown: NDArray[np.int32]
    """Unknown nodes in the box."""
    excluded: NDArray[np.bool_]
    """Whether any node of the box cannot be built."""


def _worst_lines(
    stored: Readable,
    question: LimitsQuestion,
    spans: Sequence[Indices],
    structure: LoopStructure | None,
) -> _WorstLines:
    scope = Scope(question.grid, tuple(spans), question.box, {})
    largest = Extreme("log_radius", "max")
    (found,) = find_extremes(stored, scope, [largest])
    along = scope.free.index(question.along)
    worst = found.worst[largest].astype(np.float64)
    worst[found.unknown > 0] = np.nan
    excluded = np.zeros(worst.shape, np.bool_)
    if structure is not None:
        excluded[...] = find_excluded(structure, scope)
    return _WorstLines(
        worst=_as_lines(worst, along),
        which=_as_lines(found.which[largest], along),
        unknown=_as_lines(found.unknown, along),
        excluded=_as_lines(excluded, along),
    )


def _as_lines(values: NDArray[Number], along: int) -> NDArray[Number]:
    """An array over the designs as (rows, nodes along one of its axes)."""
    return np.moveaxis(values, along, -1).reshape(-1, values.shape[along])


def _lines_to_rows(
    stored: Readable, question: LimitsQuestion, lines: _WorstLines, picked: list[dict[int, int]]
) -> list[LimitsRow]:
    grid = question.grid
    axis = grid.axes[question.along]
    breaks = frozenset(gain_changes_structure(grid, axis))
    walks = [
        Walk(question, axis, breaks, lines.worst[row], lines.which[row], lines.excluded[row], place)
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
            excluded=int(lines.excluded[row].sum()),
            largest_jump=walk.largest_jump(),
        )
        for row, walk in enumerate(walks)
    ]
