"""Logarithm and argument on lanes agree with the library's own."""

import math

import numba
import numpy as np
import pytest

from sweep.measures.elementary import argument, log_of_radius
from sweep.measures.lanes import WIDTH, load, store


@numba.njit
def _both(first, second, out):
    for row in range(out.shape[1]):
        store(out[0], row, log_of_radius(load(first, row), load(second, row)))
        store(out[1], row, argument(load(first, row), load(second, row)))


def run(first, second):
    out = np.zeros((2, len(first) // WIDTH, WIDTH))
    _both(first.reshape(-1, WIDTH), second.reshape(-1, WIDTH), out)
    return out[0].ravel(), out[1].ravel()


def test_the_logarithm_of_a_radius_keeps_its_digits_from_tiny_to_huge():
    rng = np.random.default_rng(0)
    near = rng.choice([-1, 1], 800) * 10 ** rng.uniform(-18, -0.31, 800)
    logarithm, _ = run(near, np.sqrt(1 + near))
    expected = np.array([0.5 * math.log1p(value) for value in near])
    assert logarithm == pytest.approx(expected, rel=6e-16, abs=0)
    modulus = 10 ** rng.uniform(-140, 140, 800)
    logarithm, _ = run(modulus**2 - 1, modulus)
    assert logarithm == pytest.approx(np.log(modulus), rel=1e-15, abs=1e-15)


def test_the_argument_covers_the_upper_half_plane_and_its_edges():
    angle = np.linspace(0, math.pi, 4000)
    size = 10 ** np.random.default_rng(1).uniform(-5, 5, 4000)
    _, found = run(size * np.cos(angle), -size * np.sin(angle))
    assert found == pytest.approx(angle, abs=1e-15)
    _, edges = run(np.array([0.0, 1, -1, 0, 0, 2, -2, 1]), np.array([0.0, 0, 0, 3, -3, 2, 2, 1e-9]))
    quarter = math.pi / 4
    expected = [0, 0, math.pi, 2 * quarter, 2 * quarter, quarter, 3 * quarter, 1e-9]
    assert edges == pytest.approx(expected, rel=1e-15, abs=0)
