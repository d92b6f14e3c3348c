"""Answers kept on disk, so that the same question of the same tiles is reduced only once.

A *memo* is a folder in the user's cache, never in an atlas; one file is one entry, named after
its key, as `sweep.query.memo_entry` writes it.

The key is a SHA-256 of the question, of the stored tiles that it rests on (`fingerprint`) and of
the program that answered it: an entry that is found is right, however old it is. What is damaged,
cut short, renamed or of another version is removed without a word, and the answer is made again.
No pickle is ever read. Any number of threads and processes may share a memo: an entry appears
whole, by rename, and two who make the same one make equal ones.

``SWEEP_MEMO=0`` (or ``off``) switches the memo off; ``SWEEP_MEMO_BYTES`` says how much it may hold.
"""

from __future__ import annotations

import hashlib
import os
import re
import time
import uuid
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.errors import InputError
from sweep.identity import PROGRAM_VERSION, canonical_text
from sweep.places import can_be_written, user_cache
from sweep.query.blocks import Readable
from sweep.query.memo_entry import LAYOUT, Arrays, read_entry, write_entry

DEFAULT_LIMIT_BYTES = 10**9
"""What a memo may hold when nobody says otherwise."""

_ENTRY = re.compile(r"[0-9a-f]{64}\.memo")
_PARTIAL = re.compile(r"[0-9a-f]{64}\.[0-9a-f]{32}\.partial")
_LEFTOVER_SECONDS = 3600.0
_ANSWERING = ("query", "store", "grid.py", "vocabulary.py")


@dataclass(frozen=True)
class MemoFacts:
    """What a memo holds."""

    folder: Path
    """Where it is; need not be there while nothing is kept."""
    entries: int
    """Answers kept."""
    bytes: int
    """What they take on the disk."""
    limit_bytes: int
    """What they may take."""
    enabled: bool
    """Whether answers are looked up and kept: false under ``SWEEP_MEMO=0``."""
    writable: bool = True
    """Whether its folder can be written, or made: otherwise nothing can be kept there."""

    def to_json(self) -> dict[str, Any]:
        """As a JSON document."""
        return {
            "folder": str(self.folder),
            "entries": self.entries,
            "bytes": self.bytes,
            "limit_bytes": self.limit_bytes,
            "enabled": self.enabled,
            "writable": self.writable,
        }


@dataclass(frozen=True)
class _Kept:
    path: Path
    size: int
    used_ns: int


class Memo:
    """Answers kept on disk under their questions.

    Parameters
    ----------
    folder
        Where they are kept; ``answers`` in the user's cache when left out. Made when needed.
    limit_bytes
        What they may take, at least 0; ``SWEEP_MEMO_BYTES``, else `DEFAULT_LIMIT_BYTES`, when left
        out. An entry larger than a quarter of it is not kept.

    Raises
    ------
    InputError
        When ``SWEEP_MEMO_BYTES`` is needed and is not a whole number of bytes.
    """

    def __init__(self, folder: Path | None = None, limit_bytes: int | None = None) -> None:
        self.folder = user_cache() / "answers" if folder is None else folder
        self.limit_bytes = _limit_from_environment() if limit_bytes is None else limit_bytes
        self.enabled = os.environ.get("SWEEP_MEMO", "").strip().lower() not in {"0", "off"}

    def key(self, question: Mapping[str, object]) -> str:
        """The name of a question, 64 hexadecimal digits.

        Parameters
        ----------
        question
            All that decides the answer, the `fingerprint` of what it rests on included: texts,
            whole numbers, finite floats (taken to the last bit), and lists and mappings of them.
            The order in a mapping does not matter.

        Raises
        ------
        ValueError, TypeError
            For what `sweep.identity.canonical_text` cannot write, such as NaN.
        """
        whole = {"memo": LAYOUT, "program": _program(), "question": question}
        return hashlib.sha256(canonical_text(whole).encode()).hexdigest()

    def get(self, key: str) -> Arrays | None:
        """The arrays kept under a key, or `None`.

        `None` as well for an entry that is damaged, which is removed, and for one that the system
        will not let be read. An entry that is found counts as used now.
        """
        if not self.enabled:
            return None
        path = self._path(key)
        try:
            with path.open("rb") as file:
                arrays = read_entry(file, key)
        except OSError:
            return None
        with suppress(OSError):
            if arrays is None:
                path.unlink()
            else:
                os.utime(path)
        return arrays

    def put(self, key: str, arrays: Mapping[str, NDArray[Any]]) -> None:
        """Keep arrays under a key; the entries used longest ago make room.

        Nothing is kept, and nothing raised, when the disk is full or read-only, or when the arrays
        take more than a quarter of what the memo may hold.

        Parameters
        ----------
        key
            From `key`.
        arrays
            Of numbers, booleans or fixed-width texts, of any shape, by names that are identifiers
            other than ``file`` and ``allow_pickle``.

        Raises
        ------
        ValueError
            For an array of Python objects, which only a pickle could hold.
        """
        if (
            not self.enabled
            or 4 * sum(array.nbytes for array in arrays.values()) > self.limit_bytes
        ):
            return
        partial = self.folder / f"{key}.{uuid.uuid4().hex}.partial"
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            with partial.open("x+b") as file:
                size = write_entry(file, key, arrays)
            if 4 * size <= self.limit_bytes:
                partial.replace(self._path(key))
        except OSError:
            return
        finally:
            with suppress(OSError):
                partial.unlink()
        self._make_room(newest=self._path(key))

    def recall(
        self,
        stored: Readable,
        measures: Sequence[str],
        question: Mapping[str, object],
        compute: Callable[[], Arrays],
    ) -> Arrays:
        """The answer to a question of an atlas, from the memo or else computed and kept.

        It is kept only if the tiles after computing are those from before, so that an answer made
        while tiles came or went is never found under either.

        Parameters
        ----------
        stored
            The atlas as it lies in the store.
        measures
            Names of the measures that the answer rests on.
        question
            All that decides the answer apart from the tiles; see `fingerprint` for what a changed
            config can change without changing the atlas's id.
        compute
            Makes the answer.
        """
        before = fingerprint(stored, measures) if self.enabled else ""
        if not before:
            return compute()
        key = self.key({"rests_on": before, "asked": question})
        arrays = self.get(key)
        if arrays is None:
            arrays = compute()
            if fingerprint(stored, measures) == before:
                self.put(key, arrays)
        return arrays

    def recall_text(
        self,
        stored: Readable,
        measures: Sequence[str],
        question: Mapping[str, object],
        compute: Callable[[], str],
    ) -> str:
        """As `recall`, for an answer that is a text."""
        arrays = self.recall(stored, measures, question, lambda: {"text": text_array(compute())})
        return array_text(arrays["text"])

    def clear(self) -> tuple[int, int]:
        """Remove every entry; returns how many there were and their bytes.

        Only the memo's own files are removed, whatever else lies in the folder.

        Raises
        ------
        OSError
            When the system will not remove one.
        """
        kept = self._files(_ENTRY)
        for file in (*kept, *self._files(_PARTIAL)):
            file.path.unlink(missing_ok=True)
        return len(kept), sum(file.size for file in kept)

    def facts(self) -> MemoFacts:
        """What the memo holds now."""
        kept = self._files(_ENTRY)
        held = sum(file.size for file in kept)
        writable = can_be_written(self.folder)
        return MemoFacts(self.folder, len(kept), held, self.limit_bytes, self.enabled, writable)

    def _path(self, key: str) -> Path:
        return self.folder / f"{key}.memo"

    def _make_room(self, newest: Path) -> None:
        kept = sorted(self._files(_ENTRY), key=lambda file: (file.path == newest, file.used_ns))
        surplus = sum(file.size for file in kept) - self.limit_bytes
        for file in kept:
            if surplus <= 0:
                break
            with suppress(OSError):
                file.path.unlink()
                surplus -= file.size
        self._remove_leftovers()

    def _remove_leftovers(self) -> None:
        """Remove what killed writers left; a living writer is done long before this age."""
        oldest_ns = int((time.time() - _LEFTOVER_SECONDS) * 1e9)
        for file in self._files(_PARTIAL):
            if file.used_ns < oldest_ns:
                with suppress(OSError):
                    file.path.unlink()

    def _files(self, name: re.Pattern[str]) -> list[_Kept]:
        try:
            return list(_scan(self.folder, name))
        except OSError:
            return []


def fingerprint(stored: Readable, measures: Sequence[str]) -> str:
    """What an answer rests on: the atlas's id and the stored objects of some measures.

    It changes when a tile is added, repaired or removed. It does not change with what the id leaves
    out: titles, labels, roles, nominal values, designs and cases. An answer that depends on one of
    them must have it in its question.

    Parameters
    ----------
    stored
        The atlas as it lies in the store.
    measures
        Names of measures, in any order.

    Returns
    -------
    64 hexadecimal digits; empty for an atlas without files, of which nothing can be kept.
    """
    objects = getattr(stored, "objects", None)
    if objects is None:
        return ""
    signatures = {name: objects.signature(name) for name in measures}
    text = canonical_text({"atlas_id": stored.atlas_id, "objects": signatures})
    return hashlib.sha256(text.encode()).hexdigest()


def text_array(text: str) -> NDArray[np.uint8]:
    """A text as an array of its UTF-8 bytes, to be kept beside others.

    >>> array_text(text_array("5 µs"))
    '5 µs'
    """
    return np.frombuffer(text.encode(), np.uint8)


def array_text(array: NDArray[Any]) -> str:
    """The text that `text_array` made into an array."""
    return array.tobytes().decode()


def _scan(folder: Path, name: re.Pattern[str]) -> Iterator[_Kept]:
    with os.scandir(folder) as files:
        for file in files:
            if not name.fullmatch(file.name) or not file.is_file(follow_symlinks=False):
                continue
            # another process may have removed it since
            with suppress(FileNotFoundError):
                facts = file.stat(follow_symlinks=False)
                yield _Kept(Path(file.path), facts.st_size, facts.st_mtime_ns)


def _limit_from_environment() -> int:
    text = os.environ.get("SWEEP_MEMO_BYTES", "").strip()
    if not text:
        return DEFAULT_LIMIT_BYTES
    if not (text.isascii() and text.isdigit()):
        raise InputError(
            f"bounding the memo: expected SWEEP_MEMO_BYTES to be a whole number of bytes, "
            f"found {text!r}",
            where=["SWEEP_MEMO_BYTES"],
            remedy=f"set it to a number such as {DEFAULT_LIMIT_BYTES}, or unset it",
        )
    return int(text)


@cache
def _program() -> str:
    """Version of the program and a hash of the sources that answers come from.

    With it a mended reduction never hands out what the one before it kept.
    """
    package = Path(__file__).parents[1]
    digest = hashlib.sha256()
    for room in _ANSWERING:
        place = package / room
        for source in sorted(place.rglob("*.py")) if place.is_dir() else [place]:
            with suppress(FileNotFoundError):
                digest.update(source.read_bytes())
    return f"{PROGRAM_VERSION} {digest.hexdigest()}"
