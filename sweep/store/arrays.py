"""Where zarr is spoken: an atlas's metadata made in memory, and its group opened to be read.

zarr's settings are global to the process. The only one changed here is the codec pipeline, for the
moment in which a group is opened (arrays keep the pipeline they were opened with), and only where
zarr has the fused one: it decodes a slice of many chunks three to four times faster.
"""

from __future__ import annotations

import importlib
import json
import math
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import zarr
from zarr.codecs import BloscCodec, Crc32cCodec
from zarr.storage import LocalStore, MemoryStore

from sweep.store.layout import Attributes, Variable, measure_attributes
from sweep.store.shards import CLEVEL, CNAME, ShardFormat
from sweep.vocabulary import MeasureSpec

if TYPE_CHECKING:
    import xarray as xr
    from zarr.core.chunk_key_encodings import ChunkKeyEncodingParams

Objects = dict[str, bytes]
"""Contents of stored objects by key, which is a path relative to the atlas."""

INNER_CODECS = ("bytes", "blosc", "crc32c")
"""Names of the codecs of a measure's chunks, in order."""
FLAT_NAMES: ChunkKeyEncodingParams = {"name": "default", "separator": "."}
"""Objects of a measure are called ``c.0.1.2`` and lie in one folder."""
_FILL_VALUES: dict[str, float | int | str] = {"f": math.nan, "i": 0, "T": ""}


def group_objects(
    attributes: Attributes,
    variables: Iterable[Variable],
    measures: Iterable[MeasureSpec],
    shape: tuple[int, ...],
    shards: ShardFormat,
) -> Objects:
    """Every object of a new atlas except its tiles: metadata, and coordinates with their values."""
    objects: dict[str, Any] = {}
    # Coordinates are written even where every value is the fill value.
    with zarr.config.set({"array.write_empty_chunks": True}):
        group = zarr.create_group(MemoryStore(objects), attributes=attributes)
        for variable in variables:
            _create_variable(group, variable)
        for spec in measures:
            _create_measure(group, spec, shape, tuple(attributes["axes"]), shards)
    stored = {key: buffer.to_bytes() for key, buffer in objects.items()}
    stored["zarr.json"] = _consolidated(stored)
    return stored


def _consolidated(objects: Objects) -> bytes:
    """The group's metadata with that of its arrays inside, which plain xarray looks for first.

    Readers that do not know it pass over it, as this program does.
    """
    group = json.loads(objects["zarr.json"])
    members = {
        key.removesuffix("/zarr.json"): json.loads(data)
        for key, data in sorted(objects.items())
        if key.endswith("/zarr.json")
    }
    inside = {"kind": "inline", "must_understand": False, "metadata": members}
    whole = {**group, "consolidated_metadata": inside}
    return json.dumps(whole, allow_nan=False, ensure_ascii=False, indent=2).encode()


def _create_variable(group: zarr.Group, variable: Variable) -> None:
    group.create_array(
        variable.name,
        data=variable.values,
        chunks=variable.values.shape,
        compressors=[Crc32cCodec()],
        dimension_names=variable.dims,
        attributes=variable.attributes,
        fill_value=_FILL_VALUES[variable.values.dtype.kind],
    )


def _create_measure(
    group: zarr.Group,
    spec: MeasureSpec,
    shape: tuple[int, ...],
    dims: tuple[str, ...],
    shards: ShardFormat,
) -> None:
    group.create_array(
        spec.name,
        shape=shape,
        shards=shards.tile_shape,
        chunks=shards.chunk_shape,
        dtype="float32",
        fill_value=math.nan,
        chunk_key_encoding=FLAT_NAMES,
        compressors=[
            BloscCodec(typesize=4, cname=CNAME, clevel=CLEVEL, shuffle="bitshuffle"),
            Crc32cCodec(),
        ],
        dimension_names=dims,
        attributes=measure_attributes(spec),
    )


@contextmanager
def fast_reads() -> Iterator[None]:
    """Arrays opened inside decode with the fused pipeline where this zarr has it."""
    module = "zarr.core.codec_pipeline"
    fused = hasattr(importlib.import_module(module), "FusedCodecPipeline")
    setting = {"codec_pipeline.path": f"{module}.FusedCodecPipeline"} if fused else {}
    with zarr.config.set(setting):
        yield


def open_arrays(folder: Path) -> dict[str, zarr.Array[Any]]:
    """Every array of the atlas at ``folder`` by name, read-only.

    Found by looking for metadata and not by walking the group, where zarr warns of every stray
    file.

    Raises
    ------
    ValueError, KeyError, TypeError
        When a member is a group, or its metadata is not that of an array.
    """
    names = sorted(path.parent.name for path in folder.glob("*/zarr.json"))
    store = LocalStore(folder, read_only=True)
    with fast_reads():
        return {name: zarr.open_array(store, path=name, mode="r", zarr_format=3) for name in names}


def open_dataset(folder: Path) -> xr.Dataset:
    """The atlas as a lazy dataset: nothing is read before it is indexed, and dask takes no part."""
    import xarray as xr

    with fast_reads():
        store = LocalStore(folder, read_only=True)
        dataset: xr.Dataset = xr.open_zarr(
            store, chunks=None, consolidated=False, decode_times=False
        )
    return dataset
