"""The plan: what a run would do, as an object to print, test and refuse before the first tile."""

from __future__ import annotations

import math
import shutil
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import joblib

from sweep.compute.survey import Survey, survey_sweep
from sweep.compute.task import ComputeBlock, TileResult, compute_tile
from sweep.config import Config
from sweep.errors import QuestionError, ResourceError
from sweep.grid import Grid
from sweep.identity import physics_id

DISK_MARGIN = 1.1
"""The largest of the measured tiles stands for all of them with about this much to spare."""
PROBE_S = 1.0
"""Time after which no further tile is measured, s."""


@dataclass(frozen=True)
class Probe:
    """What tiles that were computed and let go say about the rest."""

    tiles: int
    """How many were computed."""
    nodes: int
    """Nodes in them."""
    seconds: float
    """Time for all of them, one after the other, s."""
    slowest_s: float
    """Time for the slowest, s."""
    bytes_per_object: float
    """Size of an object of the largest of them."""


@dataclass(frozen=True, eq=False)
class Plan:
    """What `run_sweep` would do with a config."""

    title: str
    """Title of the config."""
    atlas: Path
    """Where the atlas is, or will be."""
    atlas_id: str
    """Its full id."""
    physics_id: str
    """Id of the loop's structure."""
    grid: Grid
    """Axes with roles and nominals, and what is fixed."""
    tile_shape: tuple[int, ...]
    """Nodes of a whole tile along each axis."""
    measures: tuple[str, ...]
    """What is computed at each node."""
    nodes: int
    """Nodes in all."""
    tiles: int
    """Tiles in all."""
    tiles_done: int
    """Tiles that are stored now."""
    nodes_computed: int
    """Nodes to be computed."""
    workers: int
    """Tiles to be computed at once."""
    tile_seconds: float | None
    """Time that a tile took, s; `None` when it was not measured or nothing is to be done."""
    seconds: float | None
    """Time to be expected without start-up, s; `None` when it was not measured."""
    start_seconds: float | None
    """Start-up and compilation, s; `None` when it was not measured."""
    bytes_needed: int
    """Disk space to be used: from measured tiles, else the most it can be."""
    bytes_free: int
    """Disk space that is free."""
    notes: tuple[str, ...]
    """Things that the user should know, such as designs between nodes."""
    nodes_adopted: int = 0
    """Nodes to be taken over from other atlases."""

    @property
    def complete(self) -> bool:
        """Whether nothing is left to compute."""
        return self.tiles_done == self.tiles

    @property
    def fits(self) -> bool:
        """Whether the disk will hold what is missing."""
        return self.bytes_needed <= self.bytes_free

    def to_json(self) -> dict[str, Any]:
        """The document of `sweep plan --json`."""
        return {
            "title": self.title,
            "atlas": str(self.atlas),
            "atlas_id": self.atlas_id,
            "physics_id": self.physics_id,
            "axes": [_axis_json(self.grid, name) for name in self.grid.names],
            "measures": list(self.measures),
            "tile_shape": list(self.tile_shape),
            "nodes": self.nodes,
            "tiles": self.tiles,
            "tiles_done": self.tiles_done,
            "nodes_computed": self.nodes_computed,
            "nodes_adopted": self.nodes_adopted,
            "workers": self.workers,
            "tile_seconds": self.tile_seconds,
            "seconds": self.seconds,
            "start_seconds": self.start_seconds,
            "bytes_needed": self.bytes_needed,
            "bytes_free": self.bytes_free,
            "fits": self.fits,
            "complete": self.complete,
            "notes": list(self.notes),
        }


def plan_sweep(
    config: Config,
    shelf_folder: Path | str,
    *,
    tile_shape: tuple[int, ...] | None = None,
    workers: int | None = None,
    measure_time: bool = True,
    compute: ComputeBlock | None = None,
) -> Plan:
    """Find out what a run would do. Writes nothing.

    Parameters
    ----------
    config
        What is wanted.
    shelf_folder
        Where atlases live; need not exist.
    tile_shape
        Nodes of a tile along each axis; an atlas that exists keeps its own.
    workers
        Tiles at once; the number of processor cores when left out.
    measure_time
        Compute a tile, or a few quick ones, to estimate time and disk space; compiles the
        kernels first.
    compute
        The kernel; that of `sweep.measures.registry` when left out.

    Raises
    ------
    DamagedAtlas
        When the atlas that the shelf has for this config cannot be read.
    """
    survey = survey_sweep(config, Path(shelf_folder), tile_shape)
    count = checked_workers(workers)
    start_seconds, probe = None, None
    if measure_time and survey.pending.size:
        start_seconds, kernel = ready_kernel(config, compute)
        probe = probe_tiles(survey, kernel)
    tile_seconds = None if probe is None else probe.seconds / probe.tiles
    return Plan(
        title=config.title,
        atlas=survey.path,
        atlas_id=survey.atlas_id,
        physics_id=physics_id(config.structure),
        grid=config.grid,
        tile_shape=survey.shards.tile_shape,
        measures=tuple(survey.missing),
        nodes=config.grid.size,
        tiles=len(survey.tiling),
        tiles_done=len(survey.tiling) - survey.pending.size,
        nodes_computed=survey.pending_nodes,
        workers=count,
        tile_seconds=tile_seconds,
        seconds=_expected_seconds(survey, probe, count, measured=measure_time),
        start_seconds=start_seconds,
        bytes_needed=bytes_needed(survey, probe),
        bytes_free=bytes_free(Path(shelf_folder)),
        notes=(*config.notes, *survey.notes),
    )


def checked_workers(workers: int | None) -> int:
    """How many tiles are computed at once.

    Raises
    ------
    QuestionError
        When it is below 1.
    """
    if workers is None:
        return int(joblib.cpu_count())
    if workers < 1:
        raise QuestionError(
            f"{workers} workers were asked for; at least 1 is needed",
            where=["workers"],
            remedy=f"give a number from 1 to {joblib.cpu_count()}, the cores of this machine",
        )
    return workers


def ready_kernel(config: Config, compute: ComputeBlock | None) -> tuple[float, ComputeBlock]:
    """Compile the kernels of a loop; returns the time that took, s, and the kernel."""
    start = time.perf_counter()
    if compute is None:
        from sweep.measures.registry import compile_kernels, compute_block

        compile_kernels(config.structure)
        compute = compute_block
    return time.perf_counter() - start, compute


def probe_tiles(survey: Survey, compute: ComputeBlock) -> Probe:
    """Compute and encode the middle pending tile, and let it go.

    Where tiles are quick, more of them, spread over the pending ones, for as long as `PROBE_S`:
    tiles in which gains of all sizes meet can differ several times in cost.
    """
    spec = survey.spec(compute)
    results: list[TileResult] = []
    objects = 0
    for share in (0.5, 0.0, 0.999, 0.25, 0.75, 0.125, 0.875, 0.375, 0.625)[: survey.pending.size]:
        task = survey.task(survey.pending[int(share * survey.pending.size)])
        results.append(compute_tile(task, spec, store=False))
        objects += len(task.measures)
        if sum(result.seconds for result in results) > PROBE_S:
            break
    return Probe(
        tiles=len(results),
        nodes=sum(result.nodes for result in results),
        seconds=sum(result.seconds for result in results),
        slowest_s=max(result.seconds for result in results),
        bytes_per_object=max(result.bytes for result in results) * len(results) / objects,
    )


def bytes_needed(survey: Survey, probe: Probe | None) -> int:
    """Disk space for what is missing: from measured tiles, else the most it can be."""
    most = survey.objects_to_write * survey.shards.most_bytes
    if probe is None:
        return most
    expected = probe.bytes_per_object * survey.objects_to_write * DISK_MARGIN
    return min(most, math.ceil(expected))


def bytes_free(folder: Path) -> int:
    """Free space on the disk that holds ``folder`` or will hold it."""
    place = folder.absolute()
    while not place.exists():
        place = place.parent
    return shutil.disk_usage(place).free


def refuse_if_too_large(survey: Survey, shelf_folder: Path, compute: ComputeBlock) -> None:
    """Refuse a sweep that the disk will not hold.

    The bound that needs no computing comes first, so that most runs compute no tile twice.

    Raises
    ------
    ResourceError
        When what is missing needs more than what is free.
    """
    free = bytes_free(shelf_folder)
    if not survey.pending.size or bytes_needed(survey, None) <= free:
        return
    needed = bytes_needed(survey, probe_tiles(survey, compute))
    if needed > free:
        raise ResourceError(
            f"storing {survey.config.title!r} on the disk of {shelf_folder}: it needs about "
            f"{_gigabytes(needed)} (from measured tiles), {_gigabytes(free)} are free",
            where=[str(shelf_folder)],
            remedy="free some space, put the shelf on another disk, or thin out an axis",
        )


def _expected_seconds(
    survey: Survey, probe: Probe | None, workers: int, *, measured: bool
) -> float | None:
    if probe is None:
        return 0.0 if measured else None
    at_once = min(workers, survey.pending.size, int(joblib.cpu_count()))
    return probe.seconds / probe.nodes * survey.pending_nodes / at_once


def _axis_json(grid: Grid, name: str) -> dict[str, Any]:
    axis = grid.axis(name)
    first, last = float(axis.coordinates[0]), float(axis.coordinates[-1])
    return {
        "name": name,
        "sets": list(axis.sets),
        "role": axis.role,
        "nodes": len(axis),
        "unit": axis.unit,
        "first": axis.labels[0] if axis.labels else first,
        "last": axis.labels[-1] if axis.labels else last,
        "nominal": axis.labels[axis.nominal]
        if axis.labels
        else float(axis.coordinates[axis.nominal]),
    }


def _gigabytes(count: int) -> str:
    return f"{count / 1e9:,.2f} GB"
