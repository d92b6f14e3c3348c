"""One atlas on disk: made, opened, read, and relabelled."""

from __future__ import annotations

import errno
import json
import os
import shutil
import uuid
from collections.abc import Iterable, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, fields
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from sweep.config import Config
from sweep.errors import DamagedAtlas, QuestionError, SweepError
from sweep.identity import PROGRAM_VERSION
from sweep.store.arrays import Objects, group_objects, open_arrays, open_dataset
from sweep.store.blocks import NotAsWritten, read_block
from sweep.store.layout import (
    STORE_VERSION,
    SUFFIX,
    atlas_attributes,
    atlas_variables,
)
from sweep.store.reading import AtlasContents, read_contents
from sweep.store.selecting import Index, as_positions, resolve, tiles_touched
from sweep.store.shards import Measured, ShardFormat, TileObjects, publish, write_new_folder
from sweep.vocabulary import MEASURES, MeasureSpec

if TYPE_CHECKING:
    import xarray as xr
    import zarr

_UNREADABLE = (ValueError, KeyError, TypeError, IndexError, AttributeError, RuntimeError, OSError)
"""What zarr, numpy and json raise when stored bytes are not what they should be."""
_NAME_IS_TAKEN = {errno.EEXIST, errno.ENOTEMPTY, errno.ENOTDIR}
"""How systems word it that a folder cannot be renamed to a name that is in use."""
_ALWAYS_ON_A_COVER = {"atlas_id", "physics_id", "program_version"}
"""Attributes that tell a cover of ours with one of them lost from somebody else's group."""
REPLACE_IT = "take a whole copy of it, or move it away and run its config again"
"""What to do about an atlas whose metadata is damaged."""
_MOST_METADATA_BYTES = 256 * 2**20
"""A group's metadata holds the config, tables of rows included, and is never near this."""


@dataclass(frozen=True, eq=False)
class StoredAtlas(AtlasContents):
    """An opened atlas: what it says about itself, and access to its measures.

    Notes
    -----
    Values are float32; NaN means unknown and nothing else does.
    """

    path: Path
    """Its folder."""

    @cached_property
    def dataset(self) -> xr.Dataset:
        """The whole atlas as a lazy labelled dataset."""
        return open_dataset(self.path)

    @cached_property
    def objects(self) -> TileObjects:
        """Where its tiles are written; small, picklable and free of zarr."""
        return TileObjects(self.path, self.shards, self.tiling.counts)

    @cached_property
    def _arrays(self) -> dict[str, zarr.Array[Any]]:
        return open_arrays(self.path)

    def read(self, measure: str, selection: Sequence[Index]) -> Measured:
        """Values of a measure at the product of the selected nodes.

        Parameters
        ----------
        measure
            Name of a stored measure.
        selection
            One slice, index or array of indices for each axis; a plain index drops its axis.

        Returns
        -------
        Float32; NaN where a tile is not computed yet.

        Raises
        ------
        QuestionError
            When the atlas does not hold the measure.
        DamagedAtlas
            When stored bytes fail their checksum; names the tiles and the remedy.
        IndexError
            When the selection does not fit the axes.
        """
        picked = resolve(selection, self.grid.shape)
        array = self._measure_array(measure)
        block = [p for p in picked if isinstance(p, slice) and p.step == 1]
        if len(block) == len(picked):
            with suppress(NotAsWritten, OSError):
                return read_block(self.objects, measure, block)
        try:
            return np.asarray(array.oindex[tuple(picked)], np.float32)
        except _UNREADABLE:
            return self._read_by_tile(measure, picked)

    def done_mask(self, measure: str) -> NDArray[np.bool_]:
        """Which tiles of a measure are stored, shape of the lattice; one walk over names."""
        return self.objects.done_mask(measure)

    def done_tiles(self, measure: str) -> set[tuple[int, ...]]:
        """Indices of the stored tiles of a measure."""
        done = np.argwhere(self.done_mask(measure))
        return {tuple(index) for index in done.tolist()}

    def tiles_done(self, measures: Iterable[str] | None = None) -> NDArray[np.bool_]:
        """Which tiles hold every one of the measures (all stored ones when left out)."""
        names = [spec.name for spec in self.measures] if measures is None else list(measures)
        mask = np.ones(self.tiling.counts, np.bool_)
        for name in names:
            mask &= self.done_mask(name)
        return mask

    @property
    def complete(self) -> bool:
        """Whether every tile holds every stored measure."""
        return bool(self.tiles_done().all())

    def add_measures(self, config: Config) -> StoredAtlas:
        """Make room for those measures of ``config`` that the atlas does not hold yet."""
        held = {spec.name for spec in self.measures}
        added = tuple(MEASURES[name] for name in config.measures if name not in held)
        if not added:
            return self
        objects = _metadata(config, self.shards, self.measures + added, self.program_version)
        for key in [*(f"{spec.name}/zarr.json" for spec in added), "zarr.json"]:
            publish(self.path / key, [objects[key]], synced=True)
        return open_stored(self.path)

    def update_labels(self, config: Config) -> StoredAtlas:
        """Take over what a config may change without computing anything.

        Titles, units' labels, row labels, roles, nominals, designs and cases. Nothing is written,
        and this very object returned, when nothing differs.
        """
        objects = _metadata(config, self.shards, self.measures, self.program_version)
        changed = [key for key, data in objects.items() if _differs(self.path / key, data)]
        # The group comes last: a crash before it leaves a difference that the next run sees.
        for key in sorted(changed, key=lambda key: key == "zarr.json"):
            publish(self.path / key, [objects[key]], synced=True)
        return open_stored(self.path) if changed else self

    def _measure_array(self, measure: str) -> zarr.Array[Any]:
        names = [spec.name for spec in self.measures]
        if measure not in names:
            raise QuestionError(
                f"reading {measure!r} from the atlas {self.title!r}: it holds {', '.join(names)}",
                where=[measure],
                remedy="ask for one of these, or add the measure to the config and run it",
            )
        return self._arrays[measure]

    def _read_by_tile(self, measure: str, picked: Sequence[slice | int | Any]) -> Measured:
        """The slow way after a failed read: gather what is whole and name every tile that is not.

        An object that is too short to hold values counts as not there, as in `done_mask`.
        """
        array = self._arrays[measure]
        nodes = [as_positions(p, n) for p, n in zip(picked, self.grid.shape, strict=True)]
        done = self.done_mask(measure)
        values = np.full([len(axis_nodes) for axis_nodes in nodes], np.nan, np.float32)
        damaged = []
        for index, places in tiles_touched(nodes, self.tiling.tile_shape):
            if not done[index]:
                continue
            wanted = tuple(n[p] for n, p in zip(nodes, places, strict=True))
            try:
                values[np.ix_(*places)] = array.oindex[wanted]
            except _UNREADABLE as cause:
                damaged.append((index, cause))
        if damaged:
            raise self._damage(measure, damaged)
        return values[tuple(0 if isinstance(p, int) else slice(None) for p in picked)]

    def _damage(
        self, measure: str, damaged: Sequence[tuple[tuple[int, ...], Exception]]
    ) -> DamagedAtlas:
        objects = [str(self.objects.path(measure, i).relative_to(self.path)) for i, _ in damaged]
        first_index, cause = damaged[0]
        count = len(damaged)
        return DamagedAtlas(
            f"reading {measure} from {self.path}: {count} tile{'s' if count > 1 else ''} cannot be "
            f"trusted, the first at {first_index} ({_one_line(cause)}); expected the bytes that "
            "were written",
            where=objects,
            remedy=f"delete {', '.join(objects[:3])}{' …' if count > 3 else ''} in that folder and "
            "run the config again: only the deleted tiles are computed",
        )


def create_atlas(folder: Path, config: Config, tile_shape: tuple[int, ...]) -> StoredAtlas:
    """Make an empty atlas at ``folder``, whole or not at all.

    It is built beside its place under another name and renamed, so that a crash leaves at most a
    folder that `sweep.store.shelf.Shelf.remove_leftovers` takes away.

    Raises
    ------
    FileExistsError
        When something stands at ``folder`` already.
    """
    shards = ShardFormat.for_tile(tile_shape)
    objects = _metadata(config, shards, [MEASURES[name] for name in config.measures])
    folder.parent.mkdir(parents=True, exist_ok=True)
    partial = folder.with_name(f"{folder.name}.{uuid.uuid4().hex}.partial")
    try:
        write_new_folder(partial, objects)
        if folder.exists():
            raise FileExistsError(errno.EEXIST, os.strerror(errno.EEXIST), str(folder))
        partial.rename(folder)  # refuses as well, should another run take the name just now
    except OSError as cause:
        shutil.rmtree(partial, ignore_errors=True)
        if cause.errno in _NAME_IS_TAKEN:
            raise FileExistsError(errno.EEXIST, os.strerror(errno.EEXIST), str(folder)) from cause
        raise
    return open_stored(folder)


def open_stored(path: Path | str) -> StoredAtlas:
    """Open an atlas that may come from anywhere: its metadata is checked whole.

    Raises
    ------
    QuestionError
        When there is no atlas at ``path``, or a newer program made it.
    DamagedAtlas
        When its metadata is incomplete or contradicts itself.
    """
    folder = Path(path)
    attributes = _read_attributes(folder)
    _check_versions(folder, attributes)
    try:
        contents = read_contents(attributes, open_arrays(folder))
    except (SweepError, MemoryError, *_UNREADABLE) as cause:
        raise DamagedAtlas(
            f"opening the atlas {folder}: {_one_line(cause)}",
            where=[str(folder)],
            remedy=REPLACE_IT,
        ) from cause
    known = {f.name: getattr(contents, f.name) for f in fields(contents)}
    return StoredAtlas(path=folder, **known)


def read_cover(folder: Path) -> Mapping[str, Any] | None:
    """The attributes of the group at ``folder``, or `None` when it is no atlas at all."""
    path = folder / "zarr.json"
    try:
        if path.stat().st_size > _MOST_METADATA_BYTES:
            return None
        node = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return None
    attributes = node.get("attributes") if isinstance(node, dict) else None
    if not isinstance(attributes, dict) or "store_version" not in attributes:
        return None
    return attributes


def find_cover_damage(folder: Path) -> str:
    """What is wrong with the cover of an atlas, such as after a flipped bit; empty when nothing is.

    A folder counts as an atlas by its name and by holding a ``zarr.json``. What is whole and
    somebody else's is no damage.
    """
    path = folder / "zarr.json"
    if folder.suffix != SUFFIX or not os.path.lexists(path) or read_cover(folder) is not None:
        return ""
    try:
        if not path.stat().st_size:
            return "it is empty"
        node = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        return f"the system says: {error.strerror}"
    except (ValueError, RecursionError):
        return "it is no JSON text"
    attributes = node.get("attributes") if isinstance(node, dict) else None
    if not isinstance(attributes, dict) or not attributes:
        return "it has no attributes"
    if _ALWAYS_ON_A_COVER.isdisjoint(attributes):
        return ""
    return "its attribute store_version is lost"


def damaged_cover(folder: Path, found: str, attempt: str = "opening the atlas") -> DamagedAtlas:
    """The error that says so."""
    return DamagedAtlas(
        f"{attempt} {folder}: expected the zarr.json that `sweep run` wrote there, found that "
        f"{found}",
        where=[str(folder / "zarr.json")],
        remedy=REPLACE_IT,
    )


def _read_attributes(folder: Path) -> Mapping[str, Any]:
    attributes = read_cover(folder)
    if attributes is None:
        found = "no such folder" if not folder.exists() else "something else"
        raise QuestionError(
            f"opening the atlas {folder}: expected a folder that `sweep run` made, found {found}",
            where=[str(folder)],
            remedy="give the folder of an atlas, or run its config first",
        )
    return attributes


def _check_versions(folder: Path, attributes: Mapping[str, Any]) -> None:
    version = attributes["store_version"]
    if version != STORE_VERSION:
        raise QuestionError(
            f"opening the atlas {folder}: it has store version {str(version)[:20]}, this program "
            f"reads version {STORE_VERSION}",
            where=[str(folder)],
            remedy="use the program version that made it "
            f"({str(attributes.get('program_version'))[:20]}) or a newer one",
        )


def _metadata(
    config: Config,
    shards: ShardFormat,
    measures: Iterable[MeasureSpec],
    program_version: str = PROGRAM_VERSION,
) -> Objects:
    attributes = atlas_attributes(config, shards.tile_shape, program_version)
    variables = atlas_variables(config.structure, config.grid)
    return group_objects(attributes, variables, measures, config.grid.shape, shards)


def _differs(path: Path, data: bytes) -> bool:
    """Whether a stored object says something else; metadata is compared by its attributes."""
    try:
        stored = path.read_bytes()
        if path.name != "zarr.json" or stored == data:
            return stored != data
        return _attributes_of(stored) != _attributes_of(data)
    except (FileNotFoundError, ValueError, KeyError, TypeError, AttributeError):
        return True


def _attributes_of(data: bytes) -> tuple[Any, dict[str, Any]]:
    """Attributes of a group or array, and of the arrays that a group repeats."""
    node = json.loads(data)
    members = node.get("consolidated_metadata", {}).get("metadata", {})
    return node["attributes"], {name: member["attributes"] for name, member in members.items()}


def _one_line(cause: BaseException) -> str:
    text = " ".join(str(cause).split())
    if "checksum" in text.lower():
        return "the bytes do not fit their checksum"
    return text[:200] or type(cause).__name__
