"""Fingerprints: golden ids, what is in them and what is not."""

import re
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from config_text import BASE, axis_text, read, swap
from hypothesis import given
from hypothesis import strategies as st

from sweep.errors import DamagedAtlas
from sweep.identity import (
    PROGRAM_VERSION,
    atlas_id,
    canonical_text,
    physics_id,
    structure_from_json,
    structure_to_json,
)
from sweep.vocabulary import CONTROLLERS, PLANTS, LoopStructure

PLAIN = LoopStructure("oscillator", "pd")
FULL = LoopStructure("lag", "pid", "trapezoidal", True, (("bus", "s"), ("update", "samples")))


def identify(text: str) -> str:
    config = read(text)
    return atlas_id(config.structure, config.grid)


# Golden ids. They stand in the names and attributes of everybody's atlases: when one of these
# tests fails, atlases of the same loop are no longer found, and the change is wrong unless the
# numbers themselves have changed (then the physics version of the kind is raised).
def test_golden_physics_ids():
    assert physics_id(PLAIN) == "ca901e5debba5398fd47bbdc50162ef7d67e1787b854fc8f480949e2a08b4eab"
    assert physics_id(FULL) == "64d795141d8bd4f9bd0d17b4d278acdfd90ce4987df5cbdfd4016c6b8273728d"


def test_golden_atlas_ids():
    assert identify(BASE) == "34f08c8867a59e298fe26f0476282528cf6b0c3059fb811074fe1c58b10f8474"
    rows = 'rows = [{label = "A", damping = 0.1}, {label = "B", damping = 0.2}]'
    assert (
        identify(axis_text(rows, "damping").replace("[axes.damping]", "[axes.unit]"))
        == "f4987a2906ddf225099223b948f1cc828fd80d62dd4a063cad3335c27551996d"
    )


def test_the_canonical_text_is_sorted_compact_and_says_the_bits_of_floats():
    value = {"b": np.array([0.1, -0.0]), "a": ("é", 1, True, None)}
    expected = '{"a":["é",1,true,null],"b":["0x1.999999999999ap-4","0x0.0p+0"]}'
    assert canonical_text(value) == expected


@pytest.mark.parametrize("value", [float("nan"), float("inf")])
def test_what_is_no_number_has_no_canonical_text(value):
    with pytest.raises(ValueError, match="no number"):
        canonical_text([value])


def test_options_at_their_default_are_left_out():
    assert structure_to_json(PLAIN) == {"plant": "oscillator", "controller": "pd"}


structures = st.builds(
    LoopStructure,
    plant=st.sampled_from(sorted(PLANTS)),
    controller=st.sampled_from(["pi", "pid"]),
    integral=st.sampled_from(["backward", "forward", "trapezoidal"]),
    has_code_period=st.booleans(),
    delay_parts=st.dictionaries(
        st.from_regex(r"[a-z][a-z0-9_]{0,5}", fullmatch=True), st.sampled_from(["s", "samples"])
    ).map(lambda parts: tuple(sorted(parts.items()))),
)


@given(structures)
def test_a_structure_survives_json(structure):
    assert structure_from_json(structure_to_json(structure)) == structure


@given(structures, structures)
def test_two_structures_share_a_physics_id_only_when_they_are_equal(one, other):
    assert (physics_id(one) == physics_id(other)) == (one == other)


@pytest.mark.parametrize(
    "change",
    [
        {"plant": "nonsense"},
        {"plant": ["oscillator"]},
        {"controller": None},
        {"integral": "forward"},
        {"hold": "none"},
        {"has_code_period": 1},
        {"delay_parts": [["a"]]},
        {"delay_parts": [["a", "ms"]]},
        {"delay_parts": [["b", "s"], ["a", "s"]]},
        {"delay_parts": [["a", "s"], ["a", "s"]]},
        {"delay_parts": 3},
        {"extra": 1},
    ],
)
def test_a_stored_structure_is_checked_when_it_is_read(change):
    with pytest.raises(DamagedAtlas, match="structure stored in the atlas"):
        structure_from_json({"plant": "oscillator", "controller": "p", **change})
    with pytest.raises(DamagedAtlas):
        structure_from_json([])


def test_a_raised_physics_version_changes_the_id(monkeypatch):
    before = physics_id(PLAIN)
    newer = {**CONTROLLERS, "pd": replace(CONTROLLERS["pd"], version=2)}
    monkeypatch.setattr("sweep.identity.CONTROLLERS", newer)
    assert physics_id(PLAIN) != before


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ('title = "Test stand"', 'title = "Another"'),
        ('"50 Hz"\n', '"50 Hz"\noutput_unit = "mm"\ninput_unit = "V"\n'),
        ('"50 Hz"', '"0.05 kHz"'),
        ('"50 Hz"\n', '"50 Hz"\ngain = 1\n'),
        ("[0.01, 0.02, 0.05]", "[0.01, 0.02, 0.05]\nnominal = 0.05"),
        ("[0.01, 0.02, 0.05]", '[0.01, 0.02, 0.05]\nrole = "design"'),
        ("count = 21", "step = 0.1"),
        ("kp = 0.2\n", "kp = 0.3\n"),
        ('"80 ms"', '"90 ms"'),
        ("[cases.normal]", "[measures]\nnames = []\n[cases.normal]"),
    ],
)
def test_labels_roles_nominals_and_spellings_are_not_in_the_id(old, new):
    text = BASE if "role" not in new else BASE[: BASE.index("[designs")]
    assert identify(text.replace(old, new)) == identify(BASE)


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ('"50 Hz"', '"50.000000000001 Hz"'),
        ('kd = "1 ms"', 'kd = "2 ms"'),
        ('"1 sample"', '"2 samples"'),
        ('update = "1 sample"', 'other = "1 sample"'),
        ('update = "1 sample"', 'update = "1 ms"'),
        ("[0.01, 0.02, 0.05]", "[0.01, 0.02]"),
        ("count = 21", "count = 22"),
        ("[axes.damping]\n", '[axes.zeta]\nsets = "plant.damping"\n'),
        ('kd = "1 ms"\n', 'kd = "1 ms"\ncode_period = "2 ms"\n'),
    ],
)
def test_every_number_and_every_part_of_the_structure_is_in_the_id(old, new):
    text = BASE[: BASE.index("[designs")]
    assert text.count(old) == 1
    assert identify(text.replace(old, new)) != identify(text)


def test_the_order_of_the_axes_is_in_the_id():
    grid = read(BASE).grid
    turned = replace(grid, axes=grid.axes[::-1])
    assert atlas_id(PLAIN, turned) != atlas_id(PLAIN, grid)


def test_row_labels_are_not_in_the_id_but_their_values_are():
    rows = 'rows = [{label = "A", damping = 0.1}]'
    text = axis_text(rows, "damping").replace("[axes.damping]", "[axes.unit]")
    assert identify(text.replace('"A"', '"B"')) == identify(text)
    assert identify(text.replace("0.1}", "0.2}")) != identify(text)


def test_a_fixed_value_and_an_axis_of_that_value_differ_in_the_atlas_but_not_in_the_physics():
    fixed = swap(
        ("[axes.damping]\nvalues = [0.01, 0.02, 0.05]\n", ""), ("over.damping = [0.01, 0.02]\n", "")
    )
    fixed = read(fixed.replace('"50 Hz"\n', '"50 Hz"\ndamping = 0.01\n'))
    swept = read(BASE)
    assert physics_id(fixed.structure) == physics_id(swept.structure)
    assert atlas_id(fixed.structure, fixed.grid) != atlas_id(swept.structure, swept.grid)


def test_ids_are_sha256_in_hexadecimal():
    assert re.fullmatch(r"[0-9a-f]{64}", physics_id(PLAIN))


def test_the_program_version_is_the_projects():
    project = tomllib.loads((Path(__file__).parents[1] / "pyproject.toml").read_text())
    assert project["project"]["version"] == PROGRAM_VERSION
