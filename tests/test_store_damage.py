"""Bytes that are not what was written, and metadata that anybody may have written."""

import dataclasses
import json
import shutil

import numpy as np
import pytest
import stand_in
import zarr

from sweep.errors import DamagedAtlas, QuestionError
from sweep.store.atlas import create_atlas, open_stored
from sweep.store.layout import STORE_VERSION

ALL = (slice(None), slice(None))


@pytest.fixture
def atlas(tmp_path):
    """A finished atlas of 3 x 4 tiles, the last of each axis smaller."""
    config = stand_in.flat(40, 30)
    atlas = create_atlas(tmp_path / "a.zarr", config, (16, 8))
    for measure in config.measures:
        for tile in atlas.tiling:
            stand_in.write_tile(atlas, tile, {measure: stand_in.whole(config, measure)[tile.block]})
    return atlas


def test_three_hundred_flipped_bits_are_all_noticed(atlas):
    path = atlas.objects.path("log_radius", (1, 2))
    whole = path.read_bytes()
    draw = np.random.default_rng(300)
    silent = []
    for bit in draw.choice(len(whole) * 8, 300, replace=False):
        broken = bytearray(whole)
        broken[bit // 8] ^= 1 << (bit % 8)
        path.write_bytes(broken)
        try:
            atlas.read("log_radius", (slice(16, 32), slice(16, 24)))
        except DamagedAtlas:
            continue
        silent.append(bit)
    assert silent == []


def test_a_damaged_tile_is_named_with_its_object_and_the_remedy(atlas):
    path = atlas.objects.path("log_radius", (1, 2))
    broken = bytearray(path.read_bytes())
    broken[7] ^= 4
    path.write_bytes(broken)
    with pytest.raises(DamagedAtlas) as caught:
        atlas.read("log_radius", ALL)
    assert caught.value.where == ("log_radius/c.1.2",)
    assert "(1, 2)" in caught.value.message
    assert "delete log_radius/c.1.2" in caught.value.remedy
    assert caught.value.exit_code == 3


def test_a_damaged_tile_does_not_keep_others_from_being_read(atlas):
    atlas.objects.path("log_radius", (1, 2)).write_bytes(b"x" * 4000)
    rest = atlas.read("log_radius", (slice(0, 16), slice(None)))
    assert np.array_equal(rest, stand_in.whole(stand_in.flat(40, 30))[:16])


@pytest.mark.parametrize("keep", [0, 1, 4, 100])
def test_an_object_too_short_for_values_is_not_done_and_reads_as_unknown(atlas, keep):
    path = atlas.objects.path("log_radius", (1, 2))
    size = atlas.objects.format.index_bytes
    path.write_bytes(path.read_bytes()[: min(keep, size)])
    assert (1, 2) not in atlas.done_tiles("log_radius")
    values = stand_in.whole(stand_in.flat(40, 30))
    values[16:32, 16:24] = np.nan
    assert np.array_equal(atlas.read("log_radius", ALL), values, equal_nan=True)


def test_a_truncated_object_is_damage_and_not_unknown(atlas):
    path = atlas.objects.path("log_radius", (1, 2))
    path.write_bytes(path.read_bytes()[:-9])
    with pytest.raises(DamagedAtlas):
        atlas.read("log_radius", (17, slice(None)))


def test_only_proper_names_inside_the_lattice_count_as_done(atlas):
    folder = atlas.path / "log_radius"
    whole = (folder / "c.0.0").read_bytes()
    names = ["c.1.01", "c.1.x", "c.1.-1", "c.1.4", "c.3.0", "c.1", "c.1.1.1", "c.1.٣", "d.1.1"]
    for name in [*names, "c.0.0.partial", f"c.0.0.{'a' * 32}.partial", "c..1", "c.1.99999999999"]:
        (folder / name).write_bytes(whole)
    (folder / "c.2.1").unlink()
    (folder / "c.2.1").mkdir()
    expected = {tile.index for tile in atlas.tiling} - {(2, 1)}
    assert atlas.done_tiles("log_radius") == expected


def test_leftovers_of_killed_writers_are_removed_and_objects_are_not(atlas):
    before = stand_in.objects_of(atlas.path)
    leftover = atlas.path / "log_radius" / f"c.1.2.{'0' * 32}.partial"
    leftover.write_bytes(b"half")
    assert atlas.objects.remove_partials("log_radius") == 1
    assert stand_in.objects_of(atlas.path) == before


def test_a_flushed_object_stays_as_it_is_and_an_absent_one_is_passed_over(atlas):
    before = stand_in.objects_of(atlas.path)
    atlas.objects.flush("log_radius", (1, 2))
    atlas.objects.flush("log_radius", (9, 9))
    assert stand_in.objects_of(atlas.path) == before


@pytest.mark.parametrize("index", [(0, 0), (2, 3)], ids=["inner", "edge"])
def test_a_damaged_tile_is_simply_written_again(atlas, index):
    path = atlas.objects.path("log_radius", index)
    whole = path.read_bytes()
    path.write_bytes(b"\xff" * len(whole))
    tile = atlas.tiling.tile(index)
    stand_in.write_tile(
        atlas, tile, {"log_radius": stand_in.whole(stand_in.flat(40, 30))[tile.block]}
    )
    assert path.read_bytes() == whole


def test_a_dropped_tile_is_unknown_again(atlas):
    stand_in.drop_tile(atlas, (0, 1))
    assert not atlas.complete
    assert np.isnan(atlas.read("mode_angle", (slice(0, 16), slice(8, 16)))).all()


def edit(folder, change, name="zarr.json"):
    file = folder / name
    node = json.loads(file.read_text())
    change(node)
    file.write_text(json.dumps(node))


def set_attribute(key, value):
    return lambda node: node["attributes"].__setitem__(key, value)


WRONG_GROUPS = {
    "no title": lambda node: node["attributes"].pop("title"),
    "title is a number": set_attribute("title", 3),
    "another id": set_attribute("atlas_id", "0" * 64),
    "another physics id": set_attribute("physics_id", "0" * 64),
    "unknown plant": set_attribute("structure", {"plant": "pendulum", "controller": "p"}),
    "structure is a text": set_attribute("structure", "__import__('os')"),
    "no axes": set_attribute("axes", []),
    "unknown axis": set_attribute("axes", ["kp", "bus"]),
    "axes out of order": set_attribute("axes", ["gain", "kp"]),
    "axis named twice": set_attribute("axes", ["kp", "kp"]),
    "fixed parameter forgotten": set_attribute("fixed", []),
    "fixed parameter unknown": set_attribute("fixed", ["sample_period", "plant.mass"]),
    "tile shape of another rank": set_attribute("tile_shape", [16]),
    "tile shape is a text": set_attribute("tile_shape", "16,8"),
    "tile shape of truths": set_attribute("tile_shape", [True, True]),
    "another tile shape": set_attribute("tile_shape", [8, 8]),
    "designs are a text": set_attribute("designs", "all"),
    "a case without a name": set_attribute("cases", [{"over": {}}]),
}

WRONG_ARRAYS = {
    "coordinates of other dimensions": (
        "kp/zarr.json",
        lambda node: node.__setitem__("dimension_names", ["gain"]),
    ),
    "an unknown role": ("kp/zarr.json", set_attribute("role", "owner")),
    "another parameter": ("kp/zarr.json", set_attribute("sets", "controller.kd")),
    "another unit": ("gain/zarr.json", set_attribute("units", "dB")),
    "a nominal off the axis": ("kp/zarr.json", set_attribute("nominal", 0.123)),
    "a nominal that is a text": ("kp/zarr.json", set_attribute("nominal", "first")),
    "a longer axis": ("kp/zarr.json", lambda node: node.__setitem__("shape", [41])),
    "an enormous axis": ("kp/zarr.json", lambda node: node.__setitem__("shape", [10**12])),
    "an enormous chunk": (
        "kp/zarr.json",
        lambda node: node["chunk_grid"]["configuration"].__setitem__("chunk_shape", [10**12]),
    ),
    "a measure of another shape": (
        "log_radius/zarr.json",
        lambda n: n.__setitem__("shape", [40, 31]),
    ),
    "a measure of another type": (
        "log_radius/zarr.json",
        lambda node: node.__setitem__("data_type", "int32"),
    ),
    "an unknown codec": (
        "log_radius/zarr.json",
        lambda node: node["codecs"][0]["configuration"]["codecs"].append({"name": "mystery"}),
    ),
    "a measure without checksums": (
        "log_radius/zarr.json",
        lambda node: node["codecs"][0]["configuration"]["codecs"].pop(),
    ),
    "objects in a tree of folders": (
        "log_radius/zarr.json",
        lambda node: node["chunk_key_encoding"]["configuration"].__setitem__("separator", "/"),
    ),
    "no JSON at all": ("log_radius/zarr.json", None),
}


def assert_refused(folder):
    with pytest.raises(DamagedAtlas) as caught:
        open_stored(folder)
    assert str(folder) in caught.value.message
    assert "run its config again" in caught.value.remedy
    assert "\n" not in caught.value.message


@pytest.mark.parametrize("name", WRONG_GROUPS)
def test_a_group_that_contradicts_itself_is_refused(atlas, name):
    edit(atlas.path, WRONG_GROUPS[name])
    assert_refused(atlas.path)


@pytest.mark.parametrize("name", WRONG_ARRAYS)
def test_an_array_that_contradicts_the_group_is_refused(atlas, name):
    file, change = WRONG_ARRAYS[name]
    if change is None:
        (atlas.path / file).write_bytes(b"\x00\xff")
    else:
        edit(atlas.path, change, file)
    assert_refused(atlas.path)


@pytest.mark.parametrize("name", ["kp", "sample_period", "log_radius"])
def test_a_missing_array_is_refused(atlas, name):
    shutil.rmtree(atlas.path / name)
    assert_refused(atlas.path)


def test_a_changed_coordinate_is_noticed_by_the_id_even_if_its_checksum_is_right(atlas):
    array = zarr.open_array(atlas.path / "kp", mode="r+")
    array[3] = np.nextafter(array[3], 1)
    assert_refused(atlas.path)


def test_a_flipped_bit_in_a_coordinate_is_noticed(atlas):
    file = atlas.path / "gain" / "c" / "0"
    broken = bytearray(file.read_bytes())
    broken[40] ^= 1
    file.write_bytes(broken)
    assert_refused(atlas.path)


def test_what_is_no_atlas_is_a_question_and_not_damage(tmp_path):
    zarr.create_group(tmp_path / "other.zarr", attributes={"title": "somebody else's"})
    (tmp_path / "file").write_text("text")
    for path in (tmp_path / "absent", tmp_path / "file", tmp_path, tmp_path / "other.zarr"):
        with pytest.raises(QuestionError, match="expected a folder that `sweep run` made"):
            open_stored(path)


def test_an_atlas_of_a_newer_program_is_left_alone(atlas):
    edit(atlas.path, set_attribute("store_version", STORE_VERSION + 1))
    with pytest.raises(QuestionError, match="store version 2"):
        open_stored(atlas.path)


def test_deeply_nested_metadata_is_refused(atlas):
    (atlas.path / "zarr.json").write_text("[" * 100_000)
    with pytest.raises(QuestionError):
        open_stored(atlas.path)


def test_every_measure_has_the_tiles_of_the_first(atlas):
    def smaller(node):
        node["codecs"][0]["configuration"]["chunk_shape"] = [4, 4]

    edit(atlas.path, smaller, "mode_angle/zarr.json")
    assert_refused(atlas.path)


def test_the_contents_are_frozen(atlas):
    with pytest.raises(dataclasses.FrozenInstanceError):
        atlas.title = "x"
