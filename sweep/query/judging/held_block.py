"""A block of an atlas that several questions share, read once for each measure."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from sweep.grid import Grid, Tiling
from sweep.query.blocks import Indices, Readable

MOST_NODES = 20_000_000
"""Nodes of a block that is held: 80 MB for each measure. Larger ones are read tile by tile."""


class HeldBlock:
    """The nodes between the first and the last of some spans, as an atlas of one tile.

    Parameters
    ----------
    stored
        The atlas.
    spans
        For each axis the nodes that questions will need, increasing.
    """

    def __init__(self, stored: Readable, spans: Sequence[Indices]) -> None:
        self._stored = stored
        self._start = tuple(int(nodes[0]) for nodes in spans)
        self._stop = tuple(int(nodes[-1]) + 1 for nodes in spans)
        self._held: dict[str, NDArray[np.float32]] = {}

    @property
    def atlas_id(self) -> str:
        """Of the atlas."""
        return self._stored.atlas_id

    @property
    def grid(self) -> Grid:
        """Of the atlas."""
        return self._stored.grid

    @cached_property
    def tiling(self) -> Tiling:
        """One tile, so that nothing is cut."""
        return Tiling(self.grid.shape, self.grid.shape)

    def read(self, measure: str, selection: tuple[slice, ...]) -> NDArray[np.float32]:
        """Values within the block; NaN where unknown."""
        if measure not in self._held:
            whole = tuple(slice(a, b) for a, b in zip(self._start, self._stop, strict=True))
            self._held[measure] = self._stored.read(measure, whole)
        shifted = tuple(
            slice(part.start - a, part.stop - a)
            for part, a in zip(selection, self._start, strict=True)
        )
        return self._held[measure][shifted]


def hold(stored: Readable, spans: Sequence[Indices]) -> Readable:
    """The atlas, with the nodes of some spans read once if they are few enough to be held.

    Only nodes within the spans may then be asked for.
    """
    nodes = math.prod(int(along[-1]) - int(along[0]) + 1 for along in spans)
    return HeldBlock(stored, spans) if nodes <= MOST_NODES else stored
