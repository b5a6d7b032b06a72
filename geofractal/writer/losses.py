"""What a format cannot hold of a layer, known before anything is measured."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.reader.vector import LayerInfo, layer_info
from geofractal.writer.attach import can_attach
from geofractal.writer.geoparquet import parquet_names
from geofractal.writer.names import refuse_clashes
from geofractal.writer.rewrite import copy_names
from geofractal.writer.rows import ARROW_TYPES
from geofractal.writer.survey import declared_type, survey

_NESTED = ("list<", "large_list<", "fixed_size_list<", "struct<", "map<", "extension<arrow.json>")
_GEOJSON = {"geojson", "geojson-lines"}


@dataclass(frozen=True, slots=True)
class Loss:
    """Something that a copy will not hold of its source; `column` is empty where it is of no single one."""

    column: str
    what: str

    def __str__(self) -> str:
        """Return the loss as one line of text."""
        return f"column {self.column!r}: {self.what}" if self.column else self.what


def expected_losses(info: LayerInfo, columns: Sequence[Column], format: str) -> tuple[Loss, ...]:  # noqa: A002
    """Return what a copy of the layer in a format (a word of the batch file) will not hold.

    A layer that declares no kind of geometry is read once where the format needs to know it.

    Raises
    ------
    OutputError
        The copy cannot be made at all: a name is taken, or the format cannot hold the layer.
    """
    refuse_clashes(info, columns)
    if format == info.driver == "geoparquet" or (format == "geopackage" and can_attach(info)):
        return tuple(_of_attached(info))
    found = [*_of_geometry(info, format), *_of_layer(info, format), *_of_names(info, columns, format)]
    for name, kind in info.fields:
        whats = _of_parquet_column(kind) if format == "geoparquet" else _of_column(info, kind, format)
        found += [Loss(name, what) for what in whats]
    if format == "shapefile":
        for column in columns:
            found += [Loss(column.name, what) for what in _of_shapefile(str(ARROW_TYPES[column.kind]))]
    return tuple(found)


def _of_attached(info: LayerInfo) -> Iterator[Loss]:
    own = layer_info(info.path, layer=info.layer, need_crs=False).crs
    if own != info.crs:
        yield Loss(
            "", "the CRS given in the batch file is not written: the copy states what the source states"
        )


def _of_geometry(info: LayerInfo, layout: str) -> Iterator[Loss]:
    named = f"{info.path}: layer {info.layer!r}"
    if layout in {"shapefile", "flatgeobuf"} and declared_type(survey(info), layout, named)[1]:
        yield Loss("", "single geometries become multi-part ones of one part")
    if layout == "geojson-lines" and not _is_wgs84(info):
        raise OutputError(
            f"{named}: line-delimited GeoJSON holds longitudes and latitudes of WGS 84 only, and coordinates "
            "are never changed: choose another format, such as geojson or geopackage, or reproject the source"
        )


def _of_layer(info: LayerInfo, layout: str) -> Iterator[Loss]:
    simple = layout in {"shapefile", *_GEOJSON}
    if info.driver == "geopackage":
        yield Loss(
            "", "other layers, styles, aliases, constraints and defaults of the GeoPackage stay behind"
        )
    if info.driver in _GEOJSON:
        yield Loss(
            "", "whole-number ids of GeoJSON features and members beside their properties are not kept"
        )
    if simple and info.geometry in {"curves", "unknown", "collections"}:
        yield Loss("", "curves, where there are any, become chains of short straight lines")
    if info.has_m and layout in _GEOJSON:
        yield Loss("", "measures (M) of vertices are left out")
    if info.has_m and layout == "geoparquet":
        yield Loss("", "measures (M) stay in the geometry, but the metadata of GeoParquet cannot name them")
    words = {
        "shapefile": (
            "empty geometries become missing ones",
            "multi-part geometries of one part read back as single ones",
        ),
        "flatgeobuf": (
            "empty and missing geometries become one",
            "there is no spatial index, since it would change the order of rows",
        ),
        "geojson": ("column types are not stored: programs guess them from the values",),
        "geojson-lines": (
            "column types are not stored: programs guess them from the values",
            "rings are turned as RFC 7946 asks: outer ones counter-clockwise",
        ),
    }
    yield from (Loss("", what) for what in words.get(layout, ()))
    if layout in _GEOJSON:
        yield Loss("", "coordinates and numbers may differ from the source after the 15th digit")
    if layout == "geojson" and not _is_wgs84(info):
        yield Loss("", _geojson_crs(info))


def _of_names(info: LayerInfo, columns: Sequence[Column], layout: str) -> Iterator[Loss]:
    if layout == "geoparquet":
        ids, _ = parquet_names(info, columns)
    else:
        names = copy_names(info, columns, layout)
        ids = names.ids if info.driver == "geopackage" and info.fid_column and layout not in _GEOJSON else ""
        full = (*info.field_names, *(column.name for column in columns))
        for old, new in zip(full, (*names.fields, *names.new), strict=True):
            if old != new:
                yield Loss(old, f"is named {new!r}")
    if ids:
        yield Loss(
            "",
            f"stored feature ids become the ordinary column {ids!r}"
            if layout != "geopackage"
            else "stored feature ids are numbered anew unless they rise from row to row",
        )


def _of_column(info: LayerInfo, kind: str, layout: str) -> Iterator[str]:
    number = kind in {"float", "double", "halffloat"}
    if number and layout == "geopackage" and info.driver not in {"geopackage", *_GEOJSON}:
        yield "values that are not a number (NaN) become missing"
    if number and layout in _GEOJSON:
        yield "values that are not finite numbers become missing"
    if kind == "datetime" or kind.startswith("timestamp"):
        yield from _of_times(kind, layout)
    if kind.startswith("date") and kind != "datetime" and layout == "flatgeobuf":
        yield "dates become times at midnight"
    if kind.startswith(("time32", "time64")):
        yield "times of day become text"
    if kind.startswith(("binary", "large_binary", "fixed_size_binary")) and layout in {
        "shapefile",
        *_GEOJSON,
    }:
        yield "bytes become hexadecimal text"
    if kind.startswith(_NESTED) and layout not in _GEOJSON:
        yield "nested values become JSON text"
    yield from _of_rare_types(kind)
    if layout == "shapefile":
        yield from _of_shapefile(kind)


def _of_times(kind: str, layout: str) -> Iterator[str]:
    if layout == "shapefile":
        yield "times become text"
    if kind.startswith(("timestamp[us", "timestamp[ns")):
        yield "times are cut to milliseconds"
    if "tz=" in kind and "tz=UTC" not in kind:
        yield "times of a named zone become the same instants in UTC"


def _of_rare_types(kind: str) -> Iterator[str]:
    if kind.startswith("decimal"):
        yield "decimal numbers become binary ones of 15 digits"
    if kind.startswith("duration"):
        yield f"durations become whole numbers, in the unit of {kind}"
    if kind.startswith("dictionary"):
        yield "categories become plain values"
    if kind == "uint64":
        yield "whole numbers above 2^63 are refused"


def _of_shapefile(kind: str) -> Iterator[str]:
    if kind in {"string", "large_string", "string_view"} or kind.startswith("dictionary"):
        yield "text is cut to 254 bytes, and empty text becomes missing"
    if kind in {"float", "double", "halffloat"}:
        yield "numbers keep 15 decimals, and those of 1e22 and more become missing"
    if kind in {"int64", "uint64"}:
        yield "whole numbers of more than 18 digits keep 15 of them"


def _of_parquet_column(kind: str) -> Iterator[str]:
    if kind == "datetime":
        yield "times with a zone become instants in UTC; where only some have one, all stay text"


def _is_wgs84(info: LayerInfo) -> bool:
    import pyproj  # loaded here: it is slow

    return info.crs is not None and pyproj.CRS.from_user_input(info.crs).equals(
        pyproj.CRS.from_epsg(4326), ignore_axis_order=True
    )


def _geojson_crs(info: LayerInfo) -> str:
    import pyproj  # loaded here: it is slow

    crs = pyproj.CRS.from_user_input(info.crs) if info.crs else None
    if crs is None or crs.to_authority() is None:
        return "the CRS is lost: coordinates are kept, and GeoJSON can name only CRSs with a public code"
    return (
        f"coordinates are kept in {crs.name}, named in a 'crs' member; programs that follow RFC 7946 alone "
        "will take them for longitudes and latitudes"
    )
