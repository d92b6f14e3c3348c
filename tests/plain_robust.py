"""Robust designs from the definitions: node by node, in plain loops."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from sweep.query.atlas import Atlas

Node = tuple[int, ...]

THRESHOLD = -1e-9


@dataclass
class Question:
    """One question, as asked and as meant."""

    atlas: Atlas
    asked: dict
    spans: dict[str, list[int]]
    """By axis, the nodes that take part; of a free axis its designs."""
    box: list[str]
    """Axes taken at their worst, in the order of the grid."""
    bounds: list[tuple[str, str, float]] = field(default_factory=list)
    """(quantity, sense, limit), without stability."""
    windows: dict[str, list[tuple[int, int, bool]]] = field(default_factory=dict)
    """By shaken free axis, for each design on it: first and last node, and whether part is lost."""
    around: list[tuple[int, int]] | None = None
    """For each free axis the lowest and the highest node that the largest box has to hold."""

    @property
    def axes(self):
        return self.atlas.grid.axes

    @property
    def free(self) -> list[str]:
        return [axis.name for axis in self.axes if axis.name not in self.box]


@dataclass
class Design:
    """One design by the definitions."""

    node: Node
    """Along every free axis."""
    verdict: str
    worst: dict[tuple[str, str], float]
    """(quantity, sense) -> value over the known nodes; NaN where none is known."""
    nodes: list[Node]
    """Of the whole grid, in the order of the box."""
    unknown: int
    lost: bool


def parameter(question: Question, path: str, node: Node) -> float:
    """A loop parameter at one node."""
    for axis, place in zip(question.axes, node, strict=True):
        if path in axis.sets:
            return float(axis.values_of(path)[place])
    return next(f.value for f in question.atlas.grid.fixed if f.path == path)


def quantity_at(question: Question, quantity: str, node: Node) -> float:
    """A stored or derived quantity at one node."""
    values = question.atlas.stored.values
    log_radius, angle = float(values["log_radius"][node]), float(values["mode_angle"][node])
    if quantity == "log_radius":
        return log_radius
    if quantity == "mode_angle":
        return angle
    if math.isnan(log_radius):
        return math.nan
    if quantity == "radius":
        return math.exp(log_radius)
    if quantity == "decay_time":
        period_s = parameter(question, "sample_period", node)
        return -period_s / log_radius if log_radius < THRESHOLD else math.inf
    if math.isinf(log_radius):
        return math.nan if math.isnan(angle) else -math.copysign(1.0, log_radius)
    size = math.hypot(log_radius, angle)
    return -log_radius / size if size else -log_radius


def needed(quantity: str) -> set[str]:
    if quantity == "dominant_damping":
        return {"log_radius", "mode_angle"}
    return {"mode_angle"} if quantity == "mode_angle" else {"log_radius"}


def cannot_be_built(question: Question, node: Node) -> bool:
    parts = dict(question.atlas.structure.delay_parts)
    if "compute" not in parts:
        return False
    compute = parameter(question, "delay.compute", node)
    period = 1.0 if parts["compute"] == "samples" else parameter(question, "sample_period", node)
    return compute > period


def judge(question: Question) -> list[Design]:
    """Every design, in the order of the grid."""
    spans = [question.spans[name] for name in question.free]
    return [judge_design(question, node) for node in itertools.product(*spans)]


def judge_design(question: Question, design: Node) -> Design:
    ranges, lost = [], False
    place = dict(zip(question.free, design, strict=True))
    for axis in question.axes:
        if axis.name in question.box:
            ranges.append(question.spans[axis.name])
        elif axis.name in question.windows:
            at = question.spans[axis.name].index(place[axis.name])
            first, last, part = question.windows[axis.name][at]
            ranges.append(range(first, last + 1))
            lost |= part
        else:
            ranges.append([place[axis.name]])
    nodes = list(itertools.product(*ranges))
    bounds = [("log_radius", "max", THRESHOLD), *question.bounds]
    measures = set.union(*(needed(quantity) for quantity, _, _ in bounds))
    stored = question.atlas.stored.values
    unknown = sum(any(np.isnan(stored[m][node]) for m in measures) for node in nodes)
    worst, fails = {}, False
    for place_of, (quantity, sense, limit) in enumerate(bounds):
        known = [v for n in nodes if not math.isnan(v := quantity_at(question, quantity, n))]
        pick = max if sense == "max" else min
        found = pick(known) if known else math.nan
        worst[quantity, sense] = found
        if place_of == 0:
            fails |= found >= limit
        else:
            fails |= found > limit if sense == "max" else found < limit
    verdict = "fails" if fails else "unknown" if unknown or lost else "meets"
    if any(cannot_be_built(question, node) for node in nodes):
        verdict = "excluded"
    return Design(design, verdict, worst, nodes, unknown, lost)


def unordered(question: Question) -> list[int]:
    """Dimensions of the designs along which neighbours mean nothing."""
    axes = [question.atlas.grid.axis(name) for name in question.free]
    return [i for i, axis in enumerate(axes) if axis.labels and not axis.ordered]


def changes_structure(axis, node: int) -> bool:
    """Whether the integral gain is exactly 0 there."""
    return "controller.ki" in axis.sets and axis.values_of("controller.ki")[node] == 0


def apart(question: Question, dimension: int, low: int, high: int) -> bool:
    """Whether some places of a dimension are several, and a gain of 0 is one of them."""
    name = question.free[dimension]
    axis, span = question.atlas.grid.axis(name), question.spans[name]
    return low < high and any(changes_structure(axis, span[i]) for i in range(low, high + 1))


def touching(question: Question, one: Node, other: Node) -> bool:
    """Whether two neighbours have nothing between them that they say nothing about."""
    pairs = [sorted(pair) for pair in zip(one, other, strict=True)]
    return not any(apart(question, i, *pair) for i, pair in enumerate(pairs))


def meeting(question: Question, designs: list[Design]) -> set[Node]:
    """Places of the designs that meet."""
    spans = [question.spans[name] for name in question.free]
    return {
        tuple(span.index(i) for span, i in zip(spans, one.node, strict=True))
        for one in designs
        if one.verdict == "meets"
    }


def beside(place: Node, dimensions: Sequence[int]) -> list[Node]:
    return [(*place[:i], place[i] + step, *place[i + 1 :]) for i in dimensions for step in (-1, 1)]


def regions(question: Question, places: set[Node]) -> int:
    """Connected regions, by walking from neighbour to neighbour."""
    along = [i for i in range(len(question.free)) if i not in unordered(question)]
    left, count = set(places), 0
    while left:
        count += 1
        stack = [left.pop()]
        while stack:
            here = stack.pop()
            for other in beside(here, along):
                if other in left and touching(question, here, other):
                    left.remove(other)
                    stack.append(other)
    return count


def largest_box(question: Question, places: set[Node]):
    """(nodes, lower corner, upper corner) of the largest box, by trying every box."""
    single = unordered(question)
    spans = [question.spans[name] for name in question.free]
    sides = [
        [
            (a, b)
            for a in range(len(s))
            for b in range(a, len(s))
            if (i not in single or a == b) and not apart(question, i, a, b)
        ]
        for i, s in enumerate(spans)
    ]
    must = question.around and [
        (s.index(low), s.index(high)) for s, (low, high) in zip(spans, question.around, strict=True)
    ]
    best = None
    for box in itertools.product(*sides):
        if must and not all(
            a <= lo and hi <= b for (a, b), (lo, hi) in zip(box, must, strict=True)
        ):
            continue
        held = list(itertools.product(*(range(a, b + 1) for a, b in box)))
        if all(place in places for place in held):
            low, high = tuple(a for a, _ in box), tuple(b for _, b in box)
            if best is None or (-len(held), low, high) < (-best[0], best[1], best[2]):
                best = (len(held), low, high)
    return best


def largest_jump(question: Question, designs: list[Design], places: set[Node]) -> float | None:
    """Largest difference of the worst log_radius between neighbours of which one meets."""
    along = [i for i in range(len(question.free)) if i not in unordered(question)]
    shape = [range(len(question.spans[name])) for name in question.free]
    by_place = dict(zip(itertools.product(*shape), designs, strict=True))
    jumps = [
        abs(by_place[p].worst["log_radius", "max"] - by_place[q].worst["log_radius", "max"])
        for p in places
        for q in beside(p, along)
        if q in by_place and q not in places and touching(question, p, q)
    ]
    return max((jump for jump in jumps if not math.isnan(jump)), default=None)
