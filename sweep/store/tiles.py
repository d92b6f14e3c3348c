"""How a grid is cut: the tile that one task computes, the inner chunk that a reader decodes."""

from __future__ import annotations

import math
from collections.abc import Iterable

from sweep.errors import QuestionError
from sweep.grid import Grid, Tiling

NODES_PER_INNER_CHUNK = 2**15
"""Float32 nodes in an inner chunk: 128 kB; decoding one costs a reader a fixed 0.1 to 0.5 ms."""
MOST_NODES_PER_INNER_CHUNK = 2**16
"""256 kB; a point read decodes one whole inner chunk."""
SMALLEST_TILE, USUAL_TILE, LARGEST_TILE = 2**16, 2**19, 2**20
"""Nodes in a tile that is chosen: what `kill -9` loses, against the fixed cost of a tile."""
LONGEST_GAIN_RUN = 128
"""Nodes; the kernel walks along a gain axis, and past this a longer walk gains nothing."""
MOST_NODES_IN_A_TILE = 2**26
"""Each worker holds a tile whole; this many are 256 MB per measure."""
MOST_TILES = 100_000_000
"""Each is a file of its own, and nine bytes of a run's memory."""
MANY_TILES = 100_000
"""Past this many, names and fixed costs are felt; said when another shape makes far fewer."""
MOST_CHUNKS_IN_A_TILE = 2**12
"""Chunks have a fixed cost; a tile with a large prime edge would fall into slivers."""


def choose_tile_shape(grid: Grid) -> tuple[int, ...]:
    """The tile shape of a new atlas.

    Long along the controller's gains, because the kernel walks rows of them, and a multiple of a
    near-cubic chunk along every axis, because questions cut an atlas in any direction. A function
    of the grid alone, so that two people who start one sweep get tiles that fit together.

    Examples
    --------
    >>> import numpy as np
    >>> from sweep.grid import Axis
    >>> period = Axis("sample_period", ("sample_period",), np.arange(1.0, 241.0), "design", 0)
    >>> kp = Axis("kp", ("controller.kp",), np.arange(211.0), "design", 0)
    >>> damping = Axis("damping", ("plant.damping",), np.arange(4.0), "tolerance", 0)
    >>> choose_tile_shape(Grid((period, kp, damping)))
    (160, 71, 4)
    """
    edges = _near_cubic_edges(grid.shape, NODES_PER_INNER_CHUNK)
    counts = [-(-n // edge) for n, edge in zip(grid.shape, edges, strict=True)]
    blocks = [1] * len(edges)
    budget = _tile_budget(grid.size)
    for position, longest in _growing_order(grid):
        nodes = math.prod(b * e for b, e in zip(blocks, edges, strict=True))
        most = min(budget // nodes, longest // edges[position])
        blocks[position] = _even_share(counts[position], max(1, most))
    return tuple(b * e for b, e in zip(blocks, edges, strict=True))


def inner_chunk_shape(tile_shape: tuple[int, ...]) -> tuple[int, ...]:
    """The near-cubic chunk of 64 to 256 kB that divides a tile exactly along every axis.

    >>> inner_chunk_shape((16, 64, 64, 4, 4))
    (16, 16, 16, 4, 4)
    """
    chunk = [1] * len(tile_shape)
    growing = set(range(len(tile_shape)))
    while growing:
        position = min(growing, key=lambda i: (chunk[i], i))
        larger = _next_divisor(tile_shape[position], chunk[position])
        nodes = math.prod(chunk) // chunk[position] * larger
        if larger == chunk[position] or nodes > MOST_NODES_PER_INNER_CHUNK:
            growing.discard(position)
        else:
            chunk[position] = larger
    return tuple(chunk)


def check_tile_shape(tile_shape: tuple[int, ...], grid: Grid) -> tuple[int, ...]:
    """Clip a tile shape that somebody asked for to the grid.

    Raises
    ------
    QuestionError
        When it has another rank than the grid, a number below 1, too many nodes to be held, an
        edge that falls into slivers only, or would make too many tiles to keep count of.
    """
    asked = shape_text(tile_shape)
    remedy = f"give a shape such as {shape_text(choose_tile_shape(grid))}"
    if len(tile_shape) != len(grid.shape) or min(tile_shape, default=0) < 1:
        raise QuestionError(
            f"the tile shape {asked} does not fit the grid: expected {len(grid.shape)} whole "
            f"numbers of at least 1, one for each of the axes {', '.join(grid.names)}",
            remedy=remedy,
        )
    clipped = tuple(min(t, n) for t, n in zip(tile_shape, grid.shape, strict=True))
    nodes = math.prod(clipped)
    if nodes > MOST_NODES_IN_A_TILE:
        raise QuestionError(
            f"the tile shape {asked} has {nodes:,} nodes; at most {MOST_NODES_IN_A_TILE:,} "
            "are allowed, since each worker holds one tile whole",
            remedy=remedy,
        )
    if nodes // math.prod(inner_chunk_shape(clipped)) > MOST_CHUNKS_IN_A_TILE:
        raise QuestionError(
            f"the tile shape {asked} cannot be cut into chunks of 64 to 256 kB: "
            "expected numbers with small divisors",
            remedy=remedy,
        )
    tiles = len(Tiling(grid.shape, clipped))
    if tiles > MOST_TILES:
        raise QuestionError(
            f"the tile shape {asked} cuts the grid into {tiles:,} tiles; at most "
            f"{MOST_TILES:,} are allowed, since each is a file",
            remedy=remedy,
        )
    return clipped


def shape_text(tile_shape: Iterable[int]) -> str:
    """A tile shape as it is written on the command line.

    >>> shape_text((16, 64, 8))
    '16x64x8'
    """
    return "x".join(map(str, tile_shape))


def _tile_budget(nodes: int) -> int:
    small = min(USUAL_TILE, max(SMALLEST_TILE, nodes // 16))
    return max(small, min(LARGEST_TILE, nodes // 4096))


def _growing_order(grid: Grid) -> list[tuple[int, int]]:
    """Positions of the axes with the longest run wanted: gains first, the longest of them first."""
    gains = {"controller.kp", "controller.ki", "controller.kd"}
    walked = {i: bool(gains.intersection(axis.sets)) for i, axis in enumerate(grid.axes)}
    order = sorted(
        walked, key=lambda i: (not walked[i], -grid.shape[i] if walked[i] else grid.shape[i])
    )
    return [(i, LONGEST_GAIN_RUN if walked[i] else LARGEST_TILE) for i in order]


def _near_cubic_edges(shape: tuple[int, ...], nodes: int) -> tuple[int, ...]:
    """Edges of a box of about ``nodes`` nodes that cuts each axis into nearly equal parts."""
    edges = [0] * len(shape)
    left, axes = nodes, len(shape)
    for position in sorted(range(len(shape)), key=lambda i: shape[i]):
        edge = max(1, math.floor(left ** (1 / axes) + 1e-9))
        parts = -(-shape[position] // edge)
        edges[position] = -(-shape[position] // parts)
        left, axes = max(1, left // edges[position]), axes - 1
    return tuple(edges)


def _even_share(count: int, most: int) -> int:
    """The share of ``count`` things, at most ``most``, that leaves the last share nearly full.

    >>> _even_share(7, 4), _even_share(7, 6), _even_share(7, 9)
    (4, 4, 7)
    """
    return -(-count // -(-count // most))


def _next_divisor(number: int, divisor: int) -> int:
    larger = (d for d in range(divisor + 1, number + 1) if number % d == 0)
    return next(larger, divisor)
