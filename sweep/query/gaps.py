"""Nodes between which nothing may be said: on either side of a gain of exactly 0.

At such a node a term is absent together with its memory, so that it says nothing about what lies
beside it (an integral gain just above 0 has an eigenvalue just below 1, one of 0 has none). A box,
a region and a step from neighbour to neighbour therefore end there. The functions here insert a
layer that meets nothing into every such gap, and take it out of the answer again.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Axis, Grid
from sweep.query.blocks import Indices
from sweep.query.jump import find_largest_jump
from sweep.query.largest_box import Around, Box, find_largest_box
from sweep.query.regions import count_regions
from sweep.query.scope import Scope
from sweep.query.select import gain_changes_structure

Gaps = Mapping[int, NDArray[np.intp]]
"""For each dimension that has some, the places after which there is a gap, increasing."""

Mask = NDArray[np.bool_]


def find_gaps(grid: Grid, axes: Sequence[Axis], nodes: Sequence[Indices]) -> dict[int, Indices]:
    """The gaps between some nodes of some axes.

    Parameters
    ----------
    grid
        Of the atlas.
    axes
        One for each dimension.
    nodes
        For each of them the nodes that take part, increasing.
    """
    found = {}
    for dimension, (axis, taken) in enumerate(zip(axes, nodes, strict=True)):
        alone = np.isin(taken, gain_changes_structure(grid, axis))
        gaps = np.flatnonzero(alone[:-1] | alone[1:])
        if gaps.size:
            found[dimension] = gaps.astype(np.intp)
    return found


def design_gaps(scope: Scope) -> dict[int, Indices]:
    """The gaps between the designs of a question."""
    axes = [scope.grid.axes[axis] for axis in scope.free]
    return find_gaps(scope.grid, axes, [scope.spans[axis] for axis in scope.free])


def unordered_dimensions(scope: Scope) -> tuple[int, ...]:
    """Dimensions of the designs along which neighbours mean nothing."""
    axes = [scope.grid.axes[axis] for axis in scope.free]
    return tuple(i for i, axis in enumerate(axes) if axis.is_row_axis and not axis.ordered)


def box_without_gaps(
    meets: Mask, gaps: Gaps, *, around: Around | None = None, single: Sequence[int] = ()
) -> Box | None:
    """As `sweep.query.largest_box.find_largest_box`, for a box that crosses no gap."""
    if not gaps:
        return find_largest_box(meets, around=around, single=single)
    layers = [_layers(n, gaps.get(axis)) for axis, n in enumerate(meets.shape)]
    if around is not None:
        around = _into(layers, around[0]), _into(layers, around[1])
    found = find_largest_box(_spread(meets, layers, False), around=around, single=single)
    if found is None:
        return None
    return replace(found, low=_out_of(layers, found.low), high=_out_of(layers, found.high))


def regions_without_gaps(meets: Mask, gaps: Gaps, unordered: Sequence[int]) -> int:
    """As `sweep.query.regions.count_regions`, where no region crosses a gap."""
    layers = [_layers(n, gaps.get(axis)) for axis, n in enumerate(meets.shape)]
    return count_regions(_spread(meets, layers, False) if gaps else meets, unordered=unordered)


def jump_without_gaps(
    log_radius: NDArray[np.floating], inside: Mask, gaps: Gaps, unordered: Sequence[int]
) -> float | None:
    """As `sweep.query.jump.find_largest_jump`, where nodes beside a gap are no neighbours."""
    if gaps:
        layers = [_layers(n, gaps.get(axis)) for axis, n in enumerate(inside.shape)]
        log_radius, inside = _spread(log_radius, layers, np.nan), _spread(inside, layers, False)
    return find_largest_jump(log_radius, inside, unordered)


def _layers(size: int, gaps: Indices | None) -> Indices:
    """The places of one dimension in order, with -1 in every gap."""
    places = np.arange(size, dtype=np.intp)
    return places if gaps is None else np.insert(places, gaps + 1, -1)


def _spread(values: NDArray[Any], layers: Sequence[Indices], fill: float) -> NDArray[Any]:
    """An array with a layer of ``fill`` in every gap."""
    spread = values[np.ix_(*layers)]
    for axis, rows in enumerate(layers):
        np.moveaxis(spread, axis, 0)[rows < 0] = fill
    return spread


def _into(layers: Sequence[Indices], node: Sequence[int]) -> tuple[int, ...]:
    """Where a node stands among the layers."""
    return tuple(
        int(np.flatnonzero(rows == place)[0]) for rows, place in zip(layers, node, strict=True)
    )


def _out_of(layers: Sequence[Indices], node: Sequence[int]) -> tuple[int, ...]:
    """The node that stands at a place among the layers."""
    return tuple(int(rows[place]) for rows, place in zip(layers, node, strict=True))
