"""The grid on which a class map is measured: its own, or an equal-distance one it is warped to."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from geofractal.errors import ConfigError, SourceError
from geofractal.landcover.grid import Floats, Grid, ellipsoid, lon_lat, plane_by_ground

if TYPE_CHECKING:
    from pyproj import CRS

GRIDS = ("auto", "source", "warp")
WORLD = 0.5  # scale error from which a plane is no candidate: the map is most of a globe


def choose_grid(source: Grid, grid: str, budget: float, cell_size_m: float | None) -> Grid:
    """Return the grid to measure on.

    ``source`` is the raster's own grid, ``warp`` the better of the two equal-distance planes, ``auto``
    the first of the two that keeps the budget; a stated cell size asks for ``warp``.

    Raises
    ------
    SourceError
        where neither keeps the budget
    """
    if grid not in GRIDS:
        raise ConfigError(f"grid is {grid!r}; allowed are {', '.join(GRIDS)}.")
    if cell_size_m is not None and (grid == "source" or not cell_size_m > 0):
        raise ConfigError(f"cell-size-m is {cell_size_m}; it must be positive and needs grid: warp.")
    if grid == "source" or (grid == "auto" and cell_size_m is None and source.distortion <= budget):
        return source
    warped = equal_distance_grid(source, cell_size_m)
    if warped is None or warped.distortion > budget:
        found = "none exists for its extent" if warped is None else f"{warped.distortion:.2%} at best"
        raise SourceError(
            f"No grid keeps lengths within {budget:.2%} over this raster: its own grid errs by "
            f"{source.distortion:.2%}, an equal-distance plane: {found}. Cut the raster into smaller "
            "extents, raise budget-percent, or state grid: source."
        )
    return warped


def equal_distance_grid(source: Grid, cell_size_m: float | None = None) -> Grid | None:
    """Return the azimuthal or conic equidistant grid of least distortion over the raster, if there is one.

    Square cells, north up; their side is the root of the source's median cell area unless stated.
    """
    if source.kind == "plane":
        raise ConfigError("An engineering CRS is a plane as it is and cannot be warped; use grid: source.")
    lon, lat = _outline(source)
    candidates = [_candidate(source, name, text, lon, lat) for name, text in _planes(lon, lat)]
    usable = [found for found in candidates if found[0] < WORLD]
    if not usable:
        return None
    distortion, name, crs, box = min(usable, key=lambda found: found[0])
    cell = cell_size_m or math.sqrt(math.prod(source.typical_cell))
    left, bottom, right, top = box
    return Grid(
        rows=max(1, math.ceil((top - bottom) / cell)),
        columns=max(1, math.ceil((right - left) / cell)),
        transform=(cell, 0.0, left, 0.0, -cell, top),
        crs=crs,
        plane=name,
        plane_distortion=distortion,
    )


def _outline(source: Grid) -> tuple[Floats, Floats]:
    """Return lon, lat of points over the raster, its border included."""
    a, b, c, d, e, f = source.transform
    r, k = np.meshgrid(np.linspace(0, source.rows, 65), np.linspace(0, source.columns, 65), indexing="ij")
    lon, lat = lon_lat(source.crs, (a * k + b * r + c).ravel(), (d * k + e * r + f).ravel())
    good = np.isfinite(lon) & np.isfinite(lat) & (np.abs(lat) <= 90)
    if not good.any():
        raise SourceError("The raster lies outside the area where its CRS is defined; check its transform.")
    return lon[good], lat[good]


def _planes(lon: Floats, lat: Floats) -> list[tuple[str, str]]:
    """Return the candidates: azimuthal at the centre, conic with parallels a sixth inside the extent."""
    lam, phi = np.radians(lon), np.radians(lat)
    x, y, z = (np.cos(phi) * np.cos(lam)).mean(), (np.cos(phi) * np.sin(lam)).mean(), np.sin(phi).mean()
    centre = (
        f"+lat_0={math.degrees(math.atan2(z, math.hypot(x, y)))!r} +lon_0={math.degrees(math.atan2(y, x))!r}"
    )
    low, high = float(lat.min()), float(lat.max())
    first, second = low + (high - low) / 6, high - (high - low) / 6
    planes = [("azimuthal", f"+proj=aeqd {centre}")]
    if abs(first + second) > 1e-6:  # a cone needs an apex
        planes.append(("conic", f"+proj=eqdc {centre} +lat_1={first!r} +lat_2={second!r}"))
    return planes


def _candidate(
    source: Grid, name: str, text: str, lon: Floats, lat: Floats
) -> tuple[float, str, CRS, tuple[float, float, float, float]]:
    """Return worst scale error, name, CRS and extent of one candidate."""
    import pyproj

    major, e2 = ellipsoid(source.crs)
    minor = major * math.sqrt(1 - e2)
    crs = pyproj.CRS.from_proj4(f"{text} +a={major!r} +b={minor!r} +units=m +no_defs +type=crs")
    x, y = (np.asarray(part) for part in pyproj.Proj(crs)(lon, lat))
    slope: Any = plane_by_ground(crs, lon, lat)
    if not (np.isfinite(slope).all() and np.isfinite(x).all() and np.isfinite(y).all()):
        return math.inf, name, crs, (0, 0, 0, 0)
    scales = np.linalg.svd(slope, compute_uv=False)
    return float(np.abs(scales - 1).max()), name, crs, (x.min(), y.min(), x.max(), y.max())
