"""Which function computes which measure, and the block of stored values that a tile asks for."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from sweep.loop.bounded import FloatArray
from sweep.measures.radius import RadiusBlock, compute_radius
from sweep.vocabulary import LOG_RADIUS_FLOOR, LoopStructure

Stored: TypeAlias = NDArray[np.float32]
"""Values of one measure as they are stored."""


@dataclass(frozen=True, eq=False)
class BlockResult:
    """The stored values of a block of nodes."""

    values: dict[str, Stored]
    """By measure, each of the block's shape; never NaN."""
    slow_nodes: int
    """Nodes that went to the slow path."""
    undecided_nodes: int
    """Nodes whose stability neither path could decide; they are stored as not stable."""


def _stored_log_radius(block: RadiusBlock) -> Stored:
    stored = np.maximum(block.log_radius, LOG_RADIUS_FLOOR, dtype=np.float32, casting="same_kind")
    # never stable by error, and never NaN: that would mean not computed
    stored[block.undecided] = 0.0
    return stored


def _stored_mode_angle(block: RadiusBlock) -> Stored:
    stored = block.mode_angle.astype(np.float32)
    stored[np.isnan(stored)] = 0.0
    return stored


FROM_RADIUS: dict[str, Callable[[RadiusBlock], Stored]] = {
    "log_radius": _stored_log_radius,
    "mode_angle": _stored_mode_angle,
}
"""Measures that follow from the spectral radius of a block."""


def compute_block(
    structure: LoopStructure,
    parameters: Mapping[str, FloatArray],
    shape: tuple[int, ...],
    measures: tuple[str, ...],
) -> BlockResult:
    """Compute the stored values of a block of nodes.

    Parameters
    ----------
    structure
        The loop's kinds and options.
    parameters
        Every parameter by dotted path (`sweep.grid.Grid.parameters`).
    shape
        Nodes along each axis.
    measures
        Keys of `sweep.vocabulary.MEASURES`.

    Raises
    ------
    KeyError
        When a measure has no function.
    """
    functions = {name: FROM_RADIUS[name] for name in measures}
    block = compute_radius(structure, parameters, shape)
    return BlockResult(
        values={name: function(block) for name, function in functions.items()},
        slow_nodes=int(block.slow.sum()),
        undecided_nodes=int(block.undecided.sum()),
    )


def compile_kernels(structure: LoopStructure) -> None:
    """Compile (or load from the cache) what `compute_block` needs, on a grid of one node."""
    specs = structure.parameters()
    parameters = {
        path: np.array([0.0 if spec.low_is_legal else 1.0]) for path, spec in specs.items()
    }
    compute_block(structure, parameters, (1,), tuple(FROM_RADIUS))
