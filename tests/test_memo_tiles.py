"""What a kept answer rests on: any change of the stored tiles is another question."""

from __future__ import annotations

import os

import memory_atlas
import numpy as np
import pytest
import stand_in

from sweep.config import parse_config
from sweep.query.memo import Memo, fingerprint
from sweep.store.atlas import create_atlas

pytestmark = pytest.mark.usefixtures("memo_is_on")

CONFIG = """
title = "Memo"
sample_period = 0.01
[plant]
kind = "integrator"
[controller]
kind = "p"
[axes.kp]
start = 1
stop = 9
step = 1
"""


@pytest.fixture
def memo(tmp_path):
    return Memo(tmp_path / "answers", 10**6)


def entries(memo):
    return memo.facts().entries


@pytest.fixture
def stored(tmp_path):
    """An atlas of three tiles, the last of them not computed."""
    config = parse_config(CONFIG, folder=tmp_path, source="test")
    atlas = create_atlas(tmp_path / "memo.zarr", config, (3,))
    for tile in list(atlas.tiling)[:2]:
        put_tile(atlas, tile, -0.5)
    return atlas


def put_tile(atlas, tile, value):
    values = np.full(tile.shape, value, np.float32)
    stand_in.write_tile(atlas, tile, {"log_radius": values, "mode_angle": np.zeros_like(values)})


def seen(stored):
    return fingerprint(stored, ["log_radius"])


def test_the_fingerprint_stays_while_the_tiles_do(stored):
    before = seen(stored)
    stored.read("log_radius", (slice(None),))
    assert seen(stored) == before
    assert fingerprint(stored, ["mode_angle", "log_radius"]) == fingerprint(
        stored, ["log_radius", "mode_angle"]
    )
    assert fingerprint(stored, ["mode_angle"]) != before


def test_a_tile_that_is_added_or_removed_changes_the_fingerprint(stored):
    before = seen(stored)
    put_tile(stored, list(stored.tiling)[2], -0.25)
    more = seen(stored)
    stored.objects.drop("log_radius", (0,))
    assert len({before, more, seen(stored)}) == 3


def test_a_repaired_tile_of_the_same_size_changes_the_fingerprint(stored):
    before, path = seen(stored), stored.objects.path("log_radius", (0,))
    size, times = path.stat().st_size, path.stat()
    put_tile(stored, next(iter(stored.tiling)), -0.75)
    os.utime(path, ns=(times.st_atime_ns, times.st_mtime_ns))
    assert path.stat().st_size == size
    assert seen(stored) != before


def test_what_a_writer_has_not_finished_is_no_part_of_the_fingerprint(stored):
    before = seen(stored)
    path = stored.objects.path("log_radius", (2,))
    path.with_name(f"{path.name}.{'a' * 32}.partial").write_bytes(b"half")
    assert seen(stored) == before


def test_an_atlas_in_memory_has_no_fingerprint_and_nothing_of_it_is_kept(memo):
    atlas = memory_atlas.atlas([memory_atlas.axis("kp", [1, 2])], [-1.0, -2.0])
    assert fingerprint(atlas.stored, ["log_radius"]) == ""
    memo.recall(atlas.stored, ["log_radius"], {}, lambda: {"a": np.zeros(3)})
    assert entries(memo) == 0


def test_an_answer_is_computed_once_and_again_when_a_tile_was_added(memo, stored):
    def computed():
        made.append(1)
        return {"known": np.isfinite(stored.read("log_radius", (slice(None),)))}

    made = []
    for _ in range(3):
        assert memo.recall(stored, ["log_radius"], {"q": 1}, computed)["known"].sum() == 6
    assert len(made) == 1
    put_tile(stored, list(stored.tiling)[2], -0.25)
    assert memo.recall(stored, ["log_radius"], {"q": 1}, computed)["known"].sum() == 9
    memo.recall(stored, ["log_radius"], {"q": 2}, computed)
    assert len(made) == 3


def test_an_answer_made_while_a_tile_came_is_given_and_not_kept(memo, stored):
    last = list(stored.tiling)[2]

    def computed():
        put_tile(stored, last, -0.25)
        return {"known": np.isfinite(stored.read("log_radius", (slice(None),)))}

    assert memo.recall(stored, ["log_radius"], {}, computed)["known"].sum() == 9
    for measure in ("log_radius", "mode_angle"):
        stored.objects.drop(measure, last.index)
    assert entries(memo) == 0
