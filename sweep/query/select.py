"""From what an engineer writes (`kp=0.3`, `sample_period=5ms`, a row label) to nodes of an axis."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal

import numpy as np

from sweep.config.findings import find_near
from sweep.errors import QuantityError, QuestionError
from sweep.grid import Axis, Grid
from sweep.quantities import (
    format_quantity,
    is_in_periods,
    parse_quantity,
    reciprocal,
    to_float,
)
from sweep.query.spoken import is_rate, spell_asked, spell_ends, spell_node, spell_value

Value = float | str
"""A coordinate, in the unit of the stored axis, or the label of a row."""

Asked = float | str | Sequence[float | str]
"""What a question may give for an axis: a number, a text with a unit, a label, or several."""


@dataclass(frozen=True)
class Span:
    """The nodes of one axis that a question takes."""

    nodes: tuple[int, ...]
    """Indices, increasing."""
    widened: bool = False
    """Whether a bound lay between nodes, so that the next node outward was taken in."""


def find_axis(grid: Grid, name: str) -> Axis:
    """The axis that a question calls ``name``.

    Raises
    ------
    QuestionError
        When there is none; the message says what there is, and what was probably meant.
    """
    if name == "sample_rate" and "sample_period" in grid.names and name not in grid.names:
        return grid.axis("sample_period")
    if name in grid.names:
        return grid.axis(name)
    for fixed in grid.fixed:
        if name in (fixed.path, fixed.path.rpartition(".")[2]):
            shown = format_quantity(fixed.value, fixed.unit, fixed.display_unit)
            raise QuestionError(
                f"asking about {name}: it has the one value {shown} throughout this atlas",
                where=[name],
                remedy=f"leave {name} out of the question, or sweep it in a config of its own",
            )
    axes = ", ".join(grid.names) or "none"
    near = find_near(name, grid.names)
    raise QuestionError(
        f"asking about {name}: this atlas has no such axis; its axes are {axes}",
        where=[name],
        remedy=f"write {near}, which was probably meant" if near else "name one of its axes",
    )


def value_at(axis: Axis, node: int) -> Value:
    """The coordinate of a node, or its row's label."""
    return axis.labels[node] if axis.labels is not None else float(axis.coordinates[node])


def show_node(axis: Axis, node: int) -> str:
    """A node's coordinate as an engineer would write it, with its unit."""
    if axis.labels is not None:
        return axis.labels[node]
    return format_quantity(float(axis.coordinates[node]), axis.unit, axis.display_unit)


def find_node(axis: Axis, asked: float | str, *, name: str = "", nearest: bool = False) -> int:
    """The node at ``asked``.

    Parameters
    ----------
    axis
        Where to look.
    asked
        A number in the unit of the stored coordinate, a text with a unit, or a row's label.
    name
        How the question spelled the axis; ``sample_rate`` turns a frequency into a period.
    nearest
        Whether the nearest node will do; on a log-spaced axis nearest by ratio would be the same
        node except within a fraction of a cell, so distance is plain.

    Raises
    ------
    QuestionError
        When there is no node there (unless ``nearest``), or the value is outside the axis.
    """
    if axis.labels is not None:
        return _find_row(axis, asked)
    value = read_value(axis, asked, name)
    _check_inside(axis, value, asked, name)
    node = int(np.abs(axis.coordinates - value).argmin())
    if nearest or _is_node(axis, value, node):
        return node
    exact = spell_node(axis, name, node, digits=None).replace(" ", "")
    raise QuestionError(
        f"looking up {spell_asked(axis, name, asked)}: it lies between nodes, "
        f"the nearest is {spell_node(axis, name, node)}",
        where=[axis.name],
        remedy=f"ask for {name or axis.name}={exact}, or take the nearest node with --nearest",
    )


def find_enclosing(axis: Axis, asked: float | str, *, name: str = "") -> Span:
    """The node at ``asked``, or the two nodes around it."""
    if axis.labels is not None:
        return Span((_find_row(axis, asked),))
    value = read_value(axis, asked, name)
    _check_inside(axis, value, asked, name)
    node = int(np.abs(axis.coordinates - value).argmin())
    if _is_node(axis, value, node):
        return Span((node,))
    low = int(np.searchsorted(axis.coordinates, value)) - 1
    return Span((low, low + 1), widened=True)


def find_span(axis: Axis, asked: Asked, *, name: str = "") -> Span:
    """The nodes that a range takes in; a bound between nodes takes in the next node outward.

    Parameters
    ----------
    axis
        Where to look.
    asked
        ``"low:high"``, a pair of bounds, or one value; on a row axis a label or several, or
        ``"first:last"`` when the rows are ordered.
    name
        How the question spelled the axis.

    Raises
    ------
    QuestionError
        When a bound is outside the axis, or the lower one is not the lower one.
    """
    if axis.labels is not None:
        return Span(_find_rows(axis, [asked] if isinstance(asked, str | float | int) else asked))
    bounds = _bounds(axis, asked, name)
    ends = [find_enclosing(axis, bound, name=name) for bound in bounds]
    values = [read_value(axis, bound, name) for bound in bounds]
    if is_rate(axis, name):
        ends, values = ends[::-1], values[::-1]
    if values[0] > values[-1]:
        raise QuestionError(
            f"reading the range of {name or axis.name}: {spell_value(axis, name, bounds[0])} lies "
            f"above {spell_value(axis, name, bounds[-1])}",
            where=[axis.name],
            remedy="write the lower bound first: NAME=LOW:HIGH",
        )
    nodes = tuple(range(ends[0].nodes[0], ends[-1].nodes[-1] + 1))
    return Span(nodes, widened=any(end.widened for end in ends))


def read_value(axis: Axis, asked: float | str, name: str = "") -> float:
    """A number or a text as a coordinate of ``axis``, in its stored unit."""
    as_rate = is_rate(axis, name)
    try:
        value = parse_quantity(asked, "Hz" if as_rate else axis.unit)
    except QuantityError as error:
        raise QuestionError(
            f"reading {name or axis.name} = {asked}: {error.message}",
            where=[axis.name],
            remedy=error.remedy
            or f"write a number in {'Hz' if as_rate else axis.unit}, or one with a unit",
        ) from error
    if as_rate and value <= 0:
        raise QuestionError(
            f"reading sample_rate = {asked}: expected a rate above 0 Hz",
            where=["sample_rate"],
            remedy="write a rate such as 500Hz",
        )
    return to_float(reciprocal(value) if as_rate else value)


def resolve_names(grid: Grid, asked: Mapping[str, Asked]) -> dict[str, tuple[str, Asked]]:
    """Axis name -> (how the question spelled it, what it asked).

    Raises
    ------
    QuestionError
        For an axis that does not exist or is named twice under two spellings.
    """
    found: dict[str, tuple[str, Asked]] = {}
    for name, value in asked.items():
        axis = find_axis(grid, name)
        if axis.name in found:
            raise QuestionError(
                f"asking about {axis.name}: it is given twice, "
                f"as {found[axis.name][0]} and as {name}",
                where=[axis.name],
                remedy="give it once",
            )
        in_seconds = axis.sets == ("sample_period",) and name != "sample_rate"
        found[axis.name] = (name, _periods_to_seconds(grid, value) if in_seconds else value)
    return found


def _periods_to_seconds(grid: Grid, asked: Asked) -> Asked:
    """What is asked in natural periods of the plant at its nominal nodes, as numbers in s."""
    if isinstance(asked, float | int):
        return asked
    pieces = asked.split(":") if isinstance(asked, str) else list(asked)
    block = tuple(slice(axis.nominal, axis.nominal + 1) for axis in grid.axes)
    natural_hz = grid.parameters(block).get("plant.natural_frequency")
    if natural_hz is None or not any(isinstance(p, str) and is_in_periods(p) for p in pieces):
        return asked
    period_s = reciprocal(Decimal(repr(float(natural_hz.reshape(-1)[0]))))
    numbers = [
        to_float(parse_quantity(piece, "s", natural_period_s=period_s))
        if isinstance(piece, str) and is_in_periods(piece)
        else piece
        for piece in pieces
    ]
    return numbers[0] if isinstance(asked, str) and len(numbers) == 1 else numbers


def one_value(axis: str, asked: Asked) -> float | str:
    """The single value of an axis; `QuestionError` when several were given."""
    if isinstance(asked, str | float | int):
        return asked
    raise QuestionError(
        f"fixing {axis}: expected one value, found {', '.join(map(str, asked))}",
        where=[axis],
        remedy=f"name one value, or list the axis with --each {axis}",
    )


def gain_changes_structure(grid: Grid, axis: Axis) -> tuple[int, ...]:
    """Nodes of ``axis`` where a gain is exactly 0 and its term's memory is absent with it.

    An integral gain of 0 takes the accumulator's eigenvalue at 1 away; a derivative gain of 0 takes
    away the filter's eigenvalue, when there is a filter. (Without one that eigenvalue is 0, where
    the spectral radius does not feel it.)
    """
    paths = ["controller.ki"]
    if _has_filter(grid):
        paths.append("controller.kd")
    zero = np.zeros(len(axis), dtype=bool)
    for path in paths:
        if path in axis.sets:
            zero |= axis.values_of(path) == 0.0
    return tuple(int(node) for node in np.flatnonzero(zero))


def _has_filter(grid: Grid) -> bool:
    path = "controller.derivative_filter"
    swept = [float(axis.values_of(path).max()) for axis in grid.axes if path in axis.sets]
    return max([*swept, *(item.value for item in grid.fixed if item.path == path), 0.0]) > 0.0


def _is_node(axis: Axis, value: float, node: int) -> bool:
    return bool(axis.snapped(np.array(value)) == axis.coordinates[node])


def _check_inside(axis: Axis, value: float, asked: float | str, name: str) -> None:
    meant = float(axis.snapped(np.array(value)))
    if axis.coordinates[0] <= meant <= axis.coordinates[-1]:
        return
    low, high = spell_ends(axis, name)
    raise QuestionError(
        f"looking up {spell_asked(axis, name, asked)}: the axis runs from {low} to {high}",
        where=[axis.name],
        remedy=f"stay within the axis, or sweep {axis.name} further in a config of its own",
    )


def _bounds(axis: Axis, asked: Asked, name: str) -> list[float | str]:
    parts: list[float | str]
    if isinstance(asked, str):
        parts = [part.strip() for part in asked.split(":")]
    elif isinstance(asked, float | int):
        parts = [asked]
    else:
        parts = list(asked)
    if len(parts) not in (1, 2) or "" in parts:
        raise QuestionError(
            f"reading the range of {name or axis.name}: expected LOW:HIGH, found {asked}",
            where=[axis.name],
            remedy=f"write {name or axis.name}=LOW:HIGH",
        )
    return parts


def _find_row(axis: Axis, asked: float | str) -> int:
    labels = axis.labels or ()
    if str(asked) in labels:
        return labels.index(str(asked))
    near = find_near(str(asked), labels)
    listed = ", ".join(labels[:8]) + (", …" if len(labels) > 8 else "")
    raise QuestionError(
        f"looking up {axis.name} = {asked}: it has no such row; its rows are {listed}",
        where=[axis.name],
        remedy=f"write {near}, which was probably meant" if near else "name a row by its label",
    )


def _find_rows(axis: Axis, asked: Sequence[float | str]) -> tuple[int, ...]:
    nodes: set[int] = set()
    for item in asked:
        first, colon, last = str(item).partition(":")
        if axis.ordered and colon and str(item) not in (axis.labels or ()):
            ends = sorted((_find_row(axis, first.strip()), _find_row(axis, last.strip())))
            nodes.update(range(ends[0], ends[1] + 1))
        elif {first.strip(), last.strip()} <= set(axis.labels or ()):
            raise QuestionError(
                f"reading {axis.name} = {item}: its rows are not ordered, so that none lies "
                "between two others",
                where=[axis.name],
                remedy=f"name each row: {axis.name}={first.strip()},{axis.name}={last.strip()}; or "
                f"write ordered = true in [axes.{axis.name}]",
            )
        else:
            nodes.add(_find_row(axis, item))
    if not nodes:
        raise QuestionError(
            f"reading {axis.name}: no row is named",
            where=[axis.name],
            remedy=f"name at least one row, or leave {axis.name} out to take them all",
        )
    return tuple(sorted(nodes))
