"""An atlas's metadata read back, as untrusted input: everything is checked and nothing executed.

A mismatch raises `ValueError` with what was expected and found; `sweep.store.atlas.open_stored`
turns it into a `DamagedAtlas` that names the atlas and the remedy.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from sweep.config import Case, Design, cases_from_json, designs_from_json
from sweep.grid import Axis, FixedParameter, Grid, Tiling
from sweep.identity import atlas_id, physics_id, structure_from_json
from sweep.store.arrays import INNER_CODECS
from sweep.store.layout import atlas_variables, label_name, parameter_names
from sweep.store.shards import ShardFormat
from sweep.store.tiles import check_tile_shape
from sweep.vocabulary import ALWAYS_COMPUTED, LoopStructure, MeasureSpec, ParameterSpec

Arrays = Mapping[str, "zarr.Array[Any]"]

MOST_NODES_ON_AN_AXIS = 10**6
"""As in a config; read before any coordinate is, so that no array is too large to hold."""
MOST_AXES = 32
"""zarr and numpy address no more dimensions."""


@dataclass(frozen=True, eq=False)
class AtlasContents:
    """What an atlas says about itself, checked."""

    title: str
    """The config's title."""
    atlas_id: str
    """SHA-256 of the loop's structure, coordinates and fixed parameters."""
    physics_id: str
    """SHA-256 of the loop's structure."""
    structure: LoopStructure
    """The loop's kinds and formula options."""
    grid: Grid
    """Axes and fixed parameters, rebuilt from the stored coordinates."""
    designs: tuple[Design, ...]
    """Named sets of design-axis values."""
    cases: tuple[Case, ...]
    """Named tolerance boxes with their requirements."""
    measures: tuple[MeasureSpec, ...]
    """What is stored at every node."""
    shards: ShardFormat
    """Shape of tiles and of the chunks in them."""
    output_unit: str
    """Unit of the plant's output; empty when the config gave none."""
    input_unit: str
    """Unit of the plant's input; empty when the config gave none."""
    document: str
    """Canonical text of the config that made the atlas."""
    program_version: str
    """Version of the program that made it."""

    @property
    def tiling(self) -> Tiling:
        """The partition of the grid into tiles."""
        return Tiling(self.grid.shape, self.shards.tile_shape)


def read_contents(attributes: Mapping[str, Any], arrays: Arrays) -> AtlasContents:
    """Rebuild what an atlas holds from its attributes and coordinate arrays.

    Raises
    ------
    ValueError
        When anything is missing, of a wrong type or shape, or at odds with the stored ids.
    """
    structure = structure_from_json(_entry(attributes, "structure", dict))
    grid = _read_grid(attributes, arrays, structure)
    _check_ids(attributes, structure, grid)
    shards, measures = _read_measures(attributes, arrays, structure, grid)
    return AtlasContents(
        title=_text(attributes, "title"),
        atlas_id=_text(attributes, "atlas_id"),
        physics_id=_text(attributes, "physics_id"),
        structure=structure,
        grid=grid,
        designs=designs_from_json(_entry(attributes, "designs", list)),
        cases=cases_from_json(_entry(attributes, "cases", list)),
        measures=measures,
        shards=shards,
        output_unit=_text(attributes, "output_unit"),
        input_unit=_text(attributes, "input_unit"),
        document=_text(attributes, "config"),
        program_version=_text(attributes, "program_version"),
    )


def _check_ids(attributes: Mapping[str, Any], structure: LoopStructure, grid: Grid) -> None:
    for name, expected in (
        ("physics_id", physics_id(structure)),
        ("atlas_id", atlas_id(structure, grid)),
    ):
        found = _text(attributes, name)
        _expect(
            found == expected,
            f"{name} is {found[:16]}… but the stored structure and coordinates give "
            f"{expected[:16]}…",
        )


def _read_grid(attributes: Mapping[str, Any], arrays: Arrays, structure: LoopStructure) -> Grid:
    specs = structure.parameters()
    names = _texts(attributes, "axes")
    _expect(0 < len(names) <= MOST_AXES, f"attribute axes names {len(names)} axes")
    bare = [_read_axis(name, _array(arrays, name), specs) for name in names]
    fixed = [FixedParameter(path, math.nan) for path in _texts(attributes, "fixed")]
    stored = parameter_names(Grid(tuple(bare), tuple(fixed)))
    axes = [_read_rows(axis, arrays, stored, specs) if axis.is_row_axis else axis for axis in bare]
    read = [_read_fixed(f.path, _array(arrays, stored[f.path]), specs) for f in fixed]
    grid = Grid(tuple(axes), tuple(read))
    _expect(
        sorted(grid.paths()) == sorted(specs),
        f"the stored parameters are {sorted(grid.paths())}; the loop has {sorted(specs)}",
    )
    return grid


def _read_axis(name: str, array: zarr.Array[Any], specs: Mapping[str, ParameterSpec]) -> Axis:
    """An axis without its rows: labels are placeholders until `_read_rows`."""
    facts: Mapping[str, Any] = array.attrs.asdict()
    is_row_axis = isinstance(facts.get("sets"), list)
    sets = _texts(facts, "sets") if is_row_axis else (_text(facts, "sets"),)
    values = _coordinates(name, array, (name,), np.int64 if is_row_axis else np.float64)
    _expect(bool(sets) and all(path in specs for path in sets), f"{name} sets unknown {sets}")
    _expect(bool(np.all(np.diff(values) > 0)), f"coordinates of {name} do not increase")
    _expect(_text(facts, "role") in {"design", "tolerance"}, f"role of {name} is unknown")
    if is_row_axis:
        _expect(
            bool(np.array_equal(values, np.arange(len(values)))), f"rows of {name} are renumbered"
        )
        _expect(isinstance(facts.get("ordered"), bool), f"ordered of {name} is no truth value")
    unit = "1" if is_row_axis else specs[sets[0]].unit
    _expect(_text(facts, "units") == unit, f"units of {name} are {facts['units']!r}, not {unit!r}")
    nominal = np.flatnonzero(values == _entry(facts, "nominal", (int, float)))
    _expect(len(nominal) == 1, f"the nominal {facts['nominal']!r} of {name} is no node")
    return Axis(
        name=name,
        sets=sets,
        coordinates=values,
        role=facts["role"],
        nominal=int(nominal[0]),
        unit=unit,
        display_unit=_text(facts, "display_unit"),
        long_name=_text(facts, "long_name"),
        labels=tuple(map(str, range(len(values)))) if is_row_axis else None,
        ordered=bool(facts.get("ordered", True)),
    )


def _read_rows(
    axis: Axis, arrays: Arrays, stored: Mapping[str, str], specs: Mapping[str, ParameterSpec]
) -> Axis:
    columns, units = {}, {}
    for path in axis.sets:
        array = _array(arrays, stored[path])
        columns[path] = _coordinates(stored[path], array, (axis.name,), np.float64, len(axis))
        units[path] = specs[path].unit
        _check_parameter(path, array, specs[path])
    labels = _labels(axis, _array(arrays, label_name(axis)))
    return Axis(
        **{**vars(axis), "labels": labels, "columns": columns, "column_units": units},
    )


def _labels(axis: Axis, array: zarr.Array[Any]) -> tuple[str, ...]:
    name = label_name(axis)
    _expect(array.shape == axis.coordinates.shape, f"{name} has shape {array.shape}")
    _check_size(name, array)
    labels = tuple(str(text) for text in np.asarray(array[...]).tolist())
    _expect(len(set(labels)) == len(labels), f"labels of {axis.name} are not unique")
    return labels


def _read_fixed(
    path: str, array: zarr.Array[Any], specs: Mapping[str, ParameterSpec]
) -> FixedParameter:
    _expect(path in specs, f"the loop has no parameter {path}")
    spec = specs[path]
    value = _coordinates(path, array, (), np.float64)
    _check_parameter(path, array, spec)
    facts = array.attrs.asdict()
    display_unit, long_name = _text(facts, "display_unit"), _text(facts, "long_name")
    return FixedParameter(path, float(value), spec.unit, display_unit, long_name)


def _check_parameter(path: str, array: zarr.Array[Any], spec: ParameterSpec) -> None:
    facts = array.attrs.asdict()
    _expect(_text(facts, "sets") == path, f"the coordinate of {path} sets {facts['sets']!r}")
    unit = _text(facts, "units")
    _expect(unit == spec.unit, f"units of {path} are {unit!r}, not {spec.unit!r}")


def _coordinates(
    name: str,
    array: zarr.Array[Any],
    dims: tuple[str, ...],
    dtype: type[np.generic],
    length: int | None = None,
) -> NDArray[np.float64]:
    _expect(array.dtype == dtype, f"{name} is stored as {array.dtype}")
    found = _dimensions(array)
    _expect(found == dims and array.ndim == len(dims), f"{name} has dimensions {found}")
    _check_size(name, array)
    _expect(length in {None, *array.shape}, f"{name} has {array.shape} values, not {length}")
    values = np.asarray(array[...], np.float64)
    _expect(bool(np.isfinite(values).all()), f"{name} holds values that are not finite")
    return values


def _check_size(name: str, array: zarr.Array[Any]) -> None:
    """Before anything is read: neither array nor chunk is larger than an axis may be."""
    nodes = math.prod(array.shape)
    _expect(0 < nodes <= MOST_NODES_ON_AN_AXIS, f"{name} has {nodes} values")
    _expect(array.chunks == array.shape, f"{name} is cut into chunks of {array.chunks}")


def _read_measures(
    attributes: Mapping[str, Any], arrays: Arrays, structure: LoopStructure, grid: Grid
) -> tuple[ShardFormat, tuple[MeasureSpec, ...]]:
    coordinates = {variable.name for variable in atlas_variables(structure, grid)}
    found = {name: array for name, array in arrays.items() if name not in coordinates}
    missing = [name for name in ALWAYS_COMPUTED if name not in found]
    _expect(not missing, f"the measures {missing} are missing")
    tile_shape = _tile_shape(attributes, grid)
    shards = ShardFormat(tile_shape, tuple(found[ALWAYS_COMPUTED[0]].chunks))
    order = sorted(found, key=lambda name: (name not in ALWAYS_COMPUTED, name))
    return shards, tuple(_read_measure(name, found[name], grid, shards) for name in order)


def _tile_shape(attributes: Mapping[str, Any], grid: Grid) -> tuple[int, ...]:
    shape = _entry(attributes, "tile_shape", list)
    _expect(all(type(edge) is int for edge in shape), f"the tile shape is {shape!r}")
    check_tile_shape(tuple(shape), grid)
    return tuple(shape)


def _read_measure(
    name: str, array: zarr.Array[Any], grid: Grid, shards: ShardFormat
) -> MeasureSpec:
    facts: Mapping[str, Any] = array.attrs.asdict()
    stored: Mapping[str, Any] = array.metadata.to_dict()
    codecs = _inner_codecs(stored)
    _expect(array.dtype == np.float32, f"{name} is stored as {array.dtype}, not float32")
    _expect(array.shape == grid.shape, f"{name} has shape {array.shape}, the axes {grid.shape}")
    dims = _dimensions(array)
    _expect(dims == grid.names, f"{name} has dimensions {dims}, the axes are {grid.names}")
    _expect(array.shards == shards.tile_shape, f"{name} has tiles of {array.shards}")
    _expect(array.chunks == shards.chunk_shape, f"{name} has chunks of {array.chunks}")
    _expect(codecs == INNER_CODECS, f"{name} is coded by {codecs}")
    separator = stored["chunk_key_encoding"]["configuration"]["separator"]
    _expect(separator == ".", f"objects of {name} are named with {separator!r}")
    version = _entry(facts, "version", int)
    return MeasureSpec(name, _text(facts, "units"), _text(facts, "long_name"), version)


def _dimensions(array: zarr.Array[Any]) -> tuple[Any, ...]:
    stored: Mapping[str, Any] = array.metadata.to_dict()
    return tuple(stored.get("dimension_names") or ())


def _inner_codecs(stored: Mapping[str, Any]) -> tuple[str, ...]:
    (sharding,) = stored["codecs"]
    return tuple(codec["name"] for codec in sharding["configuration"]["codecs"])


def _array(arrays: Arrays, name: str) -> zarr.Array[Any]:
    _expect(name in arrays, f"the array {name} is missing")
    return arrays[name]


def _entry(mapping: Mapping[str, Any], key: str, kind: type | tuple[type, ...]) -> Any:  # noqa: ANN401
    value = mapping.get(key)
    _expect(
        isinstance(value, kind) and not isinstance(value, bool),
        f"attribute {key} is {str(value)[:60]!r}",
    )
    return value


def _text(mapping: Mapping[str, Any], key: str) -> str:
    return str(_entry(mapping, key, str))


def _texts(mapping: Mapping[str, Any], key: str) -> tuple[str, ...]:
    values = _entry(mapping, key, list)
    _expect(all(isinstance(value, str) for value in values), f"attribute {key} holds no texts")
    _expect(len(set(values)) == len(values), f"attribute {key} repeats itself")
    return tuple(values)


def _expect(holds: bool, found: str) -> None:
    if not holds:
        raise ValueError(found)
