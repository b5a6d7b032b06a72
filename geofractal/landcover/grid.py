"""A raster's grid on the ground: true cell sizes, and how far its cells are from rectangles.

Lengths and areas are whole numbers of small units chosen once for the grid, so that sums of them are
exact and do not depend on the order, the strip height or the number of workers.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import SourceError

if TYPE_CHECKING:
    from pyproj import CRS

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Affine = tuple[float, float, float, float, float, float]

ROOM = 4e18  # largest sum that is allowed to arise in int64
BLOCK_M = 5_000.0  # ground size of a block of rows that share cell sizes; errs by 4e-6 at 400 km off axis
NODE_M = 20_000.0  # distance between the columns where sizes are computed; linear between them
BLOCK_ROWS = 16
NODE_COLUMNS = 64
STEP_DEGREES = 1e-4  # step of numerical derivatives of the projection
LATTICE = 33  # points a side where distortion is computed


@dataclass(frozen=True, slots=True)
class CellSizes:
    """True sizes of a strip's cells in whole units: along a row either constant, or known by column.

    `area` and `width` hold one column (the size of every cell of the row) or columns + 1 (running sums
    from the left edge); `height` one column or columns + 1 (by vertical edge).

    Attributes
    ----------
    area : cell areas; row r of the strip uses line ``area_line[r]``
    height : lengths of vertical cell edges; line ``area_line[r]`` too
    width : lengths of horizontal cell edges; the edge above row r uses line ``edge_line[r]``
    area_line : (rows,)
    edge_line : (rows + 1,)
    """

    area: Ints
    height: Ints
    width: Ints
    area_line: Ints
    edge_line: Ints


@dataclass(frozen=True)
class Grid:
    """Where a class map lies and how large its cells truly are.

    Parameters
    ----------
    rows, columns : shape of the raster
    transform : (a, b, c, d, e, f) of x = a col + b row + c, y = d col + e row + f, in units of `crs`
    crs : the raster's CRS; an engineering (local) CRS is a plane measured as it is
    plane : ``source`` (the raster's own grid), ``azimuthal`` or ``conic`` (warped to that plane)
    plane_distortion : worst scale error of that plane over the raster; 0 on the raster's own grid
    """

    rows: int
    columns: int
    transform: Affine
    crs: CRS
    plane: str = "source"
    plane_distortion: float = 0.0

    @cached_property
    def kind(self) -> str:
        """Return how cell sizes are found: ``rows`` (upright geographic), ``plane`` or ``nodes``."""
        _, b, _, d, _, _ = self.transform
        if is_engineering(self.crs):
            return "plane"
        return "rows" if self.crs.is_geographic and b == d == 0 else "nodes"

    @cached_property
    def unit(self) -> float:
        """Return metres in one of the CRS's units (for a geographic CRS: radians)."""
        axes = self.crs.axis_info
        return float(axes[0].unit_conversion_factor) if axes else 1.0

    @property
    def full_turn(self) -> float:
        """Return the columns of a full turn of longitude on an upright geographic grid."""
        return 2 * math.pi / self.unit / abs(self.transform[0])

    @property
    def seam(self) -> str:
        """Return a word on a map that goes all around the Earth; empty for any other."""
        if self.kind != "rows" or self.columns < self.full_turn - 0.5:
            return ""
        return (
            "a map of all longitudes: its first and last columns are not joined, so patches that lie across "
            "them are counted on either side and reach the map's edge"
        )

    @cached_property
    def typical_cell(self) -> tuple[float, float]:
        """Return the median true width and height of a cell in metres."""
        across, down = self.lattice
        return float(np.nanmedian(length(across))), float(np.nanmedian(length(down)))

    @cached_property
    def length_unit_m(self) -> float:
        """Return the metres of the unit of length: all edges of the raster fit into int64."""
        across, down = self.lattice
        return self._unit_for(2 * float(np.nanmax(length(across)) + np.nanmax(length(down))))

    @cached_property
    def area_unit_m2(self) -> float:
        """Return the square metres of the unit of area: the whole raster fits into int64."""
        return self._unit_for(float(np.nanmax(cross(*self.lattice))))

    def _unit_for(self, per_cell: float) -> float:
        total = 1.1 * per_cell * (self.rows + 1) * (self.columns + 1)
        return float(10.0 ** max(-9, math.ceil(math.log10(total / ROOM))))

    @cached_property
    def lattice(self) -> tuple[Floats, Floats]:
        """Return ground vectors (n, 2) of one cell across and one cell down, at points over the raster."""
        rows = np.linspace(0, self.rows, LATTICE)
        columns = np.linspace(0, self.columns, LATTICE)
        r, c = (part.ravel() for part in np.meshgrid(rows, columns, indexing="ij"))
        across, down = self.cell_vectors(r, c)
        if not np.isfinite(across).any():
            message = f"The raster lies outside the area where its CRS ({self.crs.name}) is defined."
            raise SourceError(f"{message} Check its transform, or give its true CRS with the key crs.")
        return across, down

    @cached_property
    def distortion(self) -> float:
        """Return the worst relative error of a short length.

        On the raster's own grid: of lengths in any direction, each cell taken as a rectangle of its
        true width and height; only the angle between its sides errs, so that any upright geographic
        or conformal grid has 0. On a plane that the raster was warped to: the plane's worst scale
        over the raster.
        """
        if self.plane != "source":
            return self.plane_distortion
        if self.kind == "rows":
            return 0.0
        across, down = self.lattice
        angle = np.abs((across * down).sum(axis=1)) / (length(across) * length(down))
        return float(np.nanmax(1 - np.sqrt(1 - np.minimum(angle, 1))))

    def cell_vectors(self, rows: Floats, columns: Floats) -> tuple[Floats, Floats]:
        """Return the ground vectors (east, north; metres) of one cell across and one cell down.

        NaN where the projection is not defined.
        """
        a, b, c, d, e, f = self.transform
        if self.kind == "plane":
            shape = (len(rows), 2)
            return np.full(shape, (a, d)) * self.unit, np.full(shape, (b, e)) * self.unit
        x, y = a * columns + b * rows + c, d * columns + e * rows + f
        if self.crs.is_geographic:
            # The half circle of a parallel at a pole has no length but a direction; stay beside it.
            quarter = math.pi / 2 / self.unit
            inside = (1 - 1e-9) * quarter
            lat = np.where(np.abs(y) <= quarter * (1 + 1e-9), np.clip(y, -inside, inside), np.nan)
            east, north = radii(self.crs, lat * self.unit)
            jacobian = np.zeros((len(x), 2, 2))
            jacobian[:, 0, 0], jacobian[:, 1, 1] = east * self.unit, north * self.unit
        else:
            jacobian = self._ground_by_plane(x, y)
        return jacobian @ np.array([a, d]), jacobian @ np.array([b, e])

    def _ground_by_plane(self, x: Floats, y: Floats) -> Floats:
        """Return d(east, north) / d(x, y), (n, 2, 2), in metres per unit of the CRS."""
        plane = plane_by_ground(self.crs, *lon_lat(self.crs, x, y))
        bad = np.isnan(plane[:, 0, 0])
        plane[bad] = np.eye(2)
        ground = np.linalg.inv(plane)
        ground[bad] = np.nan
        return np.asarray(ground)

    def sizes(self, first_row: int, rows: int) -> CellSizes:
        """Return the true sizes of the cells of `rows` rows, in whole units.

        They depend on the row alone, never on how the raster was cut into strips.
        """
        if self.kind == "plane":
            across, down = self.cell_vectors(np.zeros(1), np.zeros(1))
            none = np.zeros(rows + 1, np.int64)
            width, height = self._lengths(length(across)), self._lengths(length(down))
            return CellSizes(
                self._areas(cross(across, down))[:, None], height[:, None], width[:, None], none[:-1], none
            )
        return self._row_sizes(first_row, rows) if self.kind == "rows" else self._node_sizes(first_row, rows)

    def _lengths(self, metres: Floats) -> Ints:
        return np.rint(metres / self.length_unit_m).astype(np.int64)

    def _areas(self, square_metres: Floats) -> Ints:
        return np.rint(square_metres / self.area_unit_m2).astype(np.int64)

    def _row_sizes(self, first_row: int, rows: int) -> CellSizes:
        """Return exact sizes between parallels: arcs of parallels and meridians, ellipsoidal areas."""
        a, _, _, _, e, f = self.transform
        edges = np.arange(first_row, first_row + rows + 1)
        lat = np.clip((f + e * edges) * self.unit, -math.pi / 2, math.pi / 2)
        cell_lon = abs(a) * self.unit
        width = np.maximum(radii(self.crs, lat)[0], 0) * cell_lon
        middle, half = (lat[1:] + lat[:-1]) / 2, np.abs(np.diff(lat)) / 2
        offset = half * math.sqrt(3 / 5)  # three-point Gauss rule: exact to 1e-12 for cells below 2 degrees
        arc = (
            half / 9 * sum(w * radii(self.crs, middle + k * offset)[1] for k, w in ((-1, 5), (0, 8), (1, 5)))
        )
        area = np.abs(np.diff(self._authalic(lat))) * cell_lon
        line = np.arange(rows + 1)
        return CellSizes(
            self._areas(area)[:, None],
            self._lengths(arc)[:, None],
            self._lengths(width)[:, None],
            line[:-1],
            line,
        )

    def _authalic(self, lat: Floats) -> Floats:
        """Return the area between the equator and a latitude for one radian of longitude (Snyder 3-12)."""
        major, e2 = ellipsoid(self.crs)
        sine, e = np.sin(lat), math.sqrt(e2)
        tail = np.arctanh(e * sine) / e if e > 0 else sine
        return np.asarray(major**2 * (1 - e2) / 2 * (sine / (1 - e2 * sine**2) + tail))

    def _node_sizes(self, first_row: int, rows: int) -> CellSizes:
        """Return sizes that are constant over blocks of rows and linear between nodes along them."""
        width_m, height_m = self.typical_cell
        block = int(np.clip(BLOCK_M / height_m, 1, BLOCK_ROWS))
        step = int(np.clip(NODE_M / width_m, 1, NODE_COLUMNS))
        edge_line = np.minimum(np.arange(first_row, first_row + rows + 1), self.rows - 1) // block
        first = int(edge_line[0])
        blocks = np.arange(first, int(edge_line[-1]) + 1)
        columns = np.unique(np.append(np.arange(0, self.columns, step), self.columns)).astype(float)
        r, c = np.meshgrid((blocks + 0.5) * block, columns, indexing="ij")
        across, down = self.cell_vectors(r.ravel(), c.ravel())
        edges = np.arange(self.columns + 1, dtype=np.float64)
        centres: Floats = edges[:-1] + 0.5

        def along(values: Floats, at: Floats) -> Floats:
            table = self._filled(values).reshape(r.shape)
            return np.stack([np.interp(at, columns, line) for line in table])

        return CellSizes(
            running(self._areas(along(cross(across, down), centres))),
            self._lengths(along(length(down), edges)),
            running(self._lengths(along(length(across), centres))),
            edge_line[:-1] - first,
            edge_line - first,
        )

    def _filled(self, values: Floats) -> Floats:
        """Return `values`, the median in place of those where the projection is not defined."""
        if np.isfinite(values).all():
            return values
        across, down = self.typical_cell
        known = np.nanmedian(values) if np.isfinite(values).any() else math.sqrt(across * down)
        return np.where(np.isfinite(values), values, known)


def length(vectors: Floats) -> Floats:
    """Return the lengths of (n, 2) vectors."""
    return np.hypot(vectors[:, 0], vectors[:, 1])


def cross(across: Floats, down: Floats) -> Floats:
    """Return the areas spanned by pairs of (n, 2) vectors."""
    return np.abs(across[:, 0] * down[:, 1] - across[:, 1] * down[:, 0])


def running(sizes: Ints) -> Ints:
    """Return running sums along rows, beginning with 0."""
    return np.concatenate([np.zeros((len(sizes), 1), np.int64), np.cumsum(sizes, axis=1)], axis=1)


def is_engineering(crs: CRS) -> bool:
    """Return whether a CRS is a plane without an Earth under it."""
    return crs.ellipsoid is None


def ellipsoid(crs: CRS) -> tuple[float, float]:
    """Return the semi-major axis in metres and the squared eccentricity."""
    shape: Any = crs.ellipsoid
    major, minor = float(shape.semi_major_metre), float(shape.semi_minor_metre)
    return major, 1 - (minor / major) ** 2


def radii(crs: CRS, lat: Floats) -> tuple[Floats, Floats]:
    """Return the metres of one radian of longitude and of latitude, at latitudes in radians."""
    major, e2 = ellipsoid(crs)
    root = 1 - e2 * np.sin(lat) ** 2
    return major * np.cos(lat) / np.sqrt(root), major * (1 - e2) / root**1.5


def lon_lat(crs: CRS, x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Return degrees on the CRS's own ellipsoid, from Greenwich; NaN where the projection is not defined.

    A projection answers outside its domain too; what does not come back to its place is not defined.
    """
    from pyproj import Proj

    if crs.is_geographic:
        degrees = math.degrees(float(crs.axis_info[0].unit_conversion_factor))
        meridian: Any = crs.prime_meridian
        return x * degrees + meridian.longitude * math.degrees(meridian.unit_conversion_factor), y * degrees
    project = Proj(crs)
    lon, lat = project(x, y, inverse=True)
    back = np.stack(project(lon, lat))
    span = max([1.0, *(float(np.ptp(part)) for part in (x, y) if len(part))])
    good = np.abs(back - np.stack([x, y])).max(axis=0) < 1e-3 * span
    return np.where(good, lon, np.nan), np.where(good, lat, np.nan)


def plane_by_ground(crs: CRS, lon: Floats, lat: Floats) -> Floats:
    """Return d(x, y) / d(east, north), (n, 2, 2), in units of a projected CRS per metre on the ellipsoid.

    By central differences of the projection, beside a pole rather than at it; NaN where not defined.
    """
    from pyproj import Proj

    project, step = Proj(crs), STEP_DEGREES
    lat = np.clip(lat, -90 + 2 * step, 90 - 2 * step)
    by_lon = np.subtract(project(lon + step, lat), project(lon - step, lat))
    by_lat = np.subtract(project(lon, lat + step), project(lon, lat - step))
    east, north = radii(crs, np.radians(lat))
    per = 2 * math.radians(step)
    slope = np.stack([by_lon / (per * east), by_lat / (per * north)]).transpose(2, 1, 0)
    metres = float(crs.axis_info[0].unit_conversion_factor)
    size = np.abs(np.linalg.det(np.nan_to_num(slope * metres, posinf=0, neginf=0)))
    slope[~((size > 1e-4) & (size < 1e4))] = np.nan  # also across the seam of a world map
    return np.asarray(slope)
