"""When a run stops starting tiles: on an interrupt, by the time of day, or after a failure."""

from __future__ import annotations

import signal
import threading
import time
from collections import deque
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import time as time_of_day
from types import FrameType

from sweep.compute.progress import StopReason

_RECENT_TILES = 32
_TIME_MARGIN = 1.2
"""A tile in flight may take this many times the slowest recent one."""


class Gate:
    """Asked by every worker before it starts a tile.

    Parameters
    ----------
    deadline_s
        When the last tile in flight must have ended, seconds since the epoch; never if `None`.
    tile_s
        Time that a tile is expected to take until tiles of this run are known, s.
    """

    def __init__(self, deadline_s: float | None = None, tile_s: float = 0.0) -> None:
        self._deadline_s = deadline_s
        self._slowest_s = tile_s
        self._recent_s: deque[float] = deque([tile_s] if tile_s else [], maxlen=_RECENT_TILES)
        self.reason: StopReason = ""

    def close(self, reason: StopReason) -> None:
        """Start no further tile; the first reason stays."""
        self.reason = self.reason or reason

    def admits(self) -> bool:
        """Whether another tile may start now."""
        deadline_s = self._deadline_s
        if deadline_s is not None and time.time() + _TIME_MARGIN * self._slowest_s > deadline_s:
            self.close("until")
        return not self.reason

    def learn(self, tile_s: float) -> None:
        """Take note of how long a tile took, s."""
        self._recent_s.append(tile_s)
        self._slowest_s = max(self._recent_s)


@contextmanager
def interrupts_close(gate: Gate) -> Iterator[None]:
    """Turn the first interrupt (Ctrl-C) into a closed gate and a second into `KeyboardInterrupt`.

    Outside the main thread interrupts cannot be caught and stay what they are.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return

    def on_interrupt(_number: int, _frame: FrameType | None) -> None:
        if gate.reason == "interrupted":
            raise KeyboardInterrupt
        gate.close("interrupted")

    before = signal.signal(signal.SIGINT, on_interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


def next_occurrence_s(until: time_of_day, now_s: float) -> float:
    """The next moment that the local clock shows ``until``, in seconds since the epoch."""
    now = time.localtime(now_s)
    for days in (0, 1):
        moment = (now.tm_year, now.tm_mon, now.tm_mday + days, until.hour, until.minute)
        moment_s = time.mktime((*moment, until.second, 0, 0, -1)) + until.microsecond / 1e6
        if moment_s > now_s:
            return moment_s
    return moment_s
