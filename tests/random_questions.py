"""Random small atlases, and random questions about their robust designs, as asked and as meant.

What a question means is found by loops over the coordinates, from the definitions alone.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from random import Random

import memory_atlas
import numpy as np
from plain_robust import THRESHOLD, Question, changes_structure

from sweep.query.atlas import Atlas
from sweep.vocabulary import LoopStructure

LEVELS = (-36.0, -1.0, -0.5, -0.125, -0.01, -2e-9, -5e-10, 0.0, 0.25, math.inf)
ANGLES = (0.0, 0.01, 0.4, math.pi)
BOUNDS = {
    "log_radius": (-0.7, -0.05, 0.1),
    "radius": (0.5, 0.9, 0.95),
    "decay_time": (0.005, 0.03, 0.5, 2.0),
    "dominant_damping": (-0.2, 0.1, 0.7, 0.99),
    "mode_angle": (0.005, 0.1, 1.0),
}
"""Bounds between the values that `LEVELS` and `ANGLES` give."""


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


def random_axes(rnd: Random, *, wide: bool):
    """One to three design axes and up to three of tolerances in any order, and delay parts."""
    design = rnd.sample(["kp", "ki", "mode", "period"], rnd.randint(1, 3))
    nature = rnd.sample(["damping", "gain", "unit", "period", "compute"], rnd.randint(0, 3))
    if "period" in design and "period" in nature:
        nature.remove("period")
    in_rows = not {"period"} & {*design, *nature} and rnd.random() < 0.5
    many = len(design) + len(nature)
    most = 7 if wide and many < 4 else 4 if many < 5 else 3
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


def random_atlas(rnd: Random, *, wide: bool = False) -> Atlas:
    """Levels with many ties, many of them stable, some of them unknown, in tiles of any shape."""
    axes, parts = random_axes(rnd, wide=wide)
    shape = tuple(len(axis) for axis in axes)
    noise = np.random.default_rng(rnd.randrange(2**32))
    stable = rnd.choice((0.6, 0.9, 1.0, 1.0, 0.0))
    unknown = rnd.choice((0.0, 0.0, 0.03, 0.2))
    weights = np.where(np.array(LEVELS) < THRESHOLD, stable / 6 + 1e-12, (1 - stable) / 4 + 1e-12)
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
    if rnd.random() < 0.3:  # measures of which neither is as complete as the other
        angle = noise.choice(np.array(ANGLES, np.float32), size=shape)
        made.stored.values["mode_angle"] = np.where(noise.random(shape) < 0.1, np.nan, angle)
    return made


# --- random questions ---------------------------------------------------------------------------


def random_question(rnd: Random, *, shaken: bool = False) -> Question:
    """Ranges, values and bounds in the spellings that a person may use."""
    question = Question(
        random_atlas(rnd, wide=shaken), {"at": {}, "over": {}, "within": {}}, {}, []
    )
    for axis in question.axes:
        question.spans[axis.name] = list(range(len(axis)))
        if axis.role == "tolerance":
            question.box.append(axis.name)
            _ask_tolerance(rnd, question, axis)
        else:
            _ask_design(rnd, question, axis)
    if shaken:
        _ask_shake(rnd, question)
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
    for _ in range(rnd.choice((0, 0, 1, 2, 3))):
        quantity, sense = rnd.choice(list(BOUNDS)), rnd.choice(("max", "min"))
        limit = rnd.choice(BOUNDS[quantity])
        require[f"{sense}_{quantity}"] = limit
    question.bounds = [(n[4:], n[:3], limit) for n, limit in require.items()]
    question.asked["require"] = require


def reached(name: str, value: float, share: float, distance: float) -> tuple[float, float]:
    """The lowest and the highest value that is reached by shaking one."""
    if name == "sample_rate":
        rate = 1 / value
        step = share * rate + distance
        return 1 / (rate + step), 1 / (rate - step) if step < rate else math.inf
    step = share * abs(value) + distance
    return value - step, value + step


def window(axis, low: float, high: float) -> tuple[int, int, bool]:
    """First and last node of what is reached, and whether part of it is unknown.

    The next node outward is taken in, unless there is none, or it is one at which a gain of 0
    changes the loop's structure: that one says nothing about what lies beside it.
    """
    x, lost = axis.coordinates, False
    slack = 1e-9 * (x[-1] - x[0])
    below = [i for i, value in enumerate(x) if value <= low + slack]
    above = [i for i, value in enumerate(x) if value >= high - slack]
    first = below[-1] if below else 0
    last = above[0] if above else len(x) - 1
    several = first < last and any(changes_structure(axis, i) for i in range(first, last + 1))
    lost = several
    if changes_structure(axis, first) and x[first] < low - slack:
        first, lost = first + 1, True
    if changes_structure(axis, last) and x[last] > high + slack:
        last, lost = last - 1, True
    return first, last, lost or not below or not above


def _ask_shake(rnd: Random, question: Question) -> None:
    question.asked["shake"] = {}
    plain = [axis for axis in question.axes if axis.role == "design" and not axis.labels]
    for axis in rnd.sample(plain, min(len(plain), rnd.randint(1, 2))):
        name = axis.name
        if name == "sample_period" and rnd.random() < 0.4:
            name = "sample_rate"
        share, distance = 0.0, 0.0
        if rnd.random() < 0.5:
            percent = rnd.choice((5, 5, 20, 50, 99))
            share, text = percent / 100, f"{percent}%"
        elif axis.name == "sample_period":
            distance = rnd.choice((0.003, 0.012)) if name == axis.name else rnd.choice((3.0, 30.0))
            text = f"{distance * 1000:g} ms" if name == axis.name else f"{distance:g}Hz"
        else:
            distance = text = rnd.choice((0.2, 0.75, 1.5))
        fixed = question.asked["at"].get(axis.name)
        if fixed is None:
            question.windows[axis.name] = [
                window(axis, *reached(name, axis.coordinates[i], share, distance))
                for i in question.spans[axis.name]
            ]
        else:
            first, last, lost = window(axis, *reached(name, fixed, share, distance))
            if lost:  # refused; see the tests of that
                continue
            question.spans[axis.name] = list(range(first, last + 1))
            if axis.name not in question.box:
                question.box.append(axis.name)
        question.asked["shake"][name] = text


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
