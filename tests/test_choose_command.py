"""`sweep choose`: its document, its exit codes, and what its table never leaves out."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
import stand_in
from memory_atlas import atlas, axis, rows

from sweep.__main__ import main
from sweep.config import parse_config
from sweep.query.choosing.choose import choose_designs
from sweep.query.question import make_demand
from sweep.store.atlas import create_atlas
from sweep.views.choose_table import choose_view, pick_rows
from sweep.views.sheet import to_text
from sweep.vocabulary import LoopStructure

CONFIG = """
title = "Bench"
[plant]
kind = "oscillator"
natural_frequency = "40 Hz"
[controller]
kind = "p"
[delay]
update = "1 sample"
[axes.sample_period]
values = ["2 ms", "5 ms", "10 ms"]
[axes.kp]
start = -1
stop = 1
step = 0.1
[axes.damping]
values = [0.01, 0.02]
nominal = 0.02
[axes.bus]
sets = "delay.bus"
values = ["0 samples", "0.5 samples"]
[designs.quick]
sample_period = "5 ms"
kp = 0.3
[cases.bench]
require.max_decay_time = "60 ms"
"""


@pytest.fixture(scope="module")
def shelf(tmp_path_factory):
    """A whole atlas and an empty one; values are made up."""
    folder = tmp_path_factory.mktemp("shelf")
    for title, done in (("Bench", True), ("Empty", False)):
        text = CONFIG.replace("Bench", title).replace("40 Hz", "40 Hz" if done else "41 Hz")
        config = parse_config(text, folder=folder, source="test")
        made = create_atlas(folder / f"{title.lower()}.zarr", config, (3, 21, 2, 2))
        for tile in made.tiling if done else ():
            kp = config.grid.axis("kp").coordinates[:, None, None]
            period = np.array([-0.1, 0.0, 0.3])[:, None, None, None]
            values = np.abs(kp) - 0.5 + period + np.array([[0.05, 0.1], [0.0, 0.02]])
            stand_in.write_tile(
                made,
                tile,
                {
                    "log_radius": np.broadcast_to(values, tile.shape).astype(np.float32),
                    "mode_angle": np.full(tile.shape, 0.5, np.float32),
                },
            )
    return folder


def run(capsys, shelf, *arguments):
    """Exit code, stdout and stderr."""
    code = main(["choose", *map(str, arguments), "--shelf", str(shelf)])
    captured = capsys.readouterr()
    return code, captured.out, captured.err


def test_the_document_has_the_keys_that_programs_rely_on(capsys, shelf):
    code, out, _ = run(capsys, shelf, "bench", "--case", "bench", "--price", "--json")
    document = json.loads(out)
    assert code == 0
    assert {"atlas_id", "case", "rows", "slowest", "price", "base", "cautions"} <= set(document)
    assert [(row["sample_period"], row["meets"]) for row in document["rows"]] == [
        (0.002, True),
        (0.005, True),
        (0.01, False),
    ]
    first = document["rows"][0]
    assert first["design"] == {"sample_period": 0.002, "kp": 0.0}
    assert first["at"] == {"damping": 0.01, "bus": 0.5}
    assert first["worst"]["decay_time"] == pytest.approx(0.002 / 0.5)
    (left,) = first["delay_left"]
    assert (left["axis"], left["left"], left["to"]) == ("bus", 0.0, 0.5)
    assert (left["end"], left["unit"]) == ("axis_end", "samples")
    assert document["slowest"] == document["rows"][1]
    assert document["slowest"]["beside_failing"] == ["sample_period"]
    prices = {price["axis"]: price for price in document["price"]}
    assert list(prices) == ["damping", "bus"]
    assert set(prices["bus"]) >= {"axis", "nodes", "halved", "removed", "brings_nothing"}
    assert set(prices["bus"]["removed"]) == {"over", "meets", "share", "best", "slowest"}
    assert prices["damping"]["removed"]["slowest"] == 0.01


def test_the_table_says_what_a_reviewer_has_to_know(capsys, shelf):
    code, out, _ = run(capsys, shelf, "bench", "--case", "bench", "--price")
    assert code == 0
    assert "slowest: 5 ms (200 Hz) with kp 0; worst decay time 12.5 ms" in out
    assert "beside a node that does not meet, along sample_period" in out
    assert "bus left 0 samples or more, beyond the axis end" in out
    assert "left: from the box until stability is lost; what else is required may fail" in out
    assert "tighten damping first" in out
    assert "C9 not a safety case" in out
    assert "the hold's own half sample" in out
    assert max(map(len, out.splitlines())) <= 108


def test_a_named_design_is_asked_at_every_period(capsys, shelf):
    code, out, _ = run(capsys, shelf, "bench", "--design", "quick", "--json")
    assert code == 0
    assert [row["design"]["kp"] for row in json.loads(out)["rows"]] == [0.3] * 3


def test_an_atlas_in_which_nothing_is_known_ends_with_3(capsys, shelf):
    code, out, _ = run(capsys, shelf, "empty")
    assert code == 3
    assert "No design meets at any sample period, as far as it is known" in out
    assert "63 designs among all are unknown" in out


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--best", "speed"], "choosing by speed: expected one of radius"),
        (["--best", "mode_angle"], "choosing by mode_angle"),
        (["--require", "max_decay=3"], "reading the requirement max_decay"),
        (["--over", "damping=0.02:0.01"], "0.02 lies above 0.01"),
        (["--within", "kp=3:4"], "the axis runs from"),
        (["--case", "none"], "looking for case 'none'"),
        (["--design", "none"], "looking for design 'none'"),
        (["--at", "speed=3"], "this atlas has no such axis"),
        (["--rows", "0"], "expected a whole number from 1"),
    ],
)
def test_bad_questions_are_one_clear_line_and_exit_2(capsys, shelf, arguments, message):
    code, out, error = run(capsys, shelf, "bench", *arguments)
    assert (code, out) == (2, "")
    assert message in error
    assert "Traceback" not in error


def long_atlas(count=400):
    """Meets at 1 s to 100 s, with an island at 300 s to 301 s."""
    periods = np.arange(1.0, count + 1)
    good = (periods <= 100) | ((periods >= 300) & (periods <= 301))
    levels = np.where(good, -0.3, 0.2)[:, None, None] * np.ones((1, 3, 2))
    levels[50] -= 0.4
    axes = [
        axis("sample_period", periods, unit="s"),
        axis("kp", [0, 1, 2], sets="controller.kp"),
        axis("bus", [0, 1], sets="delay.bus", role="tolerance", unit="samples"),
    ]
    return atlas(axes, levels)


STABLE = make_demand((), "", None, None, None)
PAGE = {"width": 108, "terminal": False}


@pytest.mark.parametrize("most", [1, 2, 8, 24, 399])
def test_a_long_table_keeps_the_slowest_the_best_and_both_sides_of_every_change(most):
    answer = choose_designs(long_atlas().stored, STABLE, best="log_radius")
    picked = pick_rows(answer, most)
    assert len(picked) == max(most, 2)
    assert picked == sorted(set(picked))
    assert {50, 300} <= set(picked)
    if most >= 8:
        assert {99, 100, 298, 299, 300, 301} <= set(picked)
    text = to_text(choose_view(answer, most), width=108, terminal=False)
    assert f"{400 - len(picked):,} of 400 sample periods are left out here" in text
    assert "not every faster one will do: at 199 of them no design meets" in text


def test_a_short_table_leaves_nothing_out():
    answer = choose_designs(long_atlas().stored, STABLE)
    assert pick_rows(answer, 400) == list(range(400))
    assert "left out" not in to_text(choose_view(answer, 400), width=108, terminal=False)


def test_the_slowest_at_the_axis_end_is_shown_as_beyond_it():
    answer = choose_designs(long_atlas(90).stored, STABLE)
    text = to_text(choose_view(answer), width=108, terminal=False)
    assert "lies beyond the axis end: no slower one was swept" in text
    part = choose_designs(long_atlas(90).stored, STABLE, within={"sample_period": "1s:50s"})
    text = to_text(choose_view(part), width=108, terminal=False)
    assert "no slower period was asked about" in text


def test_what_lies_beyond_the_range_asked_for_is_said_not_to_be_judged():
    levels = [[-0.1, -0.2, -0.3, 0.2]] * 2
    axes = [
        axis("sample_period", [1e-3, 2e-3], unit="s"),
        axis("kp", [0, 1, 2, 3], sets="controller.kp"),
    ]
    answer = choose_designs(
        atlas(axes, levels).stored, STABLE, within={"kp": (1, 2), "sample_period": 1e-3}
    )
    text = to_text(choose_view(answer), width=108, terminal=False)
    assert "at the end of the range asked for, along kp: what lies beyond it was not judged" in text
    assert "no slower period was asked about" in text
    assert "'*': at the end of the range asked for with --within" in text
    row = next(found for found in text.splitlines() if found.lstrip().startswith("*1"))
    assert row.split()[:3] == ["*1", "meets", "*2"]
    whole = to_text(choose_view(choose_designs(atlas(axes, levels).stored, STABLE)), **PAGE)
    assert "*" not in whole


def test_a_period_at_which_nothing_can_be_built_is_shown_as_that():
    axes = [
        axis("sample_period", [1e-3, 2e-3], unit="s"),
        axis("kp", [0, 1], sets="controller.kp"),
    ]
    structure = LoopStructure("oscillator", "p", delay_parts=(("compute", "s"),))
    found = atlas(axes, [[-0.1] * 2] * 2, fixed={"delay.compute": 1.5e-3}, structure=structure)
    answer = choose_designs(found.stored, STABLE)
    text = to_text(choose_view(answer), **PAGE)
    row = next(found for found in text.splitlines() if "cannot be built" in found and "1" in found)
    assert "2 cannot be built" in row
    assert [found.split() for found in text.splitlines() if found.lstrip().startswith("1 ")] == [
        ["1", "cannot", "be", "built"]
    ]
    assert pick_rows(answer, 1) == [1]


@pytest.mark.parametrize("command", ["choose", "robust"])
def test_the_help_says_that_no_design_that_meets_is_no_failure(capsys, command):
    with pytest.raises(SystemExit):
        main([command, "--help"])
    said = " ".join(capsys.readouterr().out.split())
    assert "ends with 0 also when no design meets" in said


def test_hostile_names_reach_the_terminal_without_control_characters():
    table = rows("setup", ["\x1b[31mred", "[bold]b"], {"controller.kp": [1, 2]}, role="design")
    found = atlas([table, axis("damping", [0, 1], role="tolerance")], [[-0.1, -0.2], [-0.3, 0.1]])
    text = to_text(choose_view(choose_designs(found.stored, STABLE)), width=108, terminal=False)
    assert "\x1b" not in text
    assert "?[31mred" in text
    box = choose_designs(found.stored, STABLE, best="gain_box", price=True)
    assert "\x1b" not in to_text(choose_view(box), width=108, terminal=False)


def test_unknown_and_excluded_designs_are_counted_beside_those_that_meet():
    axes = [
        axis("sample_period", [1e-3, 2e-3], unit="s"),
        axis("kp", [0, 1], sets="controller.kp"),
    ]
    levels = [[-0.1, 0.1], [math.nan, 0.1]]
    text = to_text(
        choose_view(choose_designs(atlas(axes, levels).stored, STABLE)), width=108, terminal=False
    )
    assert "1 of 4 designs meet (25.0%), at 1 of 2 sample periods; 1 unknown" in text
    assert "1 designs slower than that are unknown: one of them may meet" in text
