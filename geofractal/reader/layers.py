"""What is known of a layer before it is read, and what a reading hands over."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from itertools import islice
from math import isfinite
from pathlib import Path
from typing import Literal

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

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

SAMPLE_ROWS = 100
_BATCH_BYTES = 24_000_000
_BATCH_ROWS = (8, 5_000)

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


def sampled(info: LayerInfo, geometries: Iterable[pa.Array], file_bytes: int) -> LayerInfo:
    """Return `info` with the rows of a batch, and Z and M, from the first features and the file's size.

    The larger of both sizes counts: features are often stored by size, and a file may hold more
    than this layer.

    Parameters
    ----------
    info : the layer
    geometries : WKB of its rows in order, `SAMPLE_ROWS` at a time
    file_bytes : size of the file's contents, unpacked
    """
    rows, taken, types = 0, 0, set[int]()
    for wkb in islice(geometries, 10):
        rows += len(wkb)
        taken += pc.sum(pc.binary_length(wkb)).as_py() or 0
        types |= {_type_code(head) for head in pc.binary_slice(wkb, 0, 5).to_pylist() if head}
        if taken > _BATCH_BYTES:
            break
    a_row = max(taken / rows, file_bytes / max(info.features, 1)) if rows else 1.0
    least, most = _BATCH_ROWS
    return replace(
        info,
        has_z=info.has_z or any(code & 0x80000000 or (code & 0xFFFF) // 1000 in {1, 3} for code in types),
        has_m=any(code & 0x40000000 or (code & 0xFFFF) // 1000 in {2, 3} for code in types),
        rows_per_batch=max(least, min(most, int(_BATCH_BYTES / a_row))),
    )


def _type_code(head: bytes) -> int:
    return int.from_bytes(head[1:5], "little" if head[0] else "big")


def finite_bounds(bounds: Sequence[float] | None) -> tuple[float, float, float, float] | None:
    """Return bounds in two dimensions, None where a coordinate has spoilt them."""
    if bounds is None or not all(map(isfinite, bounds)):
        return None
    half = len(bounds) // 2
    return (bounds[0], bounds[1], bounds[half], bounds[half + 1])


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
