"""GeoParquet copies: from GeoParquet with geometry and metadata kept, from others with new metadata."""

from __future__ import annotations

import json
from collections.abc import Sequence
from itertools import chain
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.reader.vector import Batch, LayerInfo
from geofractal.writer.names import fitted
from geofractal.writer.rows import Progress, Results, empty_batch, joined, new_fields
from geofractal.writer.survey import Survey, survey

_ROWS_PER_READ = 5_000
_ROWS_PER_GROUP = 65_536
_COMPRESSION = "zstd"


def attach_to_geoparquet(
    info: LayerInfo, results: Results, columns: Sequence[Column], part: Path, progress: Progress | None
) -> None:
    """Write a copy of a GeoParquet file with new columns at its end; all else in it stays."""
    # pre-buffered, pyarrow keeps every row group that it has read until the file is closed
    with pq.ParquetFile(info.path, pre_buffer=False) as source:
        schema = source.schema_arrow
        for field in new_fields(tuple(columns)):
            schema = schema.append(field)
        done = 0
        with pq.ParquetWriter(part, schema, compression=_compression(source)) as writer:
            for group in range(source.num_row_groups):
                for batch in source.iter_batches(_ROWS_PER_READ, row_groups=[group]):
                    new = results.read(done, done + batch.num_rows)
                    whole = pa.RecordBatch.from_arrays([*batch.columns, *new.columns], schema=schema)
                    writer.write_batch(whole, _ROWS_PER_GROUP)
                    done += batch.num_rows
                    if progress is not None:
                        progress(batch.num_rows)


def write_geoparquet(
    info: LayerInfo, results: Results, columns: Sequence[Column], part: Path, progress: Progress | None
) -> None:
    """Write a layer of another format as GeoParquet 1.1 with its new columns.

    Raises
    ------
    OutputError
        The layer holds curves, which the standard has no place for.
    """
    times = [name for name, kind in info.fields if kind == "datetime"]
    found = survey(info, times=times)
    if found.has_curves:
        raise OutputError(
            f"{info.path}: layer {info.layer!r} holds curves, which GeoParquet has no place for; "
            "choose another format, such as geopackage"
        )
    pairs = joined(info, results, progress)
    ids, geometry = parquet_names(info, columns)
    first = _whole(*(next(pairs, None) or empty_batch(info, results)), found, ids, geometry)
    schema = first.schema.with_metadata({"geo": json.dumps(_geo(info, found, geometry))})
    with pq.ParquetWriter(part, schema, compression=_COMPRESSION) as writer:
        for batch in chain([first], (_whole(*pair, found, ids, geometry) for pair in pairs)):
            writer.write_batch(batch.cast(schema), _ROWS_PER_GROUP)


def parquet_names(info: LayerInfo, columns: Sequence[Column]) -> tuple[str, str]:
    """Return the names of the columns of stored feature ids, empty where there are none, and of geometry."""
    taken = (*info.field_names, *(column.name for column in columns))
    ids, geometry = fitted([info.fid_column or "fid", "geometry"], taken=taken)
    return (ids if info.driver == "geopackage" and info.fid_column else ""), geometry


def _whole(batch: Batch, new: pa.RecordBatch, found: Survey, ids: str, geometry: str) -> pa.RecordBatch:
    columns: dict[str, pa.Array] = {}
    if ids:
        columns[ids] = pa.array([] if batch.fids is None else batch.fids, pa.int64())
    for name, array in zip(batch.attributes.schema.names, batch.attributes.columns, strict=True):
        columns[name] = _instants(array, found.zones.get(name, "some"))
    columns |= dict(zip(new.schema.names, new.columns, strict=True))
    columns[geometry] = batch.wkb
    return pa.RecordBatch.from_pydict(columns)


def _instants(array: pa.Array, zones: str) -> pa.Array:
    """Return times written as text as times, unless only some of the column's have a zone."""
    if isinstance(array.type, pa.BaseExtensionType):
        return array.storage
    if zones == "some":
        return array
    return array.cast(pa.timestamp("ms", "UTC" if zones == "all" else None))


def _geo(info: LayerInfo, found: Survey, geometry: str) -> dict[str, Any]:
    import pyproj  # loaded here: it is slow

    words = [] if found.has_m else list(found.words)
    crs = pyproj.CRS.from_wkt(info.crs).to_json_dict() if info.crs else None
    column = {"encoding": "WKB", "geometry_types": words, "crs": crs}
    return {"version": "1.1.0", "primary_column": geometry, "columns": {geometry: column}}


def _compression(source: pq.ParquetFile) -> str:
    if not source.num_row_groups:
        return _COMPRESSION
    return str(source.metadata.row_group(0).column(0).compression).lower().replace("uncompressed", "none")
