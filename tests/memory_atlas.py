"""An atlas in memory, with what `sweep.query` needs of a stored one, for tests of questions."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from sweep.grid import Axis, FixedParameter, Grid, Tiling
from sweep.query.atlas import Atlas
from sweep.vocabulary import MEASURES, LoopStructure


@dataclass
class MemoryAtlas:
    """Values by measure; every block that is read is counted."""

    grid: Grid
    values: dict[str, np.ndarray]
    tile_shape: tuple[int, ...] = ()
    designs: tuple = ()
    cases: tuple = ()
    title: str = "Memory"
    atlas_id: str = "ab" * 32
    physics_id: str = "cd" * 32
    program_version: str = "0"
    path: Path = Path("memory.zarr")
    structure: LoopStructure = field(default_factory=lambda: LoopStructure("oscillator", "p"))
    nodes_read: list[int] = field(default_factory=list)

    @property
    def tiling(self):
        return Tiling(self.grid.shape, self.tile_shape or self.grid.shape)

    @property
    def measures(self):
        return tuple(MEASURES[name] for name in self.values)

    def read(self, measure, selection):
        block = self.values[measure][selection]
        self.nodes_read.append(block.size)
        return block

    def done_tiles(self, measure):
        return {
            tile.index
            for tile in self.tiling
            if not np.isnan(self.values[measure][tile.block]).all()
        }

    def tiles_done(self):
        mask = np.zeros(self.tiling.counts, bool)
        for index in self.done_tiles("log_radius"):
            mask[index] = True
        return mask


def axis(name, coordinates, *, sets="", role="design", nominal=0, **more):
    """A plain axis."""
    values = np.asarray(coordinates, float)
    return Axis(name, (sets or name,), values, role, nominal, **more)


def rows(name, labels, columns, *, role="tolerance", ordered=False):
    """A row axis."""
    return Axis(
        name,
        tuple(columns),
        np.arange(len(labels), dtype=float),
        role,
        0,
        labels=tuple(labels),
        ordered=ordered,
        columns={path: np.asarray(values, float) for path, values in columns.items()},
        column_units=dict.fromkeys(columns, "1"),
    )


def atlas(axes, log_radius, mode_angle=None, *, fixed=None, **more):
    """An atlas that can be asked, of arrays over ``axes`` (NaN where unknown)."""
    log_radius = np.asarray(log_radius, np.float32)
    angle = np.zeros_like(log_radius) if mode_angle is None else np.asarray(mode_angle, np.float32)
    fixed = fixed or {}
    if not any("sample_period" in one.sets for one in axes):
        fixed.setdefault("sample_period", 0.01)
    grid = Grid(tuple(axes), tuple(FixedParameter(path, value) for path, value in fixed.items()))
    values = {"log_radius": log_radius, "mode_angle": np.where(np.isnan(log_radius), np.nan, angle)}
    return Atlas(MemoryAtlas(grid, values, **more))
