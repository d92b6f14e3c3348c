"""Exact sampling: a plant behind a delayed zero-order hold, as polynomials in delta = z - 1.

The hold switches to u_k at kT + τ. With d = floor(τ/T) and f = τ/T - d the sampled plant is

    x_{k+1} = Φ x_k + Γ1 u_{k-d-1} + Γ0 u_{k-d},   Γ0 over the last (1 - f) T of the period.

Written in delta = z - 1 instead of z, every coefficient below is a sum of terms of one sign while
the sampling is fast, so that no digits are lost when the eigenvalues crowd at z = 1.

With S(t) and R(t) the impulse and step response of 1 / (s^2 + damping s + stiffness), m = (1 - f) T
and Q(m) = S(m) S(T) + R(m) (stiffness R(T) + damping S(T)), a second-order plant samples to

    denominator   delta^2 + (2 stiffness R(T) + damping S(T)) delta + stiffness Q(T)
    numerator     b (R(m) delta^2 + (R(T) + Q(m)) delta + Q(T))         over z^(d+1), f > 0
                  b (R(T) delta + Q(T))                                 over z^d,     f = 0

References
----------
Åström, K. J., Wittenmark, B. (1997), Computer-Controlled Systems, 3rd ed., chapter 2, sampling of
systems with time delay. Jury, E. I. (1964), Theory and Application of the z-Transform Method,
modified z-transform. Middleton, R. H., Goodwin, G. C. (1986), IEEE Trans. Automatic Control 31,
1015-1021, delta operator.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.loop.bounded import UNIT_ROUNDOFF, Bounded, FloatArray, series
from sweep.loop.plants import NORMAL_FORMS, FirstOrder, SecondOrder
from sweep.vocabulary import LoopStructure

WHOLE_SAMPLE_TOLERANCE = 1e-12
"""A delay within this of a whole number of samples is that number."""

Polynomial = list[Bounded]
"""Coefficients in delta, lowest power first, arrays that broadcast together."""


@dataclass(frozen=True, eq=False)
class SampledPlant:
    """The plant between the controller's output and its input, delay included."""

    numerator: Polynomial
    """One coefficient more than the order; the highest is 0 where the delay is whole."""
    denominator: Polynomial
    """Monic, of the plant's order."""
    whole_delay: NDArray[np.int64]
    """Power of z in the denominator beside the polynomial: d, or d + 1 with a fraction."""
    fractional: NDArray[np.bool_]
    """Whether the hold switches inside the period."""

    @property
    def order(self) -> int:
        """Order of the plant without its delay."""
        return len(self.denominator) - 1


@dataclass(frozen=True, eq=False)
class Delay:
    """A delay as whole samples and a fraction."""

    whole: NDArray[np.int64]
    """d = floor(τ/T)."""
    fraction: Bounded
    """f = τ/T - d, in [0, 1)."""


def split_delay(structure: LoopStructure, parameters: Mapping[str, FloatArray]) -> Delay:
    """Sum the delay parts and split them at the sample period.

    Parameters
    ----------
    structure
        Which parts there are and in which unit, ``s`` or ``samples``.
    parameters
        ``sample_period`` > 0 in s and every ``delay.*`` at least 0, arrays that broadcast.
    """
    samples, seconds = Bounded.exact(0.0), Bounded.exact(0.0)
    for name, unit in structure.delay_parts:
        part = Bounded.exact(parameters[f"delay.{name}"])
        if unit == "samples":
            samples = samples + part
        else:
            seconds = seconds + part
    total = samples + seconds / Bounded.exact(parameters["sample_period"])
    nearest = np.round(total.value)
    is_whole = np.abs(total.value - nearest) <= WHOLE_SAMPLE_TOLERANCE
    whole = np.where(is_whole, nearest, np.floor(total.value))
    fraction = (total - Bounded.exact(whole)).where(~is_whole, Bounded.exact(0.0))
    return Delay(whole.astype(np.int64), fraction)


def sample_plant(structure: LoopStructure, parameters: Mapping[str, FloatArray]) -> SampledPlant:
    """Sample the plant behind its delay, exactly.

    Parameters
    ----------
    structure
        The kinds.
    parameters
        ``sample_period``, ``plant.*`` and ``delay.*`` by dotted path in SI units, arrays that
        broadcast together; the result has their joint shape.
    """
    plant = NORMAL_FORMS[structure.plant](parameters)
    delay = split_delay(structure, parameters)
    period = Bounded.exact(parameters["sample_period"])
    switched = period * (1 - delay.fraction)
    fractional = delay.fraction.value != 0
    sample = _sample_first_order if isinstance(plant, FirstOrder) else _sample_second_order
    numerator, denominator = sample(plant, period, switched, fractional)  # type: ignore[arg-type]
    return SampledPlant(numerator, denominator, delay.whole + fractional, fractional)


def _sample_first_order(
    plant: FirstOrder, period: Bounded, switched: Bounded, fractional: NDArray[np.bool_]
) -> tuple[Polynomial, Polynomial]:
    zero, one = Bounded.exact(0.0), Bounded.exact(1.0)

    def step(time: Bounded) -> Bounded:
        return time * _phi(plant.a * time)

    numerator = [plant.b * step(period), (plant.b * step(switched)).where(fractional, zero)]
    return numerator, [plant.a * step(period), one]


def _sample_second_order(
    plant: SecondOrder, period: Bounded, switched: Bounded, fractional: NDArray[np.bool_]
) -> tuple[Polynomial, Polynomial]:
    zero, one = Bounded.exact(0.0), Bounded.exact(1.0)
    impulse, step = _responses(plant, period)
    late_impulse, late_step = _responses(plant, switched)
    drag = plant.stiffness * step + plant.damping * impulse
    at_rest = impulse * impulse + step * drag
    late_at_rest = late_impulse * impulse + late_step * drag
    numerator = [
        plant.b * at_rest,
        plant.b * (step + late_at_rest.where(fractional, zero)),
        (plant.b * late_step).where(fractional, zero),
    ]
    denominator = [plant.stiffness * at_rest, plant.stiffness * step + drag, one]
    return numerator, denominator


def _responses(plant: SecondOrder, time: Bounded) -> tuple[Bounded, Bounded]:
    """Impulse response S and step response R of 1 / (s^2 + damping s + stiffness) at ``time``."""
    is_complex = plant.ringing.value > 0
    if is_complex.all():
        return _complex_responses(plant, time)
    if not is_complex.any():
        return _real_responses(plant, time)
    # each branch is evaluated everywhere, on poles of its own kind where they are not these
    one = Bounded.exact(1.0)
    ringing = plant.ringing.where(is_complex, one)
    stiffness = plant.stiffness.where(is_complex, one)
    complex_plant = SecondOrder(
        plant.slow, plant.gap, plant.decay, ringing, plant.damping, stiffness, plant.b
    )
    pairs = zip(_complex_responses(complex_plant, time), _real_responses(plant, time), strict=True)
    impulse, step = (first.where(is_complex, second) for first, second in pairs)
    return impulse, step


def _complex_responses(plant: SecondOrder, time: Bounded) -> tuple[Bounded, Bounded]:
    x, angle = plant.decay * time, plant.ringing * time
    fading = (-x).exp()
    half = (0.5 * angle).sin()
    impulse = fading * angle.sin() / plant.ringing
    scaled_step = x * x * _settling(x) + fading * (x * _sinc_deficit(angle) + 2 * (half * half))
    return impulse, scaled_step / plant.stiffness


def _real_responses(plant: SecondOrder, time: Bounded) -> tuple[Bounded, Bounded]:
    x, spread = plant.slow * time, plant.gap * time
    fading = (-x).exp()
    impulse = time * fading * _phi(spread)
    fast = plant.slow + plant.gap
    apart = fast.value > 0
    safe = fast.where(apart, Bounded.exact(1.0))
    mixed = _settling(x) * (plant.slow / safe) + fading * _ramp(spread) * (plant.gap / safe)
    return impulse, time * time * mixed.where(apart, Bounded.exact(0.5))


# Entire functions that start at a finite value, each by its series below 1 and directly above:
# there the direct form loses at most two bits.

_TERMS = 20


def _phi(x: Bounded) -> Bounded:
    """(1 - e^-x) / x for x >= 0, starting at 1."""
    direct = -((-x).expm1()) / _above_one(x)
    return _by_series(x, tuple((-1.0) ** k / math.factorial(k + 1) for k in range(_TERMS)), direct)


def _ramp(x: Bounded) -> Bounded:
    """(e^-x - 1 + x) / x^2 for x >= 0, starting at 1/2."""
    above = _above_one(x)
    direct = ((-x).expm1() + x) / (above * above)
    return _by_series(x, tuple((-1.0) ** k / math.factorial(k + 2) for k in range(_TERMS)), direct)


def _settling(x: Bounded) -> Bounded:
    """(1 - (1 + x) e^-x) / x^2 for x >= 0, starting at 1/2."""
    above = _above_one(x)
    direct = (1 - (1 + x) * (-x).exp()) / (above * above)
    terms = tuple((-1.0) ** k * (k + 1) / math.factorial(k + 2) for k in range(_TERMS))
    return _by_series(x, terms, direct)


def _sinc_deficit(angle: Bounded) -> Bounded:
    """1 - sin(angle) / angle for angle >= 0, starting at 0."""
    direct = 1 - angle.sin() / _above_one(angle)
    square = angle * angle
    terms = tuple((-1.0) ** k / math.factorial(2 * k + 3) for k in range(_TERMS // 2))
    return (square * _short_series(square, terms)).where(angle.value < 1, direct)


def _above_one(x: Bounded) -> Bounded:
    return x.where(x.value >= 1, Bounded.exact(1.0))


def _by_series(x: Bounded, terms: tuple[float, ...], direct: Bounded) -> Bounded:
    return _short_series(x, terms).where(x.value < 1, direct)


def _short_series(x: Bounded, terms: tuple[float, ...]) -> Bounded:
    # beyond 1 the series is not used; keep it finite there
    inside = x.where(x.value < 1, Bounded.exact(1.0))
    return series(inside, terms, UNIT_ROUNDOFF)
