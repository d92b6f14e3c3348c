"""Small atlases of the demo configs, read by plain xarray in a process without the package."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from checks_atlas import sweep_atlas

CONFIGS = Path(__file__).parents[1] / "configs"

# For each demo, the lines that count nodes and what stands there instead; all else stays.
SMALLER = {
    "first-look": [
        ('step = "0.25 ms"', 'step = "0.5 ms"'),
        ("step = 0.02", "step = 0.1"),
        ('step = "0.5 ms"\n\n[axes.damping]', 'step = "1 ms"\n\n[axes.damping]'),
    ],
    "lc-filter": [('step = "0.5 kHz"', 'step = "4 kHz"'), ("step = 0.01", "step = 0.1")],
    "overnight": [
        ("count = 198", "count = 5"),
        ("step = 0.01", "step = 0.2"),
        ('step = "0.25 ms"', 'step = "5 ms"'),
        ('step = "0.1 samples"', 'step = "0.3 samples"'),
    ],
}

READER = """
import json, math, sys
sys.modules["sweep"] = None                  # an import of the package is an ImportError from here
import numpy as np
import xarray

found = xarray.open_zarr(sys.argv[1])
at = json.loads(sys.argv[2])

def plain(value):
    return value.tolist() if hasattr(value, "tolist") else value

print(json.dumps({
    "dims": {str(name): size for name, size in found.sizes.items()},
    "variables": {
        name: {"dims": list(item.dims), "dtype": str(item.dtype), "attrs": sorted(item.attrs),
               "units": item.attrs.get("units"), "unknown": int(np.isnan(item).sum())}
        for name, item in found.data_vars.items()
    },
    "coords": {
        name: {"dims": list(item.dims), "values": plain(item.values),
               "attrs": {key: plain(value) for key, value in item.attrs.items()}}
        for name, item in found.coords.items()
    },
    "attrs": sorted(found.attrs),
    "title": found.attrs["title"],
    "values": [float(found["log_radius"].isel(place)) for place in at],
}))
"""


def small_config(name: str) -> str:
    text = (CONFIGS / f"{name}.toml").read_text(encoding="utf-8")
    for old, new in SMALLER[name]:
        assert text.count(old) == 1, (name, old, text.count(old))
        text = text.replace(old, new)
    return text


@pytest.fixture(scope="module", params=sorted(SMALLER))
def demo(request, tmp_path_factory):
    """(name, atlas, what a process with nothing but xarray reads of it, places it read)."""
    folder = tmp_path_factory.mktemp(request.param)
    for table in CONFIGS.glob("*.csv"):
        shutil.copy(table, folder)
    atlas = sweep_atlas(small_config(request.param), folder)
    shape = atlas.grid.shape
    rng = np.random.default_rng(1)
    places = [
        {axis.name: int(rng.integers(n)) for axis, n in zip(atlas.grid.axes, shape, strict=True)}
        for _ in range(20)
    ]
    run = subprocess.run(
        [sys.executable, "-W", "error", "-c", READER, str(atlas.stored.path), json.dumps(places)],
        capture_output=True,
        text=True,
        cwd=folder,
    )
    assert run.returncode == 0, run.stderr
    assert run.stderr == ""
    return request.param, atlas, json.loads(run.stdout), places


def test_every_demo_config_is_tried():
    assert sorted(SMALLER) == sorted(path.stem for path in CONFIGS.glob("*.toml"))


def test_plain_xarray_reads_every_measure_complete_and_with_its_unit(demo):
    _, atlas, read, _ = demo
    assert read["title"] == atlas.title
    assert sorted(read["variables"]) == ["log_radius", "mode_angle"]
    assert read["variables"]["log_radius"]["units"] == "1"
    assert read["variables"]["mode_angle"]["units"] == "rad"
    for variable in read["variables"].values():
        assert variable["dims"] == list(atlas.grid.names)
        assert variable["dtype"] == "float32"
        assert variable["unknown"] == 0
        assert {"units", "long_name", "version"} <= set(variable["attrs"])
    assert read["dims"] == dict(zip(atlas.grid.names, atlas.grid.shape, strict=True))


def test_the_values_that_plain_xarray_reads_are_those_of_the_questions(demo):
    _, atlas, read, places = demo
    for place, value in zip(places, read["values"], strict=True):
        asked = {}
        for axis in atlas.grid.axes:
            node = place[axis.name]
            asked[axis.name] = axis.labels[node] if axis.labels else float(axis.coordinates[node])
        assert atlas.point(asked).measures["log_radius"] == value


def test_every_axis_has_its_coordinate_unit_role_and_parameter(demo):
    _, atlas, read, _ = demo
    for axis in atlas.grid.axes:
        found = read["coords"][axis.name]
        assert found["dims"] == [axis.name]
        assert found["values"] == axis.coordinates.tolist()
        wanted = {"units", "long_name", "role", "sets", "nominal", "display_unit"}
        assert wanted - {"units"} <= set(found["attrs"])
        assert found["attrs"]["role"] == axis.role


def test_fixed_parameters_rows_and_delay_parts_stand_beside_the_axes(demo):
    name, _, read, _ = demo
    coords = read["coords"]
    rate = np.array(coords["sample_rate"]["values"])
    assert rate * np.array(coords["sample_period"]["values"]) == pytest.approx(1)
    assert coords["update"]["values"] == 1
    assert coords["update"]["dims"] == []
    assert coords["update"]["attrs"]["units"] == "samples"
    assert coords["update"]["attrs"]["sets"] == "delay.update"
    if name == "lc-filter":
        assert coords["filter_label"]["values"] == [f"board {n}" for n in range(1, 9)]
        assert coords["natural_frequency"]["dims"] == coords["damping"]["dims"] == ["filter"]
        assert coords["natural_frequency"]["values"][2] == 1500
        assert coords["natural_frequency"]["attrs"]["units"] == "Hz"
        assert coords["damping"]["values"][3] == 0.031
        assert coords["bus_voltage"]["attrs"]["sets"] == "plant.gain"
        assert coords["bus_voltage"]["values"] == [0.9, 0.95, 1, 1.05, 1.1]
        return
    frequency = 40 if name == "first-look" else 7
    assert coords["natural_frequency"]["values"] == frequency
    assert coords["natural_frequency"]["dims"] == []
    assert coords["natural_frequency"]["attrs"]["sets"] == "plant.natural_frequency"
    assert coords["gain"]["values"] == 1
    assert coords["derivative_filter"]["values"] == 0
    part = "bus" if name == "first-look" else "transport"
    assert coords[part]["attrs"]["units"] == "samples"
    assert coords[part]["attrs"]["sets"] == f"delay.{part}"
    assert coords["kd"]["attrs"]["units"] == "s"


def test_the_attributes_name_what_decides_the_numbers_and_nobody(demo):
    _, _, read, _ = demo
    named = " ".join(read["attrs"])
    for wanted in ("atlas_id", "physics_id", "designs", "cases", "config", "version"):
        assert wanted in named
    assert not re.search("host|user|path", named)
