"""Axes, parameters of a block, and tiles that cover every node once."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweep.grid import Axis, FixedParameter, Grid, Tiling


def axis(name: str, values, **more) -> Axis:
    return Axis(name, (name,), np.asarray(values, dtype=float), "design", 0, **more)


@given(
    st.lists(st.tuples(st.integers(1, 9), st.integers(1, 5)), min_size=1, max_size=4),
)
def test_tiles_cover_every_node_exactly_once(sizes):
    shape, tile_shape = tuple(n for n, _ in sizes), tuple(t for _, t in sizes)
    covered = np.zeros(shape, dtype=int)
    tiling = Tiling(shape, tile_shape)
    tiles = list(tiling)
    for tile in tiles:
        covered[tile.block] += 1
        assert tile.size == covered[tile.block].size
    assert (covered == 1).all()
    assert len(tiles) == len(tiling)


def test_a_tile_outside_the_lattice_is_an_error():
    with pytest.raises(IndexError, match="no tile"):
        Tiling((4, 4), (2, 2)).tile((2, 0))


def test_a_tile_shape_of_another_rank_is_an_error():
    with pytest.raises(ValueError, match="does not fit"):
        Tiling((4, 4), (2,))


def test_parameters_broadcast_over_the_axes_that_move_them():
    rows = Axis(
        "unit",
        ("plant.damping", "plant.gain"),
        np.arange(2.0),
        "tolerance",
        0,
        labels=("a", "b"),
        ordered=False,
        columns={"plant.damping": np.array([0.1, 0.2]), "plant.gain": np.array([1.0, 2.0])},
    )
    grid = Grid((axis("kp", [1, 2, 3]), rows), (FixedParameter("sample_period", 0.5, "s"),))
    found = grid.parameters((slice(1, 3), slice(0, 2)))
    assert found["kp"].shape == (2, 1)
    assert found["plant.gain"].tolist() == [[1.0, 2.0]]
    assert found["sample_period"].tolist() == [[0.5]]
    assert grid.size == 6
    assert grid.paths() == ("kp", "plant.damping", "plant.gain", "sample_period")


def test_asking_an_axis_for_what_it_does_not_set_is_an_error():
    with pytest.raises(KeyError):
        axis("kp", [1, 2]).values_of("plant.gain")
    with pytest.raises(KeyError):
        Grid((axis("kp", [1, 2]),)).axis("kd")
