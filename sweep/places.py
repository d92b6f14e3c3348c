"""Where things of the user's own are kept outside a shelf."""

from __future__ import annotations

import os
from pathlib import Path

_NOWHERE = Path(os.devnull)


def user_cache() -> Path:
    """The folder of what can be made again: compiled kernels and the answers kept by the memo.

    ``$XDG_CACHE_HOME/sampled-loop-atlas``, else ``~/.cache/sampled-loop-atlas``. It need not be
    there, and whoever uses it must be ready for an `OSError`, as on a full or read-only disk; for
    a user without a home it is a path under a file, where every use ends so.

    References
    ----------
    XDG Base Directory Specification 0.8 (2021), section 3: a relative path is to be ignored.
    """
    named = Path(os.environ.get("XDG_CACHE_HOME", ""))
    return (named if named.is_absolute() else _home_cache()) / "sampled-loop-atlas"


def _home_cache() -> Path:
    try:
        return Path.home() / ".cache"
    except RuntimeError:
        return _NOWHERE


def can_be_written(folder: Path) -> bool:
    """Whether files can be made in a folder, which may have to be made itself."""
    try:
        place = next(one for one in (folder, *folder.absolute().parents) if os.path.lexists(one))
        return place.is_dir() and os.access(place, os.W_OK | os.X_OK)
    except OSError:
        return False
