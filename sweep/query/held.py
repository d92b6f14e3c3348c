"""One node: every axis held where a question says, or at its nominal node."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from sweep.grid import Grid
from sweep.query.select import (
    Asked,
    Value,
    find_enclosing,
    find_node,
    one_value,
    read_value,
    resolve_names,
    value_at,
)


@dataclass(frozen=True)
class Held:
    """Axes held at a node."""

    node: tuple[int, ...]
    """Index along every axis; the nominal one along axes that are not held."""
    at: Mapping[str, Value]
    """Coordinate of every axis that is held."""
    nominal: tuple[str, ...]
    """Those that the question did not name."""
    moved: Mapping[str, float]
    """Axes where the nearest node was taken, with what was asked in the unit of the axis."""


def hold_nodes(
    grid: Grid, asked: Mapping[str, Asked], *, nearest: bool, free: Sequence[str] = ()
) -> Held:
    """The node that a question means.

    Parameters
    ----------
    grid
        Of the atlas.
    asked
        Values of axes.
    nearest
        Whether the nearest node will do where a value lies between nodes.
    free
        Axes that are not held.

    Raises
    ------
    QuestionError
        When a value is not at a node.
    """
    names = resolve_names(grid, asked)
    node = [axis.nominal for axis in grid.axes]
    moved: dict[str, float] = {}
    for position, axis in enumerate(grid.axes):
        if axis.name not in names:
            continue
        name, value = names[axis.name]
        single = one_value(axis.name, value)
        node[position] = find_node(axis, single, name=name, nearest=nearest)
        if nearest and len(find_enclosing(axis, single, name=name).nodes) > 1:
            moved[axis.name] = read_value(axis, single, name)
    held = [axis for axis in grid.axes if axis.name not in free]
    places = {axis.name: i for i, axis in enumerate(grid.axes)}
    return Held(
        node=tuple(node),
        at={axis.name: value_at(axis, node[places[axis.name]]) for axis in held},
        nominal=tuple(axis.name for axis in held if axis.name not in names),
        moved=moved,
    )
