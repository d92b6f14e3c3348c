"""The largest axis-aligned box of nodes that all meet.

A box is a slab along all axes but two, and a rectangle in the plane of those two. For one slab the
nodes that meet throughout it make a plane, and the largest rectangle in the plane comes from one
pass over its rows. Which slab is best is found by branch and bound: of all slabs that reach from
somewhere in a..b to somewhere in c..d (b <= c), each contains b..c, so that its rectangle is no
larger than that of b..c, and its length is at most d - a + 1. The product bounds the whole block of
slabs; the most promising block is halved until it is one slab. With three axes there are n (n+1)/2
slabs at most, n being the nodes of the shortest axis, so that even a mask of noise is searched
exactly in seconds.

References
----------
A. H. Land, A. G. Doig, An automatic method of solving discrete programming problems, Econometrica
28 (1960), 497-520: branch and bound.
"""

from __future__ import annotations

import heapq
import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

BUDGET = 20_000
"""Planes searched by default before a box over more than three axes is only bounded."""

MOST_TOGETHER = 64
"""Planes searched in one pass, which spreads its fixed cost."""
BATCH_NODES = 1 << 21
"""Nodes of all the planes in one pass, which bounds its memory to some 20 MB."""

Span = tuple[int, int, int, int]
"""(a, b, c, d): slabs from a..b to c..d along one axis; with b > c, a = c and b = d, all within."""
Block = tuple[Span, ...]
"""A span for each axis outside the plane."""
Around = tuple[Sequence[int], Sequence[int]]
"""Lower and upper corner of a box, both of them part of it."""
Mask = NDArray[np.bool_]
Counts = NDArray[np.unsignedinteger]


@dataclass(frozen=True)
class Box:
    """An axis-aligned box of nodes."""

    low: tuple[int, ...]
    """First node along each axis."""
    high: tuple[int, ...]
    """Last node along each axis; part of the box."""
    nodes: int
    """Nodes in the box."""
    exact: bool
    """Whether it is proven that no box holds more."""
    at_most: int
    """No box holds more nodes than this; ``nodes`` when ``exact``."""


def find_largest_box(
    meets: Mask,
    *,
    around: Around | None = None,
    single: Sequence[int] = (),
    budget: int = BUDGET,
) -> Box | None:
    """The axis-aligned box of nodes that all meet and that holds the most nodes.

    Parameters
    ----------
    meets
        Any number of axes: whether each node meets.
    around
        Lower and upper corner of a box of nodes that the box must contain.
    single
        Positions of the axes along which the box holds exactly one node, such as unordered rows.
    budget
        Planes to search when more than three axes have several nodes among those that meet; with
        up to three the search always ends with a proof.

    Returns
    -------
    Of equal boxes the one whose lower corner, then whose upper corner, comes first in C order. When
    the budget ran out it is the best box seen, ``at_most`` bounds what was not searched, and of
    equal boxes another might come first. ``None`` where no node meets, or ``around`` does not.

    Raises
    ------
    ValueError
        When ``around`` is not a box of nodes of ``meets``, or ``single`` not a set of its axes.

    Examples
    --------
    >>> find_largest_box(np.array([[True, True, False], [True, True, True]]))
    Box(low=(0, 0), high=(1, 1), nodes=4, exact=True, at_most=4)
    """
    if not set(single) <= set(range(meets.ndim)):
        raise ValueError(f"single axes {tuple(single)} expected within 0 to {meets.ndim - 1}")
    if around is not None:
        meets = _seen_from(meets, around, single)
    ends = _ends(meets)
    if ends is None:
        return None
    low, high = ends
    trimmed = meets[tuple(slice(a, b + 1) for a, b in zip(low, high, strict=True))]
    through = None
    if around is not None:
        through = [(int(b) - a, int(c) - a) for a, b, c in zip(low, *around, strict=True)]
    search = _Search(trimmed, through, single)
    search.run(budget if sum(n > 1 for n in trimmed.shape) > 3 else None)
    first, last = search.first_box()
    return Box(
        tuple(int(a + i) for a, i in zip(low, first, strict=True)),
        tuple(int(a + i) for a, i in zip(low, last, strict=True)),
        search.most,
        search.at_most == search.most,
        search.at_most,
    )


def _seen_from(meets: Mask, around: Around, single: Sequence[int]) -> Mask:
    """The nodes that span with the box ``around`` a box of meeting nodes.

    A box within them and ``around`` span together a box within them as well, so the largest box
    among them contains ``around`` without being asked to.
    """
    inside = all(len(corner) == meets.ndim for corner in around) and all(
        0 <= a <= b < n for a, b, n in zip(*around, meets.shape, strict=True)
    )
    if not inside:
        raise ValueError(f"box {around} expected within a grid of {meets.shape}")
    seen = meets.copy()
    for axis, (low, high) in enumerate(zip(*around, strict=True)):
        lines = np.moveaxis(seen, axis, 0)
        lines[low : high + 1] = lines[low : high + 1].all(axis=0)
        np.logical_and.accumulate(lines[high:], axis=0, out=lines[high:])
        backward = lines[low::-1]
        np.logical_and.accumulate(backward, axis=0, out=backward)
        if axis in single:
            lines[:high] = lines[low + 1 :] = False
    return seen


def _ends(meets: Mask) -> tuple[list[int], list[int]] | None:
    """First and last meeting node along each axis; ``None`` when there is none."""
    if not meets.any():
        return None
    low, high = [], []
    for axis in range(meets.ndim):
        others = tuple(other for other in range(meets.ndim) if other != axis)
        found = np.flatnonzero(meets.any(axis=others))
        low.append(int(found[0]))
        high.append(int(found[-1]))
    return low, high


class _Search:
    """Branch and bound over the slabs of one mask; the plane is that of its two longest axes."""

    def __init__(
        self, meets: Mask, through: Sequence[tuple[int, int]] | None, single: Sequence[int]
    ) -> None:
        ranked = sorted(range(meets.ndim), key=lambda axis: (axis not in single, meets.shape[axis]))
        self.ndim = meets.ndim
        self.plane = [axis for axis in ranked if axis not in single][-2:]
        self.outer = [axis for axis in ranked if axis not in self.plane]
        self.single = [axis in single for axis in self.outer]
        self.table = _count_failing(meets.transpose(*self.outer, *self.plane), len(self.outer))
        area = math.prod(self.table.shape[len(self.outer) :])
        self.together = max(1, min(MOST_TOGETHER, BATCH_NODES // area))
        self.searched = 0
        self.most = 0
        self.best: list[Block] = []
        self.waiting: list[tuple[int, Block, int]] = []
        last = [meets.shape[axis] - 1 for axis in self.outer]
        if through is None:
            self.root = tuple((0, n, 0, n) for n in last)
        else:
            self.root = tuple(
                (0, *through[axis], n) for axis, n in zip(self.outer, last, strict=True)
            )

    @property
    def at_most(self) -> int:
        """No box holds more nodes."""
        return max(self.most, -self.waiting[0][0] if self.waiting else 0)

    def run(self, budget: int | None) -> None:
        """Search until nothing unsearched can be as large as the best, or the budget is spent."""
        self._try([self.root])
        while self._promising() and (budget is None or self.searched < budget or not self.best):
            self._try(self._halve_first())

    def _halve_first(self) -> list[Block]:
        """Halve the most promising blocks; those of the parts whose common slab is a new one."""
        fresh: list[Block] = []
        for _ in range(self.together):
            if not self._promising():
                break
            _, block, area = heapq.heappop(self.waiting)
            for part, is_fresh in _parts(block, self.single):
                if is_fresh:
                    fresh.append(part)
                else:
                    self._wait(part, area)
        return fresh

    def first_box(self) -> tuple[tuple[int, ...], tuple[int, ...]]:
        """Of the best boxes the one that comes first, as its first and its last node."""
        found = min(self._first_of(chosen) for chosen in self._batches(self.best))
        return tuple(found[: self.ndim]), tuple(found[self.ndim :])

    def _promising(self) -> bool:
        return bool(self.waiting) and -self.waiting[0][0] >= self.most

    def _try(self, blocks: Sequence[Block]) -> None:
        """Search the common slab of each block; as a box it may be the best."""
        self.searched += len(blocks)
        areas = itertools.chain.from_iterable(map(self._areas, self._batches(blocks)))
        for block, area in zip(blocks, areas, strict=True):
            if not any(_is_open(span) for span in block):
                nodes = area * math.prod(c - b + 1 for _, b, c, _ in block)
                if nodes > self.most:
                    self.most, self.best = nodes, []
                if nodes == self.most:
                    self.best.append(tuple((b, b, c, c) for _, b, c, _ in block))
            self._wait(block, area)

    def _wait(self, block: Block, area: int) -> None:
        """Queue a block of more than one slab, with a bound for all its boxes."""
        if all(a == b and c == d for a, b, c, d in block):
            return
        spans = zip(block, self.single, strict=True)
        bound = area * math.prod(1 if one else d - a + 1 for (a, _, _, d), one in spans)
        if bound >= self.most:
            heapq.heappush(self.waiting, (-bound, block, area))

    def _batches(self, blocks: Sequence[Block]) -> Iterator[Sequence[Block]]:
        return (blocks[i : i + self.together] for i in range(0, len(blocks), self.together))

    def _planes(self, blocks: Sequence[Block]) -> Mask:
        """Shape (rows, columns, blocks): nodes of the plane that a box of the block might hold."""
        return np.stack([_plane(self.table, block) for block in blocks], axis=-1)

    def _areas(self, blocks: Sequence[Block]) -> list[int]:
        """The largest rectangle in the plane of each block."""
        best: Counts | int = 0
        for height, width, _ in _hang(self._planes(blocks)):
            best = np.maximum(best, height * width)
        return [int(area) for area in np.max(best, axis=0)]

    def _first_of(self, slabs: Sequence[Block]) -> list[int]:
        """The first of all largest boxes in some slabs of the best: lower corner, upper corner."""
        ends = np.array([([a for a, *_ in s], [d for *_, d in s]) for s in slabs], dtype=np.intp)
        areas = self.most // (ends[:, 1] - ends[:, 0] + 1).prod(axis=1, dtype=np.intp)
        place, rectangles = _find_rectangles(self._planes(slabs), areas)
        corners = np.empty((len(place), 2, self.ndim), dtype=np.intp)
        corners[:, :, self.outer] = ends[place]
        corners[:, :, self.plane] = rectangles[:, :, 2 - len(self.plane) :]
        keys = corners.reshape(len(place), 2 * self.ndim)
        return min(keys.tolist())


def _count_failing(meets: Mask, outer: int) -> Counts:
    """For each node of the plane, failing nodes before each place along the outer axes.

    Parameters
    ----------
    meets
        The outer axes first, then up to two axes of the plane.
    outer
        How many axes are outer ones.

    Returns
    -------
    One place more along each outer axis, and a plane of two axes.
    """
    shape, missing = meets.shape, 2 + outer - meets.ndim
    size = math.prod(shape[:outer])
    kind = next(k for k in (np.uint8, np.uint16, np.uint32, np.uint64) if size <= np.iinfo(k).max)
    table: Counts = np.zeros(
        (*(n + 1 for n in shape[:outer]), *([1] * missing), *shape[outer:]), dtype=kind
    )
    inner = table[(slice(1, None),) * outer]
    np.logical_not(meets.reshape(inner.shape), out=inner, casting="unsafe")
    for axis in range(outer):
        np.cumsum(inner, axis=axis, dtype=kind, out=inner)
    return table


def _plane(table: Counts, block: Block) -> Mask:
    """Nodes that meet throughout the common slab; along an open span, at some node of it.

    With open spans the condition is a necessary one: as many meeting nodes as one slab needs.
    """
    ends = [(min(b, c), max(b, c) + 1) for _, b, c, _ in block]
    size = math.prod(stop - start for start, stop in ends)
    needed = math.prod(c - b + 1 for _, b, c, _ in block if b <= c)
    failing = np.zeros(table.shape[len(block) :], dtype=table.dtype)
    for corner in itertools.product((0, 1), repeat=len(block)):
        counts = table[tuple(end[side] for end, side in zip(ends, corner, strict=True))]
        step = np.add if (len(block) - sum(corner)) % 2 == 0 else np.subtract
        step(failing, counts, out=failing)
    return failing <= size - needed


def _is_open(span: Span) -> bool:
    """Whether its slabs have no part in common."""
    _, b, c, _ = span
    return b > c


def _parts(block: Block, single: Sequence[bool]) -> Iterator[tuple[Block, bool]]:
    """The block in parts, and of each whether its common slab is another than the block's."""
    slack = [(b > c, (d - a + 1) / max(1, c - b + 1)) for a, b, c, d in block]
    axis = slack.index(max(slack))
    for span, is_fresh in _halves(block[axis], single[axis]):
        yield (*block[:axis], span, *block[axis + 1 :]), is_fresh


def _halves(span: Span, single: bool) -> Iterator[tuple[Span, bool]]:
    a, b, c, d = span
    if _is_open(span):
        m = (a + b) // 2
        yield ((m, m, m, m) if single else (a, m, m, b)), True
        if a < m:
            yield (a, m - 1, a, m - 1), True
        yield (m + 1, b, m + 1, b), True
    elif b - a >= d - c:
        m = (a + b) // 2
        yield (a, m, c, d), True
        yield (m + 1, b, c, d), False
    else:
        m = (c + d) // 2
        yield (a, b, c, m), False
        yield (a, b, m + 1, d), True


def _find_rectangles(
    planes: Mask, areas: NDArray[np.intp]
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Every rectangle of a plane's largest area.

    Parameters
    ----------
    planes
        Shape (rows, columns, planes).
    areas
        Shape (planes,): nodes of the largest rectangle of each plane.

    Returns
    -------
    For each rectangle, some of them named more than once, its plane, shape (n,), and its corners,
    shape (n, 2, 2): first and last node along rows and columns.
    """
    found, corners = [], []
    for row, (height, width, before) in enumerate(_hang(planes)):
        at = np.nonzero(height * width == areas)
        high, wide, left = (part[at].astype(np.intp) for part in (height, width, before))
        found.append(at[1])
        last = np.full_like(high, row)
        corners.append(np.stack([last + 1 - high, left, last, left + wide - 1], axis=1))
    return np.concatenate(found), np.concatenate(corners).reshape(-1, 2, 2)


def _hang(planes: Mask) -> Iterator[tuple[Counts, Counts, Counts]]:
    """Row by row, the rectangle that hangs from each node as far up as its column is whole.

    Every rectangle that cannot grow is among them: some column of it ends at its upper edge.

    Parameters
    ----------
    planes
        Shape (rows, columns, planes).

    Yields
    ------
    Its height, its width and the columns before it, each of shape (columns, planes); the height is
    0 at a node that does not meet. The first and the last are overwritten for the next row.
    """
    rows, columns, _ = planes.shape
    kind = np.uint16 if (rows + 1) * (columns + 1) < 1 << 16 else np.uint32
    whole = np.negative(planes.view(np.uint8).astype(kind))
    left, right = _gaps(whole)
    height, before, after = (np.zeros(planes.shape[1:], dtype=kind) for _ in range(3))
    for row in range(rows):
        np.maximum(before, left[row], out=before)
        np.maximum(after, right[row], out=after)
        height += 1
        height &= whole[row]
        yield height, columns - before - after, before
        before &= whole[row]
        after &= whole[row]


def _gaps(whole: Counts) -> tuple[Counts, Counts]:
    """Columns up to the nearest gap on the left, and on the right, of each node in its row."""
    columns = whole.shape[1]
    place = np.arange(1, columns + 1, dtype=whole.dtype)[:, None]
    left, right = ~whole & place, ~whole & place[::-1]
    for column in range(1, columns):
        np.maximum(left[:, column], left[:, column - 1], out=left[:, column])
    for column in range(columns - 2, -1, -1):
        np.maximum(right[:, column], right[:, column + 1], out=right[:, column])
    return left, right
