"""Verdicts for people: one block for each design and case, the verdict first."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from sweep.grid import Axis, Grid
from sweep.quantities import format_quantity
from sweep.query.answers import (
    DesignVerdict,
    Distance,
    GainFall,
    JudgeAnswer,
    Line,
    show_value,
)
from sweep.query.judging.tolerance import Acceptance, InHand
from sweep.query.judging.yields import Yield
from sweep.query.select import Value
from sweep.query.verdicts import Verdict
from sweep.views.box_lines import jump_line, range_text
from sweep.views.columns import head, number
from sweep.views.sheet import (
    CANNOT_BE_BUILT,
    caution_text,
    cells,
    half_sample_text,
    line,
    plain_table,
    rests_on,
    title_line,
)

STYLES: Mapping[Verdict, str] = {
    "meets": "bold green",
    "fails": "bold red",
    "unknown": "bold yellow",
    "excluded": "bold red",
}

MOST_BLOCKS = 12
"""Blocks that are shown; beyond them the summary alone, and the blocks of what does not meet."""

_DIGITS = 5


def judge_view(answer: JudgeAnswer) -> RenderableType:
    """Every verdict, with what it rests on."""
    parts: list[RenderableType] = []
    if len(answer.designs) > 1:
        parts += [*_summary(answer), line("")]
    shown = _blocks(answer)
    for found in shown:
        parts += [*_block(answer.grid, found), line("")]
    if left := len(answer.designs) - len(shown):
        parts.append(
            line(f"{left:,} more stand in the summary only; name one with --design", "yellow")
        )
    if half_sample := half_sample_text(answer.grid):
        parts.append(line(half_sample, "dim"))
    nodes = sum(found.nodes for found in answer.designs)
    unknown = sum(found.unknown for found in answer.designs)
    parts += [rests_on(nodes, unknown), caution_text(answer.cautions)]
    return Group(*parts)


def _blocks(answer: JudgeAnswer) -> Sequence[DesignVerdict]:
    if len(answer.designs) <= MOST_BLOCKS:
        return answer.designs
    bad = [found for found in answer.designs if found.verdict != "meets"]
    return bad[:MOST_BLOCKS]


def _summary(answer: JudgeAnswer) -> Iterable[RenderableType]:
    counts = {
        word: sum(found.verdict == word for found in answer.designs)
        for word in ("meets", "fails", "unknown")
    }
    meets, fails, unknown = counts.values()
    yield title_line(f"{meets:,} meet, {fails:,} fail, {unknown:,} unknown")
    table = plain_table(
        "design", "case", "verdict", "decay time", "radius", "what it misses, or its worst node"
    )
    for found in answer.designs:
        table.add_row(
            *cells(found.design, found.case or "-"),
            line(found.verdict, STYLES[found.verdict]),
            *cells(
                _number(found.decay_time.value, "s"),
                f"{found.radius:.{_DIGITS}g}",
                _worst_line(answer.grid, found),
            ),
        )
    yield table


def _worst_line(grid: Grid, found: DesignVerdict) -> str:
    """The first line that does not meet, else where the decay is slowest."""
    for item in found.lines:
        if item.verdict != "meets":
            return f"{item.text}: {item.verdict}"
    return place_text(grid, found.log_radius.at) or "its only node"


def _block(grid: Grid, found: DesignVerdict) -> Iterable[RenderableType]:
    heading = Text()
    heading.append_text(line(found.verdict.upper(), STYLES[found.verdict]))
    heading.append_text(line(f"  {found.design}", "bold"))
    heading.append_text(line(f" in {found.case}" if found.case else " in the box asked for"))
    yield heading
    yield line(f"  {place_text(grid, found.at)}")
    yield from (line(f"  {text}", style) for text, style in _box_texts(grid, found))
    yield line("")
    yield _lines_table(grid, found.lines)
    if found.distances:
        yield line("")
        yield _distances_table(grid, found.distances)
        if any(distance.end == "excluded" for distance in found.distances):
            yield line(CANNOT_BE_BUILT, "dim")
    yield line("")
    yield from _remarks(grid, found)


def _box_texts(grid: Grid, found: DesignVerdict) -> Iterable[tuple[str, str]]:
    if found.over:
        ends = (f"{name} {range_text(grid.axis(name), e)}" for name, e in found.over.items())
        yield f"worst over {'; '.join(ends)}", ""
    if found.widened:
        names = ", ".join(found.widened)
        yield f"a bound of {names} lay between nodes: the next node outward was taken in", "yellow"
    for name, pair in found.brackets.items():
        ends_text = range_text(grid.axis(name), pair)
        if name in found.shaken:
            yield f"{name} lies between the nodes {ends_text}", "yellow"
        else:
            yield f"{name} bracketed: the worst of the nodes {ends_text} counts", "yellow"
    for name, (reach, low, high) in found.shaken.items():
        ends_text = range_text(grid.axis(name), (low, high))
        yield f"{name} shaken by {reach}: the worst of the nodes {ends_text} counts", ""


def _lines_table(grid: Grid, lines: Sequence[Line]) -> Table:
    table = plain_table("required", "worst", "where", "verdict")
    for item in lines:
        unknown = f" ({item.unknown:,} nodes unknown)" if item.unknown else ""
        table.add_row(
            *cells(item.text, _worst_text(item), _where_text(grid, item)),
            line(item.verdict, STYLES[item.verdict]).append_text(line(unknown)),
        )
    return table


def _where_text(grid: Grid, item: Line) -> str:
    if math.isnan(item.worst):
        return ""
    return place_text(grid, item.at) or "its only node"


def _worst_text(item: Line) -> str:
    if item.require == "stable":
        return f"log_radius {_number(item.worst, '1')}"
    return _number(item.worst, item.unit)


def _distances_table(grid: Grid, distances: Sequence[Distance]) -> Table:
    table = plain_table("stable along", "from", "down to", "up to")
    for down, up in zip(distances[::2], distances[1::2], strict=True):
        axis = grid.axis(down.axis)
        low, high = number(axis, down.start), number(axis, up.start)
        first = line(head(axis.name, axis))
        if down.role == "tolerance":
            first.append("\n").append_text(line("  past the box", "dim"))
        start = line(low if low == high else f"{low} to {high}")
        table.add_row(first, start, _distance_cell(axis, down), _distance_cell(axis, up))
    return table


def _distance_cell(axis: Axis, distance: Distance) -> Text:
    """Where stability ends and how, and below it how far that is."""
    at = number(axis, distance.to)
    if distance.end == "axis_end":
        cell = line(f"beyond the axis end, {at}")
    elif distance.end == "unknown":
        cell = line(f"{at}, next node unknown", "yellow")
    elif distance.end == "excluded":
        cell = line(f"{at}, next node cannot be built")
    else:
        cell = line(f"{at}, {_how(distance)}")
    if far := _far_text(axis, distance):
        cell.append("\n").append_text(line(f"  {far}", "dim"))
    return cell


def _how(distance: Distance) -> str:
    if distance.kind == "oscillation" and distance.hz is not None:
        return f"oscillation {format_quantity(distance.hz, 'Hz', digits=4)}"
    return distance.kind or "boundary"


def _far_text(axis: Axis, distance: Distance) -> str:
    if distance.by is None or distance.by == 0.0:
        return ""
    more = {"boundary": "by ", "excluded": "by at least "}.get(distance.end, "by more than ")
    texts = [f"{more}{number(axis, distance.by)}"]
    if distance.percent is not None:
        texts.append(f"{distance.percent:.3g} %")
    if distance.db is not None:
        texts.append(f"{distance.db:+.1f} dB")
    return ", ".join(texts)


def _remarks(grid: Grid, found: DesignVerdict) -> Iterable[RenderableType]:
    """What is left, and what to beware of."""
    if not found.distances:
        yield line(f"no distances: it {_what_is_missing(found)} at every node of the box", "yellow")
    if found.tolerances_skipped:
        yield line(f"not told: {found.tolerances_skipped}", "yellow")
    if found.in_hand:
        yield line(_in_hand_text(grid, found.in_hand))
    yield from (line(text) for text in _hurt_texts(grid, found))
    if found.acceptance:
        yield line(_acceptance_text(grid, found.acceptance))
    tables = [one for one in found.yields if one.rows > 1]
    yield from (line(text) for one in tables for text in _yield_texts(one))
    if found.distances:
        text, style = _gain_fall_text(grid, found.gain_fall)
        yield line(text, style)
    yield from (line(text, "dim") for text in jump_line(found.largest_jump))


def _what_is_missing(found: DesignVerdict) -> str:
    stable = {"fails": "is not stable", "unknown": "is not known to be stable"}
    return stable.get(found.lines[0].verdict, "cannot be built")


def _in_hand_text(grid: Grid, found: InHand) -> str:
    """How far the box may grow; where an axis ends, that it is at least so much."""
    axes = ", ".join(found.growing)
    times = f"the box ({axes}) may grow {found.holds_to:.4g} times"
    if math.isinf(found.holds_to):
        return f"in hand: the box ({axes}) may grow as far as it can"
    if found.end == "axis_end":
        if found.holds_to == 1.0:
            return f"in hand: cannot be told, the box reaches the axis end of {found.stopped_by}"
        reach = f"{times}, to the axis end of {found.stopped_by}"
        return f"more than {found.percent:.3g} % in hand: {reach}"
    stopped = f"{found.end} at {place_text(grid, found.stopped_at or {})}"
    if found.stopped_by:
        stopped += f", reached along {found.stopped_by}"
    if found.end == "unknown" and found.holds_to <= 1.0:
        return f"in hand: cannot be told, {stopped}"
    if found.holds_to == 0.0:
        return f"nothing in hand: it {stopped}"
    if found.holds_to < 1.0:
        return f"nothing in hand: the box holds shrunk to {found.holds_to:.4g} of itself; {stopped}"
    return f"{found.percent:.3g} % in hand: {times}; {stopped}"


def _acceptance_text(grid: Grid, found: Acceptance) -> str:
    nodes = found.meets + found.fails + found.unknown
    text = f"acceptance: {found.meets:,} of {nodes:,} tolerance nodes meet"
    if found.rows:
        text += f", each with every row of {', '.join(found.rows)}"
    if found.unknown:
        text += f", {found.unknown:,} are unknown"
    if found.largest_box is None:
        return text
    text += f"; the largest box of them: {_ends_text(grid, found.largest_box)}"
    if not found.exact:
        text += f" ({found.nodes:,} nodes; none holds more than {found.at_most:,})"
    if found.holds_nominal:
        return f"{text}, the nominal inside"
    if found.around_nominal is None:
        return f"{text}; the nominal does not meet"
    return f"{text}; the largest that holds the nominal: {_ends_text(grid, found.around_nominal)}"


def _ends_text(grid: Grid, box: Mapping[str, tuple[Value, Value]]) -> str:
    return ", ".join(f"{name} {range_text(grid.axis(name), ends)}" for name, ends in box.items())


def _yield_texts(found: Yield) -> Iterable[str]:
    text = f"yield over {found.axis}: {found.meets:,} of {found.rows:,} rows meet"
    if found.unknown:
        text += f" ({found.unknown:,} unknown count as failing)"
    if found.weighted_share is not None:
        text += f", {found.weighted_share:.1%} by weight"
    if found.worst:
        text += f"; worst {found.worst.row}, log_radius {_number(found.worst.log_radius, '1')}"
    yield text
    yield (
        f"  if the rows are a random sample: {found.low:.1%} to {found.high:.1%}, at least "
        f"{found.at_least:.1%}, at {found.confidence:g} confidence"
    )


def _hurt_texts(grid: Grid, found: DesignVerdict) -> Iterable[str]:
    if not found.hurts_most:
        return
    first, *rest = found.hurts_most
    if any(math.isnan(value) for hurt in found.hurts_most for value in (hurt.alone, hurt.nominal)):
        yield "which tolerance hurts most cannot be told: nodes are unknown"
        return
    where = show_value(grid.axis(first.axis), first.at)
    yield (
        f"{first.axis} hurts most: alone, at {where}, it takes log_radius from "
        f"{_number(first.nominal, '1')} to {_number(first.alone, '1')}"
        + "".join(f"; {hurt.axis} to {_number(hurt.alone, '1')}" for hurt in rest)
    )


def _gain_fall_text(grid: Grid, fall: GainFall) -> tuple[str, str]:
    names = f"{' and '.join(fall.scaled)} {'are' if len(fall.scaled) > 1 else 'is'}"
    if fall.conditionally_stable:
        text = (
            f"conditionally stable: scaled down to {fall.factor:.3g} "
            f"({place_text(grid, fall.at)}) it is not stable; saturation does that to a gain"
        )
        if fall.stopped_by:
            text += f"; perhaps earlier, below {fall.followed_to:.3g}: {fall.stopped_by}"
        return text, "bold yellow"
    if fall.conditionally_stable is not None:
        return f"not conditionally stable: it stays stable as {names} scaled down to 0", ""
    if fall.followed_to is None or fall.followed_to == 1.0:
        return f"whether it is conditionally stable cannot be told: {fall.stopped_by}", "yellow"
    return (
        f"as far as the nodes tell, it stays stable as {names} scaled down to "
        f"{fall.followed_to:.3g}; below that cannot be told: {fall.stopped_by}"
    ), "yellow"


def place_text(grid: Grid, place: Mapping[str, Value]) -> str:
    """Coordinates with their axes, on one line."""
    return ", ".join(f"{name} {show_value(grid.axis(name), v)}" for name, v in place.items())


def _number(value: float, unit: str) -> str:
    if math.isinf(value):
        return "unbounded"
    return format_quantity(value, unit, digits=_DIGITS)
