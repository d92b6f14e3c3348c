"""Kept answers about robust designs are those that the stored tiles give now."""

from __future__ import annotations

import itertools
import json

import numpy as np
import pytest
import stand_in

from sweep.config import parse_config
from sweep.query import robust, worst
from sweep.query.atlas import open_atlas
from sweep.store.atlas import StoredAtlas, create_atlas


def refuse(*what):
    raise AssertionError(f"must not be read: {what}")


STORED = """
title = "Kept"
sample_period = "2 ms"
[plant]
kind = "oscillator"
natural_frequency = "47 Hz"
[controller]
kind = "pi"
[axes.damping]
values = [0.01, 0.02, 0.03]
[axes.kp]
values = [-1, 0, 1, 2]
[axes.ki]
values = [-1, 0, 1, 3]
[axes.plant_gain]
sets = "plant.gain"
values = [0.5, 1, 2]
[cases.soft]
over.damping = [0.015, 0.03]
require.max_radius = 0.995
"""

QUESTIONS = (
    {},
    {"case": "soft"},
    {"require": {"max_mode_angle": 0.9, "min_decay_time": 0.01}},
    {"over": {"plant_gain": (0.5, 0.7)}, "within": {"kp": (-1, 1)}, "around": {"kp": 0, "ki": 1}},
    {"at": {"kp": 0.5}, "shake": {"ki": 0.5}},
)


def kept(folder, tile_shape=(2, 2, 3, 2)):
    """A stored atlas with its last tile missing, and what every tile should hold."""
    config = parse_config(STORED, folder=folder, source="kept.toml")
    stored = create_atlas(folder / "kept.zarr", config, tile_shape)
    noise = np.random.default_rng(5)
    tiles = list(stored.tiling)
    values = {}
    for tile in tiles:
        log_radius = noise.choice(
            [-0.5, -0.25, -0.0078125, 0.125], tile.shape, p=[0.5, 0.2, 0.2, 0.1]
        )
        angle = noise.choice([0.0, 0.5, 1.0], tile.shape, p=[0.6, 0.35, 0.05])
        values[tile.index] = {
            "log_radius": log_radius.astype(np.float32),
            "mode_angle": angle.astype(np.float32),
        }
    for tile in tiles[:-1]:
        stand_in.write_tile(stored, tile, values[tile.index])
    return stored, tiles, values


def ask_all(folder):
    answers = [open_atlas(folder / "kept.zarr").robust(**question) for question in QUESTIONS]
    return [(answer.to_json(), answer.dataset) for answer in answers]


def same(found, expected):
    return all(a[0] == b[0] and a[1].identical(b[1]) for a, b in zip(found, expected, strict=True))


@pytest.fixture
def memo(tmp_path, monkeypatch):
    """Every answer is worth keeping, in a folder of its own."""
    monkeypatch.delenv("SWEEP_MEMO", raising=False)
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    for module in (worst, robust):
        monkeypatch.setattr(module, "WORTH_KEEPING", 0)
    return tmp_path / "cache"


@pytest.mark.usefixtures("memo")
def test_kept_answers_are_those_of_the_tiles_as_they_are_now(tmp_path, monkeypatch):
    stored, tiles, values = kept(tmp_path)
    seen = []

    def without_memo():
        with monkeypatch.context() as patch:
            patch.setenv("SWEEP_MEMO", "0")
            return ask_all(tmp_path)

    def check_now():
        expected = without_memo()
        assert same(ask_all(tmp_path), expected), "made and kept"
        with monkeypatch.context() as patch:
            patch.setattr(StoredAtlas, "read", refuse)
            assert same(ask_all(tmp_path), expected), "recalled without reading the atlas"
        seen.append([document for document, _ in expected])

    check_now()
    stand_in.write_tile(stored, tiles[-1], values[tiles[-1].index])
    check_now()
    stand_in.drop_tile(stored, tiles[3].index)
    check_now()
    repaired = {name: block.copy() for name, block in values[tiles[3].index].items()}
    repaired["log_radius"][...] = 1
    stand_in.write_tile(stored, tiles[3], repaired)
    check_now()
    assert all(before != after for before, after in itertools.pairwise(seen))


SIMILAR = (
    {},
    {"at": {"damping": 0.02, "plant_gain": 1}},
    {"at": {"damping": 0.02, "plant_gain": 1}, "around": {"kp": 0, "ki": -1}},
    {"at": {"damping": 0.02, "plant_gain": 1}, "around": {"kp": 0, "ki": 3}},
    {"require": {"max_radius": 0.9}},
    {"require": {"max_radius": 0.7}},
    {"require": {"min_radius": 0.7}},
    {"shake": {"ki": 1}},
    {"shake": {"ki": 2}},
    {"over": {"plant_gain": 1}},
    {"over": {"plant_gain": 2}},
    {"within": {"ki": (0, 3)}},
    {"at": {"kp": 1}},
    {"at": {"kp": 1}, "shake": {"kp": 0.5}},
)


@pytest.mark.usefixtures("memo")
def test_questions_that_differ_in_one_thing_are_kept_apart(tmp_path, monkeypatch):
    kept(tmp_path)
    found = [open_atlas(tmp_path / "kept.zarr").robust(**asked).to_json() for asked in SIMILAR]
    monkeypatch.setenv("SWEEP_MEMO", "0")
    atlas = open_atlas(tmp_path / "kept.zarr")
    assert found == [atlas.robust(**asked).to_json() for asked in SIMILAR]
    texts = [json.dumps(document, sort_keys=True) for document in found]
    assert len(set(texts)) == len(SIMILAR), "each of them has an answer of its own"


def test_an_answer_that_rests_on_few_nodes_is_not_kept(tmp_path, memo, monkeypatch):
    kept(tmp_path)
    monkeypatch.setattr(worst, "WORTH_KEEPING", 1000)
    monkeypatch.setattr(robust, "WORTH_KEEPING", 1000)
    ask_all(tmp_path)
    assert not list(memo.rglob("*.memo"))
    monkeypatch.setattr(robust, "WORTH_KEEPING", 144)
    ask_all(tmp_path)
    assert list(memo.rglob("*.memo"))
