"""Judging single designs: every requirement line by line, distances, tolerances in hand, yield.

A design between nodes is judged by the worst of all nodes that enclose it. Nothing is snapped to a
nearest node, and an unknown node is never counted as meeting anything.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from sweep.config import Design
from sweep.errors import QuestionError
from sweep.grid import Axis
from sweep.query.answers.judge import (
    DesignVerdict,
    GainFall,
    JudgeAnswer,
    Line,
    Reached,
    worst_verdict,
)
from sweep.query.blocks import Indices, Readable
from sweep.query.cautions import OVER_A_BOX
from sweep.query.extremes import MOST_DESIGN_NODES, Extreme, can_be_held
from sweep.query.gaps import find_gaps, jump_without_gaps
from sweep.query.judging.conditional import find_gain_fall
from sweep.query.judging.distances import find_distances, find_hurts, largest_step, walk_lines
from sweep.query.judging.held_block import hold
from sweep.query.judging.lines import PROCESSOR_TIME, find_lines, is_lost
from sweep.query.judging.tolerance import Acceptance, InHand, find_acceptance, find_in_hand
from sweep.query.judging.yields import Yield, check_tables, find_yields
from sweep.query.question import Demand, DesignQuestion, resolve_question
from sweep.query.scope import Scope
from sweep.query.select import (
    Asked,
    Value,
    find_axis,
    find_enclosing,
    resolve_names,
    value_at,
)
from sweep.query.verdicts import MEETS, UNKNOWN, Codes
from sweep.query.worst import LOG_RADIUS, WorstCases, find_worst_cases
from sweep.vocabulary import LoopStructure

if TYPE_CHECKING:
    from sweep.store.atlas import StoredAtlas

CONFIDENCE = 0.95
"""Of the intervals of yields, unless a question says otherwise."""

DECAY_TIME = Extreme("decay_time", "max")

Weights = Mapping[str, Mapping[str, float]]
"""By row axis, the weight of each row by its label."""


@dataclass(frozen=True)
class AskedDesign:
    """A design as a question names it."""

    name: str
    """For people and programs."""
    at: Mapping[str, Asked]
    """A value for every design axis."""
    over: Mapping[str, Asked] = field(default_factory=dict)
    """Ranges of tolerance axes that hold for this design alone, instead of those of the case."""


def named_designs(stored: StoredAtlas, names: Sequence[str] = ()) -> tuple[AskedDesign, ...]:
    """Designs that are stored in an atlas; all of them when none is named.

    Raises
    ------
    QuestionError
        When it holds none of that name, or none at all.
    """
    held: dict[str, Design] = {design.name: design for design in stored.designs}
    if not held and not names:
        if all(axis.role == "tolerance" for axis in stored.grid.axes):
            return (AskedDesign("the loop", {}),)
        raise QuestionError(
            f"judging the atlas {stored.title!r}: it holds no designs, and none was given",
            where=["design"],
            remedy="give one with --at AXIS=VALUE,..., a table with --schedule FILE.csv, or write "
            "[designs.NAME] in its config and run it again: nothing is recomputed",
        )
    for name in names:
        if name not in held:
            raise QuestionError(
                f"looking for design {name!r}: this atlas holds {', '.join(held) or 'no designs'}",
                where=[name],
                remedy="name one of them, or give its values with --at",
            )
    return tuple(AskedDesign(name, dict(held[name].values)) for name in (names or held))


def judge_designs(
    stored: StoredAtlas,
    designs: Sequence[AskedDesign],
    demands: Sequence[Demand],
    *,
    confidence: float = CONFIDENCE,
    weights: Weights | None = None,
) -> JudgeAnswer:
    """Judge every design against every demand.

    Parameters
    ----------
    stored
        The atlas.
    designs
        At least one.
    demands
        At least one: cases, or what a question says itself.
    confidence
        Of the intervals of yields, above 0 and below 1.
    weights
        Of rows, for weighted shares.

    Raises
    ------
    QuestionError
        When a design or a demand cannot be asked of this atlas; it names the design.
    """
    if not 0.0 < confidence < 1.0:
        raise QuestionError(
            f"giving yields at a confidence of {confidence:g}: expected above 0 and below 1",
            where=["confidence"],
            remedy="write --confidence 0.95",
        )
    found = [
        _judge(stored, design, demand, confidence, weights)
        for design in designs
        for demand in demands
    ]
    return JudgeAnswer(
        atlas_id=stored.atlas_id,
        title=stored.title,
        grid=stored.grid,
        designs=tuple(found),
        confidence=confidence,
        cautions=OVER_A_BOX,
    )


def _judge(
    stored: StoredAtlas,
    design: AskedDesign,
    demand: Demand,
    confidence: float,
    weights: Weights | None,
) -> DesignVerdict:
    question = resolve_design(stored, design, demand)
    scope = question.scope
    structure, whole = stored.structure, whole_tolerances(scope)
    fits = can_be_held(whole)
    block = hold(stored, whole.spans if fits else scope.spans)
    cases = find_worst_cases(block, structure, scope, question.requirements, also=[DECAY_TIME])
    lines = find_lines(block, structure, scope, question.requirements)
    tolerance = _tolerances(block, structure, question, whole) if fits else None
    start = _no_start(lines)
    walked = [] if start else walk_lines(stored, block if fits else None, structure, scope)
    distances = find_distances(walked, scope)
    radius, decay = _reached(cases, LOG_RADIUS), _reached(cases, DECAY_TIME)
    if is_lost("decay_time", decay.value):
        decay = replace(decay, at=radius.at)
    return DesignVerdict(
        design=design.name,
        at=dict(scope.at),
        case=demand.name,
        verdict=worst_verdict([line.verdict for line in lines]),
        lines=lines,
        log_radius=radius,
        radius=math.exp(radius.value),
        decay_time=decay,
        over=scope.over(),
        widened=scope.widened,
        brackets=_brackets(scope),
        shaken=_shaken(question),
        requirements=question.requirements,
        distances=distances,
        hurts_most=find_hurts(block, scope),
        gain_fall=GainFall(None, stopped_by=start) if start else find_gain_fall(stored, scope),
        in_hand=tolerance.in_hand(structure) if tolerance else None,
        acceptance=tolerance.acceptance() if tolerance else None,
        tolerances_skipped="" if tolerance else _too_many(whole),
        yields=(
            tolerance.yields(confidence, weights)
            if tolerance
            else _yields_in_box(block, structure, question, confidence, weights)
        ),
        largest_jump=_larger(
            tolerance.jump() if tolerance else None, largest_step(walked, distances)
        ),
        nodes=scope.nodes,
        unknown=cases.found.unknown_nodes,
    )


def resolve_design(stored: StoredAtlas, design: AskedDesign, demand: Demand) -> DesignQuestion:
    """One design against one demand, as nodes.

    Raises
    ------
    QuestionError
        When the design leaves out a design axis or names a tolerance, and whatever
        `sweep.query.question.resolve_question` refuses; the message names the design.
    """
    grid = stored.grid
    asked = resolve_names(grid, design.at)
    own = resolve_names(grid, design.over)
    over = {n: v for n, v in demand.over.items() if find_axis(grid, n).name not in own}
    missing = [axis.name for axis in grid.axes if axis.role == "design" and axis.name not in asked]
    if missing:
        raise QuestionError(
            f"judging {design.name}: it gives no {', '.join(missing)}",
            where=missing,
            remedy=f"add it: --at {missing[0]}=VALUE; a design has a value for every design axis",
        )
    nature = [axis.name for axis in grid.axes if axis.role == "tolerance" and axis.name in asked]
    if nature:
        raise QuestionError(
            f"judging {design.name}: {nature[0]} is a tolerance axis, which nature chooses",
            where=nature,
            remedy=f"give its range with --over {nature[0]}=LOW:HIGH",
        )
    held = [spec.name for spec in stored.measures]
    wanted = replace(demand, over={**over, **design.over})
    try:
        return resolve_question(grid, held, stored.title, wanted, design.at, {})
    except QuestionError as error:
        raise QuestionError(
            f"judging {design.name}: {error.message}",
            where=error.where,
            remedy=error.remedy,
        ) from error


def _no_start(lines: Sequence[Line]) -> str:
    """Why nothing can be told of what lies around a design; empty when it can."""
    if lines[0].verdict != "meets":
        return "a loop that is not known to be stable to begin with"
    if lines[-1].require == PROCESSOR_TIME and lines[-1].verdict != "meets":
        return "a loop that cannot be built to begin with"
    return ""


def _tolerances(
    block: Readable, structure: LoopStructure, question: DesignQuestion, whole: Scope
) -> _Tolerances:
    return _Tolerances(
        question.scope, find_worst_cases(block, structure, whole, question.requirements)
    )


def _too_many(whole: Scope) -> str:
    """Why what rests on every tolerance node is left out."""
    return (
        f"the tolerance axes hold {math.prod(whole.design_shape):,} nodes; what is in hand and "
        f"what to accept are told for at most {MOST_DESIGN_NODES:,}"
    )


def _yields_in_box(
    block: Readable,
    structure: LoopStructure,
    question: DesignQuestion,
    confidence: float,
    weights: Weights | None,
) -> tuple[Yield, ...]:
    """Yields from the nodes of the box alone, one row axis at a time."""
    scope, axes = question.scope, question.scope.grid.axes
    tables = [i for i in scope.tolerances if axes[i].is_row_axis]
    check_tables([axes[i].name for i in tables], weights or {})
    found: list[Yield] = []
    for position in tables:
        axis, nodes = axes[position], scope.spans[position]
        apart = replace(scope, box=tuple(i for i in scope.box if i != position))
        cases = find_worst_cases(block, structure, apart, question.requirements)
        verdict = np.full(len(axis), UNKNOWN, np.int8)
        log_radius = np.full(len(axis), np.nan)
        verdict[nodes] = cases.verdict.reshape(-1)
        log_radius[nodes] = cases.found.worst[LOG_RADIUS].reshape(-1)
        own = {axis.name: weights[axis.name]} if weights and axis.name in weights else None
        found += find_yields([axis], [nodes], verdict, log_radius, confidence, own)
    return tuple(found)


def whole_tolerances(scope: Scope) -> Scope:
    """One design at every tolerance node, told apart; only its own nodes count at their worst."""
    spans = list(scope.spans)
    for position in scope.tolerances:
        spans[position] = np.arange(len(scope.grid.axes[position]), dtype=np.intp)
    box = tuple(i for i in scope.box if i not in scope.tolerances)
    return replace(scope, spans=tuple(spans), box=box)


def _reached(cases: WorstCases, extreme: Extreme) -> Reached:
    place = (0,) * len(cases.scope.free)
    return Reached(float(cases.found.worst[extreme][place]), cases.place_of(extreme, place))


def _brackets(scope: Scope) -> dict[str, tuple[Value, Value]]:
    """Axes where the design lies between two nodes, with those two."""
    found = {}
    for name in scope.bracketed:
        axis = scope.grid.axis(name)
        low, high = find_enclosing(axis, scope.at[name], name=name).nodes
        found[name] = value_at(axis, low), value_at(axis, high)
    return found


def _shaken(question: DesignQuestion) -> dict[str, tuple[str, Value, Value]]:
    scope = question.scope
    asked = {
        axis: str(value)
        for axis, (_, value) in resolve_names(scope.grid, question.demand.shake).items()
    }
    ends = scope.brackets()
    return {name: (asked[name], *ends[name]) for name in scope.shaken}


class _Tolerances:
    """One design at every node of every tolerance axis."""

    def __init__(self, scope: Scope, everywhere: WorstCases) -> None:
        axes = scope.grid.axes
        shape = tuple(len(axes[i]) for i in scope.tolerances)
        self.axes: list[Axis] = [axes[i] for i in scope.tolerances]
        self.gaps = find_gaps(scope.grid, self.axes, [np.arange(n) for n in shape])
        self.box: list[Indices] = [scope.spans[i] for i in scope.tolerances]
        self.verdict: Codes = everywhere.verdict.reshape(shape)
        worst = everywhere.found.worst[LOG_RADIUS].astype(np.float64)
        self.log_radius: NDArray[np.float64] = worst.reshape(shape)

    def in_hand(self, structure: LoopStructure) -> InHand | None:
        if not self.axes:
            return None
        specs = structure.parameters()
        floors = [-math.inf if a.is_row_axis else specs[a.sets[0]].low for a in self.axes]
        return find_in_hand(self.axes, self.box, self.verdict, floors, self.gaps)

    def acceptance(self) -> Acceptance | None:
        return find_acceptance(self.axes, self.box, self.verdict, self.gaps)

    def yields(self, confidence: float, weights: Weights | None) -> tuple[Yield, ...]:
        return find_yields(self.axes, self.box, self.verdict, self.log_radius, confidence, weights)

    def jump(self) -> float | None:
        unordered = [i for i, a in enumerate(self.axes) if a.is_row_axis and not a.ordered]
        return jump_without_gaps(self.log_radius, self.verdict == MEETS, self.gaps, unordered)


def _larger(one: float | None, other: float | None) -> float | None:
    known = [value for value in (one, other) if value is not None]
    return max(known, default=None)
