"""Zones of a class map: polygons of any CRS, whose cells are those with their centre inside.

Centres on a border belong to the zone on the right of it or below it, as rows and columns run, so that zones
that share a border share no cell and leave none out. Zones that overlap in some cell are kept apart in
sets, greedily in their order; each set is measured by itself.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.errors import ConfigError, LayerError
from geofractal.kernels.patch_tables import span
from geofractal.kernels.zone_rows import count_crossings, find_crossings, overlapping, paint_runs
from geofractal.landcover.grid import CellSizes, Floats, Grid, Ints, is_engineering
from geofractal.landcover.polygons import ring_size, unusable
from geofractal.landcover.strips import OUTSIDE, Strip

if TYPE_CHECKING:
    from pyproj import CRS

BLOCK_ROWS = 1024
EDGE_CELLS = 16.0
"""Longest edge, in cells, that is projected by its ends alone; longer ones, straight in their own CRS, are
divided first. Over 16 cells a projected edge bends by far less than a cell."""


@dataclass(frozen=True)
class Zones:
    """Zones on a grid.

    Attributes
    ----------
    names : (n,) name of each zone
    problems : (n,) why a zone cannot be measured; empty where it can
    outside_m2 : (n,) area of each zone beyond the grid
    edges : (m, 4) x, y of upper and lower end of each edge, in columns and rows
    edge_zone : (m,) its zone
    sets : zones that share no cell, in their order; each zone that can be measured is in one
    overlaps : (n,) numbers of the zones that share cells with each
    """

    names: tuple[str, ...]
    problems: tuple[str, ...]
    outside_m2: Floats
    edges: Floats
    edge_zone: Ints
    sets: tuple[tuple[int, ...], ...]
    overlaps: tuple[tuple[int, ...], ...]

    def __len__(self) -> int:
        """Return the number of zones, also of those that cannot be measured."""
        return len(self.names)

    def runs(self, members: Iterable[int], first_row: int, stop_row: int, columns: int) -> Ints:
        """Return row, zone, first column and column after the last of each run of cells of some zones."""
        mine = np.isin(self.edge_zone, list(members))
        mine &= (self.edges[:, 1] < stop_row) & (self.edges[:, 3] > first_row)
        edges, zone = self.edges[mine], self.edge_zone[mine]
        found = np.empty((count_crossings(edges, first_row, stop_row), 3), np.int64)
        find_crossings(edges, zone, first_row, stop_row, columns, found)
        found = found[np.lexsort((found[:, 2], found[:, 1], found[:, 0]))]
        runs = np.column_stack([found[::2], found[1::2, 2]])
        return np.ascontiguousarray(runs[runs[:, 3] > runs[:, 2]])


def zone_sets(zones: Zones | None) -> tuple[tuple[int, ...], ...]:
    """Return the sets of zones that a map is read for, one after the other; one empty set without zones."""
    return (zones.sets if zones else ()) or ((),)


def place_zones(grid: Grid, geometries: Sequence[Any], names: Sequence[Any], crs: CRS | None) -> Zones:
    """Return polygons as zones of a grid.

    Parameters
    ----------
    grid : the grid measured on
    geometries : (n,) polygons, or what stands in their place: such zones keep their row and a reason
    names : (n,) different names
    crs : of the polygons; None only where the grid is a plane without an Earth under it

    Raises
    ------
    ConfigError
        two zones of one name
    LayerError
        no way from the zones' CRS to the grid's
    """
    titles = distinct_names(names)
    placer = Placer(grid, crs)
    problems, beyond, edges, owners = [], np.zeros(len(titles)), [], []
    for i, geometry in enumerate(geometries):
        reason, placed = _placed(placer, geometry)
        problems.append(reason)
        if reason:
            continue
        beyond[i] = area_beyond(grid, placed)
        edges.append(_downward_edges(placed))
        owners.append(np.full(len(edges[-1]), i))
    table = np.concatenate([np.empty((0, 4)), *edges])
    zones = Zones(
        titles, tuple(problems), beyond, table, np.concatenate([np.empty(0, np.int64), *owners]), (), ()
    )
    return _in_sets(zones, grid)


def distinct_names(names: Sequence[Any]) -> tuple[str, ...]:
    """Return names of zones as text.

    Raises
    ------
    ConfigError
        two zones of one name
    """
    titles = tuple(str(name) for name in names)
    twice = sorted(title for title, count in Counter(titles).items() if count > 1)
    if twice:
        raise ConfigError(f"Zones need names of their own; {', '.join(twice[:5])} is given more than once.")
    return titles


def change_of_crs(crs: CRS | None, own: CRS, whose: str) -> Any:
    """Return what changes coordinates of zones or barriers to a map's CRS, None where nothing changes.

    Raises
    ------
    LayerError
        there is no way, or only one of the two is known
    """
    from pyproj import Transformer
    from pyproj.exceptions import ProjError

    if crs is None:
        if is_engineering(own):
            return None
        raise LayerError("Zones and barriers need a CRS; give them one, for example EPSG:25832.")
    if crs.equals(own, ignore_axis_order=True):
        return None
    try:
        return Transformer.from_crs(crs, own, always_xy=True)
    except ProjError as error:
        raise LayerError(
            f"There is no way from {crs.name!r} to the {whose} CRS {own.name!r}: {error}"
        ) from error


@dataclass(frozen=True)
class Placer:
    """Takes geometries of a CRS to columns and rows of a grid."""

    grid: Grid
    crs: CRS | None

    def __call__(self, geometry: Any) -> Any:
        """Return a geometry in columns and rows; coordinates are infinite where there is no way there."""
        a, b, c, d, e, f = self.grid.transform
        placed = self._to_grid_crs(geometry)
        inverse = np.linalg.inv(np.array([[a, b], [d, e]]))
        return shapely.transform(placed, lambda xy: (xy - (c, f)) @ inverse.T)

    def _to_grid_crs(self, geometry: Any) -> Any:
        if self._change is None or self.crs is None:
            return geometry
        unit = float(self.crs.axis_info[0].unit_conversion_factor) * (
            6.4e6 if self.crs.is_geographic else 1.0
        )
        dense = shapely.segmentize(geometry, EDGE_CELLS * min(self.grid.typical_cell) / unit)
        change = self._change.transform
        return shapely.transform(dense, lambda xy: np.stack(change(*xy.T), axis=1))

    @cached_property
    def _change(self) -> Any:
        """Return what changes coordinates, None where there is nothing to change."""
        return change_of_crs(self.crs, self.grid.crs, "raster's")


def _placed(placer: Placer, geometry: Any) -> tuple[str, Any]:
    """Return why a zone cannot be measured, or it in columns and rows."""
    if reason := unusable(geometry):
        return reason, None
    placed = placer(shapely.force_2d(geometry))
    if not np.isfinite(shapely.get_coordinates(placed)).all():
        return "reaches where the raster's CRS is not defined", None
    placed = _turned_copies(placer.grid, placed)
    box = shapely.box(0, 0, placer.grid.columns, placer.grid.rows)
    return ("", placed) if shapely.intersects(placed, box) else ("off the map", None)


def _turned_copies(grid: Grid, placed: Any) -> Any:
    """Return a zone on longitudes with its copies a full turn away that reach the grid."""
    if grid.kind != "rows":
        return placed
    turn = grid.full_turn
    copies = [shapely.transform(placed, lambda xy, k=k: xy + np.array([k * turn, 0.0])) for k in (-1, 1)]
    reaching = [one for one in copies if one.bounds[0] < grid.columns and one.bounds[2] > 0]
    here = placed.bounds[0] < grid.columns and placed.bounds[2] > 0
    parts = [
        part
        for one in ([placed] if here or not reaching else []) + reaching
        for part in shapely.get_parts(one)
    ]
    return shapely.multipolygons(parts)


def area_beyond(grid: Grid, placed: Any) -> float:
    """Return the square metres of a zone, in columns and rows, that lie beyond the grid."""
    box = shapely.box(0, 0, grid.columns, grid.rows)
    if shapely.covers(box, placed):
        return 0.0
    a, b, c, d, e, f = grid.transform
    matrix = np.array([[a, b], [d, e]])
    beyond = shapely.transform(shapely.difference(placed, box), lambda xy: xy @ matrix.T + (c, f))
    total = 0.0
    for part in shapely.get_parts(beyond):
        if part.geom_type == "Polygon":
            total += ring_size(part.exterior, grid.crs)[0]
            total -= sum(ring_size(hole, grid.crs)[0] for hole in part.interiors)
    return total


def _downward_edges(placed: Any) -> Floats:
    """Return the edges of a polygon in columns and rows, upper end first; level ones cross no line."""
    parts = []
    for polygon in shapely.get_parts(placed):
        for ring in (polygon.exterior, *polygon.interiors):
            xy = shapely.get_coordinates(ring)
            parts.append(np.column_stack([xy[:-1], xy[1:]]))
    edges = np.concatenate(parts)
    upward = edges[:, 1] > edges[:, 3]
    edges[upward] = edges[upward][:, [2, 3, 0, 1]]
    return np.ascontiguousarray(edges[edges[:, 1] < edges[:, 3]])


def _in_sets(zones: Zones, grid: Grid) -> Zones:
    """Split zones into sets without common cells; those without any cell are refused."""
    shared: set[tuple[int, int]] = set()
    seen: set[int] = set()
    every = range(len(zones))
    for first in range(0, grid.rows, BLOCK_ROWS):
        runs = zones.runs(every, first, min(first + BLOCK_ROWS, grid.rows), grid.columns)
        seen.update(np.unique(runs[:, 1]).tolist())
        runs = np.ascontiguousarray(runs[np.lexsort((runs[:, 2], runs[:, 0]))])
        pairs = np.empty((overlapping(runs, np.empty((0, 2), np.int64)), 2), np.int64)
        overlapping(runs, pairs)
        shared.update((int(i), int(j)) for i, j in np.unique(np.sort(pairs, axis=1), axis=0))
    problems = tuple(
        reason or ("" if i in seen else "no cell has its centre inside")
        for i, reason in enumerate(zones.problems)
    )
    others: list[set[int]] = [set() for _ in zones.names]
    for i, j in shared:
        others[i].add(j)
        others[j].add(i)
    sets: list[list[int]] = []
    for i in (i for i, reason in enumerate(problems) if not reason):
        free = next((one for one in sets if not others[i].intersection(one)), None)
        if free is None:
            sets.append([i])
        else:
            free.append(i)
    return replace(
        zones,
        problems=problems,
        sets=tuple(tuple(one) for one in sets),
        overlaps=tuple(tuple(sorted(one)) for one in others),
    )


@dataclass
class ZonePainter:
    """Gives strips the zones of one set, and adds up the area of their cells.

    Attributes
    ----------
    area : (n,) area of each zone's cells so far, covered or not, in the grid's unit
    """

    zones: Zones
    members: tuple[int, ...]
    area: Ints

    def __call__(self, strips: Iterable[Strip]) -> Iterator[Strip]:
        """Yield strips with zones."""
        for strip in strips:
            painted = np.full(strip.codes.shape, OUTSIDE, np.int32)
            stop = strip.first_row + strip.rows
            runs = self.zones.runs(self.members, strip.first_row, stop, strip.codes.shape[1])
            paint_runs(runs, strip.first_row, painted)
            self._add(runs, strip.first_row, strip.sizes)
            yield replace(strip, zones=painted)

    def _add(self, runs: Ints, first_row: int, sizes: CellSizes) -> None:
        line = sizes.area_line[runs[:, 0] - first_row]
        if sizes.area.shape[1] == 1:
            areas = sizes.area[line, 0] * (runs[:, 3] - runs[:, 2])
        else:
            areas = sizes.area[line, runs[:, 3]] - sizes.area[line, runs[:, 2]]
        np.add.at(self.area, runs[:, 1], areas)


def grid_area(strip: Strip) -> int:
    """Return the area of all cells of a strip, in the grid's unit."""
    columns = strip.codes.shape[1]
    return sum(int(span(strip.sizes.area, line, 0, columns)) for line in strip.sizes.area_line)
