"""The command line: what it prints where, its exit codes, and terminals of every kind."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from datetime import datetime, time, timedelta
from pathlib import Path

import numpy as np
import pytest
import stand_in

from sweep.__main__ import main
from sweep.cli.parser import COMMANDS
from sweep.compute.progress import RunReport
from sweep.config import load_config, parse_config
from sweep.store.atlas import create_atlas

ROOT = Path(__file__).parents[1]
CONFIG = """
title = "Bench"
[plant]
kind = "oscillator"
natural_frequency = "40 Hz"
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
[axes.damping]
values = [0.01, 0.02]
[designs.quick]
sample_period = "5 ms"
kp = 0.3
"""


@pytest.fixture(scope="module")
def shelf(tmp_path_factory):
    """A shelf with a whole atlas and one whose last tile is not computed; values are made up."""
    folder = tmp_path_factory.mktemp("shelf")
    for title, tiles in (("Bench", 3), ("Half done", 2), ("Empty", 0)):
        text = CONFIG.replace("Bench", title)
        if title != "Bench":
            text = text.replace("40 Hz", {"Half done": "41 Hz", "Empty": "42 Hz"}[title])
        config = parse_config(text, folder=folder, source="test")
        atlas = create_atlas(folder / f"{title.replace(' ', '-').lower()}.zarr", config, (1, 21, 2))
        kp = config.grid.axis("kp").coordinates
        for tile in list(atlas.tiling)[:tiles]:
            line = np.abs(kp - 0.05) - 0.42 + 0.01 * tile.index[0]
            values = np.broadcast_to(line[:, None] + [0.0, -0.1], tile.shape)
            stand_in.write_tile(
                atlas,
                tile,
                {
                    "log_radius": values.astype(np.float32),
                    "mode_angle": np.full(tile.shape, 0.5, np.float32),
                },
            )
    return folder


def run(capsys, *arguments):
    """Exit code, stdout and stderr of one command in this process."""
    try:
        code = main([str(argument) for argument in arguments])
    except SystemExit as left:
        code = left.code
    captured = capsys.readouterr()
    return code, captured.out, captured.err


def ask(capsys, shelf, *arguments):
    """The JSON document of one command, and its exit code."""
    code, out, _ = run(capsys, *arguments, "--shelf", shelf, "--json")
    return code, json.loads(out)


# --- help --------------------------------------------------------------------------------------


def test_help_groups_the_commands_by_what_one_wants(capsys):
    code, out, err = run(capsys, "--help")
    assert (code, err) == (0, "")
    for words in ("make an atlas:", "look into one:", "decide with it:"):
        assert words in out
    assert "keep and hand over" not in out
    assert all(f"  {command.name}" in out for command in COMMANDS)
    assert max(map(len, out.splitlines())) <= 100


@pytest.mark.parametrize("command", COMMANDS, ids=lambda command: command.name)
def test_every_command_has_help_with_an_example_that_the_parser_takes(capsys, command):
    from sweep.cli.parser import build_parser

    code, out, _ = run(capsys, command.name, "--help")
    assert code == 0
    assert command.example in out
    assert max(map(len, out.splitlines())) <= 100
    build_parser().parse_args(command.example.split()[1:])


@pytest.mark.parametrize("name", ["new", "info", "point"])
def test_the_half_sample_is_explained_where_delay_is_entered_or_shown(capsys, name):
    _, out, _ = run(capsys, name, "--help")
    assert "half sample is in the model already" in " ".join(out.split())


def test_no_command_at_all_is_answered_with_the_overview(capsys):
    code, out, err = run(capsys)
    assert (code, out) == (2, "")
    assert "make an atlas:" in err


# --- errors ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "arguments",
    [
        ["explode"],
        ["limits"],
        ["limits", "bench", "--alon", "kp"],
        ["limits", "bench", "--along", "kp", "--rows", "0"],
        ["limits", "bench", "--along", "kp", "--at", "kp"],
        ["run", "none.toml", "--until", "25:00"],
        ["run", "none.toml", "--workers", "-1"],
        ["run", "none.toml", "--tile", "4x0"],
        ["map", "bench", "-x", "kp", "-y", "sample_period", "-o", "map.bmp"],
        ["map", "bench", "-x", "kp", "-y", "sample_period", "-o", "no/such/folder/map.png"],
        ["plan", "none.toml"],
        ["info", "none"],
        ["new", "no/such/folder/my.toml"],
    ],
)
@pytest.mark.parametrize("as_json", [False, True])
def test_bad_input_ends_with_two_and_says_what_to_do(capsys, shelf, arguments, as_json):
    options = [] if arguments[0] in ("new", "explode") else ["--shelf", shelf]
    code, out, err = run(capsys, *arguments, *options, *(["--json"] if as_json else []))
    assert code == 2
    assert "Traceback" not in err
    if as_json:
        document = json.loads(out)
        assert set(document) == {"error", "message", "where", "remedy"}
        assert document["remedy"]
    else:
        assert out == ""
        assert err.startswith("sweep: ")
        assert "-> " in err


def test_a_command_that_is_interrupted_ends_with_130(capsys, shelf, monkeypatch):
    def interrupt(*_args):
        raise KeyboardInterrupt

    monkeypatch.setattr("sweep.query.atlas.open_atlas", interrupt)
    code, document = ask(capsys, shelf, "info", "bench")
    assert (code, document["error"]) == (130, "interrupted")


def test_a_mistake_of_the_program_is_owned_without_a_traceback(capsys, shelf, monkeypatch):
    monkeypatch.setattr("sweep.query.atlas.open_atlas", lambda *_args: 1 / 0)
    monkeypatch.delenv("SWEEP_TRACEBACK", raising=False)
    code, out, err = run(capsys, "info", "bench", "--shelf", shelf)
    assert (code, out) == (70, "")
    assert "mistake in the program: ZeroDivisionError" in err
    assert "Traceback" not in err


def test_what_the_system_refuses_is_bad_input(capsys, tmp_path):
    code, _, err = run(capsys, "new", tmp_path)
    assert code == 2
    assert str(tmp_path) in err


def test_control_characters_never_reach_the_terminal(capsys, shelf):
    _, _, err = run(capsys, "info", "\x1b[31mred", "--shelf", shelf)
    assert "\x1b" not in err


# --- new, plan, run ----------------------------------------------------------------------------


@pytest.mark.parametrize("job", ["axis", "converter", "process"])
def test_a_starter_is_written_once_and_is_a_good_config(capsys, tmp_path, job):
    path = tmp_path / "my.toml"
    code, out, err = run(capsys, "new", path, "--for", job)
    assert (code, out) == (0, "")
    assert f"sweep plan {path}" in err
    assert load_config(path).grid.size > 1
    path.write_text("precious")
    code, _, err = run(capsys, "new", path, "--for", job)
    assert (code, path.read_text()) == (2, "precious")
    assert "left alone" in err


def test_a_run_computes_what_the_plan_said_and_then_has_nothing_to_do(capsys, tmp_path):
    path = tmp_path / "bench.toml"
    path.write_text(CONFIG)
    shelf = tmp_path / "shelf"
    code, plan = ask(capsys, shelf, "plan", path)
    assert (code, plan["nodes"], plan["tiles_done"]) == (0, 126, 0)
    assert not shelf.exists()
    code, report = ask(capsys, shelf, "run", path, "--workers", "1")
    assert (code, report["nodes_computed"], report["tiles_done"]) == (0, 126, plan["tiles"])
    assert report["atlas_id"] == plan["atlas_id"]
    for key in ("atlas", "physics_id", "nodes_adopted", "seconds", "start_seconds"):
        assert key in plan
        assert key in report
    code, out, _ = run(capsys, "run", path, "--shelf", shelf)
    assert code == 0
    assert "Nothing to do" in out
    code, out, err = run(capsys, "plan", path, "--shelf", shelf)
    assert (code, err) == (0, "")
    assert "damping" in out
    assert "tolerance" in out


@pytest.mark.parametrize(("stopped", "expected"), [("", 0), ("until", 0), ("interrupted", 130)])
def test_a_run_that_stops_in_time_is_done_and_one_that_is_interrupted_is_not(
    capsys, tmp_path, monkeypatch, stopped, expected
):
    asked = {}

    def run_sweep(config, shelf, **options):
        asked.update(options, title=config.title, shelf=shelf)
        numbers = {"nodes": 1, "tiles": 2, "tiles_done": 1, "tiles_computed": 1}
        numbers |= {"nodes_computed": 1, "seconds": 1.0, "start_seconds": 0.0, "workers": 3}
        numbers |= {"slow_nodes": 0, "undecided_nodes": 0, "bytes_written": 9}
        ids = {"title": "Bench", "atlas": Path("x"), "atlas_id": "a", "physics_id": "b"}
        more = {"peak_memory_bytes": None, "relabelled": False, "stopped": stopped}
        return RunReport(**ids, **numbers, **more)

    monkeypatch.setattr("sweep.compute.run.run_sweep", run_sweep)
    path = tmp_path / "bench.toml"
    path.write_text(CONFIG)
    options = ["--until", "6:30", "--workers", "3", "--tile", "1x21x2", "--shelf", tmp_path]
    code, out, _ = run(capsys, "run", path, *options)
    assert code == expected
    assert "1 of 2 done" in out
    assert asked.pop("listener") is not None
    assert asked == {
        "title": "Bench",
        "shelf": tmp_path,
        "until": time(6, 30),
        "workers": 3,
        "tile_shape": (1, 21, 2),
    }


def test_a_run_that_only_takes_over_labels_says_so(capsys, tmp_path):
    path, shelf = tmp_path / "bench.toml", tmp_path / "shelf"
    path.write_text(CONFIG)
    run(capsys, "run", path, "--shelf", shelf)
    _, out, _ = run(capsys, "run", path, "--shelf", shelf)
    assert "Nothing to do" in out
    assert "taken over" not in out
    path.write_text(CONFIG.replace("Bench", "Second bench"))
    code, out, _ = run(capsys, "run", path, "--shelf", shelf)
    assert code == 0
    assert "title, labels, designs and cases were taken over" in " ".join(out.split())
    assert "Nothing to do" not in out


def test_a_run_with_an_end_says_when_that_is(capsys, tmp_path):
    path = tmp_path / "bench.toml"
    path.write_text(CONFIG)
    later = (datetime.now() + timedelta(hours=5)).replace(second=0, microsecond=0)  # noqa: DTZ005
    command = ["run", path, "--until", f"{later:%H:%M}", "--shelf", tmp_path / "shelf"]
    code, out, err = run(capsys, *command, "--json")
    assert code == 0
    assert datetime.fromisoformat(json.loads(out)["until"]).replace(tzinfo=None) == later
    assert f"stops by {later:%H:%M}, in 4 h 59 min" in err.splitlines()[0]
    assert json.loads(run(capsys, *command[:2], *command[-2:], "--json")[1])["until"] is None


@pytest.mark.parametrize("command", ["plan", "run"])
def test_a_shelf_that_is_a_file_is_refused_by_plan_and_run_alike(capsys, tmp_path, command):
    path, file = tmp_path / "bench.toml", tmp_path / "file"
    path.write_text(CONFIG)
    file.write_text("precious")
    for shelf in (file, file / "below"):
        code, document = ask(capsys, shelf, command, path)
        assert (code, document["where"]) == (2, [str(file)])
        assert "expected a folder, found the file" in document["message"]


def test_a_config_with_mistakes_lists_them_all_and_writes_nothing(capsys, tmp_path):
    path = tmp_path / "bad.toml"
    path.write_text(CONFIG.replace("40 Hz", "-40 Hz").replace('"p"', '"q"'))
    code, document = ask(capsys, tmp_path / "shelf", "run", path)
    assert (code, document["error"]) == (2, "config")
    assert len(document["where"]) >= 2
    assert not (tmp_path / "shelf").exists()


# --- asking ------------------------------------------------------------------------------------


def test_limits_answer_as_a_document_with_the_promised_keys(capsys, shelf):
    code, document = ask(
        capsys, shelf, "limits", "bench", "--along", "kp", "--at", "sample_rate=200"
    )
    assert code == 0
    assert {"atlas_id", "along", "unit", "rows"} <= set(document)
    (row,) = document["rows"]
    assert row["at"] == {"sample_period": 0.005}
    (interval,) = row["intervals"]
    assert interval["low"] == pytest.approx(-0.36, abs=0.01)
    assert interval["high"] == pytest.approx(0.46, abs=0.01)
    assert interval["high_between"] == pytest.approx([0.4, 0.5])
    assert (interval["high_end"], interval["high_kind"]) == ("boundary", "oscillation")
    assert interval["high_hz"] == pytest.approx(0.5 / (2 * np.pi * 0.005))


def test_limits_for_people_carry_units_ends_and_cautions(capsys, shelf):
    code, out, err = run(
        capsys, "limits", "bench", "--along", "kp", "--design", "quick", "--shelf", shelf
    )
    assert (code, err) == (0, "")
    assert "[V/um]" in out
    assert "oscillation 15.92 Hz (0.4|0.5)" in out
    assert "worst over damping 0.01 to 0.02" in out
    assert "C9 not a safety case" in " ".join(out.split())
    assert max(map(len, out.splitlines())) <= 108


def test_a_tile_that_is_missing_is_unknown_and_said_so(capsys, shelf):
    code, document = ask(capsys, shelf, "limits", "half done", "--along", "kp")
    assert code == 3
    assert document["unknown"] == document["rows"][2]["unknown"] == 42
    assert document["rows"][2]["intervals"] == []
    code, out, _ = run(capsys, "limits", "half done", "--along", "kp", "--shelf", shelf)
    assert "42 of them unknown (not computed yet); run its config again" in " ".join(out.split())
    known = ["limits", "half done", "--along", "kp", "--at", "sample_period=5ms"]
    assert ask(capsys, shelf, *known)[0] == 0


@pytest.mark.parametrize(
    "question",
    [
        ["limits", "empty", "--along", "kp"],
        ["point", "empty"],
        ["map", "empty", "-x", "kp", "-y", "sample_period", "-o", "{folder}/empty.png"],
    ],
)
def test_an_atlas_without_any_node_of_the_answer_ends_with_three(capsys, shelf, tmp_path, question):
    filled = [part.format(folder=tmp_path) for part in question]
    code, document = ask(capsys, shelf, *filled)
    assert code == 3
    assert document["unknown"] == document["nodes"]


def test_a_damaged_tile_ends_with_three_and_names_it(capsys, tmp_path):
    config = parse_config(CONFIG, folder=tmp_path, source="test")
    atlas = create_atlas(tmp_path / "bench.zarr", config, (1, 21, 2))
    tile = atlas.tiling.tile((0, 0, 0))
    stand_in.write_tile(
        atlas, tile, dict.fromkeys(config.measures, np.zeros(tile.shape, np.float32))
    )
    broken = atlas.objects.path("log_radius", tile.index)
    data = bytearray(broken.read_bytes())
    data[len(data) // 4] ^= 1
    broken.write_bytes(bytes(data))
    code, document = ask(capsys, tmp_path, "limits", "bench", "--along", "kp")
    assert (code, document["error"]) == (3, "damaged")
    assert document["where"] == [str(broken.relative_to(atlas.path))]
    assert "(the bytes do not fit their checksum)" in document["message"]


def test_a_point_shows_stored_measures_and_marks_what_is_computed_now(capsys, shelf):
    code, document = ask(capsys, shelf, "point", "bench", "--at", "kp=0.3,sample_period=5ms")
    assert code == 0
    assert document["at"] == {"sample_period": 0.005, "kp": 0.3, "damping": 0.01}
    assert set(document["measures"]) == {"log_radius", "mode_angle"}
    modes = document["computed_now"]["modes"]
    assert modes == sorted(modes, key=lambda mode: -mode["magnitude"])
    assert all({"hz", "damping", "decay_time"} <= set(mode) for mode in modes)
    assert document["computed_now"]["coefficients"]["whole_delay"] == 1
    code, out, _ = run(capsys, "point", "bench", "--design", "quick", "--shelf", shelf)
    assert code == 0
    assert "computed now" in out
    assert "damping        0.01 (nominal)" in out


def test_a_point_that_is_not_computed_is_unknown_throughout(capsys, shelf):
    code, document = ask(capsys, shelf, "point", "empty")
    assert code == 3
    assert set(document["derived"].values()) == set(document["measures"].values()) == {None}
    _, out, _ = run(capsys, "point", "empty", "--shelf", shelf)
    assert "log_radius  unknown" in out
    assert "nan" not in out


def test_a_mode_that_grows_never_decays(capsys, shelf):
    _, document = ask(capsys, shelf, "point", "bench", "--at", "kp=-1")
    modes = document["computed_now"]["modes"]
    assert {mode["decay_time"] for mode in modes if mode["magnitude"] >= 1} == {"inf"}
    assert all(mode["decay_time"] >= 0 for mode in modes if mode["magnitude"] < 1)
    _, out, _ = run(capsys, "point", "bench", "--at", "kp=-1", "--shelf", shelf)
    assert "does not decay" in out


def test_a_point_off_a_node_names_the_nearest_and_nearest_takes_it(capsys, shelf):
    at = ["point", "bench", "--at", "kp=0.32"]
    code, document = ask(capsys, shelf, *at)
    assert (code, document["error"], document["where"]) == (2, "question", ["kp"])
    assert "kp=0.3" in document["remedy"]
    code, document = ask(capsys, shelf, *at, "--nearest")
    assert (code, document["at"]["kp"], document["moved"]) == (0, 0.3, {"kp": 0.32})


def test_what_is_no_atlas_and_no_shelf_is_called_that(capsys, shelf, tmp_path):
    code, document = ask(capsys, tmp_path / "nothing", "info", "bench")
    assert (code, document["where"]) == (2, [str(tmp_path / "nothing")])
    assert "there is no such folder" in document["message"]
    code, document = ask(capsys, shelf, "info", tmp_path)
    assert (code, document["where"]) == (2, [str(tmp_path)])
    assert "found another folder" in document["message"]


def test_info_tells_the_loop_the_delay_budget_and_the_origin(capsys, shelf):
    code, out, err = run(capsys, "info", "bench", "--shelf", shelf)
    assert (code, err) == (0, "")
    words = " ".join(out.split())
    for piece in (
        "oscillator",
        "update 1 sample",
        "half sample",
        "design",
        "3 of 3 tiles",
        "quick",
    ):
        assert piece in words
    code, document = ask(capsys, shelf, "info", "half done")
    design = {"name": "quick", "values": {"sample_period": 0.005, "kp": 0.3}}
    assert document["designs"] == [design]
    assert document["cases"] == []
    assert "A control loop moves things" in document["cautions"]["C9"]
    assert (document["tiles"], document["tiles_done"], document["nodes"]) == (3, 2, 126)
    assert document["delay"] == [
        {"name": "update", "unit": "samples", "low": 1.0, "high": 1.0, "nominal": 1.0}
    ]


@pytest.mark.parametrize("ending", ["png", "svg", "pdf", "PNG"])
def test_a_map_is_written_in_the_kind_that_its_name_says(capsys, shelf, tmp_path, ending):
    path = tmp_path / f"map.{ending}"
    code, document = ask(capsys, shelf, "map", "bench", "-x", "sample_rate", "-y", "kp", "-o", path)
    assert (code, document["file"], document["x"]) == (0, str(path), "sample_period")
    starts = {"png": b"\x89PNG", "svg": b"<?xml", "pdf": b"%PDF"}
    assert path.read_bytes().startswith(starts[ending.lower()])
    assert list(tmp_path.iterdir()) == [path]


# --- terminals ---------------------------------------------------------------------------------


def shell(command, **environment):
    """Run a shell command with `sweep` standing for the program."""
    program = f"{sys.executable} -m sweep"
    return subprocess.run(
        ["bash", "-c", command.replace("sweep ", f"{program} ", 1)],
        capture_output=True,
        cwd=ROOT,
        env={**os.environ, **environment},
        timeout=60,
    )


def test_a_reader_that_leaves_early_is_no_error(shelf):
    done = shell(
        f"set -o pipefail; sweep limits bench --along kp --json --shelf '{shelf}' | head -c 1"
    )
    assert (done.returncode, done.stdout, done.stderr) == (0, b"{", b"")


def test_a_terminal_without_utf8_gets_ascii(shelf):
    for command, code in (("info half", 0), ("limits half --along kp", 3)):
        done = shell(f"sweep {command} --shelf '{shelf}'", PYTHONIOENCODING="ascii")
        assert done.returncode == code, done.stderr
        done.stdout.decode("ascii")


def test_a_file_gets_no_colour_and_a_narrow_screen_no_failure(capsys, shelf, monkeypatch):
    _, out, _ = run(capsys, "info", "bench", "--shelf", shelf)
    assert "\x1b" not in out
    from sweep.query.atlas import open_atlas
    from sweep.views.limits_table import limits_view
    from sweep.views.sheet import to_text
    from sweep.views.tables import info_view

    atlas = open_atlas("bench", shelf)
    for view in (info_view(atlas.facts()), limits_view(atlas.limits("kp"))):
        for width in (20, 37, 61):
            text = to_text(view, width=width, terminal=False)
            assert max(map(len, text.splitlines())) <= width
        monkeypatch.setenv("TERM", "xterm-256color")
        assert "\x1b[" in to_text(view, width=80, terminal=True)
        monkeypatch.setenv("NO_COLOR", "1")
        assert "\x1b[3" not in to_text(view, width=80, terminal=True)
        monkeypatch.delenv("NO_COLOR")


def test_the_program_runs_as_a_module_and_tells_its_version():
    done = shell("sweep --version")
    assert done.returncode == 0
    assert done.stdout.startswith(b"sweep ")
