"""The grid of a sweep: axes, fixed parameters, and the partition into tiles."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Role = Literal["design", "tolerance"]
FloatArray = NDArray[np.float64]

SAME_NODE = 1e-9
"""A value within this share of the axis span of a node is that node, and within `SAME_STEP`."""

SAME_STEP = 1e-3
"""Share of the step to the nearest neighbour that is never more than one and the same node: a wide
logarithmic axis has steps that are finer than a billionth of its span."""


@dataclass(frozen=True, eq=False)
class Axis:
    """One axis: the coordinates of one parameter, or the rows of a table that sets several."""

    name: str
    """Name of the dimension."""
    sets: tuple[str, ...]
    """Dotted paths of the parameters it sets; more than one (or a table of one) on a row axis."""
    coordinates: FloatArray
    """Shape (n,), increasing, in ``unit``; on a row axis 0, 1, …, n - 1."""
    role: Role
    """Who decides: the engineer (design) or nature (tolerance)."""
    nominal: int
    """Index of the nominal node."""
    unit: str = "1"
    """Unit of ``coordinates``."""
    display_unit: str = ""
    """Unit for people; empty means ``unit``."""
    long_name: str = ""
    """The trade's name for what it sweeps."""
    labels: tuple[str, ...] | None = None
    """Row labels; ``None`` on a plain axis."""
    ordered: bool = True
    """Whether neighbours mean something; rows are unordered unless the config says so."""
    columns: Mapping[str, FloatArray] = field(default_factory=dict)
    """On a row axis, each parameter's values by dotted path, shape (n,), SI units."""
    column_units: Mapping[str, str] = field(default_factory=dict)
    """On a row axis, the unit of each column by dotted path."""

    def __len__(self) -> int:
        return len(self.coordinates)

    @property
    def is_row_axis(self) -> bool:
        """Whether its nodes are rows of a table."""
        return self.labels is not None

    def snapped(self, values: FloatArray) -> FloatArray:
        """Values with those that mean a node moved onto it; any shape, in the axis's unit."""
        x = self.coordinates
        if len(x) < 2:
            return np.where(values == x[0], x[0], values)
        right = np.clip(np.searchsorted(x, values), 1, len(x) - 1)
        near = np.where(values - x[right - 1] <= x[right] - values, right - 1, right)
        steps = np.diff(x)
        step = np.minimum(steps[np.maximum(near - 1, 0)], steps[np.minimum(near, len(steps) - 1)])
        slack = np.minimum(SAME_NODE * (x[-1] - x[0]), SAME_STEP * step)
        return np.where(np.abs(values - x[near]) <= slack, x[near], values)

    def values_of(self, path: str) -> FloatArray:
        """The values of parameter ``path`` along the axis, shape (n,), SI units.

        Raises
        ------
        KeyError
            When the axis does not set ``path``.
        """
        if self.is_row_axis:
            return self.columns[path]
        if path not in self.sets:
            raise KeyError(path)
        return self.coordinates


@dataclass(frozen=True)
class FixedParameter:
    """A parameter with one value throughout the sweep."""

    path: str
    """Dotted path."""
    value: float
    """In ``unit``."""
    unit: str = "1"
    """Unit in which it is stored."""
    display_unit: str = ""
    """Unit for people; empty means ``unit``."""
    long_name: str = ""
    """The trade's name for it."""


@dataclass(frozen=True, eq=False)
class Grid:
    """Every node of a sweep: the product of its axes, and what is fixed."""

    axes: tuple[Axis, ...]
    """In the order of the config, which is the order of the stored dimensions."""
    fixed: tuple[FixedParameter, ...] = ()
    """Parameters with one value."""

    @cached_property
    def shape(self) -> tuple[int, ...]:
        """Number of nodes along each axis."""
        return tuple(len(axis) for axis in self.axes)

    @cached_property
    def size(self) -> int:
        """Number of nodes in all."""
        return math.prod(self.shape)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the axes."""
        return tuple(axis.name for axis in self.axes)

    def axis(self, name: str) -> Axis:
        """The axis called ``name``; `KeyError` if there is none."""
        for axis in self.axes:
            if axis.name == name:
                return axis
        raise KeyError(name)

    def paths(self) -> tuple[str, ...]:
        """Dotted paths of every parameter, swept ones first."""
        swept = [path for axis in self.axes for path in axis.sets]
        return (*swept, *(fixed.path for fixed in self.fixed))

    def parameters(self, block: tuple[slice, ...] | None = None) -> dict[str, FloatArray]:
        """Coordinates -> loop parameters, for a block of the grid.

        Parameters
        ----------
        block
            One slice for each axis; the whole grid when left out.

        Returns
        -------
        Each parameter's values by dotted path, in SI units (delay parts in their own unit), with
        one dimension for each axis of the grid and length 1 along every axis that does not set it,
        so that plain broadcasting spans the block.
        """
        block = block or tuple(slice(None) for _ in self.axes)
        rank = len(self.axes)
        values: dict[str, FloatArray] = {}
        for position, axis in enumerate(self.axes):
            shape = [1] * rank
            shape[position] = -1
            for path in axis.sets:
                values[path] = axis.values_of(path)[block[position]].reshape(shape)
        for fixed in self.fixed:
            values[fixed.path] = np.full([1] * rank, fixed.value)
        return values


@dataclass(frozen=True)
class Tile:
    """A block of nodes that is computed by one task and stored as one object per measure."""

    index: tuple[int, ...]
    """Position in the lattice of tiles."""
    start: tuple[int, ...]
    """First node along each axis."""
    stop: tuple[int, ...]
    """One past the last node along each axis; never beyond the grid."""

    @property
    def block(self) -> tuple[slice, ...]:
        """The tile as one slice for each axis."""
        return tuple(slice(a, b) for a, b in zip(self.start, self.stop, strict=True))

    @property
    def shape(self) -> tuple[int, ...]:
        """Nodes along each axis; smaller than the tile shape at the edge of the grid."""
        return tuple(b - a for a, b in zip(self.start, self.stop, strict=True))

    @property
    def size(self) -> int:
        """Nodes in the tile."""
        return math.prod(self.shape)


@dataclass(frozen=True)
class Tiling:
    """The partition of a grid into tiles: every node lies in exactly one of them."""

    shape: tuple[int, ...]
    """Nodes of the grid along each axis."""
    tile_shape: tuple[int, ...]
    """Nodes of a whole tile along each axis."""

    def __post_init__(self) -> None:
        if len(self.shape) != len(self.tile_shape) or min(self.tile_shape, default=1) < 1:
            raise ValueError(f"tile shape {self.tile_shape} does not fit grid shape {self.shape}")

    @property
    def counts(self) -> tuple[int, ...]:
        """Tiles along each axis."""
        return tuple(-(-n // t) for n, t in zip(self.shape, self.tile_shape, strict=True))

    def __len__(self) -> int:
        return math.prod(self.counts)

    def tile(self, index: tuple[int, ...]) -> Tile:
        """The tile at ``index`` of the lattice; `IndexError` outside it."""
        if len(index) != len(self.counts) or not all(
            0 <= i < n for i, n in zip(index, self.counts, strict=True)
        ):
            raise IndexError(f"no tile {index} in a lattice of {self.counts}")
        start = tuple(i * t for i, t in zip(index, self.tile_shape, strict=True))
        stop = tuple(
            min(a + t, n) for a, t, n in zip(start, self.tile_shape, self.shape, strict=True)
        )
        return Tile(index, start, stop)

    def __iter__(self) -> Iterator[Tile]:
        for index in itertools.product(*(range(n) for n in self.counts)):
            yield self.tile(index)
