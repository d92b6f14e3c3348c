"""Where a limit lies inside its cell, how stability is lost there, and what is never joined."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from checks_atlas import samples, sweep_atlas
from hypothesis import given, settings
from hypothesis import strategies as st
from memory_atlas import atlas, axis, rows

from sweep.errors import QuestionError
from sweep.query.stability.crossing import find_crossing
from sweep.vocabulary import STABILITY_THRESHOLD as EDGE

# --- accuracy of the crossing ------------------------------------------------------------------

X = np.linspace(0.0, 1.0, 201)


def single_limit(f, angle=None, x=X):
    asked = atlas([axis("along", x)], f(x), None if angle is None else angle(x))
    (interval,) = asked.limits("along").rows[0].intervals
    return interval


@pytest.mark.parametrize("end", [0.0625, 0.3217, 0.5004, 0.90313])
@pytest.mark.parametrize(
    "curve",
    [
        lambda t: np.expm1(60 * t),
        lambda t: np.sin(2.5 * t) + 40 * t**2 * (t > -0.06),
        lambda t: np.log(np.maximum(1 + 60 * t, 0.05)),
        lambda t: 0.02 * t + 30 * t**3,
        lambda t: np.sqrt(np.maximum(t + 0.012, 0)) - np.sqrt(0.012),
    ],
)
def test_a_smooth_crossing_is_found_to_a_ten_thousandth_of_the_span(curve, end):
    assert abs(single_limit(lambda x: curve(x - end)).high.value - end) < 1e-4


def two_branches(kink, end, before, after):
    """A line that crosses at ``end`` and changes branch at ``kink``; convex, as a maximum is."""
    tie = before * (kink - end)

    def values(x):
        return np.maximum(before * (x - end), tie + after * (x - kink)) + 0.3 * (x - end) ** 2

    def angles(x):
        return np.where(before * (x - end) >= tie + after * (x - kink), 0.3, 1.4)

    return values, angles


@pytest.mark.parametrize("share", [0.15, 0.5, 0.85])
@pytest.mark.parametrize("know_the_branch", [False, True])
@pytest.mark.parametrize("away", [-1.5, -0.7, 1.3, 1.6])
def test_a_kink_in_a_neighbouring_cell_leaves_the_crossing_exact(share, know_the_branch, away):
    end = X[100] + share / 200
    kink = X[100] + (share + away) / 200 if abs(away) > 1 else X[100] - 0.3 / 200
    before, after = (-0.5, 4.0) if kink < end else (1.0, 9.0)
    if kink < end:
        # The branch that crosses is the later one: put its zero at the end.
        tie = 4.0 * (kink - end)

        def values(x):
            return np.maximum(tie - 0.5 * (x - kink), 4.0 * (x - end)) + 0.1 * (x - end) ** 2

        def angles(x):
            return np.where(x < kink, 1.4, 0.3)
    else:
        values, angles = two_branches(kink, end, before, after)
    high = single_limit(values, angles if know_the_branch else None).high
    assert high.between == (X[100], X[101])
    assert abs(high.value - end) < 1e-4


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9])
@pytest.mark.parametrize("know_the_branch", [False, True])
def test_a_kink_in_the_crossing_cell_keeps_the_limit_between_its_two_nodes(share, know_the_branch):
    kink = X[100] + share / 200

    def values(x):
        return np.maximum(-0.002 + 0.1 * (x - kink), -0.002 + 9.0 * (x - kink))

    high = single_limit(values, (lambda x: (x > kink) * 1.0) if know_the_branch else None).high
    assert high.between == (X[100], X[101])
    assert X[100] <= high.value <= X[101]


def test_where_two_branches_meet_in_the_cell_the_larger_of_both_sides_counts():
    kink, end = X[100] + 0.4 / 200, X[100] + 0.6 / 200

    def values(x):
        return np.maximum(8.0 * (x - end), 8.0 * (kink - end) - 2.0 * (x - kink))

    high = single_limit(values, lambda x: np.where(x < kink, 0.2, 2.0)).high
    assert abs(high.value - end) < 1e-6


@settings(max_examples=300, deadline=None)
@given(
    st.lists(st.floats(-40, 1e6, allow_nan=False), min_size=2, max_size=8),
    st.lists(st.floats(1e-6, 5), min_size=8, max_size=8),
    st.lists(
        st.floats(0, math.pi) | st.sampled_from([0.0, math.pi, math.nan]), min_size=8, max_size=8
    ),
    st.lists(st.integers(0, 1), min_size=8, max_size=8),
    st.integers(0, 6),
)
def test_whatever_the_neighbours_are_the_crossing_stays_in_its_cell(f, steps, angles, which, cell):
    f = np.array(f)
    angle, tolerance = np.array(angles)[: len(f)], np.array(which)[: len(f)]
    cell %= len(f) - 1
    f[cell] = -abs(f[cell]) - 1e-3
    f[cell + 1] = abs(f[cell + 1])
    x = np.cumsum(steps)[: len(f)]
    for values in (f, np.where(np.arange(len(f)) > cell + 1, np.inf, f)):
        at = find_crossing(x, values, angle, tolerance, cell, EDGE)
        assert x[cell] <= at <= x[cell + 1]


def test_an_infinite_neighbour_puts_the_limit_on_the_stable_node():
    f, same = np.array([-1.0, np.inf]), np.zeros(2, dtype=np.int64)
    at = find_crossing(np.array([1.0, 2.0]), f, np.zeros(2), same, 0, EDGE)
    assert at == 1.0


def test_a_marginal_loop_is_not_stable():
    asked = atlas([axis("along", [0, 1, 2])], [-1e-10, 0.0, -1e-9])
    assert asked.limits("along").rows[0].intervals == ()


def crossing_at(places):
    """Lines that cross from stable to not stable at each of ``places``, on 0..10."""
    x = np.arange(11.0)
    return x, np.subtract.outer(-np.asarray(places, float), -x)


# --- real eigenvalues --------------------------------------------------------------------------


def meeting_roots(meet, end, middle, sign):
    """A pair that parts at ``meet`` into two real roots, the larger of which leaves at ``end``."""
    rate = (1 - middle) ** 2 / (end - meet)

    def values(x):
        apart = rate * (x - meet)
        real = np.log(middle + np.sqrt(np.maximum(apart, 0)))
        return np.where(apart > 0, real, np.log(middle**2 - np.minimum(apart, 0)) / 2)

    def angles(x):
        angle = np.arctan2(np.sqrt(np.maximum(rate * (meet - x), 0)), middle)
        return angle if sign > 0 else math.pi - angle

    return values, angles


@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("share", [0.1, 0.4, 0.9])
@pytest.mark.parametrize("away", [0.003, 0.05, 0.3, 1.2])
def test_real_roots_that_meet_just_before_the_crossing_cell_leave_the_crossing_exact(
    away, share, sign
):
    meet, end = X[100] - away / 200, X[100] + share / 200
    high = single_limit(*meeting_roots(meet, end, 0.97, sign)).high
    assert high.between == (X[100], X[101])
    assert abs(high.value - end) < 1e-6


def test_a_double_integrator_whose_real_roots_meet_beside_the_boundary_keeps_its_limit(tmp_path):
    # own derivation, Jury's conditions of degree 3: kp > 0
    text = """
    title = "Roots that meet"
    sample_period = "0.5 s"
    [plant]
    kind = "double_integrator"
    [controller]
    kind = "pd"
    [axes.kd]
    values = [0.167, 0.191]
    [axes.kp]
    start = -0.513
    stop = 3.487
    count = 201
    """
    for row in sweep_atlas(text, tmp_path).limits("kp").rows:
        assert abs(row.intervals[0].low.value) < 4e-5


@pytest.mark.parametrize(
    "nodes",
    [
        [-3, -1, 4, 8.5, 12],
        [-3, -1, 3.9, 8.5, 12],
        [-3, -1, 4.3, 8.5, 12],
        [-1, 4, 12],
    ],
)
def test_an_eigenvalue_that_passes_zero_on_a_coarse_axis_leaves_both_limits_exact(tmp_path, nodes):
    # the one eigenvalue is 1 - K T: Astrom and Wittenmark 1997, chapter 2 (from memory)
    text = f"""
    title = "Beside a deadbeat gain"
    sample_period = "0.25 s"
    [plant]
    kind = "integrator"
    [controller]
    kind = "p"
    [axes.kp]
    values = {nodes}
    """
    (row,) = sweep_atlas(text, tmp_path).limits("kp").rows
    (interval,) = row.intervals
    assert interval.low.value == pytest.approx(0, abs=1e-5)
    assert interval.high.value == pytest.approx(8, abs=1e-5)


@pytest.mark.parametrize("angle", [0.0, 0.05, 1.0, math.pi])
def test_a_node_at_the_floor_does_not_drag_the_limit_beyond_the_boundary(angle):
    x = np.array([-4.0, -3.0, -2.0, -1.0, 1.5, 2.5, 3.5, 4.5])
    f = np.log(np.abs(x) / 2)
    f[3] = -36.0
    asked = atlas([axis("along", x)], f, np.full(8, angle))
    (interval,) = asked.limits("along").rows[0].intervals
    assert interval.high.value == pytest.approx(2.0, abs=0.05)


# --- branches of different tolerance nodes -----------------------------------------------------


def test_where_the_worst_tolerance_changes_at_the_boundary_each_side_is_continued(tmp_path):
    # Clark (1976), J. Math. Biol. 3, 381-391 (from memory): -1 is the end for every delay
    text = f"""
    title = "Two delays"
    sample_period = "1 s"
    [plant]
    kind = "lag"
    time_constant = "1 s"
    [controller]
    kind = "p"
    [axes.kp]
    start = -1.513
    stop = 1.487
    count = 201
    [axes.update]
    sets = "delay.update"
    values = [{samples(0, 20)}]
    """
    (row,) = sweep_atlas(text, tmp_path).limits("kp").rows
    low = row.intervals[0].low
    assert low.between == (pytest.approx(-0.988), pytest.approx(-1.003))
    assert low.worst == {"update": 0.0}
    assert abs(low.value + 1) < 3e-4


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9])
@pytest.mark.parametrize("away", [-1.6, -1.1, -0.7, -0.1, 0.05])
def test_a_line_takes_its_nodes_from_the_tolerance_that_crosses(away, share):
    end, kink = X[100] + share / 200, X[100] + away / 200
    steep = np.expm1(5.0 * (X - end))
    flat = np.expm1(5.0 * (kink - end)) + 0.05 * (X - kink)
    asked = atlas(
        [axis("along", X), axis("tol", [1, 2], role="tolerance")], np.stack([steep, flat], axis=1)
    )
    high = asked.limits("along").rows[0].intervals[0].high
    assert high.between == (X[100], X[101])
    assert abs(high.value - end) < 1e-5


# --- how stability is lost ---------------------------------------------------------------------


def kind_at_the_end(angles, period_s=0.01):
    asked = atlas(
        [axis("along", [0.0, 1.0, 2.0])],
        [-0.1, -0.01, 0.01],
        angles,
        fixed={"sample_period": period_s},
    )
    high = asked.limits("along").rows[0].intervals[0].high
    return high.kind, high.hz


def test_a_real_eigenvalue_at_one_drifts():
    assert kind_at_the_end([0.5, 0.0, 0.0]) == ("drift", 0.0)


def test_a_real_eigenvalue_at_minus_one_alternates_at_half_the_sample_rate():
    assert kind_at_the_end([0.5, 2.9, np.float32(np.pi)]) == ("alternation", 50.0)


def test_a_pair_oscillates_at_the_frequency_between_its_nodes():
    kind, hz = kind_at_the_end([0.9, 1.0, 1.2])
    assert kind == "oscillation"
    assert 1.0 / (2 * math.pi * 0.01) < hz < 1.2 / (2 * math.pi * 0.01)


def test_an_oscillation_sampled_ten_thousand_times_a_cycle_is_no_drift():
    kind, hz = kind_at_the_end([6e-4, 6e-4, 6e-4], period_s=1e-6)
    assert kind == "oscillation"
    assert hz == pytest.approx(6e-4 / (2 * math.pi * 1e-6), rel=1e-5)


def test_along_the_sample_period_each_node_has_its_own_rate():
    asked = atlas([axis("sample_period", [0.01, 0.02, 0.04])], [-0.1, -0.01, 0.01], [0.1, 0.2, 0.4])
    high = asked.limits("sample_period").rows[0].intervals[0].high
    assert high.hz == pytest.approx(10 / (2 * math.pi), rel=1e-5)


def test_another_mode_at_the_stable_node_has_no_say_in_the_frequency():
    kind, hz = kind_at_the_end([2.0, 2.0, 0.5])
    assert (kind, hz) == ("oscillation", pytest.approx(0.5 / (2 * math.pi * 0.01)))


# --- where a gain of exactly 0 changes the loop's structure ------------------------------------

KI = np.array([-0.2, -0.1, 0.0, 0.1, 0.2, 0.3, 0.4])


def ki_limits(values, **more):
    asked = atlas([axis("ki", KI, sets="controller.ki")], values, **more)
    return asked.limits("ki").rows[0].intervals


def test_a_stable_loop_without_integrator_is_itself_the_limit():
    (interval,) = ki_limits([0.02, 0.01, -0.5, -0.01, -0.02, -0.01, 0.01])
    assert interval.low.value == 0.0
    assert interval.low.between == (0.0, -0.1)
    assert interval.low.kind == "drift"
    assert 0.3 < interval.high.value < 0.4


def test_above_zero_nothing_is_taken_from_zero_or_below():
    left = ki_limits([0.02, 0.01, -0.5, -0.015, -0.005, 0.005, 0.015])[0].high.value
    right = ki_limits([9.0, 7.0, -30.0, -0.015, -0.005, 0.005, 0.015])[0].high.value
    assert left == right == pytest.approx(0.25)


def test_an_unstable_loop_without_integrator_bounds_the_side_that_is_stable():
    (interval,) = ki_limits([0.05, 0.04, 0.03, -0.01, -0.05, -0.09, -0.13])
    assert interval.low.value == pytest.approx(0.075, abs=1e-4)
    assert interval.low.between == (0.1, 0.0)


def test_a_marginal_loop_without_integrator_puts_the_limit_at_zero():
    (interval,) = ki_limits([0.05, 0.02, 0.0, -0.01, -0.02, -0.03, -0.04])
    assert 0.0 <= interval.low.value < 1e-6


def test_a_gain_axis_without_a_node_at_zero_has_no_such_node():
    asked = atlas([axis("ki", KI + 0.05, sets="controller.ki")], np.linspace(0.02, -0.1, 7))
    (interval,) = asked.limits("ki").rows[0].intervals
    assert interval.low.value == pytest.approx(-0.05, abs=1e-4)


@pytest.mark.parametrize("filter_s", [0.0, 0.001])
def test_a_derivative_gain_of_zero_is_such_a_node_only_with_a_filter(filter_s):
    asked = atlas(
        [axis("kd", KI, sets="controller.kd")],
        [-0.05, -0.03, -0.01, 0.01, 0.03, 0.05, 0.07],
        fixed={"controller.derivative_filter": filter_s},
    )
    (interval,) = asked.limits("kd").rows[0].intervals
    assert interval.high.value == (0.0 if filter_s else pytest.approx(0.05))


def test_nothing_is_bracketed_across_a_gain_of_zero():
    x, lines = crossing_at([5.5] * len(KI))
    asked = atlas([axis("ki", KI, sets="controller.ki"), axis("along", x)], lines)
    with pytest.raises(QuestionError, match="the term is absent"):
        asked.limits("along", at={"ki": 0.05})
    assert asked.limits("along", at={"ki": 0.15}).bracketed == {"ki": (0.1, 0.2)}


# --- rows of a table ---------------------------------------------------------------------------


def test_along_ordered_rows_an_interval_ends_at_a_row_and_says_how_far_the_boundary_is():
    payload = rows("payload", ["empty", "half", "full"], {"plant.gain": [1, 2, 3]}, ordered=True)
    asked = atlas([payload], [-0.3, -0.1, 0.3])
    answer = asked.limits("payload")
    (interval,) = answer.rows[0].intervals
    assert (interval.low.value, interval.low.end) == ("empty", "axis_end")
    assert (interval.high.value, interval.high.between) == ("half", ("half", "full"))
    assert 0.0 < interval.high.share < 1.0
    assert answer.to_json()["rows"][0]["intervals"][0]["high_share"] == interval.high.share


def test_rows_without_an_order_have_no_limits_along_them():
    unit = rows("unit", ["a", "b"], {"plant.gain": [1, 2]})
    with pytest.raises(QuestionError, match="no order"):
        atlas([unit], [-0.3, 0.1]).limits("unit")


def test_rows_are_picked_by_label_and_the_worst_row_is_named():
    x, lines = crossing_at([7.5, 3.25, 5.5])
    unit = rows("unit", ["a", "b", "c"], {"plant.gain": [1, 2, 3]})
    asked = atlas([unit, axis("along", x)], lines)
    whole = asked.limits("along")
    assert whole.over == {"unit": ("a", "b", "c")}
    assert whole.rows[0].intervals[0].high.worst == {"unit": "b"}
    some = asked.limits("along", over={"unit": ["a", "c"]})
    assert some.over == {"unit": ("a", "c")}
    assert some.rows[0].intervals[0].high.value == pytest.approx(5.5)
    each = asked.limits("along", each=["unit"])
    assert [row.at["unit"] for row in each.rows] == ["a", "b", "c"]


def test_rows_that_set_the_sample_period_give_each_its_own_frequency():
    mode = rows("mode", ["slow", "fast"], {"sample_period": [0.02, 0.01]}, role="design")
    x, lines = crossing_at([5.5, 5.5])
    asked = atlas([mode, axis("along", x)], lines, np.full(lines.shape, 0.3))
    slow, fast = (row.intervals[0].high.hz for row in asked.limits("along").rows)
    assert fast == pytest.approx(2 * slow)


def test_every_batch_of_rows_is_a_box_in_order():
    from sweep.query.stability.limits import _batches

    for sizes in ([3, 4], [1, 7], [5, 1, 3], []):
        for most in range(1, 9):
            found = [
                place
                for cut in _batches(sizes, most)
                for place in itertools.product(*(range(part.start, part.stop) for part in cut))
            ]
            assert found == list(itertools.product(*map(range, sizes)))
