"""The worst case of every design in a scope, and the verdict on it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.config import Requirement
from sweep.query.blocks import Indices, Readable
from sweep.query.derived import measures_needed
from sweep.query.extremes import (
    Extreme,
    Extremes,
    Places,
    derive_extremes,
    find_extremes,
    plan_reduction,
    reduce_boxes,
)
from sweep.query.memo import Memo
from sweep.query.requirement import is_violated
from sweep.query.scope import Scope
from sweep.query.select import Value, value_at
from sweep.query.shake import Window, shake_extremes
from sweep.query.verdicts import EXCLUDED, Codes, decide
from sweep.vocabulary import LoopStructure

LOG_RADIUS = Extreme("log_radius", "max")
"""What every worst case holds."""

WORTH_KEEPING = 1_000_000
"""Nodes that an answer rests on, from which it is kept between questions."""


@dataclass(frozen=True, eq=False)
class WorstCases:
    """The worst of every design over the box, and its verdict."""

    scope: Scope
    """Which designs, and which box."""
    requirements: tuple[Requirement, ...]
    """What they have to meet."""
    found: Extremes
    """Worst values, each with its place in the box; arrays have the shape of the designs."""
    moved: Mapping[int, Mapping[Extreme, Indices]]
    """For each shaken axis, by position, the node on it where the worst is reached."""
    verdict: Codes
    """Of every design."""
    nodes: int
    """Nodes that were read, neighbours included."""
    unknown_nodes: int
    """How many of them are not computed."""

    def place_of(self, extreme: Extreme, design: tuple[int, ...]) -> dict[str, Value]:
        """Where in the box, and at which neighbour, a design is at its worst.

        Parameters
        ----------
        extreme
            Which quantity.
        design
            Place along every free axis.
        """
        grid = self.scope.grid
        nodes = self.scope.box_node(int(self.found.which[extreme][design]))
        nodes |= {axis: int(places[extreme][design]) for axis, places in self.moved.items()}
        return {grid.axes[i].name: value_at(grid.axes[i], nodes[i]) for i in sorted(nodes)}

    def design_at(self, design: tuple[int, ...]) -> dict[str, Value]:
        """The values of a design, those fixed between nodes included."""
        scope = self.scope
        found = dict(scope.at)
        for axis, place in zip(scope.free, design, strict=True):
            one = scope.grid.axes[axis]
            found[one.name] = value_at(one, int(scope.spans[axis][place]))
        return {name: found[name] for name in scope.grid.names if name in found}


def find_worst_cases(
    stored: Readable,
    structure: LoopStructure,
    scope: Scope,
    requirements: Sequence[Requirement],
    *,
    also: Iterable[Extreme] = (),
    windows: Sequence[Window] = (),
    memo: Memo | None = None,
) -> WorstCases:
    """Reduce an atlas over a box and judge every design.

    Parameters
    ----------
    stored
        The atlas.
    structure
        Of its loop.
    scope
        Which designs, and which box.
    requirements
        What they have to meet, stability among them.
    also
        Quantities to reduce beside those that are required.
    windows
        Neighbours to take in along free axes.
    memo
        Where reductions are kept between questions.
    """
    wanted = wanted_extremes(requirements, also)
    (found,) = recall_extremes(stored, _read_scope(scope, windows), wanted, memo)
    return judge_extremes(structure, scope, requirements, found, windows)


def find_worst_of_parts(
    stored: Readable,
    structure: LoopStructure,
    scope: Scope,
    requirements: Sequence[Requirement],
    parts: Sequence[Places],
    *,
    also: Iterable[Extreme] = (),
    windows: Sequence[Window] = (),
    memo: Memo | None = None,
) -> Iterator[WorstCases]:
    """Judge every design over several parts of the box, from one pass over the atlas.

    Parameters
    ----------
    parts
        Parts of the scope's box, each as places along every one of its axes.
    stored, structure, scope, requirements, also, windows, memo
        See `find_worst_cases`.

    Yields
    ------
    The worst cases over each part in turn; derived quantities are held for one part at a time.
    """
    asked = _read_scope(scope, windows)
    plan = plan_reduction(asked, wanted_extremes(requirements, also))
    reduced = recall_extremes(stored, asked, list(dict.fromkeys(plan.values())), memo, parts)
    for part, found in zip(parts, reduced, strict=True):
        narrowed = narrow_box(scope, part)
        derived = derive_extremes(asked, plan, found)
        cases = judge_extremes(structure, narrowed, requirements, derived, windows)
        # places in the box are counted in the whole of it
        yield replace(cases, scope=scope)


def narrow_box(scope: Scope, part: Places) -> Scope:
    """A scope with a part of its box, given as places along every axis of it."""
    spans = list(scope.spans)
    for axis, places in zip(scope.box, part, strict=True):
        spans[axis] = spans[axis][places]
    return replace(scope, spans=tuple(spans))


def wanted_extremes(
    requirements: Iterable[Requirement], also: Iterable[Extreme] = ()
) -> list[Extreme]:
    """What has to be reduced to judge requirements, log_radius first."""
    required = (Extreme(item.quantity, item.sense) for item in requirements)
    return list(dict.fromkeys((LOG_RADIUS, *required, *also)))


def judge_extremes(
    structure: LoopStructure,
    scope: Scope,
    requirements: Sequence[Requirement],
    found: Extremes,
    windows: Sequence[Window] = (),
) -> WorstCases:
    """Shake what was reduced, and judge it.

    Parameters
    ----------
    structure
        Of the loop.
    scope
        Of the designs, without their neighbours.
    requirements
        What they have to meet.
    found
        The worst over the box of the designs and of every neighbour.
    windows
        Neighbours to take in along free axes.
    """
    read = _read_scope(scope, windows)
    excluded, unknown_nodes = find_excluded(structure, read), found.unknown_nodes
    moved: dict[int, dict[Extreme, Indices]] = {}
    for window in windows:
        dimension = scope.free.index(window.axis)
        found, places = shake_extremes(found, window, dimension)
        for earlier in moved.values():
            for item, place in places.items():
                earlier[item] = np.take_along_axis(earlier[item], place, axis=dimension)
        moved[window.axis] = {item: window.span[place] for item, place in places.items()}
        excluded = _any_of(excluded, window, dimension)
    fails = np.zeros(scope.design_shape, np.bool_)
    for requirement in requirements:
        fails |= is_violated(
            requirement, found.worst[Extreme(requirement.quantity, requirement.sense)]
        )
    verdict = decide(fails, found.unknown > 0)
    verdict[np.broadcast_to(excluded, verdict.shape)] = EXCLUDED
    return WorstCases(scope, tuple(requirements), found, moved, verdict, read.nodes, unknown_nodes)


def recall_extremes(
    stored: Readable,
    scope: Scope,
    wanted: Sequence[Extreme],
    memo: Memo | None,
    boxes: Sequence[Places] | None = None,
) -> list[Extremes]:
    """Reductions from the memo, else computed and kept."""
    if memo is None or scope.nodes < WORTH_KEEPING:
        return find_extremes(stored, scope, wanted, boxes)
    plan = plan_reduction(scope, wanted)
    reduced = list(dict.fromkeys(plan.values()))
    question = {
        "extremes": [[item.quantity, item.sense] for item in reduced],
        "box": list(scope.box),
        "spans": [nodes.tolist() for nodes in scope.spans],
        "boxes": [[place.tolist() for place in box] for box in boxes or ()],
    }
    measures = sorted({name for item in reduced for name in measures_needed(item.quantity)})
    arrays = memo.recall(
        stored, measures, question, lambda: _as_arrays(reduce_boxes(stored, scope, reduced, boxes))
    )
    return [derive_extremes(scope, plan, found) for found in _from_arrays(arrays, reduced)]


def find_excluded(structure: LoopStructure, scope: Scope) -> NDArray[np.bool_]:
    """Designs that cannot be built: somewhere in the box the processor takes longer than a period.

    Shape: broadcastable to that of the designs. Derived from coordinates and never stored.
    """
    units = dict(structure.delay_parts)
    if "compute" not in units:
        return np.zeros([1] * len(scope.free), np.bool_)
    compute = scope.parameter("delay.compute")
    period_s = scope.parameter("sample_period")
    late = compute > (1.0 if units["compute"] == "samples" else period_s)
    reduced: NDArray[np.bool_] = np.logical_or.reduce(late, axis=scope.box)
    return reduced


def _read_scope(scope: Scope, windows: Sequence[Window]) -> Scope:
    """The designs with every neighbour that they take in."""
    spans = list(scope.spans)
    for window in windows:
        spans[window.axis] = window.span
    return replace(scope, spans=tuple(spans)) if windows else scope


def _any_of(flags: NDArray[np.bool_], window: Window, dimension: int) -> NDArray[np.bool_]:
    """Flags of neighbours, folded into those of the nodes that take them in."""
    if flags.shape[dimension] == 1:
        return flags
    start = int(window.first.min())
    moved = np.moveaxis(flags, dimension, 0)
    folded = [
        moved[a - start : b - start + 1].any(axis=0)
        for a, b in zip(window.first, window.last, strict=True)
    ]
    return np.moveaxis(np.stack(folded), 0, dimension)


def _as_arrays(results: Sequence[Extremes]) -> dict[str, NDArray[Any]]:
    arrays: dict[str, NDArray[Any]] = {}
    for number, found in enumerate(results):
        arrays[f"unknown_{number}"] = found.unknown
        for item, values in found.worst.items():
            arrays[f"worst_{item.quantity}_{item.sense}_{number}"] = values
            arrays[f"which_{item.quantity}_{item.sense}_{number}"] = found.which[item]
    return arrays


def _from_arrays(arrays: Mapping[str, NDArray[Any]], wanted: Sequence[Extreme]) -> list[Extremes]:
    count = sum(name.startswith("unknown_") for name in arrays)
    return [
        Extremes(
            worst={i: arrays[f"worst_{i.quantity}_{i.sense}_{n}"] for i in wanted},
            which={i: arrays[f"which_{i.quantity}_{i.sense}_{n}"] for i in wanted},
            unknown=arrays[f"unknown_{n}"],
        )
        for n in range(count)
    ]
