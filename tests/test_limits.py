"""The stability boundary along an axis: against brute force, closed forms, and at its edges."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from memory_atlas import atlas, axis

from sweep.errors import QuestionError
from sweep.query.stability.limits import NODES_AT_ONCE
from sweep.vocabulary import STABILITY_THRESHOLD as EDGE
from sweep.vocabulary import LoopStructure

# --- brute force: the same definition, written as plain loops over one node at a time ----------


def brute_force(log_radius, late):
    """Stretches of stable places of a worst-case line as (first, last, low end, high end).

    ``late``: where the processor takes longer than a period.
    """
    n = len(log_radius)
    found = []
    place = 0
    while place < n:
        if late[place] or not log_radius[place] < EDGE:
            place += 1
            continue
        first = place
        while place + 1 < n and not late[place + 1] and log_radius[place + 1] < EDGE:
            place += 1
        ends = []
        for other in (first - 1, place + 1):
            if other in (-1, n):
                ends.append("axis_end")
            elif late[other]:
                ends.append("excluded")
            else:
                ends.append("unknown" if math.isnan(log_radius[other]) else "boundary")
        found.append((first, place, *ends))
        place += 1
    return found


def worst_line(values):
    """Largest value over the trailing axes at each place; NaN as soon as one of them is unknown."""
    flat = values.reshape(len(values), -1)
    return [math.nan if any(map(math.isnan, line)) else max(line) for line in flat.tolist()]


def late_line(late):
    """Whether any of the trailing axes is late, at each place."""
    return [any(line) for line in late.reshape(len(late), -1).tolist()]


LEVELS = st.sampled_from([-36.0, -0.3, -1e-3, -2e-9, 0.0, 1e-3, 0.4, math.nan])


@st.composite
def small_atlases(draw):
    """Design axis, asked axis and two tolerance axes in some order, with unknown nodes.

    Any of the first two may be the sample period, and any other but the last the processor's time.
    Both values and what is late have the shape (design, along, left, right).
    """
    sizes = [
        draw(st.integers(1, 3)),
        draw(st.integers(1, 9)),
        *draw(st.tuples(*[st.integers(1, 3)] * 2)),
    ]
    names = ["gain", "along", "left", "right"]
    roles = ["design", "design", "tolerance", "tolerance"]
    order = draw(st.permutations(range(4)))
    steps = draw(st.lists(st.floats(0.1, 3.0), min_size=sizes[1], max_size=sizes[1]))
    coordinates = [np.arange(size, dtype=float) for size in sizes]
    coordinates[0] += 0.5
    coordinates[1] = np.cumsum(steps)
    period = draw(st.sampled_from([None, 0, 1]))
    compute = draw(st.sampled_from([None, *{0, 1, 2} - {period}]))
    paths = list(names)
    fixed = {"sample_period": 1.5}
    if period is not None:
        paths[period], fixed = "sample_period", {}
    if compute is not None:
        paths[compute] = "delay.compute"
    shaped = [x.reshape([-1 if i == j else 1 for j in range(4)]) for i, x in enumerate(coordinates)]
    period_s = 1.5 if period is None else shaped[period]
    late = np.broadcast_to(False if compute is None else shaped[compute] > period_s, sizes)
    cells = draw(st.lists(LEVELS, min_size=math.prod(sizes), max_size=math.prod(sizes)))
    angles = draw(
        st.lists(st.sampled_from([0.0, 0.5, math.pi]), min_size=len(cells), max_size=len(cells))
    )
    shape = [sizes[i] for i in order]
    tile_shape = tuple(draw(st.integers(1, size)) for size in shape)
    asked = atlas(
        [axis(names[i], coordinates[i], sets=paths[i], role=roles[i]) for i in order],
        np.reshape(cells, shape),
        np.reshape(angles, shape),
        tile_shape=tile_shape,
        fixed=fixed,
        structure=LoopStructure(
            "oscillator", "p", delay_parts=() if compute is None else (("compute", "s"),)
        ),
    )
    plain = np.moveaxis(
        asked.stored.values["log_radius"].astype(float), np.argsort(order), range(4)
    )
    plain_angle = np.moveaxis(
        asked.stored.values["mode_angle"].astype(float), np.argsort(order), range(4)
    )
    return asked, plain, plain_angle, late


@settings(max_examples=150, deadline=None)
@given(small_atlases())
def test_limits_are_what_plain_loops_over_every_node_find(made):
    asked, values, angle, late = made
    answer = asked.limits("along")
    x = asked.grid.axis("along").coordinates
    assert answer.rows_in_all == len(values) == len(answer.rows)
    for row, block, angles, out in zip(answer.rows, values, angle, late, strict=True):
        line = worst_line(block)
        assert row.unknown == np.isnan(block).sum()
        assert row.nodes == block.size
        assert row.excluded == sum(late_line(out))
        expected = brute_force(line, late_line(out))
        assert len(row.intervals) == len(expected)
        for interval, (first, last, low_end, high_end) in zip(row.intervals, expected, strict=True):
            check_end(interval.low, low_end, x, line, first, first - 1, block, angles)
            check_end(interval.high, high_end, x, line, last, last + 1, block, angles)


def check_end(end, expected, x, line, stable, other, block, angles):
    assert end.end == expected
    if expected == "axis_end":
        assert (end.value, end.between, end.kind, end.hz) == (x[stable], None, None, None)
        return
    assert end.between == (x[stable], x[other])
    if expected in ("unknown", "excluded"):
        assert (end.value, end.kind, end.hz) == (x[stable], None, None)
        return
    assert min(x[stable], x[other]) <= end.value <= max(x[stable], x[other])
    worst = np.unravel_index(block[other].argmax(), block[other].shape)
    assert tuple(end.worst.values()) in (tuple(map(float, worst)), tuple(map(float, worst[::-1])))
    kinds = {0.0: "drift", 0.5: "oscillation", np.float32(math.pi): "alternation"}
    # Of equal values the first in the order of the atlas counts; the set holds them all.
    ties = angles[other][block[other] == line[other]]
    assert end.kind in {kinds[value] for value in ties.tolist()}


@settings(max_examples=60, deadline=None)
@given(small_atlases(), st.data())
def test_a_smaller_box_is_the_same_question_to_a_smaller_atlas(made, data):
    asked, values, _, late = made
    low = data.draw(st.integers(0, values.shape[2] - 1))
    high = data.draw(st.integers(low, values.shape[2] - 1))
    answer = asked.limits("along", over={"left": (float(low), float(high))})
    assert answer.over["left"] == (low, high)
    box = np.s_[:, :, low : high + 1]
    for row, block, out in zip(answer.rows, values[box], late[box], strict=True):
        found = [(item.low.end, item.high.end) for item in row.intervals]
        expected = brute_force(worst_line(block), late_line(out))
        assert found == [(a, b) for _, _, a, b in expected]


@settings(max_examples=60, deadline=None)
@given(small_atlases())
def test_tiles_and_row_batches_do_not_change_the_answer(made):
    asked = made[0]
    before = asked.limits("along")
    asked.stored.tile_shape = asked.grid.shape
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("sweep.query.stability.limits.NODES_AT_ONCE", 1)
        assert asked.limits("along").rows == before.rows


@settings(max_examples=60, deadline=None)
@given(small_atlases())
def test_the_document_is_strict_json_without_nan_or_infinity(made):
    import json

    asked = made[0]
    document = asked.limits("along").to_json()
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    for row in document["rows"]:
        for interval in row["intervals"]:
            assert {"low", "low_end", "low_between", "low_kind", "low_hz"} <= set(interval)
            assert {"high", "high_end", "high_between", "high_kind", "high_hz"} <= set(interval)


# --- what is listed, held, taken at its worst --------------------------------------------------


def crossing_at(places):
    """Lines that cross from stable to not stable at each of ``places``, on 0..10."""
    x = np.arange(11.0)
    return x, np.subtract.outer(-np.asarray(places, float), -x)


def test_a_tolerance_that_is_not_named_counts_at_its_worst_over_the_whole_axis():
    x, lines = crossing_at([7.5, 3.25, 5.0])
    asked = atlas([axis("damping", [1, 2, 3], role="tolerance"), axis("along", x)], lines)
    answer = asked.limits("along")
    (row,) = answer.rows
    assert row.intervals[0].high.value == pytest.approx(3.25)
    assert row.intervals[0].high.worst == {"damping": 2.0}
    assert answer.over == {"damping": (1.0, 3.0)}


def test_a_bound_between_nodes_takes_in_the_next_node_outward_and_says_so():
    x, lines = crossing_at([7.5, 3.25, 5.5])
    asked = atlas([axis("damping", [1, 2, 3], role="tolerance"), axis("along", x)], lines)
    answer = asked.limits("along", over={"damping": "2.5:3"})
    assert answer.over == {"damping": (2.0, 3.0)}
    assert answer.widened == ("damping",)
    assert answer.rows[0].intervals[0].high.value == pytest.approx(3.25)
    exact = asked.limits("along", over={"damping": (3, 3)})
    assert exact.widened == ()
    assert exact.rows[0].intervals[0].high.value == pytest.approx(5.5)


def test_each_lists_a_tolerance_node_by_node():
    x, lines = crossing_at([7.5, 3.25, 5.5])
    asked = atlas([axis("damping", [1, 2, 3], role="tolerance"), axis("along", x)], lines)
    answer = asked.limits("along", each=["damping"])
    assert [row.at for row in answer.rows] == [{"damping": 1.0}, {"damping": 2.0}, {"damping": 3.0}]
    assert [row.intervals[0].high.value for row in answer.rows] == pytest.approx([7.5, 3.25, 5.5])
    assert answer.over == {}


def test_nominal_takes_every_axis_that_is_not_named_at_its_nominal_node():
    x, lines = crossing_at([7.5, 3.25, 5.5])
    asked = atlas(
        [axis("damping", [1, 2, 3], role="tolerance", nominal=2), axis("along", x)], lines
    )
    answer = asked.limits("along", nominal=True)
    assert answer.nominal == ("damping",)
    assert answer.rows[0].at == {"damping": 3.0}
    assert answer.rows[0].intervals[0].high.value == pytest.approx(5.5)


def test_design_axes_are_listed_up_to_the_cap_and_the_count_is_said():
    x, lines = crossing_at(np.linspace(1.5, 8.5, 30))
    asked = atlas([axis("gain", np.arange(30)), axis("along", x)], lines)
    answer = asked.limits("along", rows=7)
    assert (len(answer.rows), answer.rows_in_all) == (7, 30)
    assert [row.at["gain"] for row in answer.rows] == list(range(7))
    assert answer.listed == ("gain",)


def test_only_the_rows_that_are_listed_are_read():
    x, lines = crossing_at(np.linspace(1.5, 8.5, 30))
    asked = atlas([axis("gain", np.arange(30)), axis("along", x)], lines, tile_shape=(1, 11))
    asked.limits("along", rows=2)
    assert sum(asked.stored.nodes_read) < 6 * len(x)


def test_a_worst_case_reads_every_node_once_in_blocks_of_bounded_size(monkeypatch):
    monkeypatch.setattr("sweep.query.blocks.NODES_AT_ONCE", 2 * 4 * 3)
    shape = (5, 11, 8)
    asked = atlas(
        [axis("gain", range(5)), axis("along", range(11)), axis("tol", range(8), role="tolerance")],
        np.zeros(shape),
        tile_shape=(2, 4, 3),
    )
    asked.limits("along")
    assert max(asked.stored.nodes_read) <= 2 * 4 * 3
    assert sum(asked.stored.nodes_read) == math.prod(shape)
    assert math.prod(shape) <= NODES_AT_ONCE


def test_a_fixed_value_between_nodes_is_bracketed_by_the_worse_of_its_two_nodes():
    x, lines = crossing_at([7.5, 3.25, 5.5])
    asked = atlas([axis("gain", [1, 2, 3]), axis("along", x)], lines)
    answer = asked.limits("along", at={"gain": 2.4})
    assert answer.bracketed == {"gain": (2.0, 3.0)}
    assert answer.rows[0].at == {"gain": 2.4}
    assert answer.rows[0].intervals[0].high.value == pytest.approx(3.25)


def test_an_unknown_node_in_the_box_ends_the_interval_at_the_last_stable_node():
    x, lines = crossing_at([7.5, 8.5])
    lines[1, 5] = math.nan
    asked = atlas([axis("damping", [1, 2], role="tolerance"), axis("along", x)], lines)
    (row,) = asked.limits("along").rows
    below, above = row.intervals
    assert (below.high.value, below.high.end, below.high.between) == (4.0, "unknown", (4.0, 5.0))
    assert (above.low.value, above.low.end, above.low.between) == (6.0, "unknown", (6.0, 5.0))
    assert above.high.value == pytest.approx(7.5)
    assert row.unknown == 1


def test_what_cannot_be_built_ends_the_interval_at_the_last_node_that_can():
    """The processor takes up to 2.5 s, so that nothing faster can be built, stable or not."""
    compute = axis("compute", [0.5, 2.5], sets="delay.compute", role="tolerance")
    asked = atlas(
        [compute, axis("sample_period", [1.0, 2, 3, 4, 5])],
        [[-0.1, -0.1, -0.1, -0.1, 0.1]] * 2,
        structure=LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),)),
    )
    (row,) = asked.limits("sample_period").rows
    (interval,) = row.intervals
    low = interval.low
    assert (low.value, low.end, low.between, low.kind) == (3.0, "excluded", (3.0, 2.0), None)
    assert interval.high.end == "boundary"
    assert row.excluded == 2
    document = asked.limits("sample_period").to_json()
    assert document["rows"][0]["intervals"][0]["low_end"] == "excluded"
    assert (document["rows"][0]["excluded"], document["excluded"]) == (2, 2)
    along = asked.limits("compute", at={"sample_period": 2}).rows[0].intervals
    assert [(i.low.end, i.high.end, i.high.value) for i in along] == [("axis_end", "excluded", 0.5)]
    assert asked.limits("compute", at={"sample_period": 2}, over={}).rows[0].excluded == 1


@pytest.mark.parametrize(
    ("question", "says"),
    [
        ({"along": "nothing"}, "no such axis"),
        ({"along": "along", "at": {"along": 1}}, "named by --along and by --at"),
        ({"along": "along", "at": {"tol": 1}, "each": ["tol"]}, "by --at and by --each"),
        ({"along": "along", "over": {"gain": "1:2"}}, "design axis"),
        ({"along": "along", "at": {"gain": 9}}, "runs from 1 to 3"),
        ({"along": "along", "over": {"tol": "2:1"}}, "lies above"),
        ({"along": "along", "over": {"tol": "1:2:3"}}, "LOW:HIGH"),
        ({"along": "along", "design": "none"}, "holds no designs"),
    ],
)
def test_a_question_that_cannot_be_asked_says_why(question, says):
    shape = (3, 11, 2)
    asked = atlas(
        [axis("gain", [1, 2, 3]), axis("along", range(11)), axis("tol", [1, 2], role="tolerance")],
        np.zeros(shape),
    )
    with pytest.raises(QuestionError, match=says):
        asked.limits(question.pop("along"), **question)
