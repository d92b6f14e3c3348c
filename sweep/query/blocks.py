"""Reading an atlas in blocks, tile by tile, and at single nodes."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Grid, Tiling

Indices = NDArray[np.intp]

NODES_AT_ONCE = 2_000_000
"""Nodes of a block that is read at once, unless one tile has more: 8 MB a measure and thread."""


class Readable(Protocol):
    """What a question needs of a stored atlas."""

    @property
    def atlas_id(self) -> str:
        """SHA-256 of everything that decides its numbers."""
        ...

    @property
    def grid(self) -> Grid:
        """Axes and fixed parameters."""
        ...

    @property
    def tiling(self) -> Tiling:
        """The blocks in which measures are stored."""
        ...

    def read(self, measure: str, selection: tuple[slice, ...]) -> NDArray[np.float32]:
        """The values of ``measure`` in a block of the grid; NaN where unknown."""
        ...


def read_nodes(stored: Readable, measure: str, nodes: Indices) -> NDArray[np.float64]:
    """The values of ``measure`` at single nodes.

    Parameters
    ----------
    stored
        The atlas.
    measure
        Name of a stored measure.
    nodes
        Shape (m, axes), the index of each node along every axis.

    Returns
    -------
    Shape (m,); NaN where unknown.
    """
    values = np.empty(len(nodes))
    tiles = nodes // np.array(stored.tiling.tile_shape, dtype=np.intp)
    _, group = np.unique(tiles, axis=0, return_inverse=True)
    group = group.reshape(-1)
    for chosen in (np.flatnonzero(group == number) for number in range(group.max(initial=-1) + 1)):
        start, stop = nodes[chosen].min(axis=0), nodes[chosen].max(axis=0) + 1
        block = stored.read(measure, tuple(map(slice, start.tolist(), stop.tolist())))
        values[chosen] = block[tuple((nodes[chosen] - start).T)]
    return values


@dataclass(frozen=True)
class Cut:
    """A block of a question: a product of consecutive places along every axis."""

    places: tuple[slice, ...]
    """Where it stands among the nodes of the question."""
    nodes: tuple[Indices, ...]
    """Its nodes in the grid, along every axis."""


def cut_by_tile(tiling: Tiling, listed: Sequence[Indices], joined: Sequence[int]) -> list[Cut]:
    """The question's nodes in blocks that no tile belongs to twice.

    Parameters
    ----------
    tiling
        How the atlas is stored.
    listed
        For each axis the nodes that take part, increasing.
    joined
        Axes along which the tiles of a block are read together, as far as `NODES_AT_ONCE` allows.
    """
    sizes = list(tiling.tile_shape)
    for axis in joined:
        nodes = math.prod(min(size, len(n)) for size, n in zip(sizes, listed, strict=True))
        tiles = max(1, NODES_AT_ONCE // max(1, nodes))
        sizes[axis] *= min(tiles, tiling.counts[axis])
    pieces = []
    for nodes_along, size in zip(listed, sizes, strict=True):
        cuts = np.flatnonzero(np.diff(nodes_along // size)) + 1
        ends = [0, *cuts.tolist(), len(nodes_along)]
        pieces.append([(slice(a, b), nodes_along[a:b]) for a, b in itertools.pairwise(ends)])
    return [
        Cut(tuple(place for place, _ in parts), tuple(nodes for _, nodes in parts))
        for parts in itertools.product(*pieces)
    ]


def read_block(stored: Readable, measure: str, nodes: Sequence[Indices]) -> NDArray[np.float32]:
    """The values of ``measure`` at the product of some nodes of each axis; NaN where unknown."""
    starts = [int(axis[0]) for axis in nodes]
    selection = tuple(slice(a, int(axis[-1]) + 1) for a, axis in zip(starts, nodes, strict=True))
    block = stored.read(measure, selection)
    if all(len(axis) == size for axis, size in zip(nodes, block.shape, strict=True)):
        return block
    return block[np.ix_(*(axis - a for axis, a in zip(nodes, starts, strict=True)))]


def box_ids(places: Sequence[Indices], shape: tuple[int, ...]) -> NDArray[np.int32]:
    """Flat indices, in C order, of the product of some places along the axes of a box."""
    ids = np.zeros(1, dtype=np.int64)
    for place, size in zip(places, shape, strict=True):
        ids = (ids[:, None] * size + place[None, :]).reshape(-1)
    return ids.astype(np.int32)
