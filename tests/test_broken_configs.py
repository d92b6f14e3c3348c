"""Broken configs: each is refused with exit code 2, a path and a remedy, and writes nothing."""

import copy
import json
import os
import random
import tempfile
import tomllib
from pathlib import Path

import pytest
from config_text import BASE
from hypothesis import given, settings
from hypothesis import strategies as st

from sweep.config import config_from_document, load_config
from sweep.config.document import MAX_BYTES
from sweep.config.findings import MOST_PROBLEMS
from sweep.errors import ConfigError, Problem

VALUES = "values = [0.01, 0.02, 0.05]"

_REPLACED: list[tuple[str, str, str]] = [
    ("title a number", 'title = "Test stand"', "title = 3"),
    ("title empty", '"Test stand"', '""'),
    ("title missing", 'title = "Test stand"\n', ""),
    ("title of two lines", '"Test stand"', '"a\\nb"'),
    ("title a novel", '"Test stand"', f'"{"x" * 5000}"'),
    ("title misspelt", "title =", "tittle ="),
    ("plant a number", '[plant]\nkind = "oscillator"\nnatural_frequency = "50 Hz"', "plant = 3"),
    ("plant missing", '[plant]\nkind = "oscillator"\nnatural_frequency = "50 Hz"\n', ""),
    ("plant doubled", "[controller]", '[plant]\nkind = "lag"\n[controller]'),
    ("plant kind misspelt", '"oscillator"', '"oscilator"'),
    ("plant kind missing", 'kind = "oscillator"\n', ""),
    ("plant kind a list", '"oscillator"', '["oscillator"]'),
    ("plant kind a table", '"oscillator"', "{a = 1}"),
    ("plant without parameter", 'natural_frequency = "50 Hz"\n', ""),
    ("plant key misspelt", "natural_frequency =", "natural_freq ="),
    ("plant key of another kind", '"50 Hz"', '"50 Hz"\ntime_constant = 1'),
    ("plant label a number", '"50 Hz"', '"50 Hz"\noutput_unit = 3'),
    ("frequency negative", '"50 Hz"', '"-50 Hz"'),
    ("frequency zero", '"50 Hz"', "0"),
    ("frequency in seconds", '"50 Hz"', '"50 ms"'),
    ("frequency with a wrong letter", '"50 Hz"', '"50 hz"'),
    ("frequency with a comma", '"50 Hz"', '"50,5 Hz"'),
    ("frequency true", '"50 Hz"', "true"),
    ("frequency inf", '"50 Hz"', "inf"),
    ("frequency nan", '"50 Hz"', "nan"),
    ("frequency text nan", '"50 Hz"', '"nan Hz"'),
    ("frequency huge", '"50 Hz"', "1e999"),
    ("frequency beyond any exponent", '"50 Hz"', f"1e{'9' * 40}"),
    ("frequency vanishing", '"50 Hz"', '"1e-999 Hz"'),
    ("frequency a date", '"50 Hz"', "2020-01-01"),
    ("frequency an array", '"50 Hz"', "[50]"),
    ("frequency whole without end", '"50 Hz"', "9" * 5000),
    ("frequency hexadecimal without end", '"50 Hz"', "0x" + "f" * 5000),
    ("gain in seconds", '"50 Hz"', '"50 Hz"\ngain = "1 s"'),
    ("controller missing", '[controller]\nkind = "pd"\nkd = "1 ms"\n', ""),
    ("controller kind unknown", 'kind = "pd"', 'kind = "lqg"'),
    ("controller key of another kind", 'kd = "1 ms"', 'kd = "1 ms"\nki = 3'),
    ("integral rule for pd", 'kd = "1 ms"', 'kd = "1 ms"\nintegral = "forward"'),
    ("integral rule unknown", 'kind = "pd"', 'kind = "pid"\nki = 1\nintegral = "backwards"'),
    ("code period zero", 'kd = "1 ms"', 'kd = "1 ms"\ncode_period = 0'),
    ("derivative filter negative", 'kd = "1 ms"', 'kd = "1 ms"\nderivative_filter = -1'),
    ("delay a number", '[delay]\nupdate = "1 sample"', "delay = 3"),
    ("delay negative", '"1 sample"', '"-1 sample"'),
    ("delay in Hz", '"1 sample"', '"1 Hz"'),
    ("delay too long", '"1 sample"', '"300 samples"'),
    ("delay too long in seconds", '"1 sample"', "0.3"),
    ("delay name with capitals", "update =", "Update ="),
    ("delay name of a measure", "update =", "log_radius ="),
    ("delay name endless", "update =", f"{'a' * 41} ="),
    ("delay a table", '"1 sample"', '{a = "1 sample"}'),
    ("axes missing", BASE[BASE.index("[axes.sample") : BASE.index("[designs")], ""),
    ("axes a number", BASE[BASE.index("[axes.sample") :], "axes = 3\n"),
    ("axis a number", "[axes.damping]\nvalues = [0.01, 0.02, 0.05]", "[axes]\ndamping = 3"),
    ("axis unknown", "[axes.damping]", "[axes.dampening]"),
    ("axis with capitals", "[axes.damping]", "[axes.Damping]"),
    ("axis name quoted", "[axes.damping]", '[axes."a b"]'),
    ("axis name with control characters", "[axes.damping]", '[axes."a\\u0007\\u001b"]'),
    ("axis name of a measure", "[axes.damping]", '[axes.mode_angle]\nsets = "plant.damping"'),
    ("axis empty", VALUES, ""),
    ("axis of two forms", "count = 21", "count = 21\nvalues = [1]"),
    ("axis with an unknown key", "count = 21", "count = 21\ncolour = 3"),
    ("axis doubled by a fixed value", 'kd = "1 ms"', 'kd = "1 ms"\nkp = 3'),
    (
        "axis doubled by another",
        "[axes.kp]",
        '[axes.z]\nsets = "plant.damping"\nvalues = [1]\n[axes.kp]',
    ),
    ("axis doubled by the rate", "[axes.kp]", "[axes.sample_rate]\nvalues = [300]\n[axes.kp]"),
    ("axis that sets nothing known", "count = 21", 'count = 21\nsets = "plant.mass"'),
    ("axis that sets a number", "count = 21", "count = 21\nsets = 3"),
    ("axis named after another", "count = 21", 'count = 21\nsets = "plant.gain"'),
    ("axis role unknown", "count = 21", 'count = 21\nrole = "mine"'),
    ("count of 1e30 nodes", "count = 21", f"count = {10**30}"),
    ("count of 1e30 nodes as a float", "count = 21", "count = 1e30"),
    ("count of a million and one", "count = 21", "count = 1_000_001"),
    ("count zero", "count = 21", "count = 0"),
    ("count negative", "count = 21", "count = -5"),
    ("count a text", "count = 21", 'count = "21"'),
    ("count true", "count = 21", "count = true"),
    ("count missing", "count = 21\n", ""),
    ("count and step", "count = 21", "count = 21\nstep = 0.1"),
    ("step of 1e30 nodes", "count = 21", "step = 2e-30"),
    ("step negative", "count = 21", "step = -0.1"),
    ("step zero", "count = 21", "step = 0"),
    ("step that misses the stop", "count = 21", "step = 0.3"),
    ("start above stop", "start = -1\n", "start = 2\n"),
    ("start equal to stop", "start = -1\n", "start = 1\n"),
    ("start missing", "start = -1\n", ""),
    ("start nan", "start = -1\n", "start = nan\n"),
    ("stop inf", "stop = 1\n", "stop = inf\n"),
    ("log from a negative start", "count = 21", 'count = 21\nspacing = "log"'),
    ("log with a step", "count = 21", 'step = 1\nspacing = "log"'),
    ("spacing unknown", "count = 21", 'count = 21\nspacing = "cubic"'),
    ("period negative", 'start = "1 ms"', 'start = "-1 ms"'),
    ("period zero", 'start = "1 ms"', "start = 0"),
    ("period in samples", 'start = "1 ms"', 'start = "1 sample"'),
    ("values empty", "[0.01, 0.02, 0.05]", "[]"),
    ("values a number", "[0.01, 0.02, 0.05]", "0.01"),
    ("values doubled", "[0.01, 0.02, 0.05]", "[0.01, 0.01]"),
    ("values falling", "[0.01, 0.02, 0.05]", "[0.05, 0.01, 0.02]"),
    ("values of several types", "[0.01, 0.02, 0.05]", '[0.01, true, "x", {}, []]'),
    ("values all wrong", "[0.01, 0.02, 0.05]", '["x"' + ', "x"' * 5000 + "]"),
    ("values negative", "[0.01, 0.02, 0.05]", "[-0.01, 0.02]"),
    ("include outside", "count = 21", "count = 21\ninclude = [7]"),
    ("include a number", "count = 21", "count = 21\ninclude = 0.5"),
    ("nominal outside", "count = 21", "count = 21\nnominal = 7"),
    ("nominal in seconds", "count = 21", 'count = 21\nnominal = "1 s"'),
    ("centre without within", VALUES, "centre = 0.1\ncount = 3"),
    ("centre reaching below zero", VALUES, 'centre = 0.1\nwithin = "150 %"\ncount = 3'),
    ("rows empty", VALUES, "rows = []"),
    ("rows without labels", VALUES, "rows = [{damping = 1}]"),
    (
        "rows with a doubled label",
        VALUES,
        'rows = [{label = "a", gain = 1}, {label = "a", gain = 2}]',
    ),
    ("rows that differ", VALUES, 'rows = [{label = "a", gain = 1}, {label = "b", damping = 2}]'),
    ("rows of numbers", VALUES, "rows = [1, 2]"),
    ("table missing", VALUES, 'table = "missing.csv"'),
    ("table outside", VALUES, 'table = "../../etc/passwd"'),
    ("table absolute", VALUES, 'table = "/etc/passwd"'),
    ("table a number", VALUES, "table = 3"),
    (
        "two units of one delay part",
        "[axes.kp]",
        '[axes.w]\nsets = "delay.w"\nvalues = ["1 us", "1 sample"]\n[axes.kp]',
    ),
    (
        "an axis of 99,999,999 nodes",
        "count = 21",
        "count = 90000\n[axes.gain]\nstart = 1\nstop = 2\ncount = 99999999",
    ),
    ("design axis missing", "kp = 0.2\n", ""),
    ("design with a tolerance axis", "kp = 0.2", "kp = 0.2\ndamping = 0.01"),
    ("design outside the axis", "kp = 0.2", "kp = 20"),
    ("design a number", "[designs.released]", "[designs]\nother = 3\n[designs.released]"),
    ("case with a design axis", "over.damping", "over.kp"),
    ("case outside the axis", "[0.01, 0.02]\n", "[0.001, 0.02]\n"),
    ("case range reversed", "[0.01, 0.02]\n", "[0.02, 0.01]\n"),
    ("requirement unknown", "require.max_decay_time", "require.max_overshoot"),
    ("requirement in volts", '"80 ms"', '"80 V"'),
    ("requirement nan", '"80 ms"', "nan"),
    ("measure unknown", "[designs.released]", '[measures]\nnames = ["beauty"]\n[designs.released]'),
    ("section unknown", "[designs.released]", "[desings.released]"),
    ("key twice", "count = 21", "count = 21\ncount = 22"),
    ("quote missing", '"Test stand"', '"Test stand'),
    ("bracket missing", "[plant]", "[plant"),
    ("value missing", "count = 21", "count ="),
]
"""(name, text of BASE, what stands there instead)."""


def _replace(old: str, new: str) -> bytes:
    assert old in BASE, old
    return BASE.replace(old, new, 1).encode()


def _scrambled(count: int) -> list[tuple[str, bytes]]:
    """BASE with a handful of characters replaced at random, always by some that no TOML holds."""
    chance = random.Random(20)
    cases = []
    for number in range(count):
        letters = list(BASE)
        for _ in range(5):
            letters[chance.randrange(len(letters))] = chance.choice("\x00\x07\x1b\x7f")
        cases.append((f"scrambled {number}", "".join(letters).encode()))
    return cases


BROKEN: list[tuple[str, bytes]] = [
    *((name, _replace(old, new)) for name, old, new in _REPLACED),
    ("empty file", b""),
    ("only a comment", b"# nothing here\n"),
    ("zero bytes", bytes(1000)),
    ("binary junk", bytes(range(256)) * 50),
    ("a picture's first bytes", b"\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR"),
    ("UTF-16", BASE.encode("utf-16")),
    ("Latin-1", BASE.replace("Test stand", "Prüfstand").encode("latin-1")),
    ("a surrogate", b'title = "\xed\xa0\x80"'),
    ("JSON", b'{"title": "x"}'),
    ("a CSV", b"label,damping\nA,0.1\n"),
    ("HTML", b"<!doctype html><title>x</title>"),
    ("a word without end", b"a" * 1_000_000),
    ("larger than any config", b"#" * (MAX_BYTES + 1)),
    ("arrays nested 100,000 deep", b"a = " + b"[" * 100_000 + b"]" * 100_000),
    ("arrays nested 50 deep", BASE.encode() + b"[measures]\nnames = " + b"[" * 50 + b"]" * 50),
    ("tables nested 10,000 deep", b"a = " + b"{a = " * 10_000),
    ("a key of 1,000,000 parts", b"a" + b".a" * 1_000_000 + b" = 1"),
    ("a quoted key of 100,000 parts", b'"a"' + b" . 'a'" * 100_000 + b" = 1"),
    ("a header of 1,000,000 parts", b"[a" + b".a" * 1_000_000 + b"]"),
    ("5,000 unknown keys", b"".join(b"key%d = 1\n" % n for n in range(5000)) + BASE.encode()),
    ("900 unknown keys", b"".join(b"key%d = 1\n" % n for n in range(900)) + BASE.encode()),
    ("5,000 unknown axes", b"".join(b"[axes.a%d]\nvalues = [1]\n" % n for n in range(5000))),
    *_scrambled(10),
]
"""Configs with at least one mistake each, as (name, bytes of the file)."""

IDS = [name for name, _ in BROKEN]


def check_refused(path) -> ConfigError:
    """The error of a config that must be refused, after checking that it says enough."""
    with pytest.raises(ConfigError) as caught:
        load_config(path)
    error = caught.value
    assert error.exit_code == 2
    assert error.remedy
    assert 1 <= len(error.problems) <= MOST_PROBLEMS + 1
    for problem in error.problems:
        assert problem.found, problem
        assert problem.expected, problem
        assert problem.remedy, problem
        assert len(str(problem)) < 2000, problem
        assert str(problem).replace("\n      -> ", "").isprintable(), problem
    return error


def test_there_are_at_least_a_hundred_broken_configs_with_distinct_names():
    assert len(BROKEN) >= 100
    assert len(set(IDS)) == len(IDS)


def test_the_config_that_is_broken_here_is_sound(tmp_path):
    (tmp_path / "sound.toml").write_text(BASE)
    load_config(tmp_path / "sound.toml")


@pytest.mark.parametrize(("name", "data"), BROKEN, ids=IDS)
def test_a_broken_config_is_refused_with_path_and_remedy_and_nothing_is_written(
    name, data, tmp_path, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "broken.toml").write_bytes(data)
    error = check_refused("broken.toml")
    assert error.source == "broken.toml"
    assert [path.name for path in tmp_path.iterdir()] == ["broken.toml"]
    replaced = {case: new for case, _, new in _REPLACED}
    if name in replaced and "TOML" not in error.message:
        assert all(problem.path for problem in error.problems[:MOST_PROBLEMS]), error


def test_mistakes_beyond_the_first_two_hundred_are_counted(tmp_path):
    (tmp_path / "broken.toml").write_bytes(dict(BROKEN)["900 unknown keys"])
    error = check_refused(tmp_path / "broken.toml")
    assert error.problems[-1].found == "700 more mistakes"


def test_all_mistakes_are_reported_at_once(tmp_path):
    text = BASE.replace('"50 Hz"', '"-50 Hz"').replace("count = 21", "count = 1")
    text = text.replace("0.05]", "true]").replace("max_decay_time", "max_decai_time")
    (tmp_path / "broken.toml").write_text(text.replace('"1 sample"', '"1 Hz"'))
    assert {problem.path for problem in check_refused(tmp_path / "broken.toml").problems} == {
        "plant.natural_frequency",
        "axes.kp.count",
        "axes.damping.values[2]",
        "cases.normal.require.max_decai_time",
        "delay.update",
    }


@pytest.mark.parametrize("name", ["missing.toml", "folder", "pipe", "locked/x.toml", "nul\x00"])
def test_what_is_no_readable_file_is_refused(name, tmp_path):
    (tmp_path / "folder").mkdir()
    os.mkfifo(tmp_path / "pipe")
    check_refused(tmp_path / name)


@given(st.binary(max_size=300))
@settings(max_examples=100, deadline=None)
def test_arbitrary_bytes_are_refused(data):
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "broken.toml"
        path.write_bytes(data)
        check_refused(path)


def find_problems(document: dict) -> tuple[Problem, ...]:
    """The mistakes of a document; any other exception is a defect."""
    try:
        config_from_document(json.dumps(document))
    except ConfigError as error:
        return error.problems
    return ()


values = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.sampled_from(
        ["", "1", "5 ms", "1 sample", "50 Hz", "nan", "A", "design", "log", "plant.damping"]
    ),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(["label", "damping", "kp", "a", "over"]), inner, max_size=3
        )
    ),
    max_leaves=5,
)


@given(st.data())
@settings(max_examples=200, deadline=None)
def test_any_value_in_any_place_gives_a_config_or_a_list_of_mistakes(data):
    document = tomllib.loads(BASE)
    for _ in range(data.draw(st.integers(1, 3))):
        place = document
        while True:
            key = data.draw(st.sampled_from(sorted(place)))
            if not isinstance(place[key], dict) or not place[key] or data.draw(st.booleans()):
                break
            place = place[key]
        new = data.draw(st.sampled_from(["value", "drop", "rename", "add"]))
        if new in ("drop", "rename"):
            value = place.pop(key)
            if new == "rename":
                place[key[:-1]] = value
        else:
            place[key if new == "value" else "extra"] = copy.deepcopy(data.draw(values))
        if not document:
            break
    assert all(one.found and one.expected and one.remedy for one in find_problems(document))


def test_a_null_in_a_stored_config_is_refused_where_it_stands():
    document = tomllib.loads(BASE)
    name = next(iter(document["axes"]))
    document["axes"][name]["count"] = None
    assert [one.path for one in find_problems(document)] == [f"axes.{name}.count"]
