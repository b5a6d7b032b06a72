"""Tables of figures as CSV and Parquet, and patches as layers written while they are found."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterable, Iterator, Sequence
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from geofractal.errors import OutputError
from geofractal.writer.commit import advice, publish
from geofractal.writer.dictionary import write_csv

GEOMETRY = "geometry"


def write_table(table: pa.Table, target: Path) -> None:
    """Publish a table as ``.csv`` (nulls empty, whole numbers without a point) or ``.parquet``.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    if target.suffix == ".csv":
        rows = zip(*(map(_text, column.to_pylist()) for column in table.columns), strict=True)
        write_csv(target, table.column_names, rows)
        return
    with publish(target) as part:
        pq.write_table(table, part, compression="zstd")


def write_batches(batches: Iterable[pa.RecordBatch], schema: pa.Schema, target: Path) -> int:
    """Publish batches as one table, ``.csv`` (nulls empty) or ``.parquet``, and return its number of rows.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    rows = 0
    with publish(target) as part, _table_writer(part, schema) as writer:
        for batch in batches:
            writer.write_batch(batch)
            rows += batch.num_rows
    return rows


def _table_writer(part: Path, schema: pa.Schema) -> Any:
    if part.suffix == ".parquet":
        return pq.ParquetWriter(part, schema, compression="zstd")
    return pacsv.CSVWriter(part, schema, write_options=pacsv.WriteOptions(quoting_style="needed"))


def _text(value: Any) -> Any:
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return ""
    if isinstance(value, float) and value.is_integer() and abs(value) < 1e15:
        return int(value)
    return value


def write_patch_layer(
    batches: Iterable[pa.RecordBatch],
    schema: pa.Schema,
    names: Sequence[str],
    crs: Any,
    target: Path,
    progress: Callable[[int], None],
) -> None:
    """Publish patches with their polygons, batch by batch.

    Parameters
    ----------
    batches : columns `names` of patches, polygons as WKB in the column `GEOMETRY`
    schema : types of those columns, at least
    crs : pyproj's, of the polygons
    target : a ``.gpkg`` or ``.parquet`` file
    progress : called with the number of rows done since the last call

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    plain = pa.schema([schema.field(name).remove_metadata() for name in names])
    told = (_told(batch.cast(plain), progress) for batch in batches)
    with publish(target) as part:
        write = _write_geoparquet if target.suffix == ".parquet" else _write_geopackage
        write(told, plain, crs, part, target.stem)


def _told(batch: pa.RecordBatch, progress: Callable[[int], None]) -> pa.RecordBatch:
    progress(batch.num_rows)
    return batch


def _write_geoparquet(
    batches: Iterator[pa.RecordBatch], schema: pa.Schema, crs: Any, part: Path, _: str
) -> None:
    column = {"encoding": "WKB", "geometry_types": ["Polygon", "MultiPolygon"], "crs": crs.to_json_dict()}
    geo = {"version": "1.1.0", "primary_column": GEOMETRY, "columns": {GEOMETRY: column}}
    schema = schema.with_metadata({"geo": json.dumps(geo)})
    with pq.ParquetWriter(part, schema, compression="zstd") as writer:
        for batch in batches:
            writer.write_batch(batch.cast(schema))


def _write_geopackage(
    batches: Iterator[pa.RecordBatch], schema: pa.Schema, crs: Any, part: Path, layer: str
) -> None:
    import pyogrio.raw

    mark = pa.field(GEOMETRY, pa.binary(), metadata={"ARROW:extension:name": "geoarrow.wkb"})
    schema = schema.set(schema.get_field_index(GEOMETRY), mark)
    reader = pa.RecordBatchReader.from_batches(schema, (batch.cast(schema) for batch in batches))
    try:
        pyogrio.raw.write_arrow(
            reader,
            part,
            layer=layer,
            driver="GPKG",
            geometry_name=GEOMETRY,
            geometry_type="Unknown",
            crs=crs.to_wkt(),
        )
    except (RuntimeError, ValueError) as error:
        raise OutputError(
            f"{part.parent}: GDAL could not write the patches ({error}); {advice(part)}"
        ) from error
