"""How grids are cut into tiles and tiles into chunks, and what a shard of them holds."""

import math
from pathlib import Path

import numpy as np
import pytest
import stand_in
import zarr
from hypothesis import given, settings
from hypothesis import strategies as st

from sweep.errors import QuestionError
from sweep.grid import Axis, Grid, Tiling
from sweep.store.arrays import FLAT_NAMES
from sweep.store.shards import ShardFormat, TileObjects, publish
from sweep.store.tiles import (
    LARGEST_TILE,
    LONGEST_GAIN_RUN,
    MOST_NODES_PER_INNER_CHUNK,
    check_tile_shape,
    choose_tile_shape,
    inner_chunk_shape,
)

PATHS = (
    "sample_period",
    "controller.kp",
    "controller.kd",
    "plant.damping",
    "delay.a",
    "plant.gain",
)


def grid(*lengths):
    axes = [
        Axis(f"a{i}", (path,), np.arange(float(n)), "design", 0)
        for i, (n, path) in enumerate(zip(lengths, PATHS, strict=False))
    ]
    return Grid(tuple(axes))


lengths = st.lists(st.integers(1, 700), min_size=1, max_size=6).filter(
    lambda sizes: math.prod(sizes) <= 10**13
)


@given(lengths)
def test_a_chosen_tile_is_cut_into_whole_chunks_and_is_never_large(sizes):
    shape = choose_tile_shape(grid(*sizes))
    chunk = inner_chunk_shape(shape)
    assert all(t % c == 0 for t, c in zip(shape, chunk, strict=True))
    assert math.prod(shape) <= 2 * LARGEST_TILE
    assert math.prod(chunk) <= MOST_NODES_PER_INNER_CHUNK
    assert check_tile_shape(shape, grid(*sizes))


@pytest.mark.parametrize(
    "sizes",
    [(240, 211, 3, 4, 3), (100, 211, 61, 4, 3), (300, 201, 101, 12, 20), (1000, 400, 400, 16, 9)],
)
def test_large_grids_get_tiles_that_are_long_on_the_gains(sizes):
    shape = choose_tile_shape(grid(*sizes))
    assert 2**15 <= math.prod(shape) <= LARGEST_TILE
    assert 32 <= max(shape[1:3]) <= LONGEST_GAIN_RUN


@pytest.mark.parametrize("sizes", [(240, 211, 3, 4, 3), (300, 201, 101, 12, 20), (64, 64, 64, 64)])
def test_chunks_are_between_32_and_256_kilobytes(sizes):
    nodes = math.prod(inner_chunk_shape(choose_tile_shape(grid(*sizes))))
    assert 2**13 <= nodes <= 2**16


def test_a_tile_shape_is_clipped_to_the_grid():
    assert check_tile_shape((16, 64, 9), grid(20, 30, 9)) == (16, 30, 9)


@pytest.mark.parametrize("shape", [(), (16,), (16, 0, 9), (16, -1, 9), (16, 30, 9, 1)])
def test_a_tile_shape_that_does_not_fit_is_refused_with_one_that_does(shape):
    with pytest.raises(QuestionError, match="one for each of the axes a0, a1, a2") as caught:
        check_tile_shape(shape, grid(20, 30, 9))
    assert caught.value.remedy == "give a shape such as 20x30x9"


def test_tiles_too_many_to_count_are_refused():
    with pytest.raises(QuestionError, match="200,000,000 tiles"):
        check_tile_shape((1, 1), grid(10_000, 20_000))


def test_a_tile_too_large_to_hold_or_impossible_to_cut_is_refused():
    with pytest.raises(QuestionError, match="each worker holds one tile whole"):
        check_tile_shape((1000, 1000, 1000), grid(1000, 1000, 1000))
    with pytest.raises(QuestionError, match="small divisors"):
        check_tile_shape((99_991, 3), grid(100_000, 3))


@settings(max_examples=30, deadline=None)
@given(st.data())
def test_zarr_reads_from_the_objects_exactly_what_was_written(tmp_path_factory, data):
    """Any grid, any tile shape, any order of tiles: every node is written once, bit by bit."""
    shape = tuple(data.draw(st.lists(st.integers(1, 9), min_size=1, max_size=4), label="shape"))
    edges = tuple(data.draw(st.integers(1, n), label="edge") for n in shape)
    tiling, shards = Tiling(shape, edges), ShardFormat.for_tile(edges)
    folder = tmp_path_factory.mktemp("objects")
    array = zarr.create_array(
        folder / "m",
        shape=shape,
        shards=edges,
        chunks=shards.chunk_shape,
        dtype="float32",
        fill_value=math.nan,
        chunk_key_encoding=FLAT_NAMES,
        compressors=[
            zarr.codecs.BloscCodec(typesize=4, cname="lz4", shuffle="bitshuffle"),
            zarr.codecs.Crc32cCodec(),
        ],
    )
    bits = np.random.default_rng(7).integers(0, 2**32, shape, np.uint32)
    objects = TileObjects(folder, shards, tiling.counts)
    for tile in data.draw(st.permutations(list(tiling)), label="order"):
        objects.write(tile, "m", bits.view("f4")[tile.block])
    assert np.array_equal(np.asarray(array[...]).view(np.uint32), bits)
    assert objects.done_mask("m").all()


def test_a_shard_is_never_larger_than_its_bound():
    shards = ShardFormat.for_tile((32, 96, 12))
    noise = np.random.default_rng(1).integers(0, 2**32, (32, 96, 12), np.uint32).view("f4")
    size = sum(map(len, shards.encode(noise)))
    assert noise.nbytes < size <= shards.most_bytes


def test_chunks_that_do_not_divide_a_tile_are_refused():
    with pytest.raises(ValueError, match="do not divide"):
        ShardFormat((16, 16), (5, 4))


def test_publishing_leaves_the_old_object_when_the_disk_refuses_the_new(tmp_path, monkeypatch):
    path = tmp_path / "c.0"
    publish(path, [b"old"])

    def full(_descriptor):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(OSError, match="No space"):
        publish(path, [b"new"], synced=True)
    assert path.read_bytes() == b"old"
    assert [p.name for p in tmp_path.iterdir()] == ["c.0"]


def test_a_writer_survives_that_its_unfinished_file_is_taken_for_a_leftover(tmp_path, monkeypatch):
    replace, attempts = Path.replace, []

    def lose_it_once(partial, target):
        attempts.append(partial)
        if len(attempts) == 1:
            partial.unlink()
        return replace(partial, target)

    monkeypatch.setattr(Path, "replace", lose_it_once)
    publish(tmp_path / "c.0", [b"va", b"lue"])
    assert (tmp_path / "c.0").read_bytes() == b"value"
    assert len(attempts) == 2


def test_the_tile_shape_of_one_config_is_one_and_the_same():
    """A golden value: two people who start one sweep must get tiles that fit together."""
    assert choose_tile_shape(stand_in.small().grid) == (13, 43, 3, 2, 3)
    assert choose_tile_shape(grid(240, 211, 3, 4, 3)) == (30, 81, 3, 4, 3)
