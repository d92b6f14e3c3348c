"""Resonances that sampling hides: the stored radius counts them, and no answer says stable."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from checks_atlas import periods, samples, sweep_atlas

from sweep.__main__ import main

HALVES = (0.5, 1, 1.5, 2, 2.5, 3)
GAINS = np.linspace(-1.7, 1.7, 69)
ROUNDING = 1e-13


def oscillator_text(damping: float, sample_periods: str, delays: str) -> str:
    return f"""
    title = "Hidden modes"
    [plant]
    kind = "oscillator"
    natural_frequency = "7.3 Hz"
    damping = {damping}
    [controller]
    kind = "p"
    [axes.sample_period]
    values = [{sample_periods}]
    [axes.kp]
    start = -1.7
    stop = 1.7
    step = 0.05
    [axes.update]
    sets = "delay.update"
    values = [{delays}]
    """


@pytest.fixture(scope="module")
def undamped(tmp_path_factory):
    text = oscillator_text(0, periods(*HALVES), samples(0, 0.4, 1, 2, 3.7))
    return sweep_atlas(text, tmp_path_factory.mktemp("undamped"))


# Controllability is lost at multiples of half the natural period: Kalman, Ho and Narendra (1963),
# Controllability of linear dynamical systems, Contrib. Differential Equations 1, 189-213 (partly
# from memory). The radii follow from it: own derivation.


@pytest.mark.parametrize("half", range(len(HALVES)))
def test_at_multiples_of_half_the_natural_period_no_gain_brings_the_radius_below_one(
    undamped, half
):
    stored = undamped.dataset["log_radius"].isel(sample_period=half)
    assert stored.shape == (69, 5)
    assert float(stored.min()) >= -ROUNDING
    gains = stored["kp"].to_numpy()
    assert gains == pytest.approx(GAINS)
    radius = np.exp(stored.sel(update=0).to_numpy().astype(float))
    whole = HALVES[half] == int(HALVES[half])
    expected = np.ones(69) if whole else np.maximum(1, np.abs(1 + 2 * gains))
    assert radius == pytest.approx(expected, abs=3e-7)
    if whole:
        # an output held for whole natural periods moves nothing: no gain reaches either mode
        for delay in (1, 2):
            assert np.abs(stored.sel(update=delay)).max() < ROUNDING


@pytest.mark.parametrize("along", ["kp", "update", "sample_period"])
def test_no_stable_interval_is_found_along_any_axis(undamped, along):
    each = [] if along == "update" else ["update"]
    answer = undamped.limits(along, each=each, rows=1000)
    assert len(answer.rows) == answer.rows_in_all > 1
    assert all(row.intervals == () and row.unknown == 0 for row in answer.rows)


def test_no_point_is_called_stable_or_given_a_decay_time(undamped):
    for half in undamped.grid.axis("sample_period").coordinates:
        for gain in (-0.5, -0.05, 0, 0.3):
            for delay in (0, 0.4, 2):
                asked = {"sample_period": float(half), "kp": gain, "update": delay}
                found = undamped.point(asked)
                assert found.stable is False
                assert found.derived["decay_time"] == math.inf


def test_the_command_line_finds_no_limits_and_calls_the_point_unstable(undamped, capsys):
    path = str(undamped.stored.path)
    assert main(["limits", path, "--along", "kp", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert len(document["rows"]) == len(HALVES)
    assert all(row["intervals"] == [] for row in document["rows"])
    period_s = float(undamped.grid.axis("sample_period").coordinates[0])
    at = f"sample_period={period_s!r},kp=-0.5,update=0"
    assert main(["point", path, "--at", at, "--json"]) == 0
    point = json.loads(capsys.readouterr().out)
    assert point["stable"] is False
    assert point["derived"]["decay_time"] == "inf"
    magnitudes = [mode["magnitude"] for mode in point["computed_now"]["modes"]]
    # the hidden mode is listed: 1, and the one that the gain moves, |1 + 2 K| = 0
    assert magnitudes[0] == pytest.approx(1, abs=1e-9)
    assert magnitudes[-1] == pytest.approx(0, abs=1e-9)


def test_a_hair_beside_the_multiple_the_loop_is_stable_again(tmp_path):
    # what is called unstable is the hidden mode and not its surroundings
    text = oscillator_text(0, periods(0.49, 0.5, 0.51, 0.99, 1, 1.01), samples(0))
    atlas = sweep_atlas(text, tmp_path)
    found = [
        atlas.point({"sample_period": float(period_s), "kp": -0.5}).stable
        for period_s in atlas.grid.axis("sample_period").coordinates
    ]
    assert found == [True, False, True, True, False, True]


# --- damped -------------------------------------------------------------------------------------
# Own derivation, damping 0.05 and wd T = pi or 2 pi: eigenvalues -al (hidden) and -al - K (1 + al),
# or al (hidden) and al - K (1 - al), al = exp(-damping w0 T).

DAMPED = {
    (1, -0.9): 0.8544678930067564739350557,
    (1, 0.02): 0.8915572508668916034137568,
    (1, -1.5): 1.927233946503378236967528,
    (2, -0.9): 0.9730115380179405829094839,
    (2, 0.02): 0.7301153801794058290948385,
    (2, -1.5): 1.134942309910297085452581,
}
HIDDEN = {1: 0.8544678930067564739350557, 2: 0.7301153801794058290948385}


@pytest.fixture(scope="module")
def damped(tmp_path_factory):
    # T = half / (2 f sqrt(1 - 0.05^2)): 0.50062617... natural periods
    ratios = [half / 2 / math.sqrt(1 - 0.05**2) for half in (1, 2)]
    text = oscillator_text(0.05, periods(*map(repr, ratios)), samples(0))
    text = text.replace("step = 0.05", "step = 0.02")
    return sweep_atlas(text, tmp_path_factory.mktemp("damped"))


@pytest.mark.parametrize(("half", "gain"), DAMPED)
def test_a_damped_hidden_mode_is_the_radius_where_the_other_one_is_faster(damped, half, gain):
    period_s = float(damped.grid.axis("sample_period").coordinates[half - 1])
    found = damped.point({"sample_period": period_s, "kp": gain})
    assert found.derived["radius"] == pytest.approx(DAMPED[half, gain], rel=1e-6)
    assert found.stable == (DAMPED[half, gain] < 1)


@pytest.mark.parametrize("half", [1, 2])
def test_no_gain_makes_the_loop_faster_than_its_damped_hidden_mode(damped, half):
    stored = damped.dataset["log_radius"].isel(sample_period=half - 1, update=0)
    gains = stored["kp"].to_numpy()
    sign = -1 if half == 1 else 1
    visible = sign * HIDDEN[half] - gains * (1 - sign * HIDDEN[half])
    expected = np.maximum(HIDDEN[half], np.abs(visible))
    assert np.exp(stored.to_numpy().astype(float)) == pytest.approx(expected, rel=1e-6)
    assert (expected == HIDDEN[half]).sum() > 1
