"""Nothing is said of what lies beside a gain of exactly 0, where a term's memory is absent."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from memory_atlas import atlas, axis

from sweep.config import Case, Requirement
from sweep.errors import QuestionError
from sweep.query.gaps import box_without_gaps, jump_without_gaps, regions_without_gaps
from sweep.query.judging.tolerance import find_acceptance, find_in_hand
from sweep.query.largest_box import find_largest_box
from sweep.query.verdicts import FAILS, MEETS
from sweep.vocabulary import LoopStructure

PI = LoopStructure("lag", "pi")


def integral(values, role="design", nominal=0):
    return axis("ki", values, sets="controller.ki", role=role, nominal=nominal)


def loop(values, log_radius, role="design", nominal=0):
    """A stored loop with an integral gain and a proportional one."""
    axes = [axis("kp", [1, 2], sets="controller.kp"), integral(values, role, nominal)]
    return atlas(axes, log_radius, fixed={"sample_period": 0.01}, structure=PI)


def quiet(values, **more):
    return loop(values, np.full((2, len(values)), -0.2), **more)


def test_a_tolerance_that_takes_in_zero_and_more_is_refused_everywhere():
    """Just above 0 the accumulator's eigenvalue lies just below 1, whatever both nodes say."""
    asked = quiet([0, 20, 40], role="tolerance", nominal=1)
    for over in ({}, {"ki": (0, 20)}, {"ki": (0.5, 20)}):
        for question in (
            lambda over=over: asked.robust(over=over),
            lambda over=over: asked.judge(at={"kp": 1}, over=over),
            lambda over=over: asked.choose(over=over),
            lambda over=over: asked.limits("kp", over=over),
        ):
            with pytest.raises(
                QuestionError, match="says nothing about the values beside it"
            ) as no:
                question()
            assert "--over ki=20:40" in no.value.remedy or "--over ki=20:20" in no.value.remedy


@pytest.mark.parametrize("over", [(0, 0), (20, 40), (25, 30)])
def test_a_tolerance_at_zero_alone_or_beside_it_is_answered(over):
    asked = quiet([0, 20, 40], role="tolerance", nominal=1)
    assert asked.robust(over={"ki": over}).meets == 2
    assert asked.judge(at={"kp": 1}, over={"ki": over}).verdict == "meets"


def test_the_largest_box_and_the_regions_end_beside_zero():
    answer = quiet([-20, 0, 20, 40]).robust()
    assert answer.meets == 8
    assert answer.largest_box.ends == {"kp": (1.0, 2.0), "ki": (20.0, 40.0)}
    assert answer.regions == 3
    around = quiet([-20, 0, 20, 40]).robust(around={"kp": 1, "ki": 0})
    assert around.largest_box.ends == {"kp": (1.0, 2.0), "ki": (0.0, 0.0)}


def test_a_step_across_zero_is_no_step_between_neighbours():
    levels = np.array([[-0.2, 0.5, -0.1, 0.1], [-0.2, 0.5, -0.1, 0.1]])
    assert loop([-20, 0, 20, 40], levels).robust().largest_jump == pytest.approx(0.2)


def test_a_gain_box_ends_beside_zero():
    (row,) = quiet([-20, 0, 20, 40]).choose(best="gain_box").rows
    assert row.box.ends["ki"] == (20.0, 40.0)


def test_shaking_a_gain_down_to_zero_is_unknown_and_refused_for_one_design():
    asked = quiet([0, 20, 40, 60])
    verdict = asked.robust(shake={"ki": 20}).dataset["verdict"].sel(kp=1.0).values.tolist()
    # 0 and 20 reach across or down to 0, 60 leaves the axis
    assert verdict == [-1, -1, 1, -1]
    with pytest.raises(QuestionError, match="leaves what the axis can tell"):
        asked.judge(at={"kp": 1, "ki": 20}, shake={"ki": 20})
    assert asked.judge(at={"kp": 1, "ki": 40}, shake={"ki": 15}).verdict == "meets"


def test_tolerance_in_hand_and_acceptance_end_beside_zero():
    ki = integral([0, 10, 20, 30, 40], "tolerance", nominal=2)
    verdict, gaps = np.full(5, MEETS, np.int8), {0: np.array([0])}
    box = [np.array([1, 2, 3])]
    grown = find_in_hand([ki], box, verdict, [-np.inf], gaps)
    assert (grown.end, grown.holds_to, grown.stopped_at) == ("unknown", 1.0, {"ki": 0.0})
    assert find_acceptance([ki], box, verdict, gaps).largest_box == {"ki": (10.0, 40.0)}
    failing = verdict.copy()
    failing[0] = FAILS
    assert find_in_hand([ki], box, failing, [-np.inf], gaps).end == "fails"


@st.composite
def masks(draw):
    shape = draw(st.tuples(*[st.integers(1, 5)] * draw(st.integers(1, 3))))
    rng = np.random.default_rng(draw(st.integers(0, 1 << 32)))
    gaps = {}
    for dimension, size in enumerate(shape):
        places = draw(st.sets(st.integers(0, size - 2))) if size > 1 else set()
        if places:
            gaps[dimension] = np.array(sorted(places))
    return rng.random(shape) < draw(st.sampled_from([0.6, 0.9, 1.0])), gaps


def pieces(size, gaps):
    """The stretches of one dimension between its gaps."""
    edges = [0, *(int(gap) + 1 for gap in gaps), size]
    return [slice(a, b) for a, b in itertools.pairwise(edges)]


@given(masks())
def test_a_box_without_gaps_is_the_largest_of_any_piece(made):
    meets, gaps = made
    best = None
    for part in itertools.product(*(pieces(n, gaps.get(i, ())) for i, n in enumerate(meets.shape))):
        found = find_largest_box(meets[part])
        if found:
            low = tuple(p.start + i for p, i in zip(part, found.low, strict=True))
            high = tuple(p.start + i for p, i in zip(part, found.high, strict=True))
            key = (-found.nodes, low, high)
            best = key if best is None else min(best, key)
    found = box_without_gaps(meets, gaps)
    assert (found and (-found.nodes, found.low, found.high)) == best


def test_regions_and_jumps_without_gaps_are_those_of_the_array():
    meets = np.array([True, True, False, True])
    assert regions_without_gaps(meets, {}, ()) == 2
    assert regions_without_gaps(meets, {0: np.array([0])}, ()) == 3
    values = np.array([-0.1, -0.2, 0.5, -0.3])
    assert jump_without_gaps(values, meets, {}, ()) == pytest.approx(0.8)
    assert jump_without_gaps(values, meets, {0: np.array([2])}, ()) == pytest.approx(0.7)


# --- what the same review found -----------------------------------------------------------------


def test_a_value_on_a_wide_logarithmic_axis_is_no_node_because_the_axis_is_long():
    """A billionth of this span is more than whole steps at its lower end."""
    gains = np.logspace(-3, 8, 45)
    asked = atlas([axis("kp", gains, sets="controller.kp")], np.full(45, -0.2))
    (design,) = asked.judge(at={"kp": 0.015}).designs
    assert design.bracketed
    low, high = design.brackets["kp"]
    assert low < 0.015 < high
    assert asked.robust(shake={"kp": "5%"}).meets > 0
    assert asked.grid.axes[0].snapped(gains * (1 + 1e-12)).tolist() == gains.tolist()


@pytest.mark.parametrize("asked_s", [1.0, 0.01])
def test_of_a_case_and_a_question_that_bound_the_same_the_stricter_counts(asked_s):
    found = quiet([10, 20])  # a decay time of 50 ms
    found.stored.cases = (Case("strict", {}, (Requirement("decay_time", "max", 0.04),)),)
    question = {"case": "strict", "require": {"max_decay_time": asked_s}}
    (design,) = found.judge(at={"kp": 1, "ki": 10}, **question).designs
    assert design.verdict == "fails"
    bound = next(line for line in design.lines if line.require == "max_decay_time")
    assert bound.limit == min(0.04, asked_s)
