"""Polygons of patches, from the runs of their cells."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import shapely
from numpy.typing import NDArray

from geofractal.kernels.outlines import (
    COMES_FROM_ABOVE,
    FROM,
    LEAVES_DOWN,
    PATCH,
    ROW,
    TO,
    cut_at_repeats,
    pieces_of_runs,
    rings_of,
    row_edges,
)
from geofractal.landcover.grid import Affine

Ints = NDArray[np.int64]

LOT_RUNS = 30_000
"""Runs of cells that are traced together: enough of them that this costs no time."""


def patch_polygons(runs: Ints, count: int, transform: Affine) -> NDArray[np.object_]:
    """Return the polygon of each patch, along cell edges, in the coordinates of its grid.

    Parts that meet in corners only are parts of a multipolygon; so every polygon is valid. A hole belongs to
    the part whose cell lies beside it.

    Parameters
    ----------
    runs : as `geofractal.landcover.labelling.Finished.runs`
    count : number of patches
    transform : of the grid

    Examples
    --------
    >>> patch_polygons(np.array([[0, 0, 0, 2]]), 1, (1, 0, 0, 0, -1, 0))[0].wkt
    'POLYGON ((0 0, 2 0, 2 -1, 0 -1, 0 0))'
    """
    found = np.empty(count, dtype=object)
    for first, stop in pairwise(_lots(runs[:, 0])):
        lot = np.ascontiguousarray(runs[first:stop])
        begin, end = lot[0, 0], lot[-1, 0] + 1
        lot[:, 0] -= begin
        found[begin:end] = _traced(lot, int(end - begin), transform)
    return found


def _lots(patch: Ints) -> Ints:
    """Return where the runs of lots of whole patches begin, with the end: a lot at a time needs memory."""
    begins = np.flatnonzero(np.r_[True, np.diff(patch) != 0])[: len(patch)]
    first_of_lot = np.diff(begins // LOT_RUNS, prepend=-1) != 0
    return np.append(begins[first_of_lot], len(patch))


def _traced(runs: Ints, count: int, transform: Affine) -> NDArray[np.object_]:
    """Return the polygons of patches that are traced together; there is one at least."""
    found = np.empty(count, dtype=object)
    corners, patch, begins = _closed_walks(row_edges(runs))
    order, begins = cut_at_repeats(begins, _visited_before(corners, begins))
    corners, patch = corners[order], patch[order[begins[:-1]]]
    outer = _signed_areas(corners, begins) > 0
    part_of_piece = np.full(len(runs), -1)
    piece = pieces_of_runs(runs)[_runs_beside(corners, begins, patch, runs)]
    part_of_piece[piece[outer]] = np.arange(outer.sum())
    part = part_of_piece[piece]
    a, b, c, d, e, f = transform
    x, y = corners.T
    xy = np.column_stack([a * x + b * y + c, d * x + e * y + f])
    rings = shapely.linearrings(xy, indices=np.repeat(np.arange(len(patch)), np.diff(begins)))
    shells_first = np.lexsort((~outer, part))
    parts = shapely.polygons(rings[shells_first], indices=part[shells_first])
    several = np.bincount(patch[outer], minlength=count)[patch[outer]] > 1
    found[patch[outer][~several]] = parts[~several]
    if several.any():
        split, of = np.unique(patch[outer][several], return_inverse=True)
        found[split] = shapely.multipolygons(parts[several], indices=of)
    return found


def _closed_walks(edges: Ints) -> tuple[Ints, Ints, Ints]:
    """Return the corners of outlines, walk after walk, the patch of each, and where each walk begins."""
    order, begins = rings_of(_following(edges))
    walked = edges[order]
    corners = np.stack([walked[:, [FROM, TO]], walked[:, [ROW, ROW]]], axis=-1).reshape(-1, 2)
    return corners, np.repeat(walked[:, PATCH], 2), 2 * begins


def _following(edges: Ints) -> Ints:
    """Return the edge after each edge: the next along the column where it ends.

    Vertical parts of an outline in one column never overlap, so their ends pair up in sorted order.
    """
    following = np.empty(len(edges), np.int64)
    for down in (1, 0):
        leaves = np.flatnonzero(edges[:, LEAVES_DOWN] == down)
        comes = np.flatnonzero(edges[:, COMES_FROM_ABOVE] == down)
        leaves = leaves[np.lexsort((edges[leaves, ROW], edges[leaves, TO], edges[leaves, PATCH]))]
        comes = comes[np.lexsort((edges[comes, ROW], edges[comes, FROM], edges[comes, PATCH]))]
        following[leaves] = comes
    return following


def _visited_before(corners: Ints, begins: Ints) -> Ints:
    """Return for each corner where its walk touched the same point before, -1 where it did not.

    A walk touches a point at most twice, since four edges meet there.
    """
    walk = np.repeat(np.arange(len(begins) - 1), np.diff(begins))
    order = np.lexsort((corners[:, 0], corners[:, 1], walk))
    again = (np.diff(corners[order], axis=0) == 0).all(axis=1) & (np.diff(walk[order]) == 0)
    before = np.full(len(corners), -1)
    before[order[1:][again]] = order[:-1][again]
    return before


def _signed_areas(corners: Ints, begins: Ints) -> Ints:
    """Return twice the area of each ring: positive of outer ones, negative of holes."""
    x, y = corners.T
    following = np.arange(1, len(corners) + 1)
    following[begins[1:] - 1] = begins[:-1]
    areas: Ints = np.add.reduceat(x * y[following] - x[following] * y, begins[:-1])
    return areas


def _runs_beside(corners: Ints, begins: Ints, patch: Ints, runs: Ints) -> Ints:
    """Return the run of cells beside the first edge of each ring, on its right hand."""
    (x, y), (ahead_x, ahead_y) = corners[begins[:-1]].T, corners[begins[:-1] + 1].T
    along = y == ahead_y
    column = np.where(along, np.minimum(x, ahead_x), np.where(ahead_y < y, x, x - 1))
    row = np.where(along, np.where(ahead_x > x, y, y - 1), np.minimum(y, ahead_y))
    rows, columns = runs[:, 1].max() + 1, runs[:, 3].max() + 1
    known = (runs[:, 0] * rows + runs[:, 1]) * columns + runs[:, 2]
    beside: Ints = np.searchsorted(known, (patch * rows + row) * columns + column, side="right") - 1
    return beside
