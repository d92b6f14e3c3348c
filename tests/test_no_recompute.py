"""A question never computes a loop: it is answered with the physics taken out of the house."""

from __future__ import annotations

import inspect
import json
import subprocess
import sys
from pathlib import Path

import pytest
from checks_atlas import sweep_atlas

from sweep.query.atlas import Atlas, open_atlas

CONFIG = """
title = "Asked only"
[plant]
kind = "oscillator"
natural_frequency = "40 Hz"
[controller]
kind = "pi"
[delay]
compute = "3 ms"
[axes.sample_period]
values = ["2 ms", "5 ms", "6 ms"]
[axes.kp]
values = [-0.4, -0.2, 0, 0.2]
[axes.ki]
values = [-5, 0, 5, 10]
[axes.damping]
values = [0.05, 0.1, 0.2]
nominal = 0.1
[axes.unit]
rows = [{label = "A", gain = 0.9}, {label = "B", gain = 1.1}]
[designs.released]
sample_period = "5 ms"
kp = -0.2
ki = 5
[cases.cold]
over.damping = [0.05, 0.1]
require.max_decay_time = "1 s"
"""

QUESTIONS = {
    "limits": (
        {"along": "kp"},
        {"along": "ki", "at": {"sample_period": 0.0055, "kp": -0.3}, "case": "cold"},
        {"along": "damping", "design": "released", "each": ["unit"]},
    ),
    "point": ({}, {"design": "released"}, {"at": {"kp": -0.19}, "nearest": True}),
    "plane": ({"x": "kp", "y": "sample_period"}, {"x": "damping", "y": "ki", "design": "released"}),
    "robust": (
        {},
        {"case": "cold", "around": "released"},
        {"at": {"kp": -0.1}, "shake": {"sample_period": "10%"}, "require": {"max_radius": 0.99}},
        {"shake": {"kp": 0.1}, "require": {"min_dominant_damping": 0.05}, "over": {"unit": "A"}},
    ),
    "judge": (
        {},
        {"design": "released", "case": "cold", "shake": {"kp": "5%"}},
        {"at": {"sample_period": 0.0055, "kp": -0.1, "ki": 6}, "over": {"damping": "0.05:0.15"}},
    ),
    "choose": (
        {},
        {"case": "cold", "price": True},
        {"best": "gain_box", "shake": {"kp": 0.01}, "within": {"sample_period": "5ms:6ms"}},
    ),
}
"""By method, everything that an atlas can be asked."""

WITHOUT_ARITHMETIC = {"facts"}
"""Methods that read metadata only."""


def ask_all(atlas):
    """Every answer as a program reads it, and the values of every dataset."""
    found = {}
    for method, questions in QUESTIONS.items():
        for number, asked in enumerate(questions):
            answer = getattr(atlas, method)(**asked)
            document = answer.to_json()
            if method == "robust":
                values = answer.dataset.to_array("one").astype(str).to_numpy()
                document = {"document": document, "dataset": values.tolist()}
            found[f"{method} {number}"] = document
    return json.loads(json.dumps(found, allow_nan=False))


@pytest.fixture(scope="module")
def asked(tmp_path_factory):
    """A folder with an atlas from the real kernel, and what it answers when all is in place."""
    folder = tmp_path_factory.mktemp("asked")
    atlas = sweep_atlas(CONFIG, folder)
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("SWEEP_MEMO", "0")
        return Path(atlas.stored.path), ask_all(atlas)


def test_every_question_that_an_atlas_answers_is_asked_here():
    methods = {
        name
        for name, member in inspect.getmembers(Atlas, inspect.isfunction)
        if not name.startswith("_")
    }
    assert methods == set(QUESTIONS) | WITHOUT_ARITHMETIC


def test_the_answers_say_something(asked):
    _, answers = asked
    robust = answers["robust 1"]["document"]
    assert robust["meets"] > 0
    assert robust["fails"] > 0
    assert robust["excluded"] == 16
    assert any(row["intervals"] for row in answers["limits 0"]["rows"])
    assert answers["judge 1"]["designs"][0]["lines"]
    assert any(row["meets"] for row in answers["choose 1"]["rows"])
    assert answers["choose 1"]["price"]


def must_not_run(*_arguments, **_named):
    raise AssertionError("a question computed a loop")


def take_out_the_physics(patch):
    """Let every function of loop and measures raise, under every name that it is imported by."""
    import sweep.loop.closed_loop
    import sweep.loop.state_space
    import sweep.measures.reference
    import sweep.measures.registry  # noqa: F401 - each import binds the same name

    def physical(member):
        home = getattr(member, "__module__", None) or ""
        is_function = inspect.isfunction(member) or hasattr(member, "py_func")
        return is_function and home.startswith(("sweep.loop", "sweep.measures"))

    replaced = set()
    for name, module in list(sys.modules.items()):
        if name.startswith("sweep"):
            for key, member in list(vars(module).items()):
                if physical(member):
                    patch.setattr(module, key, must_not_run)
                    replaced.add(f"{member.__module__}.{member.__name__}")
    return replaced


def test_no_question_reaches_a_kernel_or_the_slow_path(asked, monkeypatch, tmp_path):
    path, expected = asked
    monkeypatch.setenv("SWEEP_MEMO", "0")
    replaced = take_out_the_physics(monkeypatch)
    assert replaced >= {
        "sweep.measures.registry.compute_block",
        "sweep.measures.radius.compute_radius",
        "sweep.loop.closed_loop.realise",
        "sweep.loop.closed_loop.modes",
        "sweep.loop.state_space.closed_loop_change",
        "sweep.measures.reference.compute_reference",
    }
    with pytest.raises(AssertionError, match="a question computed a loop"):
        sweep_atlas(CONFIG, tmp_path)
    assert ask_all(open_atlas(path)) == expected


FORBIDDEN = ("sweep.loop", "sweep.measures", "sweep.compute", "numba", "dask.distributed")

ALONE = f"""
import json, sys
from importlib.abc import MetaPathFinder

class Fence(MetaPathFinder):
    def find_spec(self, name, path=None, target=None):
        if any(name == one or name.startswith(one + ".") for one in {FORBIDDEN!r}):
            raise ImportError(f"a question imports {{name}}")
        return None

sys.meta_path.insert(0, Fence())
"""

IN_PYTHON = f"""
from sweep.query.atlas import open_atlas
QUESTIONS = {QUESTIONS!r}
{inspect.getsource(ask_all)}
print(json.dumps(ask_all(open_atlas(sys.argv[1]))))
"""

COMMANDS = (
    ("limits", "ATLAS", "--along", "kp", "--case", "cold"),
    ("robust", "ATLAS", "--case", "cold", "--shake", "kp=0.1", "--around", "released"),
    ("judge", "ATLAS", "--design", "released", "--case", "cold"),
    ("choose", "ATLAS", "--case", "cold", "--price"),
)

ON_THE_COMMAND_LINE = f"""
from sweep.__main__ import main
for command in {COMMANDS!r}:
    words = [sys.argv[1] if word == "ATLAS" else word for word in command]
    for further in ([], ["--json"]):
        code = main([*words, *further])
        assert code in (0, 1), (command, code)
print("all asked")
"""


def alone(code, path, tmp_path, *, memo="0"):
    """Stdout of a process in which the physics cannot be imported."""
    result = subprocess.run(
        [sys.executable, "-c", ALONE + code, str(path)],
        capture_output=True,
        text=True,
        check=False,
        env={
            "PATH": "",
            "PYTHONPATH": str(Path(__file__).parent.parent),
            "XDG_CACHE_HOME": str(tmp_path),
            "SWEEP_MEMO": memo,
        },
    )
    assert result.returncode == 0, result.stderr
    return result.stdout


def test_the_fence_holds(asked, tmp_path):
    path, _ = asked
    for name in FORBIDDEN:
        code = f"try:\n    import {name}\nexcept ImportError as error:\n    print(error)"
        assert f"a question imports {name}" in alone(code, path, tmp_path)


def test_every_question_is_answered_where_the_physics_cannot_be_imported(asked, tmp_path):
    path, expected = asked
    assert json.loads(alone(IN_PYTHON, path, tmp_path)) == expected


def test_every_deciding_command_works_where_the_physics_cannot_be_imported(asked, tmp_path):
    path, _ = asked
    assert "all asked" in alone(ON_THE_COMMAND_LINE, path, tmp_path, memo="1")
