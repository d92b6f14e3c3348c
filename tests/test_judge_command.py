"""The command `sweep judge`: a gate in a build, and a page for a review."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import stand_in
from memory_atlas import atlas, axis

from sweep.__main__ import main
from sweep.config import parse_config
from sweep.store.atlas import create_atlas
from sweep.views.judge_table import judge_view
from sweep.views.sheet import to_text

ROOT = Path(__file__).parents[1]
CONFIG = """
title = "Bench"
[plant]
kind = "oscillator"
output_unit = "um"
input_unit = "V"
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
[axes.unit]
rows = [
  {label = "A", natural_frequency = "40 Hz"},
  {label = "B [bold]", natural_frequency = "41 Hz"},
]
[axes.damping]
values = [0.01, 0.02, 0.04]
nominal = 0.02
[designs.quick]
sample_period = "2 ms"
kp = 0.3
[designs.wild]
sample_period = "5 ms"
kp = 0.9
[cases.normal]
over.damping = [0.01, 0.02]
require.max_decay_time = "30 ms"
[cases.strict]
over.damping = [0.01, 0.02]
require.max_decay_time = "8 ms"
"""


@pytest.fixture(scope="module")
def shelf(tmp_path_factory):
    """An atlas whose last sample period is not computed; the values are made up."""
    folder = tmp_path_factory.mktemp("shelf")
    config = parse_config(CONFIG, folder=folder, source="test")
    atlas = create_atlas(folder / "bench.zarr", config, (1, 21, 2, 3))
    kp = config.grid.axis("kp").coordinates
    for tile in list(atlas.tiling)[:2]:
        line = np.abs(kp - 0.05) - 0.42
        harder = np.array([0.0, 0.01])[:, None] + [0.05, 0.0, -0.1]
        values = np.broadcast_to(line[:, None, None] + harder, tile.shape)
        stand_in.write_tile(
            atlas,
            tile,
            {
                "log_radius": values.astype(np.float32),
                "mode_angle": np.full(tile.shape, 0.5, np.float32),
            },
        )
    return folder


def run(capsys, shelf, *arguments):
    code = main(["judge", "bench", "--shelf", str(shelf), *map(str, arguments)])
    return code, *capsys.readouterr()


def ask(capsys, shelf, *arguments):
    code, out, err = run(capsys, shelf, *arguments, "--json")
    assert err == ""
    return code, json.loads(out)


# --- as a gate ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "code", "verdict"),
    [
        (["--design", "quick", "--case", "normal"], 0, "meets"),
        (["--design", "quick", "--case", "normal,strict"], 1, "fails"),
        (["--design", "quick,wild", "--case", "normal"], 1, "fails"),
        (["--at", "sample_period=10ms,kp=0.3"], 3, "unknown"),
        (["--at", "sample_period=7ms,kp=0.3", "--require", "max_radius=0.95"], 3, "unknown"),
        (["--at", "sample_period=7ms,kp=0.9"], 1, "fails"),
        (["--design", "quick", "--require", "max_radius=0.95"], 0, "meets"),
        (["--design", "quick", "--case", "normal", "--require", "max_decay_time=1ms"], 1, "fails"),
        (["--design", "quick", "--case", "normal", "--at", "kp=0.9"], 1, "fails"),
        (["--design", "quick", "--case", "normal", "--shake", "kp=90%"], 1, "fails"),
    ],
)
def test_the_exit_code_is_the_worst_verdict(capsys, shelf, arguments, code, verdict):
    found, document = ask(capsys, shelf, *arguments)
    assert (found, document["verdict"]) == (code, verdict)
    assert run(capsys, shelf, *arguments)[0] == code


def test_without_names_every_design_meets_every_case(capsys, shelf):
    _, document = ask(capsys, shelf)
    pairs = [(found["design"], found["case"]) for found in document["designs"]]
    assert pairs == [(d, c) for d in ("quick", "wild") for c in ("normal", "strict")]


def test_a_box_of_its_own_stands_instead_of_the_cases(capsys, shelf):
    _, document = ask(capsys, shelf, "--design", "quick", "--over", "damping=0.02:0.03,unit=A")
    (found,) = document["designs"]
    assert (found["case"], found["widened"]) == (None, ["damping"])
    assert found["over"] == {"unit": ["A"], "damping": [0.02, 0.04]}


def test_the_document_has_the_promised_keys(capsys, shelf):
    _, document = ask(capsys, shelf, "--design", "quick", "--case", "normal")
    assert {"atlas_id", "verdict", "designs", "cautions"} <= set(document)
    (found,) = document["designs"]
    assert {"design", "case", "verdict", "bracketed", "lines", "distances"} <= set(found)
    assert {"in_hand", "acceptance", "yield", "nodes", "unknown"} <= set(found)
    assert [line["require"] for line in found["lines"]] == ["stable", "max_decay_time"]
    assert {"require", "limit", "worst", "at", "verdict"} <= set(found["lines"][0])
    assert found["lines"][0]["at"] == {"unit": "B [bold]", "damping": 0.01}
    (up,) = [d for d in found["distances"] if (d["axis"], d["direction"]) == ("kp", "up")]
    assert (up["end"], up["between"]) == ("boundary", [0.4, 0.5])
    assert 0.4 < up["to"] < 0.5
    assert ["damping", "down"] in found["axis_ends"]
    assert ["kp", "up"] not in found["axis_ends"]
    assert found["yield"][0]["meets"] == 2
    assert found["hurts_most"][0]["axis"] == "damping"


def test_a_schedule_is_judged_row_by_row(capsys, shelf, tmp_path):
    path = tmp_path / "gains.csv"
    path.write_text("label,kp,sample_period [ms],damping\nsoft,0.2,2,0.04\nhard,0.9,5,\n")
    code, document = ask(capsys, shelf, "--schedule", path, "--case", "normal")
    assert code == 1
    found = [(one["design"], one["verdict"], one["over"]["damping"]) for one in document["designs"]]
    assert found == [("soft", "meets", [0.04, 0.04]), ("hard", "fails", [0.01, 0.02])]
    path.write_text("kp,sample_period [ms]\n0.2,2\n0.2,4,5\n")
    code, out, _ = run(capsys, shelf, "--schedule", path, "--json")
    error = json.loads(out)
    assert (code, error["error"]) == (2, "question")
    assert error["where"] == [f"{path}:3"]


def test_weights_of_rows_give_a_weighted_share(capsys, shelf, tmp_path):
    path = tmp_path / "weights.csv"
    path.write_text("unit,weight\nA,3\nB [bold],1\n")
    more = ("--require", "max_radius=0.845", "--over", "damping=0.02", "--confidence", "90%")
    _, document = ask(capsys, shelf, "--design", "quick", *more, "--weights", path)
    (found,) = document["designs"][0]["yield"]
    assert (found["share"], found["weighted_share"]) == (0.5, 0.75)
    assert document["confidence"] == 0.9


@pytest.mark.parametrize(
    "arguments",
    [
        ["--design", "slow"],
        ["--case", "cold"],
        ["--at", "kp=0.3"],
        ["--at", "kp=3,sample_period=2ms"],
        ["--over", "damping=0.02:0.01"],
        ["--require", "min_modulus_margin=0.5"],
        ["--require", "max_decay_time=5V"],
        ["--confidence", "95"],
        ["--schedule", "nowhere.csv"],
        ["--weights", "nowhere.csv"],
    ],
)
def test_a_bad_question_ends_with_two_and_one_clear_line(capsys, shelf, arguments):
    code, out, err = run(capsys, shelf, *arguments)
    assert (code, out) == (2, "")
    assert len(err.splitlines()) == 2
    assert "->" in err


# --- as a page ----------------------------------------------------------------------------------


def test_the_page_puts_the_verdict_first_and_cautions_last(capsys, shelf):
    _, out, _ = run(capsys, shelf, "--design", "quick", "--case", "normal")
    lines = out.splitlines()
    assert lines[0].startswith("MEETS  quick in normal")
    shown = " ".join(out.split())
    assert "decay_time at most 30 ms" in shown
    assert "unit B [bold], damping 0.01" in shown
    assert "damping hurts most" in shown
    assert "in hand" in shown
    assert "2 of 2 rows meet" in shown
    assert "not conditionally stable" in shown
    assert "C7 the tolerance box is your claim" in shown
    assert max(map(len, lines)) <= 108


def test_the_page_says_what_fails_what_is_between_nodes_and_what_is_unknown(capsys, shelf):
    _, out, _ = run(capsys, shelf, "--at", "sample_period=3ms,kp=0.9", "--shake", "kp=5%")
    shown = " ".join(out.split())
    assert "FAILS" in shown
    assert "sample_period bracketed: the worst of the nodes 2 ms to 5 ms counts" in shown
    assert "kp shaken by 5%" in shown
    assert "no distances: it is not stable" in shown
    _, out, _ = run(capsys, shelf, "--at", "sample_period=7ms,kp=0.3", "--over", "damping=0.01")
    assert "UNKNOWN" in out
    assert "2 nodes unknown" in out
    assert "not known to be stable" in out


def test_many_designs_are_summed_up_and_those_that_fail_shown(capsys, shelf, tmp_path):
    path = tmp_path / "gains.csv"
    rows = "\n".join(f"{kp / 100},2" for kp in range(0, 60, 4))
    path.write_text(f"kp,sample_period [ms]\n{rows}\n")
    _, out, _ = run(capsys, shelf, "--schedule", path, "--case", "normal")
    lines = out.splitlines()
    assert lines[0].endswith("fail, 0 unknown")
    assert sum(line.startswith("row ") for line in lines) == 15
    assert not any(line.startswith("MEETS") for line in lines)
    assert any(line.startswith("FAILS") for line in lines)
    assert "stand in the summary only" in out


def test_nothing_heavy_is_loaded(shelf):
    script = (
        "import sys\nfrom sweep.__main__ import main\n"
        f"code = main(['judge', 'bench', '--shelf', {str(shelf)!r}, '--over', 'unit=A', "
        "'--design', 'quick', '--json'])\n"
        "loaded = {'joblib', 'numba', 'dask', 'matplotlib', 'xarray', 'scipy.stats'}\n"
        "print(sorted(loaded & set(sys.modules)), file=sys.stderr)\nsys.exit(code)"
    )
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, cwd=ROOT, check=False
    )
    assert (done.returncode, done.stderr.strip()) == (0, "[]")


def test_a_row_of_a_table_may_not_be_called_as_a_design_that_is_judged_beside_it(
    capsys, shelf, tmp_path
):
    table = tmp_path / "gains.csv"
    table.write_text("label,kp,sample_period\nquick,0.2,2ms\n")
    code, out, err = run(capsys, shelf, "--design", "quick", "--schedule", table)
    assert (code, out) == (2, "")
    assert "2 of them are called quick" in err


def test_a_design_given_by_its_values_is_named_once_in_a_mistake(capsys, shelf):
    code, _, err = run(capsys, shelf, "--at", "kp=0.3")
    assert code == 2
    assert "judging the design asked for: it gives no sample_period" in err


def test_what_is_unknown_is_told_as_unknown():
    """Nothing is ranked, placed or said to be in hand of nodes that are not computed."""
    damping = axis("damping", [0.1, 0.2, 0.3], sets="plant.damping", role="tolerance", nominal=1)
    asked = atlas([axis("kp", [1, 2], sets="controller.kp"), damping], np.full((2, 3), np.nan))
    text = to_text(judge_view(asked.judge(at={"kp": 1})), width=108, terminal=False)
    assert "UNKNOWN" in text
    assert "in hand: cannot be told, unknown at damping 0.2" in text
    assert "which tolerance hurts most cannot be told" in text
    assert "from unknown" not in text
    assert "nothing in hand" not in text
