"""The independent path: the closed loop as one state matrix, assembled row by row.

Slow and plain on purpose. Nothing here is shared with the fast path but the meaning of the
parameters: the plant is sampled by a matrix exponential instead of closed forms, the delay is a
chain of held outputs instead of a power of z, and the controller is the code's own difference
equation instead of a transfer function.

The state is (plant states, held outputs u_{k-1} … u_{k-n}, integral, derivative memory).
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from sweep.loop.bounded import FloatArray
from sweep.loop.sampling import WHOLE_SAMPLE_TOLERANCE
from sweep.vocabulary import LoopStructure

_INTEGRAL_SHARE = {"backward": 1.0, "forward": 0.0, "trapezoidal": 0.5}


def plant_matrices(
    structure: LoopStructure, values: Mapping[str, float]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """A, B and C of x' = A x + B u, y = C x.

    Parameters
    ----------
    structure
        The kind of plant.
    values
        Its parameters by dotted path, SI units.

    Returns
    -------
    Arrays of shape (n, n), (n,) and (n,).
    """
    gain = values["plant.gain"]
    if structure.plant == "oscillator":
        wn = 2 * math.pi * values["plant.natural_frequency"]
        damping = values["plant.damping"]
        # states y and y' / wn: the matrix is balanced whatever the frequency
        a = [[0.0, wn], [-wn, -2 * damping * wn]]
        return np.array(a), np.array([0.0, gain * wn]), np.array([1.0, 0.0])
    if structure.plant == "integrator":
        return np.array([[0.0]]), np.array([gain]), np.array([1.0])
    if structure.plant == "double_integrator":
        return np.array([[0.0, 1.0], [0.0, 0.0]]), np.array([0.0, gain]), np.array([1.0, 0.0])
    rate = 1 / values["plant.time_constant"]
    if structure.plant == "lag":
        return np.array([[-rate]]), np.array([gain * rate]), np.array([1.0])
    if structure.plant == "lagged_integrator":
        # states y and y' / rate
        a = [[0.0, rate], [0.0, -rate]]
        return np.array(a), np.array([0.0, gain]), np.array([1.0, 0.0])
    raise KeyError(structure.plant)


def propagate(a: FloatArray, b: FloatArray, time_s: float) -> tuple[FloatArray, FloatArray]:
    """exp(A t) - I and the integral of exp(A s) B over [0, t].

    By Taylor's series of the block matrix over a short time and repeated doubling, kept as the
    difference to the identity so that a short time loses no digits.

    Parameters
    ----------
    a, b
        Shapes (n, n) and (n,).
    time_s
        At least 0, s.
    """
    n = len(b)
    block = np.zeros((n + 1, n + 1))
    block[:n, :n], block[:n, n] = a * time_s, b * time_s
    doublings = max(0, math.ceil(math.log2(max(np.abs(block).sum(axis=1).max(), 1e-300))) + 2)
    block /= 2.0**doublings
    term, change = np.eye(n + 1), np.zeros((n + 1, n + 1))
    for power in range(1, 22):
        term = term @ block / power
        change += term
    for _ in range(doublings):
        change = 2 * change + change @ change
    return change[:n, :n], change[:n, n]


def delay_samples(structure: LoopStructure, values: Mapping[str, float]) -> tuple[int, float]:
    """Whole samples and fraction of a sample of the total delay."""
    total = math.fsum(
        values[f"delay.{name}"] for name, unit in structure.delay_parts if unit == "samples"
    )
    seconds = math.fsum(
        values[f"delay.{name}"] for name, unit in structure.delay_parts if unit == "s"
    )
    total += seconds / values["sample_period"]
    if abs(total - round(total)) <= WHOLE_SAMPLE_TOLERANCE:
        return round(total), 0.0
    return math.floor(total), total - math.floor(total)


def closed_loop_change(structure: LoopStructure, values: Mapping[str, float]) -> FloatArray:
    """M - I, where M takes the closed loop's state from one sample to the next.

    Parameters
    ----------
    structure
        The loop's kinds, integral rule and delay parts.
    values
        Every parameter by dotted path, SI units (delay parts in their own).

    Returns
    -------
    Shape (n, n). Its eigenvalues plus 1 are the closed-loop eigenvalues.
    """
    a, b, c = plant_matrices(structure, values)
    whole, fraction = delay_samples(structure, values)
    period = values["sample_period"]
    code_period = values["controller.code_period"] if structure.has_code_period else period
    kp, ki, kd = (values.get(f"controller.{name}", 0.0) for name in ("kp", "ki", "kd"))
    filter_s = values.get("controller.derivative_filter", 0.0)
    plant, held = len(b), whole + (fraction > 0)
    size = plant + held + (ki != 0) + (kd != 0)
    integral, memory = plant + held, plant + held + (ki != 0)

    error = np.zeros(size)
    error[:plant] = -c
    command = kp * error
    new_integral = np.zeros(size)
    if ki != 0:
        state = np.eye(size)[integral]
        command = command + state + _INTEGRAL_SHARE[structure.integral] * ki * code_period * error
        new_integral = ki * code_period * error
    new_memory = np.zeros(size)
    if kd != 0:
        pole = filter_s / (code_period + filter_s)
        slope = kd / (code_period + filter_s)
        state = np.eye(size)[memory]
        derivative = slope * error + state
        command = command + derivative
        new_memory = pole * derivative - slope * error - state

    chain = [command, *np.eye(size)[plant : plant + held]]
    change = np.zeros((size, size))
    free, driven = propagate(a, b, period)
    change[:plant, :plant] = free
    late_free, late = propagate(a, b, period * (1 - fraction))
    if fraction > 0:
        early = propagate(a, b, period * fraction)[1]
        change[:plant] += np.outer(early + late_free @ early, chain[whole + 1])
        driven = late
    change[:plant] += np.outer(driven, chain[whole])
    for position in range(held):
        change[plant + position] = chain[position] - chain[position + 1]
    if ki != 0:
        change[integral] = new_integral
    if kd != 0:
        change[memory] = new_memory
    return change
