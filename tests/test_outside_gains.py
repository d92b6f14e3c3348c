"""Second-order plants and two-gain controllers: limits of stored atlases against closed forms."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from checks_atlas import Line, sweep_atlas

from sweep.__main__ import main

# --- 1 / (s (s + 1)) ----------------------------------------------------------------------------


def lagged_integrator(period_s: float, gain: float) -> np.ndarray:
    """Zero-order-hold table: Astrom and Wittenmark 1997, chapter 2; Ogata 1995."""
    p = math.exp(-period_s)
    return np.polyadd([1, -1 - p, p], gain * np.array([period_s - 1 + p, 1 - p - period_s * p]))


# Jury's conditions of degree 2; tables of this kind stand in Kuo and in Dorf and Bishop (from
# memory). At T = 1, (e - 1) / (e - 2): Ogata, Discrete-Time Control Systems (verified).
LARGEST_GAIN = {
    0.5: 4.361993867092269075675325,
    1: 2.392211191177332814376553,
    2: 1.455678841855605369453854,
    4: 0.9652766625516770694540904,
    6: 0.4987667378143211244354536,
}
CORNER_S = "3.720753996267921484348198"
CORNER_GAIN = 1.101730086079435998159173


@pytest.fixture(scope="module")
def integrators(tmp_path_factory):
    text = f"""
    title = "Lagged integrator"
    [plant]
    kind = "lagged_integrator"
    time_constant = "1 s"
    [controller]
    kind = "p"
    [axes.sample_period]
    values = [0.5, 1, 2, {CORNER_S}, 4, 6]
    [axes.kp]
    start = -0.507
    stop = 4.493
    count = 201
    """
    return sweep_atlas(text, tmp_path_factory.mktemp("lagged"))


@pytest.mark.parametrize("period_s", LARGEST_GAIN)
def test_a_lagged_integrator_is_stable_from_zero_to_the_tabled_gain(integrators, period_s):
    (row,) = integrators.limits("kp", at={"sample_period": period_s}).rows
    line = Line(integrators, "kp", row, lambda kp: lagged_integrator(period_s, kp), period_s)
    # at 4 s the pair, just past -1, parts into two real roots in the cell of the boundary
    kinks = int(period_s == 4)
    assert line.expect((0, LARGEST_GAIN[period_s])) == {"smooth": 2 - kinks, "between": kinks}
    (interval,) = row.intervals
    assert interval.low.kind == "drift"
    assert interval.high.kind == ("oscillation" if period_s < float(CORNER_S) else "alternation")


def test_at_one_second_the_pair_leaves_at_its_textbook_angle(integrators, capsys):
    path = str(integrators.stored.path)
    arguments = ["limits", path, "--along", "kp", "--at", "sample_period=1s", "--json"]
    assert main(arguments) == 0
    (interval,) = json.loads(capsys.readouterr().out)["rows"][0]["intervals"]
    assert interval["high"] == pytest.approx((math.e - 1) / (math.e - 2), abs=5e-4)
    assert interval["high_kind"] == "oscillation"
    angle = 1.324393456497895339780951
    assert 2 * math.pi * interval["high_hz"] == pytest.approx(angle, rel=1e-3)


def test_where_the_pair_meets_minus_one_the_corner_lies_between_the_named_nodes(integrators):
    (row,) = integrators.limits("kp", at={"sample_period": float(CORNER_S)}).rows
    line = Line(
        integrators, "kp", row, lambda kp: lagged_integrator(float(CORNER_S), kp), float(CORNER_S)
    )
    assert line.expect((0, CORNER_GAIN)) == {"smooth": 1, "between": 1}


@pytest.mark.parametrize(
    ("period_s", "edge", "stop"),
    [(0.01, 200.3338892589498823742579, 250.3), (0.1, 20.33892560993158491362028, 25.03)],
)
def test_fast_sampling_allows_twice_the_sample_rate(tmp_path, period_s, edge, stop):
    text = f"""
    title = "Fast lagged integrator"
    sample_period = {period_s}
    [plant]
    kind = "lagged_integrator"
    time_constant = "1 s"
    [controller]
    kind = "p"
    [axes.kp]
    start = {-stop / 10}
    stop = {stop}
    count = 201
    """
    atlas = sweep_atlas(text, tmp_path)
    (row,) = atlas.limits("kp").rows
    line = Line(atlas, "kp", row, lambda kp: lagged_integrator(period_s, kp), period_s)
    # at 10 ms both plant poles lie so close that they meet in the cell of the lower boundary
    kinks = int(period_s == 0.01)
    assert line.expect((0, edge)) == {"smooth": 2 - kinks, "between": kinks}


def test_along_the_sample_period_the_same_table_is_read_the_other_way(tmp_path):
    gains = {period_s: edge for period_s, edge in LARGEST_GAIN.items() if period_s >= 1}
    text = f"""
    title = "Slowest sampling"
    [plant]
    kind = "lagged_integrator"
    time_constant = "1 s"
    [controller]
    kind = "p"
    [axes.kp]
    values = {sorted(gains.values())}
    [axes.sample_period]
    start = 0.2013
    stop = 7.8013
    count = 201
    """
    atlas = sweep_atlas(text, tmp_path)
    for row in atlas.limits("sample_period").rows:
        gain = row.at["kp"]
        period_s = next(p for p, g in gains.items() if g == gain)
        line = Line(atlas, "sample_period", row, lambda t, g=gain: lagged_integrator(t, g), None)
        assert line.expect((None, period_s))["smooth"] == (period_s != 4)
        kind = "oscillation" if period_s < float(CORNER_S) else "alternation"
        assert row.intervals[0].high.kind == kind


# --- double integrator under pd -----------------------------------------------------------------
# Own derivation, Jury's conditions of degree 3: with m = kp T^2 / 2 and n = kd T / 2 stable exactly
# when 0 < n < 1 and 0 < m < 2 n (1 - n) / (1 + n).

PERIOD_S = 0.5


def double_integrator(m: float, n: float) -> np.ndarray:
    """z (z - 1)^2 + (z + 1) ((m + n) z - n), the backward difference without filter."""
    return np.polyadd([1, -2, 1, 0], np.polymul([1, 1], [m + n, -n]))


@pytest.fixture(scope="module")
def double_integrators(tmp_path_factory):
    text = """
    title = "Double integrator"
    sample_period = "0.5 s"
    [plant]
    kind = "double_integrator"
    [controller]
    kind = "pd"
    [axes.kp]
    start = -0.513
    stop = 3.487
    count = 201
    [axes.kd]
    start = -0.313
    stop = 4.487
    count = 201
    """
    return sweep_atlas(text, tmp_path_factory.mktemp("double"))


def test_along_the_proportional_gain_the_double_integrator_keeps_to_the_derived_region(
    double_integrators,
):
    kd = double_integrators.grid.axis("kd").coordinates
    smooth = between = 0
    for row in double_integrators.limits("kp", rows=300).rows:
        n = row.at["kd"] * PERIOD_S / 2
        most = 2 * n * (1 - n) / (1 + n)

        def polynomial(kp, n=n):
            return double_integrator(kp * PERIOD_S**2 / 2, n)

        line = Line(double_integrators, "kp", row, polynomial, PERIOD_S)
        found = line.expect(*([(0, 2 * most / PERIOD_S**2)] if 0 < n < 1 else []))
        smooth, between = smooth + found["smooth"], between + found["between"]
        for interval in row.intervals:
            assert interval.low.kind == "drift"
            assert interval.high.kind == "oscillation"
    assert len(kd) == 201
    assert smooth > 300
    assert between < 0.05 * smooth


def test_along_the_derivative_gain_the_double_integrator_keeps_to_the_derived_region(
    double_integrators,
):
    smooth = between = 0
    for row in double_integrators.limits("kd", rows=300).rows:
        m = row.at["kp"] * PERIOD_S**2 / 2
        # 2 n^2 + (m - 2) n + m = 0
        room = (m - 2) ** 2 - 8 * m
        ends = [(2 - m + sign * math.sqrt(max(room, 0))) / 4 for sign in (-1, 1)]

        def polynomial(kd, m=m):
            return double_integrator(m, kd * PERIOD_S / 2)

        line = Line(double_integrators, "kd", row, polynomial, PERIOD_S)
        pair = (2 * ends[0] / PERIOD_S, 2 * ends[1] / PERIOD_S)
        found = line.expect(*([pair] if m > 0 and room > 0 else []))
        smooth, between = smooth + found["smooth"], between + found["between"]
    assert smooth > 250
    assert between < 0.05 * smooth


def test_a_double_integrator_under_proportional_feedback_has_no_limits(tmp_path):
    # Franklin, Powell and Workman 1998, the satellite example (from memory)
    text = """
    title = "Satellite"
    sample_period = "0.5 s"
    [plant]
    kind = "double_integrator"
    [controller]
    kind = "p"
    [axes.kp]
    start = -10.05
    stop = 90.45
    count = 201
    """
    (row,) = sweep_atlas(text, tmp_path).limits("kp").rows
    assert row.intervals == ()
    assert row.unknown == 0


# --- integral gains -----------------------------------------------------------------------------
# Own construction, Jury's conditions of degree 2 on the integrator under pi with a = kp T and
# b = ki T Tc: z^2 + (a + b - 2) z + 1 - a (backward), z^2 + (a - 2) z + 1 - a + b (forward),
# z^2 + (a + b / 2 - 2) z + 1 - a + b / 2 (trapezoidal).

INTEGRALS = {
    "backward": (lambda a, b: [1, a + b - 2, 1 - a], lambda a: 4 - 2 * a),
    "forward": (lambda a, b: [1, a - 2, 1 - a + b], lambda a: a),
    "trapezoidal": (lambda a, b: [1, a + b / 2 - 2, 1 - a + b / 2], lambda a: 2 * a),
}


@pytest.mark.parametrize("code_period", ["", 'code_period = "0.16 s"'])
@pytest.mark.parametrize("integral", INTEGRALS)
@pytest.mark.parametrize("zero_is_a_node", [False, True])
def test_an_integral_gain_is_stable_from_zero_to_the_end_of_its_rule(
    tmp_path, integral, code_period, zero_is_a_node
):
    text = f"""
    title = "Integral gain"
    sample_period = "0.2 s"
    [plant]
    kind = "integrator"
    [controller]
    kind = "pi"
    integral = "{integral}"
    {code_period}
    [axes.kp]
    values = [1.37, 4.11]
    [axes.ki]
    start = {-20.4 if zero_is_a_node else -20.53}
    stop = {115.6 if zero_is_a_node else 115.47}
    count = 201
    """
    atlas = sweep_atlas(text, tmp_path)
    characteristic, largest = INTEGRALS[integral]
    product = 0.2 * (0.16 if code_period else 0.2)
    for row in atlas.limits("ki").rows:
        a = row.at["kp"] * 0.2
        edge = largest(a) / product
        if not zero_is_a_node:
            line = Line(atlas, "ki", row, lambda ki, a=a: characteristic(a, ki * product), 0.2)
            line.expect((0, edge))
            continue
        # at 0 the integral is absent and the loop stable: the limit is that node, not beyond it
        (interval,) = row.intervals
        assert interval.low.value == 0
        assert interval.low.between == (0, pytest.approx(-0.68))
        assert interval.low.kind == "drift"
        assert min(interval.high.between) < edge < max(interval.high.between)
        assert interval.high.value == pytest.approx(edge, abs=136e-4)
