"""Arrays that carry a bound on their own rounding error.

Running error analysis: every operation adds to the bound what it may have lost, so that a formula
written once yields both a value and a bound that the exact result cannot leave.

References
----------
Higham, N. J. (2002), Accuracy and Stability of Numerical Algorithms, 2nd ed., section 3.3.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

UNIT_ROUNDOFF = 2.0**-53
"""Largest relative error of one correctly rounded operation in double precision."""

FUNCTION_ROUNDOFF = 8 * UNIT_ROUNDOFF
"""Allowed relative error of one elementary function; vectorised libraries promise 4 units in the
last place, which is 8 unit roundoffs."""


@dataclass(frozen=True, eq=False)
class Bounded:
    """Values whose exact counterparts lie within ``error`` of them.

    Examples
    --------
    >>> third = Bounded.exact(1.0) / Bounded.exact(3.0)
    >>> float(third.error) < 2e-16
    True
    """

    value: FloatArray
    """Computed values, any shape."""
    error: FloatArray
    """Bound on the absolute error, same shape, at least 0."""

    @classmethod
    def exact(cls, value: ArrayLike) -> Bounded:
        """Values taken as they are, such as parameters."""
        array = np.asarray(value, dtype=np.float64)
        return cls(array, np.zeros_like(array))

    def __add__(self, other: Bounded | float) -> Bounded:
        other = _bounded(other)
        value = self.value + other.value
        return _rounded(value, self.error + other.error)

    def __sub__(self, other: Bounded | float) -> Bounded:
        other = _bounded(other)
        value = self.value - other.value
        return _rounded(value, self.error + other.error)

    def __rsub__(self, other: float) -> Bounded:
        return _bounded(other) - self

    def __neg__(self) -> Bounded:
        return Bounded(-self.value, self.error)

    def __mul__(self, other: Bounded | float) -> Bounded:
        other = _bounded(other)
        value = self.value * other.value
        spread = (
            np.abs(self.value) * other.error
            + np.abs(other.value) * self.error
            + self.error * other.error
        )
        return _rounded(value, spread)

    __radd__ = __add__
    __rmul__ = __mul__

    def __truediv__(self, other: Bounded | float) -> Bounded:
        other = _bounded(other)
        value = self.value / other.value
        room = np.abs(other.value) - other.error
        with np.errstate(divide="ignore", invalid="ignore"):
            spread = np.where(room > 0, (self.error + np.abs(value) * other.error) / room, np.inf)
        return _rounded(value, spread)

    def apply(
        self,
        function: Callable[[FloatArray], FloatArray],
        slope: Callable[[FloatArray, FloatArray], FloatArray],
    ) -> Bounded:
        """Apply an elementary function.

        Parameters
        ----------
        function
            The function, accurate to `FUNCTION_ROUNDOFF`.
        slope
            A bound on the magnitude of its derivative over [low, high], given both ends.
        """
        value = function(self.value)
        steepest = slope(self.value - self.error, self.value + self.error)
        # an input known exactly adds nothing, even where the slope is unbounded
        spread = np.where(self.error > 0, steepest * self.error, 0.0)
        return Bounded(value, spread + FUNCTION_ROUNDOFF * np.abs(value))

    def exp(self) -> Bounded:
        """The exponential function."""
        return self.apply(np.exp, lambda _, high: np.exp(high))

    def expm1(self) -> Bounded:
        """``exp(x) - 1`` without cancellation."""
        return self.apply(np.expm1, lambda _, high: np.exp(high))

    def sin(self) -> Bounded:
        """The sine of an angle in radians."""
        return self.apply(np.sin, lambda low, _: np.ones_like(low))

    def sqrt(self) -> Bounded:
        """The square root of values of at least 0."""
        return self.apply(
            np.sqrt, lambda low, _: 0.5 / np.sqrt(np.maximum(low, np.finfo(float).tiny))
        )

    def where(self, condition: NDArray[np.bool_], other: Bounded) -> Bounded:
        """Take these values where ``condition`` holds and those of ``other`` elsewhere."""
        return Bounded(
            np.where(condition, self.value, other.value),
            np.where(condition, self.error, other.error),
        )


def _bounded(value: Bounded | float) -> Bounded:
    return value if isinstance(value, Bounded) else Bounded.exact(value)


def _rounded(value: FloatArray, error: FloatArray) -> Bounded:
    # the bound is itself computed in floating point: a few roundoffs of its own keep it a bound
    return Bounded(value, (error + UNIT_ROUNDOFF * np.abs(value)) * (1 + 8 * UNIT_ROUNDOFF))


def series(argument: Bounded, coefficients: tuple[float, ...], tail: float) -> Bounded:
    """Horner's rule for a power series with known truncation.

    Parameters
    ----------
    argument
        Where it is evaluated.
    coefficients
        Lowest power first; each is a rounded number.
    tail
        Bound on the relative truncation error over the range that the caller admits.
    """
    total = _coefficient(coefficients[-1], argument)
    for coefficient in reversed(coefficients[:-1]):
        total = total * argument + _coefficient(coefficient, argument)
    return Bounded(total.value, total.error + tail * np.abs(total.value))


def _coefficient(value: float, like: Bounded) -> Bounded:
    array = np.full_like(like.value, value)
    return Bounded(array, UNIT_ROUNDOFF * np.abs(array))
