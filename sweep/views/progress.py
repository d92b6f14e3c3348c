"""Telling how a run is getting on: a bar where someone watches, a line now and then elsewhere.

The events are plain data; this is the one place outside `sweep.compute` that knows them.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime
from typing import Protocol, TextIO

from rich.console import Console
from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn

from sweep.compute.progress import (
    Event,
    KernelsReady,
    SweepStarted,
    SweepStopping,
    TileStored,
)
from sweep.views.sheet import printable, seconds_text

LINE_EVERY_S = 5.0
"""Least time between two plain lines, s."""

_STOPPING = {
    "interrupted": "stopping: the tiles in flight are stored first; once more drops them",
    "until": "the time is up: the tiles in flight are stored first",
    "failed": "a tile failed: the tiles in flight are stored first",
}


class Teller(Protocol):
    """Whoever shows how far a run is."""

    def notify(self, event: Event) -> None:
        """Take one event."""


@contextmanager
def progress_listener(stream: TextIO) -> Iterator[Teller]:
    """A listener for `run_sweep` that writes to ``stream`` until the block is left.

    Parameters
    ----------
    stream
        Usually stderr, so that stdout holds the answer alone.
    """
    if not stream.isatty():
        yield LineTeller(stream)
        return
    console = Console(file=stream, highlight=False, markup=False, emoji=False)
    bar = Progress(
        TextColumn("{task.description}", markup=False),
        BarColumn(bar_width=None),
        TaskProgressColumn(),
        TextColumn("{task.fields[pace]}", markup=False),
        console=console,
        refresh_per_second=4,
        redirect_stdout=False,
        redirect_stderr=False,
    )
    with bar:
        yield BarTeller(bar)


class BarTeller:
    """A bar with the share done, nodes done, rate and time left.

    Parameters
    ----------
    bar
        A started progress display with a field ``pace``.
    """

    def __init__(self, bar: Progress) -> None:
        self._bar = bar
        self._task = bar.add_task("opening the atlas", total=None, pace="")
        self._nodes = 0

    def notify(self, event: Event) -> None:
        """Take one event."""
        match event:
            case SweepStarted():
                self._nodes = event.nodes
                self._show("compiling", event.nodes_done, "")
                if event.until is not None:
                    self._bar.console.print(until_text(event.until, event.until_in_s))
            case KernelsReady():
                self._bar.update(self._task, description="computing")
            case TileStored():
                self._show("computing", event.nodes_done, pace_text(event, self._nodes))
            case SweepStopping():
                self._bar.console.print(_STOPPING.get(event.reason, event.reason))

    def _show(self, doing: str, done: int, pace: str) -> None:
        self._bar.update(
            self._task, description=doing, total=self._nodes, completed=done, pace=pace
        )


class LineTeller:
    """A plain line every few seconds.

    Parameters
    ----------
    stream
        Where to.
    clock
        Seconds that only grow.
    """

    def __init__(self, stream: TextIO, clock: Callable[[], float] = time.monotonic) -> None:
        self._stream: TextIO | None = stream
        self._clock = clock
        self._told = clock()
        self._nodes = 0

    def notify(self, event: Event) -> None:
        """Take one event."""
        match event:
            case SweepStarted():
                self._nodes = event.nodes
                if event.tiles_done < event.tiles:
                    left = event.tiles - event.tiles_done
                    until = until_text(event.until, event.until_in_s) if event.until else ""
                    self._tell(
                        f"{printable(event.title)}: {left:,} of {event.tiles:,} tiles to compute, "
                        f"{event.workers} at once" + (f"; {until}" if until else "")
                    )
            case TileStored() if self._clock() - self._told >= LINE_EVERY_S:
                share = event.nodes_done / max(1, self._nodes)
                self._tell(f"{share:6.1%}  {pace_text(event, self._nodes)}")
            case SweepStopping():
                self._tell(_STOPPING.get(event.reason, event.reason))
            case _:
                pass

    def _tell(self, line: str) -> None:
        """Write a line; when nobody reads any more the run goes on in silence."""
        self._told = self._clock()
        if self._stream is None:
            return
        try:
            self._stream.write(line + "\n")
            self._stream.flush()
        except BrokenPipeError:
            self._stream = None


def until_text(until: datetime, ahead_s: float) -> str:
    """When a run stops.

    >>> until_text(datetime(2031, 3, 5, 6, 30), 33_120.0)
    'stops by 06:30, in 9 h 12 min'
    """
    return f"stops by {until:%H:%M}, in {seconds_text(ahead_s)}"


def pace_text(event: TileStored, nodes: int) -> str:
    """Nodes done, rate and time left.

    Parameters
    ----------
    event
        The newest tile.
    nodes
        Nodes of the whole sweep.

    Examples
    --------
    >>> pace_text(TileStored((0,), 10, 1, 2_000_000, 2_000_000, 0.5), 10_000_000)
    '2,000,000 nodes, 4.0 M/s, 2.0 s left'
    """
    text = f"{event.nodes_done:,} nodes"
    if event.seconds <= 0 or event.nodes_computed <= 0:
        return text
    rate = event.nodes_computed / event.seconds
    left = seconds_text(max(0, nodes - event.nodes_done) / rate)
    pace = f"{rate / 1e6:.1f} M/s" if rate >= 1e6 else f"{rate / 1e3:.1f} k/s"
    return f"{text}, {pace}, {left} left"
