"""The choice of a design by plain loops over every node, straight from its definition."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field

import numpy as np
from hypothesis import strategies as st
from memory_atlas import atlas, axis, rows

from sweep.query.question import make_demand
from sweep.vocabulary import STABILITY_THRESHOLD as EDGE
from sweep.vocabulary import LoopStructure

LEVELS = [-36.0, -0.6, -0.3, -0.3, -0.05, -1e-3, 0.0, 0.4, math.inf, math.nan]
ANGLES = [0.0, 0.2, 1.0, 3.0, math.nan]
BOUNDS = {
    "max_decay_time": ("decay_time", "max", 0.025),
    "min_dominant_damping": ("dominant_damping", "min", 0.25),
    "max_radius": ("radius", "max", 0.9),
    "min_log_radius": ("log_radius", "min", -20.0),
}
SENSE = {"decay_time": "max", "log_radius": "max", "dominant_damping": "min"}
PERIODS = [0.001, 0.002, 0.004, 0.005]


@dataclass
class Asked:
    """A question about a small atlas."""

    atlas: object
    box: dict[str, list[int]]
    """Tolerance axis -> its nodes."""
    require: list[str]
    best: str
    price: bool = False
    at: dict[str, int] = field(default_factory=dict)
    """Design axis -> the node that it is fixed at."""
    within: dict[str, list[int]] = field(default_factory=dict)
    """Design axis -> the nodes that it is kept to."""

    def demand(self, shake=None):
        over = {}
        for name, nodes in self.box.items():
            one = self.atlas.grid.axis(name)
            if one.labels is not None:
                over[name] = [one.labels[node] for node in nodes]
            else:
                over[name] = [float(one.coordinates[nodes[i]]) for i in (0, -1)]
        require = {name: BOUNDS[name][2] for name in self.require}
        return make_demand((), "", over, require, shake)

    def fixed(self):
        grid = self.atlas.grid
        return {name: float(grid.axis(name).coordinates[node]) for name, node in self.at.items()}

    def limited(self):
        found = {}
        for name, nodes in self.within.items():
            x = self.atlas.grid.axis(name).coordinates
            found[name] = float(x[nodes[0]]), float(x[nodes[-1]])
        return found

    def span(self, name):
        """Nodes of a design axis that take part."""
        if name in self.at:
            return [self.at[name]]
        return self.within.get(name, range(len(self.atlas.grid.axis(name))))


@st.composite
def questions(draw, best=("decay_time", "log_radius", "dominant_damping", "gain_box")):
    """Small atlases with axes in any order, unknown nodes, one-value axes and row axes."""
    size = st.integers(1, 3)
    axes = [
        axis("kp", np.arange(draw(st.integers(1, 4))), sets="controller.kp"),
        axis(
            "bus",
            np.arange(draw(st.integers(1, 4))) / 4,
            sets="delay.bus",
            role="tolerance",
            unit="samples",
        ),
    ]
    if draw(st.booleans()):
        periods = PERIODS[: draw(st.integers(1, 4))]
        role = draw(st.sampled_from(["design", "design", "tolerance"]))
        axes.append(axis("sample_period", periods, unit="s", role=role))
    if draw(st.booleans()):
        number = draw(size)
        labels = [f"rule {i}" for i in range(number)]
        ordered = draw(st.booleans())
        table = rows("rule", labels, {"controller.kd": range(number)}, ordered=ordered)
        axes.append(_with(table, role="design"))
    if draw(st.booleans()):
        nodes = draw(st.integers(1, 4))
        axes.append(axis("damping", [0.0, 1.0, 2.0, 8.0][:nodes], role="tolerance"))
    if draw(st.booleans()):
        number = draw(size)
        labels = [f"unit {i}" for i in range(number)]
        axes.append(rows("unit", labels, {"plant.gain": np.ones(number)}))
    axes = [_with(one, nominal=draw(st.integers(0, len(one) - 1))) for one in axes]
    axes = draw(st.permutations(axes))
    shape = tuple(len(one) for one in axes)
    seed = draw(st.integers(0, 2**32 - 1))
    random = np.random.default_rng(seed)
    good = draw(st.sampled_from([0.0, 0.5, 0.9]))
    mild, wild = random.choice([-0.6, -0.3], shape), random.choice(LEVELS, shape)
    levels = np.where(random.random(shape) < good, mild, wild)
    angles = np.where(random.random(shape) < good, 0.1, random.choice(ANGLES, shape))
    found = atlas(
        axes,
        levels,
        angles,
        fixed={"delay.compute": draw(st.sampled_from([0.0, 0.0015, 0.02]))},
        structure=LoopStructure(
            "oscillator", "pd", delay_parts=(("bus", "samples"), ("compute", "s"))
        ),
        tile_shape=tuple(random.integers(1, 3, len(axes)).tolist()),
    )
    box = {one.name: draw(_nodes(one)) for one in axes if one.role == "tolerance"}
    require = draw(st.lists(st.sampled_from(list(BOUNDS)), unique=True, max_size=2))
    at = {"kp": draw(st.integers(0, len(found.grid.axis("kp")) - 1))}
    at = at if draw(st.integers(0, 4)) == 0 else {}
    kept = [
        one for one in axes if one.role == "design" and one.labels is None and one.name not in at
    ]
    within = {one.name: draw(_nodes(one)) for one in kept if draw(st.integers(0, 3)) == 0}
    return Asked(found, box, require, draw(st.sampled_from(best)), at=at, within=within)


@st.composite
def _nodes(draw, one):
    if one.labels is not None:
        return sorted(draw(st.sets(st.integers(0, len(one) - 1), min_size=1)))
    first = draw(st.integers(0, len(one) - 1))
    return list(range(first, draw(st.integers(first, len(one) - 1)) + 1))


def _with(one, **changed):
    return type(one)(**{**vars(one), **changed})


class ByHand:
    """Every design of a question, one node at a time."""

    CHOSEN = ("meets", "fails")

    def __init__(self, asked, box=None, reach=None):
        """``reach``: nodes by which kp may move to either side."""
        self.asked, self.grid = asked, asked.atlas.grid
        self.box = box or asked.box
        self.reach = reach
        self.values = asked.atlas.stored.values
        self.required = [("log_radius", "max", EDGE), *(BOUNDS[name] for name in asked.require)]
        self.free = [one.name for one in self.grid.axes if one.role == "design"]
        self.designs = list(itertools.product(*map(asked.span, self.free)))
        self.judged = {design: self.judge(design) for design in self.designs}

    def period(self, design):
        """Of a design; the largest in the box when nature varies it."""
        if "sample_period" in self.free:
            return self.period_at({"sample_period": design[self.free.index("sample_period")]})
        nodes = self.box.get("sample_period", [0])
        return max(self.period_at({"sample_period": node}) for node in nodes)

    def period_at(self, node):
        if "sample_period" in self.grid.names:
            return self.grid.axis("sample_period").coordinates[node["sample_period"]]
        return 0.01

    def nodes(self, design):
        """Every node that a design has to survive, in C order of the box; None: off the axis."""
        kp = self.free.index("kp")
        places = [design[kp]]
        if self.reach is not None:
            places = range(design[kp] - self.reach, design[kp] + self.reach + 1)
        for place in places:
            if not 0 <= place < len(self.grid.axis("kp")):
                yield None
                continue
            moved = dict(zip(self.free, design, strict=True)) | {"kp": place}
            names = [n for n in self.grid.names if n in self.box]
            for inner in itertools.product(*(self.box[name] for name in names)):
                yield moved | dict(zip(names, inner, strict=True))

    def value(self, quantity, node):
        index = tuple(node[name] for name in self.grid.names)
        level = float(self.values["log_radius"][index])
        angle = float(self.values["mode_angle"][index])
        if quantity == "log_radius":
            return level
        if quantity == "radius":
            return math.exp(level)
        if quantity == "decay_time":
            if math.isnan(level):
                return math.nan
            return -self.period_at(node) / level if level < EDGE else math.inf
        if level == math.inf:
            return math.nan if math.isnan(angle) else -1.0
        size = math.sqrt(level * level + angle * angle)
        return -level / (size or 1.0)

    def judge(self, design):
        """(verdict, unknown nodes, worst by quantity and sense, where it is worst)."""
        best = self.asked.best
        wanted = {("log_radius", "max"), ("decay_time", "max")}
        wanted |= {(quantity, sense) for quantity, sense, _ in self.required}
        wanted |= {(best, SENSE[best])} if best != "gain_box" else set()
        unknown, worst, where, shortest = 0, {}, {}, math.inf
        for node in self.nodes(design):
            if node is not None:
                shortest = min(shortest, self.period_at(node))
            found = {
                (quantity, sense): math.nan if node is None else self.value(quantity, node)
                for quantity, sense in wanted
            }
            unknown += any(map(math.isnan, found.values()))
            for key, value in found.items():
                held = worst.get(key, math.nan)
                sign = 1 if key[1] == "max" else -1
                if not math.isnan(value) and (math.isnan(held) or sign * value > sign * held):
                    worst[key], where[key] = value, node
        boxed = [self.grid.axis(name) for name in self.box]
        if not any("sample_period" in one.sets for one in boxed) and where:
            # at one period decay time follows log_radius; of unbounded ones the largest is named
            where["decay_time", "max"] = where["log_radius", "max"]
        fails = False
        for quantity, sense, limit in self.required:
            value = worst.get((quantity, sense), math.nan)
            if quantity == "log_radius" and sense == "max":
                fails |= value >= limit
            else:
                fails |= value > limit if sense == "max" else value < limit
        compute = next(one.value for one in self.grid.fixed if one.path == "delay.compute")
        if compute > shortest:
            verdict = "excluded"
        else:
            verdict = "fails" if fails else "unknown" if unknown else "meets"
        return verdict, unknown, worst, where

    def periods(self):
        """The designs of each row."""
        if "sample_period" not in self.free:
            return [self.designs]
        along = self.free.index("sample_period")
        places = self.asked.span("sample_period")
        return [[design for design in self.designs if design[along] == p] for p in places]

    def rank(self, design):
        _, unknown, worst, _ = self.judged[design]
        best = self.asked.best if self.asked.best != "gain_box" else "log_radius"
        value = worst.get((best, SENSE[best]), math.nan)
        score = value if SENSE[best] == "max" else -value
        level = worst.get(("log_radius", "max"), math.nan)
        return (unknown > 0, *(math.inf if math.isnan(x) else x for x in (score, level)))

    def choose(self, designs):
        """The design to choose, and the nodes of its gain box."""
        of = {word: [d for d in designs if self.judged[d][0] == word] for word in self.CHOSEN}
        if of["meets"] and self.asked.best == "gain_box":
            low, high, held = self.widest(set(of["meets"]))
            return tuple((a + b) // 2 for a, b in zip(low, high, strict=True)), held
        for word in self.CHOSEN:
            if of[word]:
                return min(of[word], key=self.rank), None
        return None, None

    def widest(self, meeting):
        """The largest box of meeting designs at one period, by trying all of them."""
        single = [
            name != "sample_period"
            and self.grid.axis(name).labels is not None
            and not self.grid.axis(name).ordered
            for name in self.free
        ]
        found = []
        for low, high in itertools.product(meeting, repeat=2):
            sides = [range(a, b + 1) for a, b in zip(low, high, strict=True)]
            held = list(itertools.product(*sides))
            thin = all(len(side) == 1 for side, one in zip(sides, single, strict=True) if one)
            if held and thin and meeting.issuperset(held):
                found.append((-len(held), low, high))
        count, low, high = min(found)
        return low, high, -count

    def outcome(self):
        """(designs that meet, best worst case, slowest period)."""
        meeting = [design for design in self.designs if self.judged[design][0] == "meets"]
        if not meeting:
            return 0, None, None
        best = self.asked.best
        if best == "gain_box":
            value = max(self.choose(part)[1] or 0 for part in self.periods())
        else:
            values = [self.judged[design][2][best, SENSE[best]] for design in meeting]
            value = min(values) if SENSE[best] == "max" else max(values)
        return len(meeting), value, max(map(self.period, meeting))
