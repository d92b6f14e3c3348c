"""Answers as tables of at most 100 columns, plain when nobody watches.

Every text that comes from an atlas or a config is shown as it is: no markup, no control characters.
"""

from __future__ import annotations

import io
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
from rich import box
from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from sweep.grid import Axis, Grid
from sweep.quantities import display_factor, display_name, format_quantity
from sweep.query.answers import End, LimitsAnswer, LimitsRow, PlaneAnswer, PointAnswer, show_value
from sweep.query.cautions import caution_line
from sweep.query.facts import AtlasFacts, DelayPart
from sweep.query.select import Value, show_node

ENDS = "ends: how stability is lost (last stable node|first other node)"
HALF_SAMPLE = "the hold's own half sample is in the model already"


class _Sheet(io.StringIO):
    """Paper that knows which letters the terminal has: rich asks its file for ``encoding``."""

    def __init__(self, encoding: str) -> None:
        super().__init__()
        self._letters = encoding

    @property
    def encoding(self) -> str:  # type: ignore[override]
        """What the terminal takes."""
        return self._letters


def to_text(view: object, *, width: int, terminal: bool, encoding: str = "utf-8") -> str:
    """A view as text.

    Parameters
    ----------
    view
        What one of the ``..._view`` functions returned.
    width
        Columns.
    terminal
        Whether someone watches: colour, unless NO_COLOR says otherwise.
    encoding
        Of the terminal; lines become ASCII where it lacks their letters.
    """
    sheet = _Sheet(encoding)
    console = Console(
        file=sheet,
        width=width,
        force_terminal=terminal,
        color_system="auto" if terminal else None,
        highlight=False,
        markup=False,
        emoji=False,
        legacy_windows=False,
    )
    console.print(view)
    return "\n".join(line.rstrip() for line in sheet.getvalue().splitlines()) + "\n"


def printable(text: str) -> str:
    r"""A text from elsewhere without control characters.

    >>> printable("a\x1b[31mb")
    'a?[31mb'
    """
    return "".join(letter if letter.isprintable() else "?" for letter in text)


def seconds_text(seconds: float) -> str:
    """A duration to the precision that matters.

    >>> seconds_text(0.25), seconds_text(75), seconds_text(12_000)
    ('0.2 s', '1 min 15 s', '3 h 20 min')
    """
    if seconds < 60:
        return f"{seconds:.1f} s" if seconds < 10 else f"{seconds:.0f} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 60:
        return f"{minutes} min {rest} s"
    return f"{minutes // 60} h {minutes % 60} min"


def bytes_text(count: float) -> str:
    """A size in the largest decimal unit below it.

    >>> bytes_text(512), bytes_text(8.1e9)
    ('512 B', '8.1 GB')
    """
    for unit in ("B", "kB", "MB", "GB"):
        if count < 1000:
            return f"{count:.3g} {unit}"
        count /= 1000
    return f"{count:.3g} TB"


def plan_view(document: Mapping[str, Any], grid: Grid, title: str) -> RenderableType:
    """What running a config would take.

    Parameters
    ----------
    document
        The plan's document.
    grid
        Axes and fixed parameters of the config.
    title
        Of the config.
    """
    done, tiles = document["tiles_done"], document["tiles"]
    facts = [
        ("atlas", str(document["atlas"])),
        ("nodes", f"{document['nodes']:,}"),
        ("tiles", f"{tiles:,}, of which {done:,} are done"),
        ("to compute", f"{document['nodes_computed']:,} nodes"),
    ]
    facts += _time_fact(document)
    if "bytes_needed" in document:
        free = document.get("bytes_free")
        room = f", {bytes_text(free)} free" if isinstance(free, int | float) else ""
        facts.append(("disk", f"{bytes_text(document['bytes_needed'])} needed{room}"))
    parts = [_title(title), axes_table(grid), _fixed_line(grid), _facts(facts)]
    if document.get("fits") is False:
        parts.append(Text("the disk will not hold it: make room, or sweep fewer nodes", "bold red"))
    return Group(*parts, *_notes(document))


def run_view(document: Mapping[str, Any]) -> RenderableType:
    """What a run did."""
    computed, done = document["nodes_computed"], document["tiles_done"]
    if computed == 0 and done == document["tiles"]:
        first = "Nothing to do: every node is on the shelf already."
    elif done == document["tiles"]:
        first = "Done: every node is computed."
    else:
        first = "Stopped in good order; run the same command again to go on."
    facts = [
        ("atlas", str(document["atlas"])),
        ("tiles", f"{done:,} of {document['tiles']:,} done"),
        ("computed", f"{computed:,} nodes"),
    ]
    if computed and document.get("seconds"):
        rate = computed / document["seconds"]
        facts.append(("time", f"{seconds_text(document['seconds'])}, {rate:,.0f} nodes/s"))
    if "slow_nodes" in document:
        undecided = document.get("undecided_nodes", 0)
        facts.append(
            ("slow path", f"{document['slow_nodes']:,} nodes, {undecided:,} left undecided")
        )
    return Group(Text(first, style="bold"), _facts(facts), *_notes(document))


def info_view(facts: AtlasFacts) -> RenderableType:
    """One atlas at a glance."""
    plant, controller = facts.formulas
    loop = [
        ("plant", f"{facts.structure.plant}: {plant}"),
        ("controller", f"{facts.structure.controller}: {controller}"),
        ("hold", facts.structure.hold.replace("_", " ")),
        ("delay", _delay_text(facts)),
    ]
    if facts.structure.controller in ("pi", "pid"):
        loop.insert(2, ("integral", f"{facts.structure.integral} rule"))
    share = facts.tiles_done / facts.tiles
    origin = [
        ("measures", ", ".join(measure.name for measure in facts.measures)),
        ("computed", f"{facts.tiles_done:,} of {facts.tiles:,} tiles ({share:.0%})"),
        ("nodes", f"{facts.grid.size:,}"),
        ("designs", ", ".join(facts.designs) or "none"),
        ("cases", ", ".join(facts.cases) or "none"),
        ("folder", facts.path),
        ("atlas id", facts.atlas_id),
        ("physics id", facts.physics_id),
        ("made by", f"program version {facts.program_version}"),
    ]
    return Group(
        _title(facts.title),
        _facts(loop),
        axes_table(facts.grid),
        _fixed_line(facts.grid),
        _facts(origin),
    )


def axes_table(grid: Grid) -> Table:
    """Every axis with its role, nodes and ends."""
    table = _table("axis", "sets", "role", "nodes", "from", "to", "nominal")
    for column in (3, 4, 5, 6):
        table.columns[column].justify = "right"
    for axis in grid.axes:
        sets = ", ".join(axis.sets)
        ends = (show_node(axis, 0), show_node(axis, len(axis) - 1), show_node(axis, axis.nominal))
        table.add_row(*_cells(axis.name, sets, axis.role, f"{len(axis):,}", *ends))
    return table


def point_view(answer: PointAnswer, computed: Mapping[str, Any]) -> RenderableType:
    """One node: stored measures, what follows, and what was computed now."""
    verdict = {True: "stable", False: "not stable", None: "unknown: not computed yet"}
    style = {True: "bold green", False: "bold red", None: "bold yellow"}[answer.stable]
    derived = answer.derived
    stored = [(name, f"{value:.6g}") for name, value in answer.measures.items()]
    if answer.stable is not None:
        stored += [
            ("spectral radius", f"{derived['radius']:.9g}"),
            ("decay time", _decay_text(derived["decay_time"])),
            ("dominant mode", _mode_text(derived["frequency"], derived["dominant_damping"])),
        ]
    parts: list[RenderableType] = [_facts(_place(answer.grid, answer.at, answer.nominal))]
    parts += _moved_lines(answer.grid, answer.moved, answer.at)
    parts += [Text(verdict[answer.stable], style=style), _facts(stored)]
    parts += [Text("computed now, from this node's parameters:", style="bold"), _modes(computed)]
    parts += [_coefficients(computed["coefficients"]), _cautions(answer.cautions)]
    return Group(*parts)


def limits_view(answer: LimitsAnswer) -> RenderableType:
    """The stability boundary along one axis, one line for each stable interval."""
    axis = answer.grid.axis(answer.along)
    shared = {
        name: value
        for name, value in (answer.rows[0].at.items() if answer.rows else ())
        if name not in answer.listed
    }
    named = answer.nominal
    parts: list[RenderableType] = [_title(f"Stable along {answer.along}")]
    if shared:
        parts.append(_facts(_place(answer.grid, shared, named)))
    parts += [Text(line) for line in _box_lines(answer)]
    parts += [Text(""), _limits_table(answer, axis), Text(ENDS, style="dim"), Text("")]
    if answer.rows_in_all > len(answer.rows):
        parts.append(
            Text(
                f"{len(answer.rows):,} of {answer.rows_in_all:,} rows; narrow it with --at, or "
                "list more with --rows",
                style="yellow",
            )
        )
    parts.append(_rests_on(answer.nodes, answer.unknown))
    parts.append(_cautions(answer.cautions))
    return Group(*parts)


def plane_view(plane: PlaneAnswer) -> RenderableType:
    """What a map shows and what it rests on."""
    nodes = plane.log_radius.size
    parts: list[RenderableType] = [_facts(_place(plane.grid, plane.at, plane.nominal))]
    parts += _moved_lines(plane.grid, plane.moved, plane.at)
    known = nodes - plane.unknown
    share = plane.stable / known if known else 0.0
    parts += [
        Text(f"{plane.stable:,} of {known:,} computed nodes are stable ({share:.0%})"),
        _rests_on(nodes, plane.unknown),
        _cautions(plane.cautions),
    ]
    return Group(*parts)


def _time_fact(document: Mapping[str, Any]) -> list[tuple[str, str]]:
    if document["nodes_computed"] == 0 or document.get("seconds") is None:
        return []
    workers = document.get("workers")
    at_once = f" with {workers} tiles at once" if workers else ""
    start = document.get("start_seconds")
    before = f", after {seconds_text(start)} of start-up" if start else ""
    return [("time", f"about {seconds_text(document['seconds'])}{at_once}{before}")]


def _notes(document: Mapping[str, Any]) -> list[Text]:
    return [Text(f"note: {printable(note)}", style="yellow") for note in document.get("notes", ())]


def _limits_table(answer: LimitsAnswer, axis: Axis) -> Table:
    listed = [answer.grid.axis(name) for name in answer.listed]
    heads = [_head(item.name, item) for item in listed]
    table = _table(*heads, _head("from", axis), _head("to", axis), "lower end", "upper end")
    for column in range(len(listed) + 2):
        table.columns[column].justify = "right"
    for row in answer.rows:
        place = [_number(item, row.at[item.name]) for item in listed]
        for line in _interval_lines(row, axis):
            table.add_row(*_cells(*place, *line))
            place = [""] * len(listed)
    return table


def _interval_lines(row: LimitsRow, axis: Axis) -> list[tuple[str, str, str, str]]:
    if not row.intervals:
        found = "unknown" if row.unknown == row.nodes else "none stable"
        found += "" if row.unknown in (0, row.nodes) else ", some unknown"
        return [("", "", found, "")]
    return [
        (
            _number(axis, interval.low.value),
            _number(axis, interval.high.value),
            _end_text(interval.low, axis),
            _end_text(interval.high, axis),
        )
        for interval in row.intervals
    ]


def _end_text(end: End, axis: Axis) -> str:
    if end.end == "axis_end":
        return "beyond the axis end"
    if end.end == "unknown" or end.between is None:
        return "next node unknown"
    how: str = end.kind or "boundary"
    if end.kind == "oscillation" and end.hz is not None:
        how = f"oscillation {format_quantity(end.hz, 'Hz', digits=4)}"
    stable, other = (_number(axis, value) for value in end.between)
    return f"{how} ({stable}|{other})"


def _head(name: str, axis: Axis) -> str:
    """A column's head with the unit of its numbers."""
    unit = "" if axis.is_row_axis else display_name(axis.unit, _unit(axis))
    return f"{name} [{unit}]" if unit else name


def _unit(axis: Axis) -> str:
    """One unit for all of an axis: its own for people, else what suits its largest value."""
    if axis.display_unit or axis.is_row_axis:
        return axis.display_unit
    largest = float(abs(axis.coordinates).max())
    return format_quantity(largest, axis.unit).partition(" ")[2]


def _number(axis: Axis, value: Value) -> str:
    """A coordinate without its unit, which stands in the head of the column.

    What interpolation left of a zero is a zero: a hundred-thousandth of the finest cell.
    """
    if isinstance(value, str):
        return value
    finest = float(np.diff(axis.coordinates).min()) if len(axis) > 1 else 0.0
    shown = 0.0 if abs(value) < 1e-5 * finest else value
    return f"{shown / display_factor(axis.unit, _unit(axis)):.6g}"


def _box_lines(answer: LimitsAnswer) -> Iterable[str]:
    grid = answer.grid
    if answer.over:
        yield "worst over " + "; ".join(
            f"{name} {_range_text(grid.axis(name), ends)}" for name, ends in answer.over.items()
        )
    if answer.widened:
        yield (
            f"a bound of {', '.join(answer.widened)} lay between nodes: "
            "the next node outward was taken in"
        )
    for name, ends in answer.bracketed.items():
        axis = grid.axis(name)
        yield (
            f"{name} lies between nodes: bracketed by {show_value(axis, ends[0])} and "
            f"{show_value(axis, ends[1])}, the worse of them counts"
        )


def _range_text(axis: Axis, ends: Sequence[Value]) -> str:
    if axis.is_row_axis:
        shown = ", ".join(map(str, ends[:6]))
        return shown if len(ends) <= 6 else f"{shown} and {len(ends) - 6} more"
    low, high = ends[0], ends[-1]
    if low == high:
        return show_value(axis, low)
    return f"{show_value(axis, low)} to {show_value(axis, high)}"


def _place(grid: Grid, at: Mapping[str, Value], nominal: Sequence[str]) -> list[tuple[str, str]]:
    return [
        (name, show_value(grid.axis(name), value) + (" (nominal)" if name in nominal else ""))
        for name, value in at.items()
    ]


def _moved_lines(
    grid: Grid, moved: Mapping[str, Value], at: Mapping[str, Value]
) -> list[RenderableType]:
    return [
        Text(
            f"{name} = {value} lies between nodes: the nearest, "
            f"{show_value(grid.axis(name), at[name])}, was taken",
            style="yellow",
        )
        for name, value in moved.items()
    ]


def _mode_text(frequency_hz: float, damping: float) -> str:
    return f"{format_quantity(frequency_hz, 'Hz')}, damping ratio {damping:.4g}"


def _decay_text(seconds: float | str) -> str:
    """A decay time constant; one that is negative or without bound is growth, or none at all."""
    if isinstance(seconds, str) or not 0 <= seconds < float("inf"):
        return "does not decay"
    return format_quantity(seconds, "s")


def _modes(computed: Mapping[str, Any]) -> Table:
    """One line for each real eigenvalue or conjugate pair."""
    table = _table("mode", "frequency", "damping ratio", "decay time", "magnitude")
    for column in (1, 2, 3, 4):
        table.columns[column].justify = "right"
    for mode in computed["modes"]:
        imaginary = mode["eigenvalue"][1]
        if imaginary < 0:
            continue
        table.add_row(
            "pair" if imaginary else "real",
            format_quantity(mode["frequency_hz"], "Hz"),
            f"{mode['damping']:.4g}",
            _decay_text(mode["decay_time_s"]),
            f"{mode['magnitude']:.9g}",
        )
    return table


def _coefficients(found: Mapping[str, Any]) -> RenderableType:
    rows = []
    for name, value in found.items():
        texts = [f"{item:.10g}" for item in value] if isinstance(value, list) else [str(value)]
        text = ", ".join(texts)
        if name == "whole_delay":
            text = f"{format_quantity(float(value), 'samples')}; {HALF_SAMPLE}"
        rows.append((name.replace("_", " "), text))
    return _facts(rows)


def _delay_text(facts: AtlasFacts) -> str:
    if not facts.delay:
        return f"none; {HALF_SAMPLE}"
    parts = "; ".join(_part_text(part) for part in facts.delay)
    total_s = facts.nominal_delay_samples * facts.nominal_period_s
    total = format_quantity(facts.nominal_delay_samples, "samples")
    return f"{parts}. At the nominal nodes {total} ({format_quantity(total_s, 's')}); {HALF_SAMPLE}"


def _part_text(part: DelayPart) -> str:
    low, high = (format_quantity(value, part.unit) for value in (part.low, part.high))
    return f"{part.name} {low}" if part.low == part.high else f"{part.name} {low} to {high}"


def _fixed_line(grid: Grid) -> RenderableType:
    items = [
        f"{item.path} {format_quantity(item.value, item.unit, item.display_unit)}"
        for item in grid.fixed
    ]
    return Text(f"fixed: {', '.join(items)}" if items else "nothing is fixed")


def _rests_on(nodes: int, unknown: int) -> Text:
    text = f"rests on {nodes:,} nodes"
    if unknown:
        return Text(f"{text}, {unknown:,} of them unknown (not computed yet)", style="yellow")
    return Text(text)


def _cautions(codes: Sequence[str]) -> RenderableType:
    return Text(f"cautions: {caution_line(codes)}", style="dim")


def _title(text: str) -> Text:
    return Text(printable(text), style="bold")


def _table(*columns: str) -> Table:
    table = Table(
        box=box.SIMPLE_HEAD,
        pad_edge=False,
        show_edge=False,
        header_style="bold",
        padding=(0, 1, 0, 0),
    )
    for column in columns:
        table.add_column(Text(printable(column)), overflow="fold")
    return table


def _cells(*texts: str) -> list[Text]:
    return [Text(printable(text)) for text in texts]


def _facts(rows: Sequence[tuple[str, Any]]) -> RenderableType:
    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    table.add_column(style="dim", no_wrap=True)
    table.add_column(overflow="fold")
    for name, value in rows:
        table.add_row(Text(printable(name)), Text(printable(str(value))))
    return Padding(table, (0, 0, 0, 2))
