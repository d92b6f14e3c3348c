"""Axes: every form, exact coordinates, pins, nominals, rates and limits."""

from fractions import Fraction

import numpy as np
import pytest
from config_text import BASE, axis_text, coordinates, problems, read, swap
from hypothesis import given, settings
from hypothesis import strategies as st

quick = settings(max_examples=40, deadline=None)

TWO_MS = 0.002


@pytest.mark.parametrize(
    "body",
    [
        'start = "1 ms"\nstop = "3 ms"\nstep = "0.1 ms"',
        "start = 0.001\nstop = 0.003\nstep = 0.0001",
        'start = "1 ms"\nstop = "3 ms"\ncount = 21',
        'start = "1000 us"\nstop = 0.003\nstep = "100000 ns"',
        'values = ["0.5 ms", "2 ms"]',
        "values = [0.001, 0.0015, 0.002]",
        "values = [0.001, 2e-3]",
        'centre = "2 ms"\nwithin = "1 ms"\ncount = 21',
        'centre = 0.002\nwithin = "50 %"\ncount = 3',
        'start = "0.02 ms"\nstop = "200 ms"\ncount = 5\nspacing = "log"',
        'start = "0.3 ms"\nstop = "7 ms"\ncount = 9\nspacing = "log"\ninclude = ["2 ms"]',
        'start = "0.3 ms"\nstop = "7 ms"\ncount = 9\nnominal = 0.002',
        'start = "0.05 periods"\nstop = "0.15 periods"\ncount = 5',
    ],
)
def test_two_milliseconds_are_one_float_however_they_are_reached(body):
    assert TWO_MS in coordinates(body, "sample_period")


@pytest.mark.parametrize("line", ['sample_period = "2 ms"', "sample_period = 0.002"])
def test_a_fixed_two_milliseconds_is_that_float_too(line):
    start, end = BASE.index("[axes.sample_period]"), BASE.index("[axes.kp]")
    text = f"{line}\n" + BASE[:start] + BASE[end:].replace('sample_period = "2 ms"\n', "")
    fixed = {one.path: one.value for one in read(text).grid.fixed}
    assert fixed["sample_period"] == TWO_MS


def test_golden_coordinates_by_step_count_and_ratio():
    assert coordinates("start = -0.3\nstop = 0.3\nstep = 0.1") == [
        -0.3, -0.2, -0.1, 0.0, 0.1, 0.2, 0.3,
    ]  # fmt: skip
    assert coordinates("start = 0\nstop = 1\ncount = 4") == [0.0, 1 / 3, 2 / 3, 1.0]
    root_ten = "316227766016837933199889354443271853"
    assert coordinates("start = 1e-2\nstop = 1\ncount = 5\nspacing = 'log'") == [
        0.01, float(f"0.0{root_ten}"), 0.1, float(f"0.{root_ten}"), 1.0,
    ]  # fmt: skip


@given(st.integers(-(10**6), 10**6), st.integers(1, 10**6), st.integers(2, 300), st.integers(-6, 3))
@quick
def test_evenly_spaced_nodes_are_the_exact_fractions_rounded_once(low, span, count, exponent):
    body = f"start = {low}e{exponent}\nstop = {low + span}e{exponent}\ncount = {count}"
    scale = Fraction(10) ** exponent
    exact = [(low + Fraction(span * i, count - 1)) * scale for i in range(count)]
    assert coordinates(body) == [float(value) for value in exact]


@given(st.integers(-(10**5), 10**5), st.integers(1, 10**4), st.integers(1, 300))
@quick
def test_stepped_nodes_are_the_exact_multiples_rounded_once(low, step, steps):
    body = f"start = {low}e-4\nstop = {low + step * steps}e-4\nstep = {step}e-4"
    exact = [Fraction(low + step * i, 10**4) for i in range(steps + 1)]
    assert coordinates(body) == [float(value) for value in exact]


@given(st.floats(1e-6, 1.0), st.floats(1.5, 1e6), st.integers(2, 300))
@quick
def test_log_nodes_are_the_powers_to_the_last_digits(start, ratio, count):
    stop = start * ratio
    body = f"start = {start!r}\nstop = {stop!r}\ncount = {count}\nspacing = 'log'"
    nodes = np.array(coordinates(body))
    assert nodes[0] == start
    assert nodes[-1] == stop
    assert np.allclose(nodes, np.geomspace(start, stop, count), rtol=1e-13, atol=0)


def test_log_spacing_keeps_its_digits_over_many_nodes():
    body = "start = 1\nstop = 1e6\ncount = 99_999\nspacing = 'log'"
    nodes = coordinates(body)
    middle = (len(nodes) - 1) // 2
    assert nodes[middle] == 1000.0


def test_a_stop_between_steps_is_refused_with_the_two_nearest_stops():
    found = problems(
        axis_text('start = "1 ms"\nstop = "3.15 ms"\nstep = "0.5 ms"', "sample_period")
    )
    assert found["axes.sample_period.stop"].remedy == "stop at 3 ms or 3.5 ms"


@pytest.mark.parametrize(
    ("body", "path", "says"),
    [
        ("start = 1\nstop = 0\ncount = 3", "stop", "more than `start`"),
        ("start = 1\nstop = 1\ncount = 3", "stop", "more than `start`"),
        ("start = 0\nstop = 1\ncount = 1", "count", "from 2 to 1,000,000"),
        ("start = 0\nstop = 1\ncount = 1_000_001", "count", "from 2 to 1,000,000"),
        (f"start = 0\nstop = 1\ncount = {10**30}", "count", "from 2 to 1,000,000"),
        ("start = 0\nstop = 1\ncount = 1e30", "count", "whole number"),
        ("start = 0\nstop = 1\nstep = 1e-30", "step", "1,000,000 nodes"),
        ("start = 0\nstop = 1\nstep = -0.1", "step", "above 0"),
        ("start = 0\nstop = 1\nstep = 0", "step", "above 0"),
        ("start = 0\nstop = 1\ncount = 3\nspacing = 'log'", "start", "logarithmic"),
        ("start = 1\nstop = 4\nstep = 1\nspacing = 'log'", "step", "`count`"),
        ("start = 1\nstop = 4", "", "exactly one of them"),
        ("start = 1\nstop = 4\nstep = 1\ncount = 4", "", "exactly one of them"),
        ("start = 1\ncount = 4", "stop", "needs"),
        ("centre = 1\nwithin = 1", "count", "needs"),
        ("centre = 1\nwithin = '-5 %'\ncount = 3", "within", "above 0"),
        ("centre = 0\nwithin = '5 %'\ncount = 3", "within", "above 0"),
        ("values = []", "values", "at least one"),
        ("values = [1, 1.0]", "values[1]", "more than the value before it"),
        ("values = [2, 1]", "values[1]", "more than the value before it"),
        ("values = [1, 1.00000000000000000001]", "", "differ in double precision"),
        ("values = [1, true]", "values[1]", "a plain number"),
        ("values = [1, nan]", "values[1]", "finite"),
        ("values = [1, inf]", "values[1]", "finite"),
        ("values = 3", "values", "an array"),
        ("values = [1]\nstart = 2", "", "one form"),
        ("nominal = 2", "", "one form"),
        ("values = [1, 2]\nstep = 1", "step", "keys of this form"),
        ("values = [1, 2]\nordered = true", "ordered", "keys of this form"),
        ("centre = 1\nwithin = 1\ncount = 3\nspacing = 'log'", "spacing", "keys of this form"),
        ("values = [1, 2]\nnominal = 3", "nominal", "1 to 2"),
        ("values = [1, 2]\ninclude = [0.5]", "include[0]", "1 to 2"),
        ("values = [1, 2]\nrole = 'both'", "role", '"tolerance"'),
        ("values = [1, 2]\nsets = 'plant.kp'", "sets", "plant.damping"),
        ("values = [1, 2]\nsets = 'kp'", "sets", "path of a parameter"),
        ("values = [1, 2]\nsets = 'plant.gain'", "sets", "controller.kp"),
    ],
)
def test_an_impossible_axis_is_refused_where_it_is_wrong(body, path, says):
    found = problems(axis_text(body))
    place = f"axes.kp.{path}" if path else "axes.kp"
    assert says in found[place].expected
    assert found[place].remedy


def test_a_range_that_leaves_the_legal_values_is_refused():
    found = problems(axis_text("centre = 0.01\nwithin = 0.02\ncount = 3", "damping"))
    assert "reaches down to -0.01" in found["axes.damping.within"].found
    found = problems(axis_text("values = [-0.1, 0.1]", "damping"))
    assert "at least 0" in found["axes.damping.values[0]"].expected
    found = problems(axis_text("start = 0\nstop = 1\ncount = 5", "sample_period"))
    assert "above 0" in found["axes.sample_period.start"].expected


def test_a_pin_joins_the_nodes_and_count_is_before_pins():
    body = "start = 0\nstop = 1\ncount = 3\ninclude = [0.25]\nnominal = 0.7"
    assert coordinates(body) == [0.0, 0.25, 0.5, 0.7, 1.0]
    assert read(axis_text(body)).grid.axis("kp").nominal == 3


def test_a_pin_within_a_billionth_of_the_span_takes_the_place_of_its_node():
    pin = "0.50000000001"
    assert coordinates(f"start = 0\nstop = 1\ncount = 3\ninclude = [{pin}]") == [
        0.0, float(pin), 1.0,
    ]  # fmt: skip
    apart = "0.50000001"
    assert len(coordinates(f"start = 0\nstop = 1\ncount = 3\ninclude = [{apart}]")) == 4


def test_a_nominal_that_is_not_given_is_the_lower_middle_of_the_finished_axis():
    body = "start = 0\nstop = 1\ncount = 3\ninclude = [0.7]"
    assert read(axis_text(body)).grid.axis("kp").nominal == 1


def test_a_sample_rate_axis_is_stored_as_increasing_sample_period():
    text = axis_text("start = '200 Hz'\nstop = '1 kHz'\nstep = '200 Hz'", "sample_period")
    text = text.replace("[axes.sample_period]", "[axes.sample_rate]\nnominal = '400 Hz'")
    axis = read(text).grid.axes[0]
    assert (axis.name, axis.sets, axis.unit) == ("sample_period", ("sample_period",), "s")
    assert axis.coordinates.tolist() == [0.001, 0.00125, 1 / 600, 0.0025, 0.005]
    assert axis.coordinates[axis.nominal] == 0.0025


def test_a_sample_rate_axis_takes_frequencies_only_and_only_once():
    text = BASE.replace("[axes.kp]", "[axes.sample_rate]\nvalues = ['2 ms']\n\n[axes.kp]")
    found = problems(text)
    assert "a frequency" in found["axes.sample_rate.values[0]"].expected
    assert "exactly once" in found["axes.sample_rate"].expected


def test_a_fixed_sample_rate_is_another_spelling_of_the_sample_period():
    start, end = BASE.index("[axes.sample_period]"), BASE.index("[axes.kp]")
    rest = BASE[end:].replace('sample_period = "2 ms"\n', "")
    config = read('sample_rate = "20 kHz"\n' + BASE[:start] + rest)
    assert {one.path: one.value for one in config.grid.fixed}["sample_period"] == 5e-5


def test_roles_follow_from_the_parameter_unless_given():
    roles = {axis.name: axis.role for axis in read(BASE).grid.axes}
    assert roles == {"sample_period": "design", "kp": "design", "damping": "tolerance"}
    text = axis_text("values = [0.01, 0.02]\nrole = 'design'", "damping")
    assert read(text).grid.axis("damping").role == "design"


def test_defaults_are_fixed_parameters_and_axes_keep_the_configs_order():
    grid = read(BASE).grid
    assert grid.names == ("sample_period", "kp", "damping")
    assert {one.path: one.value for one in grid.fixed} == {
        "plant.natural_frequency": 50.0,
        "plant.gain": 1.0,
        "controller.kd": 0.001,
        "controller.derivative_filter": 0.0,
        "delay.update": 1.0,
    }


def test_people_see_the_unit_that_was_written():
    grid = read(axis_text('values = ["5 us", "20 ms"]', "sample_period")).grid
    assert grid.axis("sample_period").display_unit == "us"
    assert read(BASE).grid.axis("sample_period").display_unit == "ms"


def test_gains_are_labelled_with_the_plants_units():
    text = swap(('"50 Hz"\n', '"50 Hz"\noutput_unit = "m/s"\ninput_unit = "V"\n'))
    config = read(text)
    assert config.grid.axis("kp").display_unit == "V/(m/s)"
    assert {one.path: one.display_unit for one in config.grid.fixed}["controller.kd"] == "V s/(m/s)"
    assert (config.output_unit, config.input_unit) == ("m/s", "V")


def test_decibels_serve_for_gains():
    assert coordinates('values = ["-20 dB", "0 dB", "20 dB"]') == [0.1, 1.0, 10.0]
    assert "axes.damping.values[0]" in problems(axis_text('values = ["-20 dB"]', "damping"))


def test_periods_need_a_natural_frequency_and_take_its_nominal():
    lag = swap(
        ('kind = "oscillator"\nnatural_frequency = "50 Hz"', 'kind = "lag"\ntime_constant = 1'),
        ('start = "1 ms"', 'start = "0.05 periods"'),
        ("[axes.damping]\nvalues = [0.01, 0.02, 0.05]\n", ""),
        ("over.damping = [0.01, 0.02]\n", ""),
    )
    assert "only a sample period" in problems(lag)["axes.sample_period.start"].remedy
    swept = BASE[: BASE.index("[designs")].replace('natural_frequency = "50 Hz"\n', "")
    swept = swept.replace(
        'start = "1 ms"\nstop = "5 ms"\nstep = "0.5 ms"', 'values = ["0.1 periods"]'
    )
    swept += '\n[axes.natural_frequency]\nvalues = ["40 Hz", "50 Hz", "60 Hz"]\n'
    assert read(swept).grid.axis("sample_period").coordinates.tolist() == [TWO_MS]


def test_more_than_1e13_nodes_in_all_are_refused():
    text = axis_text("start = 0\nstop = 1\ncount = 50_000").replace('kd = "1 ms"\n', "")
    rest = "[axes.kd]\nstart = 0\nstop = 1\ncount = 50_000\n[axes.damping]\nvalues = "
    fits = text.replace("[axes.damping]\nvalues = [0.01, 0.02, 0.05]", rest + "[0.1]")
    assert read(fits).grid.size == 9 * 50_000 * 50_000
    text = text.replace('step = "0.5 ms"', "count = 5_000")
    found = problems(text.replace("[axes.damping]\nvalues =", rest))
    assert "1e+13 nodes in all" in found["axes"].expected


def test_a_delay_without_a_unit_that_is_too_long_is_told_that_it_is_in_seconds():
    problem = problems(swap(('update = "1 sample"', "update = 1.5")))["delay"]
    assert "without a unit is in seconds" in problem.remedy
    assert '"1.5 samples"' in problem.remedy
    assert "delay.update" in problem.remedy
    written = problems(swap(('update = "1 sample"', 'update = "1.5 s"')))["delay"]
    assert written.remedy.startswith("shorten the delays")


@pytest.mark.parametrize("name", ["hold", "zoh", "half_sample", "zoh_delay", "halfsample"])
def test_a_delay_part_that_is_called_like_the_hold_is_noted(name):
    (note,) = read(swap(("update =", f"{name} ="))).notes
    assert f"delay.{name}" in note
    assert "half sample is in the model already" in note


@pytest.mark.parametrize("name", ["update", "threshold", "half", "sample"])
def test_other_delay_parts_are_not_taken_for_the_hold(name):
    assert read(swap(("update =", f"{name} ="))).notes == ()


def test_what_is_missing_at_the_top_is_said_in_a_clean_sentence():
    text = BASE[: BASE.index("[axes.sample_period]")] + BASE[BASE.index("[axes.kp]") :]
    text = text.replace('sample_period = "2 ms"\n', "")
    remedy = problems(text)["sample_period"].remedy
    assert "at the top, before any section, or sweep it" in remedy
