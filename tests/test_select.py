"""From what an engineer writes to nodes of an axis."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from memory_atlas import atlas, axis, rows

from sweep.errors import QuestionError
from sweep.query.assignments import parse_assignments
from sweep.query.select import (
    find_enclosing,
    find_node,
    find_span,
    gain_changes_structure,
)

PERIOD = axis("sample_period", [0.001, 0.002, 0.005, 0.01], unit="s", display_unit="ms", nominal=1)
UNIT = rows("unit", ["A, left", "B", "C:1"], {"plant.gain": [1, 2, 3]})
PAYLOAD = rows("payload", ["empty", "half", "full"], {"plant.gain": [1, 2, 3]}, ordered=True)


def test_assignments_are_split_at_commas_that_start_another_name():
    assert parse_assignments(["unit=A, left,kp = -0.3", "sample_period=5ms"]) == {
        "unit": "A, left",
        "kp": "-0.3",
        "sample_period": "5ms",
    }


def test_a_name_given_again_collects_its_values():
    assert parse_assignments(["unit=A,unit=B", "unit=C"]) == {"unit": ["A", "B", "C"]}


@pytest.mark.parametrize("text", ["kp", "=3", "kp=", ",kp=1", ""])
def test_a_piece_that_is_no_assignment_is_refused_with_an_example(text):
    with pytest.raises(QuestionError, match="expected NAME=VALUE") as caught:
        parse_assignments([text])
    assert "--at kp=0.3" in caught.value.remedy


@pytest.mark.parametrize("text", ["2ms", "2 ms", "0.002", "2000us", "2e-3", "0.002 s"])
def test_every_spelling_of_a_coordinate_finds_its_node(text):
    assert find_node(PERIOD, text) == 1


@pytest.mark.parametrize(("text", "node"), [("500Hz", 1), ("0.5 kHz", 1), ("100", 3)])
def test_a_sample_rate_finds_the_node_of_its_period(text, node):
    assert find_node(PERIOD, text, name="sample_rate") == node


def test_a_value_between_nodes_is_an_error_whose_remedy_can_be_pasted():
    with pytest.raises(QuestionError, match="lies between nodes, the nearest is 2 ms") as caught:
        find_node(PERIOD, "2.5ms")
    assert "sample_period=2ms" in caught.value.remedy
    assert "--nearest" in caught.value.remedy


@given(st.lists(st.floats(1e-9, 1e9), min_size=2, max_size=12, unique=True), st.data())
def test_the_node_named_by_the_remedy_is_found_again(values, data):
    one = axis("kp", sorted(values))
    low, high = one.coordinates[0], one.coordinates[-1]
    asked = data.draw(st.floats(low, high))
    try:
        node = find_node(one, asked)
    except QuestionError as error:
        text = error.remedy.partition("kp=")[2].partition(",")[0]
        node = find_node(one, asked, nearest=True)
        assert find_node(one, text) == node
    assert abs(one.coordinates[node] - asked) == np.abs(one.coordinates - asked).min()


def test_nearest_takes_the_nearest_node_inside_the_axis_only():
    assert find_node(PERIOD, "2.9ms", nearest=True) == 1
    with pytest.raises(QuestionError, match="runs from 1 ms to 10 ms"):
        find_node(PERIOD, "20ms", nearest=True)


@pytest.mark.parametrize("text", ["nan", "inf", "fast", "5 Hz", "", "1e999", "5 parsecs"])
def test_what_is_no_value_of_the_axis_is_refused(text):
    with pytest.raises(QuestionError) as caught:
        find_node(PERIOD, text)
    assert caught.value.where == ("sample_period",)
    assert caught.value.remedy


def test_a_value_between_nodes_is_enclosed_by_both():
    assert find_enclosing(PERIOD, "2.5ms").nodes == (1, 2)
    assert find_enclosing(PERIOD, "2ms").nodes == (1,)


@pytest.mark.parametrize(
    ("asked", "nodes", "widened"),
    [
        ("1ms:5ms", (0, 1, 2), False),
        ("1.5ms:4ms", (0, 1, 2), True),
        ((0.002, 0.005), (1, 2), False),
        ("2ms", (1,), False),
        (0.002, (1,), False),
    ],
)
def test_a_range_takes_the_next_node_outward_where_a_bound_lies_between(asked, nodes, widened):
    span = find_span(PERIOD, asked)
    assert (span.nodes, span.widened) == (nodes, widened)


def test_a_range_of_rates_is_a_range_of_periods_the_other_way_round():
    assert find_span(PERIOD, "100Hz:500Hz", name="sample_rate").nodes == (1, 2, 3)
    with pytest.raises(QuestionError, match="lies above"):
        find_span(PERIOD, "500Hz:100Hz", name="sample_rate")


def test_rows_are_named_by_label_whatever_the_label_holds():
    assert find_span(UNIT, "A, left").nodes == (0,)
    assert find_span(UNIT, ["B", "C:1"]).nodes == (1, 2)
    with pytest.raises(QuestionError, match="no such row"):
        find_span(UNIT, "B:D")
    with pytest.raises(QuestionError, match="rows are not ordered") as caught:
        find_span(UNIT, "B:C:1")
    assert "unit=B,unit=C:1" in caught.value.remedy


@pytest.mark.parametrize("at", ["0.1periods", "0.1 period"])
def test_a_sample_period_may_be_asked_in_natural_periods_of_the_nominal_plant(at):
    period = axis("sample_period", [0.001, 0.002, 0.005], unit="s", role="tolerance")
    hz = axis("plant_hz", [40, 50, 60], sets="plant.natural_frequency", unit="Hz", nominal=1)
    asked = atlas([period, hz], np.zeros((3, 3)))
    assert asked.point({"sample_period": at}).at["sample_period"] == 0.002
    fixed = atlas([period], np.zeros(3) - 1, fixed={"plant.natural_frequency": 50.0})
    assert fixed.point({"sample_period": at}).at["sample_period"] == 0.002
    answer = asked.limits("plant_hz", over={"sample_period": "1ms:" + at})
    assert answer.over["sample_period"] == (0.001, 0.002)


def test_natural_periods_of_a_plant_without_any_are_refused_with_what_to_write():
    period = axis("sample_period", [0.001, 0.002], unit="s")
    with pytest.raises(QuestionError, match="found") as caught:
        atlas([period], [-1, -1]).point({"sample_period": "0.1periods"})
    assert "natural_frequency, where it has one" in caught.value.remedy
    assert "ms" in caught.value.remedy


def test_ordered_rows_take_a_range_of_labels():
    assert find_span(PAYLOAD, "half:full").nodes == (1, 2)


def test_a_misspelled_row_or_axis_is_answered_with_what_was_probably_meant():
    with pytest.raises(QuestionError) as caught:
        find_node(PAYLOAD, "ful")
    assert "full" in caught.value.remedy
    with pytest.raises(QuestionError) as caught:
        small().point({"sample_perod": "2ms"})
    assert "sample_period" in caught.value.remedy


def small(**more):
    gain = axis("kp", [0.1, 0.2, 0.4], sets="controller.kp", nominal=2)
    values = np.linspace(-0.4, 0.4, 12).reshape(4, 3)
    return atlas([PERIOD, gain], values, np.full((4, 3), 0.5), fixed={"plant.gain": 2.0}, **more)


def test_a_point_takes_nominals_where_nothing_is_said_and_names_them():
    answer = small().point({"kp": 0.2})
    assert answer.at == {"sample_period": 0.002, "kp": 0.2}
    assert answer.nominal == ("sample_period",)
    assert answer.node == (1, 1)
    assert answer.parameters == {"sample_period": 0.002, "controller.kp": 0.2, "plant.gain": 2.0}


def test_a_point_says_what_follows_from_its_measures():
    answer = small().point({"kp": 0.1, "sample_period": 0.001})
    assert answer.stable is True
    log_radius = float(np.float32(-0.4))
    assert answer.derived["decay_time"] == pytest.approx(0.001 / -log_radius)
    assert answer.derived["hz"] == pytest.approx(0.5 / (2 * np.pi * 0.001))
    assert answer.derived["dominant_damping"] == pytest.approx(0.4 / np.hypot(0.4, 0.5))


def test_a_point_that_is_not_stable_decays_never():
    document = small().point({"kp": 0.4, "sample_period": 0.01}).to_json()
    assert document["stable"] is False
    assert document["derived"]["decay_time"] == "inf"


def test_a_point_that_is_not_computed_is_null_in_json_and_never_stable():
    gain = axis("kp", [0.1, 0.2])
    answer = atlas([gain], [np.nan, -1.0]).point({"kp": 0.1})
    document = answer.to_json()
    assert document["measures"] == {"log_radius": None, "mode_angle": None}
    assert document["stable"] is None
    assert document["unknown"] == 1


def test_the_nearest_node_is_taken_on_request_and_named():
    answer = small().point({"kp": 0.23}, nearest=True)
    assert answer.at["kp"] == 0.2
    assert answer.moved == {"kp": 0.23}
    assert small().point({"kp": 0.2}, nearest=True).moved == {}


def test_a_design_gives_its_values_and_at_comes_on_top():
    designs = (SimpleNamespace(name="released", values={"sample_period": 0.005, "kp": 0.1}),)
    asked = small(designs=designs)
    assert asked.point(design="released").at == {"sample_period": 0.005, "kp": 0.1}
    answer = asked.point({"sample_rate": "1 kHz"}, design="released")
    assert answer.at == {"sample_period": 0.001, "kp": 0.1}
    limits = asked.limits("kp", design="released")
    assert limits.rows[0].at == {"sample_period": 0.005}
    with pytest.raises(QuestionError, match="holds released"):
        asked.point(design="relesed")


def test_a_fixed_parameter_is_no_axis_and_the_message_says_its_value():
    with pytest.raises(QuestionError, match="one value 2 throughout"):
        small().point({"gain": 2})


def test_one_axis_under_two_spellings_is_refused():
    with pytest.raises(QuestionError, match="given twice"):
        small().point({"sample_rate": 500, "sample_period": 0.002})


def test_several_values_where_one_is_meant_are_refused():
    with pytest.raises(QuestionError, match="expected one value"):
        small().point({"kp": ["0.1", "0.2"]})


def test_a_plane_has_a_row_for_each_node_upwards_whatever_the_order_of_the_axes():
    asked = small()
    values = asked.stored.values["log_radius"]
    assert np.array_equal(asked.plane("sample_period", "kp").log_radius, values.T)
    plane = asked.plane("kp", "sample_period")
    assert np.array_equal(plane.log_radius, values)
    assert np.array_equal(np.broadcast_to(plane.period_s, (4, 3))[:, 0], PERIOD.coordinates)
    assert (plane.stable, plane.unknown) == (6, 0)


def test_a_plane_marks_the_designs_that_lie_in_it_and_no_others():
    third = axis("kd", [0.0, 1.0])
    gain = axis("kp", [0.1, 0.2])
    designs = (
        SimpleNamespace(name="inside", values={"kp": 0.13, "sample_period": 0.002, "kd": 1.0}),
        SimpleNamespace(name="outside", values={"kp": 0.1, "sample_period": 0.002, "kd": 0.0}),
    )
    asked = atlas([PERIOD, gain, third], np.zeros((4, 2, 2)), designs=designs)
    assert [mark.name for mark in asked.plane("kp", "sample_period", at={"kd": 1}).marks] == [
        "inside"
    ]


@pytest.mark.parametrize(
    ("x", "y", "at", "says"),
    [
        ("kp", "kp", {}, "two different axes"),
        ("kp", "sample_period", {"sample_rate": 500}, "also held"),
        ("kp", "gain", {}, "throughout"),
    ],
)
def test_a_plane_that_cannot_be_drawn_says_why(x, y, at, says):
    with pytest.raises(QuestionError, match=says):
        small().plane(x, y, at=at)


def test_structure_changes_where_a_gain_with_memory_is_exactly_zero():
    grid = atlas([axis("ki", [-1, 0, 1], sets="controller.ki")], [0, 0, 0]).grid
    assert gain_changes_structure(grid, grid.axes[0]) == (1,)
    row = rows("mode", ["p", "pi"], {"controller.ki": [0, 2]}, role="design", ordered=True)
    grid = atlas([row], [0, 0]).grid
    assert gain_changes_structure(grid, row) == (0,)
    swept = [axis("kd", [0, 1], sets="controller.kd")]
    swept.append(axis("filter", [0, 0.1], sets="controller.derivative_filter"))
    grid = atlas(swept, np.zeros((2, 2))).grid
    assert gain_changes_structure(grid, grid.axes[0]) == (0,)
    assert gain_changes_structure(grid, grid.axes[1]) == ()
