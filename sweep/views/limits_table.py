"""Limits as a table: one line for each stable interval."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Mapping, Sequence

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from sweep.grid import Axis
from sweep.quantities import format_quantity
from sweep.query.answers import End, LimitsAnswer, LimitsRow, show_value
from sweep.query.select import Value
from sweep.views.box_lines import box_lines, jump_line
from sweep.views.columns import head, number
from sweep.views.sheet import (
    CANNOT_BE_BUILT,
    caution_text,
    cells,
    facts_table,
    half_sample_text,
    line,
    place_rows,
    plain_table,
    rests_on,
    title_line,
)

ENDS = "ends: how stability is lost (last stable node|first other node)"
WORST_BELOW = "; below, the worst tolerances there"
WORST_LETTERS = 34
"""Letters in a line below an end: as wide as the end itself may be."""


def limits_view(answer: LimitsAnswer) -> RenderableType:
    """The stability boundary along one axis, one line for each stable interval."""
    axis = answer.grid.axis(answer.along)
    shared = {
        name: value
        for name, value in (answer.rows[0].at.items() if answer.rows else ())
        if name not in answer.listed
    }
    named = answer.nominal
    parts: list[RenderableType] = [title_line(f"Stable along {answer.along}")]
    if shared:
        parts.append(facts_table(place_rows(answer.grid, shared, named)))
    parts += [line(text) for text in box_lines(answer)]
    same, differing = _deciding(answer)
    parts += [line(""), _limits_table(answer, axis, differing)]
    parts.append(line(ENDS + (WORST_BELOW if differing else ""), "dim"))
    if answer.excluded:
        parts.append(line(CANNOT_BE_BUILT, "dim"))
    if same:
        parts.append(line(f"{_place_text(answer, same)}: the worst at every end"))
    parts.append(line(""))
    parts += [line(text, "dim") for text in jump_line(answer.largest_jump)]
    if answer.rows_in_all > len(answer.rows):
        parts.append(
            line(
                f"{len(answer.rows):,} of {answer.rows_in_all:,} rows; narrow it with --at, or "
                "list more with --rows",
                "yellow",
            )
        )
    if half_sample := half_sample_text(answer.grid):
        parts.append(line(half_sample, "dim"))
    parts.append(rests_on(answer.nodes, answer.unknown))
    parts.append(caution_text(answer.cautions))
    return Group(*parts)


def _deciding(answer: LimitsAnswer) -> tuple[dict[str, Value], list[str]]:
    """Axes of the box that are worst at one node for every end, with it; axes that are not.

    An axis of the box with a single node decides nothing.
    """
    ends = [
        end
        for row in answer.rows
        for interval in row.intervals
        for end in (interval.low, interval.high)
        if end.worst
    ]
    same: dict[str, Value] = {}
    differing: list[str] = []
    for name, nodes in {**answer.over, **answer.bracketed}.items() if ends else ():
        found = {end.worst[name] for end in ends}
        if len(found) > 1:
            differing.append(name)
        elif len(set(nodes)) > 1:
            same[name] = found.pop()
    return same, differing


def _place_text(answer: LimitsAnswer, place: Mapping[str, Value]) -> str:
    return ", ".join(
        f"{name} {show_value(answer.grid.axis(name), value)}" for name, value in place.items()
    )


def _limits_table(answer: LimitsAnswer, axis: Axis, differing: Sequence[str]) -> Table:
    listed = [answer.grid.axis(name) for name in answer.listed]
    heads = [head(item.name, item) for item in listed]
    table = plain_table(*heads, head("from", axis), head("to", axis), "lower end", "upper end")
    for column in range(len(listed) + 2):
        table.columns[column].justify = "right"
    for row in answer.rows:
        place = [number(item, row.at[item.name]) for item in listed]
        for numbers, ends in _interval_lines(answer, row, axis, differing):
            table.add_row(*cells(*place, *numbers), *ends)
            place = [""] * len(listed)
    return table


def _interval_lines(
    answer: LimitsAnswer, row: LimitsRow, axis: Axis, differing: Sequence[str]
) -> Iterable[tuple[tuple[str, str], tuple[Text, Text]]]:
    """For each interval its two numbers and its two ends."""
    if not row.intervals:
        yield ("", ""), (line(_nothing_text(row, len(axis))), line(""))
    for interval in row.intervals:
        low, high = interval.low, interval.high
        yield (
            (number(axis, low.value), number(axis, high.value)),
            (_end_cell(answer, low, axis, differing), _end_cell(answer, high, axis, differing)),
        )


def _nothing_text(row: LimitsRow, nodes: int) -> str:
    """Why a row has no interval."""
    if row.excluded == nodes:
        return "cannot be built"
    if row.unknown == row.nodes:
        return "unknown"
    some = [", some unknown"] * (row.unknown > 0) + [", some cannot be built"] * (row.excluded > 0)
    return "none stable" + "".join(some)


def _end_cell(answer: LimitsAnswer, end: End, axis: Axis, differing: Sequence[str]) -> Text:
    """How an interval ends, and below it where the axes that differ are at their worst."""
    cell = line(_end_text(end, axis))
    place = {name: end.worst[name] for name in differing if name in end.worst}
    for part in textwrap.wrap(_place_text(answer, place), WORST_LETTERS):
        cell.append("\n").append_text(line(f"  {part}", "dim"))
    return cell


def _end_text(end: End, axis: Axis) -> str:
    if end.end == "axis_end":
        return "beyond the axis end"
    if end.end == "unknown" or end.between is None:
        return "next node unknown"
    how: str = "cannot be built" if end.end == "excluded" else end.kind or "boundary"
    if end.kind == "oscillation" and end.hz is not None:
        how = f"oscillation {format_quantity(end.hz, 'Hz', digits=4)}"
    stable, other = (number(axis, value) for value in end.between)
    return f"{how} ({stable}|{other})"
