"""From a file or a text to a `Config`, or to every mistake in it at once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from sweep.config.document import (
    Document,
    canonical_document,
    decode,
    parse_json,
    parse_toml,
    read_bytes,
)
from sweep.config.drafts import AxisDraft, draft_axes
from sweep.config.findings import Findings
from sweep.config.limits import check_delay, check_names, check_size, note_hold
from sweep.config.loop import LoopDraft, read_loop
from sweep.config.model import Config
from sweep.config.parameters import LoopValues, check_given_once
from sweep.config.questions import Question, read_cases, read_designs, read_measures
from sweep.config.shapes import DocumentShape, check_shape
from sweep.grid import Grid
from sweep.vocabulary import LoopStructure


def load_config(path: Path | str) -> Config:
    """Read and check a config file.

    Parameters
    ----------
    path
        A TOML file of at most 16 MiB. Tables that it names lie beside or below it.

    Raises
    ------
    ConfigError
        With every mistake in it, also when there is no such file or it is no text.
    """
    file = Path(path)
    source = str(path)
    text = decode(read_bytes(file, source), source)
    return parse_config(text, folder=file.parent, source=source)


def parse_config(text: str, *, folder: Path, source: str) -> Config:
    """Check a config that is given as text.

    Parameters
    ----------
    text
        TOML.
    folder
        Where the tables lie that it names.
    source
        What messages call it.

    Raises
    ------
    ConfigError
        With every mistake in it.
    """
    return _check(parse_toml(text, source), folder, source)


def config_from_document(document: str, *, source: str = "the stored config") -> Config:
    """Make a config again from the canonical text that an atlas holds.

    Raises
    ------
    ConfigError
        When the text has been altered so that it is no config any more.
    """
    return _check(parse_json(document, source), Path(), source)


def _check(document: Document, folder: Path, source: str) -> Config:
    findings = Findings(source)
    sound = check_shape(DocumentShape, document, (), findings)
    loop = read_loop(sound, findings)
    drafts = draft_axes(sound.get("axes", {}), loop, folder, findings)
    check_given_once(loop, drafts, findings)
    values = LoopValues(loop, drafts, findings)
    built = values.build_axes()
    grid = Grid(tuple(one.axis for one in built.values()), values.fix_parameters())
    if not len(findings):
        check_size(grid, findings)
        check_names(grid.axes, grid.fixed, findings)
        check_delay(grid, values.delay_units, findings, values.bare_delays)
    notes: list[str] = []
    note_hold(values.delay_units, notes)
    question = Question({draft.name: draft for draft in drafts}, built, findings, notes)
    designs = read_designs(sound.get("designs", {}), question)
    cases = read_cases(sound.get("cases", {}), question)
    measures = read_measures(sound.get("measures", {}), cases, findings)
    findings.refuse_if_any()
    return Config(
        title=sound["title"],
        structure=_structure(loop, grid, values.delay_units),
        grid=grid,
        designs=tuple(designs),
        cases=tuple(cases),
        measures=measures,
        output_unit=loop.labels[0],
        input_unit=loop.labels[1],
        document=canonical_document(_with_tables_inline(document, drafts)),
        notes=tuple(notes),
    )


def _structure(loop: LoopDraft, grid: Grid, delay_units: Mapping[str, str]) -> LoopStructure:
    return LoopStructure(
        plant=loop.plant or "",
        controller=loop.controller or "",
        integral=loop.integral,
        has_code_period="controller.code_period" in grid.paths(),
        delay_parts=tuple(
            (path.removeprefix("delay."), unit) for path, unit in sorted(delay_units.items())
        ),
    )


def _with_tables_inline(document: Document, drafts: Sequence[AxisDraft]) -> Document:
    """The document with the rows of its tables in it, so that it stands without those files."""
    tables = {
        draft.place.removeprefix("axes."): draft.rows.as_rows()
        for draft in drafts
        if draft.rows is not None and "table" in draft.keys
    }
    axes = {
        name: {
            ("rows" if key == "table" else key): (tables[name] if key == "table" else value)
            for key, value in section.items()
        }
        if name in tables
        else section
        for name, section in document["axes"].items()
    }
    return {**document, "axes": axes}
