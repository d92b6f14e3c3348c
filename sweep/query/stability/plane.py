"""The logarithm of the spectral radius over two axes: what a map shows."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, TypeVar

import numpy as np
from numpy.typing import NDArray

from sweep.config import Design
from sweep.errors import QuestionError
from sweep.grid import Axis
from sweep.query.answers import Mark, PlaneAnswer
from sweep.query.cautions import BETWEEN_NODES
from sweep.query.held import hold_nodes
from sweep.query.jump import find_largest_jump
from sweep.query.select import Asked, Value, find_axis, resolve_names
from sweep.query.stability.boundary import find_boundary
from sweep.vocabulary import STABILITY_THRESHOLD

if TYPE_CHECKING:
    from sweep.store.atlas import StoredAtlas

Number = TypeVar("Number", np.float32, np.float64)


def find_plane(
    stored: StoredAtlas, x: str, y: str, asked: Mapping[str, Asked], *, nearest: bool
) -> PlaneAnswer:
    """Read a plane and find the boundary in it.

    Parameters
    ----------
    stored
        The atlas.
    x, y
        The axes to the right and upwards.
    asked
        Values of other axes; one that is not named is held at its nominal node.
    nearest
        Whether the nearest node will do where a value lies between nodes.

    Raises
    ------
    QuestionError
        When both axes are the same, one is also held, or a value is not at a node.
    """
    grid = stored.grid
    right, up = find_axis(grid, x), find_axis(grid, y)
    if right.name == up.name:
        raise QuestionError(
            f"drawing a plane of {right.name} by {right.name}: expected two different axes",
            where=[right.name],
            remedy="name another axis for one of them",
        )
    for axis in (right, up):
        if axis.name in resolve_names(grid, asked):
            raise QuestionError(
                f"drawing a plane with {axis.name} on an edge: it is also held at a value",
                where=[axis.name],
                remedy=f"leave {axis.name} out of --at",
            )
    held = hold_nodes(grid, asked, nearest=nearest, free=(right.name, up.name))
    places = {axis.name: i for i, axis in enumerate(grid.axes)}
    block = tuple(
        slice(0, len(axis)) if axis.name in (right.name, up.name) else slice(node, node + 1)
        for axis, node in zip(grid.axes, held.node, strict=True)
    )
    edges = (places[up.name], places[right.name])
    log_radius = _as_plane(stored.read("log_radius", block), edges)
    boundary = np.empty((0, 2, 2))
    if not (right.is_row_axis or up.is_row_axis):
        mode_angle = _as_plane(stored.read("mode_angle", block), edges)
        boundary = find_boundary(grid, held.node, edges[::-1], log_radius, mode_angle)
    unordered = [i for i, axis in enumerate((up, right)) if not axis.ordered]
    return PlaneAnswer(
        atlas_id=stored.atlas_id,
        title=stored.title,
        grid=grid,
        x=right.name,
        y=up.name,
        log_radius=log_radius,
        boundary=boundary,
        period_s=_as_plane(grid.parameters(block)["sample_period"], edges),
        at=held.at,
        nominal=held.nominal,
        moved=held.moved,
        marks=tuple(_marks(stored.designs, right, up, held.at)),
        threshold=STABILITY_THRESHOLD,
        largest_jump=find_largest_jump(log_radius, log_radius < STABILITY_THRESHOLD, unordered),
        cautions=BETWEEN_NODES,
    )


def _marks(designs: Sequence[Design], right: Axis, up: Axis, at: Mapping[str, Value]) -> list[Mark]:
    """Designs whose values off the plane's axes are the ones that are held."""
    if right.is_row_axis or up.is_row_axis:
        return []
    marks = []
    for design in designs:
        values = design.values
        off = all(at[axis] == value for axis, value in values.items() if axis in at)
        x, y = values.get(right.name), values.get(up.name)
        if off and isinstance(x, float) and isinstance(y, float):
            marks.append(Mark(design.name, x, y))
    return marks


def _as_plane(block: NDArray[Number], edges: tuple[int, int]) -> NDArray[Number]:
    """A block with two axes that count as (upwards, to the right)."""
    moved = np.moveaxis(block, edges, (0, 1))
    return moved.reshape(moved.shape[:2])
