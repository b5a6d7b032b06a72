"""Patches of a polygon layer: the same figures as from cells, on the ellipsoid."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
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
    figures = np.array([_measure(patch, crs) for patch in found], np.float64).reshape(-1, 5)
    area, perimeter, outer, filled, holes = figures.T
    return PolygonPatches(
        np.array(names, dtype=object),
        _as_array(found),
        area,
        perimeter,
        outer,
        filled,
        holes.astype(np.int64),
        left_out,
    )


def _as_array(geometries: list[Any]) -> Geometries:
    out = np.empty(len(geometries), dtype=object)
    out[:] = geometries
    return out


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


def _measure(patch: Any, crs: CRS) -> tuple[float, float, float, float, int]:
    """Return area, perimeter, outer perimeter, filled area and number of holes of one patch."""
    outer = outer_area = inner = inner_area = 0.0
    holes = 0
    for part in shapely.get_parts(patch):
        area, length = ring_size(part.exterior, crs)
        outer, outer_area = outer + length, outer_area + area
        for ring in part.interiors:
            area, length = ring_size(ring, crs)
            inner, inner_area, holes = inner + length, inner_area + area, holes + 1
    return outer_area - inner_area, outer + inner, outer, outer_area, holes


def ring_size(ring: Any, crs: CRS) -> tuple[float, float]:
    """Return the area inside a ring in square metres and its length in metres."""
    if is_engineering(crs):
        unit = float(crs.axis_info[0].unit_conversion_factor)
        return shapely.Polygon(ring).area * unit**2, ring.length * unit
    from pyproj import Geod

    unit = crs.axis_info[0].unit_conversion_factor
    major, e2 = ellipsoid(crs)
    longest = EDGE_M / (major if crs.is_geographic else 1.0) / unit
    x, y = shapely.get_coordinates(shapely.segmentize(ring, longest)).T
    area, length = Geod(a=major, es=e2).polygon_area_perimeter(*lon_lat(crs, x, y))
    return abs(area), length
