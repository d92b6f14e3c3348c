"""Controllers: the realised coefficients answer like the lines of code that they stand for."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from random_loops import as_block

from sweep.loop.closed_loop import realise
from sweep.loop.controllers import INTEGRAL_WEIGHTS, realise_controller
from sweep.vocabulary import CONTROLLERS, LoopStructure

GAINS = {"kp": 0.7, "ki": 3.0, "kd": 0.05}


def run_the_code(structure, values, errors):
    """The difference equation as firmware would hold it, one pass for each error."""
    path = "controller.code_period" if structure.has_code_period else "sample_period"
    tc, tf = values[path], values.get("controller.derivative_filter", 0.0)
    kp, ki, kd = (values.get(f"controller.{name}", 0.0) for name in ("kp", "ki", "kd"))
    a = tf / (tc + tf)
    integral, derivative, before = 0.0, 0.0, 0.0
    commands = []
    for e in errors:
        u = kp * e
        if structure.integral == "backward":
            integral += ki * tc * e
            u += integral
        elif structure.integral == "forward":
            u += integral
            integral += ki * tc * e
        else:
            u += integral + ki * tc * e / 2
            integral += ki * tc * e
        derivative = a * derivative + kd / (tc + tf) * (e - before)
        commands.append(u + derivative)
        before = e
    return np.array(commands)


def filter_by(numerator, denominator, errors):
    """Direct form of a transfer function in z, highest power first."""
    numerator = np.concatenate([np.zeros(len(denominator) - len(numerator)), numerator])
    commands = np.zeros(len(errors))
    for k in range(len(errors)):
        total = sum(b * errors[k - j] for j, b in enumerate(numerator) if k >= j)
        total -= sum(a * commands[k - j] for j, a in enumerate(denominator) if 0 < j <= k)
        commands[k] = total / denominator[0]
    return commands


@pytest.mark.parametrize("tuned_for", [None, 0.013])
@pytest.mark.parametrize("filter_s", [0.0, 0.02])
@pytest.mark.parametrize("integral", list(INTEGRAL_WEIGHTS))
@pytest.mark.parametrize("kind", list(CONTROLLERS))
def test_coefficients_answer_like_the_code(kind, integral, filter_s, tuned_for):
    structure = LoopStructure(
        "integrator", kind, integral=integral, has_code_period=tuned_for is not None
    )
    needed = {spec.name for spec in CONTROLLERS[kind].parameters}
    values = {"sample_period": 0.01, "plant.gain": 1.0}
    values |= {f"controller.{name}": gain for name, gain in GAINS.items() if name in needed}
    if "derivative_filter" in needed:
        values["controller.derivative_filter"] = filter_s
    if tuned_for is not None:
        values["controller.code_period"] = tuned_for
    errors = np.random.default_rng(1).normal(size=40)
    realised = realise(structure, values)
    found = filter_by(realised.controller_numerator, realised.controller_denominator, errors)
    assert found == pytest.approx(run_the_code(structure, values, errors), rel=1e-9, abs=1e-12)


def test_a_term_whose_gain_is_zero_leaves_no_memory():
    structure = LoopStructure("integrator", "pid")
    for ki, kd, filter_s in itertools.product([0.0, 2.0], [0.0, 0.1], [0.0, 0.3]):
        values = {
            "sample_period": 0.1,
            "controller.kp": 1.0,
            "controller.ki": ki,
            "controller.kd": kd,
            "controller.derivative_filter": filter_s,
        }
        found = realise_controller(structure, as_block(values))
        assert found.order.item() == (ki != 0) + (kd != 0 and filter_s != 0)
        assert found.whole_delay.item() == (kd != 0 and filter_s == 0)
        assert found.numerator_degree.item() == (ki != 0) + (kd != 0)


def test_a_positive_kp_is_negative_feedback():
    structure = LoopStructure("integrator", "p")
    values = {"sample_period": 1.0, "plant.gain": 1.0, "controller.kp": 0.5}
    realised = realise(structure, values)
    # u = -kp y on y' = u: the eigenvalue is 1 - kp T
    closed = np.polyadd(
        np.polymul(realised.plant_denominator, realised.controller_denominator),
        np.polymul(realised.plant_numerator, realised.controller_numerator),
    )
    assert np.roots(closed) == pytest.approx([0.5])
