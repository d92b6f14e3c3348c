"""A third opinion in 50 digits: the closed loop's characteristic polynomial by mpmath.

Written from the textbook's z-domain formulas, without the delta form and without anything of the
package but the meaning of its parameters.
"""

from __future__ import annotations

import mpmath as mp

from sweep.vocabulary import LoopStructure

mp.mp.dps = 50


def plant_matrices(structure: LoopStructure, value):
    gain = value("plant.gain")
    if structure.plant == "oscillator":
        wn, zeta = 2 * mp.pi * value("plant.natural_frequency"), value("plant.damping")
        return [[0, 1], [-wn * wn, -2 * zeta * wn]], [0, gain * wn * wn]
    if structure.plant == "integrator":
        return [[0]], [gain]
    if structure.plant == "double_integrator":
        return [[0, 1], [0, 0]], [0, gain]
    rate = 1 / value("plant.time_constant")
    if structure.plant == "lag":
        return [[-rate]], [gain * rate]
    return [[0, 1], [0, -rate]], [0, gain * rate]


def hold_response(a, b, time):
    """exp(A t) and the integral of exp(A s) B, from one block exponential."""
    n = len(b)
    block = mp.zeros(n + 1)
    for i in range(n):
        for j in range(n):
            block[i, j] = a[i][j] * time
        block[i, n] = b[i] * time
    grown = mp.expm(block) if time else mp.eye(n + 1)
    return grown[:n, :n], [grown[i, n] for i in range(n)]


def split_delay(structure: LoopStructure, value):
    total = mp.mpf(0)
    for name, unit in structure.delay_parts:
        part = value(f"delay.{name}")
        total += part if unit == "samples" else part / value("sample_period")
    if abs(total - mp.nint(total)) <= mp.mpf("1e-12"):
        total = mp.nint(total)
    return int(mp.floor(total)), total - mp.floor(total)


def multiply(left, right):
    product = [mp.mpf(0)] * (len(left) + len(right) - 1)
    for i, a in enumerate(left):
        for j, b in enumerate(right):
            product[i + j] += a * b
    return product


def add(left, right):
    size = max(len(left), len(right))
    left = [mp.mpf(0)] * (size - len(left)) + list(left)
    right = [mp.mpf(0)] * (size - len(right)) + list(right)
    return [a + b for a, b in zip(left, right, strict=True)]


def sampled_plant(structure: LoopStructure, value):
    """Numerator over denominator times z^(d+1), highest power first, and d."""
    a, b = plant_matrices(structure, value)
    whole, fraction = split_delay(structure, value)
    period = value("sample_period")
    phi, total = hold_response(a, b, period)
    _, late = hold_response(a, b, period * (1 - fraction))
    early = [t - s for t, s in zip(total, late, strict=True)]
    if len(b) == 1:
        return [late[0], early[0]], [mp.mpf(1), -phi[0, 0]], whole
    trace = phi[0, 0] + phi[1, 1]
    determinant = phi[0, 0] * phi[1, 1] - phi[0, 1] * phi[1, 0]

    def constant(x):
        return phi[0, 0] * x[0] + phi[0, 1] * x[1] - trace * x[0]

    numerator = [late[0], early[0] + constant(late), constant(early)]
    return numerator, [mp.mpf(1), -trace, determinant], whole


def controller(structure: LoopStructure, value):
    """Numerator and denominator of C(z), highest power first; absent terms leave no factor."""
    code_path = "controller.code_period" if structure.has_code_period else "sample_period"
    period, filter_s = value(code_path), value("controller.derivative_filter")
    ki, kd = value("controller.ki"), value("controller.kd")
    numerator, denominator = [value("controller.kp")], [mp.mpf(1)]
    if ki != 0:
        rule = {
            "backward": [ki * period, mp.mpf(0)],
            "forward": [mp.mpf(0), ki * period],
            "trapezoidal": [ki * period / 2, ki * period / 2],
        }[structure.integral]
        numerator = add(multiply(numerator, [1, -1]), multiply(rule, denominator))
        denominator = multiply(denominator, [1, -1])
    if kd != 0:
        pole = [period + filter_s, -filter_s]
        numerator = add(multiply(numerator, pole), multiply([kd, -kd], denominator))
        denominator = multiply(denominator, pole)
    return numerator, denominator


def characteristic_polynomial(structure: LoopStructure, values: dict[str, float]):
    """Highest power first, factors that cancel in the transfer function included."""

    def value(path):
        return mp.mpf(float(values.get(path, 0.0)))

    plant_num, plant_den, whole = sampled_plant(structure, value)
    loop_num, loop_den = controller(structure, value)
    shift = [mp.mpf(1)] + [mp.mpf(0)] * (whole + 1)
    open_loop = multiply(multiply(plant_den, loop_den), shift)
    return add(open_loop, multiply(plant_num, loop_num))


def eigenvalues(structure: LoopStructure, values: dict[str, float]):
    """Closed-loop eigenvalues but those at 0, largest magnitude first."""
    polynomial = characteristic_polynomial(structure, values)
    while polynomial[-1] == 0:
        polynomial = polynomial[:-1]
    if len(polynomial) == 1:
        return []
    ascending = [coefficient / polynomial[0] for coefficient in reversed(polynomial)]
    roots = mp.polyroots(ascending, maxsteps=2000, extraprec=400, asc=True)
    return sorted(roots, key=lambda root: -abs(root))
