"""An atlas on disk: what stands in it, that plain readers open it, and that it is filled safely."""

import dataclasses
import getpass
import json
import platform
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import stand_in
import xarray as xr
import zarr

from sweep.errors import QuestionError
from sweep.store import layout
from sweep.store.atlas import create_atlas, open_stored
from sweep.store.layout import atlas_variables, parameter_names
from sweep.vocabulary import MEASURES, MeasureSpec


def filled(folder, config=None, tile_shape=stand_in.SMALL_TILE):
    config = config or stand_in.small()
    atlas = create_atlas(folder, config, tile_shape)
    for measure in config.measures:
        values = stand_in.whole(config, measure)
        for tile in atlas.tiling:
            stand_in.write_tile(atlas, tile, {measure: values[tile.block]})
    return atlas


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    """A finished small atlas that no test changes."""
    return filled(tmp_path_factory.mktemp("shelf") / "small.zarr")


PLAIN = """
import json, sys
import numpy as np
import xarray as xr
data = xr.open_zarr(sys.argv[1])
assert not any(name.partition(".")[0] == "sweep" for name in sys.modules)
assert not xr.backends.list_engines()["zarr"].__module__.startswith("sweep")
print(json.dumps({
    "variables": sorted(data.data_vars),
    "dims": {name: list(v.dims) for name, v in data.variables.items()},
    "dtypes": {name: str(v.dtype) for name, v in data.variables.items()},
    "attrs": {name: v.attrs for name, v in data.coords.items()},
    "labels": data.unit_label.values.tolist(),
    "fixed": {name: float(v) for name, v in data.coords.items() if v.ndim == 0},
    "frequencies": data.natural_frequency.values.tolist(),
    "rate_times_period": float(np.abs(data.sample_rate * data.sample_period - 1).max()),
    "sum": float(data.log_radius.astype("f8").sum()),
    "node": float(data.log_radius.sel(bus=0.25, kd=0.001).isel(sample_period=2, kp=4, unit=1)),
    "title": data.attrs["title"],
}))
"""


@pytest.fixture(scope="module")
def plainly_read(atlas, tmp_path_factory):
    """What xarray alone, with warnings as errors and without the package, finds in the atlas."""
    command = [sys.executable, "-W", "error", "-I", "-c", PLAIN, str(atlas.path)]
    elsewhere = tmp_path_factory.mktemp("elsewhere")
    result = subprocess.run(command, capture_output=True, text=True, cwd=elsewhere)
    assert result.returncode == 0, result.stderr
    return json.loads(result.stdout)


def test_plain_xarray_reads_every_measure_and_nothing_else_as_data(plainly_read):
    values = stand_in.whole(stand_in.small())
    assert plainly_read["variables"] == ["log_radius", "mode_angle"]
    assert plainly_read["dims"]["log_radius"] == ["sample_period", "kp", "kd", "unit", "bus"]
    assert plainly_read["dtypes"]["log_radius"] == "float32"
    assert plainly_read["sum"] == pytest.approx(values.astype("f8").sum(), rel=1e-12)
    assert plainly_read["node"] == values[2, 4, 1, 1, 1]


def test_plain_xarray_reads_fixed_parameters_rows_and_delay_parts(plainly_read):
    assert plainly_read["fixed"] == {"gain": 1.0, "derivative_filter": 0.0, "conversion": 12e-6}
    assert plainly_read["labels"] == ["A", "bé"]
    assert plainly_read["frequencies"] == [45.1, 47.0]
    assert plainly_read["dims"]["natural_frequency"] == ["unit"]
    assert plainly_read["dtypes"]["unit"] == "int64"
    assert plainly_read["attrs"]["bus"]["units"] == "samples"
    assert plainly_read["attrs"]["conversion"]["units"] == "s"


def test_the_sample_rate_stands_beside_the_sample_period(plainly_read):
    assert plainly_read["dims"]["sample_rate"] == ["sample_period"]
    assert plainly_read["rate_times_period"] < 1e-15
    assert plainly_read["attrs"]["sample_rate"]["units"] == "Hz"


def test_every_axis_carries_units_role_what_it_sets_and_its_nominal_value(plainly_read):
    assert plainly_read["attrs"]["bus"] == {
        "units": "samples",
        "long_name": "delay part transport",
        "role": "tolerance",
        "sets": "delay.transport",
        "nominal": 0.25,
        "display_unit": "samples",
    }
    assert plainly_read["attrs"]["unit"] | {"long_name": ""} == {
        "units": "1",
        "long_name": "",
        "role": "tolerance",
        "sets": ["plant.natural_frequency", "plant.damping"],
        "nominal": 0,
        "display_unit": "1",
        "ordered": False,
    }


def test_the_grid_comes_back_from_the_disk_to_the_last_bit(atlas):
    made, read = stand_in.small().grid, open_stored(atlas.path).grid
    assert read.names == made.names
    assert read.paths() == made.paths()
    for path, values in made.parameters().items():
        assert np.array_equal(values, read.parameters()[path])
    for a, b in zip(made.axes, read.axes, strict=True):
        assert (a.role, a.nominal, a.labels, a.ordered) == (b.role, b.nominal, b.labels, b.ordered)
        assert (a.sets, a.unit, a.long_name) == (b.sets, b.unit, b.long_name)
    assert [dataclasses.astuple(f)[:3] for f in made.fixed] == [
        dataclasses.astuple(f)[:3] for f in read.fixed
    ]


def test_title_config_designs_and_cases_come_back(atlas):
    config, read = stand_in.small(), open_stored(atlas.path)
    assert (read.title, read.document) == (config.title, config.document)
    assert (read.designs, read.cases) == (config.designs, config.cases)
    assert (read.output_unit, read.input_unit) == ("mrad", "V")
    assert read.structure == config.structure
    assert [spec.name for spec in read.measures] == ["log_radius", "mode_angle"]


def test_metadata_is_clean_json_and_names_no_place_or_person(atlas):
    def refuse(text):
        raise AssertionError(f"{text} is no JSON")

    private = {platform.node(), str(atlas.path.parent), str(Path.home()), getpass.getuser()}
    files = list(atlas.path.rglob("zarr.json"))
    assert len(files) > 10
    for file in files:
        text = file.read_text()
        json.loads(text, parse_constant=refuse)
        words = set(text.replace("/", " ").replace('"', " ").split())
        assert not private & words
        assert str(atlas.path.parent) not in text


def test_a_fixed_sample_period_has_a_scalar_sample_rate():
    config = stand_in.flat()
    variables = {v.name: v for v in atlas_variables(config.structure, config.grid)}
    assert variables["sample_rate"].dims == ()
    assert float(variables["sample_rate"].values) == 500.0


def test_rows_that_set_the_sample_period_give_each_row_its_sample_rate():
    text = stand_in.FLAT.format(kp=3, gain=3).replace('sample_period = "2 ms"\n', "")
    rows = '[axes.rig]\nrole = "tolerance"\nrows = [{label = "a", sample_period = "1 ms"}, '
    config = stand_in.config(text + rows + '{label = "b", sample_period = "4 ms"}]\n')
    variables = {v.name: v for v in atlas_variables(config.structure, config.grid)}
    assert variables["sample_rate"].dims == ("rig",)
    assert variables["sample_rate"].values.tolist() == [1000.0, 250.0]


def test_a_name_that_two_parameters_share_gives_way_to_the_dotted_path():
    text = stand_in.FLAT.format(kp=3, gain=3) + '[delay]\ngain = "1 sample"\n'
    text = text.replace("[axes.gain]", '[axes.strength]\nsets = "plant.gain"')
    config = stand_in.config(text)
    assert parameter_names(config.grid)["delay.gain"] == "delay.gain"


def test_a_parameter_whose_name_a_free_axis_took_is_called_by_its_path():
    text = stand_in.FLAT.format(kp=3, gain=3).replace("[axes.kp]", "[axes.delayed]")
    text = text.replace("[axes.delayed]", '[axes.delayed]\nsets = "controller.kp"')
    text += '[delay]\nother = "1 sample"\n'
    config = stand_in.config(text)
    axis = dataclasses.replace(config.grid.axes[0], name="other")
    grid = dataclasses.replace(config.grid, axes=(axis, *config.grid.axes[1:]))
    assert parameter_names(grid)["delay.other"] == "delay.other"


@pytest.mark.parametrize("value", [0.0, -0.0, np.nan, np.inf, 1.0])
def test_a_tile_of_equal_values_still_yields_an_object(tmp_path, value):
    atlas = create_atlas(tmp_path / "a.zarr", stand_in.flat(), (16, 8))
    tile = atlas.tiling.tile((1, 1))
    stand_in.write_tile(atlas, tile, {"log_radius": np.full(tile.shape, value, "f4")})
    assert atlas.done_tiles("log_radius") == {(1, 1)}


def test_one_tile_is_one_object_of_each_measure(atlas):
    tiles = {tile.index for tile in atlas.tiling}
    for measure in ("log_radius", "mode_angle"):
        names = {path.name for path in (atlas.path / measure).iterdir()} - {"zarr.json"}
        assert names == {".".join(["c", *map(str, index)]) for index in tiles}
        assert atlas.done_tiles(measure) == tiles
    assert atlas.complete


def test_a_node_that_is_not_computed_is_nan_and_only_such_a_node(tmp_path):
    atlas = create_atlas(tmp_path / "a.zarr", stand_in.flat(40, 30), (16, 8))
    tile = atlas.tiling.tile((2, 3))
    stand_in.write_tile(atlas, tile, {"log_radius": np.ones(tile.shape, "f4")})
    known = ~np.isnan(atlas.read("log_radius", (slice(None), slice(None))))
    assert known[tile.block].all()
    assert known.sum() == tile.size
    assert not atlas.tiles_done().any()


SELECTIONS = [
    (slice(None), slice(None), slice(None), slice(None), slice(None)),
    (3, -1, 0, 1, 2),
    (slice(2, 11, 3), 5, slice(None, None, -1), 0, slice(1, 1)),
    ([12, 0, 5], slice(10, 20), [2, 0], slice(None), -1),
    (np.arange(13) % 2 == 0, [-1, 3], 1, slice(None), slice(None)),
]


@pytest.mark.parametrize("selection", SELECTIONS, ids=range(len(SELECTIONS)))
def test_reading_selects_as_a_product_of_indices(atlas, selection):
    values = stand_in.whole(stand_in.small())
    expected = values
    for axis in reversed(range(5)):
        expected = expected[(slice(None),) * axis + (selection[axis],)]
    found = atlas.read("log_radius", selection)
    assert found.dtype == np.float32
    assert np.array_equal(found, expected)


@pytest.mark.parametrize(
    "selection", [(0,), (0, 0, 0, 0, 3), (-14, 0, 0, 0, 0), ([[0]], 0, 0, 0, 0)]
)
def test_a_selection_outside_the_axes_is_an_index_error(atlas, selection):
    with pytest.raises(IndexError):
        atlas.read("log_radius", selection)


def test_a_measure_that_is_not_stored_is_named_with_those_that_are(atlas):
    with pytest.raises(QuestionError, match="it holds log_radius, mode_angle"):
        atlas.read("modulus_margin", SELECTIONS[0])


def test_the_dataset_is_lazy_labelled_and_free_of_dask(atlas):
    data = atlas.dataset
    assert isinstance(data, xr.Dataset)
    assert data.log_radius.chunks is None
    assert np.array_equal(data.log_radius.values, stand_in.whole(stand_in.small()))


def test_opening_loads_neither_kernels_nor_schedulers_nor_figures(atlas):
    code = (
        "import sys; from sweep.store.atlas import open_stored; a = open_stored(sys.argv[1]); "
        "a.read('log_radius', (0, 0, 0, 0, 0)); a.dataset; "
        "print(sorted({'numba', 'distributed', 'matplotlib', 'scipy.linalg'} & set(sys.modules)))"
    )
    result = subprocess.run(
        [sys.executable, "-c", code, str(atlas.path)],
        capture_output=True,
        text=True,
        check=True,
        cwd=Path(stand_in.__file__).parents[1],
    )
    assert result.stdout.strip() == "[]"


def test_changed_labels_rewrite_attributes_and_touch_no_value(tmp_path):
    atlas = filled(tmp_path / "a.zarr")
    before = stand_in.objects_of(atlas.path)
    changed = stand_in.small(
        ("Pan head on a mast", "Another title"),
        ('label = "bé"', 'label = "a much longer label"'),
        ("kp = 0.4", "kp = 0.5"),
        ("[axes.kd]", '[axes.kd]\nrole = "tolerance"'),
        ('kd = "1 ms"\n', ""),
        ('nominal = "0.25 samples"', 'nominal = "0.5 samples"'),
        ('output_unit = "mrad"', 'output_unit = "deg"'),
    )
    new = atlas.update_labels(changed)
    assert new.title == "Another title"
    assert new.grid.axis("unit").labels == ("A", "a much longer label")
    assert new.grid.axis("kd").role == "tolerance"
    assert new.grid.axis("bus").nominal == 2
    assert new.designs == changed.designs
    assert new.document == changed.document
    assert stand_in.objects_of(atlas.path) == before
    assert xr.open_zarr(atlas.path).attrs["title"] == "Another title"


def test_unchanged_labels_write_nothing(tmp_path):
    atlas = filled(tmp_path / "a.zarr")
    before = {p: p.stat().st_mtime_ns for p in atlas.path.rglob("*")}
    assert atlas.update_labels(stand_in.small()) is atlas
    assert {p: p.stat().st_mtime_ns for p in atlas.path.rglob("*")} == before


def test_a_measure_can_join_an_atlas_and_is_unknown_until_computed(tmp_path, monkeypatch):
    atlas = filled(tmp_path / "a.zarr")
    monkeypatch.setitem(MEASURES, "swing", MeasureSpec("swing", "dB", "a measure made for a test"))
    wider = dataclasses.replace(stand_in.small(), measures=("log_radius", "mode_angle", "swing"))
    new = atlas.add_measures(wider)
    assert [spec.name for spec in new.measures] == ["log_radius", "mode_angle", "swing"]
    assert not new.complete
    assert np.isnan(new.read("swing", (0, slice(None), 0, 0, 0))).all()
    plain = xr.open_zarr(atlas.path)
    assert plain.swing.attrs == {
        "units": "dB",
        "long_name": "a measure made for a test",
        "version": 1,
    }
    assert new.add_measures(wider) is new
    assert new.update_labels(wider) is new


def test_nothing_stands_at_its_place_when_making_an_atlas_fails(tmp_path, monkeypatch):
    def refuse(_path, _target):
        raise PermissionError("no")

    monkeypatch.setattr(Path, "rename", refuse)
    with pytest.raises(PermissionError):
        create_atlas(tmp_path / "a.zarr", stand_in.small(), stand_in.SMALL_TILE)
    assert list(tmp_path.iterdir()) == []


def test_an_atlas_never_takes_the_place_of_something_else(tmp_path):
    (tmp_path / "a.zarr").mkdir()
    with pytest.raises(FileExistsError):
        create_atlas(tmp_path / "a.zarr", stand_in.small(), stand_in.SMALL_TILE)
    assert [path.name for path in tmp_path.iterdir()] == ["a.zarr"]


def test_the_global_settings_of_zarr_stay_as_they_were(tmp_path):
    before = zarr.config.get("array.write_empty_chunks"), zarr.config.get("codec_pipeline.path")
    atlas = filled(tmp_path / "a.zarr", stand_in.flat(), (16, 8))
    assert atlas.dataset.log_radius.shape == (40, 30)
    after = zarr.config.get("array.write_empty_chunks"), zarr.config.get("codec_pipeline.path")
    assert after == before


def test_the_store_version_is_written(atlas):
    attributes = json.loads((atlas.path / "zarr.json").read_text())["attributes"]
    assert attributes["store_version"] == layout.STORE_VERSION == 1
    assert attributes["physics_version"] == {"plant": 1, "controller": 1, "hold": 1}
