"""Tables that a question brings along: schedules of designs and weights, sound and broken."""

from __future__ import annotations

import memory_atlas
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sweep.errors import QuestionError
from sweep.grid import Grid
from sweep.query.judging.judge import AskedDesign
from sweep.query.judging.schedule import MAX_DESIGNS, read_schedule, read_weights

GRID = Grid(
    (
        memory_atlas.axis("sample_period", [0.001, 0.002, 0.004], unit="s"),
        memory_atlas.axis("kp", [-1.0, 0.0, 1.0], sets="controller.kp"),
        memory_atlas.axis("ki", [0.0, 1.0, 2.0], sets="controller.ki", unit="1/s"),
        memory_atlas.axis(
            "bus", [0.0, 0.5, 1.0], sets="delay.bus", unit="samples", role="tolerance"
        ),
        memory_atlas.rows("unit", ["A", "B 2", "C"], {"plant.gain": [1.0, 2.0, 3.0]}),
    )
)


def schedule(tmp_path, content):
    path = tmp_path / "gains.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return read_schedule(path, GRID)


def refused(tmp_path, content):
    with pytest.raises(QuestionError) as caught:
        schedule(tmp_path, content)
    assert "\n" not in caught.value.message
    assert len(caught.value.message) < 600
    assert caught.value.remedy
    assert "gains.csv" in caught.value.message
    return caught.value


# --- sound ones ---------------------------------------------------------------------------------


def test_each_row_is_a_design_with_units_from_the_header(tmp_path):
    found = schedule(tmp_path, "label,sample_period [ms],kp,ki\nslow,4,0.5,1\nfast,1,-1,0\n")
    assert found == (
        AskedDesign("slow", {"sample_period": "4 ms", "kp": "0.5", "ki": "1"}),
        AskedDesign("fast", {"sample_period": "1 ms", "kp": "-1", "ki": "0"}),
    )


def test_without_labels_rows_are_numbered_and_blank_lines_do_not_count(tmp_path):
    found = schedule(tmp_path, "\ufeffkp,ki,sample_rate [Hz]\r\n1,1,500\r\n\r\n0,1,1000\r\n")
    assert [design.name for design in found] == ["row 1", "row 2"]
    assert found[1].at["sample_rate"] == "1000 Hz"


def test_tolerances_of_a_row_narrow_its_box_and_an_empty_cell_does_not(tmp_path):
    text = "kp,ki,sample_period,bus,unit\n1,1,1ms,0:0.5,B 2\n1,1,2ms,0.5,\n1,1,2ms,,C\n"
    found = [design.over for design in schedule(tmp_path, text)]
    assert found == [{"bus": "0:0.5", "unit": "B 2"}, {"bus": "0.5"}, {"unit": "C"}]


def test_a_range_takes_its_unit_from_the_header(tmp_path):
    (found,) = schedule(tmp_path, "kp,ki,sample_period,bus [samples]\n1,1,1ms,0 : 1\n")
    assert found.over == {"bus": "0 samples:1 samples"}


# --- broken ones --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "line", "problem"),
    [
        ("kp,ki,sample_period\n1,1\n", 2, "2 cells; expected 3"),
        ("kp,ki,sample_period\n1,1,1ms,4\n", 2, "4 cells; expected 3"),
        ("kp,ki,sample_period\n1,1,1ms\n1,one,1ms\n", 3, "one"),
        ("kp,ki,sample_period\n1,1,1ms\n\n1,,1ms\n", 4, "an empty cell for ki"),
        ("kp,ki,sample_period [V]\n1,1,1\n", 1, "the column sample_period has the unit V; expec"),
        ("kp,ki,sample_rate [ms]\n1,1,1\n", 1, "the column sample_rate has the unit ms; expected"),
        ("kp [m],ki,sample_period\n1,1,1ms\n", 1, "the column kp has the unit m; expected a pla"),
        ("kp,ki,sample_period [ms]\n1,1,2 Hz\n", 2, "found 2 Hz under sample_period [ms]; expect"),
        ("kp,ki,sample_period [ms]\n1,1,2 ms\n", 2, "found 2 ms under sample_period [ms]; expect"),
        ("kp,ki,sample_period [ms]\n1,1,two\n", 2, "two"),
        ("kp,ki,sample_period,bus [samples]\n1,1,1ms,0:1 s\n", 2, "found 1 s under bus [samples]"),
        ("kp,ki,sample_period\n1,1,1 Hz\n", 2, "Hz"),
        ("kp,ki,sample_period\n3,1,1ms\n", 2, "the axis runs from"),
        ("kp,ki,sample_period\n1,0.5,1ms\n", 2, "the term is absent"),
        ("kp,ki,sample_period\nnan,1,1ms\n", 2, "nan"),
        ("kp,ki\n1,1\n", 1, "no column for sample_period"),
        ("kp,ki,sample_period,kp\n1,1,1ms,1\n", 1, "a second column for kp"),
        ("kp,ki,sample_period,sample_rate\n1,1,1ms,1kHz\n", 1, "a second column for sample_period"),
        ("label,kp,ki,sample_period,label\na,1,1,1ms,b\n", 1, "a second column for label"),
        ("kp,ki,sample_period,kd\n1,1,1ms,1\n", 1, "no such axis"),
        ("kp,ki,sample_period,\n1,1,1ms,1\n", 1, "names no column"),
        ("kp;ki;sample_period\n1;1;1ms\n", 1, "names no column"),
        ("kp,ki,sample_period,unit [m]\n1,1,1ms,A\n", 1, "has no unit"),
        ("kp,ki,sample_period,unit\n1,1,1ms,D\n", 2, "no such row"),
        ("kp,ki,sample_period,bus\n1,1,1ms,1:0\n", 2, "lies above"),
        ("kp,ki,sample_period,bus\n1,1,1ms,0:1:2\n", 2, "expected LOW:HIGH"),
        ("label,kp,ki,sample_period\na,1,1,1ms\na,0,1,1ms\n", 3, "in line 2 already"),
        ("label,kp,ki,sample_period\n,1,1,1ms\n", 2, "found an empty label; expected 1 to 80"),
        ("kp,ki,sample_period\n", 1, "no row below"),
        ('kp,ki,sample_period\n1,"1,1ms\n', 2, "end of data"),
        ("kp,ki,sample_period\n1,\x00,1ms\n", 2, "?"),
    ],
)
def test_a_broken_row_is_told_with_file_and_line(tmp_path, text, line, problem):
    error = refused(tmp_path, text)
    assert f"line {line}" in error.message
    assert problem in error.message
    assert error.where[0].endswith(f"gains.csv:{line}")


def test_a_long_cell_is_shortened(tmp_path):
    assert "…" in refused(tmp_path, f"kp,ki,sample_period\n{'9' * 5000}x,1,1ms\n").message


def test_a_huge_cell_is_told_in_plain_words(tmp_path):
    message = refused(tmp_path, f"kp,ki,sample_period\n{'9' * 200_000},1,1ms\n").message
    assert "a cell of more than 131,072 letters; expected" in message


@pytest.mark.parametrize("content", ["", "\n\n  \n", b"\xff\xfe\x00\x01", b"\x89PNG\r\n\x1a\n\x00"])
def test_what_is_no_table_is_told_so(tmp_path, content):
    refused(tmp_path, content)


def test_a_huge_file_is_not_read(tmp_path):
    error = refused(tmp_path, b"kp," * (16 * 1024 * 1024 // 3 + 2))
    assert "16 MiB" in error.message


def test_too_many_rows_are_refused(tmp_path):
    text = "kp,ki,sample_period\n" + "1,1,1ms\n" * (MAX_DESIGNS + 1)
    assert f"line {MAX_DESIGNS + 2}" in refused(tmp_path, text).message


def test_a_missing_file_and_a_folder_are_told_so(tmp_path):
    with pytest.raises(QuestionError, match="no such file"):
        read_schedule(tmp_path / "gains.csv", GRID)
    with pytest.raises(QuestionError, match="a folder"):
        read_schedule(tmp_path, GRID)


@given(st.binary(max_size=80) | st.text(max_size=60).map(str.encode))
@settings(max_examples=100)
def test_whatever_the_bytes_are_the_answer_is_one_clear_line(tmp_path_factory, content):
    refused(tmp_path_factory.getbasetemp(), b"kp,ki,sample_period\n1,1,\n" + content)


# --- weights ------------------------------------------------------------------------------------


def weights(tmp_path, text):
    path = tmp_path / "weights.csv"
    path.write_text(text)
    return read_weights(path, GRID)


def test_weights_are_by_row(tmp_path):
    assert weights(tmp_path, "unit,weight\nA,3\nB 2,0.5\n") == {"unit": {"A": 3.0, "B 2": 0.5}}
    assert weights(tmp_path, "weight,unit\n3,A\n") == {"unit": {"A": 3.0}}


@pytest.mark.parametrize(
    ("text", "line", "problem"),
    [
        ("unit,weight\nA,-1\n", 2, "the weight -1"),
        ("unit,weight\nA,inf\n", 2, "the weight inf"),
        ("unit,weight\nA,much\n", 2, "the weight much"),
        ("unit,weight\nD,1\n", 2, "no row of unit"),
        ("unit,weight\nA,1\nA,1\n", 3, "is there twice"),
        ("kp,weight\nA,1\n", 1, "kp has no rows"),
        ("unit,share\nA,1\n", 1, "expected a row axis and weight"),
        ("unit\nA\n", 1, "expected a row axis and weight"),
        ("load,weight\nA,1\n", 1, "no such axis"),
    ],
)
def test_broken_weights_are_told_with_file_and_line(tmp_path, text, line, problem):
    with pytest.raises(QuestionError) as caught:
        weights(tmp_path, text)
    assert problem in caught.value.message
    assert f"line {line}" in caught.value.message
