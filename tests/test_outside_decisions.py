"""Verdicts, distances and regions of real stored atlases against theorems and closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from checks_atlas import samples, sweep_atlas

# Levin and May 1976, A note on difference-delay equations, Theor. Popul. Biol. 9, 178-187 (from
# memory): x[n+1] = x[n] - q x[n-k] is stable for 0 < q < 2 cos(k pi / (2 k + 1)).
LEVIN_MAY = {
    0: 2.0,
    1: 1.0,
    2: 0.6180339887498948482045868,
    3: 0.4450418679126288085778051,
    4: 0.3472963553338606977034333,
    5: 0.2846296765465702808875853,
}
INTEGRATOR = f"""
title = "Integrator with delay"
sample_period = "1 s"
[plant]
kind = "integrator"
[controller]
kind = "p"
[axes.kp]
start = 0.01
stop = 0.81
count = 201
[axes.transport]
sets = "delay.transport"
values = [{samples(0, 1, 2, 3, 4, 5)}]
nominal = "1 sample"
[designs.firm]
kp = 0.3
[cases.plain]
over.transport = ["0 samples", "3 samples"]
"""


@pytest.fixture(scope="module")
def integrator(tmp_path_factory):
    return sweep_atlas(INTEGRATOR, tmp_path_factory.mktemp("integrator"))


@pytest.mark.parametrize("delay", [2, 3, 4, 5])
def test_the_distance_to_instability_is_levin_and_mays_for_the_longest_delay(integrator, delay):
    answer = integrator.judge(at={"kp": 0.25}, over={"transport": (0, delay)})
    (design,) = answer.designs
    up = next(d for d in design.distances if (d.axis, d.direction) == ("kp", "up"))
    assert up.end == "boundary"
    assert up.kind == "oscillation"
    assert up.to == pytest.approx(LEVIN_MAY[delay], abs=1e-4 * 0.8)
    assert up.db == pytest.approx(20 * math.log10(LEVIN_MAY[delay] / 0.25), abs=0.003)


@pytest.mark.parametrize("delay", [2, 3, 4, 5])
def test_the_gains_that_survive_every_delay_end_below_levin_and_mays(integrator, delay):
    answer = integrator.robust(over={"transport": (0, delay)})
    gains = integrator.grid.axis("kp").coordinates
    stable = gains[gains < LEVIN_MAY[delay]]
    assert answer.meets == len(stable)
    assert answer.regions == 1
    assert answer.largest_box.ends["kp"] == (stable[0], stable[-1])


def test_a_design_accepts_the_delays_of_which_its_gain_is_below_the_limit(integrator):
    """0.3 lies below the limit of four samples and above that of five."""
    answer = integrator.judge("firm", case="plain")
    (design,) = answer.designs
    assert design.verdict == "meets"
    assert design.acceptance.largest_box["transport"] == (0.0, 4.0)
    # grown about one sample, the range 0 to 3 reaches the failing node 5 at a factor of 2; its
    # bound may go to the last node before it
    assert design.in_hand.factor == pytest.approx(2.0)
    assert design.in_hand.holds_to == pytest.approx(1.5)


# lag plus one sample of delay, z^2 - p z + K (1 - p), p = exp(-a T): on K in [0.8, 1.2] and aT in
# [0.5, 1.5] the worst is a corner, and instability a factor 1 / (1.2 (1 - exp(-1.5))) in gain away
# (own construction)
GAIN_FACTOR = 1.072680763990723536947318
LAG = """
title = "Lag with one sample of delay"
sample_period = "1 s"
[plant]
kind = "lag"
[controller]
kind = "p"
kp = 1
[delay]
update = "1 sample"
[axes.plant_gain]
sets = "plant.gain"
start = 0.6
stop = 1.4
count = 201
nominal = 1
[axes.time_constant]
start = "0.5 s"
stop = "2 s"
count = 16
include = ["0.666666666666666666666666666667 s"]
"""


def test_the_gain_in_hand_past_a_box_is_the_closed_forms(tmp_path):
    atlas = sweep_atlas(LAG, tmp_path)
    answer = atlas.judge(over={"plant_gain": (0.8, 1.2), "time_constant": (2 / 3, 2.0)})
    (design,) = answer.designs
    assert design.verdict == "meets"
    up = next(d for d in design.distances if (d.axis, d.direction) == ("plant_gain", "up"))
    assert up.to == pytest.approx(1.2 * GAIN_FACTOR, abs=1e-4 * 0.8)
    assert up.db == pytest.approx(20 * math.log10(GAIN_FACTOR), abs=0.002)
    assert design.hurts_most[0].axis in {"plant_gain", "time_constant"}


# integrator with lag under P control without delay: Jury's conditions of degree two; tables of this
# kind stand in Kuo and in Dorf and Bishop (from memory)
LARGEST_GAIN = {
    0.5: 4.361993867092269075675325,
    1.0: 2.392211191177332814376553,
    2.0: 1.455678841855605369453854,
    4.0: 0.9652766625516770694540904,
    6.0: 0.4987667378143211244354536,
}
SERVO = """
title = "Integrator with lag"
[plant]
kind = "lagged_integrator"
time_constant = "1 s"
[controller]
kind = "p"
[axes.sample_period]
values = ["0.5 s", "1 s", "2 s", "4 s", "6 s"]
[axes.kp]
start = 0.013
stop = 4.613
count = 201
"""


def test_the_widest_gain_box_at_each_period_ends_below_jurys_limit(tmp_path):
    atlas = sweep_atlas(SERVO, tmp_path)
    gains = atlas.grid.axis("kp").coordinates
    answer = atlas.choose(best="gain_box")
    assert [row.sample_period_s for row in answer.rows] == list(LARGEST_GAIN)
    for row, limit in zip(answer.rows, LARGEST_GAIN.values(), strict=True):
        stable = gains[gains < limit]
        assert row.box.ends["kp"] == (stable[0], stable[-1])
    # at a gain of 0.9 the slowest period is the last of which the limit lies above it
    near = float(gains[np.abs(gains - 0.9).argmin()])
    assert atlas.choose(at={"kp": near}).slowest.sample_period_s == 4.0


def test_fifty_nine_of_fifty_nine_rows_show_95_percent_at_95_percent_confidence(tmp_path):
    """0.95 ** 59 < 0.05 <= 0.95 ** 58; common practice in acceptance by attributes."""
    rows = ", ".join(
        f'{{label = "unit {i}", time_constant = "{1 + 0.01 * i} s"}}' for i in range(59)
    )
    text = f"""
title = "Measured lags"
sample_period = "1 s"
[plant]
kind = "lag"
[controller]
kind = "p"
[axes.kp]
values = [0.5, 1, 1.5]
[axes.unit]
rows = [{rows}]
"""
    atlas = sweep_atlas(text, tmp_path)
    (design,) = atlas.judge(at={"kp": 1}).designs
    (found,) = design.yields
    assert (found.meets, found.rows) == (59, 59)
    assert found.at_least >= 0.95
    short = {"unit": tuple(f"unit {i}" for i in range(58))}
    (fewer,) = atlas.judge(at={"kp": 1}, over=short).designs[0].yields
    assert (fewer.meets, fewer.rows) == (58, 58)
    assert fewer.at_least < 0.95
