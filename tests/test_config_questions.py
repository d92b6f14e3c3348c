"""Designs, cases, measures, and how they are stored."""

import json

import pytest
from config_text import BASE, axis_text, problems, read, swap

from sweep.config import (
    Case,
    Design,
    Requirement,
    cases_from_json,
    cases_to_json,
    designs_from_json,
    designs_to_json,
)
from sweep.errors import DamagedAtlas

ROWS = '[axes.unit]\nrows = [{label = "A", gain = 1}, {label = "B", gain = 2}]\n\n[designs'


def test_designs_and_cases_are_kept_in_stored_units():
    config = read(BASE)
    assert config.designs == (Design("released", {"sample_period": 0.002, "kp": 0.2}),)
    requirement = Requirement("decay_time", "max", 0.08)
    assert config.cases == (Case("normal", {"damping": (0.01, 0.02)}, (requirement,)),)
    assert config.notes == ()


def test_a_value_within_a_billionth_of_a_node_is_that_node():
    config = read(swap(("kp = 0.2", "kp = 0.20000000001")))
    assert config.designs[0].values["kp"] == 0.2
    assert config.notes == ()


def test_values_between_nodes_are_noted_with_the_pin_that_makes_them_nodes():
    config = read(
        swap(
            ('sample_period = "2 ms"', 'sample_period = "2.2 ms"'),
            ("[0.01, 0.02]\n", "[0.01, 0.03]\n"),
        )
    )
    period, damping = config.notes
    assert "designs.released.sample_period" in period
    assert "2 ms and 2.5 ms" in period
    assert 'include = ["2.2 ms"]` in [axes.sample_period]' in period
    assert "cases.normal.over.damping[1]" in damping
    assert "include = [0.03]` in [axes.damping]" in damping
    pinned = swap(
        ('sample_period = "2 ms"', 'sample_period = "2.2 ms"'),
        ('step = "0.5 ms"', 'step = "0.5 ms"\ninclude = ["2.2 ms"]'),
    )
    assert read(pinned).notes == ()


def test_a_design_may_name_the_rate_and_its_note_speaks_the_axis_spelling():
    assert (
        read(swap(('sample_period = "2 ms"', 'sample_rate = "500 Hz"')))
        .designs[0]
        .values["sample_period"]
        == 0.002
    )
    rate = swap(
        (
            '[axes.sample_period]\nstart = "1 ms"\nstop = "5 ms"\nstep = "0.5 ms"',
            "[axes.sample_rate]\nvalues = [200, 1000]",
        ),
    )
    assert '`include = ["500 Hz"]` in [axes.sample_rate]' in read(rate).notes[0]


def test_rows_are_addressed_by_label_in_cases_and_designs():
    text = swap(("[designs", ROWS), ("over.damping = [0.01, 0.02]", 'over.unit = ["B", "A"]'))
    assert read(text).cases[0].over == {"unit": ("B", "A")}
    text = swap(
        ("[designs", ROWS.replace("\n\n", '\nrole = "design"\n\n')),
        ("kp = 0.2", 'kp = 0.2\nunit = "B"'),
    )
    assert read(text).designs[0].values["unit"] == "B"


def test_one_value_is_a_range_of_that_value():
    assert read(swap(("[0.01, 0.02]\n", "0.02\n"))).cases[0].over == {"damping": (0.02, 0.02)}


@pytest.mark.parametrize(
    ("old", "new", "path", "says"),
    [
        ("kp = 0.2", "kp = 2", "designs.released.kp", "on the axis kp, -1 to 1"),
        ("kp = 0.2", "", "designs.released.kp", "every design axis"),
        ("kp = 0.2", "kp = 0.2\ndamping = 0.01", "designs.released.damping", "design axes only"),
        ("kp = 0.2", "kp = 0.2\nkdd = 0.01", "designs.released.kdd", "design axes only"),
        ("kp = 0.2", "kp = 'high'", "designs.released.kp", "a plain number"),
        ("kp = 0.2", "kp = [0.2]", "designs.released.kp", "a plain number"),
        (
            'sample_period = "2 ms"',
            "sample_period = -1",
            "designs.released.sample_period",
            "above 0",
        ),
        ("kp = 0.2", "kp = 0.2\nsample_rate = 500", "designs.released.sample_rate", "one of"),
        ("[designs.released]", "[designs.Released]", "designs.Released", "a name of a-z"),
        ("[designs.released]", "[designs.log_radius]", "designs.log_radius", "no measure's"),
        ("[designs.released]", "[designs]\nx = 3\n[designs.released]", "designs.x", "a section"),
        ("[0.01, 0.02]\n", "[0.01, 0.09]\n", "cases.normal.over.damping[1]", "0.01 to 0.05"),
        ("[0.01, 0.02]\n", "[0.02, 0.01]\n", "cases.normal.over.damping", "[lowest, highest]"),
        ("[0.01, 0.02]\n", "[0.01, 0.02, 0.05]\n", "cases.normal.over.damping", "two values"),
        ("[0.01, 0.02]\n", "[]\n", "cases.normal.over.damping", "two values"),
        ("over.damping", "over.kp", "cases.normal.over.kp", "tolerance axes only"),
        ("over.damping", "over.dampng", "cases.normal.over.dampng", "tolerance axes only"),
        ("over.damping = [0.01, 0.02]", "over = 3", "cases.normal.over", "ranges"),
        (
            "require.max_decay_time",
            "require.max_decay",
            "cases.normal.require.max_decay",
            "a requirement",
        ),
        (
            "require.max_decay_time",
            "require.decay_time",
            "cases.normal.require.decay_time",
            "a requirement",
        ),
        ('"80 ms"', '"80 Hz"', "cases.normal.require.max_decay_time", "a time"),
        ('"80 ms"', "0", "cases.normal.require.max_decay_time", "above 0"),
        ('"80 ms"', "true", "cases.normal.require.max_decay_time", "a time"),
        ("require.max", "demand.max", "cases.normal.demand", "over or require"),
    ],
)
def test_designs_and_cases_that_do_not_fit_the_axes_are_refused(old, new, path, says):
    found = problems(swap((old, new)))
    assert says in found[path].expected
    assert found[path].remedy


def test_a_parameter_of_a_row_axis_is_addressed_through_its_rows():
    text = swap(("[designs", ROWS), ("over.damping", "over.gain"))
    assert "name labels of unit" in problems(text)["cases.normal.over.gain"].remedy
    text = swap(("[designs", ROWS), ("over.damping = [0.01, 0.02]", 'over.unit = ["C"]'))
    assert "label of unit: A or B" in problems(text)["cases.normal.over.unit[0]"].expected


def test_a_bare_number_on_an_axis_in_samples_is_refused_because_it_would_be_seconds():
    axis = '[axes.bus]\nsets = "delay.bus"\nvalues = [0, "0.5 samples"]\n\n[designs'
    fits = swap(
        ("[designs", axis), ("over.damping = [0.01, 0.02]", 'over.bus = [0, "0.5 samples"]')
    )
    assert read(fits).cases[0].over == {"bus": (0.0, 0.5)}
    bare = swap(("[designs", axis), ("over.damping = [0.01, 0.02]", "over.bus = [0, 0.5]"))
    assert problems(bare)["cases.normal.over.bus[1]"].remedy == 'write "0.5 samples"'


def test_measures_are_the_two_that_are_always_computed_then_what_is_named_or_required():
    assert read(BASE).measures == ("log_radius", "mode_angle")
    named = read(BASE + '\n[measures]\nnames = ["mode_angle"]\n')
    assert named.measures == ("log_radius", "mode_angle")


@pytest.mark.parametrize(
    ("body", "path", "says"),
    [
        ('names = ["log_radios"]', "measures.names[0]", "log_radius"),
        ('names = ["decay_time"]', "measures.names[0]", "a measure"),
        ('names = ["mode_angle", "mode_angle"]', "measures.names[1]", "once"),
        ("names = [3]", "measures.names[0]", "names of measures"),
        ('name = ["x"]', "measures.name", "names"),
    ],
)
def test_measures_that_do_not_exist_are_refused(body, path, says):
    assert says in problems(f"{BASE}\n[measures]\n{body}\n")[path].expected


def test_designs_and_cases_survive_json():
    text = swap(("[designs", ROWS), ("over.damping = [0.01, 0.02]", 'over.unit = ["B"]'))
    config = read(text)
    designs = json.loads(json.dumps(designs_to_json(config.designs)))
    cases = json.loads(json.dumps(cases_to_json(config.cases)))
    assert designs_from_json(designs) == config.designs
    assert cases_from_json(cases) == config.cases
    assert designs_from_json(designs_to_json(read(BASE).designs)) == read(BASE).designs
    assert cases_from_json(cases_to_json(read(BASE).cases)) == read(BASE).cases


@pytest.mark.parametrize(
    "data",
    [
        None,
        {},
        [3],
        [{"name": "x"}],
        [{"name": "../x", "values": {}}],
        [{"name": "x", "values": {"kp": None}}],
        [{"name": "x", "values": {"kp": float("nan")}}],
        [{"name": "x", "values": {}, "more": 1}],
    ],
)
def test_stored_designs_are_checked_when_they_are_read(data):
    with pytest.raises(DamagedAtlas, match="designs stored in the atlas"):
        designs_from_json(data)


@pytest.mark.parametrize(
    "change",
    [
        {"over": {"kp": [1.0]}},
        {"over": {"kp": [2.0, 1.0]}},
        {"over": {"kp": []}},
        {"over": {"kp": [1.0, "A"]}},
        {"requirements": [{"quantity": "nonsense", "sense": "max", "limit": 1.0}]},
        {"requirements": [{"quantity": "radius", "sense": "equal", "limit": 1.0}]},
        {"requirements": [{"quantity": "radius", "sense": "max", "limit": float("inf")}]},
    ],
)
def test_stored_cases_are_checked_when_they_are_read(change):
    with pytest.raises(DamagedAtlas, match="cases stored in the atlas"):
        cases_from_json([{"name": "x", "over": {}, "requirements": [], **change}])


def test_a_mistake_in_an_axis_is_not_reported_again_by_what_names_the_axis():
    found = problems(axis_text("values = [1, 0]") + BASE[BASE.index("[designs") :])
    assert list(found) == ["axes.kp.values[1]"]
    found = problems(BASE.replace("[axes.kp]", "[axes.kpp]"))
    assert list(found) == ["axes.kpp"]
