"""The language of requirements: what may be bounded, in which units, and when a bound is broken."""

from __future__ import annotations

import math

import numpy as np
import pytest
from config_text import read, swap
from hypothesis import given, settings
from hypothesis import strategies as st
from memory_atlas import atlas, axis, rows

from sweep.config import Requirement
from sweep.errors import QuestionError
from sweep.query.derived import values_of
from sweep.query.requirement import STABLE, read_requirements, requirement_text
from sweep.vocabulary import DERIVED, MEASURES, MeasureSpec

HELD = ("log_radius", "mode_angle")
SENSES = ("max", "min")


def one_node(log_radius, mode_angle=0.0, *, period_s=0.01):
    """An atlas of one node."""
    kp = axis("kp", [1.0], sets="controller.kp")
    return atlas([kp], [log_radius], [mode_angle], fixed={"sample_period": period_s})


def verdict(asked, require):
    return int(asked.robust(require=require).dataset["verdict"].item())


# --- reading -------------------------------------------------------------------------------------


@pytest.mark.parametrize("sense", SENSES)
@pytest.mark.parametrize("quantity", [*DERIVED, *MEASURES])
def test_everything_that_is_held_or_follows_can_be_bounded_from_both_sides(quantity, sense):
    found = read_requirements({f"{sense}_{quantity}": 0.5}, HELD, "Bench")
    assert found == (STABLE, Requirement(quantity, sense, 0.5))


@pytest.mark.parametrize(
    ("name", "text", "limit"),
    [
        ("max_decay_time", "80 ms", 0.08),
        ("max_decay_time", "80ms", 0.08),
        ("max_decay_time", 0.08, 0.08),
        ("min_decay_time", "250 us", 0.00025),
        ("max_radius", "95 %", 0.95),
        ("max_radius", "0.95", 0.95),
        ("min_dominant_damping", "2%", 0.02),
        ("max_log_radius", -0.25, -0.25),
        ("max_mode_angle", 1, 1.0),
        ("max_mode_angle", "1 rad", 1.0),
    ],
)
def test_a_bound_is_written_as_in_a_config(name, text, limit):
    (_, found) = read_requirements({name: text}, HELD, "Bench")
    assert (found.name, found.limit) == (name, limit)


def test_a_case_and_a_question_say_the_same_by_the_same_words():
    for text in ('max_decay_time = "80 ms"', "max_radius = 0.9", 'min_dominant_damping = "3 %"'):
        name, _, value = text.partition(" = ")
        (case,) = read(swap(('max_decay_time = "80 ms"', text))).cases
        assert read_requirements({name: value.strip('"')}, HELD, "x")[1:] == case.requirements


def test_requirements_that_are_already_read_are_taken_as_they_are():
    bound = Requirement("radius", "max", 0.9)
    assert read_requirements([bound, STABLE], HELD, "Bench") == (STABLE, bound)
    assert read_requirements({}, HELD, "Bench") == (STABLE,)


def test_a_requirement_reads_like_a_sentence():
    found = read_requirements({"max_decay_time": 0.08, "min_dominant_damping": 0.02}, HELD, "x")
    assert [requirement_text(item) for item in found] == [
        "stable",
        "decay_time at most 80 ms",
        "dominant_damping at least 0.02",
    ]


@pytest.mark.parametrize(
    ("typed", "meant"),
    [
        ("max_decaytime", "max_decay_time"),
        ("max_radios", "max_radius"),
        ("min_dominant_dampng", "min_dominant_damping"),
        ("min_mode_angel", "min_mode_angle"),
    ],
)
def test_a_near_miss_is_told_what_was_probably_meant(typed, meant):
    with pytest.raises(QuestionError) as caught:
        read_requirements({typed: 0.5}, HELD, "Bench")
    assert typed in caught.value.message
    assert f'"{meant}" was probably meant' in caught.value.remedy


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("max_decay_time", "80 Hz"),
        ("max_decay_time", 0),
        ("max_decay_time", "-1 s"),
        ("min_decay_time", math.inf),
        ("max_radius", "0.9 s"),
        ("max_radius", "about 1"),
        ("max_radius", math.nan),
        ("max_radius", True),
        ("max_radius", [0.9]),
        ("max_mode_angle", "1 V"),
        ("radius", 0.9),
        ("max_", 0.9),
        ("", 0.9),
        ("mean_radius", 0.9),
        ("max_kp", 1),
    ],
)
def test_what_bounds_nothing_is_one_clear_line(name, value):
    with pytest.raises(QuestionError) as caught:
        one_node(-0.5).robust(require={name: value})
    assert caught.value.message.startswith(f"reading the requirement {name} = {value}: ")
    assert "expected" in caught.value.message
    assert "\n" not in caught.value.message + caught.value.remedy
    assert caught.value.remedy


# --- a measure that an atlas lacks ---------------------------------------------------------------


@pytest.mark.parametrize("name", ["max_mode_angle", "min_dominant_damping"])
def test_a_measure_that_the_atlas_lacks_is_named_with_the_way_to_add_it(name):
    asked = one_node(-0.5)
    del asked.stored.values["mode_angle"]
    assert asked.robust(require={"max_radius": 0.9, "max_decay_time": 1}).meets == 1
    with pytest.raises(QuestionError) as caught:
        asked.robust(require={name: 0.5})
    said = f"{caught.value.message} -> {caught.value.remedy}"
    assert f"asking for {name}: it needs the measure mode_angle" in said
    assert "holds log_radius" in said
    assert 'names = ["mode_angle"] under [measures]' in said
    assert list(caught.value.where) == ["mode_angle"]


@pytest.fixture
def margin(monkeypatch):
    """A measure of which more is better, as a later version may hold it."""
    spec = MeasureSpec("spare_margin", "1", "margin that is left", better="high")
    monkeypatch.setitem(MEASURES, "spare_margin", spec)
    axes = [
        axis("kp", [1, 2, 3, 4, 5], sets="controller.kp"),
        axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance"),
    ]
    made = atlas(axes, np.full((5, 2), -0.5))
    inf, nan = math.inf, math.nan
    values = [[0.5, 0.75], [inf, 0.25], [inf, inf], [nan, 0.75], [nan, 0.25]]
    made.stored.values["spare_margin"] = np.array(values, np.float32)
    return made


def test_a_new_stored_measure_can_be_required_by_its_name(margin):
    answer = margin.robust(require={"min_spare_margin": 0.5})
    found = answer.dataset
    assert found["verdict"].to_numpy().tolist() == [1, 0, 1, -1, 0]
    assert found["spare_margin"].to_numpy().tolist() == [0.5, 0.25, math.inf, 0.75, 0.25]
    assert found["spare_margin_at_damping"].to_numpy().tolist() == [0.1, 0.2, 0.1, 0.2, 0.2]
    assert found["unknown"].to_numpy().tolist() == [0, 0, 0, 1, 1]
    assert answer.to_json()["requirements"] == {"stable": -1e-9, "min_spare_margin": 0.5}
    # without the requirement its unknown nodes do not count
    assert margin.robust().meets == 5


def test_the_same_measure_is_absent_from_an_atlas_that_was_swept_without_it(margin):
    with pytest.raises(QuestionError, match="asking for min_spare_margin: it needs the measure"):
        one_node(-0.5).robust(require={"min_spare_margin": 0.5})
    del margin


# --- meeting and breaking ------------------------------------------------------------------------


def test_a_bound_itself_is_met_and_the_next_number_beyond_it_is_not():
    value = float(np.float32(-0.3))
    for sense, beyond in (("max", -1), ("min", 1)):
        name = f"{sense}_log_radius"
        assert verdict(one_node(value), {name: value}) == 1
        assert verdict(one_node(value), {name: math.nextafter(value, beyond * 9)}) == 0


def test_stability_is_required_whatever_else_is():
    assert verdict(one_node(0.1), {"max_log_radius": 0.5, "max_radius": 9}) == 0
    assert verdict(one_node(0.0), {"min_decay_time": 1}) == 0
    assert verdict(one_node(-0.1), {"max_log_radius": 0.5}) == 1


def test_a_loop_that_is_not_stable_has_no_decay_time():
    asked = one_node(0.1)
    for require in ({"max_decay_time": 1e9}, {"min_decay_time": 1e9}):
        answer = asked.robust(require=require)
        assert answer.dataset["decay_time"].item() == math.inf
        assert answer.fails == 1


def test_an_unbounded_log_radius_has_the_damping_ratio_that_it_tends_to():
    measures = {
        "log_radius": np.array([np.inf, np.inf, -np.inf, np.nan, 1e38, 0.0, np.inf], np.float32),
        "mode_angle": np.array([0.0, 3.0, 1.0, 1.0, 0.1, 0.0, np.nan], np.float32),
    }
    found = values_of("dominant_damping", measures, np.ones(1))
    assert found[[0, 1, 2, 4, 5]].tolist() == [-1.0, -1.0, 1.0, -1.0, 0.0]
    assert np.isnan(found[[3, 6]]).all()


def test_both_sides_of_one_quantity_are_two_variables():
    asked = atlas(
        [
            axis("kp", [1], sets="controller.kp"),
            axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance"),
        ],
        [[-0.5, -0.25]],
    )
    found = asked.robust(require={"max_radius": 0.9, "min_radius": 0.5}).dataset
    assert found["max_radius"].item() == pytest.approx(math.exp(-0.25))
    assert found["min_radius"].item() == pytest.approx(math.exp(-0.5))
    assert (found["max_radius_at_damping"].item(), found["min_radius_at_damping"].item()) == (
        0.2,
        0.1,
    )


def test_a_decay_time_over_rows_is_taken_at_the_period_of_each_row():
    unit = rows("unit", ("fast", "slow"), {"sample_period": (0.001, 0.1)})
    kp = axis("kp", [1], sets="controller.kp")
    answer = atlas([kp, unit], [[-0.01, -0.5]]).robust(require={"max_decay_time": 0.15})
    # 0.1 s and 0.2 s: the row with the larger log_radius decays sooner
    assert answer.fails == 1
    assert answer.dataset["decay_time"].item() == pytest.approx(0.2)
    assert answer.dataset["decay_time_at_unit"].item() == "slow"
    assert answer.dataset["log_radius_at_unit"].item() == "fast"


def plain_values(log_radius, angle, period_s):
    stable = log_radius < -1e-9
    size = math.hypot(log_radius, angle)
    return {
        "log_radius": log_radius,
        "mode_angle": angle,
        "radius": math.exp(log_radius),
        "decay_time": -period_s / log_radius if stable else math.inf,
        "dominant_damping": -log_radius / size if size else 0.0,
    }


FLOAT32 = st.floats(-36, 3, width=32)


@settings(max_examples=300)
@given(
    FLOAT32,
    st.floats(0, float(np.float32(math.pi)), width=32),
    st.floats(1e-6, 10),
    st.sampled_from(["log_radius", "mode_angle", "radius", "decay_time", "dominant_damping"]),
    st.sampled_from(SENSES),
    st.floats(-40, 40) | st.floats(0.5, 2),
)
def test_a_bound_is_broken_by_the_definition_of_what_it_bounds(
    log_radius, angle, period_s, quantity, sense, limit
):
    value = plain_values(log_radius, angle, period_s)[quantity]
    if quantity == "decay_time":
        limit = abs(limit) * period_s + 1e-6
    elif math.isfinite(value) and limit > 0.5:
        limit *= value  # near what is bounded
    if limit != 0 and abs(limit) < 1e-300:
        limit = 0.0
    if value != limit and value == pytest.approx(limit, rel=1e-12, abs=1e-300):
        return
    if value == limit and quantity not in HELD:
        return
    broken = value > limit if sense == "max" else value < limit
    expected = 1 if log_radius < -1e-9 and not broken else 0
    asked = one_node(log_radius, angle, period_s=period_s)
    assert verdict(asked, {f"{sense}_{quantity}": limit}) == expected
