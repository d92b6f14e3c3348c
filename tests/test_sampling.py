"""Exact sampling behind a delayed hold: published transforms, 50 digits, honest bounds."""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from mp_loop import sampled_plant
from random_loops import as_block, random_loop

from sweep.loop.bounded import Bounded
from sweep.loop.closed_loop import realise
from sweep.loop.plants import NORMAL_FORMS
from sweep.loop.sampling import sample_plant, split_delay
from sweep.vocabulary import PLANTS, LoopStructure

T0 = 2 * math.pi


def z_coefficients(structure: LoopStructure, values: dict[str, float]):
    """Numerator and denominator of the sampled plant in z, highest power first."""
    realised = realise(structure, {"controller.kp": 1.0, "plant.gain": 1.0} | values)
    return realised.plant_numerator, realised.plant_denominator


def test_every_plant_of_the_vocabulary_has_its_equation_and_no_other():
    assert NORMAL_FORMS.keys() == PLANTS.keys()


# Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, chapter 2, table of zero-order
# hold sampled systems; cited from memory, values recomputed in 50 digits.
def test_integrator_samples_to_its_table_entry():
    numerator, denominator = z_coefficients(
        LoopStructure("integrator", "p"), {"sample_period": 0.25}
    )
    assert numerator == pytest.approx([0.25], rel=1e-14)
    assert denominator == pytest.approx([1, -1], rel=1e-14)


def test_double_integrator_samples_to_its_table_entry():
    numerator, denominator = z_coefficients(
        LoopStructure("double_integrator", "p"), {"sample_period": 0.5}
    )
    assert numerator == pytest.approx([0.125, 0.125], rel=1e-14)
    assert denominator == pytest.approx([1, -2, 1], rel=1e-14)


@pytest.mark.parametrize(
    ("period_s", "b1", "b2"),
    [
        (0.1, 0.004837418035959573, 0.0046788401604444695),
        (0.5, 0.10653065971263342, 0.0902040104310498645943007),
        (1, 0.36787944117144232, 0.26424111765711535),
        (2, 1.1353352832366127, 0.5939941502901619),
    ],
)
def test_lagged_integrator_samples_to_its_table_entry(period_s, b1, b2):
    numerator, denominator = z_coefficients(
        LoopStructure("lagged_integrator", "p"),
        {"sample_period": period_s, "plant.time_constant": 1.0},
    )
    assert numerator == pytest.approx([b1, b2], rel=1e-12)
    pole = math.exp(-period_s)
    assert denominator == pytest.approx([1, -1 - pole, pole], rel=1e-14)


@pytest.mark.parametrize(
    ("damping", "period_s", "expected"),
    [
        (
            0.2,
            0.7,
            (0.2148340987746943, 0.1953978588941053, -1.345551783786926, 0.7557837414557255),
        ),
        (
            0.002,
            3,
            (1.983788920209776524, 1.972421761104061, 1.968138968451907, 0.98807171286193053),
        ),
    ],
)
def test_damped_oscillator_samples_to_its_table_entry(damping, period_s, expected):
    numerator, denominator = z_coefficients(
        LoopStructure("oscillator", "p"),
        {"sample_period": period_s, "plant.natural_frequency": 1 / T0, "plant.damping": damping},
    )
    assert [*numerator, *denominator[1:]] == pytest.approx(expected, rel=1e-12)


def test_undamped_oscillator_samples_to_its_table_entry():
    numerator, denominator = z_coefficients(
        LoopStructure("oscillator", "p"),
        {"sample_period": 0.4, "plant.natural_frequency": 2 / T0, "plant.damping": 0.0},
    )
    assert numerator == pytest.approx([0.30329329065283457907925] * 2, rel=1e-12)
    assert denominator == pytest.approx([1, -1.3934134186943308418415, 1], rel=1e-12)


# Jury, Theory and Application of the z-Transform Method, 1964, modified z-transform; from memory.
def test_a_delay_of_a_fraction_of_a_sample_follows_the_modified_z_transform():
    structure = LoopStructure("oscillator", "p", delay_parts=(("update", "samples"),))
    values = {
        "sample_period": 1.0,
        "plant.natural_frequency": 1 / T0,
        "plant.damping": 0.0,
        "delay.update": 0.4,
    }
    numerator, denominator = z_coefficients(structure, values)
    expected = [0.1746643850903217, 0.6657919971762839, 0.0789390059971149971]
    assert numerator == pytest.approx(expected, rel=1e-12)
    assert denominator == pytest.approx([1, -2 * math.cos(1), 1], rel=1e-12)


def in_delta(descending):
    """A polynomial in z, highest power first, as one in z - 1, lowest power first."""
    shifted = [mp.mpf(0)] * len(descending)
    for coefficient in descending:
        shifted = [(shifted[k - 1] if k else 0) + shifted[k] for k in range(len(shifted))]
        shifted[0] += coefficient
    return shifted


def test_error_bounds_hold_and_stay_tight_on_random_plants():
    rng = np.random.default_rng(5)
    for _ in range(150):
        structure, values = random_loop(rng)

        def value(path, values=values):
            return mp.mpf(float(values.get(path, 0.0)))

        found = sample_plant(structure, as_block(values))
        numerator, denominator, whole = sampled_plant(structure, value)
        assert found.whole_delay.item() == whole + bool(found.fractional.item())
        if not found.fractional.item():
            # the hold switches at a sampling instant: one factor z cancels
            assert abs(numerator[-1]) < mp.mpf("1e-40") * abs(numerator[0])
            numerator = numerator[:-1]
        pairs = [
            *zip(in_delta(numerator), found.numerator, strict=False),
            *zip(in_delta(denominator), found.denominator, strict=True),
        ]
        for exact, coefficient in pairs:
            error = float(abs(mp.mpf(coefficient.value.item()) - exact))
            # fifty digits leave a remainder where the exact coefficient is 0
            assert error <= coefficient.error.item() + 1e-45
            assert coefficient.error.item() <= 1e-11 * abs(float(exact)) + 1e-300


@pytest.mark.parametrize(
    ("delay", "whole", "fraction"),
    [(0.0, 0, 0.0), (2.0, 2, 0.0), (1 + 1e-13, 1, 0.0), (1 - 1e-13, 1, 0.0), (2.25, 2, 0.25)],
)
def test_a_delay_within_a_trillionth_of_a_whole_sample_is_whole(delay, whole, fraction):
    structure = LoopStructure("integrator", "p", delay_parts=(("update", "samples"),))
    found = split_delay(
        structure, {"sample_period": np.array([0.3]), "delay.update": np.array([delay])}
    )
    assert found.whole.item() == whole
    assert found.fraction.value.item() == pytest.approx(fraction, abs=1e-15)


def test_parts_in_seconds_and_in_samples_add_up():
    structure = LoopStructure("integrator", "p", delay_parts=(("bus", "s"), ("update", "samples")))
    found = split_delay(
        structure,
        {
            "sample_period": np.array([0.002]),
            "delay.bus": np.array([0.005]),
            "delay.update": np.array([1.0]),
        },
    )
    assert found.whole.item() == 3
    assert found.fraction.value.item() == pytest.approx(0.5)


def test_a_bound_covers_every_operation_it_has_seen():
    rng = np.random.default_rng(2)
    a, b = Bounded.exact(rng.uniform(0.1, 2, 200)), Bounded.exact(rng.uniform(0.1, 2, 200))
    found = ((a + b) * a - b / a).exp().sqrt() + (a - b).expm1() * (a * b).sin()
    for first, second, value, error in zip(a.value, b.value, found.value, found.error, strict=True):
        x, y = mp.mpf(float(first)), mp.mpf(float(second))
        exact = mp.sqrt(mp.exp((x + y) * x - y / x)) + mp.expm1(x - y) * mp.sin(x * y)
        assert abs(mp.mpf(float(value)) - exact) <= error
    assert (found.error < 1e-13 * (1 + np.abs(found.value))).all()
