"""Outlines and lines laid over each other: faces that nothing crosses, and the edges between them.

Boundaries that several outlines share are one edge, whatever vertex each begins with. Memory holds the
outlines twice and the faces: about 300 bytes a vertex at its most.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from geofractal.landcover.grid import Ints

Geometries = NDArray[np.object_]

FACES_AT_ONCE = 20_000


@dataclass(frozen=True, slots=True)
class Planar:
    """Faces, the edges between them, and the nodes where edges end.

    Attributes
    ----------
    faces : (f,) polygons that share no area
    edges : (e,) lines that meet in their ends alone
    sides : (e, 2) face on the left and on the right of an edge; f where there is none. Both sides of a line
        that bounds no face are the face that it lies in
    ends : (e, 2) number of the node at its first and at its last end
    nodes : (n, 2) coordinates
    """

    faces: Geometries
    edges: Geometries
    sides: Ints
    ends: Ints
    nodes: NDArray[np.float64]


def lay_over(rings: Geometries, lines: Geometries, snap: float) -> Planar:
    """Return what rings and lines cut the plane into.

    Parameters
    ----------
    rings : (r,) linear rings, with shared stretches as often as there are outlines
    lines : (l,) further lines
    snap : if some outlines fail to meet by less than this, all vertices are rounded to multiples of it, so
        that they do; else they stay where they are
    """
    drawn = np.concatenate([_arcs(rings), lines])
    edges, faces = _noded(drawn, 0.0)
    if _thinnest(faces) < snap:
        edges, faces = _noded(drawn, snap)
    ends, nodes = _ends(edges)
    sides = _sides(edges, faces, ends, nodes)
    loose = np.flatnonzero((sides == len(faces)).all(axis=1))
    if len(loose) and len(faces):
        middle = shapely.line_interpolate_point(edges[loose], 0.5, normalized=True)
        place, face = shapely.STRtree(faces).query(middle, predicate="intersects")
        sides[loose[place]] = face[:, None]
    return Planar(faces, edges, sides, ends, nodes)


def _arcs(rings: Geometries) -> Geometries:
    """Return the stretches of rings between vertices where they part or meet, each once."""
    import pandas as pd

    if not len(rings):
        return np.empty(0, object)
    rings = shapely.remove_repeated_points(rings)
    xy, count = shapely.get_coordinates(rings) + 0.0, shapely.get_num_coordinates(rings)
    last = np.cumsum(count) - 1
    xy = np.delete(xy, last, axis=0)
    size = count - 1
    start = np.cumsum(size) - size
    vertex, _ = pd.factorize(xy[:, 0] + 1j * xy[:, 1])
    at, ring = np.arange(len(xy)), np.repeat(np.arange(len(size)), size)
    after = at + 1
    after[start + size - 1] = start
    pairs = np.sort(np.stack([vertex, vertex[after]], axis=1).astype(np.int64), axis=1)
    segment, kinds = pd.factorize(pairs[:, 0] * len(xy) + pairs[:, 1])
    degree = np.bincount(np.concatenate([kinds // len(xy), kinds % len(xy)]), minlength=len(xy))
    begins = degree[vertex] != 2
    begins[start[~np.logical_or.reduceat(begins, start)]] = True
    places = np.flatnonzero(begins)
    shift = places[np.searchsorted(places, start)] - start
    order = start[ring] + (shift[ring] + at - start[ring]) % size[ring]  # each ring from where an arc begins
    first = np.flatnonzero(begins[order])
    length = np.diff(np.append(first, len(order)))
    _, single = np.unique(np.minimum.reduceat(segment[order], first), return_index=True)
    kept = np.zeros(len(first), np.bool_)
    kept[single] = True
    inner = np.repeat(kept, length)
    arc = np.concatenate([np.repeat(np.arange(len(first)), length)[inner], np.flatnonzero(kept)])
    source = np.concatenate([order[inner], after[order[first + length - 1]][kept]])
    by_arc = np.argsort(arc, kind="stable")
    _, index = np.unique(arc[by_arc], return_inverse=True)
    found: Geometries = shapely.linestrings(xy[source[by_arc]], indices=index)
    return found


def _noded(lines: Geometries, snap: float) -> tuple[Geometries, Geometries]:
    """Return lines cut where they cross, and the faces between them."""
    grid = {"grid_size": snap} if snap else {}
    parts = shapely.get_parts(shapely.union_all(lines, **grid))
    edges = parts[shapely.get_type_id(parts) == shapely.GeometryType.LINESTRING]
    faces = shapely.get_parts(shapely.polygonize(edges)) if len(edges) else np.empty(0, object)
    return edges, faces


def _thinnest(faces: Geometries) -> float:
    """Return the least mean width of a face."""
    return float((2 * shapely.area(faces) / shapely.length(faces)).min(initial=np.inf))


def _ends(edges: Geometries) -> tuple[Ints, NDArray[np.float64]]:
    """Return the nodes at the ends of edges."""
    import pandas as pd

    points = np.concatenate([shapely.get_point(edges, 0), shapely.get_point(edges, -1)])
    xy = shapely.get_coordinates(points) + 0.0
    node, found = pd.factorize(xy[:, 0] + 1j * xy[:, 1])
    ends = np.ascontiguousarray(node.astype(np.int64).reshape(2, -1).T)
    return ends, np.stack([np.real(found), np.imag(found)], axis=1)


def _sides(edges: Geometries, faces: Geometries, ends: Ints, nodes: NDArray[np.float64]) -> Ints:
    """Return the faces whose outline runs along each edge, told by the edge's first segment."""
    import pandas as pd

    sides = np.full((len(edges), 2), len(faces), np.int64)
    if not len(edges):
        return sides
    second = shapely.get_coordinates(shapely.get_point(edges, 1)) + 0.0
    first = nodes[ends[:, 0]]
    points = pd.Index(pd.unique(np.concatenate([_as_one(first), _as_one(second)])))
    begins = points.get_indexer(_as_one(first))
    segments = pd.Index(_key(begins, points.get_indexer(_as_one(second))))
    for begin in range(0, len(faces), FACES_AT_ONCE):
        rings, owner = shapely.get_rings(faces[begin : begin + FACES_AT_ONCE], return_index=True)
        outer = np.diff(owner, prepend=-1) > 0
        xy, ring = shapely.get_coordinates(rings, return_index=True)
        point = points.get_indexer(_as_one(xy + 0.0))
        same = (ring[1:] == ring[:-1]) & (point[1:] >= 0) & (point[:-1] >= 0)
        edge = segments.get_indexer(_key(point[:-1][same], point[1:][same]))
        known = edge >= 0
        edge, ring, start = edge[known], ring[1:][same][known], point[:-1][same][known]
        within_left = (outer == shapely.is_ccw(rings))[ring] == (start == begins[edge])
        sides[edge, np.where(within_left, 0, 1)] = begin + owner[ring]
    return sides


def corners(planar: Planar, parting: NDArray[np.bool_]) -> Ints:
    """Return (e, 2, 2) what the faces at each node have in common, on the left of edges as these leave it.

    It is the node, or one of the sectors that parting edges cut a node into. Where a single one ends, the
    faces on its sides have nothing in common but other faces, which are in two sectors. What is on the left
    of an edge that leaves its first end is in row 0, of one that leaves its last end in row 1.

    Parameters
    ----------
    parting : (e,) which edges part the faces on their sides
    """
    found: Ints = np.repeat(planar.ends[:, :, None], 2, axis=2)
    nodes = len(planar.nodes)
    several = np.bincount(planar.ends[parting].ravel(), minlength=nodes) > 0
    edge, end = np.nonzero(several[planar.ends])
    node, parts = planar.ends[edge, end], parting[edge]
    beside = shapely.get_point(planar.edges[edge], np.where(end == 0, 1, -2))
    across, up = (shapely.get_coordinates(beside) - planar.nodes[node]).T
    order = np.lexsort((np.arctan2(up, across), node))  # about each node, against the clock
    edge, end, node, parts = edge[order], end[order], node[order], parts[order]
    first = np.flatnonzero(np.diff(node, prepend=-1))
    size = np.diff(np.append(first, len(node)))
    passed: Ints = np.cumsum(parts)
    passed = passed - np.repeat((passed - parts)[first], size)
    total: Ints = np.repeat(passed[first + size - 1], size)
    group = np.repeat(np.arange(len(first)), size)
    begin = np.zeros(len(first), np.int64)
    begin[group[parts]] = np.flatnonzero(parts)
    turn = (np.arange(len(node)) - begin[group]) % size[group]
    own, tip = nodes + 2 * first[group], total == 1
    sector = passed % total
    found[edge, end, 0] = own + np.where(tip, turn == size[group] - 1, sector)
    found[edge, end, 1] = own + np.where(tip, turn > 0, sector)
    return found


def _as_one(xy: NDArray[np.float64]) -> NDArray[Any]:
    return xy[:, 0] + 1j * xy[:, 1]


def _key(one: Any, other: Any) -> Ints:
    """Return a whole number for each pair, whichever comes first."""
    one, other = np.asarray(one, np.int64), np.asarray(other, np.int64)
    key: Ints = np.minimum(one, other) * (1 << 31) + np.maximum(one, other)
    return key
