"""What is offered instead of a slip is near to it, and in the form of its own option."""

from __future__ import annotations

import numpy as np
import pytest
from memory_atlas import atlas, axis

from sweep.config.findings import find_near
from sweep.errors import QuestionError
from sweep.query.assignments import parse_assignments, parse_single
from sweep.query.requirement import read_requirements

HELD = ("log_radius", "mode_angle")
BUS = axis("bus", [0.0, 1.0], sets="delay.bus", role="tolerance", unit="samples")
ATLAS = atlas((axis("kp", [1.0, 2.0]), BUS), np.full((2, 2), -0.1))


@pytest.mark.parametrize(
    ("typed", "meant"),
    [
        ("decay_time", "max_decay_time"),
        ("decaytime", "max_decay_time"),
        ("radius", "max_radius"),
        ("dominant_damping", "min_dominant_damping"),
        ("max_Decay-time", "max_decay_time"),
    ],
)
def test_a_bound_without_its_sense_is_offered_with_the_one_that_is_good(typed, meant):
    with pytest.raises(QuestionError) as caught:
        read_requirements({typed: 1}, HELD, "Bench")
    assert caught.value.remedy == f'"{meant}" was probably meant'


@pytest.mark.parametrize("typed", ["max_distance", "bogus", "max_", "", "mode_angle"])
def test_a_bound_that_is_near_to_none_is_offered_none(typed):
    with pytest.raises(QuestionError) as caught:
        read_requirements({typed: 1}, HELD, "Bench")
    assert caught.value.remedy == "name a measure after max_ or min_"


def test_an_axis_that_is_near_to_none_is_offered_none():
    with pytest.raises(QuestionError) as caught:
        ATLAS.point({"bogus": 1})
    assert caught.value.remedy == "name one of its axes"


@pytest.mark.parametrize(
    ("typed", "meant"), [("dampin", "damping"), ("kpp", "kp"), ("Unit-a", "unit A"), ("half", "")]
)
def test_a_letter_or_two_may_be_wrong_and_case_counts_for_nothing(typed, meant):
    assert find_near(typed, ["damping", "kp", "unit A", "bus", "full"]) == meant


@pytest.mark.parametrize(
    ("option", "example"),
    [
        ("--at", "--at kp=0.3,sample_period=5ms"),
        ("--around", "--around kp=0.3,sample_period=5ms"),
        ("--over", "--over damping=0.005:0.02,bus=0:0.5"),
        ("--within", "--within sample_period=5ms:10ms"),
        ("--require", "--require max_decay_time=80ms"),
        ("--shake", "--shake kp=10%,sample_period=2%"),
    ],
)
def test_a_malformed_piece_is_told_the_form_of_its_own_option(option, example):
    with pytest.raises(QuestionError) as caught:
        parse_assignments(["kp"], option)
    assert example in caught.value.remedy
    assert f"reading {option} 'kp'" in caught.value.message


def test_a_name_given_twice_to_an_option_is_refused_by_that_option():
    with pytest.raises(QuestionError, match="reading --shake kp: it is given 2 times"):
        parse_single(["kp=1%,kp=2%"], "--shake")


@pytest.mark.parametrize("option", ["--over", "--within", "--require", "--shake"])
@pytest.mark.parametrize("command", ["robust", "choose"])
def test_every_command_tells_the_form_of_the_option_that_is_malformed(
    capsys, tmp_path, command, option
):
    import stand_in

    from sweep.__main__ import main
    from sweep.store.atlas import create_atlas

    create_atlas(tmp_path / "flat.zarr", stand_in.flat(4, 3), (4, 3))
    assert main([command, "flat", "--shelf", str(tmp_path), option, "kp"]) == 2
    assert f": {option} " in (shown := capsys.readouterr().err) or f"write {option} " in shown


def test_what_is_called_best_is_asked_for_in_plain_words():
    with pytest.raises(QuestionError) as caught:
        ATLAS.choose(best="foo")
    assert "choosing by foo: expected one of radius, " in caught.value.message
    assert caught.value.message.endswith("by which one design is better than another")
