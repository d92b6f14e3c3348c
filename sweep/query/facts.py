"""What an atlas says about itself: loop, delay budget, axes, measures, completeness, origin."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from sweep.config import Case, Design, cases_to_json, designs_to_json
from sweep.grid import Axis, Grid
from sweep.query.answers import plain
from sweep.query.cautions import CAUTIONS
from sweep.query.select import value_at
from sweep.vocabulary import CONTROLLERS, PLANTS, LoopStructure

if TYPE_CHECKING:
    from sweep.store.atlas import StoredAtlas


@dataclass(frozen=True)
class DelayPart:
    """One part of the delay from the sampling instant to the change of the output."""

    name: str
    """Of the part."""
    unit: str
    """``s`` or ``samples``."""
    low: float
    """Smallest value in the atlas."""
    high: float
    """Largest value in the atlas; equal to ``low`` when it is fixed."""
    nominal: float
    """Value at the nominal nodes."""


@dataclass(frozen=True)
class MeasureFacts:
    """One stored measure."""

    name: str
    """Of the variable."""
    unit: str
    """Its unit."""
    long_name: str
    """What it is."""
    version: int
    """Of its definition."""
    tiles_done: int
    """Tiles that hold it."""


@dataclass(frozen=True)
class AtlasFacts:
    """An atlas at a glance."""

    path: str
    """Where it lies."""
    title: str
    """What the config calls it."""
    atlas_id: str
    """SHA-256 of everything that decides its numbers."""
    physics_id: str
    """SHA-256 of the loop's structure."""
    program_version: str
    """Of the program that made it."""
    structure: LoopStructure = field(repr=False)
    """The loop's kinds and formula options."""
    grid: Grid = field(repr=False, compare=False)
    """Axes and fixed parameters."""
    delay: tuple[DelayPart, ...]
    """The delay's parts; the hold's own half sample is not one of them."""
    nominal_delay_samples: float
    """Their sum at the nominal nodes, in samples."""
    nominal_period_s: float
    """Sample period at the nominal nodes, s."""
    measures: tuple[MeasureFacts, ...]
    """What is stored."""
    tiles: int
    """In all."""
    tiles_done: int
    """Tiles that hold every measure."""
    tile_shape: tuple[int, ...]
    """Nodes of a tile along each axis."""
    designs: tuple[Design, ...]
    """Named designs with their values."""
    cases: tuple[Case, ...]
    """Named cases with their tolerances and requirements."""

    def to_json(self) -> dict[str, Any]:
        """The document that programs rely on."""
        names = ("atlas_id", "physics_id", "title", "program_version", "tiles", "tiles_done")
        document: dict[str, Any] = {"atlas": self.path}
        document |= {name: getattr(self, name) for name in names}
        document |= {
            "nodes": self.grid.size,
            "tile_shape": self.tile_shape,
            "loop": {
                "plant": self.structure.plant,
                "controller": self.structure.controller,
                "integral": self.structure.integral,
                "hold": self.structure.hold,
                "has_code_period": self.structure.has_code_period,
            },
            "delay": [vars(part) for part in self.delay],
            "nominal_delay_samples": self.nominal_delay_samples,
            "nominal_period_s": self.nominal_period_s,
            "axes": [_axis_document(axis) for axis in self.grid.axes],
            "fixed": {item.path: item.value for item in self.grid.fixed},
            "measures": [vars(measure) for measure in self.measures],
            "designs": designs_to_json(self.designs),
            "cases": cases_to_json(self.cases),
            "cautions": {code: caution.long for code, caution in CAUTIONS.items()},
        }
        found: dict[str, Any] = plain(document)
        return found

    @property
    def formulas(self) -> tuple[str, str]:
        """The plant's formula and the controller's."""
        return PLANTS[self.structure.plant].formula, CONTROLLERS[self.structure.controller].formula


def read_facts(stored: StoredAtlas) -> AtlasFacts:
    """Gather what an atlas says about itself; reads names of objects and no values."""
    nominal = nominal_parameters(stored.grid)
    measures = tuple(
        MeasureFacts(m.name, m.unit, m.long_name, m.version, len(stored.done_tiles(m.name)))
        for m in stored.measures
    )
    return AtlasFacts(
        path=str(stored.path),
        title=stored.title,
        atlas_id=stored.atlas_id,
        physics_id=stored.physics_id,
        program_version=stored.program_version,
        structure=stored.structure,
        grid=stored.grid,
        delay=tuple(
            _delay_part(stored.grid, name, unit, nominal)
            for name, unit in stored.structure.delay_parts
        ),
        nominal_delay_samples=delay_in_samples(stored.structure, nominal),
        nominal_period_s=nominal["sample_period"],
        measures=measures,
        tiles=len(stored.tiling),
        tiles_done=int(np.count_nonzero(stored.tiles_done())),
        tile_shape=stored.tiling.tile_shape,
        designs=stored.designs,
        cases=stored.cases,
    )


def nominal_parameters(grid: Grid) -> dict[str, float]:
    """Every parameter by dotted path at the nominal node of every axis, in its stored unit."""
    block = tuple(slice(axis.nominal, axis.nominal + 1) for axis in grid.axes)
    return {path: float(v.reshape(-1)[0]) for path, v in grid.parameters(block).items()}


def _axis_document(axis: Axis) -> dict[str, Any]:
    return {
        "name": axis.name,
        "sets": axis.sets,
        "role": axis.role,
        "unit": axis.unit,
        "nodes": len(axis),
        "low": value_at(axis, 0),
        "high": value_at(axis, len(axis) - 1),
        "nominal": value_at(axis, axis.nominal),
        "rows": axis.labels,
    }


def _delay_part(grid: Grid, name: str, unit: str, nominal: Mapping[str, float]) -> DelayPart:
    path = f"delay.{name}"
    values = [axis.values_of(path) for axis in grid.axes if path in axis.sets]
    low, high = (values[0].min(), values[0].max()) if values else (nominal[path], nominal[path])
    return DelayPart(name, unit, float(low), float(high), nominal[path])


def delay_in_samples(structure: LoopStructure, values: Mapping[str, float]) -> float:
    """The sum of the delay's parts in samples; within 1e-12 of a whole number it is that number.

    Parameters
    ----------
    structure
        Names the parts, each with its unit.
    values
        Every parameter of one node by dotted path, in its stored unit.
    """
    period_s = values["sample_period"]
    parts = {"samples": 0.0, "s": 0.0}
    for name, unit in structure.delay_parts:
        parts[unit] += values[f"delay.{name}"]
    total = parts["samples"] + parts["s"] / period_s
    whole = float(round(total))
    return whole if math.isclose(total, whole, rel_tol=0.0, abs_tol=1e-12) else total
