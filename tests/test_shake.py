"""Shaken designs: the worst over the neighbours, as plain loops over the nodes find it."""

from __future__ import annotations

import math
import random

import numpy as np
import pytest
import random_questions
from hypothesis import given, settings
from hypothesis import strategies as st
from memory_atlas import atlas, axis, rows
from test_robust import check

from sweep.errors import QuestionError
from sweep.vocabulary import LoopStructure

SEEDS = st.integers(0, 2**64).map(random.Random)


@settings(max_examples=250)
@given(SEEDS)
def test_every_shaken_answer_is_what_loops_over_the_nodes_find(rnd):
    check(random_questions.random_question(rnd, shaken=True))


@settings(max_examples=25)
@given(SEEDS)
def test_tiles_change_nothing_about_a_shaken_answer(rnd):
    question = random_questions.random_question(rnd, shaken=True)
    stored = question.atlas.stored
    before = question.atlas.robust(**question.asked)
    stored.tile_shape = (1,) * len(stored.grid.shape)
    after = question.atlas.robust(**question.asked)
    assert after.to_json() == before.to_json()
    assert after.dataset.identical(before.dataset)


# --- one by one ----------------------------------------------------------------------------------


def gains(coordinates, log_radius, *, name="kp", nominal=0):
    """One gain on the first axis, two nodes of damping on the second."""
    made = axis(name, coordinates, sets=f"controller.{name}", nominal=nominal)
    damping = axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance")
    values = np.asarray(log_radius, float)
    return atlas([made, damping], np.stack([values, values - 0.5], axis=1))


def verdicts(answer):
    return answer.dataset["verdict"].to_numpy().tolist()


def test_a_design_is_as_bad_as_its_worst_neighbour_and_the_answer_says_where_that_is():
    asked = gains([1, 2, 3, 4, 5], [-0.1, -0.4, -0.3, -0.2, 0.1])
    answer = asked.robust(shake={"kp": 1})
    assert verdicts(answer) == [-1, 1, 1, 0, 0]
    assert answer.dataset["log_radius_at_kp"].to_numpy().tolist() == [1, 1, 4, 5, 5]
    assert (answer.worst.at, answer.shaken) == ({"kp": 1, "damping": 0.1}, {"kp": "1"})
    assert answer.largest_box.ends == {"kp": (2, 3)}


def test_a_reach_between_nodes_takes_in_the_next_node_outward():
    asked = gains([1, 2, 3, 4, 5], [-0.1, -0.4, -0.3, -0.2, 0.1])
    assert verdicts(asked.robust(shake={"kp": 0.01})) == [-1, 1, 1, 0, 0]
    assert verdicts(asked.robust(shake={"kp": "34%"})) == [-1, 1, 0, 0, 0]
    assert verdicts(asked.robust(shake={"kp": "25 %"}, within={"kp": (2, 4)})) == [1, 1, 0]


def test_part_of_a_range_beyond_the_axis_is_unknown_but_what_is_known_to_fail_fails():
    asked = gains([1, 2, 3], [-0.1, -0.4, -0.3])
    answer = asked.robust(shake={"kp": 1.5})
    assert (answer.unknown, answer.unknown_nodes) == (3, 0)
    failing = gains([1, 2, 3], [-0.1, -0.4, 0.3]).robust(shake={"kp": 1.5})
    assert verdicts(failing) == [0, 0, 0]
    one = gains([1], [-0.1]).robust(shake={"kp": "1%"})
    assert (one.unknown, one.meets) == (1, 0)


def test_a_gain_of_0_is_shaken_by_a_share_of_nothing():
    asked = gains([-1, 0, 1], [0.1, -0.2, 0.1])
    assert verdicts(asked.robust(shake={"kp": "50%"})) == [0, 1, 0]
    assert verdicts(asked.robust(shake={"kp": 0.5})) == [0, 0, 0]


def test_a_node_without_the_integral_term_says_nothing_about_a_small_integral_gain():
    # the node at 0 is not stable, and is no neighbour of those that do not reach it
    asked = gains([-1, 0, 1, 2, 3], [-0.1, 0.2, -0.3, -0.4, -0.5], name="ki")
    assert verdicts(asked.robust(shake={"ki": 0.5})) == [-1, 0, -1, 1, -1]
    assert verdicts(asked.robust(shake={"ki": 1})) == [0, 0, 0, 1, -1]
    assert verdicts(asked.robust(shake={"ki": "10%"})) == [-1, 0, -1, 1, -1]
    beside = asked.robust(shake={"ki": 0.5}, within={"ki": 1})
    assert beside.dataset["log_radius"].to_numpy().tolist() == pytest.approx([-0.3])
    # a proportional gain of 0 is a loop like its neighbours
    asked = gains([-1, 0, 1, 2, 3], [-0.1, 0.2, -0.3, -0.4, -0.5])
    assert verdicts(asked.robust(shake={"kp": 0.5})) == [0, 0, 0, 1, -1]


def test_a_rate_and_a_period_are_shaken_alike():
    period = axis("sample_period", [0.008, 0.01, 0.0125, 0.02], sets="sample_period", unit="s")
    asked = atlas([period], [-0.1, -0.2, -0.3, 0.1])
    assert verdicts(asked.robust(shake={"sample_rate": "20Hz"})) == [-1, 1, 0, 0]
    assert verdicts(asked.robust(shake={"sample_rate": "20%"})) == [-1, 1, 0, 0]
    assert verdicts(asked.robust(shake={"sample_period": "2 ms"})) == [-1, 1, 0, 0]
    assert verdicts(asked.robust(shake={"sample_period": "20%"})) == [-1, 1, 0, 0]
    # a rate that may fall to nothing leaves every axis
    assert verdicts(asked.robust(shake={"sample_rate": 100}, within={"sample_period": 0.01})) == [0]


def test_the_decay_time_of_a_neighbour_is_taken_at_its_own_period():
    period = axis("sample_period", [0.01, 0.02, 0.04], sets="sample_period", unit="s")
    answer = atlas([period], [-0.1, -0.1, -0.1]).robust(
        shake={"sample_period": "50%"},
        within={"sample_period": 0.02},
        require={"max_decay_time": "0.3 s", "min_decay_time": 0.1},
    )
    assert verdicts(answer) == [0]
    found = answer.dataset
    assert found["max_decay_time"].to_numpy() == pytest.approx([0.4])
    assert found["min_decay_time"].to_numpy() == pytest.approx([0.1])
    assert found["max_decay_time_at_sample_period"].to_numpy().tolist() == [0.04]
    fixed = atlas([period], [-0.1, -0.1, -0.1]).robust(
        at={"sample_period": 0.02}, shake={"sample_period": "50%"}, require={"max_decay_time": 0.3}
    )
    assert (fixed.fails, fixed.bracketed) == (1, {"sample_period": (0.01, 0.04)})


def test_an_unbounded_worst_value_is_not_taken_for_an_unknown_one():
    asked = atlas([axis("kp", [1, 2, 3], sets="controller.kp")], [math.nan, 0.1, 0.2])
    answer = asked.robust(shake={"kp": 1}, within={"kp": 2}, require={"min_decay_time": 1})
    assert answer.dataset["decay_time"].to_numpy().tolist() == [math.inf]


def test_a_neighbour_that_cannot_be_built_excludes_a_design():
    period = axis("sample_period", [0.01, 0.02, 0.04], sets="sample_period", unit="s")
    structure = LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),))
    fixed = {"delay.compute": 0.015}
    asked = atlas([period], [-0.1, -0.1, -0.1], fixed=fixed, structure=structure)
    assert verdicts(asked.robust()) == [-2, 1, 1]
    assert verdicts(asked.robust(shake={"sample_period": "50%"})) == [-2, -2, -1]


def test_a_fixed_design_takes_its_neighbours_into_the_box():
    asked = gains([1, 2, 3, 4, 5], [-0.1, -0.4, -0.3, -0.2, 0.1])
    answer = asked.robust(at={"kp": 2.5}, shake={"kp": "20%"})
    assert (answer.meets, answer.bracketed) == (1, {"kp": (2.0, 3.0)})
    assert answer.over == {"damping": (0.1, 0.2)}
    assert asked.robust(at={"kp": 3}, shake={"kp": 2}).fails == 1


# --- what cannot be asked ------------------------------------------------------------------------

UNIT = rows("unit", ("a", "b"), {"controller.kd": (1, 2)}, role="design")
BAD = {
    "an axis that is not there": ({"kpp": "10%"}, {}, "write kp"),
    "a tolerance axis": ({"damping": "10%"}, {}, "it is a tolerance axis"),
    "a row axis": ({"unit": "10%"}, {}, "it is a table of rows"),
    "no reach": ({"kp": "0%"}, {}, "kp by 0%"),
    "all of it": ({"kp": "100%"}, {}, "percentage below 100"),
    "less than nothing": ({"kp": "-5%"}, {}, "kp by -5%"),
    "no distance": ({"kp": 0}, {}, "above 0"),
    "no number": ({"kp": "wide"}, {}, "kp by wide"),
    "an infinite number": ({"kp": math.inf}, {}, "kp by inf"),
    "no number at all": ({"kp": math.nan}, {}, "kp by nan"),
    "the unit of something else": ({"kp": "1 ms"}, {}, "kp by 1 ms"),
    "a period for a rate": ({"sample_rate": "1 ms"}, {}, "1 ms"),
    "a rate for a period": ({"sample_period": "1 Hz"}, {}, "1 Hz"),
    "both spellings": ({"sample_period": "1%", "sample_rate": "1%"}, {}, "given twice"),
    "a fixed value beyond the axis": ({"kp": "60%"}, {"kp": 1}, "runs from 1 to 4"),
}


@pytest.mark.parametrize(("shake", "at", "words"), BAD.values(), ids=BAD)
def test_a_shake_that_means_nothing_is_refused_in_one_line(shake, at, words):
    axes = [
        axis("kp", [1, 2, 4], sets="controller.kp"),
        axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance"),
        axis("sample_period", [0.01, 0.02], sets="sample_period", unit="s"),
        UNIT,
    ]
    asked = atlas(axes, np.full((3, 2, 2, 2), -1.0))
    with pytest.raises(QuestionError) as caught:
        asked.robust(shake=shake, at=at)
    said = f"{caught.value.message} -> {caught.value.remedy}"
    assert words in said
    assert "\n" not in said
    assert caught.value.where
    assert caught.value.remedy


def test_a_fixed_integral_gain_is_not_shaken_across_its_absence():
    asked = gains([0, 1, 2, 3], [0.1, -0.2, -0.3, -0.4], name="ki")
    with pytest.raises(QuestionError, match="ki = 1 by"):
        asked.robust(at={"ki": 1}, shake={"ki": "10%"})
    assert asked.robust(at={"ki": 2}, shake={"ki": "10%"}).meets == 1
