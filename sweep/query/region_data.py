"""Every design with its worst case as a labelled dataset, for a notebook."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from sweep.query.derived import spec_of
from sweep.query.extremes import Extreme
from sweep.query.requirement import requirement_name
from sweep.query.worst import WorstCases

if TYPE_CHECKING:
    import xarray

    from sweep.store.atlas import StoredAtlas

_VERDICT = {
    "long_name": "verdict on the requirement over the whole box",
    "flag_values": [1, 0, -1, -2],
    "flag_meanings": "meets fails unknown excluded",
}


def worst_dataset(cases: WorstCases, stored: StoredAtlas) -> xarray.Dataset:
    """The verdict, the worst values and their places over the design axes.

    Axes that the question fixed are scalar coordinates.
    """
    import xarray

    scope = cases.scope
    kept = [axis for axis in scope.free if scope.grid.axes[axis].name not in scope.at]
    dims = tuple(scope.grid.axes[axis].name for axis in kept)
    shape = tuple(len(scope.spans[axis]) for axis in kept)
    variables: dict[str, Any] = {
        "verdict": (dims, cases.verdict.reshape(shape), _VERDICT),
        "unknown": (dims, cases.found.unknown.reshape(shape), {"long_name": "unknown nodes"}),
    }
    named = _names(list(cases.found.worst))
    for extreme, name in named.items():
        spec = spec_of(extreme.quantity)
        attributes = {"units": spec.unit, "long_name": f"worst {spec.long_name}"}
        worst = cases.found.worst[extreme].reshape(shape)
        variables[name] = (dims, worst, attributes)
        for place, values in _places(cases, extreme).items():
            variables[f"{name}_at_{place}"] = (dims, values.reshape(shape))
    coordinates: dict[str, Any] = dict(scope.at)
    for axis in kept:
        one = scope.grid.axes[axis]
        picked = scope.spans[axis]
        values = np.array(one.labels)[picked] if one.labels else one.coordinates[picked]
        coordinates[one.name] = (one.name, values, {"units": "" if one.labels else one.unit})
    required = ", ".join(f"{requirement_name(r)} {r.limit:g}" for r in cases.requirements)
    attributes = {"title": stored.title, "atlas_id": stored.atlas_id, "requirements": required}
    return xarray.Dataset(variables, coordinates, attributes)


def _names(extremes: list[Extreme]) -> dict[Extreme, str]:
    """Variable names: the quantity, and its sense as well where both ends of it are required."""
    quantities = [item.quantity for item in extremes]
    return {
        item: item.quantity
        if quantities.count(item.quantity) == 1
        else f"{item.sense}_{item.quantity}"
        for item in extremes
    }


def _places(cases: WorstCases, extreme: Extreme) -> dict[str, NDArray[Any]]:
    """Where each design is at its worst, by axis: coordinates, or labels of rows."""
    scope = cases.scope
    places = np.unravel_index(cases.found.which[extreme], scope.box_shape) if scope.box else ()
    nodes = {axis: scope.spans[axis][place] for axis, place in zip(scope.box, places, strict=True)}
    nodes |= {axis: moved[extreme] for axis, moved in cases.moved.items()}
    found = {}
    for axis in sorted(nodes):
        one = scope.grid.axes[axis]
        values = np.array(one.labels) if one.labels is not None else one.coordinates
        found[one.name] = values[nodes[axis]]
    return found
