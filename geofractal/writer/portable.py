"""Columns as GDAL takes them, from what Parquet holds beside GDAL's own types."""

from __future__ import annotations

import json

import pyarrow as pa
import pyarrow.compute as pc

from geofractal.errors import OutputError

DATE_TIME = {"GDAL:OGR:type": "DateTime"}
JSON_TEXT = {"GDAL:OGR:subtype": "JSON"}
_SHAPEFILE_LARGEST = 1e22  # longer numbers than its 24 characters come back as others


def portable(column: pa.Array, field: pa.Field, layout: str) -> tuple[pa.Array, pa.Field]:
    """Return a column and its field as GDAL writes them to `layout` with the least loss.

    Raises
    ------
    OutputError
        A whole number is beyond 64 bits with sign.
    """
    array, marks = _portable(column, field)
    if layout == "shapefile" and pa.types.is_floating(array.type):
        fits = pc.less(pc.abs(array), _SHAPEFILE_LARGEST)
        keep = pc.or_(fits, pc.invert(pc.is_finite(array)))
        array = pc.if_else(keep, array, pa.scalar(None, array.type))
    return array, pa.field(field.name, array.type, metadata=marks)


def _portable(column: pa.Array, field: pa.Field) -> tuple[pa.Array, dict[str, str] | None]:
    kind = column.type
    marks = {key.decode(): text.decode() for key, text in (field.metadata or {}).items()} or None
    if isinstance(kind, pa.BaseExtensionType):
        return column.storage, JSON_TEXT if kind.extension_name == "arrow.json" else None
    if pa.types.is_dictionary(kind):
        return _portable(column.cast(kind.value_type), field)
    if pa.types.is_timestamp(kind):
        return _time_text(column), DATE_TIME
    if pa.types.is_nested(kind):
        return _json(column), JSON_TEXT
    if pa.types.is_uint64(kind):
        return _signed(column, field.name), None
    if pa.types.is_float16(kind):
        return column.cast(pa.float32()), None
    if pa.types.is_decimal(kind):
        return column.cast(pa.float64()), None
    if pa.types.is_duration(kind):
        return column.cast(pa.int64()), None
    if pa.types.is_time(kind) or pa.types.is_null(kind) or kind == pa.string_view():
        return column.cast(pa.string()), None
    return (column.cast(pa.binary()) if kind == pa.binary_view() else column), marks


def _time_text(column: pa.Array) -> pa.Array:
    """Return times as text, those of a named zone as the same instants in UTC."""
    zone = "Z" if column.type.tz else ""
    instants = column.cast(pa.timestamp("ms", "UTC" if zone else None), safe=False)
    return pc.strftime(instants, f"%Y-%m-%dT%H:%M:%S{zone}")


def _json(column: pa.Array) -> pa.Array:
    texts = [
        None if v is None else json.dumps(v, default=str, ensure_ascii=False) for v in column.to_pylist()
    ]
    return pa.array(texts, pa.string())


def _signed(column: pa.Array, name: str) -> pa.Array:
    try:
        return column.cast(pa.int64())
    except pa.ArrowInvalid:
        raise OutputError(
            f"column {name!r} holds whole numbers above 2^63, which only geoparquet can hold; "
            "choose that format"
        ) from None
