"""What stands where in an atlas: its coordinates and attributes, as plain data without zarr.

`atlas_variables` and `atlas_attributes` are the whole of what an atlas holds besides its measures.
`sweep.store.reading` is their inverse for an atlas that may come from anywhere.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sweep.config import Config, cases_to_json, designs_to_json
from sweep.grid import Axis, FixedParameter, Grid
from sweep.identity import PROGRAM_VERSION, atlas_id, physics_id, structure_to_json
from sweep.vocabulary import (
    CONTROLLERS,
    HOLDS,
    PLANTS,
    SAMPLE_RATE,
    LoopStructure,
    MeasureSpec,
    ParameterSpec,
    coordinate_name,
)

STORE_VERSION = 1
"""Raised whenever an older program would misread a newer atlas."""
SUFFIX = ".zarr"
"""Of an atlas's folder."""
SHORT_ID = 8
"""Digits of the atlas id in the name of its folder."""

Attributes = dict[str, Any]


@dataclass(frozen=True, eq=False)
class Variable:
    """One coordinate of an atlas as it is stored."""

    name: str
    """Name of the array."""
    dims: tuple[str, ...]
    """Names of its dimensions; none for a scalar."""
    values: NDArray[Any]
    """Float64; int64 on a row axis; texts for labels."""
    attributes: Attributes = field(default_factory=dict)
    """JSON-clean."""


def atlas_variables(structure: LoopStructure, grid: Grid) -> list[Variable]:
    """Every coordinate of an atlas: axes first, then what rows set, then what is fixed."""
    names = parameter_names(grid)
    specs = structure.parameters()
    variables = [_axis_variable(axis) for axis in grid.axes]
    for axis in grid.axes:
        if axis.labels is not None:
            variables.append(_label_variable(axis, axis.labels))
            variables += [_column_variable(axis, names[p], p, specs[p]) for p in axis.sets]
    variables += [_fixed_variable(fixed, names[fixed.path]) for fixed in grid.fixed]
    return variables + _sample_rate(grid, variables)


def parameter_names(grid: Grid) -> dict[str, str]:
    """The stored name of every parameter that is no axis of its own, by dotted path.

    As an axis of that parameter would be called, unless a freely named axis took the name; then
    the dotted path, which no axis can be called.
    """
    paths = grid.paths()
    taken = {*grid.names, *(label_name(axis) for axis in grid.axes if axis.is_row_axis)}
    free = [f.path for f in grid.fixed]
    free += [path for axis in grid.axes if axis.is_row_axis for path in axis.sets]
    names = {path: coordinate_name(path, paths) for path in free}
    return {path: path if name in taken else name for path, name in names.items()}


def label_name(axis: Axis) -> str:
    """Name of the coordinate that holds a row axis's labels."""
    return f"{axis.name}_label"


def atlas_attributes(
    config: Config, tile_shape: tuple[int, ...], program_version: str = PROGRAM_VERSION
) -> Attributes:
    """The attributes of the group: everything that is no coordinate and no measure."""
    grid, structure = config.grid, config.structure
    coordinates = [v.name for v in atlas_variables(structure, grid) if v.name not in grid.names]
    return {
        "title": config.title,
        "atlas_id": atlas_id(structure, grid),
        "physics_id": physics_id(structure),
        "structure": structure_to_json(structure),
        "axes": list(grid.names),
        "fixed": [fixed.path for fixed in grid.fixed],
        "tile_shape": list(tile_shape),
        "designs": designs_to_json(config.designs),
        "cases": cases_to_json(config.cases),
        "output_unit": config.output_unit,
        "input_unit": config.input_unit,
        "config": config.document,
        "physics_version": physics_version(structure),
        "store_version": STORE_VERSION,
        "program_version": program_version,
        # How CF conventions, and with them xarray, tell a coordinate from a data variable.
        "coordinates": " ".join(coordinates),
    }


def physics_version(structure: LoopStructure) -> dict[str, int]:
    """Physics version of each kind that the loop is made of."""
    return {
        "plant": PLANTS[structure.plant].version,
        "controller": CONTROLLERS[structure.controller].version,
        "hold": HOLDS[structure.hold].version,
    }


def measure_attributes(spec: MeasureSpec) -> Attributes:
    """The attributes of one measure's array."""
    return {"units": spec.unit, "long_name": spec.long_name, "version": spec.version}


def slug(title: str) -> str:
    """A title as a folder name: small Latin letters, digits and hyphens, at most 40.

    >>> slug("Pan head, on a mást!"), slug("云台")
    ('pan-head-on-a-mast', 'atlas')
    """
    plain = unicodedata.normalize("NFKD", title).encode("ascii", "ignore").decode().lower()
    return re.sub(r"[^a-z0-9]+", "-", plain)[:40].strip("-") or "atlas"


def folder_name(title: str, identity: str, digits: int = SHORT_ID) -> str:
    """Name of an atlas's folder on the shelf.

    >>> folder_name("Pan head", "0123456789abcdef")
    'pan-head-01234567.zarr'
    """
    return f"{slug(title)}-{identity[:digits]}{SUFFIX}"


def _axis_variable(axis: Axis) -> Variable:
    values = axis.coordinates.astype(np.int64 if axis.is_row_axis else np.float64)
    attributes = {
        "units": axis.unit,
        "long_name": axis.long_name or axis.name,
        "role": axis.role,
        "sets": list(axis.sets) if axis.is_row_axis else axis.sets[0],
        "nominal": values[axis.nominal].item(),
        "display_unit": axis.display_unit or axis.unit,
    }
    if axis.is_row_axis:
        attributes["ordered"] = axis.ordered
    return Variable(axis.name, (axis.name,), values, attributes)


def _label_variable(axis: Axis, labels: Iterable[str]) -> Variable:
    texts = np.array(list(labels), dtype=np.dtypes.StringDType())
    attributes = {"long_name": f"label of each row of {axis.name}"}
    return Variable(label_name(axis), (axis.name,), texts, attributes)


def _column_variable(axis: Axis, name: str, path: str, spec: ParameterSpec) -> Variable:
    unit = axis.column_units.get(path, spec.unit)
    attributes = _parameter_attributes(path, unit, spec.long_name, spec.display_unit)
    return Variable(name, (axis.name,), axis.columns[path].astype(np.float64), attributes)


def _fixed_variable(fixed: FixedParameter, name: str) -> Variable:
    attributes = _parameter_attributes(fixed.path, fixed.unit, fixed.long_name, fixed.display_unit)
    return Variable(name, (), np.array(fixed.value, np.float64), attributes)


def _parameter_attributes(path: str, unit: str, long_name: str, display_unit: str) -> Attributes:
    return {
        "units": unit,
        "long_name": long_name or path,
        "sets": path,
        "display_unit": display_unit or unit,
    }


def _sample_rate(grid: Grid, variables: list[Variable]) -> list[Variable]:
    """1/T beside the sample period, whether that is swept, set by rows or fixed."""
    name = SAMPLE_RATE.name
    if name in {variable.name for variable in variables} | set(grid.names):
        return []
    attributes = {
        "units": SAMPLE_RATE.unit,
        "long_name": SAMPLE_RATE.long_name,
        "derived_from": "sample_period",
    }
    return [
        Variable(name, variable.dims, np.asarray(1.0 / variable.values), attributes)
        for variable in variables
        if variable.attributes.get("sets") == "sample_period"
    ]
