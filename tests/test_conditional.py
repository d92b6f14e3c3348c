"""Whether a loop leaves stability as its gain falls is told as plain loops tell it."""

from __future__ import annotations

import json
from random import Random

import memory_atlas
import numpy as np
import plain_gain_fall as plain
import plain_judge
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sweep.query.answers import JudgeAnswer
from sweep.query.judging.judge import AskedDesign, judge_designs
from sweep.query.question import Demand
from sweep.views.judge_table import judge_view
from sweep.views.sheet import to_text
from sweep.vocabulary import LoopStructure

SEEDS = st.integers(0, 2**32 - 1).map(Random)
DESIGNS = SEEDS.map(plain_judge.random_stable_design) | SEEDS.map(plain_judge.random_design)


def judge_at(atlas, at, **demand):
    (found,) = judge_designs(atlas.stored, [AskedDesign("d", at)], [Demand(**demand)]).designs
    json.dumps(found.to_json()["gain_fall"], allow_nan=False)
    return found


def fall_of(atlas, at, **demand):
    return judge_at(atlas, at, **demand).gain_fall


def shown(atlas, at, **demand):
    """The view, on one line."""
    answer = JudgeAnswer("ab", "t", atlas.grid, (judge_at(atlas, at, **demand),), 0.95, ())
    return " ".join(to_text(judge_view(answer), width=108, terminal=False).split())


def gain(values, log_radius, name="kp", **more):
    """An atlas of one gain of the controller."""
    axis = memory_atlas.axis(name, values, sets=f"controller.{name}")
    return memory_atlas.atlas([axis], log_radius, **more)


def told(fall):
    return fall.conditionally_stable, fall.factor, fall.followed_to


def oscillator_atlas():
    return gain([-2.0, -1.0, 0.0, 1.0, 2.0], [0.1, -0.1, -0.4, -0.3, -0.2])


# --- against plain loops ------------------------------------------------------------------------


@given(SEEDS.map(plain.random_fall) | DESIGNS)
@settings(max_examples=300)
def test_conditional_stability_is_that_of_plain_loops(asked):
    fall = fall_of(asked.question.atlas, asked.at, over=asked.over, shake=asked.shake)
    expected, factor, followed_to = plain.gain_fall(asked)
    assert fall.conditionally_stable is expected
    assert fall.factor == pytest.approx(factor)
    assert fall.followed_to == pytest.approx(followed_to)
    assert expected is None or expected or fall.stopped_by == ""
    assert expected is not None or fall.stopped_by


@given(SEEDS.map(plain.random_fall), st.lists(st.floats(0.001, 1.0), min_size=8, max_size=8))
@settings(max_examples=200)
def test_designs_on_the_way_down_are_judged_as_the_answer_says(asked, factors):
    """Down to where it is followed every one is stable; where it is left, every one is not."""
    found = judge_at(asked.question.atlas, asked.at, over=asked.over)
    fall = found.gain_fall
    if asked.shake or fall.followed_to is None or not set(fall.scaled) & {"kp", "ki", "kd"}:
        return
    for factor in factors:
        if factor >= fall.followed_to:
            assert stability_at(asked, fall, factor) == "meets"
    if fall.conditionally_stable:
        assert stability_at(asked, fall, fall.factor) == "fails"


def stability_at(asked, fall, factor):
    at = {n: v * factor if n in fall.scaled else v for n, v in asked.at.items()}
    return judge_at(asked.question.atlas, at, over=asked.over).lines[0].verdict


# --- one gain -----------------------------------------------------------------------------------


def test_a_loop_that_leaves_stability_at_a_smaller_gain_is_conditionally_stable():
    fall = fall_of(gain([-2.0, -1.0, 0.0, 1.0, 2.0], [0.1, -0.1, 0.4, 0.3, -0.2]), {"kp": 2.0})
    assert told(fall) == (True, 0.5, 1.0)
    assert (fall.at, fall.stopped_by) == ({"kp": 1.0}, "")


def test_a_loop_that_is_stable_down_to_no_gain_is_not_conditionally_stable():
    assert told(fall_of(oscillator_atlas(), {"kp": 2.0})) == (False, None, 0.0)
    assert "not conditionally stable: it stays stable as kp is scaled down to 0" in shown(
        oscillator_atlas(), {"kp": 2.0}
    )


@pytest.mark.parametrize("bare", [0.0, 0.4, np.nan])
def test_a_loop_that_is_not_stable_without_any_gain_is_followed_to_its_last_node(bare):
    """Marginal as an integrator, unstable, or unknown: no place is left, but the rest is open."""
    atlas = gain([0.0, 0.5, 1.0, 2.0], [bare, -0.3, -0.3, -0.2])
    assert told(fall_of(atlas, {"kp": 2.0})) == (None, None, 0.25)
    assert "as far as the nodes tell, it stays stable as kp is scaled down to 0.25;" in shown(
        atlas, {"kp": 2.0}
    )


def test_a_node_beyond_no_gain_tells_nothing_when_it_is_not_stable():
    x = [-1.0, 0.5, 1.0, 2.0]
    assert told(fall_of(gain(x, [0.1, -0.1, -0.1, -0.1]), {"kp": 2.0})) == (None, None, 0.25)
    assert told(fall_of(gain(x, [-0.1] * 4), {"kp": 2.0})) == (False, None, 0.0)


def test_an_unknown_smaller_gain_leaves_conditional_stability_open():
    fall = fall_of(gain([0.0, 1.0, 2.0], [-0.4, np.nan, -0.2]), {"kp": 2.0})
    assert told(fall) == (None, None, 1.0)
    assert fall.stopped_by == "nodes that are not known"


def test_an_unknown_gain_above_one_that_is_left_makes_it_perhaps_earlier():
    atlas = gain([0.0, 0.5, 1.0, 1.5, 2.0], [-0.4, 0.1, np.nan, -0.1, -0.2])
    fall = fall_of(atlas, {"kp": 2.0})
    assert told(fall) == (True, 0.25, 0.75)
    assert fall.stopped_by == "nodes that are not known"
    assert "perhaps earlier, below 0.75: nodes that are not known" in shown(atlas, {"kp": 2.0})


def test_an_axis_that_ends_above_no_gain_says_how_far_down_it_tells():
    atlas = gain([0.5, 1.0, 2.0], [-0.1, -0.2, -0.3])
    fall = fall_of(atlas, {"kp": 2.0})
    assert told(fall) == (None, None, 0.25)
    assert fall.stopped_by == "the end of the axis kp"
    assert "scaled down to 0.25; below that cannot be told: the end of the axis kp" in shown(
        atlas, {"kp": 2.0}
    )


@pytest.mark.parametrize("values", [[0.0, 2.0], [-1.0, 2.0]])
@pytest.mark.parametrize("other", [-0.1, 0.1])
def test_without_a_node_on_the_way_down_nothing_is_told(values, other):
    atlas = gain(values, [other, -0.1])
    assert told(fall_of(atlas, {"kp": 2.0})) == (None, None, None)
    assert "cannot be told: no node between its gain and none" in shown(atlas, {"kp": 2.0})


def test_an_integral_gain_of_0_says_nothing_of_small_ones():
    structure = LoopStructure("lag", "pi")
    atlas = gain([0.0, 1.0, 2.0], [-0.4, -0.1, -0.2], "ki", structure=structure)
    fall = fall_of(atlas, {"ki": 2.0})
    assert told(fall) == (None, None, 0.5)
    assert fall.stopped_by.startswith("ki = 0, where its term is absent")


def test_gains_that_are_all_0_leave_it_open():
    assert fall_of(oscillator_atlas(), {"kp": 0.0}).stopped_by == "gains that are all 0"


# --- several gains, and what else lies between nodes ---------------------------------------------


def pd_atlas(log_radius):
    kp = memory_atlas.axis("kp", [0, 1, 2], sets="controller.kp")
    kd = memory_atlas.axis("kd", [0, 0.5, 2.0], sets="controller.kd")
    return memory_atlas.atlas([kp, kd], log_radius, structure=LoopStructure("oscillator", "pd"))


def test_one_stable_corner_does_not_make_a_place_stable():
    """At half the gains kp stands on its node, and kd between one that fails and one that holds."""
    levels = np.full((3, 3), -0.1)
    levels[1, 1] = 0.5
    fall = fall_of(pd_atlas(levels), {"kp": 2, "kd": 2})
    assert told(fall) == (None, None, 1.0)
    assert fall.stopped_by == "nodes around it of which only some are stable"
    levels[1, 2] = 0.5
    assert told(fall_of(pd_atlas(levels), {"kp": 2, "kd": 2})) == (True, 0.5, 1.0)


def test_a_corner_that_only_a_stretch_between_places_takes_in_counts():
    """On the way from kp = 1 to kd = 0.5 the corner at kp = 0 and kd = 2 encloses it."""
    levels = np.full((3, 3), -0.1)
    levels[0, 2] = 0.5
    assert told(fall_of(pd_atlas(levels), {"kp": 2, "kd": 2})) == (None, None, 0.5)
    levels[0, 2] = -0.1
    assert told(fall_of(pd_atlas(levels), {"kp": 2, "kd": 2})) == (False, None, 0.0)


@pytest.mark.parametrize(("period", "expected"), [(0.01, False), (0.015, None), (0.02, True)])
@pytest.mark.parametrize("falls", ["kp", "gain"])
def test_a_bracketed_period_is_left_only_at_both_nodes_and_stable_only_at_both(
    period, expected, falls
):
    """At the slower period the loop is not stable at a third of the gain."""
    periods = memory_atlas.axis("sample_period", [0.01, 0.02], unit="s")
    x = [0.0, 1.0, 2.0, 3.0]
    levels = np.full((2, 4), -0.1)
    levels[1, 1] = 0.5
    if falls == "kp":
        kp = memory_atlas.axis("kp", x, sets="controller.kp")
        atlas = memory_atlas.atlas([periods, kp], levels)
        fall = fall_of(atlas, {"kp": 3, "sample_period": period})
    else:
        axis = memory_atlas.axis("gain", x, sets="plant.gain", role="tolerance")
        atlas = memory_atlas.atlas([periods, axis], levels, fixed={"controller.kp": 1.0})
        fall = fall_of(atlas, {"sample_period": period}, over={"gain": (3, 3)})
    assert fall.conditionally_stable is expected
    assert fall.scaled == (falls,)


def test_a_shaken_period_is_left_only_where_all_of_its_nodes_are():
    periods = memory_atlas.axis("sample_period", [0.01, 0.02, 0.03], unit="s")
    kp = memory_atlas.axis("kp", [0.0, 1.0, 2.0], sets="controller.kp")
    levels = np.full((3, 3), -0.1)
    levels[:2, 1] = 0.5
    at, shake = {"kp": 2, "sample_period": 0.02}, {"sample_period": "50%"}
    atlas = memory_atlas.atlas([periods, kp], levels)
    assert told(fall_of(atlas, at, shake=shake)) == (None, None, 1.0)
    assert told(fall_of(atlas, at)) == (True, 0.5, 1.0)
    levels[2, 1] = 0.5
    atlas = memory_atlas.atlas([periods, kp], levels)
    assert told(fall_of(atlas, at, shake=shake)) == (True, 0.5, 1.0)


def test_the_worst_of_the_box_decides_what_is_left():
    kp = memory_atlas.axis("kp", [0.0, 1.0, 2.0], sets="controller.kp")
    damping = memory_atlas.axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance")
    atlas = memory_atlas.atlas([kp, damping], [[-0.1, -0.1], [0.2, np.nan], [-0.1, -0.1]])
    assert told(fall_of(atlas, {"kp": 2})) == (True, 0.5, 1.0)
    assert told(fall_of(atlas, {"kp": 2}, over={"damping": 0.2})) == (None, None, 1.0)


def integrating(kd):
    """The log_radius of a double integrator under pid, over kp, ki and kd, sampled every 10 ms."""
    kp, ki, period = np.arange(2, 21) / 10, np.arange(1, 11) / 10, 0.01
    axes = [
        memory_atlas.axis(name, values, sets=f"controller.{name}")
        for name, values in (("kp", kp), ("ki", ki), ("kd", np.asarray(kd)))
    ]
    levels = np.empty([len(axis) for axis in axes])
    for node in np.ndindex(levels.shape):
        p, i, d = (float(a.coordinates[k]) for a, k in zip(axes, node, strict=True))
        numerator = np.array([p + i * period + d / period, -p - 2 * d / period, d / period])
        control = np.polymul([period**2 / 2, period**2 / 2], numerator)
        loop = np.polyadd(np.polymul([1, -1, 0], [1, -2, 1]), control)
        levels[node] = np.log(np.abs(np.roots(loop)).max())
    structure = LoopStructure("double_integrator", "pid")
    return memory_atlas.atlas(axes, levels, structure=structure)


@pytest.mark.parametrize("kd", [[0.1, 2.0], [0.2, 2.0], np.arange(2, 21) / 10])
def test_an_integrating_loop_that_needs_its_gain_is_never_said_not_to(kd):
    """ki < kp kd scales by f on the left and by f squared on the right: it is left at f = 0.25."""
    fall = fall_of(integrating(kd), {"kp": 2, "ki": 1, "kd": 2})
    assert fall.conditionally_stable is not False
    assert fall.factor is None or fall.factor <= 0.25
    assert fall.followed_to > 0.25
    if len(kd) > 2:
        assert fall.conditionally_stable is True


# --- gains that cannot fall ---------------------------------------------------------------------


@pytest.mark.parametrize(
    ("bare", "plant", "expected"), [(-0.1, -0.1, False), (0.0, -0.1, None), (-0.1, 0.1, True)]
)
def test_a_fixed_gain_makes_the_gain_of_the_plant_fall_instead(bare, plant, expected):
    axes = [memory_atlas.axis("gain", [0, 0.5, 1.0, 2.0], sets="plant.gain", role="tolerance")]
    atlas = memory_atlas.atlas(axes, [bare, plant, -0.2, -0.3], fixed={"controller.kp": 1.0})
    fall = fall_of(atlas, {}, over={"gain": (1.0, 2.0)})
    assert fall.conditionally_stable is expected
    assert fall.scaled == ("gain",)
    assert fall.factor == (0.5 if expected else None)


def test_a_fixed_gain_without_a_gain_of_the_plant_leaves_it_open():
    axes = [memory_atlas.axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance")]
    atlas = memory_atlas.atlas(axes, [-0.2, -0.3], fixed={"controller.kp": 1.0})
    assert told(fall_of(atlas, {})) == (None, None, None)


def test_tiles_of_the_atlas_are_read_one_at_a_time():
    axes = [
        memory_atlas.axis("kp", np.arange(40), sets="controller.kp"),
        memory_atlas.axis("kd", np.arange(40), sets="controller.kd"),
    ]
    structure = LoopStructure("oscillator", "pd")
    atlas = memory_atlas.atlas(
        axes, np.full((40, 40), -0.1), tile_shape=(5, 5), structure=structure
    )
    assert told(fall_of(atlas, {"kp": 39, "kd": 39})) == (False, None, 0.0)
    assert max(atlas.stored.nodes_read) <= 40
