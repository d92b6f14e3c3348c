"""Selections of nodes, and reading one tile by tile when a plain read has failed."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

Index = slice | int | Sequence[int] | NDArray[np.integer] | NDArray[np.bool_]
Positions = NDArray[np.intp]


def resolve(selection: Sequence[Index], shape: tuple[int, ...]) -> list[slice | int | Positions]:
    """A selection with every index inside the axis, counted from its start.

    Raises
    ------
    IndexError
        When there is not one index for each axis, or one lies outside its axis.

    Examples
    --------
    >>> resolve((slice(None), -1), (3, 4))
    [slice(0, 3, 1), 3]
    """
    if len(selection) != len(shape):
        raise IndexError(f"{len(selection)} indices were given for {len(shape)} axes")
    return [_resolve_one(index, n) for index, n in zip(selection, shape, strict=True)]


def _resolve_one(index: Index, n: int) -> slice | int | Positions:
    if isinstance(index, slice):
        start, stop, step = index.indices(n)
        if step > 0:
            return slice(start, max(start, stop), step)
        return np.arange(start, stop, step)
    nodes = np.asarray(index)
    if nodes.dtype == np.bool_:
        nodes = np.flatnonzero(nodes) if nodes.shape == (n,) else np.array([n])
    nodes = np.where(nodes < 0, nodes + n, nodes).astype(np.intp)
    if nodes.ndim > 1 or (nodes.size and not (nodes.min() >= 0 and nodes.max() < n)):
        raise IndexError(f"index {index!r} does not fit an axis of {n} nodes")
    return nodes if nodes.ndim else int(nodes)


def tiles_touched(
    nodes: Sequence[Positions], tile_shape: tuple[int, ...]
) -> Iterator[tuple[tuple[int, ...], list[Positions]]]:
    """Every tile that a product of nodes touches, with the places along each axis it fills."""
    along = [_split(axis_nodes, edge) for axis_nodes, edge in zip(nodes, tile_shape, strict=True)]
    for index in np.ndindex(*(len(parts) for parts in along)):
        parts = [axis_parts[i] for axis_parts, i in zip(along, index, strict=True)]
        yield tuple(tile for tile, _ in parts), [positions for _, positions in parts]


def as_positions(index: slice | int | Positions, n: int) -> Positions:
    """The nodes that a resolved index picks, shape (k,)."""
    return np.atleast_1d(np.arange(n)[index])


def _split(nodes: Positions, edge: int) -> list[tuple[int, Positions]]:
    tiles = nodes // edge
    return [(int(tile), np.flatnonzero(tiles == tile)) for tile in np.unique(tiles)]
