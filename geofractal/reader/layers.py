"""What is known of a layer before it is read, and what a reading hands over."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
import pyarrow as pa

from geofractal.measure import Ints

Driver = Literal["geopackage", "shapefile", "flatgeobuf", "geojson", "geojson-lines", "geoparquet"]

SUFFIXES: dict[str, Driver] = {
    ".gpkg": "geopackage",
    ".shp": "shapefile",
    ".zip": "shapefile",
    ".fgb": "flatgeobuf",
    ".geojson": "geojson",
    ".json": "geojson",
    ".geojsonl": "geojson-lines",
    ".geojsons": "geojson-lines",
    ".ndjson": "geojson-lines",
    ".jsonl": "geojson-lines",
    ".parquet": "geoparquet",
    ".geoparquet": "geoparquet",
}
"""How a vector file is read, by the end of its name; ``.zip`` is a zipped Shapefile."""

Kind = Literal["points", "lines", "polygons", "collections", "unknown"]


@dataclass(frozen=True, slots=True)
class LayerInfo:
    """One layer of a file, as its header tells it.

    Attributes
    ----------
    path : the file
    layer : the layer's name in it
    driver : how it is read
    geometry : the kind that the layer declares; ``unknown`` where it may hold several
    has_z, has_m : whether the layer declares, or its first features have, heights and measures
    crs : WKT, or None where there is none and none was asked for
    features : the layer's own count of its rows
    fid_column : name of the stored feature id, empty where ids are only positions
    fields : name and Arrow type of each attribute, in order; times held as text are ``datetime``
    bounds : least x, least y, greatest x, greatest y in the layer's CRS; None where unknown
    encoding : of the text, where it is given or a custom; None where the file states it
    rows_per_batch : rows a batch of `stream`, from the bytes a row takes
    """

    path: Path
    layer: str
    driver: Driver
    geometry: Kind
    has_z: bool
    has_m: bool
    crs: str | None
    features: int
    fid_column: str
    fields: tuple[tuple[str, str], ...]
    bounds: tuple[float, float, float, float] | None
    encoding: str | None
    rows_per_batch: int

    @property
    def field_names(self) -> tuple[str, ...]:
        """Return the attributes' names."""
        return tuple(name for name, _ in self.fields)


@dataclass(frozen=True, slots=True)
class Batch:
    """Consecutive rows of a layer.

    Attributes
    ----------
    first_row : position of the first row in the stream
    wkb : BinaryArray or LargeBinaryArray, one geometry a row, nulls kept
    fids : the stored feature ids, None where they are only positions
    attributes : the columns asked for; may have none, so count the rows by ``len(batch)``
    """

    first_row: int
    wkb: pa.Array
    fids: Ints | None
    attributes: pa.RecordBatch

    def __len__(self) -> int:
        """Return the number of rows."""
        return len(self.wkb)

    @property
    def rows(self) -> Ints:
        """Return the position of each row in the stream."""
        return np.arange(self.first_row, self.first_row + len(self), dtype=np.int64)


def driver_of(path: Path) -> Driver | None:
    """Return how a file of this name is read, None where no vector format has its ending."""
    return SUFFIXES.get(path.suffix.lower())


def kind_of(declared: str) -> Kind:
    """Return the kind of a declared geometry type such as ``MultiLineString Z``."""
    word = declared.split(maxsplit=1)[0] if declared else "Unknown"
    kinds: dict[str, Kind] = {
        "Point": "points",
        "MultiPoint": "points",
        "LineString": "lines",
        "MultiLineString": "lines",
        "LinearRing": "lines",
        "Polygon": "polygons",
        "MultiPolygon": "polygons",
        "GeometryCollection": "collections",
    }
    return kinds.get(word, "unknown")


def allowed(words: Iterable[str], given: str) -> str:
    """Return the end of an error's text: the words that are allowed and the nearest to the one given."""
    words = list(words)
    near = difflib.get_close_matches(given, words, n=1)
    rest = f" and {len(words) - 20} more" if len(words) > 20 else ""
    listed = (", ".join(map(repr, words[:20])) or "none") + rest
    return f"allowed: {listed}" + (f"; did you mean {near[0]!r}?" if near else "")
