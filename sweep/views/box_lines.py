"""What is said beside every answer about a tolerance box: its ends, and what was widened."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Protocol

from sweep.grid import Axis, Grid
from sweep.query.answers import show_value
from sweep.query.select import Value, find_axis


class Boxed(Protocol):
    """An answer about the worst over a box."""

    @property
    def grid(self) -> Grid:
        """Of the atlas."""
        ...

    @property
    def over(self) -> Mapping[str, tuple[Value, ...]]:
        """Lowest and highest node of each axis; labels of rows."""
        ...

    @property
    def widened(self) -> tuple[str, ...]:
        """Axes with a bound between nodes."""
        ...

    @property
    def bracketed(self) -> Mapping[str, tuple[Value, Value]]:
        """Axes fixed between two nodes."""
        ...


def box_lines(answer: Boxed, shaken: Mapping[str, str] | None = None) -> Iterable[str]:
    """The box, where it was widened, and what lies between nodes or is shaken.

    Parameters
    ----------
    answer
        Any answer about a box.
    shaken
        Axes that may move by themselves, with how far.
    """
    grid = answer.grid
    shaken = shaken or {}
    if answer.over:
        yield "worst over " + "; ".join(
            f"{name} {range_text(grid.axis(name), ends)}" for name, ends in answer.over.items()
        )
    if answer.widened:
        yield (
            f"a bound of {', '.join(answer.widened)} lay between nodes: "
            "the next node outward was taken in"
        )
    for name, reach in shaken.items():
        yield f"{name} may move by {reach} either way: its worst neighbour counts"
    moving = {find_axis(grid, name).name for name in shaken}
    for name, ends in answer.bracketed.items():
        axis = grid.axis(name)
        if name in moving:
            yield f"{name} takes in {range_text(axis, ends)}"
            continue
        yield (
            f"{name} lies between nodes: bracketed by {show_value(axis, ends[0])} and "
            f"{show_value(axis, ends[1])}, the worse of them counts"
        )


def range_text(axis: Axis, ends: Sequence[Value]) -> str:
    """Both ends of a range, or the labels of rows."""
    if axis.is_row_axis:
        shown = ", ".join(map(str, ends[:6]))
        return shown if len(ends) <= 6 else f"{shown} and {len(ends) - 6} more"
    low, high = ends[0], ends[-1]
    if low == high:
        return show_value(axis, low)
    return f"{show_value(axis, low)} to {show_value(axis, high)}"


def jump_line(largest_jump: float | None) -> Iterable[str]:
    """How finely the grid resolves the boundary that an answer rests on."""
    if largest_jump is not None:
        yield f"largest jump of log_radius between neighbours at the boundary: {largest_jump:.3g}"
