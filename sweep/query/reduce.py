"""Reading an atlas in blocks: the worst case over a tolerance box, and single nodes.

Memory is one tile and the result, whatever the size of the atlas.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Grid, Tiling

Indices = NDArray[np.intp]


class Readable(Protocol):
    """What a question needs of a stored atlas."""

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


@dataclass(frozen=True)
class WorstLines:
    """The worst case over a tolerance box at every node of a set of lines along one axis."""

    worst: NDArray[np.float64]
    """Shape (rows, n): largest value over the box; NaN where a node of the box is unknown."""
    which: NDArray[np.int64]
    """Shape (rows, n): flat index into the box of the node where it is reached."""
    unknown: NDArray[np.int64]
    """Shape (rows, n): unknown nodes in the box."""


def worst_over_box(
    stored: Readable, measure: str, listed: Sequence[Indices], along: int, box: Sequence[int]
) -> WorstLines:
    """The largest ``measure`` over the box axes, along one axis, for every combination of the rest.

    Parameters
    ----------
    stored
        The atlas.
    measure
        Name of a stored measure.
    listed
        For each axis of the grid the nodes that take part, increasing.
    along
        Position of the axis that the lines run along.
    box
        Positions of the axes to take the worst over.

    Returns
    -------
    One line for each combination of the other axes' nodes, in C order. Of equal values the first
    in the box's C order is named.
    """
    rest = [axis for axis in range(len(listed)) if axis != along and axis not in box]
    order = (*rest, along, *box)
    rows_shape = tuple(len(listed[axis]) for axis in rest)
    box_shape = tuple(len(listed[axis]) for axis in box)
    lines = (*rows_shape, len(listed[along]))
    worst = np.full(lines, -np.inf)
    which = np.zeros(lines, dtype=np.int64)
    unknown = np.zeros(lines, dtype=np.int64)
    for places, nodes in _blocks(stored.tiling, listed):
        values = _read_block(stored, measure, nodes).transpose(order)
        target = np.ix_(*(places[axis] for axis in (*rest, along)))
        ids = _box_ids([places[axis] for axis in box], box_shape)
        _fold(
            values.reshape(*values.shape[: len(rest) + 1], -1), ids, target, worst, which, unknown
        )
    worst[unknown > 0] = np.nan
    shape = (-1, len(listed[along]))
    return WorstLines(worst.reshape(shape), which.reshape(shape), unknown.reshape(shape))


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


def _blocks(
    tiling: Tiling, listed: Sequence[Indices]
) -> Iterator[tuple[list[Indices], list[Indices]]]:
    """The question's nodes, tile by tile, as (places in the question, nodes of the grid)."""
    pieces = []
    for nodes, size in zip(listed, tiling.tile_shape, strict=True):
        tiles = nodes // size
        cuts = np.flatnonzero(np.diff(tiles)) + 1
        places = np.split(np.arange(len(nodes)), cuts)
        pieces.append([(place, nodes[place]) for place in places])
    for combination in itertools.product(*pieces):
        yield [place for place, _ in combination], [nodes for _, nodes in combination]


def _read_block(stored: Readable, measure: str, nodes: Sequence[Indices]) -> NDArray[np.float32]:
    starts = [int(axis[0]) for axis in nodes]
    selection = tuple(slice(a, int(axis[-1]) + 1) for a, axis in zip(starts, nodes, strict=True))
    block = stored.read(measure, selection)
    if all(len(axis) == size for axis, size in zip(nodes, block.shape, strict=True)):
        return block
    return block[np.ix_(*(axis - a for axis, a in zip(nodes, starts, strict=True)))]


def _box_ids(places: Sequence[Indices], shape: tuple[int, ...]) -> NDArray[np.int64]:
    ids = np.zeros(1, dtype=np.int64)
    for place, size in zip(places, shape, strict=True):
        ids = (ids[:, None] * size + place[None, :]).reshape(-1)
    return ids


def _fold(
    values: NDArray[np.float32],
    ids: NDArray[np.int64],
    target: tuple[NDArray[np.intp], ...],
    worst: NDArray[np.float64],
    which: NDArray[np.int64],
    unknown: NDArray[np.int64],
) -> None:
    """Take one block's worst over its last dimension into the running result."""
    missing = np.isnan(values)
    unknown[target] += missing.sum(axis=-1)
    if missing.any():
        values = np.where(missing, np.float32(-np.inf), values)
    place = values.argmax(axis=-1)
    found = np.take_along_axis(values, place[..., None], axis=-1)[..., 0].astype(np.float64)
    found_id = ids[place]
    better = (found > worst[target]) | ((found == worst[target]) & (found_id < which[target]))
    worst[target] = np.where(better, found, worst[target])
    which[target] = np.where(better, found_id, which[target])
