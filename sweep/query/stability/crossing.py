"""Where the spectral radius crosses the threshold inside one cell.

Along an axis the radius is the largest of several smooth branches, one for each closed-loop
eigenvalue and, after a worst case, for each tolerance node. Inside a cell it is mostly one branch,
with kinks in cells nearby, so the interpolating polynomial takes its nodes from the side where the
divided differences are small (essentially non-oscillatory interpolation) and from the nodes of the
same branch: those with the same worst tolerance node whose dominant eigenvalue is the same one, as
far as its angle can tell. Where the branches meet inside the cell itself, each side is continued
from its own nodes and the larger of the two counts, as it does in the radius.

One branch is interpolated in more than one way, and the answer stands that its last node moved
least:

- the logarithm of the radius over the coordinate;
- the radius less one over the coordinate: the logarithm plunges towards a deadbeat node and drags
  the polynomial with it, the radius does not;
- along a real branch the coordinate over the eigenvalue. Where two real eigenvalues meet, their
  slope along the axis is infinite, and a polynomial over the coordinate feels it from some cells
  away. The other way round nothing happens there: an eigenvalue z solves F(x, z) = 0, so that x is
  a smooth function of z (of a controller gain even a rational one) wherever F depends on x.

Whatever the polynomials say, the crossing lies between the two nodes of its cell: a root is
bracketed by them from the first step to the last, and a coordinate beyond them is never taken.

References
----------
A. Harten, B. Engquist, S. Osher, S. Chakravarthy, Uniformly high order accurate essentially
non-oscillatory schemes III, Journal of Computational Physics 71 (1987), 231-303.
A. Harten, ENO schemes with subcell resolution, Journal of Computational Physics 83 (1989), 148-184.
J. F. Traub, Iterative Methods for the Solution of Equations (1964), on inverse interpolation.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Curve = Callable[[float], float]
Window = tuple[int, int]
"""First and last of consecutive nodes."""

REACH = 4
"""Nodes on either side of the cell's ends that interpolation may look at."""

DEGREE = 4
"""Highest degree of the interpolating polynomial."""

ANGLE_STEP = 0.2
"""Neighbouring nodes whose dominant angles differ by more, rad, are taken as different branches."""

REAL_ANGLE = 1e-6
"""An angle this close to 0 or pi, rad, belongs to a real eigenvalue: float32 resolves pi to 2.4e-7,
and an oscillation of over six million samples a cycle is drift to any engineer."""

NEAR_ZERO = -1.0
"""Below this log_radius a real eigenvalue may pass 0 on its way to the next node."""

HIGHEST = 50.0
"""A larger log_radius counts as this one, so that its exponential stays far from overflow."""

KINK_SHARE = 0.02
"""A side falls short when its continuation misses the far node by more than this share of the
cell's change."""

HALVINGS = 50
"""Bisection steps; the bracket ends at the resolution of float64 in any cell."""


def find_crossing(
    x: FloatArray,
    f: FloatArray,
    angle: FloatArray,
    which: NDArray[np.integer],
    cell: int,
    threshold: float,
) -> float:
    """Where ``f`` crosses ``threshold`` between nodes ``cell`` and ``cell + 1``.

    Parameters
    ----------
    x
        Shape (n,), increasing coordinates of consecutive nodes that one formula may join.
    f
        Shape (n,), log_radius at them; finite except perhaps +inf.
    angle
        Shape (n,), rad: argument of the dominant eigenvalue; NaN where it is not known.
    which
        Shape (n,): the tolerance node where ``f`` is reached, by any number that tells them apart.
    cell
        Index of the cell's lower node; exactly one of its two nodes lies below the threshold.
    threshold
        Level that is crossed.

    Returns
    -------
    A coordinate in [x[cell], x[cell + 1]].

    Examples
    --------
    >>> x = np.linspace(0.0, 1.0, 6)
    >>> f = np.log1p(x - 0.47)
    >>> one = np.zeros(6, dtype=np.int64)
    >>> round(find_crossing(x, f, np.zeros(6), one, 2, 0.0), 12)
    0.47
    """
    low, high = cell, cell + 1
    stable_low = bool(f[low] < threshold)
    if not (math.isfinite(f[low]) and math.isfinite(f[high])):
        return float(x[low] if stable_low else x[high])
    branches = _Branches(f, angle, which)
    window = branches.around(low)
    excess, level = np.expm1(np.minimum(f, HIGHEST)), math.expm1(threshold)
    inverse: list[_Answer] = []
    if branches.join(low, high):
        if is_real(angle[low]) and is_real(angle[high]):
            excess = _along_real_line(excess, angle, high if stable_low else low)
            inverse = _over_eigenvalue(x, excess, low, window, level)
    else:
        pair = _two_sides(x, f, low, window, threshold)
        if pair is not None:
            return pair
        window = branches.finite_around(low)
    radius = _over_coordinate(x, excess, low, window, level)
    logarithm = _over_coordinate(x, f, low, window, threshold)
    return min(radius, logarithm, *inverse, key=lambda answer: answer.correction).at


def is_real(angle: float) -> bool:
    """Whether an eigenvalue with this argument, rad, is real as far as float32 can tell."""
    return abs(angle) < REAL_ANGLE or math.pi - abs(angle) < REAL_ANGLE


@dataclass(frozen=True)
class _Branches:
    """Which neighbouring nodes belong to one smooth branch."""

    f: FloatArray
    """Shape (n,), log_radius."""
    angle: FloatArray
    """Shape (n,), rad; NaN where unknown, which is taken to continue any branch."""
    which: NDArray[np.integer]
    """Shape (n,), the worst tolerance node."""

    def join(self, a: int, b: int) -> bool:
        """Whether the branch of node ``a`` is that of its neighbour ``b``."""
        angle_a, angle_b = self.angle[a], self.angle[b]
        if self.which[a] != self.which[b]:
            return False
        if math.isnan(angle_a) or math.isnan(angle_b):
            return True
        if is_real(angle_a) != is_real(angle_b):
            return False
        through_zero = is_real(angle_a) and min(self.f[a], self.f[b]) < NEAR_ZERO
        return through_zero or bool(abs(angle_a - angle_b) <= ANGLE_STEP)

    def around(self, low: int) -> Window:
        """The nodes that the branch at each end of the cell reaches on its own side."""
        return self._reach(low, lambda a, b: self._finite(a, b) and self.join(a, b))

    def finite_around(self, low: int) -> Window:
        """The nodes around the cell up to the first that is not finite."""
        return self._reach(low, self._finite)

    def _finite(self, a: int, b: int) -> bool:
        return math.isfinite(self.f[a]) and math.isfinite(self.f[b])

    def _reach(self, low: int, joins: Callable[[int, int], bool]) -> Window:
        first, last = low, low + 1
        while first > 0 and joins(first - 1, first):
            first -= 1
        while last < len(self.f) - 1 and joins(last, last + 1):
            last += 1
        return first, last


def _along_real_line(excess: FloatArray, angle: FloatArray, crossing: int) -> FloatArray:
    """Radius less one, counted along the real line towards the eigenvalue of node ``crossing``.

    An eigenvalue on the other side of zero counts as a negative radius, so that a branch through
    zero has no kink there.
    """
    opposite = np.abs(np.abs(angle) - abs(angle[crossing])) > 1.0
    return np.where(opposite, -2.0 - excess, excess)


@dataclass(frozen=True)
class _Answer:
    """A crossing with a measure of how far it can be trusted."""

    at: float
    """Coordinate."""
    correction: float
    """How far the last node of the stencil moved it; infinite without a node beside the cell's."""


def _over_coordinate(
    x: FloatArray, values: FloatArray, low: int, window: Window, level: float
) -> _Answer:
    """The crossing of the polynomial over the coordinate."""
    stencil = _smoothest_stencil(x, values, low, window)
    ends = float(x[low]), float(x[low + 1])
    at = _bisect(_polynomial(x, values, stencil), *ends, bool(values[low] < level), level)
    slope = abs(values[low + 1] - values[low]) / (x[low + 1] - x[low])
    return _Answer(at, _last_correction(x, values, low, stencil, at) / slope)


def _over_eigenvalue(
    x: FloatArray, excess: FloatArray, low: int, window: Window, level: float
) -> list[_Answer]:
    """The crossing of the polynomial over the real eigenvalue, unless it lies outside the cell."""
    first, last = _monotone_window(excess, low, window)
    part = slice(first, last + 1)
    radii, places = excess[part], x[part]
    stencil = _smoothest_stencil(radii, places, low - first, (0, last - first))
    at = _polynomial(radii, places, stencil)(level)
    if not x[low] <= at <= x[low + 1]:
        return []
    return [_Answer(at, _last_correction(radii, places, low - first, stencil, level))]


def _monotone_window(excess: FloatArray, low: int, window: Window) -> Window:
    """The part of a window around a cell where the values keep rising, or keep falling, with x."""
    steps = np.diff(excess) * (excess[low + 1] - excess[low]) > 0
    first, last = low, low + 1
    while first > window[0] and steps[first - 1]:
        first -= 1
    while last < window[1] and steps[last]:
        last += 1
    return first, last


def _differences(x: FloatArray, f: FloatArray) -> FloatArray:
    """Newton's divided differences: f[x0], f[x0, x1] and so on."""
    table = f.astype(np.float64, copy=True)
    for order in range(1, len(x)):
        table[order:] = (table[order:] - table[order - 1 : -1]) / (x[order:] - x[:-order])
    return table


def _polynomial(x: FloatArray, f: FloatArray, stencil: Window) -> Curve:
    part = slice(stencil[0], stencil[1] + 1)
    nodes: Sequence[float] = x[part].tolist()
    weights: Sequence[float] = _differences(x[part], f[part]).tolist()

    def value(at: float) -> float:
        total = weights[-1]
        for node, weight in zip(nodes[-2::-1], weights[-2::-1], strict=True):
            total = total * (at - node) + weight
        return total

    return value


def _smoothest_stencil(x: FloatArray, f: FloatArray, low: int, window: Window) -> Window:
    """Grow the cell, node by node, towards the side with the smaller divided difference."""
    first, last = low, low + 1
    while last - first < DEGREE:
        left = right = math.inf
        if first > window[0]:
            left = abs(_differences(x[first - 1 : last + 1], f[first - 1 : last + 1])[-1])
        if last < window[1]:
            right = abs(_differences(x[first : last + 2], f[first : last + 2])[-1])
        if math.isinf(left) and math.isinf(right):
            break
        if left <= right:
            first -= 1
        else:
            last += 1
    return first, last


def _last_correction(x: FloatArray, f: FloatArray, low: int, stencil: Window, at: float) -> float:
    """How far the stencil's node farthest from the cell moves the polynomial's value."""
    first, last = stencil
    if last - first < 2:
        return math.inf
    shorter = (first + 1, last) if low - first > last - low - 1 else (first, last - 1)
    return abs(_polynomial(x, f, stencil)(at) - _polynomial(x, f, shorter)(at))


def _two_sides(
    x: FloatArray, f: FloatArray, low: int, window: Window, threshold: float
) -> float | None:
    """Where the larger of both sides' continuations crosses, if two branches meet in the cell.

    They do when each side, continued to the other side's node, falls short of what stands there.
    """
    high = low + 1
    first, last = max(window[0], low - 2), min(window[1], high + 2)
    if first == low or last == high:
        return None
    level = threshold
    if f[first : last + 1].min() < NEAR_ZERO:
        f, level = np.expm1(np.minimum(f, HIGHEST)), math.expm1(threshold)
    left, right = _polynomial(x, f, (first, low)), _polynomial(x, f, (high, last))
    margin = KINK_SHARE * abs(f[high] - f[low])
    if left(x[high]) > f[high] - margin or right(x[low]) > f[low] - margin:
        return None
    ends = float(x[low]), float(x[high])
    return _bisect(lambda at: max(left(at), right(at)), *ends, bool(f[low] < level), level)


def _bisect(curve: Curve, low: float, high: float, stable_low: bool, level: float) -> float:
    """Halve the bracket; the side that is stable stays the side that is stable."""
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        if (curve(middle) < level) == stable_low:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)
