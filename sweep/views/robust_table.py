"""Robust designs for people: how many meet, how far they may drift, which is the worst."""

from __future__ import annotations

from collections.abc import Iterable

from rich.console import Group, RenderableType

from sweep.quantities import format_quantity
from sweep.query.answers import LargestBox, RobustAnswer, WorstNode, show_value
from sweep.query.requirement import requirement_text
from sweep.views.box_lines import box_lines, jump_line
from sweep.views.sheet import (
    caution_text,
    facts_table,
    half_sample_text,
    line,
    rests_on,
    title_line,
)


def robust_view(answer: RobustAnswer) -> RenderableType:
    """Which designs survive the box."""
    case = f", case {answer.case}" if answer.case else ""
    parts: list[RenderableType] = [title_line(f"Robust designs{case}")]
    required = "; ".join(requirement_text(item) for item in answer.requirements)
    parts.append(line(f"required at every node of the box: {required}"))
    parts += [line(text) for text in box_lines(answer, answer.shaken)]
    parts += [line(""), facts_table(_count_rows(answer)), line("")]
    parts += _box_parts(answer)
    if answer.worst:
        parts += [line(""), *_worst_parts(answer, answer.worst)]
    parts.append(line(""))
    parts += [line(text, "dim") for text in jump_line(answer.largest_jump)]
    if half_sample := half_sample_text(answer.grid):
        parts.append(line(half_sample, "dim"))
    parts += [rests_on(answer.nodes, answer.unknown_nodes), caution_text(answer.cautions)]
    return Group(*parts)


def _count_rows(answer: RobustAnswer) -> list[tuple[str, str]]:
    regions = "one region" if answer.regions == 1 else f"{answer.regions:,} separate regions"
    rows = [("designs", f"{answer.design_nodes:,} over {', '.join(answer.free) or 'nothing'}")]
    meeting = f"{answer.meets:,}  ({answer.share:.1%})"
    rows.append(("meet", f"{meeting}, in {regions}" if answer.meets else meeting))
    rows.append(("fail", f"{answer.fails:,}"))
    if answer.unknown:
        left = "; shaken, some leave what an axis can tell" if answer.shaken else ""
        rows.append(("unknown", f"{answer.unknown:,}, not counted as meeting{left}"))
    if answer.excluded:
        rows.append(("excluded", f"{answer.excluded:,}: the processor needs more than a period"))
    return rows


def _box_parts(answer: RobustAnswer) -> Iterable[RenderableType]:
    box = answer.largest_box
    if box is None:
        text = "the design that was named does not meet, so no box of designs can hold it"
        none = "no design is known to meet" if answer.unknown else "no design meets"
        yield line(text if answer.meets else none, "yellow")
        return
    around = " around the design that was named" if box.around else ""
    yield line(f"largest box of designs that all meet{around}: {box.nodes:,} nodes", "bold")
    if not box.exact:
        yield line(f"(the search was cut short; no box holds more than {box.at_most:,})", "yellow")
    yield facts_table([(name, _ends_text(answer, box, name)) for name in box.ends])
    if box.axis_ends:
        sides = ", ".join(f"{side} {name}" for name, side in box.axis_ends)
        yield line(f"at its axis end, so the box might go on: {sides}", "yellow")


def _ends_text(answer: RobustAnswer, box: LargestBox, name: str) -> str:
    axis = answer.grid.axis(name)
    low, high = box.ends[name]
    if low == high:
        return show_value(axis, low)
    return f"{show_value(axis, low)} to {show_value(axis, high)}"


def _worst_parts(answer: RobustAnswer, worst: WorstNode) -> Iterable[RenderableType]:
    decay = format_quantity(worst.decay_time_s, "s", digits=4)
    shaken = " and the neighbours it may move to" if answer.shaken else ""
    yield line(
        f"nearest to instability among what meets{shaken}: log_radius {worst.log_radius:.4g}, "
        f"decay time {decay}, at"
    )
    yield facts_table(
        [(name, show_value(answer.grid.axis(name), value)) for name, value in worst.at.items()]
    )
