"""GeoParquet through pyarrow: one row group at a time, so that memory does not grow with the file."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from geofractal.errors import LayerError, SourceError
from geofractal.reader.layers import SAMPLE_ROWS, Kind, LayerInfo, finite_bounds, kind_of, sampled


def layer_names(path: Path) -> tuple[str, ...]:
    """Return the file's stem: a GeoParquet file is one layer."""
    return (path.stem,)


def describe(path: Path, layer: str, encoding: str | None) -> LayerInfo:
    """Return what the file's metadata tells; its CRS as it stands there."""
    if encoding not in {None, "UTF-8", "utf-8"}:
        raise LayerError(f"{path}: encoding {encoding!r} cannot be set; Parquet text is always UTF-8")
    with _opened(path) as file:
        name, geo = _geometry(path, file)
        types = geo.get("geometry_types") or []
        fields = [field for field in file.schema_arrow if field.name != name]
        info = LayerInfo(
            path=path,
            layer=layer,
            driver="geoparquet",
            geometry=_kind(types),
            has_z=any(word.endswith("Z") for word in types),
            has_m=False,
            crs=_crs(geo),
            features=file.metadata.num_rows,
            fid_column="",
            fields=tuple((field.name, str(field.type)) for field in fields),
            bounds=finite_bounds(geo.get("bbox")),
            encoding=None,
            rows_per_batch=1,
        )
        groups = [file.metadata.row_group(i) for i in range(file.num_row_groups)]
    first = (batch.column(0) for batch in pieces(info, (), SAMPLE_ROWS))
    return sampled(info, first, sum(group.total_byte_size for group in groups))


def pieces(info: LayerInfo, columns: tuple[str, ...], rows: int) -> Iterator[pa.RecordBatch]:
    """Yield batches of at most `rows` rows, geometry last."""
    with _opened(info.path) as file:
        name, _ = _geometry(info.path, file)
        for group in range(file.num_row_groups):
            for batch in file.iter_batches(rows, row_groups=[group], columns=[*columns, name]):
                wkb = batch.column(name)
                if not pa.types.is_binary(wkb.type):
                    wkb = wkb.cast(pa.large_binary())
                arrays = [*(batch.column(column) for column in columns), wkb]
                schema = pa.schema([*(batch.schema.field(c) for c in columns), pa.field(name, wkb.type)])
                yield pa.RecordBatch.from_arrays(arrays, schema=schema)


@contextmanager
def _opened(path: Path) -> Iterator[pq.ParquetFile]:
    try:
        # pre-buffered, pyarrow keeps every row group that it has read until the file is closed
        with pq.ParquetFile(path, pre_buffer=False) as file:
            yield file
    except (pa.ArrowException, OSError) as error:
        raise SourceError(f"{path} cannot be read; it may be damaged or cut off ({error})") from error


def _geometry(path: Path, file: pq.ParquetFile) -> tuple[str, dict[str, Any]]:
    """Return the name and the metadata of the main geometry column."""
    try:
        geo = json.loads(file.schema_arrow.metadata[b"geo"])
        name = geo["primary_column"]
        column = geo["columns"][name]
    except (KeyError, TypeError, ValueError):
        raise SourceError(f"{path}: has no 'geo' metadata, so it is Parquet but not GeoParquet") from None
    if column.get("encoding") != "WKB":
        raise SourceError(
            f"{path}: geometry is stored as {column.get('encoding')!r}; save it anew with WKB encoding"
        )
    return str(name), column


def _kind(types: list[str]) -> Kind:
    kinds = {kind_of(word) for word in types}
    return kinds.pop() if len(kinds) == 1 else "unknown"


def _crs(geo: dict[str, Any]) -> str | None:
    """Return the CRS; by the standard none stated is WGS 84 with longitude first, and null is none."""
    crs = geo.get("crs", "OGC:CRS84")
    return crs if crs is None or isinstance(crs, str) else json.dumps(crs)
