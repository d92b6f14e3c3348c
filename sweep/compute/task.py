"""The unit of work: one tile, from coordinates to stored objects.

A plain loop over `compute_tile` is the reference for every parallel run.
"""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sweep.grid import FloatArray, Grid, Tile
from sweep.store.shards import TileObjects
from sweep.vocabulary import LoopStructure

Values = Mapping[str, NDArray[np.float32]]


class Block(Protocol):
    """What a kernel returns for one block of nodes."""

    @property
    def values(self) -> Values:
        """Float32 values of each measure, shape of the block, never NaN."""

    @property
    def slow_nodes(self) -> int:
        """Nodes that the fast path left to the slow one."""

    @property
    def undecided_nodes(self) -> int:
        """Nodes that neither path could tell from the threshold."""


class ComputeBlock(Protocol):
    """The kernel: realised loops in, measures out."""

    def __call__(
        self,
        structure: LoopStructure,
        parameters: dict[str, FloatArray],
        shape: tuple[int, ...],
        measures: tuple[str, ...],
    ) -> Block:
        """Measures at every node of a block, from its loop parameters."""


@dataclass(frozen=True, eq=False)
class SweepSpec:
    """What all tiles of a run have in common; picklable if ``compute`` is a module's function."""

    structure: LoopStructure
    """The loop."""
    grid: Grid
    """Every node."""
    compute: ComputeBlock
    """The kernel."""
    objects: TileObjects
    """Where tiles are stored."""


@dataclass(frozen=True)
class TileTask:
    """One tile and those of its measures that are not stored yet."""

    tile: Tile
    """The nodes."""
    measures: tuple[str, ...]
    """What to compute at each."""


@dataclass(frozen=True)
class TileResult:
    """One tile that was computed."""

    index: tuple[int, ...]
    """Its place in the lattice of tiles."""
    nodes: int
    """Its nodes."""
    seconds: float
    """Time it took, compression and storing included, s."""
    measures: tuple[str, ...]
    """Those that were computed."""
    bytes: int
    """Size of its objects."""
    slow_nodes: int
    """Nodes that the fast path left to the slow one."""
    undecided_nodes: int
    """Nodes that neither path could tell from the threshold."""


def compute_tile(task: TileTask, spec: SweepSpec, *, store: bool = True) -> TileResult:
    """Compute one tile and store it; with ``store`` false encode it and let it go.

    Raises
    ------
    ValueError
        When the kernel breaks its contract: another shape or type, or a NaN, which would pass for
        a node that is not computed.
    OSError
        When the disk does not take the objects.
    """
    start = time.perf_counter()
    tile = task.tile
    parameters = spec.grid.parameters(tile.block)
    block = spec.compute(spec.structure, parameters, tile.shape, task.measures)
    size = 0
    for measure in task.measures:
        values = _trusted(block.values[measure], measure, tile)
        if store:
            size += spec.objects.write(tile, measure, values)
        else:
            size += sum(map(len, spec.objects.format.encode(values)))
    seconds = time.perf_counter() - start
    return TileResult(
        tile.index, tile.size, seconds, task.measures, size, block.slow_nodes, block.undecided_nodes
    )


def _trusted(values: NDArray[np.float32], measure: str, tile: Tile) -> NDArray[np.float32]:
    if values.shape != tile.shape or values.dtype != np.float32:
        raise ValueError(
            f"the kernel returned {measure} as {values.dtype} {values.shape}, expected float32 "
            f"{tile.shape}"
        )
    if np.isnan(values).any():
        raise ValueError(f"the kernel returned {measure} with NaN, which means not computed")
    return values
