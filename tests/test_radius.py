"""The spectral radius before storage, against 50 digits and against the independent path."""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from mp_loop import eigenvalues
from random_loops import as_block, random_loop

from sweep.measures.radius import RadiusBlock, compute_radius
from sweep.measures.reference import compute_reference
from sweep.measures.registry import compute_block
from sweep.vocabulary import LOG_RADIUS_FLOOR, STABILITY_THRESHOLD, LoopStructure

T0 = 2 * math.pi


def compare_with_mpmath(seed: int, count: int) -> dict[str, float]:
    """Largest errors over random loops, each solved as one node inside a short walk of gains."""
    rng = np.random.default_rng(seed)
    worst, worst_close, slow = 0.0, 0.0, 0
    for _ in range(count):
        structure, values = random_loop(rng)
        block = as_block(values)
        block["controller.kp"] = values["controller.kp"] * np.linspace(0.9, 1.1, 5)
        found = compute_radius(structure, block, (5,))
        node = int(rng.integers(5))
        values["controller.kp"] = float(block["controller.kp"][node])
        roots = eigenvalues(structure, values)
        error = float(abs(mp.mpf(float(found.log_radius[node])) - mp.log(abs(roots[0]))))
        assert error <= found.bound[node], (structure, values, error, found.bound[node])
        close = len(roots) > 1 and min(abs(roots[0] - root) for root in roots[1:]) <= 1e-5
        worst_close = max(worst_close, error if close else 0.0)
        worst = max(worst, 0.0 if close else error)
        slow += bool(found.slow[node])
    assert worst <= 1e-10
    assert worst_close <= 1e-6
    return {"loops": count, "worst": worst, "worst_close": worst_close, "slow": slow}


def test_random_loops_agree_with_fifty_digits_within_the_reported_bound():
    compare_with_mpmath(seed=20, count=80)


@pytest.mark.long
def test_two_thousand_random_loops_agree_with_fifty_digits():
    print(compare_with_mpmath(seed=7, count=2000))


def oscillator(controller: str, damping: float, ratio: float, kp: float, delay: float, ki=None):
    """The oscillator with w0 = 1 at T = ratio * T0."""
    structure = LoopStructure("oscillator", controller, delay_parts=(("update", "samples"),))
    values = {
        "sample_period": T0 * ratio,
        "plant.natural_frequency": 1 / T0,
        "plant.damping": damping,
        "plant.gain": 1.0,
        "controller.kp": kp,
        "delay.update": delay,
    }
    if ki is not None:
        values["controller.ki"] = ki
    return structure, values


# Own construction, 20 digits by two routes; the delta form that makes them reachable is that of
# Middleton and Goodwin (1986), IEEE Trans. Automatic Control 31, 1015-1021.
FAST_SAMPLING = [
    (oscillator("p", 0.01, 1e-4, 0.5, 0), -0.00000623383708252371943281561, 1e-8),
    (oscillator("p", 0.0, 1e-5, -0.5, 1), -1.480440662355108346121499e-9, 1e-6),
    (oscillator("pi", 0.002, 1e-4, -0.3, 20, 0.004), -0.0000006753793826488349680294332, 1e-6),
    (oscillator("p", 0.005, 1e-5, 0.02, 15), -0.0000003135473470099395033191577, 1e-6),
]


@pytest.mark.parametrize(("loop", "expected", "tolerance"), FAST_SAMPLING)
def test_fast_sampling_keeps_the_digits_of_a_tiny_logarithm(loop, expected, tolerance):
    structure, values = loop
    found = compute_radius(structure, as_block(values), (1,))
    assert found.log_radius[0] == pytest.approx(expected, rel=tolerance)
    assert not found.slow[0]


def test_fast_sampling_with_a_long_delay_agrees_with_fifty_digits():
    structure, values = oscillator("pi", 0.002, 1e-5, -0.3, 20, 0.004)
    found = compute_radius(structure, as_block(values), (1,))
    expected = mp.log(abs(eigenvalues(structure, values)[0]))
    assert float(abs(mp.mpf(float(found.log_radius[0])) / expected - 1)) < 1e-6


def test_both_paths_agree_within_their_bounds_on_random_loops():
    rng = np.random.default_rng(3)
    for _ in range(300):
        structure, values = random_loop(rng)
        fast = compute_radius(structure, as_block(values), (1,))
        slow = compute_reference(structure, values)
        one = np.array([slow.log_radius]), np.zeros(1), np.array([slow.error])
        bound = RadiusBlock(*one, np.zeros(1, bool), np.zeros(1, bool)).bound[0]
        if math.isfinite(bound):
            assert abs(fast.log_radius[0] - slow.log_radius) <= fast.bound[0] + bound
            if fast.bound[0] < 1e-9 and bound < 1e-9:
                assert abs(fast.mode_angle[0] - slow.mode_angle) < 1e-5


@pytest.mark.parametrize("delay", [0.0, 2.0])
def test_a_tiny_radius_keeps_its_bound_too(delay):
    # without delay close to the deadbeat gain; with delay a lag that is almost at rest, K -> 0
    structure = LoopStructure("lag", "p", delay_parts=(("update", "samples"),))
    gains = (
        -(10.0 ** -np.arange(1.0, 12.0))
        if delay
        else 1 / np.expm1(0.7) * (1 + 10.0 ** -np.arange(1.0, 12.0))
    )
    values = {
        "sample_period": 0.7 if not delay else 60.0,
        "plant.time_constant": 1.0,
        "plant.gain": 1.0,
        "controller.kp": 0.0,
        "delay.update": delay,
    }
    block = as_block(values)
    block["controller.kp"] = gains
    found = compute_radius(structure, block, (len(gains),))
    for node, gain in enumerate(gains):
        roots = eigenvalues(structure, values | {"controller.kp": float(gain)})
        error = float(abs(mp.mpf(float(found.log_radius[node])) - mp.log(abs(roots[0]))))
        assert error <= found.bound[node]


def test_a_deadbeat_loop_is_stable_and_stored_at_the_floor():
    structure = LoopStructure("integrator", "p")
    values = {"sample_period": 0.25, "plant.gain": 1.0, "controller.kp": 4.0}
    result = compute_block(structure, as_block(values), (1,), ("log_radius", "mode_angle"))
    assert result.values["log_radius"][0] == LOG_RADIUS_FLOOR
    assert result.undecided_nodes == 0


def test_overflowing_coefficients_are_stored_as_not_stable_and_never_as_unknown():
    structure = LoopStructure("integrator", "p", delay_parts=(("update", "samples"),))
    values = {
        "sample_period": 1.0,
        "plant.gain": 1e300,
        "controller.kp": 1e300,
        "delay.update": 2.0,
    }
    result = compute_block(structure, as_block(values), (1,), ("log_radius", "mode_angle"))
    assert result.values["log_radius"][0] >= 0
    assert not np.isnan(result.values["mode_angle"][0])


def test_the_double_pole_of_an_uncontrolled_double_integrator_is_never_called_stable():
    structure = LoopStructure("double_integrator", "pd", delay_parts=(("update", "samples"),))
    values = {
        "sample_period": 0.37,
        "plant.gain": 1.0,
        "controller.kp": 0.0,
        "controller.kd": 0.0,
        "controller.derivative_filter": 0.0,
        "delay.update": 1.6,
    }
    result = compute_block(structure, as_block(values), (1,), ("log_radius",))
    assert result.values["log_radius"][0] >= STABILITY_THRESHOLD


@pytest.mark.parametrize("delay", [0, 1, 2, 2.3])
@pytest.mark.parametrize("halves", [1, 2, 3, 4])
def test_an_undamped_resonance_that_sampling_hides_is_never_called_stable(halves, delay):
    # Kalman, Ho and Narendra (1963): controllability is lost at multiples of half the period
    gains = np.linspace(-1.7, 1.7, 35)
    structure, values = oscillator("p", 0.0, halves / 2, 0.0, delay)
    block = as_block(values)
    block["controller.kp"] = gains
    stored = compute_block(structure, block, (35,), ("log_radius",)).values["log_radius"]
    assert (stored >= STABILITY_THRESHOLD).all()
    if delay == 0:
        found = compute_radius(structure, block, (35,))
        exact = np.zeros(35) if halves % 2 == 0 else np.log(np.maximum(1, np.abs(1 + 2 * gains)))
        assert np.abs(found.log_radius - exact).max() < 1e-7


def test_a_walk_gives_what_each_of_its_nodes_gives_alone():
    structure = LoopStructure("oscillator", "pid", delay_parts=(("update", "samples"),))
    base = {
        "sample_period": np.array([0.11, 0.4]).reshape(2, 1, 1),
        "plant.natural_frequency": np.full((1, 1, 1), 1.0),
        "plant.damping": np.full((1, 1, 1), 0.02),
        "plant.gain": np.full((1, 1, 1), 1.0),
        "controller.kp": np.linspace(-1, 2, 41).reshape(1, 41, 1),
        "controller.ki": np.array([-1.0, -0.5, 0.0, 0.5]).reshape(1, 1, 4),
        "controller.kd": np.full((1, 1, 1), 0.05),
        "controller.derivative_filter": np.full((1, 1, 1), 0.0),
        "delay.update": np.full((1, 1, 1), 1.3),
    }
    shape = (2, 41, 4)
    whole = compute_radius(structure, base, shape)
    for index in np.ndindex(*shape):
        alone = {
            path: array[
                tuple(slice(i % n, i % n + 1) for i, n in zip(index, array.shape, strict=True))
            ]
            for path, array in base.items()
        }
        single = compute_radius(structure, alone, (1, 1, 1))
        allowed = whole.bound[index] + single.bound[0, 0, 0]
        assert abs(whole.log_radius[index] - single.log_radius[0, 0, 0]) <= allowed


def test_the_fast_kernel_really_decides_almost_every_node():
    structure, values = oscillator("p", 0.01, 0.15, 0.0, 1.5)
    block = as_block(values)
    block["controller.kp"] = np.linspace(-1, 1, 4001)
    found = compute_radius(structure, block, (4001,))
    assert found.slow.mean() < 0.01
    assert not np.isnan(found.log_radius).any()


def test_of_a_conjugate_pair_the_positive_argument_is_stored_and_pi_means_alternation():
    structure = LoopStructure("integrator", "p")
    gains = np.array([0.5, 1.5])
    block = {
        "sample_period": np.ones(1),
        "plant.gain": np.ones(1),
        "controller.kp": gains,
    }
    found = compute_radius(structure, block, (2,))
    assert found.mode_angle == pytest.approx([0.0, math.pi])
    structure, values = oscillator("p", 0.0, 0.1, -0.3, 0)
    found = compute_radius(structure, as_block(values), (1,))
    assert 0 < found.mode_angle[0] < math.pi
