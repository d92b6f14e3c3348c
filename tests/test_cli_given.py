"""What is given on the command line counts, or is refused: nothing is passed over without a word.

A build gate fills in shell variables; one that is not set must never make another question of it.
"""

from __future__ import annotations

import pytest

from sweep.__main__ import main


def run(capsys, *arguments):
    """Exit code and stderr of one command; stdout must stay empty."""
    code = main([str(argument) for argument in arguments])
    captured = capsys.readouterr()
    assert captured.out == ""
    return code, captured.err


LIMITS = ("limits", "bench", "--along", "kp")
JUDGE = ("judge", "bench")
MAP = ("map", "bench", "-x", "kp", "-y", "kd")
EMPTY = [
    (*LIMITS, "--design", ""),
    (*LIMITS, "--case", ""),
    (*LIMITS, "--each", ""),
    (*LIMITS, "--at", ""),
    (*LIMITS, "--shelf", ""),
    ("limits", "bench", "--along", ""),
    ("point", "bench", "--design", ""),
    (*MAP, "-o", "a.png", "--design", ""),
    ("map", "bench", "-y", "kd", "-o", "a.png", "-x", ""),
    (*MAP, "-o", ""),
    ("robust", "bench", "--case", ""),
    ("robust", "bench", "--design", ""),
    ("robust", "bench", "--around", ""),
    ("robust", "bench", "--around", " "),
    ("robust", "bench", "--shake", ""),
    ("choose", "bench", "--best", ""),
    ("choose", "bench", "--case", ""),
    (*JUDGE, "--design", ""),
    (*JUDGE, "--case", ""),
    (*JUDGE, "--schedule", ""),
    (*JUDGE, "--weights", ""),
    (*JUDGE, "--confidence", ""),
    ("run", "a.toml", "--until", ""),
    ("run", "a.toml", "--shelf", ""),
]


@pytest.mark.parametrize("words", EMPTY, ids=" ".join)
def test_an_empty_value_is_refused_and_names_its_option(capsys, words):
    code, err = run(capsys, *words)
    assert code == 2
    assert f"{words[-2]} is empty" in err
    assert "leave the option out" in err


@pytest.mark.parametrize(
    ("words", "name"),
    [
        (("info", ""), "ATLAS"),
        (("judge", ""), "ATLAS"),
        (("new", ""), "FILE"),
        (("plan", ""), "CONFIG"),
    ],
)
def test_an_empty_argument_is_refused_by_name(capsys, words, name):
    code, err = run(capsys, *words)
    assert code == 2
    assert f"{name} is empty" in err


@pytest.mark.parametrize("names", ["quick,", ",quick", "quick,,slow"])
def test_an_empty_name_among_others_is_refused(capsys, tmp_path, names):
    code, err = run(capsys, *JUDGE, "--design", names, "--shelf", tmp_path)
    assert code == 2
    assert "--design" in err


TWICE = [
    (LIMITS, "--along", "kd"),
    ((*LIMITS, "--design", "a"), "--design", "b"),
    ((*LIMITS, "--case", "a"), "--case", "b"),
    ((*LIMITS, "--rows", "3"), "--rows", "4"),
    ((*LIMITS, "--shelf", "a"), "--shelf", "b"),
    (("robust", "bench", "--case", "a"), "--case", "b"),
    (("robust", "bench", "--around", "a"), "--around", "b"),
    (("choose", "bench", "--case", "a"), "--case", "a"),
    (("choose", "bench", "--best", "radius"), "--best", "log_radius"),
    (("choose", "bench", "--rows", "9"), "--rows", "8"),
    ((*JUDGE, "--confidence", "0.9"), "--confidence", "0.5"),
    ((*MAP, "-o", "a.png"), "-o", "b.png"),
    ((*MAP, "-o", "a.png"), "-x", "damping"),
    ((*MAP, "-o", "a.png"), "-y", "damping"),
]


@pytest.mark.parametrize(("words", "option", "value"), TWICE)
def test_an_option_for_one_value_is_refused_when_it_is_given_twice(capsys, words, option, value):
    code, err = run(capsys, *words, option, value)
    assert code == 2
    assert f"{option} is given 2 times" in err


def test_an_option_given_three_times_is_counted_whole(capsys):
    _, err = run(capsys, *JUDGE, "--confidence", "0.9", "--confidence=0.8", "--confidence", "0.7")
    assert "--confidence is given 3 times" in err


@pytest.mark.parametrize("option", ["--design", "--case"])
@pytest.mark.parametrize("given", [["first,first"], ["first", "first"]])
def test_a_name_given_twice_to_judge_is_refused(capsys, option, given):
    words = [word for name in given for word in (option, name)]
    code, err = run(capsys, *JUDGE, *words)
    assert code == 2
    assert f"{option} names first 2 times" in err


@pytest.mark.parametrize("command", [LIMITS, JUDGE, ("choose", "bench")])
def test_an_unknown_option_points_to_the_help_of_its_command(capsys, command):
    code, err = run(capsys, *command, "--bogus")
    assert code == 2
    assert "--bogus" in err
    assert f"see `sweep {command[0]} --help`" in err
