"""What follows from stored measures and coordinates: decay time, damping ratio, radius.

A derived quantity is never stored. `values_of` gives any quantity, stored or derived, over a block
of nodes; whether less or more of it is better stands in the vocabulary.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.vocabulary import DERIVED, MEASURES, STABILITY_THRESHOLD, MeasureSpec

UNBOUNDED = 1e100
"""Beyond every float32, and its square is a float64."""

Block = NDArray[Any]
"""Values over a block of nodes, float32 as stored or float64."""


@dataclass(frozen=True)
class Formula:
    """How a derived quantity comes from stored measures."""

    needs: tuple[str, ...]
    """Stored measures."""
    uses_period: bool
    """Whether the sample period plays a part."""
    compute: Callable[[Mapping[str, Block], Block], Block]
    """(measures, sample period in s) -> values, float64; NaN where a measure is."""
    follows: str = ""
    """The stored measure of which it is an increasing function at any one sample period; empty
    when there is none."""


def _radius(measures: Mapping[str, Block], _period_s: Block) -> Block:
    radius: Block = np.exp(measures["log_radius"].astype(np.float64))
    return radius


def _decay_time(measures: Mapping[str, Block], period_s: Block) -> Block:
    log_radius = measures["log_radius"].astype(np.float64)
    endless = log_radius >= STABILITY_THRESHOLD
    decay_s: Block = np.negative(log_radius, out=log_radius)
    with np.errstate(divide="ignore"):
        np.divide(period_s, decay_s, out=decay_s)
    np.copyto(decay_s, np.inf, where=endless)
    return decay_s


def _dominant_damping(measures: Mapping[str, Block], _period_s: Block) -> Block:
    # an unbounded log_radius stands for its limit, a ratio of -1 or 1
    log_radius = np.clip(measures["log_radius"].astype(np.float64), -UNBOUNDED, UNBOUNDED)
    angle = measures["mode_angle"].astype(np.float64)
    # neither square can overflow or vanish: both numbers were float32
    size = np.sqrt(log_radius * log_radius + angle * angle)
    ratio: Block = -log_radius / np.where(size == 0.0, 1.0, size)
    return ratio


FORMULAS: dict[str, Formula] = {
    "radius": Formula(("log_radius",), False, _radius, "log_radius"),
    "decay_time": Formula(("log_radius",), True, _decay_time, "log_radius"),
    "dominant_damping": Formula(("log_radius", "mode_angle"), False, _dominant_damping),
}
"""By name of the derived quantity; a test holds it to `sweep.vocabulary.DERIVED`."""


def spec_of(quantity: str) -> MeasureSpec:
    """The description of a stored or derived quantity; `KeyError` when there is none."""
    return DERIVED[quantity] if quantity in DERIVED else MEASURES[quantity]


def measures_needed(quantity: str) -> tuple[str, ...]:
    """The stored measures that a quantity rests on.

    >>> measures_needed("dominant_damping"), measures_needed("log_radius")
    (('log_radius', 'mode_angle'), ('log_radius',))
    """
    return FORMULAS[quantity].needs if quantity in FORMULAS else (quantity,)


def values_of(quantity: str, measures: Mapping[str, Block], period_s: Block) -> Block:
    """A quantity over a block of nodes.

    Parameters
    ----------
    quantity
        Name of a stored or derived quantity.
    measures
        The stored measures that it needs, of one shape.
    period_s
        Sample period, s; broadcasts to that shape.

    Returns
    -------
    The stored values as they are, or derived ones as float64; NaN where a measure is unknown.
    """
    if quantity in FORMULAS:
        return FORMULAS[quantity].compute(measures, period_s)
    return measures[quantity]


def derive(log_radius: float, mode_angle_rad: float, period_s: float) -> dict[str, float]:
    """What follows from the stored measures of one node.

    Parameters
    ----------
    log_radius
        Logarithm of the spectral radius; NaN when unknown.
    mode_angle_rad
        Argument of the dominant eigenvalue, rad per sample.
    period_s
        Sample period, s.

    Returns
    -------
    ``radius``; ``decay_time`` in s, +inf when not stable; ``dominant_damping``, the damping ratio
    of the dominant eigenvalue; ``hz``, the frequency of the dominant mode. All are NaN when the
    measures are.

    Examples
    --------
    >>> found = derive(-0.01, 0.1, 0.002)
    >>> round(found["decay_time"], 12), round(found["hz"], 3)
    (0.2, 7.958)
    """
    measures = {"log_radius": np.array(log_radius), "mode_angle": np.array(mode_angle_rad)}
    found = {
        name: float(formula.compute(measures, np.array(period_s)))
        for name, formula in FORMULAS.items()
    }
    return found | {"hz": abs(mode_angle_rad) / (2 * math.pi * period_s)}
