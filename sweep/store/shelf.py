"""A shelf: a folder of atlases, found by their full id whatever their folders are called."""

from __future__ import annotations

import shutil
import uuid
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from sweep.config import Config
from sweep.errors import DamagedAtlas, QuestionError
from sweep.store.atlas import (
    StoredAtlas,
    create_atlas,
    damaged_cover,
    find_cover_damage,
    open_stored,
    read_cover,
)
from sweep.store.layout import SHORT_ID, SUFFIX, folder_name
from sweep.store.shards import PARTIAL

_ATTEMPTS = 5
_MOST_CANDIDATES = 10


@dataclass(frozen=True)
class ShelfEntry:
    """What stands on the cover of an atlas, unchecked."""

    path: Path
    """Its folder."""
    title: str
    """Its title."""
    atlas_id: str
    """Its full id."""
    damage: str = ""
    """What is wrong with its cover; title and id are then empty."""

    def __str__(self) -> str:
        if self.damage:
            return f"{self.path.name} (damaged)"
        return f"{self.path.name} ({self.title}, {self.atlas_id[:SHORT_ID]})"


@dataclass(frozen=True)
class Shelf:
    """A folder of atlases; it need not exist until something is put on it."""

    folder: Path
    """Where the atlases are."""

    def list(self) -> tuple[ShelfEntry, ...]:
        """Every atlas here by folder name, from the covers alone."""
        if not self.folder.is_dir():
            return ()
        entries = []
        for path in sorted(self.folder.iterdir()):
            cover = None if PARTIAL.fullmatch(path.name) else read_cover(path)
            if cover is not None:
                title, identity = str(cover.get("title", "")), str(cover.get("atlas_id", ""))
                entries.append(ShelfEntry(path, title, identity))
        return tuple(entries)

    def list_damaged(self) -> tuple[ShelfEntry, ...]:
        """Every folder here that is called as an atlas and whose cover cannot be read."""
        if not self.folder.is_dir():
            return ()
        found = ((path, find_cover_damage(path)) for path in sorted(self.folder.iterdir()))
        return tuple(ShelfEntry(path, "", "", damage) for path, damage in found if damage)

    def check(self) -> None:
        """Make sure that the shelf is a folder, or can become one.

        Raises
        ------
        QuestionError
            When a file stands in its place, or in that of a folder above it.
        """
        above = (self.folder, *self.folder.absolute().parents)
        standing = next(place for place in above if place.exists())
        if not standing.is_dir():
            raise QuestionError(
                f"using {self.folder} as the shelf: expected a folder, found the file {standing}",
                where=[str(standing)],
                remedy="name a folder with --shelf; it need not exist yet",
            )

    def find_by_id(self, atlas_id: str) -> StoredAtlas | None:
        """The atlas with this full id, opened; `None` when it is not here.

        Raises
        ------
        DamagedAtlas
            When every atlas of that id here is damaged.
        """
        damage: DamagedAtlas | None = None
        for entry in self.list():
            if entry.atlas_id == atlas_id:
                try:
                    return open_stored(entry.path)
                except DamagedAtlas as error:
                    damage = error
        if damage is not None:
            raise damage
        return None

    def find(self, text: Path | str) -> Path:
        """The one atlas that a text means: a path, or any part of a title, folder name or id.

        A title, folder name or id given in full wins over parts of others.

        Raises
        ------
        QuestionError
            When none or several atlases match; names the candidates.
        DamagedAtlas
            When the one that matches has a cover that cannot be read.
        """
        for path in (Path(text), self.folder / text):
            if str(text).strip() and _is_there(path / "zarr.json"):
                return _with_a_cover(path, find_cover_damage(path))
        self.check()
        entries = (*self.list(), *self.list_damaged())
        wanted = str(text).strip().casefold()
        matches = [e for e in entries if wanted and wanted in _names(e)]
        matches = matches or [e for e in entries if any(wanted in name for name in _names(e))]
        if len(matches) == 1:
            return _with_a_cover(matches[0].path, matches[0].damage)
        raise self._not_one(str(text), matches, entries)

    def open_or_create(
        self, config: Config, atlas_id: str, tile_shape: tuple[int, ...]
    ) -> StoredAtlas:
        """The atlas of a config, made when it is not here.

        Two runs may come here at once: the one that is late finds what the other made.
        """
        for attempt in range(_ATTEMPTS):
            found = self.find_by_id(atlas_id)
            if found is not None:
                return found
            try:
                return create_atlas(self.place_for(config.title, atlas_id), config, tile_shape)
            except (FileExistsError, FileNotFoundError):
                # Another run took the name, or took our unfinished folder for a leftover.
                if attempt == _ATTEMPTS - 1:
                    raise
        raise AssertionError("unreachable: the loop returns or raises")

    def place_for(self, title: str, atlas_id: str) -> Path:
        """Where a new atlas goes: a free name with as many digits of its id as that takes.

        Raises
        ------
        DamagedAtlas
            When a folder here is this very atlas by its name, and cannot be read.
        """
        for entry in self.list_damaged():
            if entry.path.name.endswith(f"-{atlas_id[:SHORT_ID]}{SUFFIX}"):
                raise damaged_cover(entry.path, entry.damage, "looking for the nodes computed in")
        for digits in range(SHORT_ID, len(atlas_id)):
            path = self.folder / folder_name(title, atlas_id, digits)
            if not path.exists():
                return path
            if read_cover(path) is not None:
                with suppress(QuestionError):
                    open_stored(path)  # another atlas by chance, or this one with a damaged id
        return self.folder / folder_name(title, atlas_id, len(atlas_id))

    def remove_leftovers(self) -> int:
        """Take away folders of atlases that were never finished; returns how many.

        Each is renamed first, so that a run that is making it at this moment notices and makes
        another instead of publishing half of one.
        """
        removed = 0
        for path in list(self.folder.glob("*.partial")) if self.folder.is_dir() else []:
            if PARTIAL.fullmatch(path.name) and path.is_dir() and not path.is_symlink():
                taken = path.with_name(f"leftover.{uuid.uuid4().hex}.partial")
                with suppress(FileNotFoundError):
                    shutil.rmtree(path.rename(taken), ignore_errors=True)
                    removed += 1
        return removed

    def _not_one(
        self, text: str, matches: Sequence[ShelfEntry], entries: Sequence[ShelfEntry]
    ) -> QuestionError:
        if not matches and text.strip() and _is_there(Path(text)):
            return QuestionError(
                f"opening the atlas {text}: expected a folder that `sweep run` made, found "
                f"{'another folder' if Path(text).is_dir() else 'a file'}",
                where=[text],
                remedy="give the folder of an atlas, usually results/NAME.zarr, or run its config",
            )
        if not self.folder.is_dir():
            return QuestionError(
                f"looking for the atlas {text!r} on the shelf {self.folder}: there is no such "
                "folder",
                where=[str(self.folder)],
                remedy="say with --shelf where the atlases are, or run a config first",
            )
        shown = (matches or entries)[:_MOST_CANDIDATES]
        listed = "; ".join(map(str, shown)) or "nothing"
        found = f"{len(matches)} atlases match" if matches else "no atlas matches"
        return QuestionError(
            f"looking for the atlas {text!r} on the shelf {self.folder}: {found}; there "
            f"{'are' if matches else 'is'} {listed}",
            where=[str(entry.path) for entry in shown],
            remedy="give a part of a title or id that only one of them has, or the path of a folder"
            if entries
            else "run a config first, or say with --shelf where the atlases are",
        )


def _with_a_cover(path: Path, damage: str) -> Path:
    if damage:
        raise damaged_cover(path, damage)
    return path


def _is_there(path: Path) -> bool:
    try:
        return path.exists()
    except (OSError, ValueError):
        return False  # a text that no path can be, such as a very long one


def _names(entry: ShelfEntry) -> tuple[str, ...]:
    return entry.title.casefold(), entry.path.name.casefold(), entry.atlas_id.casefold()
