"""Geometry of a batch as lines: ragged coordinates, and for each row left out a plain reason."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from geofractal.kernels import wkb as kernels
from geofractal.measure import Bools, Floats, Ints

PROBLEMS: tuple[str, ...] = (
    "",
    "missing geometry",
    "empty geometry",
    "points where lines are wanted",
    "one vertex only",
    "zero length",
    "coordinates that are not numbers",
    "curved geometry; straighten it into lines first",
    "geometry collection; split it into lines first",
    "damaged geometry",
    "invalid polygon; repair: true under prepare measures its repaired boundary",
    "polygon without area",
)
"""What stands in the way of a row, by its code; 0 is nothing."""

HARMLESS = (kernels.FINE, kernels.ONE_VERTEX, kernels.ZERO_LENGTH)
"""Codes of rows that a group can do without: there is nothing in them to measure."""


@dataclass(frozen=True, slots=True)
class SourceLines:
    """Features of a batch as lines in the layer's own coordinates.

    Feature ``i`` owns parts ``feature_offsets[i]:feature_offsets[i + 1]`` and part ``j`` owns
    vertices ``part_offsets[j]:part_offsets[j + 1]``. A part has at least two different vertices.

    Attributes
    ----------
    rows : (n,) row of the batch that each feature comes from, increasing
    xy : (m, 2)
    part_offsets : (p + 1,)
    feature_offsets : (n + 1,)
    closed : (p,) whether the part ends where it starts
    problems : one code a row of the batch, an index into `PROBLEMS`
    """

    rows: Ints
    xy: Floats
    part_offsets: Ints
    feature_offsets: Ints
    closed: Bools
    problems: NDArray[np.uint8]

    def __len__(self) -> int:
        """Return the number of features."""
        return len(self.rows)

    def take(self, keep: Bools) -> SourceLines:
        """Return the features to keep; the problems of all rows stay."""
        parts = np.repeat(keep, np.diff(self.feature_offsets))
        vertices = np.repeat(parts, np.diff(self.part_offsets))
        return SourceLines(
            rows=self.rows[keep],
            xy=self.xy[vertices],
            part_offsets=np.append(0, np.cumsum(np.diff(self.part_offsets)[parts])),
            feature_offsets=np.append(0, np.cumsum(np.diff(self.feature_offsets)[keep])),
            closed=self.closed[parts],
            problems=self.problems,
        )


def read_lines(
    wkb: pa.Array,
    *,
    boundaries: Literal["all", "outer"] = "all",
    drop_repeated: bool = True,
    repair: bool = False,
) -> SourceLines:
    """Return the lines, and the boundaries of the polygons, in an Arrow array of WKB.

    Rows of lines are taken as they are, crossings included. A polygon that is not valid (a bow-tie,
    an open ring, a ring without area) has no sure boundary: it is left out unless `repair` is asked
    for. Z and M are not read.

    Parameters
    ----------
    wkb : BinaryArray or LargeBinaryArray, may be a slice, may hold nulls
    boundaries : every ring of a polygon, or only its outer one
    drop_repeated : leave out a vertex that stands where the one before it stands
    repair : measure the boundary of the valid polygon that covers the same ground

    Examples
    --------
    An empty line, a missing one and a point give no feature:

    >>> import shapely
    >>> texts = ["LINESTRING EMPTY", None, "POINT (1 1)", "LINESTRING (0 0, 1 1, 1 1)"]
    >>> lines = read_lines(pa.array(shapely.to_wkb(shapely.from_wkt(texts))))
    >>> [PROBLEMS[code] for code in lines.problems]
    ['empty geometry', 'missing geometry', 'points where lines are wanted', '']
    >>> lines.rows.tolist(), lines.xy.tolist()
    ([3], [[0.0, 0.0], [1.0, 1.0]])
    """
    outer_only = boundaries == "outer"
    found = _scan(wkb, outer_only=outer_only)
    invalid, shapes = _invalid_polygons(wkb, found, fix=repair)
    if repair and len(invalid):
        wkb = _replaced(wkb, invalid, _repaired(shapes))
        found = _scan(wkb, outer_only=outer_only)
        found[invalid[found[invalid, 0] == kernels.EMPTY], 0] = kernels.NO_AREA
    else:
        found[invalid, 0] = kernels.INVALID
    return _read(wkb, found, outer_only=outer_only, drop_repeated=drop_repeated)


def _buffers(wkb: pa.Array) -> tuple[NDArray[np.uint8], Ints]:
    """Return data and offsets of an Arrow binary array, its slice honoured, without a copy of the data."""
    width = np.int64 if pa.types.is_large_binary(wkb.type) else np.int32
    _, offsets, data = wkb.buffers()
    if not len(wkb):
        return np.frombuffer(b"", np.uint8), np.zeros(1, np.int64)
    starts = np.frombuffer(offsets, width)[wkb.offset : wkb.offset + len(wkb) + 1].astype(np.int64)
    return np.frombuffer(data or b"", np.uint8), starts


def _scan(wkb: pa.Array, *, outer_only: bool) -> Ints:
    """Return problem, kind, parts and vertices of each row."""
    data, offsets = _buffers(wkb)
    present = wkb.is_valid().to_numpy(zero_copy_only=False)
    found = np.zeros((len(wkb), 4), np.int64)
    kernels.scan_rows(data, offsets, present, outer_only, found)
    return found


def _invalid_polygons(wkb: pa.Array, found: Ints, *, fix: bool) -> tuple[Ints, Any]:
    """Return the rows of polygons that are not valid, and their shapes, None where a ring is broken."""
    polygons = (found[:, 1] == kernels.POLYGON) | (found[:, 1] == kernels.MULTI_POLYGON)
    rows = np.flatnonzero(polygons & (found[:, 0] == kernels.FINE))
    if not len(rows):
        return rows, []
    import shapely  # loaded here: lines do without it

    taken = wkb.take(pa.array(rows)).to_numpy(zero_copy_only=False)
    shapes = shapely.from_wkb(taken, on_invalid="fix" if fix else "ignore")
    bad = ~shapely.is_valid(shapes)
    return rows[bad], shapes[bad]


def _repaired(shapes: Any) -> Any:
    """Return WKB of the valid polygons that cover the same ground; empty where nothing is left."""
    import shapely

    whole = shapely.make_valid(shapes, method="structure", keep_collapsed=False)
    return shapely.to_wkb(np.where(whole == None, shapely.MultiPolygon(), whole))  # noqa: E711 - elementwise


def _replaced(wkb: pa.Array, rows: Ints, values: Any) -> pa.Array:
    mask = np.zeros(len(wkb), bool)
    mask[rows] = True
    return pc.replace_with_mask(wkb, pa.array(mask), pa.array(values, wkb.type))


def _read(wkb: pa.Array, found: Ints, *, outer_only: bool, drop_repeated: bool) -> SourceLines:
    data, offsets = _buffers(wkb)
    parts, vertices = found[found[:, 0] == kernels.FINE, 2:].sum(axis=0)
    xy = np.empty((vertices, 2))
    part_offsets = np.zeros(parts + 1, np.int64)
    feature_offsets = np.zeros(len(found) + 1, np.int64)
    closed = np.zeros(parts, np.bool_)
    features, parts, vertices = kernels.read_rows(
        data, offsets, found, outer_only, drop_repeated, xy, part_offsets, feature_offsets, closed
    )
    return SourceLines(
        rows=np.flatnonzero(found[:, 0] == kernels.FINE),
        xy=xy[:vertices],
        part_offsets=part_offsets[: parts + 1],
        feature_offsets=feature_offsets[: features + 1],
        closed=closed[:parts],
        problems=found[:, 0].astype(np.uint8),
    )
