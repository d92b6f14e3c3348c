"""Spectral radius of every node of a block: the fast kernel, then the slow path where it is needed.

loop parameters -> realised coefficients (`sweep.loop`) -> walks -> `sweep.measures.roots`.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.loop.bounded import UNIT_ROUNDOFF, FloatArray
from sweep.loop.controllers import RealisedController, realise_controller
from sweep.loop.sampling import Polynomial, SampledPlant, sample_plant
from sweep.measures.disks import evaluation_roundoffs
from sweep.measures.reference import compute_reference
from sweep.measures.roots import solve_walks
from sweep.vocabulary import LOG_RADIUS_FLOOR, STABILITY_THRESHOLD, LoopStructure

IntArray = NDArray[np.int64]

_GAINS = frozenset({"controller.kp", "controller.ki", "controller.kd"})


@dataclass(frozen=True, eq=False)
class RadiusBlock:
    """Spectral radii of a block of nodes, before storage."""

    log_radius: FloatArray
    """Natural logarithm of the spectral radius; minus infinity when every eigenvalue is 0."""
    mode_angle: FloatArray
    """Argument of the dominant eigenvalue, rad, 0 to pi."""
    error: FloatArray
    """Bound on the error of the radius itself."""
    slow: NDArray[np.bool_]
    """Nodes that went to the slow path."""
    undecided: NDArray[np.bool_]
    """Nodes that neither path could place on one side of the threshold."""

    @property
    def bound(self) -> FloatArray:
        """Bound on the error of ``log_radius``: |log(1 + e)| <= e / (1 - e).

        Below `LOG_RADIUS_FLOOR` every radius counts as the floor, so nothing is uncertain there.
        Infinite where the radius may as well be 0.
        """
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            radius = np.exp(self.log_radius)
            relative = self.error / radius
            bound = np.where(relative < 0.5, relative / (1 - relative), np.inf)
            floored = radius + self.error <= np.exp(LOG_RADIUS_FLOOR)
        return np.where(floored, 0.0, bound)


@dataclass(frozen=True, eq=False)
class _Table:
    """The distinct plants or controllers of a block, one in each row."""

    numerator: Polynomial
    """Coefficients in delta, lowest power first."""
    denominator: Polynomial
    """Coefficients in delta, lowest power first."""
    shape: tuple[int, ...]
    """Shape that the rows are counted through; it broadcasts over the block."""

    def coefficients(
        self, degree: int, order: int, roundoffs: float
    ) -> tuple[FloatArray, FloatArray]:
        """Numerators and denominators up to a power, each (rows, 2, powers): values and weights.

        The kernel allows a weight ``roundoffs`` times the unit roundoff, so that a weight of the
        magnitude plus the coefficient's own error in that measure covers both.
        """
        tables = []
        for polynomial in (self.numerator[: degree + 1], self.denominator[: order + 1]):
            table = np.empty((*self.shape, 2, len(polynomial)))
            for power, coefficient in enumerate(polynomial):
                allowance = coefficient.error / (roundoffs * UNIT_ROUNDOFF)
                table[..., 0, power] = coefficient.value
                table[..., 1, power] = np.abs(coefficient.value) + allowance
            tables.append(table.reshape(-1, 2, len(polynomial)))
        return tables[0], tables[1]


@dataclass(frozen=True)
class _Shape:
    """What nodes must share to be solved in one batch."""

    delay: int
    plant_order: int
    plant_degree: int
    controller_order: int
    controller_degree: int


def compute_radius(
    structure: LoopStructure, parameters: Mapping[str, FloatArray], shape: tuple[int, ...]
) -> RadiusBlock:
    """Spectral radius, dominant argument and error bound at every node of a block.

    Parameters
    ----------
    structure
        The loop's kinds and options.
    parameters
        Every parameter by dotted path, SI units, arrays of as many dimensions as ``shape`` and of
        length 1 along the axes that do not move them (`sweep.grid.Grid.parameters`).
    shape
        Nodes along each axis.
    """
    block = _compute_fast(structure, parameters, shape)
    for flat in np.flatnonzero(block.slow):
        index = np.unravel_index(flat, shape)
        values = {path: _at(array, index) for path, array in parameters.items()}
        found = compute_reference(structure, values)
        if found.error <= block.error[index] or not math.isfinite(block.error[index]):
            block.log_radius[index] = found.log_radius
            block.mode_angle[index] = found.mode_angle
            block.error[index] = found.error
        block.undecided[index] = not _is_decided(block.log_radius[index], block.error[index])
    return block


def _is_decided(log_radius: float, error: float) -> bool:
    """Whether the radius, give or take ``error``, lies on one side of the threshold."""
    if not math.isfinite(error):
        return False
    radius = math.exp(log_radius)
    low = log_radius + math.log1p(-error / radius) if error < radius else -math.inf
    high = log_radius + math.log1p(error / radius) if radius > 0 else math.log(error)
    return low >= STABILITY_THRESHOLD or high < STABILITY_THRESHOLD


def _at(array: FloatArray, index: tuple[np.intp, ...]) -> float:
    return float(array[tuple(0 if n == 1 else i for n, i in zip(array.shape, index, strict=True))])


def _compute_fast(
    structure: LoopStructure, parameters: Mapping[str, FloatArray], shape: tuple[int, ...]
) -> RadiusBlock:
    """The block by the compiled kernel alone; ``slow`` marks what it could not settle."""
    rank = len(shape)
    plant = sample_plant(structure, parameters)
    controller = realise_controller(structure, parameters)
    plants = _tabulate(plant.numerator, plant.denominator, rank)
    controllers = _tabulate(controller.numerator, controller.denominator, rank)
    # every node lies in exactly one batch, so the kernel fills all of these
    log_radius, mode_angle, error = (np.empty(shape) for _ in range(3))
    slow = np.empty(shape, dtype=bool)
    walk_axis, steady = _choose_walk_axis(parameters, shape)
    lanes = [
        _walk_starts(rows, shape, walk_axis) for rows in (plants.shape, controllers.shape, shape)
    ]
    for key, walks, positions in _batches(plant, controller, shape, walk_axis):
        roundoffs = evaluation_roundoffs(key.delay + key.plant_order + key.controller_order)
        solve_walks(
            key.delay,
            plants.coefficients(key.plant_degree, key.plant_order, roundoffs),
            controllers.coefficients(key.controller_degree, key.controller_order, roundoffs),
            *(starts[walks] for starts, _ in lanes),
            tuple(stride for _, stride in lanes),
            positions,
            steady,
            *(array.reshape(-1) for array in (log_radius, mode_angle, error, slow)),
        )
    return RadiusBlock(log_radius, mode_angle, error, slow, np.zeros(shape, dtype=bool))


def _tabulate(numerator: Polynomial, denominator: Polynomial, rank: int) -> _Table:
    coefficients = [*numerator, *denominator]
    shape = np.broadcast_shapes((1,) * rank, *(c.value.shape for c in coefficients))
    return _Table(numerator, denominator, shape)


def _choose_walk_axis(
    parameters: Mapping[str, FloatArray], shape: tuple[int, ...]
) -> tuple[int, bool]:
    """The longest axis that moves gains only, else the longest of all.

    Along the first kind the open-loop polynomial stays as it is, and the walk is called steady.
    """
    others = [array.shape for path, array in parameters.items() if path not in _GAINS]
    moved = np.broadcast_shapes((1,) * len(shape), *others)
    steady = [axis for axis, count in enumerate(moved) if count == 1]
    return max(steady or range(len(shape)), key=lambda axis: shape[axis]), bool(steady)


def _walk_starts(
    rows: tuple[int, ...], shape: tuple[int, ...], walk_axis: int
) -> tuple[IntArray, int]:
    """The row at position 0 of every walk, and the stride from one position to the next.

    Rows count through the shape ``rows``, which broadcasts over ``shape``.
    """
    strides = [math.prod(rows[axis + 1 :]) if n > 1 else 0 for axis, n in enumerate(rows)]
    starts = np.zeros(1, dtype=np.int64)
    for axis, count in enumerate(shape):
        if axis != walk_axis:
            starts = np.add.outer(starts, np.arange(count) * strides[axis]).ravel()
    return starts, strides[walk_axis]


def _batches(
    plant: SampledPlant, controller: RealisedController, shape: tuple[int, ...], walk_axis: int
) -> Iterator[tuple[_Shape, IntArray, IntArray]]:
    """Nodes that share delay and degrees, as (key, walks, positions): the product of the two lists.

    Where a walk passes through nodes of several kinds (an integral gain that is 0 somewhere), each
    kind is walked by itself.
    """
    marks = (
        plant.whole_delay + controller.whole_delay,
        plant.fractional,
        controller.order,
        controller.numerator_degree,
    )
    common = np.broadcast_shapes((1,) * len(shape), *(mark.shape for mark in marks))
    parts = [np.broadcast_to(mark, common).astype(np.int64) for mark in marks]
    kinds, code = np.unique(np.stack([part.ravel() for part in parts]), axis=1, return_inverse=True)
    along = np.moveaxis(code.reshape(common).astype(np.int16), walk_axis, -1)
    # where no walk changes its kind, one column tells all
    others = shape[:walk_axis] + shape[walk_axis + 1 :]
    columns = common[walk_axis]
    codes = np.broadcast_to(along, (*others, columns)).reshape(-1, columns)
    every = np.arange(shape[walk_axis])
    for number, (delay, fractional, order, degree) in enumerate(kinds.T.tolist()):
        key = _Shape(
            delay=delay,
            plant_order=plant.order,
            plant_degree=plant.order - 1 + fractional,
            controller_order=order,
            controller_degree=degree,
        )
        present = codes == number
        walks = np.flatnonzero(present.any(axis=1))
        for pattern, members in _group_rows(present[walks]):
            yield key, walks[members], every if len(pattern) == 1 else np.flatnonzero(pattern)


def _group_rows(
    present: NDArray[np.bool_],
) -> Iterator[tuple[NDArray[np.bool_], IntArray]]:
    """Rows of a table of flags that are equal, as (row, indices)."""
    if (present == present[:1]).all():
        yield present[0], np.arange(len(present))
        return
    patterns, which = np.unique(present, axis=0, return_inverse=True)
    for number, pattern in enumerate(patterns):
        yield pattern, np.flatnonzero(which.ravel() == number)
