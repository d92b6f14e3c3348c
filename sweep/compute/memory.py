"""How much memory this process has needed at most."""

from __future__ import annotations

import re
import sys
from pathlib import Path


def peak_memory_bytes() -> int | None:
    """Largest resident size of this process so far; `None` where the system does not tell.

    Linux keeps it for the program that runs now (VmHWM). What `getrusage` tells there is not below
    the size of the process that started this one, since it outlives exec.
    """
    try:
        status = Path("/proc/self/status").read_text(encoding="ascii", errors="replace")
    except OSError:
        return _from_getrusage()
    found = re.search(r"^VmHWM:\s*(\d+) kB$", status, re.MULTILINE)
    return 1024 * int(found[1]) if found else _from_getrusage()


def _from_getrusage() -> int | None:
    try:
        import resource
    except ImportError:
        return None
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak if sys.platform == "darwin" else 1024 * peak
