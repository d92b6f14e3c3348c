"""Worst values over a tolerance box for every design at once, in one pass over the tiles.

Each tile is read once, by whichever thread is free, and reduced to its own worst values; these are
folded into the result as they come, in whatever order: the worst of all, and of equal values the
first in the box, do not depend on it. Memory is the result and a few tiles.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from sweep.errors import QuestionError
from sweep.query.blocks import Cut, Readable, box_ids, cut_by_tile, read_block
from sweep.query.derived import FORMULAS, measures_needed, values_of
from sweep.query.scope import Scope

Places = Sequence[NDArray[np.intp]]
"""For each axis of a box, places along it, increasing."""

MOST_DESIGN_NODES = 40_000_000
"""Designs that are held at once: with their worst values, places and counts below a gigabyte."""

FEW_BLOCKS = 3
"""So few blocks are read faster than threads are started."""

BLOCKS_A_TASK = 16
"""Blocks that a thread takes at once: handing one over costs half as much as reducing it."""

_ONE = np.ones(1)


@dataclass(frozen=True)
class Extreme:
    """One quantity at its largest or its smallest."""

    quantity: str
    """Stored or derived."""
    sense: Literal["max", "min"]
    """Which of them."""


@dataclass(frozen=True)
class Extremes:
    """Worst values over a box; every array has the shape of the designs."""

    worst: Mapping[Extreme, NDArray[Any]]
    """Over the nodes of the box that are known; NaN where none is."""
    which: Mapping[Extreme, NDArray[np.int32]]
    """Flat index into the box of the node where it is reached; the first in C order of equals."""
    unknown: NDArray[np.int32]
    """Nodes of the box where a measure that is needed is not known."""

    @property
    def unknown_nodes(self) -> int:
        """In all."""
        return int(self.unknown.sum(dtype=np.int64))


def find_extremes(
    stored: Readable,
    scope: Scope,
    wanted: Iterable[Extreme],
    boxes: Sequence[Places] | None = None,
) -> list[Extremes]:
    """Reduce quantities over a box, or over several parts of it in the same pass.

    Parameters
    ----------
    stored
        The atlas.
    scope
        Which nodes take part.
    wanted
        What to reduce; derived quantities included.
    boxes
        Parts of the scope's box, each as places along every one of its axes. The whole box when
        left out.

    Returns
    -------
    One result for each box. Arrays have the shape ``scope.design_shape``.

    Raises
    ------
    QuestionError
        When there are more designs than can be held.
    """
    plan = plan_reduction(scope, wanted)
    reduced = reduce_boxes(stored, scope, list(dict.fromkeys(plan.values())), boxes)
    return [derive_extremes(scope, plan, found) for found in reduced]


def plan_reduction(scope: Scope, wanted: Iterable[Extreme]) -> dict[Extreme, Extreme]:
    """What is wanted -> what is reduced for it: a stored measure where that comes to the same."""
    return {item: _reduced_instead(item, scope) for item in dict.fromkeys(wanted)}


def reduce_boxes(
    stored: Readable,
    scope: Scope,
    reduced: Sequence[Extreme],
    boxes: Sequence[Places] | None = None,
) -> list[Extremes]:
    """As `find_extremes`, for quantities that are reduced as they are."""
    _check_size(scope)
    work = _Work(stored, scope, reduced, boxes)
    totals = [_Total(scope, work.reduced) for _ in work.boxes]
    for part in _run(work.reduce, cut_by_tile(stored.tiling, scope.spans, scope.box)):
        for number, piece in part:
            totals[number].fold(piece)
    return [Extremes(total.worst, total.which, total.unknown) for total in totals]


def derive_extremes(scope: Scope, plan: Mapping[Extreme, Extreme], found: Extremes) -> Extremes:
    """What was reduced, turned into what was wanted; see `plan_reduction`."""
    worst = {}
    for wanted, reduced in plan.items():
        values = found.worst[reduced]
        if wanted != reduced:
            period_s = design_period_s(scope) if FORMULAS[wanted.quantity].uses_period else _ONE
            values = values_of(wanted.quantity, {reduced.quantity: values}, period_s)
        worst[wanted] = values
    which = {wanted: found.which[reduced] for wanted, reduced in plan.items()}
    return Extremes(worst, which, found.unknown)


def design_period_s(scope: Scope) -> NDArray[np.float64]:
    """Sample period of every design, s, broadcastable to the shape of the designs.

    Only where no axis of the box sets it.
    """
    period: NDArray[np.float64] = scope.parameter("sample_period")
    return period.reshape([period.shape[axis] for axis in scope.free])


def can_be_held(scope: Scope) -> bool:
    """Whether there are few enough designs to be held at once."""
    return math.prod(scope.design_shape) <= MOST_DESIGN_NODES


def period_is_in_box(scope: Scope) -> bool:
    """Whether nature, or a bracket, varies the sample period."""
    return any("sample_period" in scope.grid.axes[axis].sets for axis in scope.box)


def _check_size(scope: Scope) -> None:
    if not can_be_held(scope):
        designs = math.prod(scope.design_shape)
        raise QuestionError(
            f"taking the worst over a box for {designs:,} designs at once: at most "
            f"{MOST_DESIGN_NODES:,} are held",
            where=[scope.grid.axes[axis].name for axis in scope.free],
            remedy="fix a design axis with --at, or keep one to a range with --within",
        )


def _reduced_instead(extreme: Extreme, scope: Scope) -> Extreme:
    """The stored measure that is reduced for a derived one, when that comes to the same."""
    formula = FORMULAS.get(extreme.quantity)
    if formula is None or not formula.follows:
        return extreme
    if formula.uses_period and period_is_in_box(scope):
        return extreme
    return Extreme(formula.follows, extreme.sense)


@dataclass(frozen=True)
class _Piece:
    """What one block says about the designs that it holds."""

    target: tuple[slice, ...]
    """Where they stand among all designs."""
    worst: Mapping[Extreme, NDArray[Any]]
    which: Mapping[Extreme, NDArray[np.int32]]
    unknown: NDArray[np.int32] | None
    """``None`` for none at all."""
    is_all: bool
    """Whether the whole box of these designs lay in the block, so that no other piece holds any."""


_Parts = list[tuple[int, _Piece]]
"""Number of a box and what one block says about it."""


class _Work:
    """What is done with every block."""

    def __init__(
        self,
        stored: Readable,
        scope: Scope,
        reduced: Sequence[Extreme],
        boxes: Sequence[Places] | None,
    ) -> None:
        self.stored, self.scope, self.reduced = stored, scope, reduced
        whole = [np.arange(size, dtype=np.intp) for size in scope.box_shape]
        self.boxes: list[Places] = list(boxes) if boxes is not None else [whole]
        self.measures = sorted({m for item in reduced for m in measures_needed(item.quantity)})
        self.period_s = scope.parameter("sample_period")

    def reduce(self, cut: Cut) -> _Parts:
        """Read one block and take its worst over every box that it touches."""
        scope, places = self.scope, cut.places
        blocks = {name: read_block(self.stored, name, cut.nodes) for name in self.measures}
        period_s = self.period_s
        for axis, place in enumerate(places):
            if period_s.shape[axis] > 1:
                period_s = period_s[(*[slice(None)] * axis, place)]
        values = {
            name: values_of(name, blocks, period_s)
            for name in dict.fromkeys(item.quantity for item in self.reduced)
        }
        target = tuple(places[axis] for axis in scope.free)
        sizes = [places[axis].stop - places[axis].start for axis in scope.box]
        is_all = tuple(sizes) == scope.box_shape
        along = [np.arange(places[axis].start, places[axis].stop) for axis in scope.box]
        found = []
        for number, box in enumerate(self.boxes):
            inside = [np.isin(a, part) for a, part in zip(along, box, strict=True)]
            if all(mask.any() for mask in inside):
                held = [a[mask] for a, mask in zip(along, inside, strict=True)]
                ids = box_ids(held, scope.box_shape)
                lines = {name: self._lines(block, inside) for name, block in values.items()}
                missing = self._missing(lines, blocks, inside)
                found.append((number, self._piece(target, lines, ids, missing, is_all=is_all)))
        return found

    def _lines(self, block: NDArray[Any], inside: Sequence[NDArray[np.bool_]]) -> NDArray[Any]:
        """A block as (designs…, nodes of the box)."""
        scope = self.scope
        for axis, mask in zip(scope.box, inside, strict=True):
            if not mask.all():
                block = np.compress(mask, block, axis=axis)
        block = block.transpose(*scope.free, *scope.box)
        return block.reshape(*block.shape[: len(scope.free)], -1)

    def _missing(
        self,
        lines: Mapping[str, NDArray[Any]],
        blocks: Mapping[str, NDArray[Any]],
        inside: Sequence[NDArray[np.bool_]],
    ) -> NDArray[np.bool_] | None:
        """Nodes where any measure is unknown, as lines; ``None`` when there is none."""
        missing: NDArray[np.bool_] | None = None
        for name, block in blocks.items():
            line = lines[name] if name in lines else self._lines(block, inside)
            if np.isnan(line.min(initial=np.inf)):
                unknown = np.isnan(line)
                missing = unknown if missing is None else missing | unknown
        return missing

    def _piece(
        self,
        target: tuple[slice, ...],
        lines: Mapping[str, NDArray[Any]],
        ids: NDArray[np.int32],
        missing: NDArray[np.bool_] | None,
        *,
        is_all: bool,
    ) -> _Piece:
        worst, which = {}, {}
        for item in self.reduced:
            place = worst_place(lines[item.quantity], item.sense, some_unknown=missing is not None)
            worst[item], which[item] = _at_places(lines[item.quantity], place), ids[place]
        count = None if missing is None else missing.sum(axis=-1, dtype=np.int32)
        return _Piece(target, worst, which, count, is_all=is_all)


def _at_places(values: NDArray[Any], place: NDArray[np.intp]) -> NDArray[Any]:
    """For every line of the last dimension, its value at a place; a third of take_along_axis."""
    starts = np.arange(0, values.size, values.shape[-1], dtype=np.intp).reshape(place.shape)
    return values.reshape(-1).take(starts + place)


def worst_place(values: NDArray[Any], sense: str, *, some_unknown: bool) -> NDArray[np.intp]:
    """Along the last dimension, the first place of the worst known value; 0 where none is known."""
    place: NDArray[np.intp]
    if not some_unknown:
        place = values.argmax(axis=-1) if sense == "max" else values.argmin(axis=-1)
        return place
    unknown = np.isnan(values)
    mildest = np.asarray(-np.inf if sense == "max" else np.inf, values.dtype)
    filled = np.where(unknown, mildest, values)
    place = filled.argmax(axis=-1) if sense == "max" else filled.argmin(axis=-1)
    # a known value may be as mild as the filling: then the first known one is meant
    on_filling = np.take_along_axis(unknown, place[..., None], axis=-1)[..., 0]
    first_known: NDArray[np.intp] = np.where(on_filling, (~unknown).argmax(axis=-1), place)
    return first_known


class _Total:
    """The running result over one box."""

    def __init__(self, scope: Scope, reduced: Sequence[Extreme]) -> None:
        shape = scope.design_shape
        kinds = {item: np.float64 if item.quantity in FORMULAS else np.float32 for item in reduced}
        self.worst = {item: np.full(shape, np.nan, kind) for item, kind in kinds.items()}
        self.which = {item: np.zeros(shape, np.int32) for item in reduced}
        self.unknown = np.zeros(shape, np.int32)

    def fold(self, piece: _Piece) -> None:
        """Take one block's worst into it; of equal values the earlier in the box stays."""
        # a target is made of slices, so that what it picks is a view and is written through; the
        # ellipsis keeps it one where no axis is free
        target: tuple[Any, ...] = (*piece.target, ...)
        for item, found in piece.worst.items():
            held, held_id = self.worst[item][target], self.which[item][target]
            found_id = piece.which[item]
            if piece.is_all:
                held[...], held_id[...] = found, found_id
                continue
            worse = found > held if item.sense == "max" else found < held
            worse |= (found == held) & (found_id < held_id)
            worse |= np.isnan(held) & ~np.isnan(found)
            np.copyto(held, found, where=worse)
            np.copyto(held_id, found_id, where=worse)
        if piece.unknown is not None:
            self.unknown[target] += piece.unknown


def _run(work: Callable[[Cut], _Parts], cuts: list[Cut]) -> Iterator[_Parts]:
    """Every block's result as it comes, from as many threads as there are cores."""
    if len(cuts) <= FEW_BLOCKS:
        yield from map(work, cuts)
        return
    import joblib

    def work_on(some: list[Cut]) -> list[_Parts]:
        return [work(cut) for cut in some]

    cores = joblib.cpu_count()
    together = max(1, min(BLOCKS_A_TASK, len(cuts) // (8 * cores)))
    tasks = [cuts[i : i + together] for i in range(0, len(cuts), together)]
    threads = joblib.Parallel(
        n_jobs=cores, backend="threading", return_as="generator", batch_size=1
    )
    for parts in threads(joblib.delayed(work_on)(some) for some in tasks):
        yield from parts
