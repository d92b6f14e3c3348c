"""Row axes: tables whose every row sets several parameters at once, inline or from a CSV file."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Any

from sweep.config.document import MAX_BYTES, decode, read_bytes
from sweep.config.findings import Findings, below, describe, listed, suggest
from sweep.config.loop import LoopDraft
from sweep.config.reading import Target, check_name, delay_target
from sweep.config.shapes import MAX_LABEL
from sweep.errors import ConfigError

MAX_ROWS = 1_000_000
"""Most rows of one table."""

_HEADER = re.compile(r"\s*([^\[\]]*?)\s*(?:\[\s*([^\[\]]*?)\s*\])?\s*")


_NO_UNIT = {None: "", "1": "", "-": ""}


@dataclass(frozen=True)
class Row:
    """One row as it was written."""

    place: str
    """Where it stands."""
    cells: Mapping[str, Any]
    """Values by column name, the label included."""


@dataclass(frozen=True)
class RowTable:
    """A table whose labels are sound and whose columns are known parameters."""

    labels: tuple[str, ...]
    """One for each row, unique."""
    targets: tuple[Target, ...]
    """The parameters that every row sets."""
    columns: Mapping[str, list[tuple[str, Any]]]
    """By dotted path, the place and the value of every cell, one for each row."""

    def as_rows(self) -> list[dict[str, Any]]:
        """Write the rows as they would stand inline in a config."""
        names = {t.path: "sample_rate" if t.is_rate else t.path for t in self.targets}
        return [
            {"label": label, **{names[path]: cells[i][1] for path, cells in self.columns.items()}}
            for i, label in enumerate(self.labels)
        ]


def read_row_table(
    keys: Mapping[str, Any], place: str, loop: LoopDraft, folder: Path, findings: Findings
) -> RowTable | None:
    """Read the rows of an axis; ``None`` when mistakes in it were noted."""
    rows = _gather_rows(keys, place, folder, findings)
    if rows is None:
        return None
    where = f"{place}.{'table' if 'table' in keys else 'rows'}"
    if not 1 <= len(rows) <= MAX_ROWS:
        remedy = "give each unit or operating point as a row"
        findings.add(where, f"{len(rows)} rows", f"1 to {MAX_ROWS:,} rows", remedy)
        return None
    before = len(findings)
    labels = _read_labels(rows, findings)
    names = [name for name in rows[0].cells if name != "label"]
    if not names:
        expected = "at least one parameter beside the label"
        findings.add(rows[0].place, "a row that sets nothing", expected, "add a parameter")
    _check_same_names(rows, names, findings)
    targets = _find_targets(rows[0], names, loop, findings)
    if len(findings) > before:
        return None
    columns = {
        target.path: [(f"{row.place}.{name}", row.cells[name]) for row in rows]
        for name, target in targets.items()
    }
    return RowTable(labels, tuple(targets.values()), columns)


def _gather_rows(
    keys: Mapping[str, Any], place: str, folder: Path, findings: Findings
) -> list[Row] | None:
    if "table" in keys:
        return read_csv_rows(keys["table"], f"{place}.table", folder, findings)
    if "rows" not in keys:
        return None
    return [Row(f"{place}.rows[{i}]", _flatten(row)) for i, row in enumerate(keys["rows"])]


def _flatten(row: Mapping[str, Any]) -> dict[str, Any]:
    """Undo TOML's reading of a dotted key: {delay: {update: x}} is the column delay.update."""
    flat: dict[str, Any] = {}
    for name, value in row.items():
        if isinstance(value, dict) and value:
            flat |= {f"{name}.{inner}": item for inner, item in value.items()}
        else:
            flat[name] = value
    return flat


def _read_labels(rows: list[Row], findings: Findings) -> tuple[str, ...]:
    expected = f"a text of 1 to {MAX_LABEL} printable characters without comma and colon"
    first: dict[str, str] = {}
    for row in rows:
        place, label = f"{row.place}.label", row.cells.get("label")
        if not isinstance(label, str) or not _is_label(label):
            found = describe(label) if "label" in row.cells else "nothing"
            remedy = "label every row; the label addresses it in questions"
            findings.add(place, found, expected, remedy)
        elif label in first:
            remedy = f"{first[label]} has the same label"
            findings.add(place, describe(label), "a label that no other row has", remedy)
        else:
            first[label] = row.place
    return tuple(first)


def _is_label(text: str) -> bool:
    shown = text.isprintable() and text == text.strip() and 1 <= len(text) <= MAX_LABEL
    return shown and not set(text) & {",", ":"}


def _check_same_names(rows: list[Row], names: list[str], findings: Findings) -> None:
    wanted = set(names)
    for row in rows[1:]:
        here = row.cells.keys() - {"label"}
        for name in names:
            if name not in here:
                expected = f"the parameters of the first row: {listed(names)}"
                findings.add(below(row.place, name), "nothing", expected, f"add `{name}`")
        for name in sorted(here - wanted):
            remedy = suggest(name, [*names, "label"]) or "remove it, or give it in every row"
            expected = "only the parameters of the first row"
            findings.add(row.place, f"`{name[:60]}`", expected, remedy)


def _find_targets(
    first: Row, names: list[str], loop: LoopDraft, findings: Findings
) -> dict[str, Target]:
    targets: dict[str, Target] = {}
    for name in names:
        place = below(first.place, name)
        target = _find_target(name, place, loop, findings)
        if target is None:
            continue
        if target.path in {other.path for other in targets.values()}:
            expected = f"{target.path} once in each row"
            findings.add(place, "a second column for it", expected, "remove one of the two")
        targets[name] = target
    return targets


def _find_target(name: str, place: str, loop: LoopDraft, findings: Findings) -> Target | None:
    section, _, part = name.partition(".")
    if section == "delay" and part:
        return delay_target(part) if check_name(part, place, "delay part", findings) else None
    target = loop.find(name)
    if target is None:
        names = loop.names()
        remedy = suggest(name, names) or 'a delay part is called "delay.NAME"'
        findings.add(place, describe(name), f"a parameter: {listed(names)}, delay.NAME", remedy)
    return target


def read_csv_rows(table: str, place: str, folder: Path, findings: Findings) -> list[Row] | None:
    """Read a CSV file beside or below the config; ``None`` when mistakes were noted."""
    path = _find_file(table, place, folder, findings)
    if path is None:
        return None
    try:
        text = decode(read_bytes(path, table), table)
        lines = list(csv.reader(io.StringIO(text, newline=""), strict=True))
    except ConfigError as error:
        problem = error.problems[0]
        findings.add(place, f"{describe(table)}: {problem.found}", problem.expected, problem.remedy)
        return None
    except csv.Error as error:
        remedy = "separate the cells by commas and quote texts that hold one"
        findings.add(
            place, f"{describe(table)}: {error}", "a table of comma-separated cells", remedy
        )
        return None
    return _read_cells(lines, f"{place}({path.name}", place, findings)


def _find_file(table: str, place: str, folder: Path, findings: Findings) -> Path | None:
    relative = PurePosixPath(table)
    expected = "a CSV file beside or below the config, given by its relative path"
    plain = table.isprintable() and "\\" not in table and len(table) <= 1000
    if not plain or not table or relative.is_absolute() or ".." in relative.parts:
        findings.add(place, describe(table), expected, 'write a name such as "units.csv"')
        return None
    path = folder / relative
    try:
        inside = path.resolve().is_relative_to(folder.resolve())
    except (OSError, RuntimeError):
        inside = False
    if not inside:
        remedy = "copy the file itself beside the config; a link may not lead out of its folder"
        findings.add(place, describe(table), expected, remedy)
        return None
    return path


def _read_cells(
    lines: list[list[str]], source: str, place: str, findings: Findings
) -> list[Row] | None:
    numbered = [(n, line) for n, line in enumerate(lines, start=1) if any(map(str.strip, line))]
    if not numbered:
        expected = f"a header and at least one row, in at most {MAX_BYTES // 1024**2} MiB"
        findings.add(place, "an empty table", expected, "add a header with a column `label`")
        return None
    header = _read_header(numbered[0][1], f"{source}:{numbered[0][0]})", findings)
    if header is None:
        return None
    rows = []
    for number, line in numbered[1:]:
        where = f"{source}:{number})"
        if len(line) != len(header):
            expected = f"{len(header)} cells, as many as in the header"
            findings.add(where, f"{len(line)} cells", expected, "complete or shorten the row")
            continue
        cells = {
            name: f"{cell.strip()} {unit}" if unit else cell.strip()
            for (name, unit), cell in zip(header, line, strict=True)
        }
        rows.append(Row(where, cells))
    return rows if len(rows) == len(numbered) - 1 else None


def _read_header(cells: list[str], place: str, findings: Findings) -> list[tuple[str, str]] | None:
    """Name and unit of every column."""
    expected = "headers such as label,natural_frequency [Hz],damping"
    header = []
    for cell in cells:
        match = _HEADER.fullmatch(cell)
        if match is None or not match[1]:
            findings.add(place, describe(cell), expected, "name every column")
            return None
        header.append((match[1], _NO_UNIT.get(match[2], match[2])))
    names = [name for name, _ in header]
    if len(set(names)) < len(names) or ("label", "") not in header:
        remedy = "name each column once, one of them `label`"
        if len(names) == 1 and ";" in names[0]:
            remedy = "separate the cells by commas instead of semicolons"
        findings.add(place, describe(",".join(names)), expected, remedy)
        return None
    return header
