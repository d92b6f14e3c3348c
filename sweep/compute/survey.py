"""What a config asks for against what the shelf holds: which tiles are missing."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sweep.compute.task import ComputeBlock, SweepSpec, TileTask
from sweep.config import Config
from sweep.errors import InputError
from sweep.grid import Grid, Tiling
from sweep.identity import atlas_id
from sweep.store.atlas import StoredAtlas
from sweep.store.shards import ShardFormat, TileObjects
from sweep.store.shelf import Shelf
from sweep.store.tiles import MANY_TILES, check_tile_shape, choose_tile_shape, shape_text
from sweep.vocabulary import MEASURES


@dataclass(frozen=True, eq=False)
class Survey:
    """What a config asks for against what the shelf holds; nothing is written to find out."""

    config: Config
    """What is wanted."""
    atlas_id: str
    """Its full id."""
    atlas: StoredAtlas | None
    """The atlas with that id; `None` when the shelf has none."""
    path: Path
    """Where the atlas is, or will be."""
    shards: ShardFormat
    """Shape of its tiles."""
    missing: Mapping[str, NDArray[np.bool_]]
    """For each wanted measure, which tiles are not stored; shape of the lattice of tiles."""
    notes: tuple[str, ...] = ()
    """Things that the user should know."""

    @property
    def tiling(self) -> Tiling:
        """The partition of the grid into tiles."""
        return Tiling(self.config.grid.shape, self.shards.tile_shape)

    @cached_property
    def pending(self) -> NDArray[np.intp]:
        """Flat indices of the tiles to compute, in order; 8 bytes a tile is all a run keeps."""
        return np.flatnonzero(np.any(list(self.missing.values()), axis=0))

    @cached_property
    def objects_to_write(self) -> int:
        """Objects that are not stored, over all measures."""
        return sum(int(mask.sum()) for mask in self.missing.values())

    @cached_property
    def pending_nodes(self) -> int:
        """Nodes of the pending tiles."""
        return pending_nodes(self.tiling, self.pending)

    def tasks(self) -> Iterator[TileTask]:
        """The work, made one at a time: a run of any size holds only what is in flight."""
        return map(self.task, self.pending)

    def task(self, flat: np.intp) -> TileTask:
        """The work on one pending tile."""
        index = tuple(map(int, np.unravel_index(flat, self.tiling.counts)))
        wanted = tuple(name for name, mask in self.missing.items() if mask[index])
        return TileTask(self.tiling.tile(index), wanted)

    def spec(self, compute: ComputeBlock) -> SweepSpec:
        """What the tasks have in common."""
        objects = TileObjects(self.path, self.shards, self.tiling.counts)
        return SweepSpec(self.config.structure, self.config.grid, compute, objects)


def survey_sweep(
    config: Config, shelf_folder: Path, tile_shape: tuple[int, ...] | None = None
) -> Survey:
    """Compare a config with the shelf: one walk over the names of the stored objects.

    Raises
    ------
    QuestionError
        When the shelf is a file, or the tile shape does not fit the grid.
    DamagedAtlas
        When the atlas of this config is there and cannot be read.
    """
    identity = atlas_id(config.structure, config.grid)
    shelf = Shelf(shelf_folder)
    shelf.check()
    atlas = shelf.find_by_id(identity)
    if atlas is None:
        chosen = choose_tile_shape(config.grid)
        shape = chosen if tile_shape is None else check_tile_shape(tile_shape, config.grid)
        tiling = Tiling(config.grid.shape, shape)
        missing = {name: np.ones(tiling.counts, np.bool_) for name in config.measures}
        path = shelf.place_for(config.title, identity)
        shards, notes = ShardFormat.for_tile(shape), _many_tiles(len(tiling), config.grid, chosen)
        notes += tuple(
            f"{entry.path} is damaged and cannot be read: its zarr.json is not what was written"
            for entry in shelf.list_damaged()
        )
        return Survey(config, identity, None, path, shards, missing, notes)
    _check_measure_versions(config, atlas)
    missing = {name: ~atlas.done_mask(name) for name in config.measures}
    notes = _kept_shape(atlas, tile_shape, config.grid)
    if tile_shape is not None and not notes:
        notes = _many_tiles(len(atlas.tiling), config.grid, choose_tile_shape(config.grid))
    return Survey(config, identity, atlas, atlas.path, atlas.shards, missing, notes)


def pending_nodes(tiling: Tiling, pending: NDArray[np.intp]) -> int:
    """Nodes in the given tiles (flat indices), without making a tile of each."""
    nodes = np.ones(pending.size, np.int64)
    places = np.unravel_index(pending, tiling.counts)
    for place, edge, n in zip(places, tiling.tile_shape, tiling.shape, strict=True):
        nodes *= np.minimum((place + 1) * edge, n) - place * edge
    return int(nodes.sum())


def _kept_shape(
    atlas: StoredAtlas, tile_shape: tuple[int, ...] | None, grid: Grid
) -> tuple[str, ...]:
    if tile_shape is None:
        return ()
    wanted, kept = check_tile_shape(tile_shape, grid), atlas.tiling.tile_shape
    if wanted == kept:
        return ()
    text = f"the atlas keeps the tile shape {shape_text(kept)} that it was made with; "
    return (f"{text}{shape_text(wanted)} was asked for",)


def _many_tiles(tiles: int, grid: Grid, chosen: tuple[int, ...]) -> tuple[str, ...]:
    """A word about a tile shape that makes many times the tiles of the usual one."""
    usual = len(Tiling(grid.shape, chosen))
    if tiles <= MANY_TILES or tiles < 10 * usual:
        return ()
    text = f"this tile shape cuts the grid into {tiles:,} tiles, each a file for every measure; "
    return (f"{text}{shape_text(chosen)} makes {usual:,} and runs faster",)


def _check_measure_versions(config: Config, atlas: StoredAtlas) -> None:
    stored = {spec.name: spec.version for spec in atlas.measures}
    for name in config.measures:
        current = MEASURES[name].version
        if stored.get(name, current) != current:
            raise InputError(
                f"adding to the atlas {atlas.path}: its {name} has version {stored[name]}, this "
                f"program computes version {current}; one atlas cannot hold both",
                where=[name],
                remedy="move that atlas to another folder and run the config again",
            )
