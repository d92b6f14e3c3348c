"""Row axes, inline and from CSV, and the longest delay on every kind of axis."""

import numpy as np
import pytest
from config_text import axis_text, problems, read
from hypothesis import given, settings
from hypothesis import strategies as st

from sweep.config import config_from_document
from sweep.config.limits import find_longest_delay
from sweep.grid import Axis, FixedParameter, Grid
from sweep.identity import atlas_id


def unit_text(body: str) -> str:
    """A config whose resonance and damping are set by the row axis ``unit``."""
    text = axis_text(body, "damping").replace("[axes.damping]", "[axes.unit]")
    return text.replace('natural_frequency = "50 Hz"\n', "")


INLINE = """\
rows = [
  {label = "A", natural_frequency = "45.1 Hz", damping = 0.008},
  {label = "B", natural_frequency = "0.0482 kHz", damping = "1 %"},
]"""
CSV = "label,natural_frequency [Hz],damping\nA,45.1,0.008\nB,48.2,0.01\n"


def test_rows_set_several_parameters_at_once():
    axis = read(unit_text(INLINE)).grid.axis("unit")
    assert axis.labels == ("A", "B")
    assert axis.sets == ("plant.natural_frequency", "plant.damping")
    assert axis.columns["plant.natural_frequency"].tolist() == [45.1, 48.2]
    assert axis.columns["plant.damping"].tolist() == [0.008, 0.01]
    assert axis.column_units == {"plant.natural_frequency": "Hz", "plant.damping": "1"}
    assert (axis.role, axis.nominal, axis.ordered) == ("tolerance", 0, False)
    assert axis.coordinates.tolist() == [0.0, 1.0]


def test_a_csv_says_the_same_as_its_rows_inline(tmp_path):
    (tmp_path / "units.csv").write_text(CSV, encoding="utf-8")
    inline, table = read(unit_text(INLINE)), read(unit_text('table = "units.csv"'), tmp_path)
    assert atlas_id(table.structure, table.grid) == atlas_id(inline.structure, inline.grid)


def test_the_canonical_text_of_a_table_stands_without_its_file(tmp_path):
    (tmp_path / "units.csv").write_text(CSV, encoding="utf-8")
    config = read(unit_text('table = "units.csv"'), tmp_path)
    (tmp_path / "units.csv").unlink()
    again = config_from_document(config.document)
    assert atlas_id(again.structure, again.grid) == atlas_id(config.structure, config.grid)
    assert again.document == config.document


@pytest.mark.parametrize(
    "data",
    [
        b"\xef\xbb\xbf" + CSV.encode(),
        CSV.replace("\n", "\r\n").encode(),
        CSV.replace("label,", " label , ").encode().replace(b" , natural", b",natural"),
        b'"label","natural_frequency [Hz]","damping"\n"A","45.1","0.008"\n"B",48.2,0.01\n\n',
        b"damping [%],label,plant.natural_frequency [kHz]\n0.8,A,0.0451\n1,B,0.0482\n",
        b"label,natural_frequency,damping [1]\nA,45.1 Hz,0.008\nB,48.2,0.01\n",
    ],
    ids=["bom", "crlf", "spaces", "quotes", "other units", "units in cells"],
)
def test_tables_as_spreadsheets_write_them_are_read(tmp_path, data):
    (tmp_path / "sub").mkdir()
    (tmp_path / "sub" / "units.csv").write_bytes(data)
    axis = read(unit_text('table = "sub/units.csv"'), tmp_path).grid.axis("unit")
    assert axis.columns["plant.natural_frequency"].tolist() == [45.1, 48.2]
    assert axis.columns["plant.damping"].tolist() == [0.008, 0.01]


@pytest.mark.parametrize(
    ("data", "says"),
    [
        (b"", "an empty table"),
        (b"label,damping\n", "0 rows"),
        (b"unit,damping\nA,0.1\n", "unit,damping"),
        (b"label;damping\nA;0.1\n", "label;damping"),
        (b"label,damping,damping\nA,0.1,0.1\n", "damping"),
        (b"label,,damping\nA,1,0.1\n", '""'),
        (b"label,damping\nA,0.1,3\n", "3 cells"),
        (b"label,damping\nA,\n", '""'),
        (b"label,damping\nA,0.1 Hz\n", '"0.1 Hz"'),
        (b"label,damping [Hz]\nA,0.1\n", '"0.1 Hz"'),
        (b'label,damping\nA,"0,1"\n', '"0,1"'),
        (b"label,damping\nA,0.1\nA,0.2\n", '"A"'),
        (b"label,damping\n,0.1\n", '""'),
        (b"label,dampign\nA,0.1\n", '"dampign"'),
        (b"label,damping\nA,-0.1\n", '"-0.1"'),
        (b"label,damping\n\xff\xfe,0.1\n", "no text"),
        (b"\x00\x01\x02", "\x00"),
        (b'label,damping\n"A,0.1\n', "unexpected end"),
        (b"label,damping\n" + b"x" * 200_000 + b",1\n", "field larger"),
    ],
)
def test_a_table_with_a_mistake_is_refused_where_it_is_wrong(tmp_path, data, says):
    (tmp_path / "units.csv").write_bytes(data)
    text = axis_text('table = "units.csv"', "damping").replace("[axes.damping]", "[axes.unit]")
    found = problems(text, tmp_path)
    assert all(path.startswith("axes.unit.table") for path in found), found
    assert any(says.replace("\x00", "") in problem.found for problem in found.values()), found
    assert all(problem.remedy and problem.expected for problem in found.values())


@pytest.mark.parametrize(
    "name",
    ["../units.csv", "/etc/passwd", "sub/../../units.csv", "link.csv", "linked/units.csv", "", ".",
     "missing.csv", "C:\\\\units.csv", "a\\u0000b.csv"],
)  # fmt: skip
def test_a_table_lies_beside_or_below_the_config(tmp_path, name):
    folder = tmp_path / "project"
    folder.mkdir()
    (tmp_path / "units.csv").write_text(CSV, encoding="utf-8")
    (folder / "link.csv").symlink_to(tmp_path / "units.csv")
    (folder / "linked").symlink_to(tmp_path)
    found = problems(unit_text(f'table = "{name}"'), folder)
    assert list(found) == ["axes.unit.table"]


def test_a_link_within_the_folder_is_followed(tmp_path):
    (tmp_path / "units.csv").write_text(CSV, encoding="utf-8")
    (tmp_path / "link.csv").symlink_to(tmp_path / "units.csv")
    assert len(read(unit_text('table = "link.csv"'), tmp_path).grid.axis("unit")) == 2


@pytest.mark.parametrize(
    ("rows", "path", "says"),
    [
        ('[{label = "A", damping = 1}, {label = "B"}]', "rows[1].damping", "first row"),
        (
            '[{label = "A", damping = 1}, {label = "B", damping = 1, gain = 1}]',
            "rows[1]",
            "first row",
        ),
        ("[{damping = 1}]", "rows[0].label", "printable"),
        ("[{label = 3, damping = 1}]", "rows[0].label", "printable"),
        ('[{label = "A, B", damping = 1}]', "rows[0].label", "without comma"),
        ('[{label = "A"}]', "rows[0]", "at least one parameter"),
        ('[{label = "A", damping = {a = 1}}]', 'rows[0]."damping.a"', "a parameter"),
        ('[{label = "A", damping = 1, plant.damping = 2}]', 'rows[0]."plant.damping"', "once"),
        ('[{label = "A", damping = "x"}]', "rows[0].damping", "a plain number"),
        ("[]", "rows", "1 to 1,000,000 rows"),
        ("3", "rows", "array of tables"),
        ("[3]", "rows[0]", "array of tables"),
    ],
)
def test_rows_with_a_mistake_are_refused_where_they_are_wrong(rows, path, says):
    text = axis_text(f"rows = {rows}", "damping").replace("[axes.damping]", "[axes.unit]")
    found = problems(text)
    assert says in found[f"axes.unit.{path}"].expected
    assert "plant.damping" not in found


def test_rows_of_both_roles_need_a_role():
    rows = 'rows = [{label = "A", damping = 0.1, kp = 1}]'
    text = axis_text(rows, "damping").replace("[axes.damping]", "[axes.unit]")
    text = text.replace("[axes.kp]\nstart = -1\nstop = 1\ncount = 21\n", "")
    assert "parameters of both roles" in problems(text)["axes.unit.role"].expected
    assert read(text.replace(rows, rows + '\nrole = "design"')).grid.axis("unit").role == "design"


def test_a_nominal_row_is_named_by_its_label():
    assert read(unit_text(INLINE + '\nnominal = "B"')).grid.axis("unit").nominal == 1
    found = problems(unit_text(INLINE + '\nnominal = "C"'))
    assert "label of a row: A or B" in found["axes.unit.nominal"].expected


def test_rows_may_set_rates_and_delay_parts():
    rows = """rows = [
      {label = "x", sample_rate = "20 kHz", delay.bus = 0},
      {label = "y", sample_rate = "10 kHz", delay.bus = "0.5 samples"}]"""
    text = axis_text(rows + '\nrole = "design"', "sample_period")
    config = read(text.replace("[axes.sample_period]", "[axes.mode]"))
    axis = config.grid.axis("mode")
    assert axis.columns["sample_period"].tolist() == [5e-5, 1e-4]
    assert axis.column_units == {"sample_period": "s", "delay.bus": "samples"}
    assert config.structure.delay_parts == (("bus", "samples"), ("update", "samples"))
    assert config_from_document(config.document).document == config.document


def test_names_that_would_be_stored_twice_are_refused():
    text = unit_text(INLINE).replace("[axes.unit]", "[axes.natural_frequency]")
    assert "no other axis" in problems(text)["axes.natural_frequency"].expected
    text = unit_text(INLINE).replace('update = "1 sample"', 'unit_label = "1 sample"')
    assert "no other axis" in problems(text)["delay.unit_label"].expected


def delay_text(fixed: str, axes: str = "") -> str:
    return axis_text("values = [0.1]", "damping").replace('update = "1 sample"', fixed) + axes


@pytest.mark.parametrize(
    ("fixed", "axes", "fits"),
    [
        ('a = "256 samples"', "", True),
        ('a = "256.001 samples"', "", False),
        ('a = "255 samples"\nb = "1 ms"', "", True),
        ('a = "255 samples"\nb = "1.001 ms"', "", False),
        ("a = 0.256", "", True),
        ("a = 0.2561", "", False),
        ("", '[axes.a]\nsets = "delay.a"\nvalues = [0, 0.256]', True),
        ("", '[axes.a]\nsets = "delay.a"\nvalues = [0, 0.2561]', False),
        ('b = "1 sample"', '[axes.a]\nsets = "delay.a"\nvalues = [0, 0.256]', False),
    ],
)
def test_at_most_256_samples_of_delay_at_any_node(fixed, axes, fits):
    text = delay_text(fixed, axes)
    if fits:
        read(text)
    else:
        assert "256 samples" in problems(text)["delay"].expected


def test_absurd_but_legal_numbers_are_judged_without_a_warning():
    axis = '[axes.{0}]\nrows = [{{label = "A", delay.{0} = 0}}, {{label = "B", delay.{0} = {1}}}]\n'
    text = delay_text("", axis.format("a", "1e300") + axis.format("b", "1e-300"))
    assert "delay" in problems(text.replace("start = -1\nstop = 1", "start = -1e300\nstop = 1e300"))


def test_rows_that_tie_a_long_delay_to_a_long_period_are_legal():
    rows = """rows = [
      {label = "a", sample_period = 0.001, delay.b = 0.1},
      {label = "b", sample_period = 1, delay.b = 100}]"""
    text = axis_text(f'{rows}\nrole = "design"', "sample_period")
    text = text.replace("[axes.sample_period]", "[axes.mode]")
    read(text)
    assert "delay" in problems(text.replace("delay.b = 0.1}", "delay.b = 1}"))


@st.composite
def grids(draw):
    """A small grid whose delay parts and period lie on row axes, plain axes or are fixed."""
    value = st.sampled_from([0.0, 0.5, 1.0, 2.0, 3.5])
    period = st.sampled_from([0.25, 0.5, 1.0, 4.0])

    def column(strategy, rows):
        return np.array(draw(st.lists(strategy, min_size=rows, max_size=rows)))

    def row_axis(name, paths):
        rows = draw(st.integers(1, 5))
        columns = {p: column(period if p == "sample_period" else value, rows) for p in paths}
        labels = tuple(map(str, range(rows)))
        return Axis(
            name, tuple(paths), np.arange(rows * 1.0), "design", 0, labels=labels, columns=columns
        )

    with_clock = ["sample_period"] if draw(st.booleans()) else []
    axes = [
        row_axis("one", ["delay.a", "delay.b", *with_clock]),
        row_axis("two", ["delay.c", "delay.d"]),
    ]
    fixed = [] if with_clock else [FixedParameter("sample_period", draw(period))]
    return Grid(tuple(axes), (*fixed, FixedParameter("delay.e", draw(value))))


UNITS = {"delay.a": "s", "delay.b": "samples", "delay.c": "s", "delay.d": "samples", "delay.e": "s"}


@given(grids())
@settings(max_examples=150, deadline=None)
def test_the_longest_delay_is_that_of_the_worst_node(grid):
    values = grid.parameters()
    total = sum(
        values[path] if unit == "samples" else values[path] / values["sample_period"]
        for path, unit in UNITS.items()
    )
    longest, period_s = find_longest_delay(grid, UNITS)
    assert longest == pytest.approx(float(np.max(total)), rel=1e-12)
    assert period_s in values["sample_period"]
