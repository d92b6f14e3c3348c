"""The plants: from a kind's parameters to its differential equation.

Every kind here is of first or second order and is brought to one of two normal forms, from which
`sweep.loop.sampling` samples it exactly. A new kind of that sort is one more function and one more
entry in `NORMAL_FORMS`, besides its description in `sweep.vocabulary.PLANTS`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from sweep.loop.bounded import Bounded, FloatArray

PI_ERROR = 1.2246467991473532e-16
"""How far the double nearest to pi lies below it; the next digits of pi."""


@dataclass(frozen=True, eq=False)
class FirstOrder:
    """The plant y' + a y = b u."""

    a: Bounded
    """1/s, at least 0."""
    b: Bounded
    """1/s per unit of gain."""

    order = 1


@dataclass(frozen=True, eq=False)
class SecondOrder:
    """The plant y'' + damping y' + stiffness y = b u, with its poles written out.

    Two real poles lie at -slow and -(slow + gap); a complex pair at -decay ± j ringing. Where
    ``ringing`` is 0 the poles are real.
    """

    slow: Bounded
    """Slower real pole's rate, 1/s, at least 0."""
    gap: Bounded
    """How much faster the other real pole is, 1/s, at least 0."""
    decay: Bounded
    """Rate of decay of the complex pair, 1/s, at least 0."""
    ringing: Bounded
    """Frequency of the complex pair, rad/s, at least 0."""
    damping: Bounded
    """Sum of the poles' rates, 1/s."""
    stiffness: Bounded
    """Product of the poles' rates, 1/s^2."""
    b: Bounded
    """1/s^2 per unit of gain."""

    order = 2


NormalForm = FirstOrder | SecondOrder


def _oscillator(parameters: Mapping[str, FloatArray]) -> SecondOrder:
    two_pi = Bounded(np.asarray(2 * np.pi), np.asarray(2 * PI_ERROR))
    wn = two_pi * Bounded.exact(parameters["plant.natural_frequency"])
    ratio = np.asarray(parameters["plant.damping"], dtype=np.float64)
    zeta, complex_pair = Bounded.exact(ratio), ratio < 1
    signed = (1 - zeta) * (1 + zeta)
    root = Bounded(np.abs(signed.value), signed.error).sqrt()
    zero, stiffness = Bounded.exact(0.0), wn * wn
    return SecondOrder(
        slow=zero.where(complex_pair, wn / (zeta + root)),
        gap=zero.where(complex_pair, 2 * (wn * root)),
        decay=(zeta * wn).where(complex_pair, zero),
        ringing=(wn * root).where(complex_pair, zero),
        damping=2 * (zeta * wn),
        stiffness=stiffness,
        b=Bounded.exact(parameters["plant.gain"]) * stiffness,
    )


def _free_integrator(rate: Bounded, b: Bounded) -> SecondOrder:
    """A pole at 0 and one at -rate."""
    zero = Bounded.exact(0.0)
    return SecondOrder(zero, rate, zero, zero, rate, zero, b)


def _integrator(parameters: Mapping[str, FloatArray]) -> FirstOrder:
    return FirstOrder(Bounded.exact(0.0), Bounded.exact(parameters["plant.gain"]))


def _double_integrator(parameters: Mapping[str, FloatArray]) -> SecondOrder:
    return _free_integrator(Bounded.exact(0.0), Bounded.exact(parameters["plant.gain"]))


def _lag(parameters: Mapping[str, FloatArray]) -> FirstOrder:
    rate = Bounded.exact(1.0) / Bounded.exact(parameters["plant.time_constant"])
    return FirstOrder(rate, Bounded.exact(parameters["plant.gain"]) * rate)


def _lagged_integrator(parameters: Mapping[str, FloatArray]) -> SecondOrder:
    rate = Bounded.exact(1.0) / Bounded.exact(parameters["plant.time_constant"])
    return _free_integrator(rate, Bounded.exact(parameters["plant.gain"]) * rate)


NORMAL_FORMS: dict[str, Callable[[Mapping[str, FloatArray]], NormalForm]] = {
    "oscillator": _oscillator,
    "integrator": _integrator,
    "double_integrator": _double_integrator,
    "lag": _lag,
    "lagged_integrator": _lagged_integrator,
}
"""Normal form of each kind, from parameters by dotted path, arrays that broadcast together."""
