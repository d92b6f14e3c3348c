"""Robust designs from the definitions, node by node in plain loops, and random questions.

`random_question` makes an atlas in memory together with a question about it in two forms: as a
person would ask it, and as the nodes that it means, found by loops over the coordinates. `judge`
answers the second form from the definitions alone.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from random import Random

import memory_atlas
import numpy as np

from sweep.query.atlas import Atlas
from sweep.vocabulary import LoopStructure

Node = tuple[int, ...]

THRESHOLD = -1e-9
LEVELS = (-36.0, -1.0, -0.5, -0.125, -0.01, -2e-9, -5e-10, 0.0, 0.25)
ANGLES = (0.0, 0.01, 0.4, math.pi)
BOUNDS = {
    "log_radius": (-0.7, -0.05, 0.1),
    "radius": (0.5, 0.9, 0.95),
    "decay_time": (0.005, 0.03, 0.5, 2.0),
    "dominant_damping": (-0.2, 0.1, 0.7, 0.99),
    "mode_angle": (0.005, 0.1, 1.0),
}
"""Bounds between the values that `LEVELS` and `ANGLES` give."""


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


# --- what a question means ----------------------------------------------------------------------


def outward(coordinates: Sequence[float], low: float, high: float) -> list[int]:
    """Nodes of a range; a bound between nodes takes in the next node outward."""
    first = max(i for i, x in enumerate(coordinates) if x <= low)
    last = min(i for i, x in enumerate(coordinates) if x >= high)
    return list(range(first, last + 1))


def between(coordinates: Sequence[float], node: int) -> float:
    """A value between a node and the next one."""
    return float(coordinates[node] + 0.37 * (coordinates[node + 1] - coordinates[node]))


def some_value(rnd: Random, axis, low: int = 0, *, at_nodes: bool = False) -> float:
    """A node's coordinate, or a value between two, at or above a node."""
    node = rnd.randrange(low, len(axis))
    if at_nodes or node == len(axis) - 1 or rnd.random() < 0.5:
        return float(axis.coordinates[node])
    return between(axis.coordinates, node)


def changes_structure(axis, node: int) -> bool:
    """Whether the integral gain is exactly 0 there."""
    return "controller.ki" in axis.sets and axis.values_of("controller.ki")[node] == 0


# --- random atlases -----------------------------------------------------------------------------


def plain_axis(rnd: Random, name: str, path: str, role: str, most: int):
    count = rnd.randint(1, most)
    steps = [rnd.choice((1.0, 0.5, 3.0)) for _ in range(count)]
    values = np.cumsum(steps)
    if path in ("controller.kp", "controller.ki"):
        values = values - values[rnd.randrange(count)]
    if path == "sample_period":
        values = values * 0.01
    unit = "s" if path == "sample_period" else "1"
    return memory_atlas.axis(
        name, values, sets=path, role=role, nominal=rnd.randrange(count), unit=unit
    )


def row_axis(rnd: Random, name: str, path: str, role: str, *, sets_period: bool, most: int):
    count = rnd.randint(1, most)
    columns = {path: [rnd.choice((1.0, 2.0, 4.0)) for _ in range(count)]}
    if sets_period:
        columns["sample_period"] = [rnd.choice((0.01, 0.02, 0.05)) for _ in range(count)]
    labels = [f"row {chr(97 + i)}" for i in range(count)]
    return memory_atlas.rows(name, labels, columns, role=role, ordered=rnd.random() < 0.5)


def random_axes(rnd: Random):
    """One to three design axes and up to three of tolerances in any order, and delay parts."""
    design = rnd.sample(["kp", "ki", "mode", "period"], rnd.randint(1, 3))
    nature = rnd.sample(["damping", "gain", "unit", "period", "compute"], rnd.randint(0, 3))
    if "period" in design and "period" in nature:
        nature.remove("period")
    in_rows = not {"period"} & {*design, *nature} and rnd.random() < 0.5
    most = 4 if len(design) + len(nature) < 5 else 3
    rowed = next((name for name in (*nature, *design) if name in ("unit", "mode")), "")
    axes = []
    for role, names in (("design", design), ("tolerance", nature)):
        for name in names:
            if name in ("unit", "mode"):
                path = "plant.natural_frequency" if name == "unit" else "controller.kd"
                sets_period = in_rows and name == rowed
                axes.append(row_axis(rnd, name, path, role, sets_period=sets_period, most=most))
            else:
                one, path = {
                    "kp": ("kp", "controller.kp"),
                    "ki": ("ki", "controller.ki"),
                    "period": ("sample_period", "sample_period"),
                    "damping": ("damping", "plant.damping"),
                    "gain": ("gain", "plant.gain"),
                    "compute": ("compute", "delay.compute"),
                }[name]
                axes.append(plain_axis(rnd, one, path, role, most))
    if "compute" in nature:
        at = next(i for i, axis in enumerate(axes) if axis.name == "compute")
        parts = (("compute", rnd.choice(("s", "samples"))),)
        scale = 0.01 if parts[0][1] == "s" else 0.3
        old = axes[at]
        axes[at] = memory_atlas.axis(
            "compute", old.coordinates * scale, sets="delay.compute", role="tolerance"
        )
    else:
        parts = ()
    rnd.shuffle(axes)
    return axes, parts


def random_atlas(rnd: Random) -> Atlas:
    """Levels with many ties, many of them stable, some of them unknown, in tiles of any shape."""
    axes, parts = random_axes(rnd)
    shape = tuple(len(axis) for axis in axes)
    noise = np.random.default_rng(rnd.randrange(2**32))
    stable = rnd.choice((0.5, 0.9, 1.0, 0.0))
    unknown = rnd.choice((0.0, 0.0, 0.03, 0.2))
    weights = np.where(np.array(LEVELS) < THRESHOLD, stable / 6 + 1e-12, (1 - stable) / 3 + 1e-12)
    log_radius = noise.choice(LEVELS, size=shape, p=weights / weights.sum())
    log_radius = np.where(noise.random(shape) < unknown, np.nan, log_radius)
    tiles = tuple(rnd.randint(1, n) for n in shape)
    made = memory_atlas.atlas(
        axes,
        log_radius,
        noise.choice(ANGLES, size=shape),
        tile_shape=tiles,
        structure=LoopStructure("oscillator", "pid", delay_parts=parts),
    )
    if rnd.random() < 0.3:  # a measure that is less complete than the other
        angle = made.stored.values["mode_angle"]
        made.stored.values["mode_angle"] = np.where(noise.random(shape) < 0.1, np.nan, angle)
    return made


# --- random questions ---------------------------------------------------------------------------


def random_question(rnd: Random) -> Question:
    """Ranges, values and bounds in the spellings that a person may use."""
    question = Question(random_atlas(rnd), {"at": {}, "over": {}, "within": {}}, {}, [])
    for axis in question.axes:
        question.spans[axis.name] = list(range(len(axis)))
        if axis.role == "tolerance":
            question.box.append(axis.name)
            _ask_tolerance(rnd, question, axis)
        else:
            _ask_design(rnd, question, axis)
    _ask_bounds(rnd, question)
    if rnd.random() < 0.5:
        _ask_around(rnd, question)
    return question


def _ask_tolerance(rnd: Random, question: Question, axis) -> None:
    choice = rnd.random()
    if choice < 0.4:
        return
    name, x = axis.name, axis.coordinates
    if axis.labels:
        picked = sorted(rnd.sample(range(len(axis)), rnd.randint(1, len(axis))))
        if axis.ordered and rnd.random() < 0.5:
            question.asked["over"][name] = f"{axis.labels[picked[-1]]} : {axis.labels[picked[0]]}"
            picked = list(range(picked[0], picked[-1] + 1))
        else:
            labels = [axis.labels[i] for i in picked]
            question.asked["over"][name] = labels[0] if len(labels) == 1 else labels[::-1]
        question.spans[name] = picked
        return
    low = some_value(rnd, axis)
    if choice < 0.55:
        question.asked["at"][name] = low
        question.spans[name] = outward(x, low, low)
        return
    high = some_value(rnd, axis, outward(x, low, low)[-1])
    asked = (low, high) if rnd.random() < 0.5 else f"{low!r}:{high!r}"
    if name == "sample_period" and rnd.random() < 0.4:
        name, asked = "sample_rate", (1 / high, 1 / low)
    question.asked["over"][name] = asked
    question.spans[axis.name] = outward(x, low, high)


def _ask_design(rnd: Random, question: Question, axis) -> None:
    choice = rnd.random()
    name, x = axis.name, axis.coordinates
    if choice < 0.55:
        return
    if axis.labels:
        node = rnd.randrange(len(axis))
        question.asked["at" if choice < 0.8 else "within"][name] = axis.labels[node]
        question.spans[name] = [node]
        return
    low = some_value(rnd, axis)
    if choice < 0.8:
        nodes = outward(x, low, low)
        if len(nodes) == 2 and any(changes_structure(axis, node) for node in nodes):
            return
        question.asked["at"][name] = low
        question.spans[name] = nodes
        if len(nodes) == 2:
            question.box.append(name)
        return
    high = some_value(rnd, axis, outward(x, low, low)[-1])
    inside = [i for i, value in enumerate(x) if low <= value <= high]
    if inside:
        question.asked["within"][name] = f"{low!r}:{high!r}"
        question.spans[name] = inside


def _ask_bounds(rnd: Random, question: Question) -> None:
    require = {}
    for _ in range(rnd.randint(0, 3)):
        quantity, sense = rnd.choice(list(BOUNDS)), rnd.choice(("max", "min"))
        limit = rnd.choice(BOUNDS[quantity])
        require[f"{sense}_{quantity}"] = limit
    question.bounds = [(n[4:], n[:3], limit) for n, limit in require.items()]
    question.asked["require"] = require


def _ask_around(rnd: Random, question: Question) -> None:
    around, meant = {}, []
    for axis in question.axes:
        if axis.name in question.box:
            continue
        span = question.spans[axis.name]
        node = rnd.choice(span)
        pair = [node, node]
        if not axis.labels and node + 1 in span and rnd.random() < 0.3:
            around[axis.name], pair = between(axis.coordinates, node), [node, node + 1]
        elif len(span) > 1 or rnd.random() < 0.5:
            around[axis.name] = axis.labels[node] if axis.labels else float(axis.coordinates[node])
        meant.append((pair[0], pair[1]))
    if around:
        question.asked["around"], question.around = around, meant


# --- the answer from the definitions ------------------------------------------------------------


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
            for other in beside(stack.pop(), along):
                if other in left:
                    left.remove(other)
                    stack.append(other)
    return count


def largest_box(question: Question, places: set[Node]):
    """(nodes, lower corner, upper corner) of the largest box, by trying every box."""
    single = unordered(question)
    spans = [question.spans[name] for name in question.free]
    sides = [
        [(a, b) for a in range(len(s)) for b in range(a, len(s)) if i not in single or a == b]
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
        if q in by_place and q not in places
    ]
    return max((jump for jump in jumps if not math.isnan(jump)), default=None)
