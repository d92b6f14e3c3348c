"""Spectral radius of every node of a block: the fast kernel, then the slow path where it is needed.

loop parameters -> realised coefficients (`sweep.loop`) -> walks -> `sweep.measures.roots`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.loop.bounded import UNIT_ROUNDOFF, FloatArray
from sweep.loop.controllers import RealisedController, realise_controller
from sweep.loop.sampling import Polynomial, SampledPlant, sample_plant
from sweep.measures.reference import compute_reference
from sweep.measures.roots import TARGET, solve_walks
from sweep.vocabulary import LOG_RADIUS_FLOOR, STABILITY_THRESHOLD, LoopStructure

IntArray = NDArray[np.int32]

_GAINS = frozenset({"controller.kp", "controller.ki", "controller.kd"})


@dataclass(frozen=True, eq=False)
class RadiusBlock:
    """Spectral radii of a block of nodes, before storage."""

    log_radius: FloatArray
    """Natural logarithm of the spectral radius; minus infinity when every eigenvalue is 0."""
    mode_angle: FloatArray
    """Argument of the dominant eigenvalue, rad, 0 to pi."""
    bound: FloatArray
    """Bound on the error of ``log_radius``; infinite where the radius may as well be 0."""
    slow: NDArray[np.bool_]
    """Nodes that went to the slow path."""
    undecided: NDArray[np.bool_]
    """Nodes that neither path could place on one side of the threshold."""


@dataclass(frozen=True, eq=False)
class _Table:
    """Coefficients of every distinct plant or controller of a block, one in each row."""

    numerator: FloatArray
    """(rows, 2, powers): coefficients in delta and their weights."""
    denominator: FloatArray
    """(rows, 2, powers)."""
    row: IntArray
    """Row of each node, broadcasting over the block."""


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
    log_radius, mode_angle, error = _compute_fast(structure, parameters, shape)
    slow = ~(_bound_of_log(log_radius, error) <= TARGET) | ~_is_decided(log_radius, error)
    for index in zip(*np.nonzero(slow), strict=True):
        values = {path: _at(array, index) for path, array in parameters.items()}
        found = compute_reference(structure, values)
        if not error[index] <= found.bound:
            log_radius[index] = found.log_radius
            mode_angle[index] = found.mode_angle
            error[index] = found.bound
    undecided = slow & ~_is_decided(log_radius, error)
    return RadiusBlock(log_radius, mode_angle, _bound_of_log(log_radius, error), slow, undecided)


def _bound_of_log(log_radius: FloatArray, error: FloatArray) -> FloatArray:
    """Bound on the error of the logarithm from one on the radius: |log(1 + e)| <= e / (1 - e).

    Below `LOG_RADIUS_FLOOR` every radius counts as the floor, so nothing is uncertain there.
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        relative = error / np.exp(log_radius)
        bound = np.where(relative < 0.5, relative / (1 - relative), np.inf)
        floored = np.exp(log_radius) + error <= np.exp(LOG_RADIUS_FLOOR)
    return np.where(floored, 0.0, bound)


def _is_decided(log_radius: FloatArray, error: FloatArray) -> NDArray[np.bool_]:
    """Whether the radius, give or take ``error``, lies on one side of the threshold."""
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        radius = np.exp(log_radius)
        relative = error / radius
        low = np.where(relative < 1, log_radius + np.log1p(-relative), -np.inf)
        high = np.where(radius > 0, log_radius + np.log1p(relative), np.log(error))
    return (low >= STABILITY_THRESHOLD) | (high < STABILITY_THRESHOLD)


def _at(array: FloatArray, index: tuple[np.intp, ...]) -> float:
    return float(array[tuple(0 if n == 1 else i for n, i in zip(array.shape, index, strict=True))])


def _compute_fast(
    structure: LoopStructure, parameters: Mapping[str, FloatArray], shape: tuple[int, ...]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """log_radius, mode_angle and the bound on the radius, by the compiled kernel."""
    rank = len(shape)
    plant = sample_plant(structure, parameters)
    controller = realise_controller(structure, parameters)
    plants = _tabulate(plant.numerator, plant.denominator, rank)
    controllers = _tabulate(controller.numerator, controller.denominator, rank)
    results = [np.full(int(np.prod(shape)), np.nan) for _ in range(3)]
    walk_axis, steady = _choose_walk_axis(parameters, shape)
    plant_rows = _as_walks(plants.row, shape, walk_axis)
    controller_rows = _as_walks(controllers.row, shape, walk_axis)
    nodes = _as_walks(np.arange(len(results[0]), dtype=np.int32).reshape(shape), shape, walk_axis)
    for key, walks, steps in _batches(plant, controller, shape, walk_axis):
        batch = np.ix_(walks, steps)
        solve_walks(
            key.delay,
            _powers(plants, key.plant_degree, key.plant_order),
            _powers(controllers, key.controller_degree, key.controller_order),
            np.ascontiguousarray(plant_rows[batch]),
            np.ascontiguousarray(controller_rows[batch]),
            np.ascontiguousarray(nodes[batch]),
            steady,
            *results,
        )
    log_radius, mode_angle, error = (result.reshape(shape) for result in results)
    return log_radius, mode_angle, error


def _tabulate(numerator: Polynomial, denominator: Polynomial, rank: int) -> _Table:
    coefficients = [*numerator, *denominator]
    shape = np.broadcast_shapes((1,) * rank, *(c.value.shape for c in coefficients))
    rows = np.arange(int(np.prod(shape)), dtype=np.int32).reshape(shape)
    return _Table(_rows(numerator, shape), _rows(denominator, shape), rows)


def _rows(polynomial: Polynomial, shape: tuple[int, ...]) -> FloatArray:
    table = np.empty((int(np.prod(shape)), 2, len(polynomial)))
    for power, coefficient in enumerate(polynomial):
        # a coefficient's own error counts as rounding: the kernel allows at least 20 roundoffs
        # of a weight, so an eighth of the error, in roundoffs, is enough
        weight = np.abs(coefficient.value) + coefficient.error / (8 * UNIT_ROUNDOFF)
        table[:, 0, power] = np.broadcast_to(coefficient.value, shape).ravel()
        table[:, 1, power] = np.broadcast_to(weight, shape).ravel()
    return table


def _powers(table: _Table, degree: int, order: int) -> tuple[FloatArray, FloatArray]:
    return (
        np.ascontiguousarray(table.numerator[:, :, : degree + 1]),
        np.ascontiguousarray(table.denominator[:, :, : order + 1]),
    )


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


def _as_walks(array: NDArray[Any], shape: tuple[int, ...], walk_axis: int) -> NDArray[Any]:
    whole = np.broadcast_to(array, shape)
    return np.moveaxis(whole, walk_axis, -1).reshape(-1, shape[walk_axis])


def _batches(
    plant: SampledPlant, controller: RealisedController, shape: tuple[int, ...], walk_axis: int
) -> Iterator[tuple[_Shape, IntArray, IntArray]]:
    """Nodes that share delay and degrees, as (key, walks, steps): the product of the two lists.

    Where a walk passes through nodes of several kinds (an integral gain that is 0 somewhere), each
    kind is walked by itself.
    """
    parts = np.broadcast_arrays(
        plant.whole_delay + controller.whole_delay,
        plant.fractional,
        controller.order,
        controller.numerator_degree,
    )
    kinds, code = np.unique(np.stack([part.ravel() for part in parts]), axis=1, return_inverse=True)
    codes = _as_walks(
        code.reshape((1,) * (len(shape) - parts[0].ndim) + parts[0].shape), shape, walk_axis
    )
    for number, (delay, fractional, order, degree) in enumerate(kinds.T.tolist()):
        key = _Shape(
            delay=delay,
            plant_order=plant.order,
            plant_degree=plant.order - 1 + fractional,
            controller_order=order,
            controller_degree=degree,
        )
        present = codes == number if kinds.shape[1] > 1 else np.ones(codes.shape, dtype=bool)
        walks = np.flatnonzero(present.any(axis=1)).astype(np.int32)
        for pattern, members in _group_rows(present[walks]):
            yield key, walks[members], np.flatnonzero(pattern).astype(np.int32)


def _group_rows(
    present: NDArray[np.bool_],
) -> Iterator[tuple[NDArray[np.bool_], NDArray[np.intp]]]:
    """Rows of a table of flags that are equal, as (row, indices)."""
    if (present == present[:1]).all():
        yield present[0], np.arange(len(present))
        return
    patterns, which = np.unique(present, axis=0, return_inverse=True)
    for number, pattern in enumerate(patterns):
        yield pattern, np.flatnonzero(which.ravel() == number)
