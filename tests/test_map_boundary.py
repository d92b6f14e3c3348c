"""The line on a map is where the limits are: at every grid line, in both directions."""

from __future__ import annotations

import time

import numpy as np
import pytest
from memory_atlas import atlas, axis, rows

from sweep import load_config, open_atlas, run
from sweep.views.figures import draw_map

NEAR = 1e-9


def ends_on_grid_lines(plane, along):
    """Places where the pieces meet the grid lines that run along an axis, as (at, other)."""
    side = 0 if along == plane.x else 1
    other = plane.grid.axis(plane.y if side == 0 else plane.x).coordinates
    points = plane.boundary.reshape(-1, 2)
    found = np.stack([points[:, side], points[:, 1 - side]], axis=-1)
    return found[np.isin(found[:, 1], other)]


def limit_places(asked, along, other, at):
    """The boundaries that ``limits`` finds along one axis, as (at, other)."""
    answer = asked.limits(along, at=at, nominal=True, each=[other], rows=10_000)
    return np.array(
        [
            (end.value, row.at[other])
            for row in answer.rows
            for interval in row.intervals
            for end in (interval.low, interval.high)
            if end.end == "boundary"
        ]
    ).reshape(-1, 2)


def distance(a, b):
    """From each of the places a to the nearest of b."""
    if not len(b):
        return np.full(len(a), np.inf)
    return np.abs(a[:, None] - b[None]).max(axis=-1).min(axis=-1)


def check_meets_limits(asked, x, y, at=None):
    """Both ways: no end off a limit, no limit without an end; and how many limits there are."""
    plane = asked.plane(x, y, at=at)
    count = []
    every = [limit_places(asked, x, y, at), limit_places(asked, y, x, at)[:, ::-1]]
    points = plane.boundary.reshape(-1, 2)
    assert distance(points, np.concatenate(every)).max(initial=0.0) < NEAR
    for along, other in ((x, y), (y, x)):
        wanted = limit_places(asked, along, other, at)
        assert distance(wanted, ends_on_grid_lines(plane, along)).max(initial=0.0) < NEAR
        count.append(len(wanted))
    return plane, count


def swept(tmp_path, text):
    path = tmp_path / "asked.toml"
    path.write_text(text, encoding="utf-8")
    run(load_config(path), tmp_path / "shelf")
    return open_atlas("Bench", tmp_path / "shelf")


RINGING = """
title = "Bench"
[plant]
kind = "oscillator"
natural_frequency = "40 Hz"
[controller]
kind = "pd"
[delay]
update = "1 sample"
[axes.sample_period]
start = "2 ms"
stop = "30 ms"
step = "1 ms"
[axes.kp]
start = -1.5
stop = 1.5
step = 0.1
[axes.kd]
values = [0, "0.5 ms"]
[axes.damping]
values = [0.01, 0.02]
"""

INTEGRAL = """
title = "Bench"
sample_period = "0.5 s"
[plant]
kind = "lag"
time_constant = "1 s"
[controller]
kind = "pi"
[axes.kp]
start = 0
stop = 8
step = 0.1
[axes.ki]
start = -0.4
stop = 2
step = 0.1
"""


def test_a_smooth_boundary_meets_the_limits_along_both_axes(tmp_path):
    asked = swept(tmp_path, RINGING)
    for kd in (0.0, 0.0005):
        _, count = check_meets_limits(asked, "sample_period", "kp", {"kd": kd})
        assert min(count) > 20


def test_where_an_integral_gain_vanishes_the_boundary_lies_on_its_node(tmp_path):
    asked = swept(tmp_path, INTEGRAL)
    (row,) = asked.limits("ki", at={"kp": 0.5}).rows
    assert row.intervals[0].low.value == 0.0
    plane, count = check_meets_limits(asked, "kp", "ki")
    assert min(count) > 20
    assert plane.boundary[..., 1].min() == 0.0
    on_node = plane.boundary[(plane.boundary[..., 1] == 0.0).all(axis=1)]
    starts = np.sort(on_node[..., 0].min(axis=1))
    assert np.allclose(starts, np.linspace(0, 4.0, 41)), "one piece for each cell, and no gap"


def wavy(unknown=()):
    kp, kd = axis("kp", np.linspace(0, 3, 31)), axis("kd", np.linspace(0, 2, 21))
    values = np.sin(3 * kp.coordinates)[:, None] * np.cos(4 * kd.coordinates)[None] - 0.1
    for place in unknown:
        values[place] = np.nan
    return atlas([kp, kd], values)


def test_islands_and_saddles_meet_the_limits():
    _, count = check_meets_limits(wavy(), "kd", "kp")
    assert min(count) > 20


def test_next_to_unknown_nodes_there_is_no_line_but_where_a_limit_is():
    asked = wavy([np.s_[12:18, 5:15], np.s_[3, 3], np.s_[25:, :]])
    plane = asked.plane("kd", "kp")
    limits = [limit_places(asked, "kd", "kp", None), limit_places(asked, "kp", "kd", None)[:, ::-1]]
    points = plane.boundary.reshape(-1, 2)
    assert distance(points, np.concatenate(limits)).max() < NEAR
    whole = wavy().plane("kd", "kp").boundary
    x, y = (plane.grid.axis(name).coordinates for name in ("kd", "kp"))
    middle = whole.mean(axis=1)
    i, j = (np.searchsorted(c, m) - 1 for c, m in zip((x, y), middle.T, strict=True))
    blind = np.isnan(plane.log_radius)
    near = blind[j, i] | blind[j + 1, i] | blind[j, i + 1] | blind[j + 1, i + 1]
    assert 0 < len(plane.boundary) == (~near).sum() < len(whole)


def test_four_crossings_round_a_cell_are_joined_the_shortest_way():
    kp, kd = axis("kp", [0.0, 1.0]), axis("kd", [0.0, 1.0])
    plane = atlas([kd, kp], [[-0.1, 0.4], [0.4, -0.1]]).plane("kp", "kd")
    assert len(plane.boundary) == 2
    assert np.allclose(np.ptp(plane.boundary, axis=1), 0.2, atol=0.05)


def test_a_plane_one_node_wide_is_crossed_where_the_limit_is():
    asked = atlas([axis("kp", [0.5]), axis("ki", [1.0, 2.0])], [[-0.1, 0.3]])
    (row,) = asked.limits("ki").rows
    (piece,) = asked.plane("kp", "ki").boundary
    assert piece.tolist() == [[0.5, row.intervals[0].high.value]] * 2
    (line,) = boundary_drawn(asked.plane("kp", "ki"))
    assert np.ptp(line[:, 0]) > 0.1


def test_along_rows_there_is_no_boundary_between_nodes():
    asked = atlas([rows("unit", "ab", {"plant.gain": [1, 2]}), axis("kp", [0, 1])], [[-1, 1]] * 2)
    plane = asked.plane("unit", "kp")
    assert plane.boundary.shape == (0, 2, 2)
    assert len(boundary_drawn(plane)) == 2


def boundary_drawn(plane):
    """The line on the map, in the units of its axes."""
    (lines,) = [c for c in draw_map(plane).axes[0].collections if c.get_label() == "boundary"]
    return [path.vertices for path in lines.get_paths()]


def test_the_line_is_drawn_where_the_answer_has_it(tmp_path):
    plane = swept(tmp_path, RINGING).plane("sample_period", "kp")
    assert np.allclose(boundary_drawn(plane), plane.boundary * [1000.0, 1.0])


@pytest.mark.parametrize("value", [-0.3, 0.3, np.nan])
def test_without_a_limit_there_is_no_line(value):
    kp, kd = axis("kp", [0.0, 1.0]), axis("kd", [0.0, 1.0])
    assert not len(atlas([kp, kd], np.full((2, 2), value)).plane("kp", "kd").boundary)


def test_a_plane_of_forty_thousand_nodes_is_answered_within_seconds():
    kp, kd = axis("kp", np.linspace(0, 1, 200)), axis("kd", np.linspace(0, 1, 200))
    values = np.sin(20 * kp.coordinates)[:, None] * np.sin(23 * kd.coordinates)[None] - 0.1
    start = time.process_time()
    assert len(atlas([kp, kd], values).plane("kp", "kd").boundary) > 1000
    assert time.process_time() - start < 6.0
