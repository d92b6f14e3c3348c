"""The command `sweep robust`: its answer, its exit codes, and what it says to bad questions."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
import stand_in
from memory_atlas import atlas, axis, rows

from sweep.__main__ import main
from sweep.config import parse_config
from sweep.errors import QuestionError
from sweep.store.atlas import create_atlas

CONFIG = """
title = "Bench"
[plant]
kind = "oscillator"
natural_frequency = "40 Hz"
[controller]
kind = "p"
[delay]
compute = "3 ms"
[axes.sample_period]
values = ["2 ms", "5 ms", "10 ms"]
[axes.kp]
start = -1
stop = 1
step = 0.1
[axes.damping]
values = [0.01, 0.02, 0.03]
[axes.bus]
sets = "delay.transport"
values = ["0 samples", "0.5 samples"]
[designs.quick]
sample_period = "5 ms"
kp = 0.3
[designs.between]
sample_period = "7 ms"
kp = 0.3
[cases.cold]
over.damping = [0.015, 0.03]
require.max_decay_time = "80 ms"
"""


@pytest.fixture(scope="module")
def shelf(tmp_path_factory):
    """A whole atlas, one with its last period not computed, and one with nothing in it."""
    folder = tmp_path_factory.mktemp("shelf")
    for title, hertz, tiles in (("Bench", 40, 3), ("Half done", 41, 2), ("Empty", 42, 0)):
        text = CONFIG.replace("Bench", title).replace("40 Hz", f"{hertz} Hz")
        config = parse_config(text, folder=folder, source="test")
        name = title.replace(" ", "-").lower()
        made = create_atlas(folder / f"{name}.zarr", config, (1, 21, 3, 2))
        kp = config.grid.axis("kp").coordinates
        for tile in list(made.tiling)[:tiles]:
            line = np.abs(kp - 0.1) - 0.5 + 0.01 * tile.index[0]
            values = np.broadcast_to(line[:, None, None] + np.zeros((3, 2)), tile.shape)
            measures = {"log_radius": values, "mode_angle": np.full(tile.shape, 0.5)}
            stored = {name: block.astype(np.float32) for name, block in measures.items()}
            stand_in.write_tile(made, tile, stored)
    return folder


@pytest.fixture
def ask(shelf, capsys):
    """(exit code, stdout, stderr) of one command."""

    def run(*arguments):
        code = main(["robust", *map(str, arguments), "--shelf", str(shelf)])
        return code, *capsys.readouterr()

    return run


def test_the_document_counts_every_design_once(ask):
    code, out, err = ask("bench", "--json")
    document = json.loads(out)
    assert (code, err) == (0, "")
    assert document["case"] is None
    assert document["over"] == {"damping": [0.01, 0.03], "bus": [0.0, 0.5]}
    # the processor needs 3 ms: no design at 2 ms can be built
    assert (document["design_nodes"], document["excluded"]) == (63, 21)
    assert (document["meets"], document["fails"], document["unknown"]) == (18, 24, 0)
    assert document["largest_box"] == {
        "sample_period": [0.005, 0.01],
        "kp": [pytest.approx(-0.3), pytest.approx(0.5)],
    }
    assert document["regions"] == 1
    assert document["worst"]["at"].keys() == {"sample_period", "kp", "damping", "bus"}


def test_every_option_reaches_the_question(ask):
    box = ("--case", "cold", "--over", "bus=0:0.3", "--require", "max_radius=0.8")
    designs = ("--at", "sample_period=5ms", "--within", "kp=-0.55:0.55", "--shake", "kp=0.1")
    code, out, _ = ask("bench", "--json", *box, *designs, "--around", "kp=0.1")
    document = json.loads(out)
    assert code == 0
    assert document["case"] == "cold with bus=0:0.3, max_radius=0.8"
    assert document["over"] == {"damping": [0.01, 0.03], "bus": [0.0, 0.5]}
    assert document["widened"] == ["damping", "bus"]
    assert document["at"] == {"sample_period": 0.005}
    assert document["shaken"] == {"kp": "0.1"}
    assert document["requirements"] == {"stable": -1e-9, "max_radius": 0.8, "max_decay_time": 0.08}
    assert document["design_nodes"] == 11
    # |kp - 0.1| - 0.49 <= log 0.8 at the worst neighbour, 0.1 away: up to 0.16
    assert document["largest_box"]["kp"] == [pytest.approx(0.0), pytest.approx(0.2)]


def test_a_named_design_is_asked_at_its_enclosing_nodes(ask):
    document = json.loads(ask("bench", "--json", "--design", "between")[1])
    assert document["bracketed"] == {"sample_period": [0.005, 0.01]}
    assert document["at"] == {"sample_period": 0.007, "kp": pytest.approx(0.3)}
    assert (document["design_nodes"], document["meets"]) == (1, 1)
    around = json.loads(ask("bench", "--json", "--around", "between")[1])
    assert around["largest_box"]["sample_period"] == [0.005, 0.01]


def test_people_read_the_share_the_box_the_worst_node_and_the_cautions(ask):
    code, out, err = ask("bench", "--case", "cold")
    assert (code, err) == (0, "")
    shown = " ".join(out.split())
    for words in (
        "case cold",
        "decay_time at most 80 ms",
        "21: the processor needs more than a period",
        "largest box of designs that all meet: 14 nodes",
        "nearest to instability",
        "C6",
        "half sample",
    ):
        assert words in shown, words
    assert max(map(len, out.splitlines())) <= 108


def test_a_fixed_axis_that_is_shaken_is_not_said_to_lie_between_nodes(ask):
    for spelled in ("sample_rate=1%", "sample_period=1%"):
        shown = " ".join(ask("bench", "--at", "sample_period=5ms", "--shake", spelled)[1].split())
        assert f"{spelled.partition('=')[0]} may move by 1% either way" in shown
        assert "sample_period takes in 2 ms to 10 ms" in shown
        assert "lies between nodes" not in shown


def test_a_rate_fixes_a_period_and_keeps_it_to_a_range(ask):
    fixed = json.loads(ask("bench", "--json", "--at", "sample_rate=100Hz")[1])
    assert (fixed["at"], fixed["design_nodes"]) == ({"sample_period": 0.01}, 21)
    kept = json.loads(ask("bench", "--json", "--within", "sample_rate=100Hz:210Hz")[1])
    assert (kept["design_nodes"], kept["excluded"]) == (42, 0)


def test_what_is_not_computed_is_unknown_and_an_atlas_without_answers_ends_with_three(ask):
    code, out, _ = ask("half", "--json")
    document = json.loads(out)
    assert (code, document["unknown"], document["unknown_nodes"]) == (0, 21, 126)
    for title, further in (("empty", ()), ("half", ("--at", "sample_period=10ms"))):
        code, out, _ = ask(title, "--json", *further)
        document = json.loads(out)
        assert code == 3, "nothing is known of what can be built"
        assert (document["meets"], document["worst"], document["largest_box"]) == (0, None, None)
        assert "no design is known to meet" in ask(title, *further)[1]


BAD = {
    "an unknown axis": (["--over", "dampin=0.01:0.02"], "damping, which was probably meant"),
    "a value off the axis": (["--at", "kp=3"], "the axis runs from -1 to 1"),
    "an inverted range": (["--over", "damping=0.03:0.01"], "lower bound first"),
    "a range off the axis": (["--over", "damping=0.001:0.02"], "the axis runs from 0.01 to 0.03"),
    "an inverted range of designs": (["--within", "kp=1:0"], "lower bound first"),
    "a range that holds no node": (["--within", "kp=0.01:0.02"], "it holds no node"),
    "a requirement on nothing": (["--require", "max_decaytime=1s"], "max_decay_time"),
    "a requirement without a sense": (["--require", "radius=0.9"], "max_"),
    "a requirement in another unit": (["--require", "max_decay_time=80Hz"], "write it in s, ms"),
    "a requirement that is no number": (["--require", "max_radius=small"], 'found "small"'),
    "a requirement given twice": (["--require", "max_radius=1,max_radius=2"], "given 2 times"),
    "a decay time of nothing": (["--require", "max_decay_time=0s"], "above 0"),
    "an unknown case": (["--case", "warm"], "cold"),
    "an unknown design": (["--design", "slow"], "quick"),
    "an unknown design in the middle": (["--around", "slow"], "quick"),
    "a design axis in the box": (["--over", "kp=0:1"], "it is a design axis"),
    "nature kept within a range": (["--within", "damping=0.01:0.02"], "it is a tolerance axis"),
    "an axis for two purposes": (["--at", "kp=0", "--within", "kp=0:1"], "--at and by --within"),
    "an axis twice": (["--at", "sample_period=5ms,sample_rate=100Hz"], "given twice"),
    "a fixed parameter": (["--at", "natural_frequency=40Hz"], "it has the one value"),
    "no assignment": (["--over", "damping"], "expected NAME=LOW:HIGH"),
    "no range": (["--over", "damping=1:2:3"], "expected LOW:HIGH"),
    "the wrong unit": (["--at", "sample_period=5Hz"], "5Hz"),
    "seconds on an axis of samples": (["--over", "bus=0:1ms"], "1ms"),
    "shaking nature": (["--shake", "damping=10%"], "it is a tolerance axis"),
    "shaking by nothing": (["--shake", "kp=0%"], "above 0"),
    "shaking by everything": (["--shake", "kp=100%"], "below 100"),
    "shaking twice": (["--shake", "kp=1%,kp=2%"], "given 2 times"),
    "half a design in the middle": (["--around", "kp=0.1"], "it names no sample_period"),
    "nature in the middle": (
        ["--around", "kp=0.1,sample_period=5ms,damping=0.01"],
        "it is a tolerance axis",
    ),
    "a middle outside the designs": (
        ["--around", "kp=0.1,sample_period=5ms", "--at", "kp=0.2"],
        "outside the designs",
    ),
    "a middle beside a bracket": (
        ["--around", "kp=0.1,sample_period=5ms", "--at", "kp=0.15"],
        "outside the designs",
    ),
    "no such option": (["--along", "kp"], "--help"),
}


@pytest.mark.parametrize(("arguments", "words"), BAD.values(), ids=BAD)
def test_a_bad_question_gets_one_clear_line_and_ends_with_two(ask, arguments, words):
    code, out, err = ask("bench", *arguments)
    assert (code, out) == (2, "")
    assert words in err
    assert "Traceback" not in err
    code, out, err = ask("bench", *arguments, "--json")
    document = json.loads(out)
    assert (code, err) == (2, "")
    assert words in f"{document['message']} {document['remedy']}"
    assert "\n" not in document["message"]
    assert document["remedy"]
    assert document["where"]


def test_an_atlas_that_is_not_there_ends_with_two(ask):
    code, out, err = ask("bunch")
    assert (code, out) == (2, "")
    assert "bunch" in err


# --- from Python ---------------------------------------------------------------------------------


def small(**more):
    axes = [
        axis("kp", [1, 2], sets="controller.kp"),
        rows("unit", ("a", "b"), {"plant.gain": (1, 2)}),
        axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance"),
    ]
    return atlas(axes, np.full((2, 2, 2), -0.5), **more)


ODD = {
    "no rows": ({"over": {"unit": []}}, "no row is named"),
    "an unknown row": ({"over": {"unit": "c"}}, "its rows are a, b"),
    "rows between rows without an order": ({"over": {"unit": "a:b"}}, "not ordered"),
    "no bounds": ({"over": {"damping": []}}, "expected LOW:HIGH"),
    "three bounds": ({"over": {"damping": (0.1, 0.2, 0.3)}}, "expected LOW:HIGH"),
    "a bound that is no number": ({"over": {"damping": (0.1, math.nan)}}, "nan"),
    "several values at once": ({"at": {"kp": [1, 2]}}, "expected one value"),
    "several values in the middle": ({"around": {"kp": [1, 2]}}, "expected one value"),
    "an unknown axis in the middle": ({"around": {"kpp": 1}}, "kp, which was probably meant"),
    "a middle off the axis": ({"around": {"kp": 3}}, "the axis runs from 1 to 2"),
    "shaking a list": ({"shake": {"kp": ["1%", "2%"]}}, "more than once"),
    "an endless requirement": ({"require": {"max_radius": math.inf}}, "inf"),
    "a requirement on what is not a number": ({"require": {"max_radius": None}}, "None"),
}


@pytest.mark.parametrize(("asked", "words"), ODD.values(), ids=ODD)
def test_a_bad_question_from_python_is_an_error_with_a_remedy(asked, words):
    with pytest.raises(QuestionError) as caught:
        small().robust(**asked)
    said = f"{caught.value.message} -> {caught.value.remedy}"
    assert words in said
    assert "\n" not in said
    assert caught.value.remedy


def test_a_bracketed_middle_may_name_the_value_that_is_fixed():
    axes = [axis("kp", [1, 2], sets="controller.kp"), axis("kd", [1, 2, 3], sets="controller.kd")]
    asked = atlas(axes, np.full((2, 3), -0.5))
    answer = asked.robust(at={"kp": 1.5}, around={"kp": 1.5, "kd": 2})
    assert answer.largest_box.ends == {"kd": (1.0, 3.0)}


def test_hostile_labels_and_titles_are_shown_without_their_control_characters(capsys):
    from sweep.cli.output import print_view
    from sweep.views.robust_table import robust_view

    unit = rows("unit", ("\x1b[31mred[/b]", "b"), {"plant.gain": (1, 2)})
    kp = axis("kp", [1, 2], sets="controller.kp")
    answer = atlas([kp, unit], np.full((2, 2), -0.5), title="\x1b]0;x\x07[bold]").robust()
    print_view(robust_view(answer))
    shown = capsys.readouterr().out
    assert not {"\x1b", "\x07"} & set(shown)
    assert "red[/b]" in shown
