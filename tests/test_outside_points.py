"""Radii and coefficients at stored nodes against tables, theorems and closed forms."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from checks_atlas import damped_coefficients, periods, samples, sweep_atlas

from sweep.__main__ import main

FLOAT32 = 2.5e-7


def check(atlas, radius: float, **at: float) -> None:
    """The stored radius is ``radius`` and the verdict follows from it."""
    found = atlas.point(at)
    assert found.derived["radius"] == pytest.approx(radius, rel=FLOAT32), at
    assert found.stable == (radius < 1 - 1e-8)


@pytest.fixture
def sweep(tmp_path):
    def make(plant: str, axes: str, controller: str = 'kind = "p"', top: str = ""):
        text = f'title = "Points"\n{top}\n[plant]\n{plant}\n[controller]\n{controller}\n{axes}'
        return sweep_atlas(text, tmp_path)

    return make


# --- oscillator ---------------------------------------------------------------------------------

# own derivation, sqrt(1 + K (1 - c)) where the pair is complex; K = -0.3
WITHOUT_DELAY = {
    0.02: 0.9988165048668065283408575,
    0.1: 0.9709300172064329720831329,
    0.2: 0.8903398779749698638288229,
    0.25: 0.836660026534075547978172,
    0.28: 0.8023625150917025553149286,
    0.3: 0.779291281670413513403506,
    0.36: 0.7132831156528192255895566,
    0.4: 0.6762358328922800973175496,
    0.45: 0.795529116478206384212556,
    0.49: 0.9933865065543633214301187,
    0.6: 0.6762358328922800973175496,
}

OSCILLATOR = 'kind = "oscillator"\nnatural_frequency = "0.159154943091895335768883763 Hz"'


def test_the_undamped_oscillator_has_the_derived_radii_at_every_period(sweep):
    atlas = sweep(
        f"{OSCILLATOR}\ndamping = 0",
        f"[axes.kp]\nvalues = [-0.3, 0]\n"
        f"[axes.sample_period]\nvalues = [{periods(*WITHOUT_DELAY)}]",
    )
    for ratio, radius in WITHOUT_DELAY.items():
        place = list(WITHOUT_DELAY).index(ratio)
        period_s = float(atlas.grid.axis("sample_period").coordinates[place])
        assert period_s == pytest.approx(2 * math.pi * ratio)
        check(atlas, radius, kp=-0.3, sample_period=period_s)
        # without feedback the resonance is as undamped as ever
        assert atlas.point({"kp": 0, "sample_period": period_s}).stable is False


def test_a_fractional_delay_gives_the_radii_of_the_modified_transform(sweep):
    # Jury 1964; Astrom and Wittenmark 1997, chapter 2 (from memory); w = 1, T = 1, delay 0.4 s
    atlas = sweep(
        f"{OSCILLATOR}\ndamping = 0",
        '[delay]\ntransport = "0.4 s"\n[axes.kp]\nvalues = [-0.3, 0.2]',
        top='sample_period = "1 s"',
    )
    check(atlas, 0.8753278117543646443290272, kp=-0.3)
    check(atlas, 1.071322322803707971700623, kp=0.2)


def test_corners_of_boundary_lines_are_marginal_and_never_stable(sweep):
    # own construction: z^3 - 1 at one sample of delay, T / T0 = 1 / 4 and K = -1
    atlas = sweep(
        f"{OSCILLATOR}\ndamping = 0",
        f"[axes.sample_period]\nvalues = [{periods(0.25)}]\n[axes.kp]\nvalues = [-1, -0.5]\n"
        f'[axes.update]\nsets = "delay.update"\nvalues = [{samples(0, 1)}]',
    )
    check(atlas, 1.0, kp=-1, update=1)
    check(atlas, math.sqrt(0.5), kp=-0.5, update=0)


def test_the_worst_damping_may_lie_inside_its_range(sweep):
    # own construction: T / T0 = 0.41, K = -0.45
    inner, most = 0.032898865, 0.5682384100982729
    atlas = sweep(
        OSCILLATOR,
        f"[axes.sample_period]\nvalues = [{periods(0.41)}]\n[axes.kp]\nvalues = [-0.45]\n"
        f"[axes.damping]\nvalues = [0.002, 0.0325, {inner}, 0.0333, 0.05]",
    )
    check(atlas, 0.5518605145381351805974989, kp=-0.45, damping=0.002)
    check(atlas, 0.5654600476435489369907668, kp=-0.45, damping=0.05)
    check(atlas, most, kp=-0.45, damping=inner)
    stored = atlas.dataset["log_radius"].to_numpy().reshape(-1)
    assert stored.argmax() == 2


# own derivation by perturbation of a simple eigenvalue (Horn and Johnson, Matrix Analysis)
SLOPES = {
    0: 0.206107373853763435415647,
    0.4: 0.3405432993616983077093294,
    1: 0.4484011233337102766354997,
    1.7: 0.3978349075982167655393343,
    2: 0.321019760960103074007073,
    3: -0.07101976096010307400707296,
}


def test_a_small_gain_stabilises_with_the_sign_and_slope_of_the_perturbed_pair(sweep):
    step = 1e-4
    atlas = sweep(
        f"{OSCILLATOR}\ndamping = 0",
        f"[axes.sample_period]\nvalues = [{periods(0.15)}]\n"
        f"[axes.kp]\nvalues = [{-step}, {step}]\n"
        f'[axes.update]\nsets = "delay.update"\nvalues = [{samples(*SLOPES)}]',
    )
    for delay, slope in SLOPES.items():
        below, above = (atlas.point({"kp": sign * step, "update": delay}) for sign in (-1, 1))
        rise = above.measures["log_radius"] - below.measures["log_radius"]
        assert rise / (2 * step) == pytest.approx(slope, rel=2e-6)
        assert (below.stable, above.stable) == (slope > 0, slope < 0)


def test_a_loop_sampled_a_hundred_thousand_times_a_period_keeps_its_digits_in_the_store(sweep):
    # own construction, 50 digits: K = -0.5, one sample of delay, T / T0 = 1e-5
    atlas = sweep(
        f"{OSCILLATOR}\ndamping = 0",
        f"[axes.sample_period]\nvalues = [{periods('1e-5')}]\n[axes.kp]\nvalues = [-0.5]\n"
        '[delay]\nupdate = "1 sample"',
    )
    found = atlas.point()
    assert found.measures["log_radius"] == pytest.approx(-1.480440662355108346121499e-9, rel=1e-6)
    assert found.stable
    assert 1 / found.derived["decay_time"] == pytest.approx(2.356194493680551e-5, rel=1e-6)


# --- integrators and lags -----------------------------------------------------------------------


def test_an_integrator_has_the_radius_of_its_one_eigenvalue(sweep):
    # Astrom and Wittenmark 1997, chapter 2 (from memory): |1 - K T|
    atlas = sweep(
        'kind = "integrator"', "[axes.kp]\nvalues = [1, 4, 7.9, 8, 8.1]", top="sample_period = 0.25"
    )
    check(atlas, 0.75, kp=1)
    check(atlas, 0.975, kp=7.9)
    check(atlas, 1.0, kp=8)
    check(atlas, 1.025, kp=8.1)
    deadbeat = atlas.point({"kp": 4})
    assert deadbeat.measures["log_radius"] == -36
    assert deadbeat.stable


def test_deadbeat_gains_of_a_lag_reach_the_floor_within_rounding(sweep):
    # Astrom and Wittenmark 1997, chapter 4 (from memory): K = p / (1 - p), T = 1
    atlas = sweep(
        'kind = "lag"\ntime_constant = 1',
        "[axes.kp]\nvalues = [0.581976706869326424385002, 1]",
        top="sample_period = 1",
    )
    assert atlas.point({"kp": 0.581976706869326424385002}).measures["log_radius"] < -34


# Onset of oscillation, a double real root: Erbe and Zhang 1989; Gyori and Ladas 1991 (verified).
DOUBLE_ROOTS = {1: 0.25, 2: 4 / 27, 5: 5**5 / 6**6, 10: 10**10 / 11**11}


def test_at_the_onset_of_oscillation_the_double_root_is_found(sweep):
    gains = ", ".join(map(repr, sorted(DOUBLE_ROOTS.values())))
    atlas = sweep(
        'kind = "integrator"',
        f'[axes.kp]\nvalues = [{gains}]\n[axes.update]\nsets = "delay.update"\n'
        f"values = [{samples(*DOUBLE_ROOTS)}]",
        top="sample_period = 1",
    )
    for delay, gain in DOUBLE_ROOTS.items():
        found = atlas.point({"kp": gain, "update": delay})
        assert found.derived["radius"] == pytest.approx(delay / (delay + 1), abs=2e-7)


def test_corners_of_a_box_of_lags_have_the_radii_of_their_pair(sweep):
    # own construction: one sample of delay, sqrt(K (1 - exp(-a T)))
    atlas = sweep(
        'kind = "lag"',
        '[delay]\nupdate = "1 sample"\n[axes.kp]\nvalues = [0.8, 1.2]\n'
        '[axes.time_constant]\nvalues = ["0.66666666666666666667 s", "2 s"]',
        top="sample_period = 1",
    )
    check(atlas, 0.9655277353975307763282599, kp=1.2, time_constant=2 / 3)
    check(atlas, 0.5610485471239483222, kp=0.8, time_constant=2)


def test_the_textbook_loop_has_its_radius_at_gain_one(sweep):
    # Ogata; Kuo; Dorf and Bishop (verified): 1 / (s (s + 1)), T = 1, poles 0.5 +- 0.6181j
    atlas = sweep(
        'kind = "lagged_integrator"\ntime_constant = 1',
        "[axes.kp]\nvalues = [0, 1]",
        top="sample_period = 1",
    )
    check(atlas, 0.7950600976206501072957694, kp=1)
    angle = atlas.point({"kp": 1}).measures["mode_angle"]
    assert angle == pytest.approx(math.atan2(0.6181, 0.5), abs=1e-4)
    assert atlas.point({"kp": 0}).stable is False


def test_a_double_integrator_under_proportional_feedback_grows_as_tabled(sweep):
    # Franklin, Powell and Workman 1998, the satellite example (from memory)
    atlas = sweep(
        'kind = "double_integrator"', "[axes.kp]\nvalues = [0.1, 1, 30]", top="sample_period = 0.5"
    )
    check(atlas, 1.006230589874905363384128, kp=0.1)
    check(atlas, 1.060660171779821286601267, kp=1)
    check(atlas, 2.179449471770336776118491, kp=30)


# --- sampled coefficients -----------------------------------------------------------------------


def coefficients(atlas, capsys, at: str) -> dict[str, list[float]]:
    assert main(["point", str(atlas.stored.path), "--at", at, "--json"]) == 0
    return json.loads(capsys.readouterr().out)["computed_now"]["coefficients"]


@pytest.mark.parametrize(
    ("period_s", "b1", "b2"),
    [
        (0.1, 0.004837418035959573164249059, 0.004678840160444469519326035),
        (0.5, 0.1065306597126334236037995, 0.0902040104310498645943007),
        (1, 0.3678794411714423215955238, 0.2642411176571153568089525),
        (2, 1.135335283236612691893999, 0.5939941502901619243180015),
    ],
)
def test_a_point_shows_the_textbook_coefficients_of_the_lagged_integrator(
    sweep, capsys, period_s, b1, b2
):
    # Astrom and Wittenmark 1997; Franklin, Powell and Workman 1998; Ogata 1995 (verified)
    atlas = sweep(
        'kind = "lagged_integrator"\ntime_constant = 1',
        "[axes.kp]\nvalues = [1]",
        top=f"sample_period = {period_s}",
    )
    found = coefficients(atlas, capsys, "kp=1")
    p = math.exp(-period_s)
    assert np.trim_zeros(found["plant_numerator"], "f") == pytest.approx([b1, b2], rel=1e-10)
    assert found["plant_denominator"] == pytest.approx([1, -1 - p, p], rel=1e-10)


@pytest.mark.parametrize(
    ("damping", "period_s", "b1", "b2", "a1", "a2"),
    [
        (
            0,
            0.8,
            0.30329329065283457907925,
            0.30329329065283457907925,
            -1.3934134186943308418415,
            1,
        ),
        (
            0.2,
            0.7,
            0.214834098774694314297146,
            0.1953978588941053530059408,
            -1.345551783786925804836014,
            0.7557837414557254721391008,
        ),
        (
            0.002,
            3,
            1.983788920209776524363518,
            1.972421761104061367337092,
            1.968138968451907351599445,
            0.9880717128619305401011643,
        ),
    ],
)
def test_a_point_shows_the_tabled_coefficients_of_the_oscillator(
    sweep, capsys, damping, period_s, b1, b2, a1, a2
):
    # zero-order-hold table, Astrom and Wittenmark 1997, chapter 2 (from memory)
    assert damped_coefficients(period_s, damping) == pytest.approx((b1, b2, a1, a2), abs=1e-13)
    atlas = sweep(
        f"{OSCILLATOR}\ndamping = {damping}",
        "[axes.kp]\nvalues = [1]",
        top=f"sample_period = {period_s}",
    )
    found = coefficients(atlas, capsys, "kp=1")
    assert np.trim_zeros(found["plant_numerator"], "f") == pytest.approx([b1, b2], rel=1e-10)
    assert found["plant_denominator"] == pytest.approx([1, a1, a2], rel=1e-10)


def test_a_point_shows_the_coefficients_of_the_modified_transform(sweep, capsys):
    # Jury 1964 (from memory): w = 1, T = 1, delay 0.4 samples
    atlas = sweep(
        f"{OSCILLATOR}\ndamping = 0",
        '[delay]\nupdate = "0.4 samples"\n[axes.kp]\nvalues = [1]',
        top="sample_period = 1",
    )
    found = coefficients(atlas, capsys, "kp=1")
    expected = [
        0.1746643850903217027590475,
        0.665791997176283945237606,
        0.07893900599711491720147327,
    ]
    assert np.trim_zeros(found["plant_numerator"], "f") == pytest.approx(expected, rel=1e-10)
