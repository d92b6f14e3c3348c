"""The worst case lies inside a range: the answer finds it, and its corners would have passed."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
import stand_in
from checks_atlas import periods, sweep_atlas

from sweep.config import parse_config
from sweep.query.atlas import open_atlas
from sweep.store.atlas import create_atlas

FLOAT32 = 2.5e-7


def corners(answer_at, box):
    """Answers with every axis of the box at one of its ends."""
    ends = itertools.product(*box.values())
    return [answer_at(dict(zip(box, one, strict=True))) for one in ends]


# --- an interval polynomial, as a written store -------------------------------------------------
# z^4 + a z^3 + 1.5 z^2 - 1/3 with |a| <= 17/8: counterexample attributed to Hollot and Bartlett
# (1986) and Bose and Zeheb (1986), in Barmish, New Tools for Robustness of Linear Systems (1994)

STABLE_FROM = 2.108185106778919  # and up to 13/6, beyond the range
RADIUS_AT_THE_END, RADIUS_IN_THE_MIDDLE = 0.986307291565783853, 1.302491736749237731

INTERVAL = """
title = "Interval polynomial"
sample_period = "1 s"
[plant]
kind = "integrator"
[controller]
kind = "p"
[axes.kp]
values = [1, 2]
[axes.a]
sets = "plant.gain"
values = [-2.125, -2.11, -2.1, -1, 0, 1, 2.1, 2.11, 2.125]
"""


def radius(a):
    return np.abs(np.roots([1, a, 1.5, 0, -1 / 3])).max()


@pytest.fixture(scope="module")
def interval(tmp_path_factory):
    """The polynomial at kp = 1, in tiles that cut the range of a; a quiet design at kp = 2."""
    folder = tmp_path_factory.mktemp("interval")
    config = parse_config(INTERVAL, folder=folder, source="interval")
    stored = create_atlas(folder / "interval.zarr", config, (1, 4))
    for tile in stored.tiling:
        a = config.grid.axis("a").coordinates[tile.block[1]]
        line = [math.log(radius(x)) if tile.index[0] == 0 else -0.5 for x in a]
        log_radius = np.array([line])
        measures = {"log_radius": log_radius, "mode_angle": np.ones(tile.shape)}
        stored_as = {name: values.astype(np.float32) for name, values in measures.items()}
        stand_in.write_tile(stored, tile, stored_as)
    return open_atlas(folder / "interval.zarr")


def test_an_unstable_middle_fails_a_design_whose_corners_are_stable(interval):
    assert radius(17 / 8) == pytest.approx(RADIUS_AT_THE_END, rel=1e-12)
    assert radius(0) == pytest.approx(RADIUS_IN_THE_MIDDLE, rel=1e-12)
    for require in ({}, {"max_radius": (RADIUS_AT_THE_END + RADIUS_IN_THE_MIDDLE) / 2}):
        by_corners = corners(
            lambda at, require=require: interval.robust(at={"kp": 1, **at}, require=require),
            {"a": (-2.125, 2.125)},
        )
        assert [answer.meets for answer in by_corners] == [1, 1]
        answer = interval.robust(require=require)
        assert (answer.meets, answer.fails) == (1, 1)
        found = answer.dataset.sel(kp=1)
        assert float(found["verdict"]) == 0
        assert float(found["log_radius"]) == pytest.approx(math.log(RADIUS_IN_THE_MIDDLE), rel=3e-7)
        assert float(found["log_radius_at_a"]) == 0
        assert answer.worst.at["kp"] == 2


def test_the_stable_ends_of_the_range_are_two_intervals(interval):
    low, high = interval.limits("a", at={"kp": 1}).rows[0].intervals
    assert (low.low.value, low.high.between) == (-2.125, (-2.11, -2.1))
    assert (high.low.between, high.high.value) == ((2.11, 2.1), 2.125)
    assert high.low.value == pytest.approx(STABLE_FROM, abs=1e-4)
    # a box inside one of them is robust
    for ends in ((2.11, 2.125), (-2.125, -2.11)):
        assert interval.robust(at={"kp": 1}, over={"a": ends}).meets == 1
    assert interval.robust(at={"kp": 1}, over={"a": (2.105, 2.125)}).meets == 0


def test_a_verdict_on_one_design_finds_the_middle_too(interval):
    (design,) = interval.judge(at={"kp": 1}, over={"a": (-2.125, 2.125)}).designs
    line = design.lines[0]
    assert (design.verdict, line.verdict) == ("fails", "fails")
    assert line.at["a"] == 0
    assert line.worst == pytest.approx(math.log(RADIUS_IN_THE_MIDDLE), rel=3e-7)


# --- a lag with one sample of delay: the worst case is a corner ----------------------------------
# own derivation: z^2 - p z + K (1 - p), p = exp(-a T), is complex on K in [0.8, 1.2] and a T in
# [0.5, 1.5], where its radius is sqrt(K (1 - p))

WORST, BEST, GAIN_FACTOR = 0.96552773539753073783, 0.56104854712394832222, 1.07268076399072353695

LAG = """
title = "Lag"
sample_period = "1 s"
[plant]
kind = "lag"
[controller]
kind = "p"
[delay]
update = "1 sample"
[axes.time_constant]
values = [0.6666666666666666666667, 0.8, 1, 1.3333333333333333333333, 2]
[axes.kp]
values = [1, 1.07, 1.075, 1.2]
[axes.gain]
values = [0.8, 0.9, 1, 1.1, 1.2]
"""


def test_a_corner_is_found_where_it_is_the_worst(tmp_path):
    atlas = sweep_atlas(LAG, tmp_path)
    answer = atlas.robust(require={"min_radius": 0.1})
    assert answer.dataset["verdict"].to_numpy().tolist() == [1, 1, 0, 0]
    found = answer.dataset.sel(kp=1)
    assert math.exp(float(found["log_radius"])) == pytest.approx(WORST, rel=FLOAT32)
    assert float(found["log_radius_at_gain"]) == 1.2
    assert float(found["log_radius_at_time_constant"]) == pytest.approx(1 / 1.5)
    assert float(found["radius"]) == pytest.approx(BEST, rel=FLOAT32)
    assert float(found["radius_at_gain"]) == 0.8
    assert float(found["radius_at_time_constant"]) == 2
    assert answer.worst.at["kp"] == 1.07
    # up to which gain all of it is stable
    (row,) = atlas.limits("kp").rows
    (interval,) = row.intervals
    assert interval.high.between == (1.07, 1.075)
    assert interval.high.value == pytest.approx(GAIN_FACTOR, abs=1e-5)
    # inside the corner that is left out, more gain is allowed
    assert atlas.robust(over={"gain": "0.8:1.1"}).meets == 3


# --- an oscillator whose worst damping lies inside its range --------------------------------------
# own construction: T = 0.41 natural periods, kp = -0.45, damping 0.002 to 0.05

INNER = 0.032898865
RADII = {0.002: 0.55186051453813818, INNER: 0.5682384100982729, 0.05: 0.56546004764354894}

OSCILLATOR = f"""
title = "Inner damping"
[plant]
kind = "oscillator"
natural_frequency = "0.159154943091895335768883763 Hz"
[controller]
kind = "p"
[axes.sample_period]
values = [{periods(0.41)}]
[axes.kp]
values = [-0.45, -0.2]
[axes.damping]
values = [0.002, 0.02, 0.0325, {INNER}, 0.0333, 0.04, 0.05]
"""


def test_a_smooth_worst_case_inside_a_range_breaks_a_bound_that_both_its_ends_keep(tmp_path):
    atlas = sweep_atlas(OSCILLATOR, tmp_path)
    require = {"max_radius": (RADII[INNER] + RADII[0.05]) / 2}
    by_corners = corners(
        lambda at: atlas.robust(at={"kp": -0.45, **at}, require=require),
        {"damping": (0.002, 0.05)},
    )
    assert [answer.meets for answer in by_corners] == [1, 1]
    for answer, ends in zip(by_corners, (0.002, 0.05), strict=True):
        assert math.exp(answer.worst.log_radius) == pytest.approx(RADII[ends], rel=FLOAT32)
    answer = atlas.robust(at={"kp": -0.45}, require=require)
    assert (answer.meets, answer.fails) == (0, 1)
    found = answer.dataset
    assert float(found["radius"].item()) == pytest.approx(RADII[INNER], rel=FLOAT32)
    assert found["radius_at_damping"].item() == INNER
    # the decay time says the same
    period_s = float(atlas.grid.axis("sample_period").coordinates[0])
    limit_s = -period_s / math.log(require["max_radius"])
    assert atlas.robust(at={"kp": -0.45}, require={"max_decay_time": limit_s}).fails == 1
    (design,) = atlas.judge(
        at={"kp": -0.45, "sample_period": period_s}, over={"damping": "0.002:0.05"}, require=require
    ).designs
    line = next(line for line in design.lines if "radius" in line.require)
    assert (design.verdict, line.at["damping"]) == ("fails", INNER)
