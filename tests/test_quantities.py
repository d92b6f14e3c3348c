"""Quantities: units, exactness, round trips and what is refused."""

from decimal import Decimal

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sweep.errors import QuantityError
from sweep.quantities import (
    CONTEXT,
    PI,
    display_factor,
    format_quantity,
    parse_quantity,
    reciprocal,
    to_float,
)

quick = settings(max_examples=60, deadline=None)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("5 ms", "s", "0.005"),
        ("5ms", "s", "0.005"),
        (" 5  us ", "s", "0.000005"),
        ("5 µs", "s", "0.000005"),
        ("1e3 ns", "s", "0.000001"),
        ("-2.5 ms", "s", "-0.0025"),
        (".5 s", "s", "0.5"),
        ("5. s", "s", "5"),
        ("4 kHz", "Hz", "4000"),
        ("1.5 MHz", "Hz", "1500000"),
        ("1.5 samples", "samples", "1.5"),
        ("1 sample", "samples", "1"),
        ("10 %", "1", "0.1"),
        ("3 1/s", "1/s", "3"),
        ("20 dB", "1", "10"),
        ("-20 dB", "1", "0.1"),
        ("1_000", "1", "1000"),
    ],
)
def test_a_text_is_read_exactly_in_the_stored_unit(text, unit, value):
    assert parse_quantity(text, unit) == Decimal(value)


def test_a_bare_number_is_already_in_the_stored_unit():
    assert parse_quantity(3, "samples") == 3
    assert parse_quantity("0.002", "s") == parse_quantity(Decimal("0.002"), "s")
    assert parse_quantity(0.1, "1") == Decimal("0.1")


def test_radians_per_second_and_degrees_use_pi_to_forty_digits():
    turns = parse_quantity("1 rad/s", "Hz")
    assert abs(CONTEXT.multiply(turns, CONTEXT.multiply(2, PI)) - 1) < Decimal("1e-38")
    half_turn = parse_quantity("180 deg", "rad")
    assert abs(half_turn - Decimal("3.141592653589793238462643383279502884197")) < Decimal("1e-38")


def test_periods_are_multiples_of_the_natural_period_where_one_is_given():
    assert parse_quantity("0.25 periods", "s", natural_period_s=Decimal("0.02")) == Decimal("0.005")
    with pytest.raises(QuantityError, match="only a sample period"):
        parse_quantity("0.25 periods", "s")


@pytest.mark.parametrize(
    ("value", "unit", "remedy"),
    [
        ("5 hz", "Hz", '"Hz" was probably meant'),
        ("5 msec", "s", '"ms" was probably meant'),
        ("5 Hz", "s", "write it in s, ms, us or ns"),
        ("0,5 ms", "s", "decimal mark as a point"),
        ("ms 5", "s", "number first"),
        ("", "s", "number first"),
        ("nan", "1", "number first"),
        ("inf", "1", "number first"),
        ("1e400", "1", "magnitude"),
        ("1e-400 s", "s", "magnitude"),
        ("2e300", "1", "magnitude"),
        ("-0.9e-300 s", "s", "magnitude"),
        ("1e-299 ms", "s", "magnitude"),
        ("1e99999999999999999999", "1", "magnitude"),
        ("1e300 dB", "1", "magnitude"),
        (float("nan"), "1", "magnitude"),
        (Decimal("Infinity"), "1", "magnitude"),
        (Decimal("1e-400"), "1", "magnitude"),
        (1 << 5000, "1", "magnitude"),
        (True, "1", "write a number"),
        (None, "1", "write a number"),
        ([1], "1", "write a number"),
        ("1 sample", "s", "write it in"),
        ("9" * 1000, "1", "number first"),
    ],
)
def test_what_is_no_such_quantity_is_refused_with_a_remedy(value, unit, remedy):
    with pytest.raises(QuantityError) as caught:
        parse_quantity(value, unit)
    assert remedy in caught.value.remedy
    assert len(caught.value.found) <= 60


def test_decibels_are_for_gains_only():
    with pytest.raises(QuantityError):
        parse_quantity("6 dB", "1", decibels=False)
    with pytest.raises(QuantityError):
        parse_quantity("6 dB", "s")


def test_minus_zero_is_stored_as_zero():
    assert str(to_float(Decimal("-0.0"))) == "0.0"
    assert str(to_float(parse_quantity("-0.0", "1"))) == "0.0"


@given(st.integers(1, 10**9))
@quick
def test_one_time_is_the_same_float_in_every_unit(nanoseconds):
    exact = Decimal(nanoseconds).scaleb(-9)
    spellings = [f"{nanoseconds} ns", f"{exact.scaleb(6)} us", f"{exact.scaleb(3)}ms", str(exact)]
    assert {to_float(parse_quantity(text, "s")) for text in spellings} == {float(exact)}


@given(
    st.floats(1e-30, 1e30) | st.floats(-1e30, -1e-30) | st.just(0.0),
    st.sampled_from([("s", ""), ("s", "us"), ("Hz", ""), ("Hz", "kHz"), ("1", ""), ("1", "V/mm")]),
)
@quick
def test_formatting_every_digit_reads_back_as_the_same_float(value, units):
    unit, display = units
    text = format_quantity(value, unit, display, digits=None)
    number = text.split()[0] if display == "V/mm" else text
    assert to_float(parse_quantity(number, unit)) == value


@pytest.mark.parametrize(
    ("value", "unit", "display", "text"),
    [
        (0.005, "s", "", "5 ms"),
        (2.5, "s", "", "2.5 s"),
        (1.2e-5, "s", "", "12 us"),
        (3e-10, "s", "", "0.3 ns"),
        (0.0, "s", "", "0 s"),
        (0.0005, "s", "ms", "0.5 ms"),
        (47.0, "Hz", "", "47 Hz"),
        (20000.0, "Hz", "", "20 kHz"),
        (1.0, "samples", "samples", "1 sample"),
        (1.5, "samples", "", "1.5 samples"),
        (0.4, "1", "V/mrad", "0.4 V/mrad"),
        (0.4, "1", "", "0.4"),
        (1 / 3, "1", "", "0.333333"),
        (float("inf"), "s", "ms", "inf ms"),
        (float("-inf"), "1", "", "-inf"),
        (float("nan"), "s", "ms", "unknown"),
    ],
)
def test_values_are_written_as_an_engineer_would(value, unit, display, text):
    assert format_quantity(value, unit, display) == text


def test_a_label_scales_nothing_and_a_unit_scales():
    assert display_factor("s", "ms") == 1e-3
    assert display_factor("1", "V/mrad") == 1.0
    assert display_factor("s", "V s/mrad") == 1.0


def test_a_period_is_the_reciprocal_of_its_rate():
    assert to_float(reciprocal(parse_quantity("20 kHz", "Hz"))) == 5e-5
