"""The one door to coordinate reference systems: x before y everywhere, never a datum shift.

Shape needs no datum: a layer is taken to longitude and latitude on its own ellipsoid by undoing its
own map projection, and nothing else.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any, Literal

import numpy as np
import pyproj
from pyproj.exceptions import CRSError, ProjError

from geofractal.errors import LayerError
from geofractal.measure import Bools, Floats

WORLD_LATITUDE = np.radians(90.0 + 1e-6)
WORLD_LONGITUDE = np.radians(540.0)
ROUND_TRIP = 1e-6

Bounds = tuple[float, float, float, float]
"""Smallest x, smallest y, largest x, largest y."""


@dataclass(frozen=True, slots=True)
class SourceCrs:
    """What the projector needs to know of a layer's CRS; made by `source_crs`.

    Attributes
    ----------
    kind : ``geographic`` (longitude, latitude), ``projected`` (has a map projection to undo) or
        ``as-given`` (a local plane without an ellipsoid)
    name : the CRS's own name
    wkt : its horizontal part
    a, b : semi-axes of its ellipsoid in metres; NaN where it has none
    unit : radians a coordinate unit where ``geographic``, else metres a coordinate unit
    """

    kind: Literal["geographic", "projected", "as-given"]
    name: str
    wkt: str
    a: float
    b: float
    unit: float

    @property
    def e2(self) -> float:
        """Square of the ellipsoid's first eccentricity."""
        return 1.0 - (self.b / self.a) ** 2

    def lonlat(self, xy: Floats) -> Floats:
        """Return (m, 2) longitude and latitude in radians on the layer's own ellipsoid.

        A point that the map projection cannot undo becomes infinite. A local plane has no longitudes:
        `LayerError`.
        """
        if self.kind == "geographic":
            return xy * self.unit
        out = np.empty_like(xy)
        undo, radians = _inverse(self.wkt)
        out[:, 0], out[:, 1] = undo.transform(xy[:, 0], xy[:, 1])
        out *= radians
        return out

    def in_world(self, lonlat: Floats) -> Bools:
        """Return which points (radians) lie between the poles and within 1.5 turns of longitude."""
        with np.errstate(invalid="ignore"):
            inside: Bools = np.abs(lonlat[:, 1]) <= WORLD_LATITUDE
            inside &= np.abs(lonlat[:, 0]) <= WORLD_LONGITUDE
        return inside

    def comes_back(self, xy: Floats, lonlat: Floats, size: Floats) -> Bools:
        """Return which points of a projected layer their longitude and latitude lead back to.

        Allowed is a millionth of `size`, the extent of the point's feature in coordinate units.
        """
        undo, radians = _inverse(self.wkt)
        back = undo.transform(lonlat[:, 0] / radians, lonlat[:, 1] / radians, direction="INVERSE")
        allowed = ROUND_TRIP * size + 1e-9 * np.abs(xy).max(axis=1)
        with np.errstate(invalid="ignore"):
            near: Bools = np.hypot(back[0] - xy[:, 0], back[1] - xy[:, 1]) <= allowed
        return near


@cache
def parse_crs(text: str) -> pyproj.CRS:
    """Return the CRS that a text names (an authority code, WKT, PROJ string or PROJJSON).

    Raises
    ------
    LayerError
        where the text names none.
    """
    try:
        return pyproj.CRS.from_user_input(text)
    except CRSError as error:
        raise LayerError(
            f"CRS {text[:80]!r} is not understood ({error}); give an authority code such as EPSG:3035, "
            "or its WKT"
        ) from error


@cache
def source_crs(text: str) -> SourceCrs:
    """Return what the projector needs of a CRS: the horizontal part, its kind, ellipsoid and unit.

    Compound CRSs give their horizontal part, bound CRSs their source (a datum shift changes no shape).

    Raises
    ------
    LayerError
        where it has no horizontal part (vertical, geocentric, time), or no known unit.
    """
    crs = _horizontal(parse_crs(text))
    unit = crs.axis_info[0].unit_conversion_factor if crs.axis_info else 0.0
    if not unit > 0.0:
        raise LayerError(f"CRS {crs.name!r} states no unit; give the layer a CRS with a known unit")
    wkt = crs.to_wkt()
    if crs.is_engineering:
        return SourceCrs("as-given", crs.name, wkt, np.nan, np.nan, unit)
    ellipsoid = crs.ellipsoid
    if ellipsoid is None or not (crs.is_geographic or crs.is_projected):
        raise LayerError(
            f"CRS {crs.name!r} is a {crs.type_name}; layers need a geographic, projected or local plane "
            "(engineering) CRS"
        )
    a, b = ellipsoid.semi_major_metre, ellipsoid.semi_minor_metre
    if crs.is_geographic and not crs.is_derived:
        return SourceCrs("geographic", crs.name, wkt, a, b, unit)
    return SourceCrs("projected", crs.name, wkt, a, b, unit * a if crs.is_geographic else unit)


def scale_factors(source: SourceCrs, lonlat: Floats) -> tuple[float, float]:
    """Return the worst relative distance and area error of a projected CRS at (m, 2) radians.

    Infinite where the projection has no factors at a point.
    """
    factors = pyproj.Proj(source.wkt).get_factors(lonlat[:, 0], lonlat[:, 1], radians=True)
    longest, shortest = np.asarray(factors.tissot_semimajor), np.asarray(factors.tissot_semiminor)
    distance = np.maximum(np.abs(longest - 1.0), np.abs(shortest - 1.0))
    return float(distance.max()), float(np.abs(np.asarray(factors.areal_scale) - 1.0).max())


def crs_doubt(text: str, bounds: Bounds) -> str | None:
    """Return why a layer's bounds do not look like its CRS's coordinates, or None.

    Catches degrees in a metric CRS, metres in a geographic one, and layers wholly outside the area
    that the CRS was made for: the marks of a wrong or swapped .prj.
    """
    crs = _horizontal(parse_crs(text))
    source = source_crs(text)
    box = ", ".join(f"{value:.6g}" for value in bounds)
    like_degrees = (
        max(abs(bounds[0]), abs(bounds[2])) <= 360.0 and max(abs(bounds[1]), abs(bounds[3])) <= 90.0
    )
    if source.kind == "projected" and like_degrees:
        return (
            f"bounds {box} look like degrees, yet {source.name} is a projected CRS; is the CRS (.prj) wrong?"
        )
    if source.kind == "as-given":
        return None
    corners = np.array([(x, y) for x in bounds[::2] for y in bounds[1::2]])
    lonlat = source.lonlat(corners)
    size = np.full(4, np.hypot(bounds[2] - bounds[0], bounds[3] - bounds[1]))
    inside = source.in_world(lonlat)
    if source.kind == "projected":
        inside &= source.comes_back(corners, lonlat, size)
    if not inside.all():
        return f"bounds {box} lie outside the world of {source.name}; is the CRS (.prj) wrong?"
    return _outside_area(crs, source, lonlat, box)


def _outside_area(crs: pyproj.CRS, source: SourceCrs, lonlat: Floats, box: str) -> str | None:
    """Return a text where no corner and not the middle lie in the CRS's area of use."""
    area = crs.area_of_use
    if area is None:
        return None
    degrees = np.degrees(np.vstack([lonlat, lonlat.mean(axis=0)]))
    width = (area.east - area.west) % 360.0 or 360.0
    east = (degrees[:, 0] - area.west + 1.0) % 360.0
    inside = (east <= width + 2.0) & (degrees[:, 1] >= area.south - 1.0) & (degrees[:, 1] <= area.north + 1.0)
    if inside.any():
        return None
    return f"bounds {box} lie outside the area of use of {source.name}; is the CRS (.prj) wrong?"


def _horizontal(crs: pyproj.CRS) -> pyproj.CRS:
    """Return the horizontal part of a compound CRS and the source of a bound one."""
    while crs.is_compound or crs.is_bound:
        part: Any = crs.sub_crs_list[0] if crs.is_compound else crs.source_crs
        crs = part
    return crs


@cache
def _inverse(wkt: str) -> tuple[pyproj.Transformer, float]:
    """Return the transformer to the CRS's own base and the radians in its base's unit."""
    crs = base = pyproj.CRS.from_wkt(wkt)
    while base.is_derived and base.source_crs is not None:
        base = base.source_crs
    try:
        undo = pyproj.Transformer.from_crs(crs, base, always_xy=True)
    except ProjError as error:
        raise LayerError(f"CRS {crs.name!r} cannot be undone to longitude and latitude ({error})") from error
    return undo, base.axis_info[0].unit_conversion_factor
