"""The compiled kernel: spectral radius along walks through controller coefficients.

At every node the closed loop's characteristic polynomial, in delta = z - 1, is

    P(delta) = (1 + delta)^n A(delta) + B(delta)

with A and B the products of the plant's and the controller's denominators and numerators and n the
whole-sample delay. It is never multiplied out: evaluated as it stands it keeps its digits both
where eigenvalues crowd at z = 1 and where a long delay spreads them along the unit circle.

A *walk* is a sequence of nodes along which the coefficients change little by little. `WIDTH` walks
are solved at once, one in each lane. At each step all roots are extrapolated from the last three
steps and corrected together by Weierstrass's iteration, z_i <- z_i - W_i with

    W_i = P(z_i) / (a prod_{j != i} (z_i - z_j)),

which doubles the digits with each pass and comes with its own proof (`sweep.measures.disks`). Roots
that cannot be dominant need not converge: their disks need only stay below.

References
----------
Weierstrass, K. (1891), Neuer Beweis des Satzes ... Durand, E. (1960); Kerner, I. O. (1966), Numer.
Math. 8, 290-294: the iteration.
"""

from __future__ import annotations

import math
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from sweep.measures.disks import (
    SETTLED,
    TARGET,
    UNSETTLED,
    Lanes,
    Rows,
    compiled,
    enclose,
    maximum,
)
from sweep.measures.elementary import argument, log_of_radius
from sweep.measures.lanes import WIDTH, all_at_most, load, spread, store, where_greater
from sweep.vocabulary import STABILITY_THRESHOLD

_CONVERGED = 1e-7
"""Correction, relative to sqrt(1 + |delta|^2), from which on the disks are worth drawing."""

_WARM_PASSES = 24
"""Passes from extrapolated roots before starting anew."""
_COLD_PASSES = 120
"""Passes from scratch, besides one for each root."""
_KICKS = (5, 11, 17)
"""Passes whose corrections are turned: see `_apply`."""
_LOOSE = 4
"""Passes after which roots that cannot be dominant may stay loose."""

Starts: TypeAlias = NDArray[np.int64]
"""Array of shape (walks,): where each walk begins."""


@compiled
def _gather(
    rows: NDArray[np.float64], starts: Starts, offset: int, first: int, into: Rows, weights: Rows
) -> None:
    """Lay one coefficient row per lane into columns; lanes beyond the last walk repeat it."""
    last = len(starts) - 1
    for lane in range(WIDTH):
        row = starts[min(first + lane, last)] + offset
        for power in range(rows.shape[2]):
            into[power, lane] = rows[row, 0, power]
            weights[power, lane] = rows[row, 1, power]


@compiled
def _convolve(left: Rows, right: Rows, product: Rows) -> None:
    for power in range(product.shape[0]):
        store(product, power, spread(0.0))
    for i in range(left.shape[0]):
        for j in range(right.shape[0]):
            store(product, i + j, load(product, i + j) + load(left, i) * load(right, j))


@compiled
def _scatter_start(
    degree: int, delay: int, open_loop: Rows, feedback: Rows, re: Rows, im: Rows
) -> None:
    """Start on a circle, none of the points on the real axis or mirrored in it."""
    for lane in range(WIDTH):
        constant = 0.0
        sign = 1.0
        for power in range(feedback.shape[0]):
            constant += sign * feedback[power, lane]
            if delay == 0 and power < open_loop.shape[0]:
                constant += sign * open_loop[power, lane]
            sign = -sign
        lead = abs(open_loop[open_loop.shape[0] - 1, lane])
        radius = (abs(constant) / lead) ** (1.0 / degree)
        radius = min(max(radius, 0.3), 3.0)
        for i in range(degree):
            angle = 2.0 * math.pi * (i + 0.35) / degree
            re[i, lane] = radius * math.cos(angle) - 1.0
            im[i, lane] = radius * math.sin(angle)


@compiled
def _extrapolate(degree: int, known: int, re: Rows, im: Rows, past: Rows) -> None:
    """Continue each root as a polynomial through its last ``known`` (at most three) values."""
    last_re, last_im, older_re, older_im = past[0], past[1], past[2], past[3]
    newest, last, older = 1.0, 0.0, 0.0
    if known == 2:
        newest, last = 2.0, -1.0
    elif known >= 3:
        newest, last, older = 3.0, -3.0, 1.0
    for i in range(degree):
        x, y = load(re, i), load(im, i)
        last_x, last_y = load(last_re, i), load(last_im, i)
        store(re, i, newest * x + last * last_x + older * load(older_re, i))
        store(im, i, newest * y + last * last_y + older * load(older_im, i))
        store(older_re, i, last_x)
        store(older_im, i, last_y)
        store(last_re, i, x)
        store(last_im, i, y)


@compiled
def _evaluate(
    delay: int, open_loop: Rows, feedback: Rows, x: Lanes, y: Lanes
) -> tuple[Lanes, Lanes]:
    """P at x + j y."""
    top = feedback.shape[0] - 1
    fed_re, fed_im = load(feedback, top), spread(0.0)
    for power in range(top - 1, -1, -1):
        carried = fed_re * x - fed_im * y + load(feedback, power)
        fed_im = fed_re * y + fed_im * x
        fed_re = carried
    top = open_loop.shape[0] - 1
    re, im = load(open_loop, top), spread(0.0)
    for power in range(top - 1, -1, -1):
        carried = re * x - im * y + load(open_loop, power)
        im = re * y + im * x
        re = carried
    z = 1.0 + x
    for _ in range(delay):
        carried = re * z - im * y
        im = re * y + im * z
        re = carried
    return re + fed_re, im + fed_im


@compiled
def _correct(
    degree: int, delay: int, open_loop: Rows, feedback: Rows, re: Rows, im: Rows, work: Rows
) -> Lanes:
    """Weierstrass corrections of all roots; returns, by lane, how far they miss the tolerance.

    The first three arrays of ``work`` receive the corrections and 1 / |a prod (z_i - z_j)|^2.
    """
    fix_re, fix_im, spacing = work[0], work[1], work[2]
    lead = load(open_loop, open_loop.shape[0] - 1)
    tolerance = _CONVERGED**2
    excess = spread(-1.0)
    for i in range(degree):
        x, y = load(re, i), load(im, i)
        value_re, value_im = _evaluate(delay, open_loop, feedback, x, y)
        prod_re, prod_im = lead, spread(0.0)
        for j in range(degree):
            if j != i:
                dx, dy = x - load(re, j), y - load(im, j)
                carried = prod_re * dx - prod_im * dy
                prod_im = prod_re * dy + prod_im * dx
                prod_re = carried
        inverse = 1.0 / maximum(prod_re * prod_re + prod_im * prod_im, spread(1e-290))
        dx = (value_re * prod_re + value_im * prod_im) * inverse
        dy = (value_im * prod_re - value_re * prod_im) * inverse
        store(fix_re, i, dx)
        store(fix_im, i, dy)
        store(spacing, i, inverse)
        excess = maximum(excess, dx * dx + dy * dy - tolerance * (1.0 + x * x + y * y))
    return excess


@compiled
def _apply(degree: int, re: Rows, im: Rows, work: Rows, kick: float) -> None:
    """Subtract the corrections. A kick turns them, which lets a mirrored pair become two reals."""
    fix_re, fix_im = work[0], work[1]
    for i in range(degree):
        dx, dy = load(fix_re, i), load(fix_im, i)
        store(re, i, load(re, i) - dx + kick * dy)
        store(im, i, load(im, i) - dy - kick * dx)


@compiled
def _iterate(
    degree: int,
    delay: int,
    coefficients: tuple[Rows, Rows, Rows, Rows],
    re: Rows,
    im: Rows,
    work: Rows,
    out: Rows,
    limit: int,
) -> tuple[int, bool]:
    """Correct until every lane meets `TARGET` or ``limit`` passes are spent; the passes taken."""
    open_loop, feedback, weights_a, weights_b = coefficients
    for number in range(1, limit + 1):
        excess = _correct(degree, delay, open_loop, feedback, re, im, work)
        converged = all_at_most(excess, spread(0.0))
        # beyond `_LOOSE` passes minor roots may be left loose: only the disks decide
        if converged or (number > _LOOSE and number % 2 == 0) or number == limit:
            state = enclose(degree, delay, weights_a, weights_b, re, im, work, out)
            if state != UNSETTLED or number == limit:
                _apply(degree, re, im, work, 0.0)
                return number, state == SETTLED
        kick = 0.6 if number in _KICKS and not converged else 0.0
        _apply(degree, re, im, work, kick)
    return limit, False


@compiled
def _describe(out: Rows) -> None:
    """Turn what `enclose` left in ``out`` into the answer.

    Row 0 becomes the logarithm, row 1 the argument, and row 5 is above 0 where the bound in row 4
    misses `TARGET` or leaves the node undecided at the threshold.
    """
    beyond, modulus, bound = load(out, 0), load(out, 3), load(out, 4)
    store(out, 1, argument(load(out, 1), load(out, 2)))
    within = all_at_most(spread(1e-150), modulus) and all_at_most(modulus, spread(1e150))
    if within:
        store(out, 0, log_of_radius(beyond, modulus))
    else:
        for lane in range(WIDTH):
            radius = out[3, lane]
            out[0, lane] = math.log(radius) if radius > 0.0 else -math.inf
    distance = load(out, 0) - STABILITY_THRESHOLD
    distance = 0.5 * maximum(distance, 0.0 - distance)
    allowed = where_greater(distance, spread(TARGET), spread(TARGET), distance) * modulus
    # a comparison with NaN or with infinity on both sides does not hold: such a node is slow
    held = where_greater(allowed - bound, spread(-1e-300), spread(-1.0), spread(1.0))
    store(out, 5, held)


@compiled
def solve_walks(
    delay: int,
    plants: tuple[NDArray[np.float64], NDArray[np.float64]],
    controllers: tuple[NDArray[np.float64], NDArray[np.float64]],
    plant_rows: Starts,
    controller_rows: Starts,
    nodes: Starts,
    strides: tuple[int, int, int],
    positions: NDArray[np.int64],
    steady: bool,
    log_radius: NDArray[np.float64],
    mode_angle: NDArray[np.float64],
    error: NDArray[np.float64],
    slow: NDArray[np.bool_],
) -> int:
    """Solve every node of a batch of walks that share one structure.

    Parameters
    ----------
    delay
        Power n of z beside the open-loop polynomial.
    plants, controllers
        Numerators and denominators, each of shape (rows, 2, powers): coefficients in delta, lowest
        power first, and their weights (magnitude plus an allowance for their own error).
    plant_rows, controller_rows
        Row that each walk takes at position 0 of the walk axis.
    nodes
        Where its result at position 0 goes.
    strides
        By how much these three move with each position.
    positions
        The positions that are walked, increasing.
    steady
        Whether the open-loop polynomial stays the same along each walk.
    log_radius, mode_angle, error, slow
        Receive the logarithm of the spectral radius, the argument of the dominant root (rad, 0 to
        pi), the bound on the error of the radius itself, and whether that misses `TARGET` or leaves
        the node undecided at the threshold; flat, one place for each node.

    Returns
    -------
    Passes taken, summed over the groups of lanes.
    """
    plant_num, plant_den = plants
    loop_num, loop_den = controllers
    walks, steps = len(nodes), len(positions)
    plant_stride, controller_stride, node_stride = strides
    top_a = plant_den.shape[2] + loop_den.shape[2] - 2
    top_b = plant_num.shape[2] + loop_num.shape[2] - 2
    degree = delay + top_a
    open_loop, weights_a = np.zeros((top_a + 1, WIDTH)), np.zeros((top_a + 1, WIDTH))
    feedback, weights_b = np.zeros((top_b + 1, WIDTH)), np.zeros((top_b + 1, WIDTH))
    coefficients = (open_loop, feedback, weights_a, weights_b)
    powers_a, powers_b = plant_den.shape[2], plant_num.shape[2]
    plant_den_lanes, plant_den_weights = np.zeros((powers_a, WIDTH)), np.zeros((powers_a, WIDTH))
    plant_num_lanes, plant_num_weights = np.zeros((powers_b, WIDTH)), np.zeros((powers_b, WIDTH))
    powers_a, powers_b = loop_den.shape[2], loop_num.shape[2]
    loop_den_lanes, loop_den_weights = np.zeros((powers_a, WIDTH)), np.zeros((powers_a, WIDTH))
    loop_num_lanes, loop_num_weights = np.zeros((powers_b, WIDTH)), np.zeros((powers_b, WIDTH))
    re, im = np.zeros((degree, WIDTH)), np.zeros((degree, WIDTH))
    first_re, first_im = np.zeros((degree, WIDTH)), np.zeros((degree, WIDTH))
    past, work = np.zeros((4, degree, WIDTH)), np.zeros((5, degree, WIDTH))
    out = np.zeros((6, WIDTH))
    passes = 0
    seeded = False
    for first in range(0, walks, WIDTH):
        known = 0
        for step in range(steps):
            plant_offset = positions[step] * plant_stride
            offset = positions[step] * controller_stride
            if step == 0 or not steady:
                _gather(
                    plant_den, plant_rows, plant_offset, first, plant_den_lanes, plant_den_weights
                )
                _gather(
                    plant_num, plant_rows, plant_offset, first, plant_num_lanes, plant_num_weights
                )
                _gather(loop_den, controller_rows, offset, first, loop_den_lanes, loop_den_weights)
                _convolve(plant_den_lanes, loop_den_lanes, open_loop)
                _convolve(plant_den_weights, loop_den_weights, weights_a)
            _gather(loop_num, controller_rows, offset, first, loop_num_lanes, loop_num_weights)
            _convolve(plant_num_lanes, loop_num_lanes, feedback)
            _convolve(plant_num_weights, loop_num_weights, weights_b)

            met = False
            if step == 0 and seeded:
                # neighbouring walks start alike
                re[:] = first_re
                im[:] = first_im
            if known > 0:
                _extrapolate(degree, known, re, im, past)
            if known > 0 or (step == 0 and seeded):
                taken, met = _iterate(degree, delay, coefficients, re, im, work, out, _WARM_PASSES)
                passes += taken
            if not met:
                _scatter_start(degree, delay, open_loop, feedback, re, im)
                limit = _COLD_PASSES + degree
                taken, met = _iterate(degree, delay, coefficients, re, im, work, out, limit)
                passes += taken
                known = 0
            # roots that did not settle may have run together: nothing continues from them
            known = known + 1 if met else 0
            if step == 0 and met:
                first_re[:] = re
                first_im[:] = im
                seeded = True

            _describe(out)
            for lane in range(min(WIDTH, walks - first)):
                node = nodes[first + lane] + positions[step] * node_stride
                log_radius[node] = out[0, lane]
                mode_angle[node] = out[1, lane]
                error[node] = out[4, lane]
                slow[node] = out[5, lane] > 0.0
    return passes
