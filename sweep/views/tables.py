"""Answers for people, as tables and lines: plan, run, info, point, plane."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from sweep.grid import Grid
from sweep.quantities import format_quantity
from sweep.query.answers import PlaneAnswer, PointAnswer
from sweep.query.facts import AtlasFacts, DelayPart
from sweep.query.select import show_node
from sweep.views.box_lines import jump_line
from sweep.views.sheet import (
    HALF_SAMPLE,
    bytes_text,
    caution_text,
    cells,
    facts_table,
    half_sample_text,
    line,
    moved_lines,
    place_rows,
    plain_table,
    rests_on,
    seconds_text,
    title_line,
)

_TAKEN_OVER = "The config's title, labels, designs and cases were taken over"


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
    parts = [title_line(title), axes_table(grid), _fixed_line(grid), facts_table(facts)]
    if half_sample := half_sample_text(grid):
        parts.append(line(half_sample, "dim"))
    if document.get("fits") is False:
        parts.append(line("the disk will not hold it: make room, or sweep fewer nodes", "bold red"))
    return Group(*parts, *_notes(document))


def run_view(document: Mapping[str, Any]) -> RenderableType:
    """What a run did."""
    computed, done = document["nodes_computed"], document["tiles_done"]
    if computed == 0 and done == document["tiles"]:
        first = "Nothing to do: every node is on the shelf already."
        if document.get("relabelled"):
            first = f"Nothing to compute: every node is on the shelf already. {_TAKEN_OVER}."
    elif done == document["tiles"]:
        first = "Done: every node is computed."
    else:
        first = "Stopped in good order; run the same command again to go on."
    if computed and document.get("relabelled"):
        first += f" {_TAKEN_OVER}."
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
    return Group(line(first, "bold"), facts_table(facts), *_notes(document))


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
        ("designs", ", ".join(design.name for design in facts.designs) or "none"),
        ("cases", ", ".join(case.name for case in facts.cases) or "none"),
        ("folder", facts.path),
        ("atlas id", facts.atlas_id),
        ("physics id", facts.physics_id),
        ("made by", f"program version {facts.program_version}"),
    ]
    return Group(
        title_line(facts.title),
        facts_table(loop),
        axes_table(facts.grid),
        _fixed_line(facts.grid),
        facts_table(origin),
    )


def axes_table(grid: Grid) -> Table:
    """Every axis with its role, nodes and ends."""
    table = plain_table("axis", "sets", "role", "nodes", "from", "to", "nominal")
    for column in (3, 4, 5, 6):
        table.columns[column].justify = "right"
    for axis in grid.axes:
        sets = ", ".join(axis.sets)
        ends = (show_node(axis, 0), show_node(axis, len(axis) - 1), show_node(axis, axis.nominal))
        table.add_row(*cells(axis.name, sets, axis.role, f"{len(axis):,}", *ends))
    return table


def point_view(answer: PointAnswer, computed: Mapping[str, Any]) -> RenderableType:
    """One node: stored measures, what follows, and what was computed now."""
    verdict = {True: "stable", False: "not stable", None: "unknown: not computed yet"}
    style = {True: "bold green", False: "bold red", None: "bold yellow"}[answer.stable]
    derived = answer.derived
    stored = [(name, format_quantity(value, "1")) for name, value in answer.measures.items()]
    if answer.stable is not None:
        stored += [
            ("spectral radius", f"{derived['radius']:.9g}"),
            ("decay time", _decay_text(derived["decay_time"])),
            ("dominant mode", _mode_text(derived["hz"], derived["dominant_damping"])),
        ]
    parts: list[RenderableType] = [facts_table(place_rows(answer.grid, answer.at, answer.nominal))]
    parts += moved_lines(answer.grid, answer.moved, answer.at)
    parts += [line(verdict[answer.stable], style), facts_table(stored)]
    parts += [line("computed now, from this node's parameters:", "bold"), _modes(computed)]
    parts += [_coefficients(computed), caution_text(answer.cautions)]
    return Group(*parts)


def plane_view(plane: PlaneAnswer) -> RenderableType:
    """What a map shows and what it rests on."""
    nodes = plane.log_radius.size
    parts: list[RenderableType] = [facts_table(place_rows(plane.grid, plane.at, plane.nominal))]
    parts += moved_lines(plane.grid, plane.moved, plane.at)
    known = nodes - plane.unknown
    share = plane.stable / known if known else 0.0
    parts += [
        line(f"{plane.stable:,} of {known:,} computed nodes are stable ({share:.0%})"),
        *(line(text, "dim") for text in jump_line(plane.largest_jump)),
        rests_on(nodes, plane.unknown),
        caution_text(plane.cautions),
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
    return [line(f"note: {note}", "yellow") for note in document.get("notes", ())]


def _mode_text(frequency_hz: float, damping: float) -> str:
    return f"{format_quantity(frequency_hz, 'Hz')}, damping ratio {damping:.4g}"


def _decay_text(seconds: float | str) -> str:
    """A decay time constant; without bound, as a number or as in JSON, it is none."""
    if seconds in ("inf", math.inf):
        return "does not decay"
    return format_quantity(float(seconds), "s")


def _modes(computed: Mapping[str, Any]) -> Table:
    """One line for each real eigenvalue or conjugate pair."""
    table = plain_table("mode", "frequency", "damping ratio", "decay time", "magnitude")
    for column in (1, 2, 3, 4):
        table.columns[column].justify = "right"
    for mode in computed["modes"]:
        imaginary = mode["eigenvalue"][1]
        if imaginary < 0:
            continue
        table.add_row(
            "pair" if imaginary else "real",
            format_quantity(mode["hz"], "Hz"),
            f"{mode['damping']:.4g}",
            _decay_text(mode["decay_time"]),
            f"{mode['magnitude']:.9g}",
        )
    return table


def _coefficients(computed: Mapping[str, Any]) -> RenderableType:
    """The delay as it is, and the difference equations with what they split off of it."""
    delay = format_quantity(computed["delay_samples"], "samples")
    rows = [("delay", f"{delay}; {HALF_SAMPLE}")]
    for name, value in computed["coefficients"].items():
        if name == "whole_delay":
            whole = format_quantity(float(value), "samples").replace(" ", " whole ")
            factor = f", a further z^{value} in the plant's denominator" if value else ""
            rows.append(("split off", f"{whole}{factor}"))
        else:
            texts = ", ".join(f"{item:.10g}" for item in value)
            rows.append((name.replace("_", " "), f"{_powers(len(value))}: {texts}"))
    return facts_table(rows)


def _powers(count: int) -> str:
    """The powers of z that a list of coefficients stands for, highest first."""
    return f"z^{count - 1} to z^0" if count > 1 else "z^0"


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
    return line(f"fixed: {', '.join(items)}" if items else "nothing is fixed")
