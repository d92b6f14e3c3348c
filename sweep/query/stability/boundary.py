"""The stability boundary in a plane of two axes.

Along every line of nodes, in both directions, the crossings are found as `limits` finds them; cell
by cell they are then joined by straight pieces (marching squares). So the line meets the limits at
every grid line, ends where they end, and lies on a node where a gain of exactly 0 changes the
loop's structure. It is that of stability alone: whether a loop can be built plays no part.

References
----------
W. E. Lorensen, H. E. Cline, Marching cubes: a high resolution 3D surface construction algorithm,
Computer Graphics 21 (1987), 163-169; in two dimensions.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Grid
from sweep.query.select import gain_changes_structure
from sweep.query.stability.walk import LimitsQuestion, Walk

FloatArray = NDArray[np.float64]
Point = tuple[float, float]
Piece = tuple[Point, Point]


def find_boundary(
    grid: Grid,
    node: Sequence[int],
    edges: tuple[int, int],
    log_radius: NDArray[np.floating],
    mode_angle: NDArray[np.floating],
) -> FloatArray:
    """The boundary as straight pieces, each within one cell of the plane.

    Parameters
    ----------
    grid
        Of the atlas.
    node
        Index along every axis at which the plane is held; those of its own two axes are not used.
    edges
        Positions of the axis to the right and of the axis upwards, neither of them a row axis.
    log_radius
        Shape (nodes upwards, nodes to the right); NaN where unknown.
    mode_angle
        The same shape, rad.

    Returns
    -------
    Shape (pieces, 2, 2): for each piece its two ends as (right, up), in stored units. There is
    none in a cell with an unknown corner. On a plane one node wide, where there are no cells, each
    crossing is a piece without length.
    """
    right, up = edges
    x, y = grid.axes[right].coordinates, grid.axes[up].coordinates
    across = _crossings(grid, node, right, up, log_radius, mode_angle)
    upward = _crossings(grid, node, up, right, log_radius.T, mode_angle.T).T
    if min(log_radius.shape) < 2:
        alone = [(float(at), float(y[0])) for at in across[~np.isnan(across)]]
        alone += [(float(x[0]), float(at)) for at in upward[~np.isnan(upward)]]
        pieces = [(point, point) for point in alone]
    else:
        pieces = list(_pieces(x, y, across, upward, np.isnan(log_radius)))
    return np.array(pieces, dtype=np.float64).reshape(-1, 2, 2)


def _crossings(
    grid: Grid,
    node: Sequence[int],
    along: int,
    listed: int,
    log_radius: NDArray[np.floating],
    mode_angle: NDArray[np.floating],
) -> FloatArray:
    """The crossing in each step along one axis, for every node of the other; NaN for none."""
    axis = grid.axes[along]
    spans = [np.array([index], dtype=np.intp) for index in node]
    for position in (along, listed):
        spans[position] = np.arange(len(grid.axes[position]))
    question = LimitsQuestion(grid, along, tuple(spans), (), {}, (), ())
    breaks = frozenset(gain_changes_structure(grid, axis))
    nowhere = np.zeros(len(axis), dtype=np.int64)
    built = np.zeros(len(axis), dtype=np.bool_)
    found = np.full((len(log_radius), len(axis) - 1), np.nan)
    for row, values in enumerate(log_radius.astype(np.float64)):
        place = {i: index for i, index in enumerate(node) if i != along} | {listed: row}
        walk = Walk(question, axis, breaks, values, nowhere, built, place)
        angles = {at: float(mode_angle[row, at[along]]) for at in walk.nodes_to_read()}
        for cell, at in walk.crossing_places(angles):
            found[row, cell] = at
    return found


def _pieces(
    x: FloatArray,
    y: FloatArray,
    across: FloatArray,
    upward: FloatArray,
    unknown: NDArray[np.bool_],
) -> Iterator[Piece]:
    """Join the crossings on the four sides of each cell; a crossing at a corner is one point."""
    crossed = ~np.isnan(across)
    touched = crossed[1:] | crossed[:-1] | ~np.isnan(upward[:, 1:]) | ~np.isnan(upward[:, :-1])
    blind = unknown[1:, 1:] | unknown[1:, :-1] | unknown[:-1, 1:] | unknown[:-1, :-1]
    for j, i in np.argwhere(touched & ~blind).tolist():
        sides = (
            (float(across[j, i]), float(y[j])),
            (float(x[i + 1]), float(upward[j, i + 1])),
            (float(across[j + 1, i]), float(y[j + 1])),
            (float(x[i]), float(upward[j, i])),
        )
        size = (float(x[i + 1] - x[i]), float(y[j + 1] - y[j]))
        points = [side for side in sides if not (math.isnan(side[0]) or math.isnan(side[1]))]
        yield from (piece for piece in _join(points, size) if piece[0] != piece[1])


def _join(points: Sequence[Point], size: Point) -> list[Piece]:
    """Two crossings are joined; four, in order round the cell, so that the pieces are shortest."""
    if len(points) == 2:
        return [(points[0], points[1])]
    a, b, c, d = points
    pairings = ([(a, b), (c, d)], [(b, c), (d, a)])
    return min(pairings, key=lambda pieces: sum(_length(piece, size) for piece in pieces))


def _length(piece: Piece, size: Point) -> float:
    """Length of a piece in cells."""
    (ax, ay), (bx, by) = piece
    return math.hypot((ax - bx) / size[0], (ay - by) / size[1])
