"""A shelf finds atlases by id, title or path, and clears away what was never finished."""

import dataclasses
import threading
from pathlib import Path

import pytest
import stand_in

from sweep.errors import DamagedAtlas, QuestionError
from sweep.identity import atlas_id
from sweep.store.atlas import create_atlas, open_stored
from sweep.store.shelf import Shelf


def identity(config):
    return atlas_id(config.structure, config.grid)


def put(shelf, config):
    return shelf.open_or_create(config, identity(config), config.grid.shape)


@pytest.fixture
def shelf(tmp_path):
    """A shelf with two atlases of like titles."""
    shelf = Shelf(tmp_path / "shelf")
    put(shelf, dataclasses.replace(stand_in.flat(4, 3), title="Pan head"))
    put(shelf, dataclasses.replace(stand_in.flat(5, 3), title="Pan head, cold"))
    return shelf


def test_a_folder_is_called_after_title_and_id(shelf):
    config = stand_in.flat(4, 3)
    assert shelf.find_by_id(identity(config)).path.name == f"pan-head-{identity(config)[:8]}.zarr"


def test_an_atlas_is_found_by_its_id_whatever_its_folder_is_called(shelf):
    config = stand_in.flat(4, 3)
    moved = shelf.folder / "friday"
    shelf.find_by_id(identity(config)).path.rename(moved)
    assert shelf.find_by_id(identity(config)).path == moved
    assert put(shelf, config).path == moved


def test_an_atlas_that_another_run_publishes_at_the_last_moment_is_found(tmp_path, monkeypatch):
    """The rival takes the name between the look at the folder and the renaming."""
    config, shelf, rename = stand_in.flat(4, 3), Shelf(tmp_path / "shelf"), Path.rename

    def late(partial, folder):
        monkeypatch.setattr(Path, "rename", rename)
        rivals.append(create_atlas(folder, config, config.grid.shape))
        return rename(partial, folder)

    rivals = []
    monkeypatch.setattr(Path, "rename", late)
    assert put(shelf, config).path == rivals[0].path
    assert [path.name for path in shelf.folder.iterdir()] == [rivals[0].path.name]


def test_nothing_is_found_on_a_shelf_that_does_not_exist(tmp_path):
    shelf = Shelf(tmp_path / "none")
    assert shelf.list() == ()
    assert shelf.find_by_id("0" * 64) is None
    assert shelf.remove_leftovers() == 0
    assert not shelf.folder.exists()


def test_any_unique_part_of_a_title_or_id_finds_an_atlas(shelf):
    cold = identity(stand_in.flat(5, 3))
    for text in ("cold", "COLD", cold[:8], cold, cold[10:30]):
        assert shelf.find(text).name == f"pan-head-cold-{cold[:8]}.zarr"


def test_a_title_given_in_full_wins_over_parts_of_others(shelf):
    assert open_stored(shelf.find("pan head")).title == "Pan head"


def test_a_path_or_folder_name_finds_an_atlas(shelf):
    path = shelf.find("cold")
    assert shelf.find(path) == path
    assert shelf.find(str(path)) == path
    assert shelf.find(path.name) == path


@pytest.mark.parametrize(
    ("text", "count"),
    [
        ("head", "2 atlases match"),
        ("warm", "no atlas"),
        ("", "no"),
        ("x" * 5000, "no"),
        ("\0", "no"),
    ],
)
def test_a_text_that_means_not_one_atlas_lists_the_candidates(shelf, text, count):
    with pytest.raises(QuestionError, match=count) as caught:
        shelf.find(text)
    assert "Pan head, cold" in caught.value.message
    assert len(caught.value.where) == 2


def test_an_empty_shelf_says_what_to_do(tmp_path):
    with pytest.raises(QuestionError, match="there is nothing") as caught:
        Shelf(tmp_path).find("anything")
    assert "run a config first" in caught.value.remedy


def test_what_is_no_atlas_is_not_listed(shelf):
    (shelf.folder / "notes").mkdir()
    (shelf.folder / "notes.txt").write_text("text")
    (shelf.folder / "broken").mkdir()
    (shelf.folder / "broken" / "zarr.json").write_bytes(b"\xff\x00")
    assert {entry.title for entry in shelf.list()} == {"Pan head", "Pan head, cold"}


def test_a_taken_folder_name_gives_way_to_more_digits_of_the_id(tmp_path):
    shelf, config = Shelf(tmp_path), stand_in.flat(4, 3)
    taken = shelf.place_for(config.title, identity(config))
    taken.mkdir()
    assert put(shelf, config).path.name == f"flat-{identity(config)[:9]}.zarr"


def test_an_unfinished_atlas_is_no_atlas_and_is_cleared_away(shelf):
    made = create_atlas(shelf.folder / "x", stand_in.flat(6, 3), (6, 3))
    made.path.rename(shelf.folder / f"flat.zarr.{'a' * 32}.partial")
    assert len(shelf.list()) == 2
    assert shelf.find_by_id(identity(stand_in.flat(6, 3))) is None
    assert shelf.remove_leftovers() == 1
    assert sorted(p.suffix for p in shelf.folder.iterdir()) == [".zarr", ".zarr"]


def test_only_the_damaged_copy_of_an_atlas_is_an_error(shelf):
    config = stand_in.flat(4, 3)
    path = shelf.find_by_id(identity(config)).path
    (path / "kp" / "zarr.json").unlink()
    with pytest.raises(DamagedAtlas):
        shelf.find_by_id(identity(config))
    create_atlas(shelf.folder / "whole", config, (4, 3))
    assert shelf.find_by_id(identity(config)).path.name == "whole"


def test_runs_that_start_together_make_one_atlas(tmp_path):
    shelf, config, made = Shelf(tmp_path), stand_in.flat(4, 3), []

    def start():
        shelf.remove_leftovers()
        made.append(put(shelf, config).path)

    threads = [threading.Thread(target=start) for _ in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(made) == 6
    assert len(shelf.list()) == len(set(made)) == 1
    assert [path.suffix for path in tmp_path.iterdir()] == [".zarr"]
