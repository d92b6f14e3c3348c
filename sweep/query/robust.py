"""Which designs survive a tolerance box: share, regions, largest box of gains, worst case."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from sweep.errors import QuestionError
from sweep.grid import Axis
from sweep.query.answers.plain import plain
from sweep.query.answers.robust import LargestBox, RobustAnswer, WorstNode
from sweep.query.blocks import Indices
from sweep.query.cautions import OVER_A_BOX
from sweep.query.derived import derive, measures_needed
from sweep.query.gaps import (
    box_without_gaps,
    design_gaps,
    jump_without_gaps,
    regions_without_gaps,
    unordered_dimensions,
)
from sweep.query.largest_box import Around
from sweep.query.memo import Memo
from sweep.query.question import DesignQuestion
from sweep.query.region_data import worst_dataset
from sweep.query.scope import Scope
from sweep.query.select import (
    Asked,
    find_enclosing,
    one_value,
    read_value,
    resolve_names,
    value_at,
)
from sweep.query.spoken import spell_asked
from sweep.query.verdicts import EXCLUDED, FAILS, MEETS, UNKNOWN
from sweep.query.worst import LOG_RADIUS, WORTH_KEEPING, WorstCases, find_worst_cases

if TYPE_CHECKING:
    import xarray

    from sweep.store.atlas import StoredAtlas


def find_robust(
    stored: StoredAtlas,
    question: DesignQuestion,
    around: Mapping[str, Asked],
    memo: Memo | None = None,
) -> RobustAnswer:
    """Judge every design of a question and sum up.

    Parameters
    ----------
    stored
        The atlas.
    question
        Which designs, which box, what is required.
    around
        A design that the largest box has to hold; empty to find the largest one anywhere.
    memo
        Where what was found is kept between questions.
    """
    place = _place_around(question.scope, around)
    cases = _Lazy(stored, question, memo)
    summary = _recall_summary(stored, question, place, cases, memo)
    scope = question.scope
    return RobustAnswer(
        atlas_id=stored.atlas_id,
        title=stored.title,
        grid=stored.grid,
        case=question.demand.name,
        requirements=question.requirements,
        over=scope.over(),
        widened=scope.widened,
        at=dict(scope.at),
        bracketed=scope.brackets(),
        shaken={name: str(reach) for name, reach in question.demand.shake.items()},
        free=tuple(scope.grid.axes[axis].name for axis in scope.free),
        design_nodes=math.prod(scope.design_shape),
        **summary.counts,
        largest_box=_as_box(scope, summary, around),
        worst=_as_worst(summary.worst),
        largest_jump=summary.largest_jump,
        nodes=summary.nodes,
        unknown_nodes=summary.unknown_nodes,
        cautions=OVER_A_BOX,
        make_dataset=cases.dataset,
    )


@dataclass(frozen=True)
class _Summary:
    """What is kept of an answer; every number of it is exact in JSON."""

    counts: Mapping[str, int]
    """By the names of `RobustAnswer`."""
    box: Mapping[str, Any] | None
    """Places of the lower and the upper corner, nodes, whether exact, and the bound."""
    worst: Mapping[str, Any] | None
    """The worst node and its measures."""
    largest_jump: float | None
    nodes: int
    unknown_nodes: int


@dataclass
class _Lazy:
    """The worst case of every design, reduced when something first needs it."""

    stored: StoredAtlas
    question: DesignQuestion
    memo: Memo | None
    _found: WorstCases | None = None

    def cases(self) -> WorstCases:
        """Reduced once."""
        if self._found is None:
            self._found = find_worst_cases(
                self.stored,
                self.stored.structure,
                self.question.scope,
                self.question.requirements,
                windows=self.question.windows,
                memo=self.memo,
            )
        return self._found

    def dataset(self) -> xarray.Dataset:
        """Every design over the design axes."""
        return worst_dataset(self.cases(), self.stored)


def _recall_summary(
    stored: StoredAtlas,
    question: DesignQuestion,
    around: Around | None,
    cases: _Lazy,
    memo: Memo | None,
) -> _Summary:
    """The summary from the memo, else made from the worst case of every design, and kept."""
    if memo is None or question.scope.nodes < WORTH_KEEPING:
        return _summarise(cases.cases(), around)
    needed = sorted({m for r in question.requirements for m in measures_needed(r.quantity)})
    text = memo.recall_text(
        stored,
        needed,
        _asked(question, around),
        lambda: json.dumps(plain(vars(_summarise(cases.cases(), around)))),
    )
    return _Summary(**json.loads(text))


def _asked(question: DesignQuestion, around: Around | None) -> dict[str, object]:
    """All that decides a summary, apart from the atlas."""
    scope = question.scope
    return {
        "answer": "robust",
        "spans": [nodes.tolist() for nodes in scope.spans],
        "box": list(scope.box),
        "at": dict(scope.at),
        "require": [[r.quantity, r.sense, r.limit] for r in question.requirements],
        "unordered": list(unordered_dimensions(scope)),
        "gaps": [[axis, *places.tolist()] for axis, places in design_gaps(scope).items()],
        "windows": [
            [w.axis, w.first.tolist(), w.last.tolist(), w.lost.tolist()] for w in question.windows
        ],
        "around": [list(corner) for corner in around] if around is not None else [],
        "labels": [list(axis.labels or ()) for axis in scope.grid.axes],
    }


def _summarise(cases: WorstCases, around: Around | None) -> _Summary:
    meets = cases.verdict == MEETS
    unordered = unordered_dimensions(cases.scope)
    gaps = design_gaps(cases.scope)
    box = box_without_gaps(meets, gaps, around=around, single=unordered)
    log_radius = cases.found.worst[LOG_RADIUS]
    return _Summary(
        counts={
            "meets": int(np.count_nonzero(meets)),
            "fails": int(np.count_nonzero(cases.verdict == FAILS)),
            "unknown": int(np.count_nonzero(cases.verdict == UNKNOWN)),
            "excluded": int(np.count_nonzero(cases.verdict == EXCLUDED)),
            "regions": regions_without_gaps(meets, gaps, unordered),
        },
        box=vars(box) if box else None,
        worst=_find_worst(cases),
        largest_jump=jump_without_gaps(log_radius, meets, gaps, unordered),
        nodes=cases.nodes,
        unknown_nodes=cases.unknown_nodes,
    )


def _find_worst(cases: WorstCases) -> dict[str, Any] | None:
    """The largest log_radius that a meeting design has to survive, the first in C order."""
    meets = cases.verdict == MEETS
    if not meets.any():
        return None
    log_radius = np.where(meets, cases.found.worst[LOG_RADIUS], -np.inf)
    design = tuple(int(i) for i in np.unravel_index(int(log_radius.argmax()), meets.shape))
    at = cases.design_at(design) | cases.place_of(LOG_RADIUS, design)
    period_s = _period_s(cases, design)
    value = float(log_radius[design])
    return {
        "at": {name: at[name] for name in cases.scope.grid.names if name in at},
        "log_radius": value,
        "decay_time_s": derive(value, 0.0, period_s)["decay_time"],
    }


def _period_s(cases: WorstCases, design: tuple[int, ...]) -> float:
    """Sample period of a design at its worst node, s."""
    scope = cases.scope
    nodes = scope.box_node(int(cases.found.which[LOG_RADIUS][design]))
    nodes |= {axis: int(scope.spans[axis][i]) for axis, i in zip(scope.free, design, strict=True)}
    nodes |= {axis: int(places[LOG_RADIUS][design]) for axis, places in cases.moved.items()}
    block = tuple(slice(nodes[axis], nodes[axis] + 1) for axis in range(len(scope.spans)))
    return float(scope.grid.parameters(block)["sample_period"].reshape(-1)[0])


def _place_around(scope: Scope, around: Mapping[str, Asked]) -> Around | None:
    """The places, along every free axis, of the nodes that the largest box has to hold."""
    if not around:
        return None
    asked = resolve_names(scope.grid, around)
    for position in scope.box:
        _check_held(scope, scope.grid.axes[position], asked)
    corners = [
        _places_on(scope.grid.axes[position], scope.spans[position], asked)
        for position in scope.free
    ]
    return [low for low, _ in corners], [high for _, high in corners]


def _check_held(scope: Scope, axis: Axis, asked: Mapping[str, tuple[str, Asked]]) -> None:
    """Refuse a centre on an axis of the box, unless it is the value that the axis is fixed at."""
    if axis.name not in asked:
        return
    if axis.name not in scope.at:
        raise QuestionError(
            f"finding the largest box around {axis.name}: it is a tolerance axis, which nature "
            "chooses",
            where=[axis.name],
            remedy=f"leave {axis.name} out of the design; its range is given with --over",
        )
    name, value = asked[axis.name]
    wanted = read_value(axis, one_value(axis.name, value), name)
    both = axis.snapped(np.array([wanted, scope.at[axis.name]], dtype=np.float64))
    if both[0] != both[1]:
        raise _outside(axis, name, value)


def _outside(axis: Axis, name: str, value: Asked) -> QuestionError:
    return QuestionError(
        f"finding the largest box around {spell_asked(axis, name, value)}: it lies outside the "
        "designs that were asked about",
        where=[axis.name],
        remedy=f"take {name} out of --at and --within, or name a value inside",
    )


def _places_on(
    axis: Axis, nodes: Indices, asked: Mapping[str, tuple[str, Asked]]
) -> tuple[int, int]:
    """The place of a node, or of both nodes around a value."""
    if axis.name not in asked:
        if len(nodes) == 1:
            return 0, 0
        raise QuestionError(
            f"finding the largest box around a design: it names no {axis.name}",
            where=[axis.name],
            remedy=f"add {axis.name} to it, or fix it with --at",
        )
    name, value = asked[axis.name]
    around = find_enclosing(axis, one_value(axis.name, value), name=name).nodes
    places = [int(place) for place in np.flatnonzero(np.isin(nodes, around))]
    if len(places) < len(around):
        raise _outside(axis, name, value)
    return places[0], places[-1]


def _as_box(scope: Scope, summary: _Summary, around: Mapping[str, Asked]) -> LargestBox | None:
    if summary.box is None:
        return None
    box = summary.box
    ends, at_axis_end = {}, []
    for axis, low, high in zip(scope.free, box["low"], box["high"], strict=True):
        one, nodes = scope.grid.axes[axis], scope.spans[axis]
        ends[one.name] = value_at(one, int(nodes[low])), value_at(one, int(nodes[high]))
        if len(one) > 1 and not one.is_row_axis and one.name not in scope.at:
            at_axis_end += [(one.name, "low")] * int(nodes[low] == 0)
            at_axis_end += [(one.name, "high")] * int(nodes[high] == len(one) - 1)
    named = {name: str(value) for name, value in around.items()}
    return LargestBox(ends, box["nodes"], box["exact"], box["at_most"], tuple(at_axis_end), named)


def _as_worst(found: Mapping[str, Any] | None) -> WorstNode | None:
    if found is None:
        return None
    return WorstNode(found["at"], found["log_radius"], found["decay_time_s"])
