"""Patches of a polygon layer: the same figures as from cells, on the ellipsoid."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely
from numpy.typing import NDArray

from geofractal.landcover.grid import Floats, ellipsoid, is_engineering, lon_lat

if TYPE_CHECKING:
    from pyproj import CRS

EDGE_M = 2_000.0
"""Longest edge that is taken for a geodesic; longer ones, straight in the layer's CRS, are divided first.
At 60 N a 2 km edge along a parallel lies 0.1 m off its geodesic."""

RINGS_AT_ONCE = 10_000

Geometries = NDArray[np.object_]


@dataclass(frozen=True, slots=True)
class PolygonPatches:
    """Patches of polygons, one value each.

    Attributes
    ----------
    cover : name of the class
    geometry : polygon, or several that meet in points
    area_m2, perimeter_m, outer_perimeter_m, filled_area_m2 : ellipsoidal; geodesic lengths
    holes : number of holes; a bay closed off by a corner is one, where cells leave it open
    left_out : why input geometries are in no patch, and how many
    """

    cover: NDArray[np.object_]
    geometry: Geometries
    area_m2: Floats
    perimeter_m: Floats
    outer_perimeter_m: Floats
    filled_area_m2: Floats
    holes: NDArray[np.int64]
    left_out: dict[str, int]


def find_polygon_patches(
    geometries: Geometries, cover: Sequence[Any], crs: CRS, *, neighbours: int, dissolve: bool
) -> PolygonPatches:
    """Return the patches of polygons.

    Parameters
    ----------
    geometries : (n,) polygons and multipolygons
    cover : (n,) class of each
    neighbours : 8 joins parts that meet in a point, 4 does not
    dissolve : whether polygons of one class that overlap or share a boundary are one patch; otherwise
        every part of every polygon is a patch
    """
    covers = np.asarray(cover, dtype=object)
    reasons = np.array([unusable(geometry) for geometry in geometries], dtype=object)
    good = reasons == ""
    left_out = dict(Counter(reasons[~good]))
    geometries, covers = shapely.force_2d(geometries[good]), covers[good]
    names: list[Any] = []
    found: list[Any] = []
    for name in dict.fromkeys(covers):
        own = geometries[covers == name]
        parts = shapely.get_parts(shapely.union_all(own) if dissolve else own)
        parts = parts[shapely.area(parts) > 0]
        patches = _joined_at_points(parts) if dissolve and neighbours == 8 else list(parts)
        names += [name] * len(patches)
        found += patches
    return measured_patches(np.array(names, dtype=object), _as_array(found), crs, left_out)


def measured_patches(
    cover: NDArray[np.object_], patches: Geometries, crs: CRS, left_out: dict[str, int]
) -> PolygonPatches:
    """Return patches, each a polygon or several, with their sizes."""
    area, perimeter, outer, filled, holes = _measures(patches, crs).T
    return PolygonPatches(cover, patches, area, perimeter, outer, filled, holes.astype(np.int64), left_out)


def _as_array(geometries: list[Any]) -> Geometries:
    out = np.empty(len(geometries), dtype=object)
    out[:] = geometries
    return out


def class_name(value: Any) -> str | None:
    """Return the name of a class; None for one that is missing.

    Columns of whole numbers become ones of decimals where values are missing: class 1 stays '1'.
    """
    if value is None or value != value:  # noqa: PLR0124 - NaN alone is unlike itself
        return None
    whole = isinstance(value, float) and value.is_integer()
    return str(int(value) if whole else value)


def unusable(geometry: Any) -> str:
    """Return why a geometry is no sound polygon; empty where it is one."""
    if geometry is None:
        return "missing geometry"
    if geometry.geom_type not in {"Polygon", "MultiPolygon"}:
        return f"{geometry.geom_type}, not a polygon"
    if geometry.is_empty:
        return "empty geometry"
    return "" if geometry.is_valid else f"invalid: {shapely.is_valid_reason(geometry).split('[')[0].strip()}"


def _joined_at_points(parts: Geometries) -> list[Any]:
    """Return parts that meet in points as one; dissolved parts of a class meet nowhere else."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    if len(parts) < 2:
        return list(parts)
    first, second = shapely.STRtree(parts).query(parts, predicate="intersects")
    links = coo_array((np.ones(len(first), bool), (first, second)), shape=(len(parts), len(parts)))
    _, group = connected_components(links, directed=False)
    order = np.argsort(group, kind="stable")
    members = np.split(parts[order], np.flatnonzero(np.diff(group[order])) + 1)
    return [one[0] if len(one) == 1 else shapely.multipolygons(one) for one in members]


def _measures(patches: Geometries, crs: CRS) -> Floats:
    """Return (n, 5) area, perimeter, outer perimeter, filled area and number of holes of patches."""
    parts, patch = shapely.get_parts(patches, return_index=True)
    rings, part = shapely.get_rings(parts, return_index=True)
    area, length = ring_sizes(rings, crs)
    inner = np.ones(len(rings), np.bool_)
    inner[np.unique(part, return_index=True)[1]] = False
    owner, outer = patch[part], ~inner
    sums = [np.where(outer, area, -area), length, np.where(outer, length, 0), np.where(outer, area, 0), inner]
    return np.stack([np.bincount(owner, one, minlength=len(patches)) for one in sums], axis=1)


def polygon_areas(polygons: Geometries, crs: CRS) -> Floats:
    """Return the area of each polygon in square metres."""
    rings, owner = shapely.get_rings(polygons, return_index=True)
    area, _ = ring_sizes(rings, crs)
    inner = np.ones(len(rings), np.bool_)
    inner[np.unique(owner, return_index=True)[1]] = False
    return np.bincount(owner, np.where(inner, -area, area), minlength=len(polygons)).astype(np.float64)


def ring_size(ring: Any, crs: CRS) -> tuple[float, float]:
    """Return the area inside a ring in square metres and its length in metres."""
    area, length = ring_sizes(np.array([ring], object), crs)
    return float(area[0]), float(length[0])


def ring_sizes(rings: Geometries, crs: CRS) -> tuple[Floats, Floats]:
    """Return the area inside each ring in square metres and its length in metres."""
    if is_engineering(crs):
        unit = float(crs.axis_info[0].unit_conversion_factor)
        return shapely.area(shapely.polygons(rings)) * unit**2, shapely.length(rings) * unit
    from pyproj import Geod

    major, e2 = ellipsoid(crs)
    geod, sizes = Geod(a=major, es=e2), np.empty((2, len(rings)))
    for begin in range(0, len(rings), RINGS_AT_ONCE):
        some = shapely.segmentize(rings[begin : begin + RINGS_AT_ONCE], longest_edge(crs))
        lon, lat = lon_lat(crs, *shapely.get_coordinates(some).T)
        stops = np.cumsum(shapely.get_num_coordinates(some))
        for k, (start, stop) in enumerate(pairwise([0, *stops.tolist()]), begin):
            sizes[:, k] = geod.polygon_area_perimeter(lon[start:stop], lat[start:stop])
    return np.abs(sizes[0]), sizes[1]


def line_lengths(lines: Geometries, crs: CRS) -> Floats:
    """Return the length of each line in metres."""
    if is_engineering(crs):
        return np.asarray(shapely.length(lines) * float(crs.axis_info[0].unit_conversion_factor))
    from pyproj import Geod

    major, e2 = ellipsoid(crs)
    dense = shapely.segmentize(lines, longest_edge(crs))
    xy, line = shapely.get_coordinates(dense, return_index=True)
    lon, lat = lon_lat(crs, *xy.T)
    _, _, steps = Geod(a=major, es=e2).inv(lon[:-1], lat[:-1], lon[1:], lat[1:])
    within = line[1:] == line[:-1]
    return np.bincount(line[1:][within], steps[within], minlength=len(lines)).astype(np.float64)


def longest_edge(crs: CRS) -> float:
    """Return `EDGE_M` in units of a CRS."""
    unit = float(crs.axis_info[0].unit_conversion_factor)
    return EDGE_M / (ellipsoid(crs)[0] if crs.is_geographic else 1.0) / unit
