"""Polygons of patches, from the runs of their cells."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

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
    rings_of,
    row_edges,
)
from geofractal.landcover.grid import Affine

Ints = NDArray[np.int64]


def patch_polygons(runs: Ints, count: int, transform: Affine) -> NDArray[np.object_]:
    """Return the polygon of each patch, along cell edges, in the coordinates of its grid.

    Parts that meet in corners only are parts of a multipolygon; so every polygon is valid.

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
    edges = row_edges(np.ascontiguousarray(runs))
    order, begins = rings_of(_following(edges))
    walked = edges[order]
    corners = np.stack([walked[:, [FROM, TO]], walked[:, [ROW, ROW]]], axis=-1).reshape(-1, 2)
    rings: list[list[Ints]] = [[] for _ in range(count)]
    for first, stop in pairwise(begins):
        rings[walked[first, PATCH]] += split_at_repeats(corners[2 * first : 2 * stop])
    found = np.empty(count, dtype=object)
    found[:] = [_polygon(one, transform) for one in rings]
    return found


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


def split_at_repeats(ring: Ints) -> list[Ints]:
    """Cut a closed walk into rings that touch no corner twice."""
    keys = ring[:, 0] * (ring[:, 1].max() + 1) + ring[:, 1]
    if len(np.unique(keys)) == len(keys):
        return [ring]
    found: list[Ints] = []
    path: list[int] = []
    place: dict[int, int] = {}
    for i, key in enumerate(keys.tolist()):
        if key in place:
            start = place[key]
            loop = path[start:]
            found.append(ring[loop])
            for j in loop[1:]:
                del place[int(keys[j])]
            del path[start + 1 :]
        else:
            place[key] = len(path)
            path.append(i)
    found.append(ring[path])
    return found


def _polygon(rings: list[Ints], transform: Affine) -> Any:
    """Return a polygon of rings in cells: outer ones have a positive area, holes a negative one."""
    a, b, c, d, e, f = transform
    areas = [_signed_area(ring) for ring in rings]
    shapes = [np.column_stack([a * x + b * y + c, d * x + e * y + f]) for x, y in (ring.T for ring in rings)]
    outer = [i for i, area in enumerate(areas) if area > 0]
    inner = [i for i, area in enumerate(areas) if area < 0]
    holes: dict[int, list[Any]] = {i: [] for i in outer}
    for hole in inner:
        holes[_owner(rings[hole], rings, outer, areas)].append(shapes[hole])
    parts = [shapely.Polygon(shapes[i], holes[i]) for i in outer]
    return parts[0] if len(parts) == 1 else shapely.MultiPolygon(parts)


def _signed_area(ring: Ints) -> int:
    x, y = ring.T
    return int((x * np.roll(y, -1) - np.roll(x, -1) * y).sum())


def _owner(hole: Ints, rings: list[Ints], outer: list[int], areas: list[int]) -> int:
    """Return the smallest outer ring round the patch's cell beside a hole's first edge along a row."""
    if len(outer) == 1:
        return outer[0]
    (x0, y0), (x1, y1) = hole[0], hole[1]
    beside = (min(x0, x1) + 0.5, y0 + (0.5 if x1 > x0 else -0.5)) if y0 == y1 else None
    if beside is None:
        beside = (x0 + (0.5 if y1 < y0 else -0.5), min(y0, y1) + 0.5)
    point = shapely.Point(beside)
    round_it = [i for i in outer if shapely.Polygon(rings[i]).contains(point)]
    return min(round_it, key=areas.__getitem__)
