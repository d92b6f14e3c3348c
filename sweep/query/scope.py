"""What a question is about: which nodes of every axis take part, and in which part.

An axis is *free* (every one of its nodes that take part is a design of its own), or it belongs to
the *box* that is taken at its worst. A tolerance axis is in the box; so is a design axis that is
fixed between two nodes, where the worse of the two counts.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.config import Case
from sweep.errors import QuestionError
from sweep.grid import Axis, Grid
from sweep.query.blocks import Indices
from sweep.query.select import (
    Asked,
    Span,
    Value,
    find_enclosing,
    find_span,
    gain_changes_structure,
    one_value,
    read_value,
    resolve_names,
    show_node,
    value_at,
)
from sweep.query.spoken import is_rate, spell_asked, spell_node

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Scope:
    """The nodes of a question."""

    grid: Grid
    """Of the atlas."""
    spans: tuple[Indices, ...]
    """For each axis the nodes that take part, increasing."""
    box: tuple[int, ...]
    """Positions of the axes taken at their worst, increasing."""
    at: Mapping[str, Value]
    """Design axes fixed at a value; between two nodes it is the value asked."""
    bracketed: tuple[str, ...] = ()
    """Those of them that lie between two nodes."""
    shaken: tuple[str, ...] = ()
    """Those of them that take in neighbours, as far as they are shaken."""
    widened: tuple[str, ...] = ()
    """Tolerance axes with a bound between nodes, where the next node outward was taken in."""

    @property
    def free(self) -> tuple[int, ...]:
        """Positions of the axes that tell designs apart, those fixed at a node included."""
        return tuple(axis for axis in range(len(self.spans)) if axis not in self.box)

    @property
    def tolerances(self) -> tuple[int, ...]:
        """Positions of the axes of the tolerance box."""
        fixed = (*self.bracketed, *self.shaken)
        return tuple(i for i in self.box if self.grid.axes[i].name not in fixed)

    @property
    def design_shape(self) -> tuple[int, ...]:
        """Nodes along each free axis."""
        return tuple(len(self.spans[axis]) for axis in self.free)

    @property
    def box_shape(self) -> tuple[int, ...]:
        """Nodes along each axis of the box."""
        return tuple(len(self.spans[axis]) for axis in self.box)

    @property
    def nodes(self) -> int:
        """Nodes that an answer rests on."""
        return math.prod(self.design_shape) * math.prod(self.box_shape)

    def over(self) -> dict[str, tuple[Value, ...]]:
        """The tolerance box: lowest and highest node of each axis; labels of rows."""
        return {
            self.grid.axes[i].name: box_ends(self.grid.axes[i], self.spans[i])
            for i in self.tolerances
        }

    def brackets(self) -> dict[str, tuple[Value, Value]]:
        """Design axes fixed at a value that takes in several nodes, with the outermost two."""
        found = {}
        for name in (*self.bracketed, *self.shaken):
            axis, nodes = self.grid.axis(name), self.spans[self.grid.names.index(name)]
            found[name] = value_at(axis, int(nodes[0])), value_at(axis, int(nodes[-1]))
        return found

    def box_node(self, which: int) -> dict[int, int]:
        """Node along each axis of the box, by position, of a flat index into the box."""
        places = np.unravel_index(which, self.box_shape)
        return {i: int(self.spans[i][p]) for i, p in zip(self.box, places, strict=True)}

    def parameter(self, path: str) -> FloatArray:
        """A loop parameter over the question's nodes; `KeyError` when the loop has none.

        One dimension for each axis of the grid, of length 1 along every axis that does not set it.
        """
        values = self.grid.parameters()[path]
        for axis, nodes in enumerate(self.spans):
            if values.shape[axis] > 1:
                values = np.take(values, nodes, axis=axis)
        return values


def resolve_scope(
    grid: Grid,
    at: Mapping[str, Asked],
    over: Mapping[str, Asked],
    within: Mapping[str, Asked],
    case: Case | None = None,
) -> Scope:
    """Turn names and texts into nodes, or say what cannot be asked.

    Parameters
    ----------
    grid
        Of the atlas.
    at
        Axes fixed at a value; between two nodes both are taken.
    over
        Ranges of tolerance axes. An axis that neither this nor ``case`` names counts in full.
    within
        Ranges of design axes; the nodes inside them take part.
    case
        Ranges of tolerance axes, where ``at`` and ``over`` do not name them.

    Raises
    ------
    QuestionError
        For an unknown axis, one named for two purposes, a value outside its axis, a design axis in
        the tolerance box, or a range that holds no node.
    """
    fixed, ranges, limits = (resolve_names(grid, asked) for asked in (at, over, within))
    check_one_purpose([("--at", fixed), ("--over", ranges), ("--within", limits)])
    cased = resolve_names(grid, case.over) if case else {}
    spans: list[Span] = []
    for axis in grid.axes:
        if axis.name in fixed:
            spans.append(fixed_span(grid, axis, *fixed[axis.name]))
        elif axis.name in ranges:
            spans.append(box_span(grid, axis, *ranges[axis.name]))
        elif axis.name in limits:
            spans.append(Span(_nodes_within(axis, *limits[axis.name])))
        elif axis.name in cased:
            spans.append(box_span(grid, axis, *cased[axis.name]))
        else:
            span = Span(tuple(range(len(axis))))
            spans.append(checked_span(grid, axis, span) if axis.role == "tolerance" else span)
    return _scope(grid, spans, fixed)


def fixed_span(grid: Grid, axis: Axis, name: str, asked: Asked) -> Span:
    """The node at a value, or both around it.

    Raises
    ------
    QuestionError
        When it lies between nodes and at one of them a gain of 0 changes the loop's structure.
    """
    value = one_value(name, asked)
    span = find_enclosing(axis, value, name=name)
    breaks = set(gain_changes_structure(grid, axis)) if span.widened else set()
    if breaks.intersection(span.nodes):
        raise QuestionError(
            f"fixing {spell_asked(axis, name, asked)}: it lies between nodes, and at the one where "
            f"{axis.name} is 0 the term is absent, which says nothing about its neighbours",
            where=[axis.name],
            remedy=f"ask at a node, or sweep {axis.name} more finely",
        )
    return span


def box_span(grid: Grid, axis: Axis, name: str, asked: Asked) -> Span:
    """The nodes of a tolerance axis that a range takes in, the next node outward included.

    Raises
    ------
    QuestionError
        For a design axis, a range that leaves the axis or stands upside down, and one that takes in
        a gain of exactly 0 beside others, which says nothing about what lies between them.
    """
    if axis.role != "tolerance":
        raise QuestionError(
            f"taking the worst over {name}: it is a design axis, which the engineer chooses",
            where=[axis.name],
            remedy=f"fix it with --at {name}=VALUE, or leave it free",
        )
    return checked_span(grid, axis, find_span(axis, asked, name=name))


def checked_span(grid: Grid, axis: Axis, span: Span) -> Span:
    """A range of a tolerance axis, unless it cannot be taken at its worst.

    Raises
    ------
    QuestionError
        When it takes in a node at which a gain of 0 changes the loop's structure, and others.
    """
    alone = set(gain_changes_structure(grid, axis)).intersection(span.nodes)
    if alone and len(span.nodes) > 1 and not axis.is_row_axis:
        others = [node for node in span.nodes if node not in alone]
        raise QuestionError(
            f"taking the worst over {axis.name} from {show_node(axis, span.nodes[0])} to "
            f"{show_node(axis, span.nodes[-1])}: at {show_node(axis, min(alone))} the term is "
            "absent, which says nothing about the values beside it",
            where=[axis.name],
            remedy=f"ask from a node beside it, such as --over {axis.name}="
            f"{show_node(axis, others[0])}:{show_node(axis, others[-1])}, or at it alone",
        )
    return span


def box_ends(axis: Axis, nodes: Indices) -> tuple[Value, ...]:
    """The lowest and the highest of some nodes; on a row axis every label."""
    if axis.is_row_axis:
        return tuple(value_at(axis, int(node)) for node in nodes)
    return value_at(axis, int(nodes[0])), value_at(axis, int(nodes[-1]))


def check_one_purpose(purposes: Sequence[tuple[str, Mapping[str, object] | Sequence[str]]]) -> None:
    """Refuse an axis that is named by two options.

    Raises
    ------
    QuestionError
        Names both.
    """
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


def _nodes_within(axis: Axis, name: str, asked: Asked) -> tuple[int, ...]:
    if axis.role == "tolerance":
        raise QuestionError(
            f"keeping {name} within a range: it is a tolerance axis, which nature chooses",
            where=[axis.name],
            remedy=f"give its range with --over {name}=LOW:HIGH",
        )
    span = find_span(axis, asked, name=name)
    if not span.widened:
        return span.nodes
    low, high = _bounds_of(axis, name, asked)
    inside = [node for node in span.nodes if low <= axis.coordinates[node] <= high]
    if not inside:
        around = [spell_node(axis, name, node) for node in (span.nodes[0], span.nodes[-1])]
        raise QuestionError(
            f"keeping {name} within {asked}: it holds no node; the nodes around it are "
            f"{' and '.join(around[::-1] if is_rate(axis, name) else around)}",
            where=[axis.name],
            remedy="widen the range to the nearest nodes",
        )
    return tuple(inside)


def _bounds_of(axis: Axis, name: str, asked: Asked) -> tuple[float, float]:
    pieces = asked.split(":") if isinstance(asked, str) else asked
    values = [pieces] if isinstance(pieces, float | int) else list(pieces)
    numbers = sorted(read_value(axis, value, name) for value in values)
    low, high = axis.snapped(np.array([numbers[0], numbers[-1]]))
    return float(low), float(high)


def _scope(grid: Grid, spans: Sequence[Span], fixed: Mapping[str, tuple[str, Asked]]) -> Scope:
    box, bracketed, widened = [], [], []
    at: dict[str, Value] = {}
    for position, (axis, span) in enumerate(zip(grid.axes, spans, strict=True)):
        if axis.role == "tolerance":
            box.append(position)
            widened += [axis.name] * span.widened
        elif axis.name in fixed:
            name, asked = fixed[axis.name]
            at[axis.name] = value_at(axis, span.nodes[0])
            if span.widened:
                box.append(position)
                bracketed.append(axis.name)
                at[axis.name] = read_value(axis, one_value(axis.name, asked), name)
    indices = tuple(np.array(span.nodes, dtype=np.intp) for span in spans)
    return Scope(grid, indices, tuple(box), at, bracketed=tuple(bracketed), widened=tuple(widened))
