"""The price of tolerances: what would be left to choose from if one were halved, or gone."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from sweep.grid import Axis
from sweep.query.answers.choose import Outcome, Price
from sweep.query.blocks import Indices, Readable
from sweep.query.choosing.best import Best, find_gain_boxes
from sweep.query.choosing.periods import Periods
from sweep.query.derived import measures_needed
from sweep.query.extremes import Places
from sweep.query.gaps import unordered_dimensions
from sweep.query.memo import Memo
from sweep.query.question import DesignQuestion
from sweep.query.scope import Scope, box_ends
from sweep.query.verdicts import MEETS
from sweep.query.worst import WORTH_KEEPING, WorstCases, wanted_extremes


@dataclass(frozen=True)
class Narrowing:
    """One tolerance axis of the box, narrowed."""

    axis: int
    """Position in the grid."""
    halved: Indices | None
    """Places along its span that half the range takes in; ``None`` for rows."""
    removed: Indices
    """The place of the nominal node."""


@dataclass(frozen=True)
class PriceList:
    """Every narrowing of a box, and the parts of the box that they come to."""

    narrowings: tuple[Narrowing, ...]
    """One for each tolerance axis with several nodes in the box."""
    parts: tuple[Places, ...]
    """The whole box first; none twice."""
    halved: tuple[int | None, ...]
    """For each narrowing the part with half the range."""
    removed: tuple[int, ...]
    """For each narrowing the part with the nominal node."""


def plan_prices(scope: Scope) -> PriceList:
    """Which parts of the box the prices of its tolerances need."""
    whole = [np.arange(size, dtype=np.intp) for size in scope.box_shape]
    parts: dict[tuple[int, tuple[int, ...]], Places] = {}

    def part_of(axis: int, places: Indices | None) -> int | None:
        if places is None:
            return None
        if len(places) == len(scope.spans[axis]):
            return 0
        key = axis, tuple(places.tolist())
        narrowed = [
            places if position == axis else every
            for position, every in zip(scope.box, whole, strict=True)
        ]
        parts.setdefault(key, narrowed)
        return 1 + list(parts).index(key)

    narrowings = tuple(
        _narrowing(scope, axis) for axis in scope.tolerances if len(scope.spans[axis]) > 1
    )
    halved = tuple(part_of(item.axis, item.halved) for item in narrowings)
    removed = tuple(part_of(item.axis, item.removed) or 0 for item in narrowings)
    return PriceList(narrowings, (whole, *parts.values()), halved, removed)


def find_outcome(cases: WorstCases, best: Best, periods: Periods) -> Outcome:
    """What a box leaves to choose from; its ranges are those of the scope.

    Parameters
    ----------
    cases
        The worst of every design over the box.
    best
        What is called best.
    periods
        The sample periods that the box leaves.
    """
    meets = cases.verdict == MEETS
    count = int(np.count_nonzero(meets))
    slowest_s = best_value = None
    if count:
        slowest_s = float(periods.values_s[periods.any_per_row(meets)].max())
        best_value = _best_value(cases, best, periods)
    return Outcome(cases.scope.over(), count, count / meets.size, best_value, slowest_s)


def recall_outcomes(
    stored: Readable,
    question: DesignQuestion,
    best: Best,
    plan: PriceList,
    reduce_parts: Callable[[Sequence[Places]], Iterable[Outcome]],
    memo: Memo | None,
) -> list[Outcome]:
    """What each part of the box leaves to choose from, from the memo or else reduced and kept.

    The worst cases themselves are too many to keep: one number for each design and part.
    """
    if memo is None or question.scope.nodes < WORTH_KEEPING:
        return list(reduce_parts(plan.parts))
    wanted = wanted_extremes(question.requirements, [best.extreme])
    needed = sorted({m for item in wanted for m in measures_needed(item.quantity)})
    text = memo.recall_text(
        stored,
        needed,
        _asked(question, best, plan),
        lambda: json.dumps([found.to_json() for found in reduce_parts(plan.parts)]),
    )
    over = question.scope.over()
    return [
        Outcome(over, one["meets"], one["share"], _number(one["best"]), _number(one["slowest"]))
        for one in json.loads(text)
    ]


def _number(kept: float | str | None) -> float | None:
    """A number from a document, where what is unbounded is the text "inf"."""
    return None if kept is None else float(kept)


def find_prices(scope: Scope, plan: PriceList, outcomes: Sequence[Outcome]) -> tuple[Price, ...]:
    """What each tolerance costs, the dearest first.

    Ranked by the designs that meet once it is removed, then once it is halved; equals in the order
    of the axes.

    Parameters
    ----------
    scope
        Designs and box.
    plan
        See `plan_prices`.
    outcomes
        One for each part of it.
    """
    prices = [
        _price(scope, item, outcomes, halved, removed)
        for item, halved, removed in zip(plan.narrowings, plan.halved, plan.removed, strict=True)
    ]
    return tuple(sorted(prices, key=_dearest_first))


def _dearest_first(price: Price) -> tuple[int, int]:
    return -price.removed.meets, -(price.halved.meets if price.halved else 0)


def _asked(question: DesignQuestion, best: Best, plan: PriceList) -> dict[str, object]:
    """All that decides the outcomes, apart from the atlas."""
    scope = question.scope
    return {
        "answer": "price",
        "best": best.name,
        "spans": [nodes.tolist() for nodes in scope.spans],
        "box": list(scope.box),
        "at": dict(scope.at),
        "parts": [[places.tolist() for places in part] for part in plan.parts],
        "require": [[r.quantity, r.sense, r.limit] for r in question.requirements],
        "unordered": list(unordered_dimensions(scope)),
        "windows": [
            [w.axis, w.first.tolist(), w.last.tolist(), w.lost.tolist()] for w in question.windows
        ],
    }


def _price(
    scope: Scope, item: Narrowing, outcomes: Sequence[Outcome], halved: int | None, removed: int
) -> Price:
    whole = outcomes[0]
    half = None
    if item.halved is not None and halved is not None:
        half = _narrowed(scope, item, item.halved, outcomes[halved])
    gone = _narrowed(scope, item, item.removed, outcomes[removed])
    axis = scope.grid.axes[item.axis]
    # where nature varies the period, a narrower range of it is no gain in the slowest one
    told = 2 if "sample_period" in axis.sets else 3
    narrowed = [found for found in (half, gone) if found is not None]
    same = all(found.changes[:told] == whole.changes[:told] for found in narrowed)
    return Price(axis.name, len(scope.spans[item.axis]), half, gone, halved == 0, same)


def _narrowed(scope: Scope, item: Narrowing, places: Indices, found: Outcome) -> Outcome:
    axis = scope.grid.axes[item.axis]
    over = {axis.name: box_ends(axis, scope.spans[item.axis][places])}
    return Outcome(over, found.meets, found.share, found.best, found.slowest_s)


def _narrowing(scope: Scope, position: int) -> Narrowing:
    axis, nodes = scope.grid.axes[position], scope.spans[position]
    nominal = int(np.abs(nodes - axis.nominal).argmin())
    halved = None if axis.is_row_axis else _halved(axis, nodes, nominal)
    return Narrowing(position, halved, np.array([nominal], dtype=np.intp))


def _halved(axis: Axis, nodes: Indices, nominal: int) -> Indices:
    """Places of half the range about the nominal; a bound between nodes takes the next outward."""
    x = axis.coordinates[nodes]
    low, high = axis.snapped((x[nominal] + x[[0, -1]]) / 2)
    first = int(np.searchsorted(x, low, side="right")) - 1
    last = int(np.searchsorted(x, high, side="left"))
    return np.arange(first, last + 1, dtype=np.intp)


def _best_value(cases: WorstCases, best: Best, periods: Periods) -> float:
    """Of designs that meet; there is one."""
    if best.is_box:
        return float(max(box.nodes for box in find_gain_boxes(cases, periods) if box))
    values = cases.found.worst[best.extreme][cases.verdict == MEETS]
    return float(values.min() if best.extreme.sense == "max" else values.max())
