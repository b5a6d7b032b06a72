"""Layers and answers for the tests of the writer, made anew for each test."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyogrio.raw
import shapely

from geofractal.measure import Column
from geofractal.reader.vector import layer_info

COLUMNS = (
    Column("divider_dim", "div_dim", "number", "", "dimension of the line", "1 - slope", "a book"),
    Column("divider_rungs", "div_rungs", "count", "", "rulers used"),
    Column("divider_note", "div_note", "text", "", "why a figure is missing"),
    Column("shore_is_closed", "shore_clsd", "flag", "", "whether the line is a ring"),
)
TYPES = {"number": pa.float64(), "count": pa.int64(), "text": pa.string(), "flag": pa.bool_()}
SUFFIXES = {
    "geopackage": ".gpkg",
    "shapefile": ".shp",
    "flatgeobuf": ".fgb",
    "geojson": ".geojson",
    "geojson-lines": ".geojsonl",
    "geoparquet": ".parquet",
}


class Answers:
    """Results held in memory, a null in every fourth row of each column."""

    def __init__(self, n_rows, fids=None, columns=COLUMNS):
        self.n_rows = n_rows
        self.columns = columns
        self._fids = fids

    def read(self, start, stop):
        arrays = [
            pa.array([self.value(column, row) for row in range(start, stop)], TYPES[column.kind])
            for column in self.columns
        ]
        return pa.RecordBatch.from_arrays(arrays, names=[column.name for column in self.columns])

    def value(self, column, row):
        if row % 4 == 3:
            return None
        return {"number": 1 + row / 7, "count": row * 10, "text": f"Übung {row}", "flag": row % 2 == 0}[
            column.kind
        ]

    def column(self, column):
        return [self.value(column, row) for row in range(self.n_rows)]

    def fids(self, start, stop):
        return None if self._fids is None else np.asarray(self._fids[start:stop], np.int64)


def lines(count):
    """Return wavy lines whose coordinates use all digits of a double."""
    rng = np.random.default_rng(count)
    return [
        shapely.LineString(np.cumsum(rng.normal(size=(4, 2)), axis=0) + np.array([10, 50]))
        for _ in range(count)
    ]


def make(path, geometries, columns, *, crs="EPSG:4326", kind="Unknown", layer="shore", marks=None, **options):
    """Write a layer through GDAL from geometries (or WKB, or None) and Arrow arrays, and return its info."""
    from geofractal.reader.layers import driver_of

    driver = {
        "geopackage": "GPKG",
        "shapefile": "ESRI Shapefile",
        "flatgeobuf": "FlatGeobuf",
        "geojson": "GeoJSON",
        "geojson-lines": "GeoJSONSeq",
    }[driver_of(path)]
    defaults = {
        "ESRI Shapefile": {"ENCODING": "UTF-8"},
        "FlatGeobuf": {"SPATIAL_INDEX": "NO"},
        "GeoJSON": {"SIGNIFICANT_FIGURES": "17"},
        "GeoJSONSeq": {"COORDINATE_PRECISION": "17"},
    }
    marks = marks or {}
    fields = [pa.field(name, array.type, metadata=marks.get(name)) for name, array in columns.items()]
    fields.append(pa.field("wkb", pa.binary(), metadata={"ARROW:extension:name": "geoarrow.wkb"}))
    table = pa.Table.from_arrays([*columns.values(), as_wkb(geometries)], schema=pa.schema(fields))
    pyogrio.raw.write_arrow(
        table,
        path,
        layer=layer,
        driver=driver,
        geometry_name="wkb",
        geometry_type=kind,
        crs=crs,
        **{**defaults.get(driver, {}), **options},
    )
    return layer_info(path, layer=layer if driver == "GPKG" else None, need_crs=crs is not None)


def as_wkb(geometries):
    return pa.array(
        [
            geometry
            if geometry is None or isinstance(geometry, bytes)
            else shapely.to_wkb(geometry, flavor="iso", output_dimension=4)
            for geometry in geometries
        ],
        pa.binary(),
    )


def read_rows(path, layer=None, **options):
    """Return a copy's columns as lists by name, and its geometries as WKB, read by GDAL alone."""
    if path.suffix == ".parquet":
        import pyarrow.parquet as pq

        table = pq.read_table(path)
        wkb = table.column(table.num_columns - 1).to_pylist()
        return {name: table[name].to_pylist() for name in table.schema.names[:-1]}, wkb
    with pyogrio.raw.open_arrow(path, layer=layer, use_pyarrow=True, datetime_as_string=True, **options) as (
        _,
        reader,
    ):
        table = reader.read_all()
    wkb = table.column(table.num_columns - 1).to_pylist()
    return {name: table[name].to_pylist() for name in table.schema.names[:-1]}, wkb
