"""Which fields decide a sweep's numbers: canonical texts and fingerprints.

`physics_id` covers the loop's structure, `atlas_id` that and every number. Titles, labels, roles,
nominals, designs, cases and measures are in neither, so that changing them recomputes nothing.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from sweep.errors import DamagedAtlas
from sweep.grid import Axis, Grid
from sweep.vocabulary import CONTROLLERS, HOLDS, PLANTS, LoopStructure

PROGRAM_VERSION: Final = "0.1.0"
"""Version of the program, as in pyproject.toml."""

_DEFAULTS: Final = LoopStructure(plant="", controller="")


def canonical_text(value: object) -> str:
    """Write a value as the one text that stands for it.

    UTF-8 JSON with sorted keys and no spaces; floats as ``float.hex()``, so that the text says
    their bits, and minus zero as zero.

    Raises
    ------
    ValueError
        For a float that is not finite.
    TypeError
        For a value that JSON does not know.

    Examples
    --------
    >>> canonical_text({"b": 0.5, "a": [1, "x"]})
    '{"a":[1,"x"],"b":"0x1.0000000000000p-1"}'
    """
    return json.dumps(_plain(value), sort_keys=True, ensure_ascii=False, separators=(",", ":"))


def _plain(value: object) -> object:
    match value:
        case np.ndarray():
            return [_plain(item) for item in value.tolist()]
        case Mapping():
            return {str(key): _plain(item) for key, item in value.items()}
        case list() | tuple():
            return [_plain(item) for item in value]
        case float():
            if not np.isfinite(value):
                raise ValueError(f"{value} is no number that a sweep can rest on")
            return (float(value) + 0.0).hex()
        case _:
            return value


def _digest(value: object) -> str:
    return hashlib.sha256(canonical_text(value).encode()).hexdigest()


def structure_to_json(structure: LoopStructure) -> dict[str, Any]:
    """Write a structure as JSON values; options at their default are left out."""
    data: dict[str, Any] = {"plant": structure.plant, "controller": structure.controller}
    if structure.integral != _DEFAULTS.integral:
        data["integral"] = structure.integral
    if structure.has_code_period:
        data["has_code_period"] = True
    if structure.delay_parts:
        data["delay_parts"] = [list(part) for part in structure.delay_parts]
    if structure.hold != _DEFAULTS.hold:
        data["hold"] = structure.hold
    return data


def structure_from_json(data: object) -> LoopStructure:
    """Read a structure from JSON values that anybody may have written.

    Raises
    ------
    DamagedAtlas
        When they are not what `structure_to_json` writes.
    """
    if not isinstance(data, Mapping):
        raise _damaged("it is not an object")
    unknown = data.keys() - set(LoopStructure.__dataclass_fields__)
    if unknown:
        raise _damaged(f"unknown keys {sorted(map(str, unknown))[:5]}")
    _check_choice(data, "plant", PLANTS)
    _check_choice(data, "controller", CONTROLLERS)
    _check_choice(data, "hold", HOLDS)
    _check_choice(data, "integral", _integral_rules(data["controller"]))
    if not isinstance(data.get("has_code_period", False), bool):
        raise _damaged("has_code_period is neither true nor false")
    parts = data.get("delay_parts", [])
    if not isinstance(parts, list | tuple) or not all(map(_is_delay_part, parts)):
        raise _damaged("delay_parts are not pairs of a name and a unit")
    names = [name for name, _ in parts]
    if names != sorted(set(names)):
        raise _damaged("delay_parts are not sorted by name")
    return LoopStructure(**{**data, "delay_parts": tuple((name, unit) for name, unit in parts)})


def _integral_rules(controller: str) -> tuple[str, ...]:
    options = dict(CONTROLLERS[controller].options)
    return options.get("integral", (_DEFAULTS.integral,))


def _check_choice(
    data: Mapping[str, Any], key: str, choices: Mapping[str, Any] | tuple[str, ...]
) -> None:
    value = data.get(key, getattr(_DEFAULTS, key))
    if not isinstance(value, str) or value not in choices:
        raise _damaged(f"{key} is {str(value)[:60]!r}, not one of {', '.join(choices)}")


def _is_delay_part(part: object) -> bool:
    if not isinstance(part, list | tuple) or len(part) != 2:
        return False
    name, unit = part
    return isinstance(name, str) and 0 < len(name) <= 40 and unit in ("s", "samples")


def _damaged(reason: str) -> DamagedAtlas:
    return DamagedAtlas(
        f"the loop's structure stored in the atlas cannot be read: {reason}",
        where=["structure"],
        remedy="use a program version that knows it, or run the atlas' config again",
    )


def physics_id(structure: LoopStructure) -> str:
    """Fingerprint of the formulas: kinds, their physics versions and formula options.

    Returns
    -------
    64 hexadecimal digits.
    """
    data = structure_to_json(structure)
    data["plant"] = [structure.plant, PLANTS[structure.plant].version]
    data["controller"] = [structure.controller, CONTROLLERS[structure.controller].version]
    hold_version = HOLDS[structure.hold].version
    if "hold" in data or hold_version != 1:
        data["hold"] = [structure.hold, hold_version]
    return _digest(data)


def atlas_id(structure: LoopStructure, grid: Grid) -> str:
    """Fingerprint of a sweep: its formulas and every number, fixed or swept.

    Returns
    -------
    64 hexadecimal digits.
    """
    return _digest(
        {
            "physics_id": physics_id(structure),
            "axes": [_axis_numbers(axis) for axis in grid.axes],
            "fixed": {fixed.path: float(fixed.value) for fixed in grid.fixed},
        }
    )


def _axis_numbers(axis: Axis) -> dict[str, Any]:
    data: dict[str, Any] = {"name": axis.name, "sets": axis.sets}
    if axis.is_row_axis:
        return {**data, "columns": dict(axis.columns)}
    return {**data, "coordinates": axis.coordinates}
