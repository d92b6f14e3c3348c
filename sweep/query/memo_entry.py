"""One entry of the memo as a file: arrays that come back as they were written, or not at all.

::

    8 bytes   what it is, and the version of this layout
    32 bytes  SHA-256 of the key and of all that follows
    the rest  arrays as numpy.savez writes them, not compressed

No pickle is ever written or read.
"""

from __future__ import annotations

import hashlib
import hmac
import os
import zipfile
import zlib
from collections.abc import Mapping
from io import BufferedRandom, BufferedReader
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

Arrays = dict[str, NDArray[Any]]

LAYOUT: Final = 1
"""Version of the layout; an entry of another one is not read."""
MAGIC: Final = b"sweepm" + LAYOUT.to_bytes(2, "little")
"""What an entry starts with."""
HEAD_BYTES: Final = len(MAGIC) + hashlib.sha256().digest_size
"""Where the arrays start."""

_UNREADABLE = (
    ValueError,
    EOFError,
    KeyError,
    NotImplementedError,
    MemoryError,
    RuntimeError,
    zipfile.BadZipFile,
    zlib.error,
)
"""What reading arrays raises on bytes that `numpy.savez` did not write."""


def write_entry(file: BufferedRandom, key: str, arrays: Mapping[str, NDArray[Any]]) -> int:
    """Write an entry into an empty file; returns its size in bytes.

    Raises
    ------
    ValueError
        For an array of Python objects, which only a pickle could hold.
    OSError
        When the disk is full.
    """
    file.write(bytes(HEAD_BYTES))
    np.savez(file, allow_pickle=False, **arrays)
    size = file.seek(0, os.SEEK_END)
    head = MAGIC + digest(file, key)
    file.seek(0)
    file.write(head)
    return size


def read_entry(file: BufferedReader, key: str) -> Arrays | None:
    """The arrays of an entry; `None` unless every byte is as it was written under this key.

    The bytes are hashed where they lie and then read straight into the arrays: a large entry takes
    its own size in memory, once.
    """
    head = file.read(HEAD_BYTES)
    if head[: len(MAGIC)] != MAGIC:
        return None
    if not hmac.compare_digest(head[len(MAGIC) :], digest(file, key)):
        return None
    file.seek(HEAD_BYTES)
    try:
        return _read_arrays(file)
    except _UNREADABLE:
        return None


def _read_arrays(file: BufferedReader) -> Arrays:
    opened = np.load(file, allow_pickle=False)
    if not isinstance(opened, np.lib.npyio.NpzFile):
        raise zipfile.BadZipFile("one array where a set of them is expected")
    arrays = {name: opened[name] for name in opened.files}
    if not all(isinstance(array, np.ndarray) for array in arrays.values()):
        raise zipfile.BadZipFile("a member that is no array")
    return arrays


def digest(file: BufferedRandom | BufferedReader, key: str) -> bytes:
    """SHA-256 of the key and of the file from behind its head to its end, 32 bytes."""
    file.seek(HEAD_BYTES)
    return hashlib.file_digest(file, lambda: hashlib.sha256(key.encode())).digest()
