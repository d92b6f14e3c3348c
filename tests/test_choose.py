"""Choosing a design: against plain loops over every node, and at the edges of an atlas."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from choose_by_hand import SENSE, Asked, ByHand, questions
from hypothesis import given, settings
from hypothesis import strategies as st
from memory_atlas import atlas, axis, rows

from sweep.errors import QuestionError
from sweep.query.choosing.choose import choose_designs
from sweep.query.question import make_demand
from sweep.vocabulary import STABILITY_THRESHOLD as EDGE
from sweep.vocabulary import LoopStructure


def choose(asked, **more):
    return choose_designs(
        asked.atlas.stored,
        asked.demand(),
        best=asked.best,
        at=asked.fixed(),
        within=asked.limited(),
        **more,
    )


def named(grid, node):
    """Nodes by axis as values by axis."""
    return {
        name: one.labels[node[name]] if one.labels else float(one.coordinates[node[name]])
        for name, one in ((name, grid.axis(name)) for name in grid.names if name in node)
    }


def check_row(row, by_hand, designs):
    design, held = by_hand.choose(designs)
    words = [by_hand.judged[one][0] for one in designs]
    assert dict(row.verdicts) == {
        word: words.count(word) for word in ("meets", "fails", "unknown", "excluded")
    }
    expected = True if "meets" in words else None
    if expected is None and ("fails" in words or "unknown" not in words):
        expected = False
    assert row.meets is expected
    assert row.excluded == (set(words) == {"excluded"})
    assert row.sample_period_s == by_hand.period(designs[0])
    if design is None:
        assert (row.design, row.worst, row.at, row.delay_left) == (None, {}, {}, None)
        assert row.axis_ends == row.range_ends == row.beside_failing == ()
        return
    assert row.design == named(by_hand.grid, dict(zip(by_hand.free, design, strict=True)))
    assert (row.box.nodes if row.box else None) == held
    worst, where = by_hand.judged[design][2:]
    for name in ("log_radius", "decay_time"):
        assert same(row.worst[name], worst.get((name, "max"), math.nan))
    best = by_hand.asked.best if by_hand.asked.best != "gain_box" else "log_radius"
    assert same(row.worst[best], worst.get((best, SENSE[best]), math.nan))
    at = where.get((best, SENSE[best]))
    if at is not None:
        assert row.at == named(by_hand.grid, {name: at[name] for name in by_hand.box})
    check_neighbours(row, by_hand, design)


def check_neighbours(row, by_hand, design):
    ends, limits, beside = [], [], []
    for place, name in enumerate(by_hand.free):
        one, span = by_hand.grid.axis(name), by_hand.asked.span(name)
        if len(one) == 1 or name in by_hand.asked.at or (one.labels and not one.ordered):
            continue
        nodes = [design[place] - 1, design[place] + 1]
        if any(node in range(len(one)) and node not in span for node in nodes):
            limits.append(name)
        if len(span) == 1:
            continue
        if design[place] in (0, len(one) - 1):
            ends.append(name)
        around = [(*design[:place], design[place] + step, *design[place + 1 :]) for step in (-1, 1)]
        if any(by_hand.judged[d][0] != "meets" for d in around if d in by_hand.judged):
            beside.append(name)
    assert row.axis_ends == tuple(ends)
    assert row.range_ends == tuple(limits)
    assert row.beside_failing == (tuple(beside) if row.meets else ())


def same(a, b):
    return a == b or (math.isnan(a) and math.isnan(b))


@settings(max_examples=200)
@given(questions())
def test_every_row_is_what_plain_loops_over_every_node_find(asked):
    by_hand = ByHand(asked)
    answer = choose(asked)
    periods = by_hand.periods()
    assert len(answer.rows) == len(periods)
    for row, designs in zip(answer.rows, periods, strict=True):
        check_row(row, by_hand, designs)
    meeting = [row for row in answer.rows if row.meets]
    slowest = max((row.sample_period_s for row in meeting), default=None)
    assert (answer.slowest and answer.slowest.sample_period_s) == slowest
    count, best, slowest = by_hand.outcome()
    assert (answer.base.meets, answer.base.best, answer.base.slowest_s) == (count, best, slowest)
    assert answer.base.share == count / len(by_hand.designs)
    known = [row.worst[asked.best] for row in meeting] if asked.best != "gain_box" else []
    if known:
        assert answer.best_row.worst[asked.best] == best
    words = [word for word, *_ in by_hand.judged.values()]
    assert answer.unknown == words.count("unknown")
    assert answer.is_known == (("meets" in words or "fails" in words) or "unknown" not in words)
    assert answer.slower_unknown == sum(
        by_hand.judged[d][0] == "unknown" and by_hand.period(d) > (slowest or 0)
        for d in by_hand.designs
    )
    json.dumps(answer.to_json(), allow_nan=False)


@settings(max_examples=60)
@given(questions(best=("decay_time", "dominant_damping")), st.sampled_from([1, 2]))
def test_shaken_designs_count_at_the_worst_of_their_neighbours(asked, reach):
    if asked.at or asked.within or len(asked.atlas.grid.axis("kp")) == 1:
        return
    by_hand = ByHand(asked, reach=reach)
    answer = choose_designs(asked.atlas.stored, asked.demand({"kp": float(reach)}), best=asked.best)
    for row, designs in zip(answer.rows, by_hand.periods(), strict=True):
        design, _ = by_hand.choose(designs)
        words = [by_hand.judged[one][0] for one in designs]
        assert row.verdicts["meets"] == words.count("meets")
        assert row.verdicts["unknown"] == words.count("unknown")
        assert (design is None) == (row.design is None)
        if design is not None:
            assert row.design == named(by_hand.grid, dict(zip(by_hand.free, design, strict=True)))
            assert same(
                row.worst["log_radius"],
                by_hand.judged[design][2].get(("log_radius", "max"), math.nan),
            )


@settings(max_examples=60)
@given(questions(best=("decay_time",)))
def test_the_delay_that_is_left_runs_to_the_first_node_that_is_not_stable(asked):
    grid, values = asked.atlas.grid, asked.atlas.stored.values["log_radius"]
    bus = grid.axis("bus")
    for row in choose(asked).rows:
        if not row.meets:
            assert row.delay_left is None
            continue
        (left,) = row.delay_left
        node = {
            name: list(one.labels).index(row.design[name])
            if one.labels
            else list(one.coordinates).index(row.design[name])
            for name, one in ((name, grid.axis(name)) for name in row.design)
        }
        nodes = asked.box | {name: [place] for name, place in node.items()}
        spans = [nodes[name] if name != "bus" else range(len(bus)) for name in grid.names]
        block = np.moveaxis(values[np.ix_(*spans)], grid.names.index("bus"), 0)
        line = [math.nan if np.isnan(part).any() else part.max() for part in block]
        upper = last = asked.box["bus"][-1]
        while last + 1 < len(line) and line[last + 1] < EDGE:
            last += 1
        x = bus.coordinates
        assert left.left == pytest.approx(left.to - x[upper])
        assert left.unit == "samples"
        if last + 1 == len(line):
            assert (left.end, left.to) == ("axis_end", x[last])
        elif math.isnan(line[last + 1]):
            assert (left.end, left.to) == ("unknown", x[last])
        else:
            assert left.end == "boundary"
            assert x[last] <= left.to <= x[last + 1]
            over = {name: ends for name, ends in asked.demand().over.items() if name != "bus"}
            (limits,) = asked.atlas.limits("bus", at=row.design, over=over).rows
            assert left.to in [item.high.value for item in limits.intervals]


def line_atlas(levels, periods=(0.001, 0.002, 0.004), **more):
    """Sample period by kp, one damping."""
    axes = [
        axis("sample_period", periods, unit="s"),
        axis("kp", np.arange(len(levels[0])), sets="controller.kp"),
    ]
    return atlas(axes, levels, **more)


STABLE = make_demand((), "", None, None, None)


def test_the_slowest_period_at_the_axis_end_is_said_to_lie_beyond_it():
    found = line_atlas([[-0.1, 0.1], [-0.1, 0.1], [-0.1, 0.1]])
    answer = choose_designs(found.stored, STABLE)
    assert answer.slowest_is_axis_end
    assert answer.slowest.sample_period_s == 0.004
    assert answer.slowest.axis_ends == ("sample_period", "kp")
    assert answer.slowest.beside_failing == ("kp",)
    inner = choose_designs(found.stored, STABLE, within={"sample_period": "1ms:2ms"})
    assert not inner.slowest_is_axis_end
    assert inner.slowest.sample_period_s == 0.002


def test_a_design_at_the_end_of_the_range_asked_for_is_not_taken_to_be_inside():
    """Beyond kp 3 nothing meets, beyond 4 ms something does; neither is judged."""
    levels = np.array([[-0.1, -0.2, -0.3, -0.4, 0.2]] * 3)
    found = line_atlas(levels)
    whole = choose_designs(found.stored, STABLE).slowest
    assert (whole.design["kp"], whole.beside_failing, whole.range_ends) == (3.0, ("kp",), ())
    kept = choose_designs(found.stored, STABLE, within={"kp": (1, 3), "sample_period": "1ms:2ms"})
    assert kept.slowest.design == {"sample_period": 0.002, "kp": 3.0}
    assert (kept.slowest.beside_failing, kept.slowest.axis_ends) == ((), ())
    assert kept.slowest.range_ends == ("sample_period", "kp")
    assert (kept.slowest_is_axis_end, kept.slowest_is_range_end) == (False, True)
    inside = choose_designs(found.stored, STABLE, within={"kp": (0, 4)})
    assert (inside.slowest.range_ends, inside.slowest_is_range_end) == ((), False)
    one = choose_designs(found.stored, STABLE, within={"sample_period": "1ms"})
    assert (one.slowest.range_ends, one.slowest_is_range_end) == (("sample_period",), True)
    fixed = choose_designs(found.stored, STABLE, at={"sample_period": "1ms", "kp": 1})
    assert (fixed.slowest.range_ends, fixed.slowest_is_range_end) == ((), False)
    document = kept.to_json()
    assert document["slowest"]["range_ends"] == ["sample_period", "kp"]
    assert document["slowest_is_range_end"] is True


def test_a_gain_box_says_where_the_range_asked_for_ends_it():
    found = line_atlas([[-0.1] * 6], (0.001,))
    (row,) = choose_designs(found.stored, STABLE, best="gain_box", within={"kp": (1, 4)}).rows
    assert (row.design["kp"], row.range_ends, row.box.axis_ends) == (2.0, (), ())
    assert row.box_range_ends == (("kp", "low"), ("kp", "high"))
    assert row.to_json()["box_range_ends"] == [["kp", "low"], ["kp", "high"]]


def test_a_period_at_which_nothing_can_be_built_is_told_from_one_that_fails():
    structure = LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),))
    found = line_atlas(
        [[-0.1, -0.1], [0.1, 0.1], [-0.1, 0.1]],
        fixed={"delay.compute": 0.0015},
        structure=structure,
    )
    rows_found = choose_designs(found.stored, STABLE).rows
    assert [(row.meets, row.excluded) for row in rows_found] == [
        (False, True),
        (False, False),
        (True, False),
    ]
    assert rows_found[0].design is None
    assert [row.to_json()["excluded"] for row in rows_found] == [True, False, False]


def test_equal_designs_are_told_apart_by_log_radius_and_then_by_their_order():
    """Both first designs have the damping ratio 1, and the second decays faster."""
    found = line_atlas([[-0.1, -0.2, -0.2]], periods=[0.001])
    answer = choose_designs(found.stored, STABLE, best="dominant_damping")
    assert answer.rows[0].design["kp"] == 1.0


def test_a_design_with_unknown_nodes_is_shown_only_after_those_that_are_known():
    levels = np.array([[[0.1, math.nan], [0.2, 0.2]]])
    axes = [
        axis("sample_period", [0.001], unit="s"),
        axis("kp", [0, 1], sets="controller.kp"),
        axis("damping", [0, 1], role="tolerance"),
    ]
    (row,) = choose_designs(atlas(axes, levels).stored, STABLE).rows
    assert (row.meets, row.design["kp"]) == (False, 1.0)


def test_a_fixed_sample_period_has_one_row():
    found = atlas([axis("kp", [0, 1, 2], sets="controller.kp")], [-0.1, -0.3, -0.2])
    (row,) = choose_designs(found.stored, STABLE).rows
    assert (row.sample_period_s, row.design) == (0.01, {"kp": 1.0})
    assert row.worst["decay_time"] == pytest.approx(0.01 / 0.3)


def test_a_period_between_nodes_is_bracketed_in_one_row():
    found = line_atlas([[-0.1, -0.4], [-0.3, -0.1], [0.1, 0.1]])
    answer = choose_designs(found.stored, STABLE, at={"sample_period": 0.0015})
    (row,) = answer.rows
    assert row.sample_period_s == 0.0015
    assert row.design == {"sample_period": 0.0015, "kp": 0.0}
    assert row.worst["log_radius"] == pytest.approx(-0.1)
    assert row.worst["decay_time"] == pytest.approx(0.01)
    assert answer.bracketed == {"sample_period": (0.001, 0.002)}


def test_a_table_of_designs_that_sets_the_period_gives_a_row_for_each_of_its_rows():
    table = rows(
        "setup",
        ["slow", "quick"],
        {"sample_period": [0.004, 0.001], "controller.kp": [1, 2]},
        role="design",
    )
    found = atlas([table, axis("damping", [0, 1], role="tolerance")], [[-0.1, -0.2], [-0.3, 0.1]])
    answer = choose_designs(found.stored, STABLE)
    assert [(row.sample_period_s, row.meets) for row in answer.rows] == [
        (0.004, True),
        (0.001, False),
    ]
    assert answer.slowest.design == {"setup": "slow"}
    assert answer.slowest.axis_ends == ()


def test_a_period_that_nature_varies_counts_at_its_largest():
    clock = axis("clock", [0.9e-3, 1e-3, 1.1e-3], sets="sample_period", role="tolerance", unit="s")
    found = atlas([clock, axis("kp", [0, 1], sets="controller.kp")], [[-0.1, -0.2]] * 3)
    (row,) = choose_designs(found.stored, STABLE).rows
    assert row.sample_period_s == 1.1e-3
    assert row.design == {"kp": 1.0}
    assert row.worst["decay_time"] == pytest.approx(1.1e-3 / 0.2)


def test_a_design_keeps_its_gains_and_leaves_the_period_to_be_chosen():
    class Released:
        name, values = "released", {"sample_period": 0.001, "kp": 1.0}

    found = line_atlas([[-0.5, -0.1], [-0.5, -0.1], [-0.5, 0.1]], designs=(Released(),))
    answer = choose_designs(found.stored, STABLE, design="released")
    assert [row.design["kp"] for row in answer.rows] == [1.0] * 3
    assert answer.slowest.sample_period_s == 0.002
    other = choose_designs(found.stored, STABLE, design="released", at={"kp": 0.0})
    assert other.slowest.sample_period_s == 0.004
    with pytest.raises(QuestionError, match="looking for design 'relased'"):
        choose_designs(found.stored, STABLE, design="relased")


def test_the_processors_time_ends_what_is_left_of_it():
    structure = LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),))
    times = [0, 1e-3, 2e-3, 3e-3]
    compute = axis("compute", times, sets="delay.compute", role="tolerance", unit="s")
    axes = [axis("sample_period", [1.5e-3], unit="s"), compute]
    found = atlas(axes, [[-0.4, -0.3, -0.2, -0.1]], structure=structure)
    demand = make_demand((), "", {"compute": [0.0, 1e-3]}, None, None)
    (left,) = choose_designs(found.stored, demand).rows[0].delay_left
    assert (left.end, left.to) == ("excluded", 1.5e-3)
    assert left.left == pytest.approx(0.5e-3)


def test_the_neighbours_of_a_shaken_design_count_for_what_is_left_as_well():
    axes = [
        axis("kp", [0, 1, 2], sets="controller.kp"),
        axis("bus", [0, 1, 2], sets="delay.bus", role="tolerance", unit="samples"),
    ]
    found = atlas(axes, [[-0.1, 0.1, 0.1], [-0.3, -0.2, -0.1], [-0.1, -0.1, 0.1]])
    over = {"bus": [0.0, 0.0]}
    calm = choose_designs(found.stored, make_demand((), "", over, None, None)).rows[0]
    assert calm.design == {"kp": 1.0}
    assert calm.delay_left[0].end == "axis_end"
    shaken = choose_designs(found.stored, make_demand((), "", over, None, {"kp": 1.0})).rows[0]
    assert shaken.design == {"kp": 1.0}
    assert shaken.delay_left[0].end == "boundary"
    assert 0 < shaken.delay_left[0].left < 1
    assert shaken.at == {"kp": 0.0, "bus": 0.0}


def test_the_gain_box_says_where_the_axis_ends_it():
    levels = [[-0.1, -0.1, -0.1, 0.1], [0.1, -0.1, -0.1, -0.1]]
    answer = choose_designs(line_atlas(levels, (0.001, 0.002)).stored, STABLE, best="gain_box")
    assert [row.box.axis_ends for row in answer.rows] == [(("kp", "low"),), (("kp", "high"),)]
    assert [row.design["kp"] for row in answer.rows] == [1.0, 2.0]
    assert answer.best_row is answer.rows[0]


def test_what_cannot_be_compared_is_refused_with_what_can():
    found = line_atlas([[-0.1, 0.1]], (0.001,))
    with pytest.raises(QuestionError, match="one of radius, decay_time") as error:
        choose_designs(found.stored, STABLE, best="decay_tme")
    assert error.value.remedy == "write decay_time, which was probably meant"
    with pytest.raises(QuestionError, match="by which one design is better than another"):
        choose_designs(found.stored, STABLE, best="mode_angle")


def test_nothing_known_is_said_and_counts_as_too_little():
    answer = choose_designs(line_atlas([[math.nan, math.nan]], (0.001,)).stored, STABLE)
    (row,) = answer.rows
    assert (row.design, row.meets, answer.is_known, answer.slower_unknown) == (None, None, False, 2)


def test_the_answer_prints_its_slowest_and_its_best():
    text = repr(choose_designs(line_atlas([[-0.1, 0.1], [-0.1, 0.1], [0.1, 0.1]]).stored, STABLE))
    assert "slowest: 2 ms with" in text
    assert "best: 1 ms with" in text


def test_by_hand_meets_every_kind_of_row():
    """The examples above would prove little if none of them had a row of each kind."""
    levels = [[-0.1, 0.1], [0.1, 0.1], [math.nan, math.nan]]
    found = line_atlas(levels, fixed={"delay.compute": 0.0})
    asked = Asked(found, {}, [], "decay_time")
    kinds = {by for by, *_ in ByHand(asked).judged.values()}
    assert kinds == {"meets", "fails", "unknown"}
