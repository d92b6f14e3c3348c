"""One tile as one object: a zarr v3 shard, encoded in memory and published by rename.

Objects are encoded here and not by assignment to a zarr array, for four reasons that were measured
or met. An edge tile never becomes a read-modify-write of an old, perhaps damaged, object. A tile
whose every value is equal still yields an object, whatever zarr's global settings say. No lock and
no event loop is shared by the workers: per tile of 2**18 nodes this takes 1.5 to 4 ms of processor
time where assignment takes 4 to 9 (zarr 3.4) or 10 to 15 (zarr 3.1). And when an object is brought
to the disk is decided here. The format is zarr's own (``sharding_indexed``, index at the end,
crc32c on every chunk and on the index): zarr reads it back, and so does `sweep.store.blocks`; tests
compare what either reads with what was written.

An object is published by rename, so that a killed process leaves whole objects only, and flushed
(fsync) a moment later by the thread that waits for results: 1 to 3 ms of waiting in which the
workers go on. A power cut between the two can leave the newest names without their bytes; the
size and the checksums tell.

Names are flat, ``log_radius/c.4.0.3``, by zarr's separator ``"."``: one folder is listed in a
quarter of the time of a tree of them, and no tile pays for making folders.
"""

from __future__ import annotations

import hashlib
import itertools
import math
import operator
import os
import re
import struct
import uuid
from collections.abc import Iterator, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Literal

import google_crc32c
import numpy as np
from numcodecs import Blosc
from numpy.typing import NDArray

from sweep.grid import Tile
from sweep.store.tiles import inner_chunk_shape

Measured = NDArray[np.float32]

CNAME: Literal["lz4"] = "lz4"
"""Blosc codec. Mantissa noise leaves any lossless one a ratio near 1.25; this is the cheapest."""
CLEVEL = 5
"""Its level."""
PARTIAL = re.compile(r".+\.[0-9a-f]{32}\.partial")
"""Names of unfinished objects and atlases; never mistaken for a finished one."""

_OBJECT = re.compile(r"c(\.(0|[1-9][0-9]{0,8}))+")
_BYTES_PER_ENTRY = 16
_BYTES_PER_CHECKSUM = 4
_ATTEMPTS = 5


@dataclass(frozen=True)
class ShardFormat:
    """How the tiles of one atlas are laid out as objects."""

    tile_shape: tuple[int, ...]
    """Nodes of a whole tile along each axis; an object always holds a whole tile."""

    chunk_shape: tuple[int, ...]
    """Nodes of an inner chunk along each axis; divides the tile exactly."""

    @classmethod
    def for_tile(cls, tile_shape: tuple[int, ...]) -> ShardFormat:
        """The format of a new atlas with such tiles."""
        return cls(tile_shape, inner_chunk_shape(tile_shape))

    def __post_init__(self) -> None:
        pairs = list(zip(self.tile_shape, self.chunk_shape, strict=True))
        if any(c < 1 or t < 1 or t % c for t, c in pairs):
            raise ValueError(f"chunks of {self.chunk_shape} do not divide a tile {self.tile_shape}")

    @cached_property
    def index_bytes(self) -> int:
        """Size of the index; an object that is not larger holds no values."""
        return len(self._chunks) * _BYTES_PER_ENTRY + _BYTES_PER_CHECKSUM

    @property
    def chunks(self) -> int:
        """Inner chunks of an object."""
        return len(self._chunks)

    @cached_property
    def most_bytes(self) -> int:
        """No object is larger than this: incompressible chunks, their headers and the index."""
        per_chunk = math.prod(self.chunk_shape) * 4 + 16 + _BYTES_PER_CHECKSUM
        return len(self._chunks) * per_chunk + self.index_bytes

    @cached_property
    def _chunks(self) -> tuple[tuple[slice, ...], ...]:
        starts = [range(0, t, c) for t, c in zip(self.tile_shape, self.chunk_shape, strict=True)]
        return tuple(
            tuple(slice(a, a + c) for a, c in zip(corner, self.chunk_shape, strict=True))
            for corner in itertools.product(*starts)
        )

    def encode(self, values: Measured) -> list[bytes]:
        """The object of one tile, in parts whose concatenation is the shard.

        Parameters
        ----------
        values
            Float32, the shape of the tile; smaller than ``tile_shape`` at the edge of the grid,
            and NaN stands beyond it.
        """
        whole = self._padded(values)
        codec = Blosc(CNAME, CLEVEL, Blosc.BITSHUFFLE)
        parts: list[bytes] = []
        index = np.empty((len(self._chunks), 2), "<u8")
        offset = 0
        for row, chunk in enumerate(self._chunks):
            packed = codec.encode(np.ascontiguousarray(whole[chunk]))
            parts += [packed, _checksum(packed)]
            index[row] = offset, len(packed) + _BYTES_PER_CHECKSUM
            offset += len(packed) + _BYTES_PER_CHECKSUM
        table = index.tobytes()
        return [*parts, table, _checksum(table)]

    def _padded(self, values: Measured) -> Measured:
        values = values.astype("<f4", copy=False)
        if values.shape == self.tile_shape:
            return values
        whole = np.full(self.tile_shape, np.nan, "<f4")
        whole[tuple(slice(0, n) for n in values.shape)] = values
        return whole


def _checksum(data: bytes) -> bytes:
    return struct.pack("<I", google_crc32c.value(data))


@dataclass(frozen=True)
class TileObjects:
    """The objects of one atlas on a local disk; picklable, so that any worker may hold it."""

    folder: Path
    """The atlas."""
    format: ShardFormat
    """How a tile becomes an object."""
    counts: tuple[int, ...]
    """Tiles along each axis."""

    def path(self, measure: str, index: tuple[int, ...]) -> Path:
        """Where the object of tile ``index`` stands."""
        return self.folder / measure / ".".join(("c", *map(str, index)))

    def write(self, tile: Tile, measure: str, values: Measured) -> int:
        """Encode and publish one object; returns its size in bytes.

        Two runs that write one tile write equal bytes, so that it does not matter which of them
        comes last.
        """
        parts = self.format.encode(values)
        publish(self.path(measure, tile.index), parts)
        return sum(map(len, parts))

    def flush(self, measure: str, index: tuple[int, ...]) -> None:
        """Bring an object that was written to the disk, so that it outlives a power cut."""
        with suppress(FileNotFoundError), self.path(measure, index).open("rb+") as file:
            os.fsync(file.fileno())

    def drop(self, measure: str, index: tuple[int, ...]) -> None:
        """Remove the object of a tile, which makes its nodes unknown; nothing to do if absent."""
        self.path(measure, index).unlink(missing_ok=True)

    def done_mask(self, measure: str) -> NDArray[np.bool_]:
        """Which tiles of a measure have a finished object, shape ``counts``.

        One scan of names. Finished means a proper name and more bytes than an index: a file that
        a power cut left empty or without values is not counted.
        """
        mask = np.zeros(self.counts, np.bool_)
        for entry in self._files(measure):
            index = self._index(entry.name)
            if index is not None and entry.stat().st_size > self.format.index_bytes:
                mask[index] = True
        return mask

    def signature(self, measure: str) -> str:
        """What the objects of a measure are, as 64 hexadecimal digits.

        One scan that reads no object: SHA-256 over name, size, inode and times of each. A tile that
        is added, removed, or written again, be it with the same size, changes it; so may what
        leaves the values alone, such as a copy of the atlas.
        """
        facts = []
        for file in self._files(measure):
            if _OBJECT.fullmatch(file.name):
                # a tile may be dropped since its name was read
                with suppress(FileNotFoundError):
                    s = file.stat()
                    facts.append((file.name, s.st_size, s.st_ino, s.st_mtime_ns, s.st_ctime_ns))
        return hashlib.sha256(repr(sorted(facts)).encode()).hexdigest()

    def remove_partials(self, measure: str) -> int:
        """Remove what writers that were killed left behind; returns how many files.

        A writer that is alive in another process recovers: see `publish`.
        """
        partials = [Path(f.path) for f in self._files(measure) if PARTIAL.fullmatch(f.name)]
        for path in partials:
            path.unlink(missing_ok=True)
        return len(partials)

    def _files(self, measure: str) -> Iterator[os.DirEntry[str]]:
        with suppress(FileNotFoundError), os.scandir(self.folder / measure) as entries:
            yield from (entry for entry in entries if entry.is_file(follow_symlinks=False))

    def _index(self, name: str) -> tuple[int, ...] | None:
        """Index of the tile that a file is called after; `None` for any other name."""
        if not _OBJECT.fullmatch(name):
            return None
        index = tuple(map(int, name.split(".")[1:]))
        inside = len(index) == len(self.counts) and all(map(operator.lt, index, self.counts))
        return index if inside else None


def publish(path: Path, parts: Sequence[bytes], *, synced: bool = False) -> None:
    """Write a file whole under another name and rename it into place.

    With ``synced`` its bytes are on the disk before its name is, as metadata needs.

    Raises
    ------
    OSError
        When the disk is full or read-only; then nothing stands at ``path`` that was not there.
    """
    for attempt in range(_ATTEMPTS):
        partial = path.with_name(f"{path.name}.{uuid.uuid4().hex}.partial")
        try:
            _write_new(partial, parts, synced=synced)
            partial.replace(path)
        except FileNotFoundError:
            # The folder is not there yet, or a run that has just started took this file for a
            # leftover. Either is over by the next attempt.
            if attempt == _ATTEMPTS - 1:
                raise
            path.parent.mkdir(parents=True, exist_ok=True)
        except OSError:
            with suppress(OSError):
                partial.unlink(missing_ok=True)
            raise
        else:
            return


def write_new_folder(folder: Path, objects: Mapping[str, bytes]) -> None:
    """Make a folder with the given files in it, by keys relative to it.

    Raises
    ------
    FileNotFoundError
        When another process took the folder away meanwhile; it is never made a second time, so
        that it cannot come to hold a part of the files only.
    """
    folder.mkdir()
    for key, data in objects.items():
        path = folder / key
        for parent in reversed(path.relative_to(folder).parents[:-1]):
            (folder / parent).mkdir(exist_ok=True)
        _write_new(path, [data], synced=True)


def _write_new(path: Path, parts: Sequence[bytes], *, synced: bool) -> None:
    with path.open("xb", buffering=0) as file:
        data = memoryview(b"".join(parts))
        while data:
            data = data[file.write(data) :]
        if synced:
            os.fsync(file.fileno())
