"""One loop's arithmetic: realised coefficients and closed-loop modes of a single node."""

from __future__ import annotations

import cmath
import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from sweep.loop.bounded import FloatArray
from sweep.loop.controllers import realise_controller
from sweep.loop.sampling import Polynomial, sample_plant
from sweep.loop.state_space import closed_loop_change
from sweep.vocabulary import STABILITY_THRESHOLD, LoopStructure


@dataclass(frozen=True, eq=False)
class Realised:
    """The difference equations of one loop, polynomials in z with the highest power first."""

    plant_numerator: FloatArray
    """Of the sampled plant, delay apart."""
    plant_denominator: FloatArray
    """Of the sampled plant, delay apart; monic."""
    whole_delay: int
    """Further power of z in the plant's denominator."""
    controller_numerator: FloatArray
    """Of C(z) in U(z) = -C(z) Y(z)."""
    controller_denominator: FloatArray
    """Of C(z); monic."""


@dataclass(frozen=True)
class Mode:
    """One closed-loop eigenvalue and what it means in time."""

    eigenvalue: complex
    """z, per sample."""
    magnitude: float
    """|z|; below 1 it decays."""
    frequency_hz: float
    """Of its oscillation, Hz, 0 to half the sample rate."""
    damping: float
    """Damping ratio of the continuous mode with the same samples; 1 for an eigenvalue at 0."""
    decay_time_s: float
    """Time constant of its decay, s; +inf when it is not stable, 0 for an eigenvalue at 0."""


def realise(structure: LoopStructure, values: Mapping[str, float]) -> Realised:
    """Coefficients -> difference equations of one node.

    Parameters
    ----------
    structure
        The loop's kinds and options.
    values
        Every parameter by dotted path, SI units (delay parts in their own).
    """
    arrays = {path: np.array([value], dtype=np.float64) for path, value in values.items()}
    plant = sample_plant(structure, arrays)
    controller = realise_controller(structure, arrays)
    numerator_powers = plant.order + bool(plant.fractional[0])
    delays = int(controller.whole_delay[0])
    denominator = _in_z(controller.denominator, int(controller.order[0]) + 1)
    return Realised(
        plant_numerator=_in_z(plant.numerator, numerator_powers),
        plant_denominator=_in_z(plant.denominator, plant.order + 1),
        whole_delay=int(plant.whole_delay[0]),
        controller_numerator=_in_z(controller.numerator, int(controller.numerator_degree[0]) + 1),
        controller_denominator=np.concatenate([denominator, np.zeros(delays)]),
    )


def _in_z(polynomial: Polynomial, count: int) -> FloatArray:
    """The first ``count`` coefficients in delta, lowest first, as z's, highest first."""
    in_z = np.zeros(count)
    for coefficient in reversed(polynomial[:count]):
        in_z = np.append(in_z[1:], 0.0) - in_z
        in_z[-1] += coefficient.value.ravel()[0]
    return in_z


def modes(structure: LoopStructure, values: Mapping[str, float]) -> list[Mode]:
    """Every closed-loop eigenvalue of one node, hidden ones included, the dominant one first.

    Parameters
    ----------
    structure
        The loop's kinds and options.
    values
        Every parameter by dotted path, SI units (delay parts in their own).
    """
    eigenvalues = 1 + np.linalg.eigvals(closed_loop_change(structure, values))
    period_s = values["sample_period"]
    found = [_describe(complex(value), period_s) for value in eigenvalues]
    return sorted(found, key=lambda mode: (-round(mode.magnitude, 12), -mode.eigenvalue.imag))


def _describe(eigenvalue: complex, period_s: float) -> Mode:
    magnitude = abs(eigenvalue)
    if magnitude == 0:
        return Mode(eigenvalue, 0.0, 0.0, 1.0, 0.0)
    logarithm = cmath.log(eigenvalue)
    stable = logarithm.real < STABILITY_THRESHOLD
    return Mode(
        eigenvalue=eigenvalue,
        magnitude=magnitude,
        frequency_hz=abs(logarithm.imag) / (2 * math.pi * period_s),
        damping=-logarithm.real / abs(logarithm) if logarithm else 0.0,
        decay_time_s=-period_s / logarithm.real if stable else math.inf,
    )
