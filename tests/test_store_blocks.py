"""Blocks read straight from the objects are what zarr reads, or they are not read at all."""

import struct

import google_crc32c
import numpy as np
import pytest
import stand_in
from hypothesis import given
from hypothesis import strategies as st

from sweep.store.atlas import create_atlas, open_stored
from sweep.store.blocks import NotAsWritten, read_block

CONFIG = stand_in.small()
SHAPE = CONFIG.grid.shape


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    """A small atlas with edge tiles on three axes, from which some tiles are missing."""
    folder = tmp_path_factory.mktemp("shelf") / "small.zarr"
    made = create_atlas(folder, CONFIG, stand_in.SMALL_TILE)
    values = stand_in.whole(CONFIG)
    for place, tile in enumerate(made.tiling):
        if place % 3:
            stand_in.write_tile(made, tile, {"log_radius": values[tile.block]})
    return open_stored(folder)


@st.composite
def blocks(draw):
    ends = [sorted((draw(st.integers(0, n)), draw(st.integers(0, n)))) for n in SHAPE]
    return tuple(slice(a, b) for a, b in ends)


@given(blocks())
def test_any_block_is_what_zarr_reads(atlas, block):
    found = read_block(atlas.objects, "log_radius", block)
    wanted = atlas._arrays["log_radius"][block]
    assert found.dtype == np.float32
    assert np.array_equal(found, wanted, equal_nan=True)


def test_an_atlas_reads_blocks_without_zarr(atlas, monkeypatch):
    wanted = atlas._arrays["log_radius"][:]
    monkeypatch.setitem(atlas.__dict__, "_arrays", {"log_radius": None})
    assert np.array_equal(atlas.read("log_radius", (slice(None),) * 5), wanted, equal_nan=True)


def tile_with(folder, change):
    """An atlas of one tile whose object was changed, and its block."""
    config = stand_in.flat(40, 30)
    made = create_atlas(folder, config, (40, 30))
    stand_in.write_tile(made, made.tiling.tile((0, 0)), {"log_radius": stand_in.whole(config)})
    path = made.objects.path("log_radius", (0, 0))
    path.write_bytes(change(path.read_bytes()))
    return made.objects, (slice(0, 40), slice(0, 30))


def sealed(body):
    """Bytes with the checksum that belongs to them."""
    return body + struct.pack("<I", google_crc32c.value(body))


def lying_header(data):
    """One chunk that says it unpacks to 4 GB, with checksums that are right."""
    chunk, index = data[:-24], data[-20:]
    packed = bytearray(chunk)
    packed[4:8] = struct.pack("<I", 2**32 - 1)
    return sealed(bytes(packed)) + sealed(index[:-4])


def far_index(data):
    """An index that points beyond the object."""
    return data[:-20] + sealed(struct.pack("<2Q", len(data), 64))


@pytest.mark.parametrize(
    "change",
    [
        lambda data: data[:-1] + bytes([data[-1] ^ 1]),
        lambda data: bytes([data[0] ^ 1]) + data[1:],
        lambda data: data[30:],
        lambda data: data + bytes(10**6),
        lambda data: sealed(bytes(len(data) - 24)) + data[-20:],
        lambda _: sealed(b"short") + sealed(struct.pack("<2Q", 0, 9)),
        lying_header,
        far_index,
    ],
)
def test_an_object_that_is_not_as_written_is_not_read(tmp_path, change):
    objects, block = tile_with(tmp_path / "a.zarr", change)
    with pytest.raises(NotAsWritten):
        read_block(objects, "log_radius", block)


def test_a_chunk_that_the_index_calls_absent_is_unknown(tmp_path):
    absent = sealed(struct.pack("<2Q", 2**64 - 1, 2**64 - 1))
    objects, block = tile_with(tmp_path / "a.zarr", lambda data: data[:-20] + absent)
    assert np.isnan(read_block(objects, "log_radius", block)).all()


@pytest.mark.parametrize("size", [0, 1, 19, 20])
def test_an_object_without_values_counts_as_absent(tmp_path, size):
    objects, block = tile_with(tmp_path / "a.zarr", lambda data: data[:size])
    assert np.isnan(read_block(objects, "log_radius", block)).all()
