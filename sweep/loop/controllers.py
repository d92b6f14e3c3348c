"""The controllers: from gains to the difference equation that the firmware holds.

With e the error, Tc the code's period and a = derivative_filter / (Tc + derivative_filter), one
pass of the code is, for each term that is present,

    proportional   p = kp * e
    integral       i += ki * Tc * e;  u = p + i                        backward (the default)
                   u = p + i;  i += ki * Tc * e                        forward
                   u = p + i + ki * Tc * e / 2;  i += ki * Tc * e      trapezoidal
    derivative     v = a * v + kd / (Tc + derivative_filter) * (e - e_before);  u += v

and e = -y: negative feedback for a positive kp. Tc is the sample period unless a ``code_period`` is
given: then it is the period that the coefficients were made with, whatever the loop's own is.

A term whose gain is exactly 0 is absent together with its memory: ki = 0 leaves no eigenvalue at 1.
"""

from __future__ import annotations

import itertools
import operator
from collections.abc import Mapping
from dataclasses import dataclass
from functools import reduce

import numpy as np
from numpy.typing import NDArray

from sweep.loop.bounded import Bounded, FloatArray
from sweep.loop.sampling import Polynomial
from sweep.vocabulary import LoopStructure

INTEGRAL_WEIGHTS = {"backward": 1.0, "forward": 0.0, "trapezoidal": 0.5}
"""Share of this pass's error that the integral already contains when it is used."""


@dataclass(frozen=True, eq=False)
class RealisedController:
    """C(z) as polynomials in delta = z - 1, from the measured output to minus the command."""

    numerator: Polynomial
    """Three coefficients, lowest power first."""
    denominator: Polynomial
    """Three coefficients, lowest power first; its degree is ``order``."""
    order: NDArray[np.int64]
    """Degree of the denominator: an integral and a filtered derivative add 1 each."""
    numerator_degree: NDArray[np.int64]
    """Degree of the numerator: an integral and a derivative add 1 each."""
    whole_delay: NDArray[np.int64]
    """Power of z in the denominator beside the polynomial: 1 with an unfiltered derivative."""


def code_period(structure: LoopStructure, parameters: Mapping[str, FloatArray]) -> FloatArray:
    """The period, s, that the code's coefficients assume."""
    path = "controller.code_period" if structure.has_code_period else "sample_period"
    return parameters[path]


def realise_controller(
    structure: LoopStructure, parameters: Mapping[str, FloatArray]
) -> RealisedController:
    """Turn gains into the coefficients of the difference equation.

    Parameters
    ----------
    structure
        The controller's kind and integral rule.
    parameters
        ``sample_period`` (or ``controller.code_period``) and ``controller.*`` by dotted path, in
        SI units, arrays that broadcast together.
    """
    zero = np.zeros(1)
    gains = {name: parameters.get(f"controller.{name}", zero) for name in ("kp", "ki", "kd")}
    filter_s = parameters.get("controller.derivative_filter", zero)
    period = Bounded.exact(code_period(structure, parameters))
    has_integral, has_derivative = gains["ki"] != 0, gains["kd"] != 0
    has_filter = has_derivative & (filter_s != 0)

    width = period + Bounded.exact(filter_s)
    integral_gain = Bounded.exact(gains["ki"]) * period
    derivative_gain = Bounded.exact(gains["kd"]) / width
    one, nothing = Bounded.exact(1.0), Bounded.exact(0.0)
    corner = (period / width).where(has_filter, one)
    integral_pole = [nothing.where(has_integral, one), one.where(has_integral, nothing)]
    derivative_pole = [corner, one.where(has_derivative, nothing)]
    filter_pole = [corner, one.where(has_filter, nothing)]

    weight = INTEGRAL_WEIGHTS[structure.integral]
    numerator = _add(
        _multiply([Bounded.exact(gains["kp"])], _multiply(integral_pole, derivative_pole)),
        _multiply([integral_gain, integral_gain * weight], derivative_pole),
        _multiply([nothing, derivative_gain], integral_pole),
    )
    integrals = has_integral.astype(np.int64)
    return RealisedController(
        numerator=numerator,
        denominator=_multiply(integral_pole, filter_pole),
        order=integrals + has_filter,
        numerator_degree=integrals + has_derivative,
        whole_delay=(has_derivative & ~has_filter).astype(np.int64),
    )


def _is_nothing(coefficient: Bounded) -> bool:
    """Whether a coefficient is 0 throughout, so that adding or multiplying it is idle."""
    return coefficient.value.size == 1 and not coefficient.value.any()


def _sum(terms: list[Bounded]) -> Bounded:
    """The sum of what is not nothing."""
    present = [term for term in terms if not _is_nothing(term)]
    return reduce(operator.add, present) if present else Bounded.exact(0.0)


def _multiply(first: Polynomial, second: Polynomial) -> Polynomial:
    terms: list[list[Bounded]] = [[] for _ in range(len(first) + len(second) - 1)]
    for (i, a), (j, b) in itertools.product(enumerate(first), enumerate(second)):
        if not (_is_nothing(a) or _is_nothing(b)):
            terms[i + j].append(a * b)
    return [_sum(power) for power in terms]


def _add(*polynomials: Polynomial) -> Polynomial:
    return [
        _sum([term for term in power if term is not None])
        for power in itertools.zip_longest(*polynomials)
    ]
