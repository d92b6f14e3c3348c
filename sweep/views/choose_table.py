"""The choice as a trade-off table: one line for each sample period, then what tolerances cost."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

from rich.console import Group, RenderableType
from rich.table import Table

from sweep.grid import Axis
from sweep.quantities import format_quantity
from sweep.query.answers import ChooseAnswer, ChooseRow, DelayLeft, show_value
from sweep.query.answers.choose import GAIN_BOX
from sweep.query.derived import spec_of
from sweep.query.requirement import requirement_text
from sweep.query.select import Value
from sweep.views.box_lines import box_lines, jump_line
from sweep.views.columns import head, number
from sweep.views.price_table import period_text, period_unit, price_parts
from sweep.views.sheet import (
    caution_text,
    cells,
    half_sample_text,
    line,
    plain_table,
    rests_on,
    title_line,
)

ROWS = 24
"""Sample periods that the table shows unless it is asked for more."""

_WORDS = {True: "meets", False: "fails", None: "unknown"}
_END, _EDGE, _RANGE_END = "|", "!", "*"
_MARKS = (
    f"'{_END}': at an axis end, so that more may lie beyond; "
    f"'{_EDGE}': along this axis a neighbour does not meet, or is not known to"
)
_RANGE_MARK = (
    f"'{_RANGE_END}': at the end of the range asked for with --within; what lies beyond it was not "
    "judged"
)
_MORE = ">"
_LEFT = "left: from the box until stability is lost; what else is required may fail sooner"
_BEYOND = (
    f"'{_MORE}': still stable there, at the axis end; what is left lies beyond it ('?': the next "
    "node is unknown)"
)


def choose_view(answer: ChooseAnswer, most_rows: int = ROWS) -> RenderableType:
    """The best design at each sample period, the slowest of them, and what to beware of.

    Parameters
    ----------
    answer
        What was found.
    most_rows
        Rows to show; the slowest, the best, and both sides of every change from meeting to failing
        come first, then rows spread over the rest.
    """
    case = f", case {answer.case}" if answer.case else ""
    required = "; ".join(requirement_text(item) for item in answer.requirements)
    parts: list[RenderableType] = [
        title_line(f"Best design at each sample period by {_best_words(answer)}{case}"),
        line(f"required at every node of the box: {required}"),
        *(line(text) for text in box_lines(answer, answer.shaken)),
        *(line(text) for text in _fixed_lines(answer)),
        line(""),
        *_summary(answer),
        line(""),
        *_table_parts(answer, most_rows),
    ]
    if answer.price is not None:
        parts += [line(""), *price_parts(answer)]
    parts.append(line(""))
    parts += [line(text, "dim") for text in jump_line(answer.largest_jump)]
    if half_sample := half_sample_text(answer.grid):
        parts.append(line(half_sample, "dim"))
    parts += [rests_on(answer.nodes, answer.unknown_nodes), caution_text(answer.cautions)]
    return Group(*parts)


def pick_rows(answer: ChooseAnswer, most: int) -> list[int]:
    """Which rows to show when there are more than ``most``: numbers, increasing.

    The slowest and the best always; then both sides of every change from meeting to not meeting;
    then rows spread evenly.
    """
    rows, count = answer.rows, len(answer.rows)
    if count <= most:
        return list(range(count))
    told = [i for i, row in enumerate(rows) if row in (answer.slowest, answer.best_row)]
    changes = [i for i in range(1, count) if _verdict_word(rows[i]) != _verdict_word(rows[i - 1])]
    sides = [side for i in changes for side in (i - 1, i)]
    kept = list(dict.fromkeys([*told, *sides]))[: max(most, len(told))]
    free = [i for i in range(count) if i not in set(kept)]
    spare = max(0, most - len(kept))
    spread = [free[round(k * (len(free) - 1) / max(1, spare - 1))] for k in range(spare)]
    return sorted({*kept, *spread})


def _best_words(answer: ChooseAnswer) -> str:
    return "widest gain box" if answer.best == GAIN_BOX else f"worst {_words(answer.best)}"


def _words(quantity: str) -> str:
    return quantity.replace("_", " ")


def _verdict_word(row: ChooseRow) -> str:
    return "cannot be built" if row.excluded else _WORDS[row.meets]


def _fixed_lines(answer: ChooseAnswer) -> Iterable[str]:
    fixed = {name: value for name, value in answer.at.items() if name not in answer.bracketed}
    if fixed:
        yield f"fixed: {_place_text(answer, fixed)}"


def _summary(answer: ChooseAnswer) -> Iterable[RenderableType]:
    meeting = sum(row.meets is True for row in answer.rows)
    counts = f"{answer.meets:,} of {answer.design_nodes:,} designs meet ({answer.base.share:.1%})"
    counts += f", at {meeting:,} of {len(answer.rows):,} sample periods"
    others = [("unknown", answer.unknown), ("cannot be built", answer.excluded)]
    counts += "".join(f"; {count:,} {word}" for word, count in others if count)
    yield line(counts)
    if answer.slowest is None:
        some = ", as far as it is known" if answer.unknown else ""
        yield line(f"No design meets at any sample period{some}", "yellow")
    else:
        label = "slowest" if len(answer.rows) > 1 else "best"
        yield line(f"{label}: {_row_text(answer, answer.slowest)}", "bold")
    for text in _slowest_warnings(answer):
        yield line(f"  {text}", "yellow")
    if answer.best_row is not None and answer.best_row is not answer.slowest:
        yield line(f"best:    {_row_text(answer, answer.best_row)}", "bold")
        for text in _warnings(answer, answer.best_row):
            yield line(f"  {text}", "yellow")


def _row_text(answer: ChooseAnswer, row: ChooseRow) -> str:
    """A sample period with its design, in one line."""
    period = period_text(answer, row.sample_period_s)
    design = {k: v for k, v in (row.design or {}).items() if not _is_period(answer, k)}
    worst = _quantity_text("decay_time", row.worst["decay_time"])
    pieces = [f"{period} ({format_quantity(1 / row.sample_period_s, 'Hz', digits=4)})"]
    if design:
        pieces.append(f"with {_place_text(answer, design)}")
    found = f"{' '.join(pieces)}; worst decay time {worst}"
    if answer.best not in (GAIN_BOX, "decay_time"):
        value = _quantity_text(answer.best, row.worst[answer.best])
        found += f", worst {_words(answer.best)} {value}"
    if row.box is not None:
        found += f"; box of {row.box.nodes:,} nodes"
    left = (f"; {item.axis} left {_left_text(item)}" for item in row.delay_left or ())
    return found + "".join(left)


def _slowest_warnings(answer: ChooseAnswer) -> Iterable[str]:
    """What to beware of at the slowest period."""
    slowest = answer.slowest
    if slowest is not None:
        if answer.slowest_is_axis_end:
            yield "the slowest that still meets lies beyond the axis end: no slower one was swept"
        elif answer.slowest_is_range_end:
            yield "no slower period was asked about: widen --within to see whether one meets"
        missed = sum(
            row.meets is not True and row.sample_period_s < slowest.sample_period_s
            for row in answer.rows
        )
        if missed:
            yield f"not every faster one will do: at {missed:,} of them no design meets"
        yield from _warnings(answer, slowest)
    if answer.slower_unknown:
        slower = "slower than that" if slowest else "among all"
        yield (
            f"{answer.slower_unknown:,} designs {slower} are unknown: one of them may meet; run "
            "its config again to compute them"
        )


def _warnings(answer: ChooseAnswer, row: ChooseRow) -> Iterable[str]:
    """What to beware of in a design that meets."""
    ends = [name for name in row.axis_ends if not _is_period(answer, name)]
    if ends:
        yield f"at the end of {', '.join(ends)}: a better design may lie beyond the axis end"
    limited = [name for name in row.range_ends if not _is_period(answer, name)]
    if limited:
        yield (
            f"at the end of the range asked for, along {', '.join(limited)}: what lies beyond it "
            "was not judged, better or failing"
        )
    if row.beside_failing:
        yield (
            f"beside a node that does not meet, along {', '.join(row.beside_failing)}: nothing is "
            "in hand there"
        )


def _table_parts(answer: ChooseAnswer, most_rows: int) -> Iterable[RenderableType]:
    shown = [answer.rows[i] for i in pick_rows(answer, most_rows)]
    same, differing = _deciding(shown)
    yield _table(answer, shown, differing)
    if same:
        yield line(f"{_place_text(answer, same)}: the worst in every row")
    if any(row.axis_ends or row.beside_failing or _box_ends(row) for row in shown):
        yield line(_MARKS, "dim")
    if any(row.range_ends or row.box_range_ends for row in shown):
        yield line(_RANGE_MARK, "dim")
    ends = {item.end for row in shown for item in row.delay_left or ()}
    if ends:
        yield line(_LEFT, "dim")
    if ends & {"axis_end", "unknown"}:
        yield line(_BEYOND, "dim")
    if left_out := len(answer.rows) - len(shown):
        yield line(
            f"{left_out:,} of {len(answer.rows):,} sample periods are left out here; list more "
            "with --rows, or all with --json",
            "yellow",
        )


def _deciding(rows: Sequence[ChooseRow]) -> tuple[dict[str, Value], list[str]]:
    """Axes that are worst at one node in every row, with it; axes that are not."""
    places = [row.at for row in rows if row.at]
    same: dict[str, Value] = {}
    differing: list[str] = []
    for name in places[0] if places else ():
        values = {place[name] for place in places}
        if len(values) == 1:
            same[name] = values.pop()
        else:
            differing.append(name)
    return same, differing


def _table(answer: ChooseAnswer, rows: Sequence[ChooseRow], differing: Sequence[str]) -> Table:
    """Coordinates bare below their units, so that a row is one line."""
    axes = [answer.grid.axis(name) for name in answer.grid.names if _is_told(answer, name)]
    told = next((list(row.worst) for row in rows if row.worst), [])
    quantities = [name for name in told if name != "log_radius" or answer.best == name]
    delays = [
        answer.grid.axis(item.axis)
        for item in next((row.delay_left for row in rows if row.delay_left), ())
    ]
    # beside the sides of a box there is no room for where its middle is at its worst
    worst = [answer.grid.axis(name) for name in differing if answer.best != GAIN_BOX]
    table = plain_table(
        f"period [{period_unit(answer)}]",
        "verdict",
        *(head(axis.name, axis) for axis in axes),
        *(["box nodes"] if answer.best == GAIN_BOX else []),
        *(f"worst {_words(name)}" for name in quantities),
        *(head(f"{axis.name} left", axis) for axis in delays),
        *(head(f"worst {axis.name}", axis) for axis in worst),
    )
    for column in table.columns:
        column.justify = "right"
    for column in table.columns[: 2 + len(axes)]:
        column.no_wrap = True
    for row in rows:
        period = period_text(answer, row.sample_period_s).partition(" ")[0]
        edged = any(_is_period(answer, name) for name in row.beside_failing)
        limited = any(_is_period(answer, name) for name in row.range_ends)
        texts = [_EDGE * edged + _RANGE_END * limited + period, _verdict_word(row)]
        texts += [_design_text(axis, row) for axis in axes]
        if answer.best == GAIN_BOX:
            texts.append(_nodes_text(row))
        texts += [_quantity_text(name, row.worst.get(name)) for name in quantities]
        texts += _left_numbers(row, delays)
        texts += [number(axis, row.at[axis.name]) if row.at else "" for axis in worst]
        table.add_row(*cells(*texts))
    return table


def _is_told(answer: ChooseAnswer, name: str) -> bool:
    """Whether an axis has a column: it is left free, and not the sample period's alone."""
    return name in answer.free and name not in answer.at and not _is_period(answer, name)


def _is_period(answer: ChooseAnswer, name: str) -> bool:
    return answer.grid.axis(name).sets == ("sample_period",)


def _design_text(axis: Axis, row: ChooseRow) -> str:
    """A design's value with what to beware of, and the side of the gain box around it."""
    if row.design is None:
        return ""
    marks = _EDGE * (axis.name in row.beside_failing)
    marks += _END * (axis.name in row.axis_ends) + _RANGE_END * (axis.name in row.range_ends)
    value = marks + number(axis, row.design[axis.name])
    if row.box is None or axis.name not in row.box.ends or axis.is_row_axis:
        return value
    ends = [
        _END * ((axis.name, side) in row.box.axis_ends)
        + _RANGE_END * ((axis.name, side) in row.box_range_ends)
        + number(axis, end)
        for side, end in zip(("low", "high"), row.box.ends[axis.name], strict=True)
    ]
    return f"{value} ({'..'.join(ends)})"


def _nodes_text(row: ChooseRow) -> str:
    if row.box is None:
        return ""
    return f"{row.box.nodes:,}" + ("" if row.box.exact else f", at most {row.box.at_most:,}")


def _left_numbers(row: ChooseRow, delays: Sequence[Axis]) -> list[str]:
    """How much of each delay is left, bare; `_MORE` where stability was not seen to end."""
    found = {item.axis: item for item in row.delay_left or ()}
    marks = {"axis_end": (_MORE, ""), "unknown": (_MORE, "?"), "excluded": ("", " period")}
    texts = []
    for axis in delays:
        if axis.name not in found:
            texts.append("")
            continue
        before, after = marks.get(found[axis.name].end, ("", ""))
        left = float(f"{found[axis.name].left:.3g}")
        texts.append(before + number(axis, left) + after)
    return texts


def _quantity_text(name: str, value: float | None) -> str:
    """The worst of a quantity; ``name`` may carry a sense before it."""
    if value is None or value != value:
        return "unknown" if value is not None else ""
    quantity = name.removeprefix("min_").removeprefix("max_")
    if value == float("inf"):
        return "no decay" if quantity == "decay_time" else "unbounded"
    spec = spec_of(quantity)
    return format_quantity(value, spec.unit, digits=4)


def _left_text(item: DelayLeft) -> str:
    """How much of a delay is left, and whether that is known to be all."""
    left = format_quantity(item.left, item.unit, digits=3)
    more = {
        "axis_end": " or more, beyond the axis end",
        "unknown": " or more, the next node is unknown",
        "excluded": ", until the processor takes a whole period",
    }
    return left + more.get(item.end, "")


def _box_ends(row: ChooseRow) -> set[str]:
    """Axes at whose end the gain box lies."""
    return {name for name, _ in row.box.axis_ends} if row.box else set()


def _place_text(answer: ChooseAnswer, place: Mapping[str, Value]) -> str:
    return ", ".join(
        f"{name} {show_value(answer.grid.axis(name), value)}" for name, value in place.items()
    )
