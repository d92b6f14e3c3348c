"""Where the logarithm of the spectral radius crosses the threshold inside one cell.

Along an axis ``log_radius`` is the largest of several smooth branches, one for each closed-loop
eigenvalue (and, after a worst case, for each tolerance node). Inside a cell it is mostly one
branch, with kinks in cells nearby, so the interpolating polynomial takes its nodes from the side
where the divided differences are small (essentially non-oscillatory interpolation) and from the
nodes whose dominant eigenvalue is the same one, as far as its angle can tell. Where the branches
meet inside the cell itself, each side is continued from its own nodes and the larger of the two
counts, as it does in ``log_radius``.

Whatever the polynomial says, the crossing lies between the two nodes of its cell: the root is
bracketed by them from the first step to the last.

References
----------
A. Harten, B. Engquist, S. Osher, S. Chakravarthy, Uniformly high order accurate essentially
non-oscillatory schemes III, Journal of Computational Physics 71 (1987), 231-303.
A. Harten, ENO schemes with subcell resolution, Journal of Computational Physics 83 (1989), 148-184.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

REACH = 4
"""Nodes on either side of the cell's ends that interpolation may look at."""

DEGREE = 4
"""Highest degree of the interpolating polynomial."""

ANGLE_STEP = 0.2
"""Neighbouring nodes whose dominant angles differ by more, rad, are taken as different branches."""

REAL_ANGLE = 1e-6
"""An angle this close to 0 or pi, rad, belongs to a real eigenvalue: float32 resolves pi to 2.4e-7,
and an oscillation of over six million samples a cycle is drift to any engineer."""

KINK_SHARE = 0.02
"""A side falls short when its continuation misses the far node by more than this share of the
cell's change."""

HALVINGS = 50
"""Bisection steps; the bracket ends at the resolution of float64 in any cell."""


def find_crossing(
    x: FloatArray, f: FloatArray, angle: FloatArray, cell: int, threshold: float
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
    >>> f = np.expm1(x - 0.47)
    >>> bool(abs(find_crossing(x, f, np.zeros(6), 2, 0.0) - 0.47) < 1e-5)
    True
    """
    low, high = cell, cell + 1
    if not (math.isfinite(f[low]) and math.isfinite(f[high])):
        return float(x[low] if f[low] < threshold else x[high])
    first, last = _one_branch(f, angle, low, high)
    joined = _same_branch(angle, low, high)
    if not joined and (pair := _two_sides(x, f, first, low, high, last)) is not None:
        curve = pair
    else:
        window = (first, last) if joined else _finite_window(f, low, high)
        curve = _polynomial(x, f, *_smoothest_stencil(x, f, low, window))
    return _bisect(curve, float(x[low]), float(x[high]), f[low] < threshold, threshold)


def is_real(angle: float) -> bool:
    """Whether an eigenvalue with this argument, rad, is real as far as float32 can tell."""
    return abs(angle) < REAL_ANGLE or math.pi - abs(angle) < REAL_ANGLE


def _same_branch(angle: FloatArray, a: int, b: int) -> bool:
    if math.isnan(angle[a]) or math.isnan(angle[b]):
        return True
    return is_real(angle[a]) == is_real(angle[b]) and abs(angle[a] - angle[b]) <= ANGLE_STEP


def _one_branch(f: FloatArray, angle: FloatArray, low: int, high: int) -> tuple[int, int]:
    """The nodes around the cell that each side's branch reaches without a break."""
    first, last = low, high
    while first > 0 and math.isfinite(f[first - 1]) and _same_branch(angle, first - 1, first):
        first -= 1
    while last < len(f) - 1 and math.isfinite(f[last + 1]) and _same_branch(angle, last, last + 1):
        last += 1
    return first, last


def _finite_window(f: FloatArray, low: int, high: int) -> tuple[int, int]:
    return _one_branch(f, np.full(len(f), math.nan), low, high)


def _differences(x: FloatArray, f: FloatArray) -> FloatArray:
    """Newton's divided differences: f[x0], f[x0, x1] and so on."""
    table = f.astype(np.float64, copy=True)
    for order in range(1, len(x)):
        table[order:] = (table[order:] - table[order - 1 : -1]) / (x[order:] - x[:-order])
    return table


def _polynomial(x: FloatArray, f: FloatArray, first: int, last: int) -> Callable[[float], float]:
    nodes: Sequence[float] = x[first : last + 1].tolist()
    weights: Sequence[float] = _differences(x[first : last + 1], f[first : last + 1]).tolist()

    def value(at: float) -> float:
        total = weights[-1]
        for node, weight in zip(nodes[-2::-1], weights[-2::-1], strict=True):
            total = total * (at - node) + weight
        return total

    return value


def _smoothest_stencil(
    x: FloatArray, f: FloatArray, low: int, window: tuple[int, int]
) -> tuple[int, int]:
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


def _two_sides(
    x: FloatArray, f: FloatArray, first: int, low: int, high: int, last: int
) -> Callable[[float], float] | None:
    """The larger of both sides' continuations, when the cell looks like two branches crossing.

    It does when each side, continued to the other side's node, falls short of what stands there.
    """
    first, last = max(first, low - 2), min(last, high + 2)
    if first == low or last == high:
        return None
    left, right = _polynomial(x, f, first, low), _polynomial(x, f, high, last)
    margin = KINK_SHARE * abs(f[high] - f[low])
    if left(x[high]) > f[high] - margin or right(x[low]) > f[low] - margin:
        return None
    return lambda at: max(left(at), right(at))


def _bisect(
    curve: Callable[[float], float], low: float, high: float, stable_low: bool, threshold: float
) -> float:
    """Halve the bracket; the side that is stable stays the side that is stable."""
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        if (curve(middle) < threshold) == stable_low:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)
