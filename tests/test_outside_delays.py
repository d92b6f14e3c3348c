"""Integrators and lags with delays: stable gains and delays of stored atlases against theorems."""

from __future__ import annotations

import itertools
import json
import math

import numpy as np
import pytest
from checks_atlas import Line, oscillator, oscillator_intervals, samples, sweep_atlas

from sweep.__main__ import main


def integrator(q: float, delay: float) -> np.ndarray:
    """z^(k+1) - z^k + q, or its modified z-transform between whole delays (own derivation)."""
    whole = math.floor(delay)
    part = delay - whole
    return np.polyadd([1, -1, 0] + [0] * whole, [q * (1 - part), q * part])


def lag(gain: float, decay: float, delay: float) -> np.ndarray:
    """The lag with pole ``decay`` = exp(-T / time constant); modified z-transform (Jury 1964)."""
    whole = math.floor(delay)
    inside = decay ** (1 - (delay - whole))
    return np.polyadd([1, -decay, 0] + [0] * whole, gain * np.array([1 - inside, inside - decay]))


# --- Levin and May ------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def integrators(tmp_path_factory):
    text = f"""
    title = "Levin and May"
    sample_period = "0.25 s"
    [plant]
    kind = "integrator"
    [controller]
    kind = "p"
    [axes.kp]
    start = -0.412
    stop = 8.788
    count = 201
    [axes.update]
    sets = "delay.update"
    values = [{samples(*range(21))}]
    """
    return sweep_atlas(text, tmp_path_factory.mktemp("integrators"))


# S. A. Levin, R. M. May (1976), A note on difference-delay equations, Theoretical Population
# Biology 9, 178-187 (cited from memory): 0 < q < 2 cos(k pi / (2k + 1)).
LEVIN_MAY = {
    0: 2.0,
    1: 1.0,
    2: 0.6180339887498948482045868,
    3: 0.4450418679126288085778051,
    4: 0.3472963553338606977034333,
    5: 0.2846296765465702808875853,
    10: 0.1494601871728485085818795,
    20: 0.07660546738007069760610848,
}


@pytest.mark.parametrize("delay", range(21))
def test_an_integrator_is_stable_up_to_the_gain_of_levin_and_may(integrators, delay):
    edge = 2 * math.cos(delay * math.pi / (2 * delay + 1))
    if delay in LEVIN_MAY:
        assert edge == pytest.approx(LEVIN_MAY[delay], rel=1e-7)
    (row,) = integrators.limits("kp", at={"update": float(delay)}).rows
    line = Line(integrators, "kp", row, lambda kp: integrator(kp / 4, delay), 0.25)
    assert line.expect((0, 4 * edge)) == {"smooth": 2, "between": 0}
    high = row.intervals[0].high
    # the pair at the boundary stands at pi / (2k + 1) a sample; without delay that is pi
    assert high.kind == ("alternation" if delay == 0 else "oscillation")
    assert high.hz == pytest.approx(1 / (2 * (2 * delay + 1) * 0.25), rel=2e-3)
    assert row.intervals[0].low.kind == "drift"


def test_all_delays_in_the_tolerance_box_leave_the_gains_of_the_longest_one(integrators):
    (row,) = integrators.limits("kp", over={"update": (0, 20)}).rows
    (interval,) = row.intervals
    assert interval.high.value == pytest.approx(4 * LEVIN_MAY[20], abs=9.2e-4)
    assert interval.high.worst == {"update": 20.0}


# Hayes 1950, Bellman and Cooke 1963: the continuous loop is stable up to pi / 2. Levin and May at
# delays of 10 to 80 samples, in the gain times the delay with the hold's half sample in it.
CONTINUOUS = {
    10: 1.569331965314909340109735,
    20: 1.570412081291449300925224,
    40: 1.570697873517774168835333,
    80: 1.570771406420564200374762,
}


def test_a_delayed_integrator_sampled_faster_tends_to_half_pi_with_the_second_order(tmp_path):
    rows = ",\n".join(
        f'{{label = "{k} samples", sample_period = "{1 / (k + 0.5)!r} s", '
        f'delay.update = "{k} samples"}}'
        for k in CONTINUOUS
    )
    text = f"""
    title = "Delayed integrator"
    [plant]
    kind = "integrator"
    [controller]
    kind = "p"
    [axes.kp]
    start = 1.4003
    stop = 1.7003
    count = 201
    [axes.sampling]
    role = "design"
    rows = [{rows}]
    """
    atlas = sweep_atlas(text, tmp_path)
    ends = {}
    for row in atlas.limits("kp").rows:
        k = int(row.at["sampling"].split()[0])
        period_s = 1 / (k + 0.5)
        line = Line(atlas, "kp", row, lambda kp, k=k, t=period_s: integrator(kp * t, k), period_s)
        line.expect((None, CONTINUOUS[k]))
        ends[k] = row.intervals[0].high.value
        # one oscillation takes four delays
        assert row.intervals[0].high.hz == pytest.approx(0.25, rel=1e-3)
    errors = [math.pi / 2 - end for end in ends.values()]
    for coarse, fine in itertools.pairwise(errors):
        assert coarse / fine == pytest.approx(4, rel=0.1)


# Hsu and Bhatt 1966, J. Appl. Mech. 33, 119-124; Stepan 1989 (from memory): the continuous loop
# x'' + x = -K x(t - 4) is stable for 0 < K < (pi / 4)^2 - 1 < 0 with the sign turned.
HSU_BHATT = {
    10: 0.3845745371731293820355649,
    20: 0.3835243618243644261690583,
    40: 0.3832457668223178366756174,
    80: 0.3831740382066175101392526,
}
HSU_BHATT_LIMIT = 0.3831497249319150863228443


def test_a_delayed_oscillator_sampled_faster_tends_to_the_line_of_hsu_and_bhatt(tmp_path):
    rows = ",\n".join(
        f'{{label = "{k} samples", sample_period = "{4 / (k + 0.5)!r} s", '
        f'delay.update = "{k} samples"}}'
        for k in HSU_BHATT
    )
    text = f"""
    title = "Delayed oscillator"
    [plant]
    kind = "oscillator"
    natural_frequency = "0.159154943091895335768883763 Hz"
    damping = 0
    [controller]
    kind = "p"
    [axes.kp]
    start = -0.1513
    stop = 0.6487
    count = 201
    [axes.sampling]
    role = "design"
    rows = [{rows}]
    """
    atlas = sweep_atlas(text, tmp_path)
    errors = []
    for row in atlas.limits("kp").rows:
        k = int(row.at["sampling"].split()[0])
        period_s = 4 / (k + 0.5)
        ratio = period_s / (2 * math.pi)
        edge = HSU_BHATT[k]
        ((low, high),) = [pair for pair in oscillator_intervals(ratio, k) if pair[0] > -0.15]
        assert (low, high) == pytest.approx((0, edge), abs=1e-9)
        line = Line(atlas, "kp", row, lambda kp, k=k, r=ratio: oscillator(r, k, kp), period_s)
        assert line.expect((0, edge)) == {"smooth": 2, "between": 0}
        errors.append(row.intervals[0].high.value - HSU_BHATT_LIMIT)
        assert row.intervals[0].high.hz == pytest.approx(1 / 8, rel=1e-3)
    for coarse, fine in itertools.pairwise(errors):
        assert coarse / fine == pytest.approx(4, rel=0.1)


# --- lag ----------------------------------------------------------------------------------------

# Kuruklis (1994), The asymptotic stability of x_{n+1} - a x_n + b x_{n-k} = 0, J. Math. Anal. Appl.
# 188, 719-731 (partly from memory); to two samples also Jury's conditions of degree 1 to 3.
KURUKLIS = {
    (0.5, 0): 4.082988165073596568262207,
    (0.5, 1): 2.541494082536798284131103,
    (0.5, 2): 1.885047222825405511763843,
    (0.5, 3): 1.58595875810237833646449,
    (0.5, 4): 1.420572727349455459699403,
    (0.5, 5): 1.318007102442123708009738,
    (0.5, 6): 1.249457955422315612079005,
    (0.5, 20): 1.037453193821042330547283,
    (1, 0): 2.163953413738652848770004,
    (1, 1): 1.581976706869326424385002,
    (1, 2): 1.317527895445569647039303,
    (2, 0): 1.313035285499331303636161,
    (2, 1): 1.156517642749665651818081,
    (2, 2): 1.080903592230017139257236,
}


@pytest.fixture(scope="module")
def lags(tmp_path_factory):
    text = f"""
    title = "Lag with delay"
    [plant]
    kind = "lag"
    time_constant = "1 s"
    [controller]
    kind = "p"
    [axes.sample_period]
    values = ["0.5 s", "1 s", "2 s"]
    [axes.kp]
    start = -1.513
    stop = 4.487
    count = 201
    [axes.update]
    sets = "delay.update"
    values = [{samples(*range(21))}]
    """
    return sweep_atlas(text, tmp_path_factory.mktemp("lags"))


@pytest.mark.parametrize(("period_s", "delay"), KURUKLIS)
def test_a_lag_with_delay_is_stable_up_to_the_gain_of_kuruklis(lags, period_s, delay):
    (row,) = lags.limits("kp", at={"sample_period": period_s, "update": delay}).rows
    decay = math.exp(-period_s)
    line = Line(lags, "kp", row, lambda kp: lag(kp, decay, delay), period_s)
    assert line.expect((-1, KURUKLIS[period_s, delay])) == {"smooth": 2, "between": 0}
    assert row.intervals[0].low.kind == "drift"
    assert row.intervals[0].high.kind == ("oscillation" if delay else "alternation")


def test_a_gain_below_one_is_stable_for_a_lag_whatever_the_delay(lags):
    # Clark (1976), J. Math. Biol. 3, 381-391 (from memory): |a| + |b| < 1 suffices
    for row in lags.limits("kp").rows:
        (interval,) = row.intervals
        # the longest delay is the worst inside and the shortest outside: a kink at the boundary
        assert interval.low.between[0] > -1 > interval.low.between[1]
        assert interval.high.value > 1


def test_a_lag_at_full_speed_reaches_the_hyperbolic_cotangent(tmp_path):
    # coth(T / 2) at T = 0.1: zero-order-hold tables of Astrom and Wittenmark 1997 (from memory)
    text = """
    title = "Lag"
    sample_period = "0.1 s"
    [plant]
    kind = "lag"
    time_constant = "1 s"
    [controller]
    kind = "p"
    [axes.kp]
    start = -2.03
    stop = 27.97
    count = 201
    """
    atlas = sweep_atlas(text, tmp_path)
    (row,) = atlas.limits("kp").rows
    line = Line(atlas, "kp", row, lambda kp: lag(kp, math.exp(-0.1), 0), 0.1)
    assert line.expect((-1, 20.01666388955009924809215)) == {"smooth": 2, "between": 0}


def test_the_gain_that_holds_for_every_pole_of_the_box_is_that_of_its_worst_corner(tmp_path):
    # own construction: on the box the pair is complex, so that |z|^2 = K (1 - exp(-T / tc))
    text = """
    title = "Lags with one sample of delay"
    sample_period = "1 s"
    [plant]
    kind = "lag"
    [controller]
    kind = "p"
    [delay]
    update = "1 sample"
    [axes.kp]
    start = 0.803
    stop = 1.603
    count = 201
    [axes.time_constant]
    values = ["0.6666666666666666667 s", "0.8 s", "1 s", "1.5 s", "2 s"]
    """
    atlas = sweep_atlas(text, tmp_path)
    (row,) = atlas.limits("kp").rows
    line = Line(atlas, "kp", row, lambda kp: lag(kp, math.exp(-1.5), 1), 1.0)
    assert line.expect((None, 1.2 * 1.072680763990723536947318)) == {"smooth": 1, "between": 0}
    assert row.intervals[0].high.worst == {"time_constant": pytest.approx(2 / 3)}
    assert row.nodes == 201 * 5


# --- along the delay ----------------------------------------------------------------------------


def delay_config(plant: str, kp: float, period: str, nodes: str) -> str:
    return f"""
    title = "Along the delay"
    sample_period = "{period}"
    [plant]
    {plant}
    [controller]
    kind = "p"
    kp = {kp}
    [axes.update]
    sets = "delay.update"
    {nodes}
    """


def test_the_longest_delay_lies_between_samples_where_the_true_loop_puts_it(tmp_path, capsys):
    # own construction; phase over frequency says 2.608 and is exact for whole samples only
    nodes = 'start = "0.013 samples"\nstop = "4.013 samples"\ncount = 201'
    text = delay_config('kind = "integrator"', 0.5, "1 s", nodes)
    atlas = sweep_atlas(text, tmp_path)
    (row,) = atlas.limits("update").rows
    line = Line(atlas, "update", row, lambda delay: integrator(0.5, delay), 1.0)
    expected = 2.688892182534018100069719
    assert line.expect((None, expected)) == {"smooth": 1, "between": 0}
    assert row.intervals[0].low.value == atlas.grid.axis("update").coordinates[0]
    assert main(["limits", str(atlas.stored.path), "--along", "update", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["unit"] == "samples"
    (interval,) = document["rows"][0]["intervals"]
    assert interval["high"] == pytest.approx(expected, abs=4e-4)
    assert (interval["low_end"], interval["low_between"]) == ("axis_end", None)


def test_the_first_whole_delay_that_is_too_long_is_the_node_beyond_the_limit(tmp_path):
    # sharpness of Clark's condition (1976, from memory): K = 1.05, T = 0.5 fails first at 17
    nodes = 'start = "0 samples"\nstop = "200 samples"\ncount = 201'
    text = delay_config('kind = "lag"\n    time_constant = "1 s"', 1.05, "0.5 s", nodes)
    atlas = sweep_atlas(text, tmp_path)
    (row,) = atlas.limits("update").rows
    (interval,) = row.intervals
    assert interval.low.end == "axis_end"
    assert interval.high.between == (16, 17)


# --- every delay --------------------------------------------------------------------------------


def test_a_small_gain_round_the_damped_oscillator_is_stable_for_every_whole_delay(tmp_path):
    # small-gain theorem (Zames 1966, from memory): 1 / max |H| at T / T0 = 0.1, damping 0.05
    edge = 0.101527768729870207978173
    text = """
    title = "Every delay"
    [plant]
    kind = "oscillator"
    natural_frequency = "1 Hz"
    damping = 0.05
    [controller]
    kind = "p"
    [axes.sample_period]
    values = ["0.1 s"]
    [axes.kp]
    start = -0.1205
    stop = 0.1195
    count = 201
    [axes.update]
    sets = "delay.update"
    start = "0 samples"
    stop = "48 samples"
    step = "1 sample"
    """
    atlas = sweep_atlas(text, tmp_path)
    (row,) = atlas.limits("kp").rows
    (interval,) = row.intervals
    # 49 delays turn the resonance through the circle in steps that miss its worst phase a little
    assert -1.01 * edge < interval.low.value < -edge
    assert edge < interval.high.value < 1.01 * edge
