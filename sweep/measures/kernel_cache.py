"""Where compiled kernels are kept between runs.

Numba's own key is the source of the compiled function's file alone: a kernel that calls into a
changed neighbour would be taken from the cache as it was. The folder chosen here is named after the
sources of every module that kernels are compiled from, so that a change in any of them starts anew.
"""

from __future__ import annotations

import hashlib
import os
import tempfile
from pathlib import Path
from types import ModuleType

from sweep.places import user_cache

_SOURCES = (
    "kernel_cache.py",
    "lanes.py",
    "disks.py",
    "elementary.py",
    "roots.py",
    "../vocabulary.py",
)


def kernel_folder() -> Path:
    """Where kernels of these sources are kept: in the user's cache, else a new temporary folder."""
    here = Path(__file__).parent
    text = b"".join((here / name).read_bytes() for name in _SOURCES)
    name = f"kernels-{hashlib.sha256(text).hexdigest()[:16]}"
    folder = user_cache() / name
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return folder
    except OSError:
        # compiled code is loaded from here: never a folder that somebody else could have made
        return Path(tempfile.mkdtemp(prefix="sampled-loop-atlas-"))


def keep_kernels_in(numba: ModuleType) -> None:
    """Point numba's cache at `kernel_folder`, unless ``NUMBA_CACHE_DIR`` says where."""
    if not os.environ.get("NUMBA_CACHE_DIR"):
        numba.config.CACHE_DIR = str(kernel_folder())
