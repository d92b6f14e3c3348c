"""Which design to choose: per sample period the best of those that survive a box.

Of the designs that meet, the one with the best worst case is taken; of equals the one with the
lowest log_radius, then the first in C order. Where none meets, the same is said of those that are
known to fail, those with no unknown node in the box first, so that the row shows what is missing.
Designs that cannot be built are never chosen.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from sweep.errors import QuestionError
from sweep.query.answers.choose import ChooseAnswer, ChooseRow, DelayLeft, Outcome
from sweep.query.answers.robust import LargestBox
from sweep.query.cautions import OVER_A_BOX
from sweep.query.choosing.best import Best, find_gain_box, read_best
from sweep.query.choosing.delay_left import find_delay_left
from sweep.query.choosing.periods import Periods, find_periods
from sweep.query.choosing.price import (
    PriceList,
    find_outcome,
    find_prices,
    plan_prices,
    recall_outcomes,
)
from sweep.query.choosing.surroundings import (
    find_axis_ends,
    find_beside_failing,
    find_box_range_ends,
    find_range_ends,
)
from sweep.query.extremes import Extreme, Places
from sweep.query.gaps import design_gaps, jump_without_gaps, unordered_dimensions
from sweep.query.largest_box import Box
from sweep.query.memo import Memo
from sweep.query.question import Demand, DesignQuestion, resolve_question
from sweep.query.scope import Scope
from sweep.query.select import Asked, resolve_names, value_at
from sweep.query.verdicts import FAILS, MEETS, NAMES, Codes
from sweep.query.worst import (
    LOG_RADIUS,
    WorstCases,
    find_worst_cases,
    find_worst_of_parts,
    narrow_box,
)

if TYPE_CHECKING:
    from sweep.store.atlas import StoredAtlas

DECAY_TIME = Extreme("decay_time", "max")
"""What every row tells, whatever is called best."""


def choose_designs(
    stored: StoredAtlas,
    demand: Demand,
    *,
    best: str = "decay_time",
    at: Mapping[str, Asked] | None = None,
    within: Mapping[str, Asked] | None = None,
    design: str = "",
    price: bool = False,
    memo: Memo | None = None,
) -> ChooseAnswer:
    """Choose a design at every sample period.

    Parameters
    ----------
    stored
        The atlas.
    demand
        The box to survive, what to meet there, how far designs are shaken.
    best
        What to choose by: a stored or derived quantity of which less or more is better, at its
        worst over the box; or ``gain_box``, the middle of the widest box of designs, all meeting,
        at that period.
    at, within
        Design axes that are fixed, or kept to a range.
    design
        Name of a design whose values come before ``at``, at any sample period.
    price
        Whether to tell what each tolerance costs.
    memo
        Where reductions are kept between questions.

    Raises
    ------
    QuestionError
        Whatever in it cannot be asked of this atlas.
    """
    held = [spec.name for spec in stored.measures]
    fixed = _fixed(stored, dict(at or {}), design)
    question = resolve_question(stored.grid, held, stored.title, demand, fixed, within or {})
    chosen = read_best(best, held, stored.title)
    periods = find_periods(question.scope)
    plan = plan_prices(question.scope) if price else None
    cases, outcomes = _reduce(stored, question, chosen, periods, plan, memo)
    rows = _rows(_Choice(stored, question, cases, chosen, periods))
    return ChooseAnswer(
        atlas_id=stored.atlas_id,
        title=stored.title,
        grid=stored.grid,
        best=best,
        rows=rows,
        slowest=_slowest(rows),
        best_row=_best_row(rows, chosen),
        slowest_is_axis_end=_is_axis_end(question.scope, _slowest(rows)),
        slowest_is_range_end=_is_range_end(question.scope, _slowest(rows)),
        slower_unknown=_slower_unknown(rows),
        base=outcomes[0],
        price=None if plan is None else find_prices(question.scope, plan, outcomes),
        **_facts(question, cases),
    )


def _fixed(stored: StoredAtlas, at: Mapping[str, Asked], design: str) -> dict[str, Asked]:
    """What ``at`` says, over what the design says of everything but the sample period."""
    if not design:
        return dict(at)
    named = {found.name: found.values for found in stored.designs}
    if design not in named:
        raise QuestionError(
            f"looking for design {design!r}: this atlas holds {', '.join(named) or 'no designs'}",
            where=[design],
            remedy="name one of them, or give its values with --at",
        )
    taken = set(resolve_names(stored.grid, at))
    taken |= {axis.name for axis in stored.grid.axes if "sample_period" in axis.sets}
    return {axis: value for axis, value in named[design].items() if axis not in taken} | dict(at)


def _reduce(
    stored: StoredAtlas,
    question: DesignQuestion,
    best: Best,
    periods: Periods,
    plan: PriceList | None,
    memo: Memo | None,
) -> tuple[WorstCases, list[Outcome]]:
    """The worst cases over the box, and what it and its parts leave to choose from.

    One pass over the atlas; none when both are kept.
    """
    scope, required, windows = question.scope, question.requirements, question.windows
    also = (DECAY_TIME, best.extreme)
    seen: list[WorstCases] = []

    def reduce_parts(parts: Sequence[Places]) -> Iterator[Outcome]:
        found = find_worst_of_parts(
            stored, stored.structure, scope, required, parts, also=also, windows=windows
        )
        for part, cases in zip(parts, found, strict=True):
            if not seen:
                seen.append(cases)
            yield find_outcome(cases, best, find_periods(narrow_box(scope, part)))

    outcomes = []
    if plan is not None and len(plan.parts) > 1:
        outcomes = recall_outcomes(stored, question, best, plan, reduce_parts, memo)
    if not seen:
        seen.append(
            find_worst_cases(
                stored, stored.structure, scope, required, also=also, windows=windows, memo=memo
            )
        )
    return seen[0], outcomes or [find_outcome(seen[0], best, periods)]


def _facts(question: DesignQuestion, cases: WorstCases) -> dict[str, Any]:
    """Fields of the answer that tell what was asked, and what every design came to."""
    scope, verdict = question.scope, cases.verdict
    meets = verdict == MEETS
    log_radius = cases.found.worst[LOG_RADIUS]
    return {
        "case": question.demand.name,
        "requirements": question.requirements,
        "over": scope.over(),
        "widened": scope.widened,
        "at": dict(scope.at),
        "bracketed": scope.brackets(),
        "shaken": {name: str(reach) for name, reach in question.demand.shake.items()},
        "free": tuple(scope.grid.axes[axis].name for axis in scope.free),
        "design_nodes": verdict.size,
        "largest_jump": jump_without_gaps(
            log_radius, meets, design_gaps(scope), unordered_dimensions(scope)
        ),
        "nodes": scope.nodes,
        "unknown_nodes": cases.found.unknown_nodes,
        "cautions": OVER_A_BOX,
        **_count_words(verdict),
    }


@dataclass(frozen=True, eq=False)
class _Choice:
    """Everything that a row is made from."""

    stored: StoredAtlas
    question: DesignQuestion
    cases: WorstCases
    best: Best
    periods: Periods

    def row(self, number: int) -> ChooseRow:
        """The choice at one sample period."""
        scope, periods = self.cases.scope, self.periods
        codes = periods.designs(self.cases.verdict, number)
        counts = _count_words(codes)
        meets = _meets(counts)
        box = find_gain_box(self.cases, periods, number) if self.best.is_box else None
        design = self._design(number, box)
        return ChooseRow(
            sample_period_s=float(periods.values_s[number]),
            meets=meets,
            design=None if design is None else self.cases.design_at(design),
            worst={} if design is None else self._worst(design),
            at={} if design is None else self.cases.place_of(self.best.extreme, design),
            delay_left=self._delay_left(design) if design is not None and meets else None,
            axis_ends=() if design is None else find_axis_ends(scope, design),
            range_ends=() if design is None else find_range_ends(scope, design),
            beside_failing=find_beside_failing(self.cases, design)
            if design is not None and meets
            else (),
            box=None if box is None else self._named(box),
            box_range_ends=(
                () if box is None else find_box_range_ends(scope, box, periods.dimension)
            ),
            verdicts=counts,
        )

    def _design(self, number: int, box: Box | None) -> tuple[int, ...] | None:
        """Place along every free axis of the design to choose."""
        if box is not None:
            middle = tuple((a + b) // 2 for a, b in zip(box.low, box.high, strict=True))
            return self.periods.place(number, middle)
        codes = self.periods.designs(self.cases.verdict, number)
        for code in (MEETS, FAILS):
            if (codes == code).any():
                flat = self._best_of(number, codes == code)
                others = tuple(int(i) for i in np.unravel_index(flat, codes.shape))
                return self.periods.place(number, others)
        return None

    def _best_of(self, number: int, among: NDArray[np.bool_]) -> int:
        """Flat index of the best of some designs at one period."""
        left = np.flatnonzero(among)
        found, best = self.cases.found, self.best.extreme
        for values, sense in (
            (found.unknown, ""),
            (found.worst[best], best.sense),
            (found.worst[LOG_RADIUS], "max"),
        ):
            picked = self.periods.designs(values, number).reshape(-1)[left].astype(np.float64)
            score = {"": picked > 0, "max": picked, "min": -picked}[sense]
            score = np.where(np.isnan(picked), np.inf, score)
            left = left[score == score.min()]
        return int(left[0])

    def _worst(self, design: tuple[int, ...]) -> dict[str, float]:
        """By quantity; with its sense before it where the other end of it is told as well."""
        worst: dict[str, float] = {}
        found = self.cases.found.worst
        for extreme in dict.fromkeys((LOG_RADIUS, DECAY_TIME, self.best.extreme, *found)):
            name = extreme.quantity
            told = f"{extreme.sense}_{name}" if name in worst else name
            worst[told] = float(found[extreme][design])
        return worst

    def _delay_left(self, design: tuple[int, ...]) -> tuple[DelayLeft, ...] | None:
        return find_delay_left(self.stored, self.cases.scope, self.question.windows, design)

    def _named(self, box: Box) -> LargestBox:
        scope = self.cases.scope
        others = [axis for i, axis in enumerate(scope.free) if i != self.periods.dimension]
        ends, axis_ends = {}, []
        for position, low, high in zip(others, box.low, box.high, strict=True):
            axis, nodes = scope.grid.axes[position], scope.spans[position]
            first, last = int(nodes[low]), int(nodes[high])
            ends[axis.name] = value_at(axis, first), value_at(axis, last)
            if len(nodes) > 1 and not (axis.is_row_axis and not axis.ordered):
                sides = (("low", first == 0), ("high", last == len(axis) - 1))
                axis_ends += [(axis.name, side) for side, is_end in sides if is_end]
        return LargestBox(ends, box.nodes, box.exact, box.at_most, tuple(axis_ends))


def _count_words(codes: Codes) -> dict[str, int]:
    """How many designs have each verdict."""
    return {word: int(np.count_nonzero(codes == code)) for code, word in NAMES.items()}


def _meets(counts: Mapping[str, int]) -> bool | None:
    """Whether a design meets; `None` when that is not known of a single one."""
    if counts["meets"]:
        return True
    return None if counts["unknown"] and not counts["fails"] else False


def _rows(choice: _Choice) -> tuple[ChooseRow, ...]:
    return tuple(choice.row(number) for number in range(len(choice.periods.values_s)))


def _slowest(rows: Sequence[ChooseRow]) -> ChooseRow | None:
    """The first with the largest sample period of those that meet."""
    meeting = [row for row in rows if row.meets]
    return max(meeting, key=lambda row: row.sample_period_s, default=None)


def _best_row(rows: Sequence[ChooseRow], best: Best) -> ChooseRow | None:
    """Of the rows that meet the one with the best; of equals that with the shortest period."""

    def score(row: ChooseRow) -> float:
        if best.is_box:
            return float(-row.box.nodes if row.box else 0)
        value = row.worst[best.extreme.quantity]
        return value if best.extreme.sense == "max" else -value

    meeting = [row for row in rows if row.meets]
    return min(meeting, key=lambda row: (score(row), row.sample_period_s), default=None)


def _slower_unknown(rows: Sequence[ChooseRow]) -> int:
    """Designs of which nothing is known at periods slower than the slowest that meets."""
    slowest = _slowest(rows)
    edge_s = slowest.sample_period_s if slowest else 0.0
    return sum(row.verdicts["unknown"] for row in rows if row.sample_period_s > edge_s)


def _is_axis_end(scope: Scope, slowest: ChooseRow | None) -> bool:
    """Whether the atlas holds no slower period, though it holds several."""
    for axis in scope.grid.axes:
        if "sample_period" in axis.sets and len(axis) > 1 and slowest is not None:
            return slowest.sample_period_s >= float(axis.values_of("sample_period").max())
    return False


def _is_range_end(scope: Scope, slowest: ChooseRow | None) -> bool:
    """Whether the atlas holds a slower period, and the question leaves all of them out."""
    for position, axis in enumerate(scope.grid.axes):
        if "sample_period" in axis.sets and axis.name not in scope.at and position in scope.free:
            every_s = axis.values_of("sample_period")
            asked_s = every_s[scope.spans[position]]
            left_out = bool(asked_s.max() < every_s.max())
            return (
                left_out and slowest is not None and slowest.sample_period_s >= float(asked_s.max())
            )
    return False
