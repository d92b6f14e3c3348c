"""Reading a block of nodes straight from the objects of its tiles.

Whatever zarr reads this reads too, and a test compares the two. It is here because questions about
a tolerance box read whole atlases: per tile zarr (3.4, with its fused pipeline) takes about three
times the processor time, most of it under a lock that keeps other threads waiting. Nothing is
guessed: at the first object that is not exactly what was written the block is given up, and zarr
reads it and says what is wrong.
"""

from __future__ import annotations

import itertools
import struct
import threading
from collections.abc import Iterator, Sequence
from io import RawIOBase
from pathlib import Path

import google_crc32c
import numpy as np
from numcodecs import Blosc
from numpy.typing import NDArray

from sweep.store.selecting import tiles_touched
from sweep.store.shards import Measured, ShardFormat, TileObjects

_CHECKSUM = 4
_ABSENT = 2**64 - 1
_BLOSC_HEADER = 16
_CODEC = Blosc()
_SCRATCH = threading.local()


class NotAsWritten(Exception):
    """An object that is not exactly what was written."""


def read_block(objects: TileObjects, measure: str, block: Sequence[slice]) -> Measured:
    """The values of a measure in a block; NaN where a tile has no object.

    Parameters
    ----------
    objects
        Of the atlas.
    measure
        Name of a stored measure.
    block
        One slice for each axis, from 0 up, with step 1.

    Raises
    ------
    NotAsWritten
        When an object fails its checksums, or is too short for its index.
    OSError
        When the system will not let one be read.
    """
    values = np.full([s.stop - s.start for s in block], np.nan, np.float32)
    nodes = [np.arange(s.start, s.stop) for s in block]
    edges = objects.format.tile_shape
    for index, places in tiles_touched(nodes, edges):
        if any(len(place) == 0 for place in places):
            continue
        target = tuple(slice(int(place[0]), int(place[-1]) + 1) for place in places)
        inside = tuple(
            slice(s.start + t.start - i * edge, s.start + t.stop - i * edge)
            for s, t, i, edge in zip(block, target, index, edges, strict=True)
        )
        _read_tile(objects.path(measure, index), objects.format, inside, values[target])
    return values


def _read_tile(path: Path, layout: ShardFormat, inside: tuple[slice, ...], into: Measured) -> None:
    """Fill a part of one tile, unless there is no object of it."""
    try:
        file = path.open("rb", buffering=0)
    except FileNotFoundError:
        return
    with file:
        size = file.seek(0, 2)
        if size <= layout.index_bytes:
            return
        if size > layout.most_bytes:
            raise NotAsWritten(str(path))
        chunks = list(_chunks_in(layout, inside))
        source = _Source(file, size, whole=2 * len(chunks) > layout.chunks)
        table = _read_index(source, layout)
        room = _room(layout.chunk_shape)
        for row, part, target in chunks:
            offset, length = int(table[row, 0]), int(table[row, 1])
            if offset == _ABSENT:
                continue
            if offset + length > size - layout.index_bytes:
                raise NotAsWritten(str(path))
            _decode(source.read(offset, length), room)
            into[target] = room[part]


class _Source:
    """The bytes of one object, read at once where most of them are wanted."""

    def __init__(self, file: RawIOBase, size: int, *, whole: bool) -> None:
        self.file, self.size = file, size
        self.data = self._read(0, size) if whole else None

    def read(self, offset: int, length: int) -> bytes:
        """So many bytes from an offset."""
        if self.data is not None:
            return self.data[offset : offset + length]
        return self._read(offset, length)

    def _read(self, offset: int, length: int) -> bytes:
        self.file.seek(offset)
        data: bytes | None = self.file.read(length)
        if data is None or len(data) != length:
            raise NotAsWritten("an object that is cut short")
        return data


def _room(shape: tuple[int, ...]) -> Measured:
    """Where this thread unpacks chunks, one after the other: new memory for each costs more."""
    room: Measured | None = getattr(_SCRATCH, "room", None)
    if room is None or room.shape != shape:
        room = _SCRATCH.room = np.empty(shape, "<f4")
    return room


def _read_index(source: _Source, layout: ShardFormat) -> NDArray[np.uint64]:
    """Offset and length of every chunk, shape (chunks, 2)."""
    data = source.read(source.size - layout.index_bytes, layout.index_bytes)
    return np.frombuffer(_checked(data), "<u8").reshape(-1, 2)


def _chunks_in(
    layout: ShardFormat, inside: tuple[slice, ...]
) -> Iterator[tuple[int, tuple[slice, ...], tuple[slice, ...]]]:
    """Every chunk that a part of a tile touches: its row in the index, what of it, and where to."""
    counts = [t // c for t, c in zip(layout.tile_shape, layout.chunk_shape, strict=True)]
    along = [
        range(part.start // edge, -(-part.stop // edge))
        for part, edge in zip(inside, layout.chunk_shape, strict=True)
    ]
    for place in itertools.product(*along):
        row = 0
        for i, n in zip(place, counts, strict=True):
            row = row * n + i
        starts = [i * edge for i, edge in zip(place, layout.chunk_shape, strict=True)]
        shared = [
            (max(part.start, start), min(part.stop, start + edge))
            for part, start, edge in zip(inside, starts, layout.chunk_shape, strict=True)
        ]
        source = tuple(slice(a - s, b - s) for (a, b), s in zip(shared, starts, strict=True))
        target = tuple(
            slice(a - part.start, b - part.start)
            for (a, b), part in zip(shared, inside, strict=True)
        )
        yield row, source, target


def _decode(data: bytes, room: Measured) -> None:
    """Unpack one chunk; its header is believed only where it says what it must."""
    packed = _checked(data)
    if len(packed) < _BLOSC_HEADER:
        raise NotAsWritten("a chunk that is too short")
    unpacked_bytes, _, packed_bytes = struct.unpack("<3I", packed[4:_BLOSC_HEADER])
    if (unpacked_bytes, packed_bytes) != (room.nbytes, len(packed)):
        raise NotAsWritten("a chunk of another size")
    try:
        _CODEC.decode(packed, out=room)
    except (RuntimeError, ValueError) as cause:
        raise NotAsWritten("a chunk that does not unpack") from cause


def _checked(data: bytes) -> bytes:
    """What stands before a checksum that is right."""
    body, checksum = data[:-_CHECKSUM], data[-_CHECKSUM:]
    if len(checksum) < _CHECKSUM or google_crc32c.value(body) != struct.unpack("<I", checksum)[0]:
        raise NotAsWritten("a checksum that is wrong")
    return body
