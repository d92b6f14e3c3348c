"""Single designs are judged as plain loops over every node judge them."""

from __future__ import annotations

import json
import math
from random import Random

import memory_atlas
import numpy as np
import plain_judge as plain
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from plain_robust import THRESHOLD, quantity_at

from sweep.config import Case, Design, Requirement
from sweep.errors import QuestionError
from sweep.query.answers import JudgeAnswer
from sweep.query.answers.plain import plain as plain_values
from sweep.query.judging.judge import AskedDesign, judge_designs, named_designs
from sweep.query.judging.tolerance import find_acceptance, find_in_hand
from sweep.query.judging.yields import find_yields
from sweep.query.question import Demand
from sweep.views.judge_table import judge_view
from sweep.views.sheet import CANNOT_BE_BUILT, to_text
from sweep.vocabulary import LoopStructure

PAGE = {"width": 108, "terminal": False}
SEEDS = st.integers(0, 2**32 - 1).map(Random)


def judged(asked):
    demand = Demand(None, asked.over, asked.question.asked["require"], asked.shake)
    answer = judge_designs(asked.question.atlas.stored, [AskedDesign("d", asked.at)], [demand])
    json.dumps(answer.to_json(), allow_nan=False)
    (found,) = answer.designs
    return found


def same(one, other):
    both = one is not None and other is not None
    if both and isinstance(one, float) and math.isnan(one):
        return math.isnan(other)
    return one == other or (both and math.isclose(one, other, rel_tol=1e-9))


def is_reached(asked, at, quantity, value, first):
    """Whether a value is reached at a place: of stored measures at the first of equal nodes."""
    if quantity in ("log_radius", "mode_angle"):
        return at == plain.place(asked, first)
    nodes = [node for node in plain.nodes_of(asked) if plain.place(asked, node) == at]
    return any(same(quantity_at(asked.question, quantity, node), value) for node in nodes)


def plain_json(document):
    """As text, in which not a number equals itself."""
    return json.dumps(plain_values(document))


# --- against plain loops ------------------------------------------------------------------------


@given(SEEDS)
@settings(max_examples=100)
def test_verdict_and_every_line_are_those_of_plain_loops(rnd):
    asked = plain.random_design(rnd)
    found = judged(asked)
    assert found.verdict == plain.verdict(asked)
    # a bound on the same as stability comes next to it, or goes where stability implies it
    own = [b for b in asked.question.bounds if b[:2] != ("log_radius", "max") or b[2] < THRESHOLD]
    own.sort(key=lambda bound: bound[:2] != ("log_radius", "max"))
    bounds = [("log_radius", "max", THRESHOLD), *own]
    lines = [line for line in found.lines if line.require != "processor_time"]
    for line, (quantity, sense, limit) in zip(lines, bounds, strict=True):
        value, node, unknown = plain.worst(asked, plain.nodes_of(asked), quantity, sense)
        assert same(line.worst, value)
        assert line.unknown == unknown
        assert node is None or is_reached(asked, line.at, quantity, value, node)
        first = line.require == "stable"
        assert line.verdict == plain.line_verdict(asked, quantity, sense, limit, is_stability=first)
    value, node, _ = plain.worst(asked, plain.nodes_of(asked), "decay_time", "max")
    assert same(found.decay_time.value, value)
    assert node is None or is_reached(asked, found.decay_time.at, "decay_time", value, node)
    assert found.nodes == len(plain.nodes_of(asked))
    assert found.brackets == plain.brackets(asked)
    assert found.bracketed == bool(plain.brackets(asked))


@given(SEEDS.map(plain.random_design) | SEEDS.map(plain.random_stable_design))
@settings(max_examples=60)
def test_a_verdict_does_not_depend_on_how_many_nodes_the_tolerances_have(asked):
    whole = judged(asked)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("sweep.query.judging.judge.can_be_held", lambda _: False)
        boxed = judged(asked)
    left_out = ("in_hand", "acceptance", "tolerances_skipped", "largest_jump")
    documents = [found.to_json() for found in (whole, boxed)]
    assert documents[0]["tolerances_skipped"] is None
    assert "tolerance axes hold" in documents[1]["tolerances_skipped"]
    assert documents[1]["in_hand"] is documents[1]["acceptance"] is None
    kept = [plain_json({k: v for k, v in d.items() if k not in left_out}) for d in documents]
    assert kept[0] == kept[1]


@given(SEEDS.map(plain.random_design) | SEEDS.map(plain.random_stable_design))
@settings(max_examples=200)
def test_distances_end_where_plain_loops_leave_the_stable_stretch(asked):
    found = judged(asked)
    if not plain.is_stable(asked) or plain.is_excluded(asked):
        assert found.distances == ()
        return
    walked = [axis for axis in asked.axes if not axis.labels or axis.ordered]
    assert sorted({d.axis for d in found.distances}) == sorted(axis.name for axis in walked)
    steps = []
    for distance in found.distances:
        axis = asked.question.atlas.grid.axis(distance.axis)
        values = plain.line(asked, axis)
        span = asked.spans[axis.name]
        node, step = (span[0], -1) if distance.direction == "down" else (span[-1], 1)
        stable, other, end = plain.stretch_end(values, plain.excluded_line(asked, axis), node, step)
        assert distance.end == end
        name = axis.labels or axis.coordinates.tolist()
        start = asked.at[axis.name] if axis.role == "design" else name[node]
        assert distance.start == start
        if end != "boundary":
            assert distance.to == name[stable]
            assert distance.between == (None if other is None else (name[stable], name[other]))
        else:
            assert distance.between == (name[stable], name[other])
            steps.append(abs(values[stable] - values[other]))
        if not axis.labels:
            ends = sorted((name[stable], name[other if end == "boundary" else stable]))
            assert ends[0] <= distance.to <= ends[1]
            assert distance.by == abs(distance.to - start)
            assert start == 0 or same(distance.percent, 100 * distance.by / abs(start))
            assert (distance.db is None) == (
                axis.sets[0] not in (*plain.GAINS, "plant.gain") or distance.to * start <= 0
            )
    steps += plain.jump_over(*plain.tolerance_grid(asked))
    assert same(found.largest_jump, max(steps, default=None))


@given(SEEDS.map(plain.random_stable_design))
@settings(max_examples=60)
def test_distances_are_the_limits_along_the_same_line(asked):
    assume(not asked.shake)
    for distance in judged(asked).distances:
        at = {name: value for name, value in asked.at.items() if name != distance.axis}
        over = {name: ends for name, ends in asked.over.items() if name != distance.axis}
        limits = asked.question.atlas.limits(distance.axis, at=at, over=over)
        side = "low" if distance.direction == "down" else "high"
        ends = [getattr(interval, side) for interval in limits.rows[0].intervals]
        (end,) = (end for end in ends if end.value == distance.to and end.end == distance.end)
        assert (end.kind, end.hz, end.worst) == (distance.kind, distance.hz, distance.worst)


@given(SEEDS)
@settings(max_examples=100)
def test_the_tolerance_that_hurts_most_is_that_of_plain_loops(rnd):
    asked = plain.random_design(rnd)
    hurts = {hurt.axis: hurt for hurt in judged(asked).hurts_most}
    middle = plain.middle(asked)
    nominal, _, _ = plain.worst(asked, plain.nodes_of(asked, **middle), "log_radius", "max")
    several = [name for name in middle if len(asked.spans[name]) > 1]
    assert set(hurts) == set(several)
    for name, hurt in hurts.items():
        alone = middle | {name: asked.spans[name]}
        nodes = plain.nodes_of(asked, **alone)
        value, node, unknown = plain.worst(asked, nodes, "log_radius", "max")
        assert same(hurt.alone, value)
        assert same(hurt.nominal, nominal)
        assert hurt.unknown == unknown
        assert node is None or hurt.at == plain.place(asked, node)[name]
    known = [hurt.alone for hurt in hurts.values() if not math.isnan(hurt.alone)]
    assert known == sorted(known, reverse=True)


@given(SEEDS)
@settings(max_examples=60)
def test_in_hand_acceptance_and_yield_rest_on_the_verdict_at_every_tolerance_node(rnd):
    asked = plain.random_design(rnd)
    found = judged(asked)
    axes, codes, radii = plain.tolerance_grid(asked)
    box = [np.array(asked.spans[axis.name]) for axis in axes]
    positive = ("damping", "compute", "sample_period")
    floors = [0.0 if axis.name in positive else -math.inf for axis in axes]
    assert found.in_hand == (find_in_hand(axes, box, codes, floors) if axes else None)
    assert found.acceptance == find_acceptance(axes, box, codes)
    assert found.yields == find_yields(axes, box, codes, radii)
    if found.in_hand:
        assert (found.in_hand.holds_to >= 1) == (found.verdict == "meets")


# --- what single cases look like ----------------------------------------------------------------


def one_gain(values, **more):
    """A gain from -2 to 2, log_radius as given."""
    return memory_atlas.atlas(
        [memory_atlas.axis("kp", [-2.0, -1.0, 0.0, 1.0, 2.0], sets="controller.kp")], values, **more
    )


def judge_one(atlas, at, **more):
    (found,) = judge_designs(
        atlas.stored, [AskedDesign("d", at, more.pop("own", {}))], [Demand(**more)]
    ).designs
    return found


def test_a_design_between_nodes_takes_the_worse_of_them_and_says_so():
    found = judge_one(one_gain([0.1, -0.1, -0.4, -0.3, 0.2]), {"kp": 0.25})
    assert found.bracketed
    assert found.brackets == {"kp": (0.0, 1.0)}
    assert found.log_radius.value == pytest.approx(-0.3)
    assert found.log_radius.at == {"kp": 1.0}
    assert found.to_json()["bracketed"] is True


def test_a_processor_that_needs_more_than_a_period_fails():
    axes = [
        memory_atlas.axis("sample_period", [0.01, 0.02], unit="s"),
        memory_atlas.axis("compute", [0.005, 0.015], sets="delay.compute", role="tolerance"),
    ]
    structure = LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),))
    atlas = memory_atlas.atlas(axes, [[-0.1, -0.1], [-0.1, -0.1]], structure=structure)
    fails = judge_one(atlas, {"sample_period": 0.01})
    assert (fails.verdict, fails.lines[-1].require) == ("fails", "processor_time")
    assert fails.lines[-1].worst == pytest.approx(1.5)
    assert fails.lines[-1].at == {"compute": 0.015}
    assert judge_one(atlas, {"sample_period": 0.02}).verdict == "meets"
    assert judge_one(atlas, {"sample_period": 0.01}, over={"compute": "0.005"}).verdict == "meets"


def test_a_faster_period_that_no_processor_reaches_ends_the_distance():
    """Everything is stable; at 10 ms the processor takes up to 15 ms."""
    axes = [
        memory_atlas.axis("sample_period", [0.01, 0.02, 0.03, 0.04], unit="s"),
        memory_atlas.axis("compute", [0.005, 0.015, 0.025], sets="delay.compute", role="tolerance"),
    ]
    structure = LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),))
    atlas = memory_atlas.atlas(axes, np.full((4, 3), -0.1), structure=structure)
    over = {"compute": (0.005, 0.015)}
    found = judge_one(atlas, {"sample_period": 0.02}, over=over)
    down, up, less, more = found.distances
    assert (down.end, down.to, down.between, down.by) == ("excluded", 0.02, (0.02, 0.01), 0.0)
    assert (up.end, less.end) == ("axis_end", "axis_end")
    assert (more.end, more.to, more.between) == ("excluded", 0.015, (0.015, 0.025))
    slower = judge_one(atlas, {"sample_period": 0.03}, over=over).distances
    assert (slower[0].end, slower[0].to, slower[3].end) == ("excluded", 0.02, "axis_end")
    assert found.to_json()["distances"][0]["end"] == "excluded"
    text = to_text(judge_view(JudgeAnswer("ab", "t", atlas.grid, (found,), 0.95, ())), **PAGE)
    assert "20, next node cannot be built" in text
    assert CANNOT_BE_BUILT in text
    late = judge_one(atlas, {"sample_period": 0.01}, over=over)
    assert (late.verdict, late.distances, late.gain_fall.stopped_by) == (
        "fails",
        (),
        "a loop that cannot be built to begin with",
    )
    text = to_text(judge_view(JudgeAnswer("ab", "t", atlas.grid, (late,), 0.95, ())), **PAGE)
    assert "no distances: it cannot be built at every node of the box" in text


def test_tolerances_too_many_to_hold_leave_the_verdict_and_say_what_is_left_out(monkeypatch):
    monkeypatch.setattr("sweep.query.extremes.MOST_DESIGN_NODES", 8)
    axes = [
        memory_atlas.axis("kp", [0, 1], sets="controller.kp"),
        memory_atlas.axis("damping", [0.1, 0.2, 0.3], sets="plant.damping", role="tolerance"),
        memory_atlas.rows("unit", "abc", {"plant.gain": [1, 2, 3]}),
    ]
    levels = np.full((2, 3, 3), -0.1)
    levels[:, 2], levels[:, :, 1] = 0.1, 0.2
    atlas = memory_atlas.atlas(axes, levels)
    found = judge_one(atlas, {"kp": 1}, over={"damping": 0.2, "unit": ["a", "c"]})
    assert (found.verdict, found.in_hand, found.acceptance) == ("meets", None, None)
    assert "9 nodes" in found.tolerances_skipped
    assert [(one.axis, one.rows, one.meets) for one in found.yields] == [("unit", 2, 2)]
    assert found.distances[3].end == "boundary"
    text = to_text(judge_view(JudgeAnswer("ab", "t", atlas.grid, (found,), 0.95, ())), **PAGE)
    assert "not told: the tolerance axes hold 9 nodes" in text
    assert judge_one(atlas, {"kp": 1}).yields[0].meets == 0
    with pytest.raises(QuestionError, match="no table of tolerances"):
        judge_designs(
            atlas.stored, [AskedDesign("d", {"kp": 1})], [Demand()], weights={"x": {"a": 1.0}}
        )


def test_a_value_between_nodes_is_bracketed_also_when_it_is_shaken():
    atlas = one_gain([0.1, -0.1, -0.4, -0.3, 0.2])
    found = judge_one(atlas, {"kp": 0.5}, shake={"kp": 1.0})
    assert found.bracketed
    assert found.brackets == {"kp": (0.0, 1.0)}
    assert found.shaken == {"kp": ("1.0", -1.0, 2.0)}
    document = found.to_json()
    assert (document["bracketed"], document["brackets"]) == (True, {"kp": (0.0, 1.0)})
    text = to_text(judge_view(JudgeAnswer("ab", "t", atlas.grid, (found,), 0.95, ())), **PAGE)
    assert "kp lies between the nodes 0 to 1" in text
    assert "kp shaken by 1.0: the worst of the nodes -1 to 2 counts" in text
    at_node = judge_one(atlas, {"kp": 0.0}, shake={"kp": 1.0})
    assert (at_node.bracketed, at_node.to_json()["bracketed"]) == (False, False)


def test_a_box_of_the_design_itself_stands_instead_of_that_of_the_case():
    axes = [
        memory_atlas.axis("kp", [1.0, 2.0], sets="controller.kp"),
        memory_atlas.axis("damping", [0.1, 0.2, 0.3], sets="plant.damping", role="tolerance"),
    ]
    atlas = memory_atlas.atlas(axes, [[0.1, -0.1, -0.2], [0.1, -0.1, -0.2]])
    case = Case("cold", {"damping": (0.1, 0.2)}, (Requirement("radius", "max", 0.99),))
    assert judge_one(atlas, {"kp": 1}, case=case).verdict == "fails"
    narrowed = judge_one(atlas, {"kp": 1}, case=case, own={"damping": "0.2:0.3"})
    assert (narrowed.verdict, narrowed.over) == ("meets", {"damping": (0.2, 0.3)})


def test_along_ordered_rows_each_way_starts_at_its_own_end_of_the_box():
    axes = [memory_atlas.rows("load", "abcdef", {"plant.gain": [1, 2, 3, 4, 5, 6.0]}, ordered=True)]
    atlas = memory_atlas.atlas(axes, [0.1, -0.1, 0.2, -0.1, -0.2, 0.3])
    down, up = judge_one(atlas, {}, over={"load": ["b", "d"]}).distances
    assert (down.to, down.between, up.to, up.between) == ("b", ("b", "a"), "e", ("e", "f"))
    assert (up.by, up.percent, up.db) == (None, None, None)


def test_an_unbounded_decay_is_shown_at_the_largest_radius():
    atlas = memory_atlas.atlas(
        [memory_atlas.axis("sample_period", [0.01, 0.02, 0.03], unit="s")], [0.1, 0.3, -0.1]
    )
    found = judge_one(atlas, {"sample_period": 0.012}, require={"max_decay_time": 1.0})
    assert math.isinf(found.decay_time.value)
    assert found.decay_time.at == found.lines[1].at == {"sample_period": 0.02}


def test_every_design_meets_every_case_and_one_failure_decides():
    atlas = one_gain([0.1, -0.1, -0.4, -0.3, np.nan])
    designs = [AskedDesign(str(kp), {"kp": kp}) for kp in (1.0, 2.0, -2.0)]
    demands = [Demand(), Demand(require={"max_radius": 0.95})]
    answer = judge_designs(atlas.stored, designs, demands)
    assert [found.verdict for found in answer.designs] == ["meets"] * 2 + ["unknown"] * 2 + [
        "fails"
    ] * 2
    assert answer.verdict == "fails"
    assert judge_designs(atlas.stored, designs[:2], demands).verdict == "unknown"
    assert judge_designs(atlas.stored, designs[:1], demands).verdict == "meets"
    assert "meets" in repr(answer)


def test_gains_are_also_apart_in_db_and_from_zero_in_no_ratio():
    found = judge_one(one_gain([0.1, -0.1, -0.4, -0.3, 0.3]), {"kp": 1.0})
    down, up = found.distances
    assert (down.end, down.db, up.end) == ("boundary", None, "boundary")
    assert up.db == pytest.approx(20 * math.log10(up.to))
    assert up.percent == pytest.approx(100 * (up.to - 1))
    at_zero = judge_one(one_gain([0.1, -0.1, -0.4, -0.3, 0.3]), {"kp": 0.0}).distances
    assert {(d.percent, d.db) for d in at_zero} == {(None, None)}


def test_no_kernel_and_few_nodes_are_needed():
    atlas = one_gain([0.1, -0.1, -0.4, -0.3, 0.3])
    judge_one(atlas, {"kp": 1.0})
    assert len(atlas.stored.nodes_read) <= 4


# --- what cannot be asked -----------------------------------------------------------------------


def test_named_designs_are_those_of_the_atlas():
    designs = (Design("quick", {"kp": 1.0}), Design("slow", {"kp": 2.0}))
    stored = one_gain([0.0] * 5, designs=designs).stored
    assert [design.name for design in named_designs(stored)] == ["quick", "slow"]
    assert named_designs(stored, ["slow"]) == (AskedDesign("slow", {"kp": 2.0}),)
    with pytest.raises(QuestionError, match="holds quick, slow"):
        named_designs(stored, ["fast"])


def test_an_atlas_without_designs_says_how_one_is_given():
    with pytest.raises(QuestionError) as caught:
        named_designs(one_gain([0.0] * 5).stored)
    assert "--at" in caught.value.remedy
    assert "--schedule" in caught.value.remedy


@pytest.mark.parametrize(
    ("at", "more", "problem"),
    [
        ({}, {}, "gives no kp"),
        ({"kp": 9}, {}, "the axis runs from"),
        ({"kp": 1, "ki": 2}, {}, "no such axis"),
        ({"kp": 1}, {"require": {"min_modulus_margin": 0.5}}, "modulus_margin"),
        ({"kp": 1}, {"over": {"kp": "1:2"}}, "kp"),
        ({"kp": 2}, {"shake": {"kp": "10%"}}, "shaking kp"),
    ],
)
def test_what_cannot_be_asked_is_told_in_one_line(at, more, problem):
    with pytest.raises(QuestionError) as caught:
        judge_one(one_gain([-0.1] * 5), at, **more)
    assert problem in caught.value.message
    assert "\n" not in caught.value.message
    assert caught.value.remedy


def test_a_tolerance_is_not_part_of_a_design():
    axes = [memory_atlas.axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance")]
    with pytest.raises(QuestionError, match="tolerance axis") as caught:
        judge_one(memory_atlas.atlas(axes, [-0.1, -0.1]), {"damping": 0.1})
    assert "--over damping" in caught.value.remedy


@pytest.mark.parametrize("confidence", [0.0, 1.0, math.nan])
def test_a_confidence_lies_between_0_and_1(confidence):
    with pytest.raises(QuestionError, match="confidence"):
        judge_designs(one_gain([-0.1] * 5).stored, [], [], confidence=confidence)
