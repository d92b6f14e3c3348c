"""What happens when the gain falls, from the definition: random designs, and plain loops."""

from __future__ import annotations

import itertools
from fractions import Fraction
from random import Random

import memory_atlas
import numpy as np
from plain_judge import GAINS, THRESHOLD, Asked, _ask_value, is_stable, nodes_of, worst
from plain_robust import Question, cannot_be_built

from sweep.vocabulary import LoopStructure


def random_fall(rnd: Random) -> Asked:
    """A stable design whose gains may fall, on grids that are more or less stable."""
    axes = [memory_atlas.axis("sample_period", [0.01, 0.02, 0.03], unit="s")]
    kinds = rnd.choice((["kp"], ["kp", "kd"], ["kp", "ki"], ["kp", "ki", "kd"], []))
    for name in kinds:
        lowest = rnd.choice((-2, -1, 0, 0, 1))
        values = np.arange(lowest, 5) * rnd.choice((1.0, 0.5, 0.3))
        if rnd.random() < 0.2:
            values = values[values != 0]
        axes.append(memory_atlas.axis(name, values, sets=f"controller.{name}"))
    fixed = {} if kinds else {"controller.kp": 1.0}
    if not kinds:
        gains = np.arange(rnd.choice((-1, 0, 1)), 5) / 2
        axes.append(memory_atlas.axis("gain", gains, sets="plant.gain", role="tolerance"))
    axes.append(memory_atlas.axis("damping", [0.1, 0.2], sets="plant.damping", role="tolerance"))
    rnd.shuffle(axes)
    return _on_a_random_grid(rnd, axes, fixed)


def _on_a_random_grid(rnd, axes, fixed):
    shape = tuple(len(axis) for axis in axes)
    noise = np.random.default_rng(rnd.randrange(2**32))
    stable, unknown = rnd.choice((0.4, 0.9, 0.97, 1.0)), rnd.choice((0.0, 0.0, 0.03))
    log_radius = np.where(noise.random(shape) < stable, -0.1, 0.1)
    by_period = [slice(None) if axis.name != "sample_period" else 0 for axis in axes]
    if rnd.random() < 0.5:  # bad at every node of a gain, so that whole places are left
        along = rnd.randrange(len(axes))
        picked = [slice(None)] * len(axes)
        picked[along] = rnd.randrange(shape[along])
        log_radius[tuple(picked if rnd.random() < 0.7 else by_period)] = 0.1
    log_radius[noise.random(shape) < unknown] = np.nan
    structure = LoopStructure("oscillator", "pid")
    tiles = tuple(rnd.randint(1, n) for n in shape)
    atlas = memory_atlas.atlas(axes, log_radius, tile_shape=tiles, structure=structure, fixed=fixed)
    asked = Asked(Question(atlas, {"at": {}, "over": {}, "require": {}}, {}, []))
    for axis in axes:
        asked.spans[axis.name] = list(range(len(axis)))
        if axis.role == "design":
            _ask_value(rnd, asked, axis)
        elif axis.name == "gain":
            first = rnd.randrange(len(axis))
            last = rnd.randrange(first, len(axis))
            asked.over["gain"] = (float(axis.coordinates[first]), float(axis.coordinates[last]))
            asked.spans["gain"] = list(range(first, last + 1))
    for node in nodes_of(asked):
        log_radius[node] = -0.2
    atlas.stored.values["log_radius"] = log_radius.astype(np.float32)
    atlas.stored.values["mode_angle"] = np.where(np.isnan(log_radius), np.nan, 0.1)
    return asked


def falling(asked):
    """Name -> the exact values at factor 1 that fall: one, or the two ends; `None` if one is stuck.

    The gains of the controller, or else the end of the plant's gain that is nearest to 0.
    """
    axes = {axis.name: axis for axis in asked.axes}
    stuck = any(f.path in GAINS and f.value for f in asked.question.atlas.grid.fixed)
    gains = [axis for axis in asked.axes if set(axis.sets) & set(GAINS)]
    if not stuck and not any(axis.labels or axis.role == "tolerance" for axis in gains):
        found = {}
        for axis in gains:
            if value := asked.at[axis.name]:
                nodes = asked.spans[axis.name]
                ends = [axis.coordinates[i] for i in (nodes[0], nodes[-1])]
                ends = ends if axis.name in asked.shake else [value]
                found[axis.name] = sorted({Fraction(float(end)) for end in ends})
        return found
    for name, axis in axes.items():
        if axis.role == "tolerance" and axis.sets == ("plant.gain",) and not axis.labels:
            ends = [Fraction(float(axis.coordinates[i])) for i in asked.spans[name]]
            ends = [ends[0], ends[-1]]
            return {name: [min(ends, key=abs)] if ends[0] * ends[1] > 0 else ends}
    return None


def gain_fall(asked):
    """(conditionally stable or None, factor, how far down it is told or None)."""
    if not is_stable(asked) or any(cannot_be_built(asked.question, n) for n in nodes_of(asked)):
        return None, None, None
    values = falling(asked)
    if not values or any(ends[0] * ends[-1] <= 0 for ends in values.values()):
        return None, None, None
    places = crossings(asked, values)
    if not places:
        return None, None, None
    lower = [*places[1:], Fraction(0)]
    states = {f: state_at(asked, values, f) for f in places}
    between = [state_at(asked, values, (a + b) / 2) for a, b in zip(places, lower, strict=True)]
    first = state_at(asked, values, (1 + places[0]) / 2)
    told = Fraction(1)
    if first == "stable":
        for place, below in zip(places, between, strict=True):
            if states[place] != "stable":
                break
            told = place
            if below != "stable":
                break
        else:
            return False, None, 0.0
    left = [f for f in places if states[f] == "left"]
    return (True, float(left[0]), float(told)) if left else (None, None, float(told))


def crossings(asked, values):
    """Factors below 1 at which a falling gain stands on a node, exactly, falling."""
    found = set()
    for name, ends in values.items():
        for x in asked.question.atlas.grid.axis(name).coordinates:
            found |= {Fraction(float(x)) / end for end in ends}
    found = sorted((f for f in found if 0 < f < 1 - Fraction(1, 10**9)), reverse=True)
    return [f for i, f in enumerate(found) if not i or f < found[i - 1] * (1 - Fraction(1, 10**9))]


def state_at(asked, values, factor):
    """``stable`` or ``left`` when every enclosing node says so, else ``undecided``."""
    choices = {}
    for axis in asked.axes:
        if axis.name in values:
            ends = [factor * end for end in values[axis.name]]
            nodes = enclosing(axis.coordinates, min(ends), max(ends))
            breaks = axis.sets == ("controller.ki",) and any(
                axis.coordinates[i] == 0 for i in nodes or ()
            )
            if nodes is None or breaks:
                return "undecided"
            choices[axis.name] = nodes
        elif axis.role == "design":
            choices[axis.name] = asked.spans[axis.name]
    states = set()
    for picked in itertools.product(*choices.values()):
        at = {name: [i] for name, i in zip(choices, picked, strict=True)}
        value, _, unknown = worst(asked, nodes_of(asked, **at), "log_radius", "max")
        states.add("left" if value >= THRESHOLD else "unknown" if unknown else "stable")
    return states.pop() if len(states) == 1 else "undecided"


def enclosing(coordinates, low, high):
    """The nodes from the last at or below to the first at or above; `None` off the axis."""
    exact = [Fraction(float(x)) for x in coordinates]
    slack = Fraction(1, 10**9)
    below = [i for i, x in enumerate(exact) if x <= low + slack * abs(x)]
    above = [i for i, x in enumerate(exact) if x >= high - slack * abs(x)]
    return list(range(below[-1], above[0] + 1)) if below and above else None
