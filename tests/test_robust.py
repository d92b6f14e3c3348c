"""Every answer about robust designs is what plain loops over the nodes find."""

from __future__ import annotations

import collections
import json
import math
import random

import numpy as np
import plain_robust
import pytest
import random_questions
from hypothesis import given, settings
from hypothesis import strategies as st
from memory_atlas import atlas, axis, rows

from sweep.config import Case, Requirement
from sweep.query import blocks, extremes

KEYS = {
    "atlas_id",
    "case",
    "over",
    "design_nodes",
    "meets",
    "fails",
    "unknown",
    "excluded",
    "regions",
    "largest_box",
    "worst",
}
CODES = {1: "meets", 0: "fails", -1: "unknown", -2: "excluded"}


def refuse(*what):
    raise AssertionError(f"must not happen: {what}")


def shown(one, node):
    return one.labels[node] if one.labels else float(one.coordinates[node])


def check_counts(question, answer, designs):
    counts = collections.Counter(design.verdict for design in designs)
    for verdict in CODES.values():
        assert getattr(answer, verdict) == counts[verdict], verdict
    assert answer.design_nodes == len(designs)
    assert answer.share == counts["meets"] / len(designs)
    read = {node for design in designs for node in design.nodes}
    measures = set.union(*(plain_robust.needed(q) for q, _ in designs[0].worst))
    values = question.atlas.stored.values
    assert answer.unknown_nodes == sum(
        any(np.isnan(values[m][node]) for m in measures) for node in read
    )
    assert answer.nodes == len(read)


def check_region(question, answer, designs):
    places = plain_robust.meeting(question, designs)
    assert answer.regions == plain_robust.regions(question, places)
    jump = plain_robust.largest_jump(question, designs, places)
    assert answer.largest_jump == (None if jump is None else pytest.approx(jump, abs=1e-12))
    best, found = plain_robust.largest_box(question, places), answer.largest_box
    if best is None:
        assert found is None
        return
    nodes, low, high = best
    assert (found.nodes, found.exact, found.at_most) == (nodes, True, nodes)
    ends, sides = {}, set()
    for name, a, b in zip(question.free, low, high, strict=True):
        one, span = question.atlas.grid.axis(name), question.spans[name]
        ends[name] = shown(one, span[a]), shown(one, span[b])
        if len(one) > 1 and not one.labels and name not in answer.at:
            sides |= {(name, "low")} if span[a] == 0 else set()
            sides |= {(name, "high")} if span[b] == len(one) - 1 else set()
    assert found.ends == ends
    assert set(found.axis_ends) == sides


def check_worst(question, answer, designs):
    meets = [design for design in designs if design.verdict == "meets"]
    if not meets:
        assert answer.worst is None
        return
    most = max(design.worst["log_radius", "max"] for design in meets)
    assert answer.worst.log_radius == most
    first = next(design for design in meets if design.worst["log_radius", "max"] == most)
    at = [
        node
        for node in first.nodes
        if question.atlas.stored.values["log_radius"][node] == np.float32(most)
    ]
    seen = {
        tuple(shown(one, i) for one, i in zip(question.axes, node, strict=True)): node
        for node in at
    }
    place = tuple(answer.worst.at[one.name] for one in question.axes)
    assert place in seen
    if not question.windows:
        assert seen[place] == at[0], "of equal nodes the first in the box"
    decay = plain_robust.quantity_at(question, "decay_time", seen[place])
    assert answer.worst.decay_time_s == pytest.approx(decay, rel=1e-12)


def check_dataset(question, answer, designs):
    found = answer.dataset
    kept = [name for name in question.free if name not in answer.at]
    assert found["verdict"].dims == tuple(kept)
    for name in kept:
        one = question.atlas.grid.axis(name)
        assert found[name].to_numpy().tolist() == [shown(one, i) for i in question.spans[name]]
    senses = collections.Counter(quantity for quantity, _ in designs[0].worst)
    flat = {name: values.to_numpy().reshape(-1) for name, values in found.data_vars.items()}
    for number, design in enumerate(designs):
        assert CODES[int(flat["verdict"][number])] == design.verdict
        if not design.lost:
            assert flat["unknown"][number] == design.unknown
        assert (flat["unknown"][number] > 0) == (design.unknown > 0 or design.lost)
        for (quantity, sense), most in design.worst.items():
            name = quantity if senses[quantity] == 1 else f"{sense}_{quantity}"
            assert flat[name][number] == pytest.approx(most, rel=1e-12, nan_ok=True)
            if not math.isnan(most):
                check_place(question, flat, name, number, quantity, design, most)


def check_place(question, flat, name, number, quantity, design, value):
    """The value is attained where the dataset says."""
    node = []
    for position, one in enumerate(question.axes):
        key = f"{name}_at_{one.name}"
        varied = one.name in question.box or one.name in question.windows
        assert (key in flat) == varied
        own = {n[position] for n in design.nodes}
        if not varied:
            node.append(own.pop())
            continue
        (place,) = (i for i in own if shown(one, i) == flat[key][number])
        node.append(place)
    found = plain_robust.quantity_at(question, quantity, tuple(node))
    assert found == pytest.approx(value, rel=1e-12)


def check_document(answer):
    document = json.loads(json.dumps(answer.to_json(), allow_nan=False), parse_constant=refuse)
    assert document.keys() >= KEYS
    box = answer.largest_box
    assert document["largest_box"] == (box and {name: list(e) for name, e in box.ends.items()})
    assert document["over"] == {name: list(ends) for name, ends in answer.over.items()}
    worst = document["worst"]
    assert (worst is None) == (answer.worst is None)
    if worst:
        assert worst["at"] == answer.worst.at
        assert worst["log_radius"] == answer.worst.log_radius
    for name in ("meets", "fails", "unknown", "excluded", "design_nodes", "regions"):
        assert document[name] == getattr(answer, name)


def check_box(question, answer):
    """The answer says which nodes it used."""
    grid = question.atlas.grid
    for one in question.axes:
        nodes = question.spans[one.name]
        if one.role == "tolerance":
            ends = [shown(one, i) for i in nodes]
            assert list(answer.over[one.name]) == (ends if one.labels else [ends[0], ends[-1]])
    brackets = [n for n in question.box if grid.axis(n).role == "design"]
    assert set(answer.bracketed) == set(brackets)
    for name in brackets:
        nodes = question.spans[name]
        one = grid.axis(name)
        assert list(answer.bracketed[name]) == [shown(one, nodes[0]), shown(one, nodes[-1])]
    assert list(answer.free) == question.free


def check(question):
    """Ask, and hold every part of the answer to the loops; returns the answer."""
    answer = question.atlas.robust(**question.asked)
    designs = plain_robust.judge(question)
    check_box(question, answer)
    check_counts(question, answer, designs)
    check_region(question, answer, designs)
    check_worst(question, answer, designs)
    check_dataset(question, answer, designs)
    check_document(answer)
    assert "designs meet" in repr(answer)
    return answer


SEEDS = st.integers(0, 2**64).map(random.Random)


@settings(max_examples=250)
@given(SEEDS)
def test_every_answer_is_what_loops_over_the_nodes_find(rnd):
    check(random_questions.random_question(rnd))


# --- what hypothesis found, one by one -----------------------------------------------------------


def two_axes(log_radius=((-0.5, -0.25), (-0.125, 0.5)), **more):
    return atlas(
        [
            axis("kp", [1.0, 2.0], sets="controller.kp"),
            axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance"),
        ],
        log_radius,
        **more,
    )


def test_a_tolerance_axis_with_a_bound_between_nodes_stays_in_the_box_and_is_called_widened():
    answer = two_axes().robust(over={"damping": "0.1:0.15"})
    assert answer.widened == ("damping",)
    assert answer.over == {"damping": (0.1, 0.2)}
    assert (answer.bracketed, answer.shaken) == ({}, {})


def test_a_question_that_leaves_no_axis_free_is_about_one_design():
    answer = two_axes([[-0.5, -0.25], [-0.125, -0.5]]).robust(at={"kp": 1.5})
    assert (answer.design_nodes, answer.meets, answer.regions) == (1, 1, 1)
    assert answer.bracketed == {"kp": (1.0, 2.0)}
    assert answer.worst.at == {"kp": 2.0, "damping": 0.1}
    assert answer.largest_box.ends == {}
    failing = two_axes().robust(at={"kp": 1.5})
    assert (failing.fails, failing.largest_box, failing.worst) == (1, None, None)


def test_an_atlas_without_design_axes_is_one_design():
    nature = axis("damping", [0.1, 0.2, 0.3], sets="plant.damping", role="tolerance")
    answer = atlas([nature], [-0.5, -0.125, math.nan], tile_shape=(1,)).robust()
    assert (answer.design_nodes, answer.unknown, answer.unknown_nodes) == (1, 1, 1)


# --- cases ---------------------------------------------------------------------------------------


def test_a_question_replaces_the_box_of_a_case_and_tightens_its_bounds_and_is_named_so():
    case = Case(
        "cold",
        {"damping": (0.2, 0.2)},
        (Requirement("radius", "max", 0.7), Requirement("log_radius", "min", -0.2)),
    )
    asked = two_axes(cases=(case,))
    cold = asked.robust("cold")
    assert (cold.case, cold.over) == ("cold", {"damping": (0.2, 0.2)})
    assert (cold.meets, cold.fails) == (0, 2)
    bounds = {requirement.name: requirement.limit for requirement in cold.requirements}
    assert bounds == {"max_log_radius": -1e-9, "max_radius": 0.7, "min_log_radius": -0.2}
    looser = asked.robust("cold", require={"max_radius": 0.9, "min_log_radius": -0.3})
    assert {item.name: item.limit for item in looser.requirements} == bounds
    assert (looser.meets, looser.fails) == (0, 2)
    assert looser.case == "cold with max_radius=0.9, min_log_radius=-0.3"
    tighter = asked.robust("cold", require={"max_radius": 0.6})
    assert {item.name: item.limit for item in tighter.requirements}["max_radius"] == 0.6
    wider = asked.robust("cold", over={"damping": "0.1:0.2"}, require={"min_log_radius": -9})
    assert (wider.over, wider.meets, wider.nodes) == ({"damping": (0.1, 0.2)}, 0, 4)
    assert wider.case == "cold with damping=0.1:0.2, min_log_radius=-9"
    fixed = asked.robust("cold", at={"damping": 0.1}, require={"max_radius": 1, "min_radius": 0})
    assert fixed.over == {"damping": (0.1, 0.1)}


def test_known_to_fail_fails_whatever_else_is_unknown():
    answer = two_axes([[math.nan, 0.5], [math.nan, -0.5]]).robust()
    assert answer.dataset["verdict"].to_numpy().tolist() == [0, -1]
    assert (answer.fails, answer.unknown, answer.unknown_nodes) == (1, 1, 2)


def test_a_marginal_node_does_not_meet():
    at_threshold = np.nextafter(np.float32(-1e-9), np.float32(0))
    below = np.nextafter(np.float32(-1e-9), np.float32(-1))
    answer = two_axes([[at_threshold, -1], [below, -1]]).robust()
    assert answer.dataset["verdict"].to_numpy().tolist() == [0, 1]


def test_rows_without_an_order_are_no_neighbours_and_share_no_box():
    modes = ("a", "b", "c")
    for ordered, regions, nodes in ((False, 3, 2), (True, 1, 6)):
        unit = rows("mode", modes, {"controller.kd": (1, 2, 3)}, role="design", ordered=ordered)
        kp = axis("kp", [1.0, 2.0], sets="controller.kp")
        answer = atlas([unit, kp], np.full((3, 2), -1.0)).robust()
        assert (answer.regions, answer.largest_box.nodes) == (regions, nodes)
        assert answer.largest_box.ends["mode"] == ("a", "c" if ordered else "a")


# --- how it is read changes nothing --------------------------------------------------------------


@settings(max_examples=40)
@given(SEEDS)
def test_tiles_blocks_and_threads_change_nothing(rnd):
    question = random_questions.random_question(rnd)
    stored = question.atlas.stored
    answers = []
    for nodes_at_once, few_blocks in ((2_000_000, 3), (1, 0), (7, 0)):
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(blocks, "NODES_AT_ONCE", nodes_at_once)
            patch.setattr(extremes, "FEW_BLOCKS", few_blocks)
            answer = question.atlas.robust(**question.asked)
            answers.append((answer.to_json(), answer.dataset))
        stored.tile_shape = tuple(rnd.randint(1, n) for n in stored.grid.shape)
    for document, dataset in answers[1:]:
        assert document == answers[0][0]
        assert dataset.identical(answers[0][1])
