"""Disks that are proven to hold all roots, and what they say of the largest one.

With approximations z_i of all N roots and Weierstrass's corrections W_i, the roots are the
eigenvalues of diag(z) - 1 W^T, so Gerschgorin's theorem puts them into the disks of radius
(N - 1) |W_i| about z_i - W_i, as many in each connected part of the union as it has disks. The
rounding errors of evaluating the polynomial, and those of its coefficients, enter the radii: a
bound that is returned is a bound on the true error.

References
----------
Smith, B. T. (1970), Error bounds for zeros of a polynomial based upon Gerschgorin's theorems,
J. ACM 17, 661-674. Higham, N. J. (2002), Accuracy and Stability of Numerical Algorithms, 2nd ed.,
chapter 5.
"""

from __future__ import annotations

import math
from typing import Any, TypeAlias

import numba
import numpy as np
from numpy.typing import NDArray

from sweep.measures.kernel_cache import keep_kernels_in
from sweep.measures.lanes import all_at_most, load, spread, square_root, store, where_greater

TARGET = 1e-10
"""Largest error bound of log_radius with which the kernel is content."""

RELATIVE_TARGET = 3e-9
"""Largest part of |log_radius| that stopping the iteration may leave: below single precision."""

UNIT_ROUNDOFF = 2.0**-53
"""Largest relative error of one correctly rounded operation."""

UNSETTLED, EXHAUSTED, SETTLED = 0, 1, 2
"""What the disks say of a group of lanes."""

Lanes: TypeAlias = Any
"""A value of `sweep.measures.lanes.LanesType`, which only compiled code holds."""

Rows: TypeAlias = NDArray[np.float64]
"""Array of shape (n, `sweep.measures.lanes.WIDTH`), or a stack of such."""

keep_kernels_in(numba)

compiled = numba.njit(nogil=True, cache=True, error_model="numpy", fastmath={"contract"})
"""The one way in which kernels are compiled: they release the interpreter and are kept on disk."""


@compiled
def evaluation_roundoffs(degree: int) -> float:
    """Rounding errors that evaluating P may collect, in roundoffs of the sum of its terms' sizes.

    Each of at most ``degree`` steps multiplies complex numbers (sqrt(5)) and adds (1); forming the
    coefficients adds a few more.
    """
    return 3.3 * degree + 6.0


@compiled
def maximum(left: Lanes, right: Lanes) -> Lanes:
    """The larger of each lane; ``right`` where one is NaN."""
    return where_greater(left, right, left, right)


@compiled
def _at_least_size(x: Lanes, y: Lanes) -> Lanes:
    """A bound on |x + j y|, at most 9 % above it, without the cost of a square root."""
    width, height = maximum(x, 0.0 - x), maximum(y, 0.0 - y)
    larger = maximum(width, height)
    # sqrt(1 + t^2) is convex: it lies below the chord from t = 0 to t = 1
    return larger + 0.41421357 * (width + height - larger)


@compiled
def _evaluation_noise(
    degree: int,
    delay: int,
    weights_a: Rows,
    weights_b: Rows,
    re: Rows,
    im: Rows,
    work: Rows,
) -> Lanes:
    """Bound what rounding did to each correction; returns the largest correction, noise included.

    Rows of ``work[3]`` receive the bounds, rows of ``work[4]`` the sizes of the corrections.
    """
    fix_re, fix_im, spacing, noise, sizes = work[0], work[1], work[2], work[3], work[4]
    rounding = evaluation_roundoffs(degree) * UNIT_ROUNDOFF
    top_b, top_a = weights_b.shape[0] - 1, weights_a.shape[0] - 1
    largest = spread(0.0)
    for i in range(degree):
        x, y = load(re, i), load(im, i)
        size, z = _at_least_size(x, y), 1.0 + x
        # 9 % in each factor are a small price for a few of them, a large one for many
        z_size = _at_least_size(z, y) if delay <= 4 else square_root(z * z + y * y)
        fed = load(weights_b, top_b)
        for power in range(top_b - 1, -1, -1):
            fed = fed * size + load(weights_b, power)
        total = load(weights_a, top_a)
        for power in range(top_a - 1, -1, -1):
            total = total * size + load(weights_a, power)
        for _ in range(delay):
            total = total * z_size
        uncertain = (total + fed) * square_root(load(spacing, i)) * rounding
        uncertain = uncertain + 4.0 * UNIT_ROUNDOFF * size
        dx, dy = load(fix_re, i), load(fix_im, i)
        correction = 1.001 * _at_least_size(dx, dy)
        store(noise, i, uncertain)
        store(sizes, i, correction)
        largest = maximum(largest, correction + uncertain)
    return largest


@compiled
def _squared_gap(degree: int, i: int, re: Rows, im: Rows) -> Lanes:
    """Squared distance from root i to the nearest other one."""
    x, y = load(re, i), load(im, i)
    nearest = spread(math.inf)
    for j in range(degree):
        if j != i:
            dx, dy = x - load(re, j), y - load(im, j)
            distance = dx * dx + dy * dy
            nearest = where_greater(nearest, distance, distance, nearest)
    return nearest


@compiled
def _component_radius(
    degree: int, standing: Lanes, radius: Lanes, re: Rows, im: Rows, work: Rows, best: Lanes
) -> Lanes:
    """How far the nearest root may be from a dominant one that does not stand clear of the others.

    Its disk of Smith's theorem holds a root if no other disk meets it; else the connected part that
    holds one is no wider than all disks together.
    """
    fix_re, fix_im, noise, sizes = work[0], work[1], work[3], work[4]
    others = max(degree - 1.0, 1.0)
    own_x, own_y = spread(0.0), spread(0.0)
    own, total = spread(0.0), spread(0.0)
    for i in range(degree):
        x, y = load(re, i) - load(fix_re, i), load(im, i) - load(fix_im, i)
        beyond = 2.0 * x + (x * x + y * y)
        disk = others * (load(sizes, i) + load(noise, i))
        # the same root as in `enclose`
        is_dominant = where_greater(best, beyond, spread(-1.0), spread(1.0))
        own_x = where_greater(is_dominant, spread(0.0), x, own_x)
        own_y = where_greater(is_dominant, spread(0.0), y, own_y)
        own = where_greater(is_dominant, spread(0.0), disk, own)
        total = total + disk
    room = spread(math.inf)
    for j in range(degree):
        dx = load(re, j) - load(fix_re, j) - own_x
        dy = load(im, j) - load(fix_im, j) - own_y
        distance = square_root(dx * dx + dy * dy)
        disk = others * (load(sizes, j) + load(noise, j))
        # at distance 0 it is the root itself: two that coincide have infinite noise
        margin = where_greater(distance, spread(0.0), distance - disk - own, spread(math.inf))
        room = where_greater(room, margin, margin, room)
    alone = where_greater(room, spread(0.0), own, 2.0 * total)
    return where_greater(spread(0.0), standing, alone, radius)


@compiled
def enclose(
    degree: int,
    delay: int,
    weights_a: Rows,
    weights_b: Rows,
    re: Rows,
    im: Rows,
    work: Rows,
    out: Rows,
) -> int:
    """Disks round all roots and what they prove.

    Returns `SETTLED` when every lane meets the targets, `EXHAUSTED` when what is missing is the
    rounding's part and no pass can improve it, else `UNSETTLED`.

    A root that stands clear of the others has, besides the disk of Smith's theorem, a much smaller
    one: scale its row of the companion-like matrix by s = 2 w / gap, w the largest correction, and
    Gerschgorin's disk about it shrinks to (N - 1) |W_i| s while it still meets no other.

    ``out`` receives, by lane: |z|^2 - 1, Re z and Im z of the dominant root, its modulus and the
    bound on the error of that modulus.
    """
    fix_re, fix_im, noise, sizes = work[0], work[1], work[3], work[4]
    others = max(degree - 1.0, 1.0)
    standing = spread(0.0)
    largest = _evaluation_noise(degree, delay, weights_a, weights_b, re, im, work)
    best, z_re, z_im = spread(-2.0), spread(0.0), spread(0.0)
    for i in range(degree):
        x, y = load(re, i) - load(fix_re, i), load(im, i) - load(fix_im, i)
        beyond = 2.0 * x + (x * x + y * y)
        z_re = where_greater(beyond, best, 1.0 + x, z_re)
        z_im = where_greater(beyond, best, y, z_im)
        best = maximum(best, beyond)
    modulus = square_root(z_re * z_re + z_im * z_im)
    # sqrt is concave: |z_i| - |z| <= (|z_i|^2 - |z|^2) / (2 |z|)
    tangent = 0.5 / maximum(modulus, spread(1e-150))
    beyond_modulus, radius, loose = spread(0.0), spread(0.0), spread(0.0)
    moving, poison = spread(0.0), spread(0.0)
    level = best - 1e-13 * (1.0 + best)
    # of equal magnitudes the larger argument: the smallest real part, upper half plane
    out_x, out_y = spread(math.inf), spread(0.0)
    for i in range(degree):
        correction, uncertain = load(sizes, i), load(noise, i)
        gap = square_root(_squared_gap(degree, i, re, im))
        whole = others * (correction + uncertain)
        small = whole * (2.002 * largest / gap)
        is_clear = gap - (2.0 * degree + 8.0) * largest
        share = where_greater(is_clear, spread(0.0), small, whole)
        disk = share + uncertain
        x, y = load(re, i) - load(fix_re, i), load(im, i) - load(fix_im, i)
        beyond = 2.0 * x + (x * x + y * y)
        beyond_modulus = maximum(beyond_modulus, (beyond - best) * tangent + disk)
        # comparisons pass over NaN: it must not make a disk vanish (inf - inf is NaN too)
        poison = poison + (disk - disk)
        # one root of those whose magnitude is the largest stands for them: the last one
        is_dominant = where_greater(best, beyond, spread(-1.0), spread(1.0))
        radius = where_greater(is_dominant, spread(0.0), disk, radius)
        standing = where_greater(is_dominant, spread(0.0), is_clear, standing)
        loose = where_greater(is_dominant, spread(0.0), share - uncertain, loose)
        moving = where_greater(is_dominant, spread(0.0), correction - uncertain, moving)
        candidate = where_greater(beyond, level, x, spread(math.inf))
        out_y = where_greater(out_x, candidate, y, out_y)
        out_x = where_greater(out_x, candidate, candidate, out_x)
    store(out, 0, best)
    store(out, 1, 1.0 + out_x)
    store(out, 2, out_y)
    store(out, 3, modulus)
    if not all_at_most(spread(0.0), standing):
        radius = _component_radius(degree, standing, radius, re, im, work, best)
    # the roundings of modulus and of |z|^2 - 1, by which magnitudes were compared
    rounding = 4.0 * UNIT_ROUNDOFF * (modulus + tangent)
    bound = maximum(beyond_modulus, radius) + rounding + poison
    store(out, 4, bound)
    # what the iteration leaves must also vanish beside the logarithm itself, however small
    digits = RELATIVE_TARGET * maximum(best, 0.0 - best)
    if all_at_most(bound, TARGET * modulus) and all_at_most(loose, digits):
        return SETTLED
    return EXHAUSTED if all_at_most(moving, spread(0.0)) else UNSETTLED
