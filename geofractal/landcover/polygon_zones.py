"""Zones and barriers of a layer of polygons, brought to its CRS."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.landcover.barriers import Widths, barrier_widths, line_parts, unusable_line
from geofractal.landcover.grid import Floats, is_engineering, lon_lat, plane_by_ground, radii
from geofractal.landcover.polygon_map import metres_a_unit
from geofractal.landcover.polygons import Geometries, unusable
from geofractal.landcover.zones import change_of_crs, distinct_names

if TYPE_CHECKING:
    from pyproj import CRS

EDGE_M = 500.0
"""Longest edge that is projected by its ends alone; longer ones, straight in their own CRS, are divided
first. Over 500 m an edge and its geodesic are 1 cm apart at most where a map is drawn in common CRSs."""

PIECE = 20  # edges of a barrier whose strip is drawn at once, 10 km at most

QUARTER_SEGMENTS = 16  # chords of a quarter circle

SHARED = 1e-9  # of the smaller zone's area; less than that is rounding


@dataclass(frozen=True)
class PolygonZones:
    """Zones in the CRS of the polygons.

    Attributes
    ----------
    names : (n,) name of each zone
    problems : (n,) why a zone cannot be measured; empty where it can
    geometries : (n,) polygons, None where they cannot be measured
    overlaps : (n,) numbers of the zones that share an area with each
    sets : zones that share none, in their order; each zone that can be measured is in one
    """

    names: tuple[str, ...]
    problems: tuple[str, ...]
    geometries: Geometries
    overlaps: tuple[tuple[int, ...], ...]
    sets: tuple[tuple[int, ...], ...]

    def __len__(self) -> int:
        """Return the number of zones, also of those that cannot be measured."""
        return len(self.names)


@dataclass(frozen=True)
class PolygonBarriers:
    """Barriers in the CRS of the polygons.

    Attributes
    ----------
    lines : (n,) lines that part what they cross
    strips : (s,) what those with a width take of all classes
    left_out : why geometries are no barrier, and how many
    """

    lines: Geometries
    strips: Geometries
    left_out: dict[str, int]

    @property
    def wide(self) -> bool:
        """Whether some barrier has a width."""
        return len(self.strips) > 0


def place_polygon_zones(
    geometries: Sequence[Any], names: Sequence[Any], crs: CRS | None, polygons: Geometries, own: CRS
) -> PolygonZones:
    """Return zones of polygons.

    Parameters
    ----------
    geometries, names : (n,) zones, or what stands in their place: such zones keep their row and a reason
    crs : of the zones
    polygons, own : what is measured, and its CRS

    Raises
    ------
    ConfigError
        two zones of one name
    LayerError
        no way from the zones' CRS to that of the polygons
    """
    titles = distinct_names(names)
    tree, problems, placed = shapely.STRtree(polygons), [], []
    for geometry in geometries:
        reason, moved = unusable(geometry), None
        if not reason:
            moved = _moved(geometry, crs, own)
            reason = _astray(moved) or unusable(moved)
        if not reason and not len(tree.query(moved, predicate="intersects")):
            reason = "off the map"
        problems.append(reason)
        placed.append(None if reason else moved)
    found = np.array([*placed, None], object)[:-1]
    overlaps = _overlaps(found)
    return PolygonZones(titles, tuple(problems), found, overlaps, _sets(problems, overlaps))


def place_polygon_barriers(
    geometries: Sequence[Any], crs: CRS | None, own: CRS, width_m: Widths = None
) -> PolygonBarriers:
    """Return lines as barriers of polygons, as `geofractal.landcover.barriers.place_barriers`."""
    lines, widths, reasons = [], [], []
    for geometry, width in zip(geometries, barrier_widths(width_m, len(geometries)), strict=True):
        reason = unusable_line(geometry)
        moved = None if reason else _moved(shapely.multilinestrings(line_parts(geometry)), crs, own)
        reason = reason or _astray(moved)
        reasons.append(reason)
        if not reason:
            lines.append(moved)
            widths.append(width)
    parts, line = shapely.get_parts(np.array([*lines, None], object)[:-1], return_index=True)
    width_of = np.array(widths)[line] if len(line) else np.empty(0)
    strips = [_strip(part, width / 2, own) for part, width in zip(parts, width_of, strict=True) if width]
    taken = shapely.get_parts(shapely.union_all(strips)) if strips else np.empty(0, object)
    return PolygonBarriers(parts, taken, dict(Counter(reason for reason in reasons if reason)))


def _strip(line: Any, metres: float, own: CRS) -> Any:
    """Return what lies within a distance of a line, true on the ground, with round ends."""
    if is_engineering(own):
        return shapely.buffer(line, metres / metres_a_unit(own), quad_segs=QUARTER_SEGMENTS)
    xy = shapely.get_coordinates(shapely.segmentize(line, EDGE_M / metres_a_unit(own)))
    strips = []
    for first in range(0, max(len(xy) - 1, 1), PIECE):  # short pieces, over which scales hardly change
        piece = xy[first : first + PIECE + 1]
        middle = piece.mean(axis=0)
        ground = _ground_to_plane(own, middle)
        local = shapely.linestrings((piece - middle) @ np.linalg.inv(ground).T)
        strip = shapely.buffer(local, metres, quad_segs=QUARTER_SEGMENTS)
        strips.append(shapely.transform(strip, lambda at, m=middle, g=ground: at @ g.T + m))
    return shapely.union_all(strips)


def _ground_to_plane(own: CRS, place: Floats) -> Floats:
    """Return (2, 2) d(x, y) / d(east, north) at a place, in units of a CRS per metre."""
    if own.is_geographic:
        unit = float(own.axis_info[0].unit_conversion_factor)
        return np.diag(1 / (np.concatenate(radii(own, place[1:] * unit)) * unit))
    found: Floats = plane_by_ground(own, *lon_lat(own, place[:1], place[1:]))[0]
    return found


def _moved(geometry: Any, crs: CRS | None, own: CRS) -> Any:
    """Return a geometry in the CRS of the polygons; infinite where there is no way there."""
    flat = shapely.force_2d(geometry)
    change = change_of_crs(crs, own, "polygons'")
    if change is None or crs is None:
        return flat
    dense = shapely.segmentize(flat, EDGE_M / metres_a_unit(crs))
    return shapely.transform(dense, lambda xy: np.stack(change.transform(*xy.T), axis=1))


def _astray(moved: Any) -> str:
    good = np.isfinite(shapely.get_coordinates(moved)).all()
    return "" if good else "reaches where the polygons' CRS is not defined"


def _overlaps(zones: Geometries) -> tuple[tuple[int, ...], ...]:
    """Return the numbers of the zones that share an area with each."""
    first, second = shapely.STRtree(zones).query(zones, predicate="intersects")
    first, second = first[first < second], second[first < second]
    shared = shapely.area(shapely.intersection(zones[first], zones[second]))
    least = np.minimum(shapely.area(zones[first]), shapely.area(zones[second]))
    others: list[set[int]] = [set() for _ in zones]
    for k in np.flatnonzero(shared > SHARED * least):
        others[first[k]].add(int(second[k]))
        others[second[k]].add(int(first[k]))
    return tuple(tuple(sorted(one)) for one in others)


def _sets(problems: Sequence[str], overlaps: Sequence[tuple[int, ...]]) -> tuple[tuple[int, ...], ...]:
    """Split zones into sets without common area, greedily in their order."""
    sets: list[list[int]] = []
    for k in (k for k, reason in enumerate(problems) if not reason):
        free = next((one for one in sets if not set(one).intersection(overlaps[k])), None)
        if free is None:
            sets.append([k])
        else:
            free.append(k)
    return tuple(tuple(one) for one in sets)
