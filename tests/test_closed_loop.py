"""The independent path and the modes of one node."""

from __future__ import annotations

import math

import numpy as np
import pytest
from mp_loop import eigenvalues
from random_loops import random_loop

from sweep.loop.closed_loop import modes, realise
from sweep.loop.state_space import closed_loop_change, plant_matrices, propagate
from sweep.vocabulary import PLANTS, LoopStructure


def simulate(structure, values, steps):
    """Sampled outputs of the loop from y = 1, by stepping the held plant between its switchings."""
    a, b, c = plant_matrices(structure, values)
    change = closed_loop_change(structure, values)
    state = np.zeros(len(change))
    state[: len(b)] = c / (c @ c)
    outputs = []
    for _ in range(steps):
        outputs.append(c @ state[: len(b)])
        state = state + change @ state
    return np.array(outputs), a, b, c


def test_a_delayed_proportional_loop_matches_stepping_the_plant_by_hand():
    structure = LoopStructure("oscillator", "p", delay_parts=(("update", "samples"),))
    values = {
        "sample_period": 0.17,
        "plant.natural_frequency": 1.0,
        "plant.damping": 0.05,
        "plant.gain": 1.3,
        "controller.kp": 0.4,
        "delay.update": 1.3,
    }
    outputs, a, b, c = simulate(structure, values, 60)
    state, commands = c / (c @ c), [0.0, 0.0]
    early, late = propagate(a, b, 0.3 * 0.17), propagate(a, b, 0.7 * 0.17)
    expected = []
    for _ in range(60):
        expected.append(c @ state)
        commands.append(-0.4 * float(c @ state))
        # until 0.3 T the command of two samples ago still holds, then that of one sample ago
        state = state + early[0] @ state + early[1] * commands[-3]
        state = state + late[0] @ state + late[1] * commands[-2]
    assert outputs == pytest.approx(expected, rel=1e-10, abs=1e-12)


def test_eigenvalues_of_the_state_matrix_agree_with_fifty_digits():
    rng = np.random.default_rng(11)
    for _ in range(40):
        structure, values = random_loop(rng)
        exact = max(float(abs(root)) for root in eigenvalues(structure, values))
        assert modes(structure, values)[0].magnitude == pytest.approx(exact, rel=1e-6)


def test_every_plant_of_the_vocabulary_has_matrices():
    values = {"plant.gain": 2.0, "plant.natural_frequency": 3.0, "plant.damping": 0.1}
    for kind in PLANTS:
        a, b, c = plant_matrices(LoopStructure(kind, "p"), values | {"plant.time_constant": 0.5})
        assert a.shape == (len(b), len(b))
        assert b.shape == c.shape


def test_propagation_is_the_matrix_exponential():
    from scipy.linalg import expm

    rng = np.random.default_rng(4)
    for _ in range(20):
        a, b = rng.normal(size=(3, 3)), rng.normal(size=3)
        block = np.zeros((4, 4))
        block[:3, :3], block[:3, 3] = a, b
        expected = expm(1.7 * block)
        free, driven = propagate(a, b, 1.7)
        assert free + np.eye(3) == pytest.approx(expected[:3, :3], rel=1e-11, abs=1e-12)
        assert driven == pytest.approx(expected[:3, 3], rel=1e-11, abs=1e-12)


# Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997: sampled damped oscillator, the
# continuous mode is recovered from its eigenvalue; own numbers.
def test_modes_tell_frequency_damping_and_decay_of_the_sampled_resonance():
    structure = LoopStructure("oscillator", "p")
    values = {
        "sample_period": 0.01,
        "plant.natural_frequency": 10.0,
        "plant.damping": 0.02,
        "plant.gain": 1.0,
        "controller.kp": 0.0,
    }
    first, second = modes(structure, values)
    assert first.eigenvalue.imag > 0 > second.eigenvalue.imag
    assert first.frequency_hz == pytest.approx(10 * math.sqrt(1 - 0.02**2))
    assert first.damping == pytest.approx(0.02)
    assert first.decay_time_s == pytest.approx(1 / (0.02 * 2 * math.pi * 10))


def test_realised_coefficients_have_the_closed_loop_eigenvalues_as_roots():
    rng = np.random.default_rng(8)
    for _ in range(60):
        structure, values = random_loop(rng)
        realised = realise(structure, values)
        open_loop = np.polymul(realised.plant_denominator, realised.controller_denominator)
        open_loop = np.concatenate([open_loop, np.zeros(realised.whole_delay)])
        forward = np.polymul(realised.plant_numerator, realised.controller_numerator)
        roots = np.roots(np.polyadd(open_loop, forward))
        # the z-form loses digits where eigenvalues crowd: that is why the kernel does not use it
        largest = modes(structure, values)[0].magnitude
        assert np.abs(roots).max() == pytest.approx(largest, rel=1e-3)
