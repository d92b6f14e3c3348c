"""An atlas whose own zarr.json is damaged is spoken of, never passed over or made a second time."""

from __future__ import annotations

import dataclasses
import json

import pytest
import stand_in

from sweep.compute.plan import plan_sweep
from sweep.compute.survey import survey_sweep
from sweep.errors import DamagedAtlas
from sweep.identity import atlas_id
from sweep.store.atlas import open_stored
from sweep.store.shelf import Shelf

CONFIG = stand_in.flat(4, 3)
IDENTITY = atlas_id(CONFIG.structure, CONFIG.grid)


@pytest.fixture
def shelf(tmp_path):
    """A shelf with one atlas."""
    shelf = Shelf(tmp_path / "shelf")
    shelf.open_or_create(CONFIG, IDENTITY, CONFIG.grid.shape)
    return shelf


def swapped(old, new):
    return lambda text: text.replace(old, new)


def without_attributes(text):
    return json.dumps(json.loads(text) | {"attributes": {}})


DAMAGE = {
    "empty": lambda _: "",
    "no JSON": lambda text: text[1:],
    "cut off": lambda text: text[: len(text) // 2],
    "not an object": lambda _: "[]",
    "attributes lost": without_attributes,
    "a letter of an attribute's name": swapped("store_version", "store_versioo"),
    "nested without end": lambda _: "[" * 100_000,
}


def damage(shelf, change):
    """Change the text of the only atlas's zarr.json; returns its folder."""
    (folder,) = shelf.folder.glob("*.zarr")
    cover = folder / "zarr.json"
    text = change(cover.read_text())
    assert text != cover.read_text()
    cover.write_text(text)
    return folder


@pytest.mark.parametrize("change", DAMAGE.values(), ids=DAMAGE)
def test_a_damaged_atlas_is_called_damaged_by_path_folder_name_and_part_of_it(shelf, change):
    folder = damage(shelf, change)
    for text in (folder, str(folder), folder.name, "flat", IDENTITY[:8]):
        with pytest.raises(DamagedAtlas, match=r"zarr\.json") as caught:
            shelf.find(text)
        assert "take a whole copy" in caught.value.remedy
        assert str(folder) in caught.value.message


@pytest.mark.parametrize("change", DAMAGE.values(), ids=DAMAGE)
def test_no_second_atlas_is_begun_beside_a_damaged_one(shelf, change):
    folder = damage(shelf, change)
    for attempt in (
        lambda: survey_sweep(CONFIG, shelf.folder),
        lambda: shelf.open_or_create(CONFIG, IDENTITY, CONFIG.grid.shape),
    ):
        with pytest.raises(DamagedAtlas) as caught:
            attempt()
        assert str(folder) in caught.value.message
    assert list(shelf.folder.iterdir()) == [folder]


def test_an_atlas_whose_id_is_damaged_is_not_begun_a_second_time(shelf):
    other = ("0" if IDENTITY[20] != "0" else "1").join((IDENTITY[:20], IDENTITY[21:]))
    folder = damage(shelf, swapped(IDENTITY, other))
    with pytest.raises(DamagedAtlas):
        survey_sweep(CONFIG, shelf.folder)
    with pytest.raises(DamagedAtlas):
        open_stored(shelf.find(folder.name))


def test_a_new_title_does_not_begin_a_second_atlas_beside_a_damaged_one(shelf):
    damage(shelf, DAMAGE["no JSON"])
    with pytest.raises(DamagedAtlas):
        survey_sweep(dataclasses.replace(CONFIG, title="Renamed"), shelf.folder)


def test_a_whole_copy_is_used_although_a_damaged_one_is_there(shelf):
    folder = damage(shelf, DAMAGE["no JSON"])
    away = Shelf(shelf.folder.parent / "other")
    copy = away.open_or_create(CONFIG, IDENTITY, CONFIG.grid.shape).path
    copy.rename(shelf.folder / "copy")
    assert survey_sweep(CONFIG, shelf.folder).path == shelf.folder / "copy"
    assert folder.exists()


def test_a_damaged_atlas_of_another_config_is_noted_by_plan(shelf):
    folder = damage(shelf, DAMAGE["no JSON"])
    plan = plan_sweep(stand_in.flat(5, 3), shelf.folder, measure_time=False)
    assert any(str(folder) in note for note in plan.notes)


def test_a_damaged_atlas_is_one_of_the_candidates_that_a_text_means(shelf):
    folder = damage(shelf, DAMAGE["no JSON"])
    other = stand_in.flat(5, 3)
    shelf.open_or_create(other, atlas_id(other.structure, other.grid), other.grid.shape)
    with pytest.raises(Exception, match="2 atlases match") as caught:
        shelf.find("fla")
    assert f"{folder.name} (damaged)" in caught.value.message
