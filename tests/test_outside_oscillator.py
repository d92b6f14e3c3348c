"""The oscillator under proportional feedback: limits of stored atlases against closed forms."""

from __future__ import annotations

import json
import math
import subprocess
import sys

import numpy as np
import pytest
from checks_atlas import (
    Line,
    damped,
    damped_coefficients,
    oscillator,
    oscillator_intervals,
    periods,
    samples,
    sweep_atlas,
)

from sweep.__main__ import main

FREQUENCY_HZ = 10.0
RATIOS = (0.02, 0.1, 0.2, 0.25, 0.28, 0.3, 0.36, 0.4, 0.42, 0.45, 0.49, 0.6)
THIRDS = ("0.33333333333333333333", "0.66666666666666666667")
WHOLE = (0, 1, 2, 3, 5, 10)
FRACTIONS = (0.25, 0.5, 0.75)

CONFIG = f"""
title = "Undamped oscillator"
[plant]
kind = "oscillator"
natural_frequency = "{FREQUENCY_HZ} Hz"
damping = 0
[controller]
kind = "p"
[axes.sample_period]
values = [{periods(*sorted((*map(str, RATIOS), *THIRDS), key=float))}]
[axes.kp]
start = -1.507
stop = 1.493
count = 201
[axes.update]
sets = "delay.update"
values = [{samples(*sorted((*WHOLE, *FRACTIONS)))}]
"""


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    return sweep_atlas(CONFIG, tmp_path_factory.mktemp("oscillator"))


@pytest.fixture(scope="module")
def lines(atlas):
    """Every line along kp, by (T / T0, delay)."""
    answer = atlas.limits("kp", each=["update"], rows=1000)
    assert answer.rows_in_all == len(answer.rows)
    found = {}
    for row in answer.rows:
        ratio, delay = row.at["sample_period"] * FREQUENCY_HZ, row.at["update"]

        def polynomial(gain, ratio=ratio, delay=delay):
            return oscillator(ratio, delay, gain)

        line = Line(atlas, "kp", row, polynomial, row.at["sample_period"])
        found[round(ratio, 9), delay] = line
    return found


@pytest.mark.parametrize("ratio", RATIOS)
def test_without_delay_every_gain_between_minus_one_and_zero_is_stable_at_every_period(
    lines, ratio
):
    # own derivation: Jury's conditions of degree 2, and again bilinear transform and Hurwitz
    lines[ratio, 0].expect((-1, 0))


# Own derivation: Jury's conditions of degree 3, and again bilinear transform and Routh-Hurwitz.
ONE_SAMPLE = {
    0.02: (-1.0, 0),
    0.1: (-1.0, 0),
    0.2: (-1.0, 0),
    0.25: (-1.0, 0),
    0.28: (-0.5265683088896299666166923, 0),
    0.3: (-0.291796067500630910772479, 0),
    0.36: (0, 0.167853885870795644724602),
    0.4: (0, 0.3416407864998738178455042),
    0.45: (0, 0.4623715535946251023639734),
    0.49: (0, 0.4985185847038587718889032),
    0.6: (0, 0.3416407864998738178455042),
}


@pytest.mark.parametrize("ratio", ONE_SAMPLE)
def test_with_one_sample_of_delay_the_stable_gains_change_sign_at_a_third_of_the_period(
    lines, ratio
):
    lines[ratio, 1].expect(ONE_SAMPLE[ratio])


@pytest.mark.parametrize("ratio", [round(1 / 3, 9), round(2 / 3, 9)])
def test_at_a_third_of_the_natural_period_one_sample_of_delay_leaves_no_stable_gain(lines, ratio):
    # same derivation, c = -1/2
    assert lines[ratio, 1].row.intervals == ()
    assert lines[ratio, 1].row.unknown == 0
    assert lines[ratio, 0].row.intervals != ()


# Own derivation, the discrete counterpart of the lines of Hsu and Bhatt 1966.
MORE_SAMPLES = {
    (0.02, 2): (-1.0, 0),
    (0.1, 2): (-1.0, 0),
    (0.2, 2): None,
    (0.25, 2): (0, 0.3819660112501051517954132),
    (0.28, 2): (0, 0.5167523240041986000290078),
    (0.3, 2): (0, 0.583592135001261821544958),
    (0.36, 2): (0, 0.3391220788937083577260567),
    (0.4, 2): None,
    (0.45, 2): (-0.2355900736787387365278397, 0),
    (0.49, 2): (-0.3061262089756231833681511, 0),
    (0.6, 2): None,
}


@pytest.mark.parametrize(("ratio", "delay"), MORE_SAMPLES)
def test_with_two_samples_of_delay_the_stable_gains_are_those_between_straight_lines(
    lines, ratio, delay
):
    interval = MORE_SAMPLES[ratio, delay]
    lines[ratio, delay].expect(*([interval] if interval else []))


def test_the_lines_in_the_plane_of_cosine_and_gain_bound_every_stable_gain_at_any_whole_delay(
    lines,
):
    checked = {"smooth": 0, "between": 0}
    for (ratio, delay), line in lines.items():
        if delay not in WHOLE or (ratio in (0.333333333, 0.666666667) and delay % 3 == 1):
            continue
        intervals = oscillator_intervals(line.period_s * FREQUENCY_HZ, int(delay))
        for key, count in line.expect(*intervals).items():
            checked[key] += count
    # the criterion of smoothness sorts: neither side of it is empty, and few cells hold a kink
    assert checked["smooth"] > 100
    assert 1 <= checked["between"] < 0.1 * checked["smooth"]


def test_the_formula_for_the_lines_gives_the_published_numbers():
    for ratio, interval in ONE_SAMPLE.items():
        assert oscillator_intervals(ratio, 1) == [pytest.approx(interval, abs=1e-12)]
    for (ratio, delay), interval in MORE_SAMPLES.items():
        expected = [pytest.approx(interval, abs=1e-12)] if interval else []
        assert oscillator_intervals(ratio, delay) == expected
    assert oscillator_intervals(0.05, 10) == [
        pytest.approx((0, 0.09331788708953244023420677), abs=1e-12)
    ]


# The nonzero end of the stable gains next to zero; modified z-transform, Jury 1964, Astrom and
# Wittenmark 1997, chapter 2 (from memory), solved in 50 digits.
FRACTIONAL = {
    (0.3, 0.25): -1.0,
    (0.3, 0.5): -1.0,
    (0.3, 0.75): -1.0,
    (0.42, 0.25): -0.459290682974309697462436,
    (0.42, 0.5): -0.3310083052474805331287939,
    (0.42, 0.75): 0.1826818674450094829926168,
}


@pytest.mark.parametrize(("ratio", "delay"), FRACTIONAL)
def test_a_delay_of_part_of_a_sample_moves_the_stable_gains_as_the_modified_transform_says(
    lines, ratio, delay
):
    end = FRACTIONAL[ratio, delay]
    lines[ratio, delay].expect((min(end, 0), max(end, 0)))


def test_no_gain_is_stable_where_delay_and_half_a_sample_make_half_a_natural_period(lines):
    # sin(w (delay + T/2)) = 0: own derivation by perturbation (Horn and Johnson), then scanned
    assert lines[0.4, 0.75].row.intervals == ()


def test_the_command_line_gives_the_same_limits_as_the_theory(atlas, capsys):
    at = "sample_period=40ms,update=1"
    code = main(["limits", str(atlas.stored.path), "--along", "kp", "--at", at, "--json"])
    document = json.loads(capsys.readouterr().out)
    assert code == 0
    (row,) = document["rows"]
    (interval,) = row["intervals"]
    assert row["unknown"] == 0
    assert (interval["low_end"], interval["high_end"]) == ("boundary", "boundary")
    assert interval["low"] == pytest.approx(0, abs=3e-4)
    assert interval["high"] == pytest.approx(0.3416407864998738178455042, abs=3e-4)
    assert interval["low_between"][0] > 0 > interval["low_between"][1]
    # at the upper end the pair stands at 120 degrees a sample, at the lower one at 10 Hz
    assert interval["high_kind"] == interval["low_kind"] == "oscillation"
    assert interval["low_hz"] == pytest.approx(10, rel=1e-3)
    assert interval["high_hz"] == pytest.approx(1 / (3 * 0.04), rel=1e-3)


def test_a_process_of_its_own_finds_no_stable_gain_at_a_third_of_the_period(atlas):
    periods_s = atlas.grid.axis("sample_period").coordinates
    period_s = float(periods_s[np.abs(periods_s - 0.1 / 3).argmin()])
    at = f"sample_period={period_s!r},update=1"
    command = ["limits", str(atlas.stored.path), "--along", "kp", "--at", at, "--json"]
    run = subprocess.run([sys.executable, "-m", "sweep", *command], capture_output=True, text=True)
    assert run.returncode == 0, run.stderr
    assert [row["intervals"] for row in json.loads(run.stdout)["rows"]] == [[]]


# --- along other axes than a gain ---------------------------------------------------------------

ALONG_THE_PERIOD = """
title = "Along the sample period"
[plant]
kind = "oscillator"
natural_frequency = "10 Hz"
damping = 0
[controller]
kind = "p"
kp = -0.3
[delay]
update = "1 sample"
[axes.sample_period]
"""


def test_along_the_sample_period_every_stable_stretch_is_found(tmp_path):
    # c > -(1 + K) / (2 - K) from the conditions of degree 3: own derivation
    edge = math.acos(-0.7 / 2.3) / (2 * math.pi)
    body = 'start = "2.03 ms"\nstop = "98.03 ms"\ncount = 201\n'
    atlas = sweep_atlas(ALONG_THE_PERIOD + body, tmp_path)
    (row,) = atlas.limits("sample_period").rows
    line = Line(atlas, "sample_period", row, lambda t: oscillator(10 * t, 1, -0.3), None)
    checked = line.expect((None, 0.1 * edge), (0.1 * (1 - edge), None))
    assert checked == {"smooth": 2, "between": 0}
    (first, second) = row.intervals
    # 120 degrees a sample, at the period of the boundary
    assert first.high.hz == pytest.approx(1 / (3 * 0.1 * edge), rel=1e-3)
    assert second.low.hz == pytest.approx(1 / (3 * 0.1 * (1 - edge)), rel=1e-3)


def test_a_stable_stretch_of_sample_periods_ends_at_the_natural_period_where_it_is_a_node(
    tmp_path,
):
    # At T = T0 the resonance is hidden and marginal (Kalman, Ho and Narendra 1963).
    body = 'start = "70.3 ms"\nstop = "130.3 ms"\ncount = 201\n'
    atlas = sweep_atlas(ALONG_THE_PERIOD + body, tmp_path)
    (row,) = atlas.limits("sample_period").rows
    below, above = row.intervals
    assert below.high.between[1] == above.low.between[1] == 0.1
    assert below.high.value == pytest.approx(0.1, abs=6e-6)
    assert above.low.value == pytest.approx(0.1, abs=6e-6)
    assert not atlas.point({"sample_period": 0.1}).stable


def test_along_the_natural_frequency_a_tolerance_axis_has_limits_too(tmp_path):
    text = """
    title = "Along the natural frequency"
    sample_period = "10 ms"
    [plant]
    kind = "oscillator"
    damping = 0
    [controller]
    kind = "p"
    kp = -0.3
    [delay]
    update = "1 sample"
    [axes.natural_frequency]
    start = "1.07 Hz"
    stop = "41.07 Hz"
    count = 201
    """
    atlas = sweep_atlas(text, tmp_path)
    (row,) = atlas.limits("natural_frequency").rows
    line = Line(atlas, "natural_frequency", row, lambda f: oscillator(0.01 * f, 1, -0.3), 0.01)
    line.expect((None, 100 * math.acos(-0.7 / 2.3) / (2 * math.pi)))
    assert atlas.grid.axis("natural_frequency").role == "tolerance"


# --- damping ------------------------------------------------------------------------------------

DAMPINGS = (0.002, 0.05, 0.5, 2.0)
DAMPED_RATIOS = (0.1, 0.17, 0.3, 0.45, 0.7)


def damped_interval(ratio: float, damping: float) -> tuple[float, float]:
    """-1 < K below both conditions of degree 2 (Jury 1964): own construction."""
    b1, b2, a1, a2 = damped_coefficients(2 * math.pi * ratio, damping)
    above = [(1 - a2) / b2] if b2 > 0 else []
    above += [(1 - a1 + a2) / (b1 - b2)] if b1 > b2 else []
    below = [-1.0] + ([-(1 - a1 + a2) / (b2 - b1)] if b2 > b1 else [])
    return max(below), min(above)


@pytest.fixture(scope="module")
def damped_atlas(tmp_path_factory):
    text = f"""
    title = "Damped oscillator"
    [plant]
    kind = "oscillator"
    natural_frequency = "10 Hz"
    [controller]
    kind = "p"
    [axes.damping]
    values = {list(DAMPINGS)}
    nominal = 0.05
    [axes.kp]
    start = -1.507
    stop = 9.913
    count = 201
    [axes.sample_period]
    values = [{periods(*DAMPED_RATIOS)}]
    """
    return sweep_atlas(text, tmp_path_factory.mktemp("damped"))


def test_damping_widens_the_stable_gains_as_the_conditions_of_degree_two_say(damped_atlas):
    answer = damped_atlas.limits("kp", each=["damping"])
    smooth = 0
    for row in answer.rows:
        ratio, damping = 10 * row.at["sample_period"], row.at["damping"]
        low, high = damped_interval(ratio, damping)

        def polynomial(gain, ratio=ratio, damping=damping):
            return damped(ratio, damping, gain)

        line = Line(damped_atlas, "kp", row, polynomial, row.at["sample_period"])
        smooth += line.expect((low, high if high < 9.9 else None))["smooth"]
    assert smooth > 20


def test_the_worst_damping_bounds_the_gains_that_hold_for_every_damping(damped_atlas):
    nodes = damped_atlas.grid.axis("kp").coordinates
    answer = damped_atlas.limits("kp")
    assert answer.over == {"damping": (0.002, 2.0)}
    for row in answer.rows:
        ratio = 10 * row.at["sample_period"]
        pairs = [damped_interval(ratio, damping) for damping in DAMPINGS]
        low, high = max(pair[0] for pair in pairs), min(pair[1] for pair in pairs)
        seen = bool(((nodes > low) & (nodes < high)).any())
        assert len(row.intervals) == seen
        for interval in row.intervals:
            assert min(interval.low.between) < low < max(interval.low.between)
            assert min(interval.high.between) < high < max(interval.high.between)
            assert interval.high.worst["damping"] == DAMPINGS[int(np.argmin([b for _, b in pairs]))]
