"""Single designs judged from the definitions: random ones, and every answer in plain loops."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field
from random import Random

import memory_atlas
import numpy as np
from plain_robust import THRESHOLD, Question, cannot_be_built, needed, quantity_at
from random_questions import (
    _ask_bounds,
    changes_structure,
    outward,
    random_atlas,
    reached,
    some_value,
    window,
)

from sweep.vocabulary import LoopStructure

GAINS = ("controller.kp", "controller.ki", "controller.kd")


@dataclass
class Asked:
    """One design and what it has to survive, as asked and as meant."""

    question: Question
    at: dict = field(default_factory=dict)
    over: dict = field(default_factory=dict)
    shake: dict = field(default_factory=dict)

    @property
    def axes(self):
        return self.question.axes

    @property
    def spans(self):
        return self.question.spans


def random_design(rnd: Random) -> Asked:
    """A value for every design axis, ranges for some tolerances, some design axes shaken."""
    atlas = random_atlas(rnd)
    asked = Asked(Question(atlas, {"at": {}, "over": {}}, {}, []))
    for axis in atlas.grid.axes:
        asked.spans[axis.name] = list(range(len(axis)))
        if axis.role == "tolerance":
            _ask_tolerance(rnd, asked, axis)
        else:
            _ask_value(rnd, asked, axis)
    _ask_bounds(rnd, asked.question)
    return asked


def random_stable_design(rnd: Random) -> Asked:
    """A design that is stable at every node of its box, among many gains that are not."""
    axes = [
        memory_atlas.axis("kp", np.arange(-3, 4) / 2, sets="controller.kp"),
        memory_atlas.axis("ki", np.arange(rnd.choice((-1, 0, 1)), 6) / 1.0, sets="controller.ki"),
        memory_atlas.axis("sample_period", [0.01, 0.02, 0.03], unit="s"),
        memory_atlas.axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance"),
    ]
    parts = ()
    if rnd.random() < 0.5:  # up to more than some of the periods
        times = [0.005, 0.01, 0.025][: rnd.randint(1, 3)]
        axes.append(memory_atlas.axis("compute", times, sets="delay.compute", role="tolerance"))
        parts = (("compute", "s"),)
    rnd.shuffle(axes)
    shape = tuple(len(axis) for axis in axes)
    noise = np.random.default_rng(rnd.randrange(2**32))
    stable = rnd.choice((0.2, 0.6, 0.85))
    values = noise.choice([0.1, 0.3], size=shape)
    log_radius = np.where(noise.random(shape) < stable, -values, values)
    log_radius[noise.random(shape) < rnd.choice((0.0, 0.05))] = np.nan
    tiles = tuple(rnd.randint(1, n) for n in shape)
    structure = LoopStructure("oscillator", "p", delay_parts=parts)
    atlas = memory_atlas.atlas(axes, log_radius, tile_shape=tiles, structure=structure)
    asked = Asked(Question(atlas, {"at": {}, "over": {}}, {}, []))
    for axis in axes:
        asked.spans[axis.name] = list(range(len(axis)))
        if axis.role == "design":
            _ask_value(rnd, asked, axis)
        elif axis.name == "compute":
            _ask_tolerance(rnd, asked, axis)
    asked.question.asked["require"] = {}
    for node in nodes_of(asked):
        log_radius[node] = -0.2
    atlas.stored.values["log_radius"] = log_radius.astype(np.float32)
    atlas.stored.values["mode_angle"] = np.where(np.isnan(log_radius), np.nan, 0.1)
    return asked


def _ask_tolerance(rnd, asked, axis):
    if rnd.random() < 0.3:
        return
    if axis.labels:
        picked = sorted(rnd.sample(range(len(axis)), rnd.randint(1, len(axis))))
        asked.over[axis.name] = [axis.labels[i] for i in picked]
        asked.spans[axis.name] = picked
        return
    low = some_value(rnd, axis)
    high = some_value(rnd, axis, outward(axis.coordinates, low, low)[-1])
    asked.over[axis.name] = (low, high)
    asked.spans[axis.name] = outward(axis.coordinates, low, high)


def _ask_value(rnd, asked, axis):
    if axis.labels:
        node = rnd.randrange(len(axis))
        asked.at[axis.name], asked.spans[axis.name] = axis.labels[node], [node]
        return
    value = some_value(rnd, axis)
    nodes = outward(axis.coordinates, value, value)
    if len(nodes) == 2 and any(changes_structure(axis, node) for node in nodes):
        value, nodes = float(axis.coordinates[nodes[0]]), nodes[:1]
    asked.at[axis.name], asked.spans[axis.name] = value, nodes
    if rnd.random() < 0.2:
        first, last, lost = window(axis, *reached(axis.name, value, 0.2, 0.0))
        if not lost:
            asked.shake[axis.name] = "20%"
            asked.spans[axis.name] = list(range(first, last + 1))


def nodes_of(asked, **instead):
    """Every node of the box and of the enclosing nodes, in C order; some axes replaced."""
    return list(itertools.product(*(instead.get(a.name, asked.spans[a.name]) for a in asked.axes)))


def place(asked, node):
    """Names and coordinates of a node, of the axes that a verdict takes several nodes of."""
    found = {}
    for axis, i in zip(asked.axes, node, strict=True):
        is_taken = axis.role == "tolerance" or axis.name in asked.shake
        if is_taken or len(asked.spans[axis.name]) > 1:
            found[axis.name] = axis.labels[i] if axis.labels else float(axis.coordinates[i])
    return found


def brackets(asked):
    """The two nodes around every value that lies between nodes, shaken or not."""
    found = {}
    for axis in asked.axes:
        if axis.name in asked.at and not axis.labels:
            value = asked.at[axis.name]
            nodes = outward(axis.coordinates, value, value)
            if len(nodes) == 2:
                found[axis.name] = tuple(float(axis.coordinates[i]) for i in nodes)
    return found


def worst(asked, nodes, quantity, sense):
    """(value, first node that gives it, unknown nodes), over the known ones."""
    values = [quantity_at(asked.question, quantity, node) for node in nodes]
    stored = asked.question.atlas.stored.values
    unknown = sum(any(np.isnan(stored[m][node]) for m in needed(quantity)) for node in nodes)
    known = [v for v in values if not math.isnan(v)]
    if not known:
        return math.nan, None, unknown
    value = max(known) if sense == "max" else min(known)
    return value, nodes[values.index(value)], unknown


def line_verdict(asked, quantity, sense, limit, *, is_stability=False):
    value, _, unknown = worst(asked, nodes_of(asked), quantity, sense)
    fails = value > limit if sense == "max" else value < limit
    if is_stability:
        fails = value >= limit
    return "fails" if fails else "unknown" if unknown else "meets"


def verdict(asked):
    """Over all that is required."""
    found = [line_verdict(asked, "log_radius", "max", THRESHOLD, is_stability=True)]
    found += [line_verdict(asked, *bound) for bound in asked.question.bounds]
    if is_excluded(asked):
        found.append("fails")
    return next((word for word in ("fails", "unknown") if word in found), "meets")


def is_stable(asked):
    """Known to be, at every node."""
    value, _, unknown = worst(asked, nodes_of(asked), "log_radius", "max")
    return value < THRESHOLD and not unknown


def is_excluded(asked, **instead):
    """Whether any node cannot be built."""
    return any(cannot_be_built(asked.question, node) for node in nodes_of(asked, **instead))


def excluded_line(asked, axis):
    """Whether any node cannot be built, at every node along an axis."""
    return [is_excluded(asked, **{axis.name: [i]}) for i in range(len(axis))]


def line(asked, axis):
    """The worst at every node along an axis; NaN where any node is unknown."""
    values = []
    for i in range(len(axis)):
        value, _, unknown = worst(asked, nodes_of(asked, **{axis.name: [i]}), "log_radius", "max")
        values.append(math.nan if unknown else value)
    return values


def stretch_end(values, excluded, node, step):
    """(last stable node, first other node or None, how it ends) from a stable node on."""
    holds = [value < THRESHOLD and not out for value, out in zip(values, excluded, strict=True)]
    while 0 <= node + step < len(values) and holds[node + step]:
        node += step
    other = node + step
    if not 0 <= other < len(values):
        return node, None, "axis_end"
    if excluded[other]:
        return node, other, "excluded"
    return node, other, "unknown" if math.isnan(values[other]) else "boundary"


def middle(asked):
    """The node of each tolerance in the box that is nearest to its nominal, the lower of two."""
    return {
        axis.name: [min(asked.spans[axis.name], key=lambda i: (abs(i - axis.nominal), i))]
        for axis in asked.axes
        if axis.role == "tolerance"
    }


def tolerance_grid(asked):
    """Verdicts and worst log_radius at every node of all tolerances."""
    axes = [axis for axis in asked.axes if axis.role == "tolerance"]
    shape = tuple(len(axis) for axis in axes)
    codes, radii = np.zeros(shape, np.int8), np.full(shape, np.nan)
    for node in itertools.product(*map(range, shape)):
        at = {axis.name: [i] for axis, i in zip(axes, node, strict=True)}
        one = Asked(asked.question, asked.at, asked.over, asked.shake)
        before = dict(asked.spans)
        asked.spans.update(at)
        codes[node] = {"meets": 1, "fails": 0, "unknown": -1}[verdict(one)]
        radii[node] = worst(one, nodes_of(one), "log_radius", "max")[0]
        asked.spans.clear()
        asked.spans.update(before)
    return axes, codes, radii


def jump_over(axes, codes, radii):
    """Largest step of log_radius between neighbours in the grid of which one meets."""
    steps = []
    for node in np.ndindex(codes.shape):
        for k, axis in enumerate(axes):
            other = (*node[:k], node[k] + 1, *node[k + 1 :])
            if (axis.labels and not axis.ordered) or other[k] == codes.shape[k]:
                continue
            if (codes[node] == 1) != (codes[other] == 1):
                steps.append(abs(radii[node] - radii[other]))
    return [step for step in steps if not math.isnan(step)]
