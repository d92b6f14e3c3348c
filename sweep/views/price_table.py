"""What each tolerance costs: a sentence that says where to spend, and the numbers behind it."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich.console import RenderableType
from rich.table import Table

from sweep.grid import Axis
from sweep.quantities import format_quantity
from sweep.query.answers import ChooseAnswer, Outcome, Price, show_value
from sweep.query.answers.choose import GAIN_BOX
from sweep.query.derived import spec_of
from sweep.query.select import Value
from sweep.views.columns import number, unit_name
from sweep.views.sheet import cells, line, plain_table


def price_parts(answer: ChooseAnswer) -> Iterable[RenderableType]:
    """The price of tolerances; nothing when it was not asked."""
    prices = answer.price or ()
    yield line("What the tolerances cost", "bold")
    yield line(price_sentence(answer))
    if not prices:
        return
    yield line("")
    yield _price_table(answer, prices)
    if any(price.halved_is_whole for price in prices):
        yield line(
            "'same nodes': half the range takes in the same nodes as all of it; sweep that axis "
            "more finely to price it",
            "dim",
        )
    if answer.unknown_nodes:
        yield line("unknown designs count as not meeting, before and after", "yellow")


def period_unit(answer: ChooseAnswer) -> str:
    """The one unit of all sample periods of an answer: that in which the largest is no fraction."""
    largest_s = max(row.sample_period_s for row in answer.rows)
    return format_quantity(largest_s, "s").partition(" ")[2]


def period_text(answer: ChooseAnswer, period_s: float) -> str:
    """A sample period for people."""
    return format_quantity(period_s, "s", period_unit(answer), digits=5)


def price_sentence(answer: ChooseAnswer) -> str:
    """Which tolerance to tighten first, and which brings nothing."""
    prices = answer.price or ()
    if not prices:
        return "no tolerance has a range in this box"
    paid = [price for price in prices if not price.brings_nothing]
    idle = [price.axis for price in prices if price.brings_nothing]
    if not paid:
        return f"tightening {_listed(idle)} brings nothing, one at a time"
    first = f"tighten {paid[0].axis} first"
    then = f", then {', then '.join(price.axis for price in paid[1:])}" if paid[1:] else ""
    verb = "bring" if len(idle) > 1 else "brings"
    return first + then + (f"; {_listed(idle)} {verb} nothing" if idle else "")


def _listed(names: Sequence[str]) -> str:
    return " and ".join(filter(None, [", ".join(names[:-1]), names[-1]]))


def _price_table(answer: ChooseAnswer, prices: Sequence[Price]) -> Table:
    box = answer.best == GAIN_BOX
    best = "widest gain box" if box else f"best worst {answer.best.replace('_', ' ')}"
    table = plain_table("tolerance", "range", "designs that meet", "more", best, "slowest period")
    for column in (2, 3, 4, 5):
        table.columns[column].justify = "right"
    table.add_row(*cells("the whole box", "", *_outcome_texts(answer, answer.base)))
    for price in prices:
        axis = answer.grid.axis(price.axis)
        parts = (("halved", price.halved), ("removed", price.removed))
        for word, outcome in parts:
            if outcome is None:
                continue
            span = _range_text(axis, outcome.over[price.axis])
            if word == "halved" and price.halved_is_whole:
                span += ", same nodes"
            texts = _outcome_texts(answer, outcome)
            table.add_row(*cells(f"{price.axis} {word}", span, *texts))
    return table


def _range_text(axis: Axis, ends: Sequence[Value]) -> str:
    if axis.is_row_axis or ends[0] == ends[-1]:
        return show_value(axis, ends[0])
    return f"{number(axis, ends[0])} to {number(axis, ends[-1])} {unit_name(axis)}".strip()


def _outcome_texts(answer: ChooseAnswer, outcome: Outcome) -> list[str]:
    more = outcome.meets - answer.base.meets
    share = f"{outcome.meets:,} ({outcome.share:.1%})"
    slowest_s = outcome.slowest_s
    slowest = "none" if slowest_s is None else period_text(answer, slowest_s)
    gained = f"+{more:,}" if more else ""
    return [share, gained, _best_text(answer, outcome.best), slowest]


def _best_text(answer: ChooseAnswer, best: float | None) -> str:
    if best is None:
        return "none"
    if answer.best == GAIN_BOX:
        return f"{best:,.0f} nodes"
    return format_quantity(best, spec_of(answer.best).unit, digits=4)
