"""What a run tells while it works: typed events, and whoever listens to them.

Nothing here prints. Events arrive in the thread that called `run_sweep`, one at a time.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, Literal, Protocol

StopReason = Literal["", "interrupted", "until", "failed"]
"""Why a run stopped before the last tile; empty when it did not."""


@dataclass(frozen=True)
class SweepStarted:
    """The atlas is open and what is missing is known; kernels are compiled next."""

    title: str
    """Title of the atlas."""
    atlas: Path
    """Its folder."""
    workers: int
    """Tiles computed at once."""
    tiles: int
    """Tiles in all."""
    tiles_done: int
    """Tiles that were stored before this run."""
    nodes: int
    """Nodes in all."""
    nodes_done: int
    """Nodes that were stored before this run."""
    until: datetime | None = None
    """Local time by which the run stops; `None` when it goes on to the end."""
    until_in_s: float = 0.0
    """How far ahead that is, s."""


@dataclass(frozen=True)
class KernelsReady:
    """Kernels are compiled; the first tile starts next."""

    seconds: float
    """Time that start-up and compilation took, s."""


@dataclass(frozen=True)
class TileStored:
    """One more tile is on the disk."""

    index: tuple[int, ...]
    """Its place in the lattice of tiles."""
    nodes: int
    """Its nodes."""
    tiles_done: int
    """Tiles stored by now, earlier runs included."""
    nodes_done: int
    """Nodes stored by now, earlier runs included."""
    nodes_computed: int
    """Nodes computed by this run by now."""
    seconds: float
    """Time since this run's first tile started, s."""


@dataclass(frozen=True)
class SweepStopping:
    """No further tile is started; those in flight are stored first."""

    reason: StopReason
    """Why."""


@dataclass(frozen=True)
class RunReport:
    """What a run did."""

    title: str
    """Title of the atlas."""
    atlas: Path
    """Its folder."""
    atlas_id: str
    """Its full id."""
    physics_id: str
    """Id of the loop's structure."""
    nodes: int
    """Nodes in all."""
    tiles: int
    """Tiles in all."""
    tiles_done: int
    """Tiles stored at the end."""
    tiles_computed: int
    """Tiles computed by this run."""
    nodes_computed: int
    """Nodes computed by this run."""
    seconds: float
    """From the first tile started to the last stored, s."""
    start_seconds: float
    """Start-up and compilation, s."""
    workers: int
    """Tiles computed at once."""
    slow_nodes: int
    """Nodes of this run that the fast kernel left to the slow path."""
    undecided_nodes: int
    """Nodes of this run that neither path could tell from the stability threshold."""
    bytes_written: int
    """By this run, tiles only."""
    peak_memory_bytes: int | None
    """Largest resident memory of the process so far; `None` where the system does not tell."""
    relabelled: bool
    """Whether titles, labels, designs or cases of an existing atlas were rewritten."""
    stopped: StopReason = ""
    """Why it stopped before the last tile; empty when it did not."""
    until: datetime | None = None
    """Local time by which it was to stop; `None` when it was not told one."""
    notes: tuple[str, ...] = ()
    """Things that the user should know."""
    nodes_adopted: int = 0
    """Nodes taken over from other atlases."""

    @property
    def complete(self) -> bool:
        """Whether every tile is stored."""
        return self.tiles_done == self.tiles

    @property
    def interrupted(self) -> bool:
        """Whether it was stopped by an interrupt."""
        return self.stopped == "interrupted"

    @property
    def stopped_by_until(self) -> bool:
        """Whether it stopped because the time was up."""
        return self.stopped == "until"

    @property
    def nodes_per_second(self) -> float | None:
        """Speed of this run; `None` when it computed nothing."""
        return self.nodes_computed / self.seconds if self.seconds > 0 else None

    @property
    def summary(self) -> str:
        """One sentence for people, with what to do next."""
        left = self.tiles - self.tiles_done
        if self.complete and not self.tiles_computed:
            changed = "; its labels were rewritten" if self.relabelled else ""
            return f"{self.title} is complete: nothing to compute{changed}"
        stored = f"{self.tiles_done:,} of {self.tiles:,} tiles stored"
        done = f"{self.nodes_computed:,} nodes computed, {stored}"
        if not left:
            return f"{self.title} is complete: {done}"
        return f"{self.title}: {done}; run the same config again to compute the {left:,} tiles left"

    def to_json(self) -> dict[str, Any]:
        """The document of `sweep run --json`."""
        return {
            "title": self.title,
            "atlas": str(self.atlas),
            "atlas_id": self.atlas_id,
            "physics_id": self.physics_id,
            "nodes": self.nodes,
            "tiles": self.tiles,
            "tiles_done": self.tiles_done,
            "tiles_computed": self.tiles_computed,
            "nodes_computed": self.nodes_computed,
            "nodes_adopted": self.nodes_adopted,
            "seconds": self.seconds,
            "start_seconds": self.start_seconds,
            "nodes_per_second": self.nodes_per_second,
            "workers": self.workers,
            "slow_nodes": self.slow_nodes,
            "undecided_nodes": self.undecided_nodes,
            "bytes_written": self.bytes_written,
            "peak_memory_bytes": self.peak_memory_bytes,
            "relabelled": self.relabelled,
            "complete": self.complete,
            "interrupted": self.interrupted,
            "stopped_by_until": self.stopped_by_until,
            "until": None if self.until is None else self.until.isoformat(),
            "notes": list(self.notes),
        }


@dataclass(frozen=True)
class SweepFinished:
    """The run is over, in good order."""

    report: RunReport
    """What it did."""


Event = SweepStarted | KernelsReady | TileStored | SweepStopping | SweepFinished


class Listener(Protocol):
    """Whoever wants to know how a run is getting on."""

    def notify(self, event: Event) -> None:
        """Take one event; called in the thread of `run_sweep`, so be quick."""


class SilentListener:
    """A listener that does nothing."""

    def notify(self, event: Event) -> None:
        """Ignore the event."""
