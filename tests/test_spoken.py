"""A mistake is told in the question's own words: a rate in rates, a bare number with its unit."""

from __future__ import annotations

from contextlib import suppress

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from memory_atlas import atlas, axis

from sweep.errors import QuestionError
from sweep.query.select import find_node

PERIOD = axis("sample_period", [0.001, 0.002, 0.004, 0.008], unit="s", display_unit="ms")
KP = axis("kp", [0.0, 1.0, 2.0, 3.0], display_unit="V/um")
LATE = axis("bus", [0.0, 0.001, 0.002], sets="delay.bus", role="tolerance", unit="s")
ATLAS = atlas((PERIOD, KP, LATE), np.full((4, 4, 3), -0.1), fixed={"damping": 0.1})

ASKED = {
    "a rate off the axis": (
        lambda: ATLAS.point({"sample_rate": "50Hz"}),
        "looking up sample_rate = 50Hz (20 ms): the axis runs from 125 Hz to 1 kHz",
    ),
    "a bare rate off the axis": (
        lambda: ATLAS.point({"sample_rate": 50}),
        "looking up sample_rate = 50 Hz (20 ms): the axis runs from 125 Hz to 1 kHz",
    ),
    "a rate between nodes": (
        lambda: ATLAS.point({"sample_rate": "300Hz"}),
        "looking up sample_rate = 300Hz (3.33333 ms): it lies between nodes, the nearest is 250 Hz",
    ),
    "a rate fixed off the axis": (
        lambda: ATLAS.robust(at={"sample_rate": "50Hz"}),
        "looking up sample_rate = 50Hz (20 ms): the axis runs from 125 Hz to 1 kHz",
    ),
    "rates upside down": (
        lambda: ATLAS.robust(within={"sample_rate": "500Hz:250Hz"}),
        "reading the range of sample_rate: 500Hz lies above 250Hz",
    ),
    "a range of rates without a node": (
        lambda: ATLAS.robust(within={"sample_rate": "260Hz:450Hz"}),
        (
            "keeping sample_rate within 260Hz:450Hz: it holds no node; the nodes around it are "
            "250 Hz and 500 Hz"
        ),
    ),
    "a rate as a tolerance": (
        lambda: ATLAS.robust(over={"sample_rate": "250Hz:500Hz"}),
        "taking the worst over sample_rate: it is a design axis",
    ),
    "several rates where one is fixed": (
        lambda: ATLAS.robust(at={"sample_rate": ["250Hz", "500Hz"]}),
        "fixing sample_rate: expected one value",
    ),
    "a rate shaken off the axis": (
        lambda: ATLAS.robust(at={"sample_rate": "125Hz"}, shake={"sample_rate": 5}),
        (
            "shaking sample_rate = 125 Hz (8 ms) by 5 Hz: that leaves what the axis can "
            "tell: it runs from 125 Hz to 1 kHz"
        ),
    ),
    "a rate shaken by no distance": (
        lambda: ATLAS.robust(shake={"sample_rate": "1 ms"}),
        "shaking sample_rate by 1 ms: ",
    ),
    "a box around a rate outside": (
        lambda: ATLAS.robust(
            within={"sample_rate": "125Hz:250Hz"}, around={"sample_rate": "500Hz", "kp": 1}
        ),
        "finding the largest box around sample_rate = 500Hz (2 ms): it lies outside",
    ),
    "a box around a bare period outside": (
        lambda: ATLAS.robust(
            within={"sample_period": "4ms:8ms"}, around={"sample_period": 0.002, "kp": 1}
        ),
        "finding the largest box around sample_period = 2 ms: it lies outside",
    ),
    "a bare period shaken off the axis": (
        lambda: ATLAS.robust(at={"sample_period": 0.001}, shake={"sample_period": 0.0005}),
        (
            "shaking sample_period = 1 ms by 0.5 ms: that leaves what the axis can "
            "tell: it runs from 1 ms to 8 ms"
        ),
    ),
    "a bare period off the axis": (
        lambda: ATLAS.point({"sample_period": "5"}),
        "looking up sample_period = 5000 ms: the axis runs from 1 ms to 8 ms",
    ),
    "a bare gain off the axis": (
        lambda: ATLAS.point({"kp": 9}),
        "looking up kp = 9 V/um: the axis runs from 0 V/um to 3 V/um",
    ),
    "bare bounds upside down": (
        lambda: ATLAS.robust(over={"bus": (0.002, 0.001)}),
        "reading the range of bus: 2 ms lies above 1 ms",
    ),
}


@pytest.mark.parametrize("name", ASKED)
def test_a_mistake_is_told_in_the_words_of_the_question(name):
    ask, expected = ASKED[name]
    with pytest.raises(QuestionError) as caught:
        ask()
    assert caught.value.message.startswith(expected)


@given(st.floats(125, 1000))
def test_the_rate_that_is_offered_instead_finds_its_node(rate):
    with suppress(QuestionError):
        find_node(PERIOD, rate, name="sample_rate")
        return
    with pytest.raises(QuestionError) as caught:
        find_node(PERIOD, rate, name="sample_rate")
    offered = caught.value.remedy.split("sample_rate=")[1].split(",")[0]
    find_node(PERIOD, offered, name="sample_rate")
