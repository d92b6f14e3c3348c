"""Runs with the real kernel: the same numbers for any number of workers and any tiling."""

import numpy as np
import pytest
import stand_in

from sweep.compute.run import run_sweep
from sweep.grid import Tiling
from sweep.measures.radius import compute_radius
from sweep.store.atlas import open_stored
from sweep.vocabulary import LOG_RADIUS_FLOOR

TILES, OTHER_TILES = (5, 16, 2, 2, 3), (13, 9, 3, 1, 2)


@pytest.fixture(scope="module")
def stored(tmp_path_factory):
    """The small config in three atlases: two workers, one worker, other tiles."""
    kinds = {
        "two": (2, (5, 16, 2, 2, 3)),
        "one": (1, (5, 16, 2, 2, 3)),
        "other": (2, (13, 9, 3, 1, 2)),
    }
    return {
        name: run_sweep(
            stand_in.small(), tmp_path_factory.mktemp(name), workers=workers, tile_shape=tile_shape
        )
        for name, (workers, tile_shape) in kinds.items()
    }


def values(report, measure):
    return open_stored(report.atlas).read(measure, [slice(None)] * 5)


def test_one_worker_and_two_store_the_same_bits(stored):
    assert stand_in.objects_of(stored["one"].atlas) == stand_in.objects_of(stored["two"].atlas)


def error_bounds(tile_shape):
    """The kernel's own error bound at every node when it is asked tile by tile."""
    config = stand_in.small()
    bounds = np.empty(config.grid.shape)
    for tile in Tiling(config.grid.shape, tile_shape):
        parameters = config.grid.parameters(tile.block)
        bounds[tile.block] = compute_radius(config.structure, parameters, tile.shape).bound
    return bounds


def test_two_tile_shapes_agree_within_a_float32_step_or_the_nodes_own_error_bound(stored):
    one, other = values(stored["one"], "log_radius"), values(stored["other"], "log_radius")
    step = np.spacing(np.maximum(np.abs(one), np.abs(other)))
    bounds = error_bounds(TILES) + error_bounds(OTHER_TILES)
    assert np.median(bounds) < 1e-9
    assert np.all(np.abs(one.astype("f8") - other) <= np.maximum(step, bounds))


def test_stored_values_are_known_floored_and_in_range(stored):
    radius, angle = values(stored["one"], "log_radius"), values(stored["one"], "mode_angle")
    assert np.all(radius >= LOG_RADIUS_FLOOR)
    assert np.all((angle >= 0) & (angle <= np.float32(np.pi)))
    assert 0 < np.mean(radius < 0) < 1
