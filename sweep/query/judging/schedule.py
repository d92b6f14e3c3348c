"""Tables that a question brings along: a gain schedule of designs, and the weights of rows.

Both are CSV files in UTF-8 with a header. The first mistake in one is told in a line of its own,
with the file and the number of the line.
"""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import NoReturn

from sweep.config.document import decode, read_bytes
from sweep.errors import ConfigError, QuantityError, QuestionError
from sweep.grid import Axis, Grid
from sweep.quantities import describe_unit, parse_quantity, split_quantity
from sweep.query.judging.judge import AskedDesign
from sweep.query.scope import box_span, fixed_span
from sweep.query.select import Asked, find_axis, resolve_names
from sweep.query.spoken import is_rate

MAX_DESIGNS = 10_000
"""Most rows of a schedule."""

MAX_LABEL = 80
"""Most letters of a label."""

_HEADER = re.compile(r"\s*([^\[\]]*?)\s*(?:\[\s*([^\[\]]*?)\s*\])?\s*")
_NO_UNIT = {None: "", "1": "", "-": ""}


@dataclass(frozen=True)
class _Table:
    """A table as it was written."""

    name: str
    """Of the file."""
    head: int
    """Line of the header."""
    columns: Sequence[tuple[str, str]]
    """Name and unit of each."""
    rows: Sequence[tuple[int, Sequence[str]]]
    """Line and cells of each row; as many cells as columns."""

    def refuse(self, line: int, problem: str, remedy: str) -> NoReturn:
        """Say what is wrong in a line."""
        raise QuestionError(
            f"reading {self.name}, line {line}: {problem}",
            where=[f"{self.name}:{line}"],
            remedy=remedy,
        )


def read_schedule(path: Path, grid: Grid) -> tuple[AskedDesign, ...]:
    """Read the designs of a gain schedule.

    Parameters
    ----------
    path
        Of a CSV file, UTF-8, at most 16 MiB and 10,000 rows. Its header names every design axis
        once, with or without a unit (``kp``, ``kd [ms]``; ``sample_rate`` for the period), perhaps
        ``label``, and perhaps tolerance axes: there a cell is a value, ``low:high`` or the label of
        a row, and holds for that design instead of the range of the case; an empty one leaves it.
    grid
        Of the atlas.

    Raises
    ------
    QuestionError
        For the first mistake, with file and line: a column that is no axis or is there twice, a
        design axis without a column, a wrong number of cells, what is no quantity of its axis or
        lies off it, a label that is there twice.
    """
    table = _read_table(path)
    axes = _find_columns(table, grid)
    if len(table.rows) > MAX_DESIGNS:
        table.refuse(
            table.rows[MAX_DESIGNS][0],
            f"more than {MAX_DESIGNS:,} rows; expected one for each design",
            "judge it in parts",
        )
    seen: dict[str, int] = {}
    designs = []
    for number, (line, cells) in enumerate(table.rows, start=1):
        design = _read_design(table, axes, grid, line, cells, f"row {number}")
        if design.name in seen:
            table.refuse(
                line,
                f"the label {_shown(design.name)} stands in line {seen[design.name]} already",
                "give each design a label of its own",
            )
        seen[design.name] = line
        designs.append(design)
    return tuple(designs)


def read_weights(path: Path, grid: Grid) -> dict[str, dict[str, float]]:
    """Read the weights of the rows of one row axis.

    Parameters
    ----------
    path
        Of a CSV file, UTF-8, with two columns: the name of the row axis, and ``weight``. Weights
        are at least 0 and need not add up to anything.
    grid
        Of the atlas.

    Raises
    ------
    QuestionError
        For the first mistake, with file and line.
    """
    table = _read_table(path)
    names = [name for name, _ in table.columns]
    others = [name for name in names if name != "weight"]
    if len(names) != 2 or len(others) != 1:
        table.refuse(
            table.head,
            f"found the columns {_shown(','.join(names))}; expected a row axis and weight",
            "write a header such as unit,weight",
        )
    axis = _axis_of(table, others[0], grid)
    if axis.labels is None:
        table.refuse(table.head, f"{axis.name} has no rows", "name a row axis")
    found: dict[str, float] = {}
    for line, cells in table.rows:
        label, text = (cells[names.index(name)].strip() for name in (others[0], "weight"))
        if label not in axis.labels or label in found:
            problem = "is there twice" if label in found else f"is no row of {axis.name}"
            table.refuse(line, f"{_shown(label)} {problem}", "name each row once by its label")
        found[label] = _read_weight(table, line, text)
    return {axis.name: found}


def _read_weight(table: _Table, line: int, text: str) -> float:
    try:
        weight = float(text)
    except ValueError:
        weight = math.nan
    if not (math.isfinite(weight) and weight >= 0.0):
        table.refuse(line, f"found the weight {_shown(text)}", "give a number of at least 0")
    return weight


def _find_columns(table: _Table, grid: Grid) -> list[Axis | None]:
    """The axis of each column; `None` for labels."""
    axes: list[Axis | None] = []
    for name, unit in table.columns:
        axis = None if (name, unit) == ("label", "") else _axis_of(table, name, grid)
        if axis in axes:
            what = axis.name if axis else "label"
            table.refuse(table.head, f"a second column for {what}", "remove one of the two")
        if axis is not None and axis.is_row_axis and unit:
            table.refuse(table.head, f"{name} is a row axis, and has no unit", "leave the unit out")
        if axis is not None and unit:
            _check_unit(table, axis, name, unit)
        axes.append(axis)
    for axis in grid.axes:
        if axis.role == "design" and axis not in axes:
            table.refuse(
                table.head,
                f"no column for {axis.name}; a design has a value for every design axis: "
                f"{', '.join(one.name for one in grid.axes if one.role == 'design')}",
                f"add a column {axis.name}",
            )
    return axes


def _check_unit(table: _Table, axis: Axis, name: str, unit: str) -> None:
    """Refuse a unit in the header that no number of its axis has."""
    of_axis = "Hz" if is_rate(axis, name) else axis.unit
    try:
        parse_quantity(f"1 {unit}", of_axis, natural_period_s=Decimal(1))
    except QuantityError as error:
        table.refuse(
            table.head,
            f"the column {_shown(name)} has the unit {_shown(unit)}; expected "
            f"{describe_unit(of_axis)}",
            error.remedy or "write a unit of that kind in the header",
        )


def _axis_of(table: _Table, name: str, grid: Grid) -> Axis:
    try:
        return find_axis(grid, name)
    except QuestionError as error:
        table.refuse(table.head, f"column {_shown(name)}: {error.message}", error.remedy)


def _read_design(
    table: _Table,
    axes: Sequence[Axis | None],
    grid: Grid,
    line: int,
    cells: Sequence[str],
    name: str,
) -> AskedDesign:
    at: dict[str, Asked] = {}
    over: dict[str, Asked] = {}
    for axis, (spelled, unit), raw in zip(axes, table.columns, cells, strict=True):
        cell = raw.strip()
        if axis is None:
            name = _check_label(table, line, cell)
        elif axis.role == "design":
            text = _with_unit(table, line, cell, spelled, unit)
            at |= _read_cell(table, line, grid, axis, spelled, text)
        elif cell:
            parts = [cell] if axis.is_row_axis else cell.split(":")
            text = ":".join(_with_unit(table, line, p.strip(), spelled, unit) for p in parts)
            over |= _read_cell(table, line, grid, axis, spelled, text)
    return AskedDesign(name, at, over)


def _with_unit(table: _Table, line: int, cell: str, spelled: str, unit: str) -> str:
    """A cell with the unit of its column; as it is where it is no number, which is told later."""
    if not unit:
        return cell
    try:
        own = split_quantity(cell).unit
    except QuantityError:
        return cell
    if own:
        table.refuse(
            line,
            f"found {_shown(cell)} under {_shown(spelled)} [{_shown(unit)}]; expected a number, "
            "whose unit stands in the header",
            "write the number alone, or leave the unit out of the header",
        )
    return f"{cell} {unit}"


def _check_label(table: _Table, line: int, cell: str) -> str:
    if not cell or len(cell) > MAX_LABEL or not cell.isprintable():
        found = f"the label {_shown(cell)}" if cell else "an empty label"
        table.refuse(
            line,
            f"found {found}; expected 1 to {MAX_LABEL} printable characters",
            "give each design a label, or leave the column out",
        )
    return cell


def _read_cell(
    table: _Table, line: int, grid: Grid, axis: Axis, spelled: str, text: str
) -> dict[str, Asked]:
    """What a cell says of an axis, once it is known that it can be asked."""
    if not text:
        table.refuse(line, f"an empty cell for {axis.name}", "give every design axis a value")
    try:
        name, asked = resolve_names(grid, {spelled: text})[axis.name]
        if axis.role == "design":
            fixed_span(grid, axis, name, asked)
        else:
            box_span(grid, axis, name, asked)
    except QuestionError as error:
        table.refuse(line, _shown(error.message, 300), error.remedy)
    return {spelled: text}


def _read_table(path: Path) -> _Table:
    try:
        text = decode(read_bytes(path, str(path)), str(path))
    except ConfigError as error:
        problem = error.problems[0]
        raise QuestionError(
            f"reading {path}: found {problem.found}; expected a table of comma-separated cells, "
            "UTF-8, at most 16 MiB",
            where=[str(path)],
            remedy="check the path, and save the table as CSV in UTF-8",
        ) from None
    lines = _lines(path, text)
    first = next(lines, None)
    if first is None:
        raise QuestionError(
            f"reading {path}: it is empty; expected a header and at least one row",
            where=[str(path)],
            remedy="write a header with the names of axes, and a row below it",
        )
    head, cells = first
    rows = list(lines)
    table = _Table(str(path), head, _read_header(path, head, cells), rows)
    for line, row in rows:
        if len(row) != len(table.columns):
            table.refuse(
                line,
                f"{len(row)} cells; expected {len(table.columns)}, as many as in the header",
                "complete or shorten the row",
            )
    if not rows:
        table.refuse(head, "no row below the header", "write a row for each design")
    return table


def _lines(path: Path, text: str) -> Iterator[tuple[int, list[str]]]:
    """Line number and cells of every line that is not blank."""
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    try:
        for cells in reader:
            if any(map(str.strip, cells)):
                yield reader.line_num, cells
    except csv.Error as error:
        line = reader.line_num
        too_long = "field larger" in str(error)
        problem = f"a cell of more than {csv.field_size_limit():,} letters" if too_long else error
        raise QuestionError(
            f"reading {path}, line {line}: {problem}; expected cells separated by commas",
            where=[f"{path}:{line}"],
            remedy="separate the cells by commas, quote texts that hold one, and close every quote",
        ) from None


def _read_header(path: Path, line: int, cells: Sequence[str]) -> list[tuple[str, str]]:
    columns = []
    for cell in cells:
        match = _HEADER.fullmatch(cell)
        by_semicolons = len(cells) == 1 and ";" in cell
        if match is None or not match[1] or by_semicolons:
            remedy = "name every column, such as kp or kd [ms]"
            if by_semicolons:
                remedy = "separate the cells by commas instead of semicolons"
            raise QuestionError(
                f"reading {path}, line {line}: {_shown(cell)} names no column",
                where=[f"{path}:{line}"],
                remedy=remedy,
            )
        columns.append((match[1], _NO_UNIT.get(match[2], match[2])))
    return columns


def _shown(text: str, most: int = 60) -> str:
    """A text from a file, on one line and not endless."""
    one_line = "".join(letter if letter.isprintable() else "?" for letter in text)
    shown = one_line if len(one_line) <= most else f"{one_line[: most - 1]}…"
    return shown or "nothing"
