"""Barriers of a class map: lines that cut links between cells, and take cells where they have a width."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.errors import ConfigError
from geofractal.kernels.barrier_cells import take_cells
from geofractal.kernels.barrier_cuts import cut_links
from geofractal.landcover.grid import CellSizes, Floats, Grid, Ints, length
from geofractal.landcover.strips import Strip
from geofractal.landcover.zones import Placer

if TYPE_CHECKING:
    from pyproj import CRS

BARRIER = "barrier"
"""Class of what barriers with a width take."""

Widths = float | Sequence[float | None] | None
"""Width of barriers in metres: one for all or one for each; 0 and None take nothing."""


@dataclass(frozen=True)
class Barriers:
    """Barriers on a grid.

    Attributes
    ----------
    grid : the grid
    segments : (n, 4) x, y of both ends of each segment, in columns and rows
    width_m : (n,) width of each, 0 where it takes no cells
    left_out : why geometries are no barrier, and how many
    """

    grid: Grid
    segments: Floats
    width_m: Floats
    left_out: dict[str, int]

    @property
    def wide(self) -> bool:
        """Whether some barrier has a width."""
        return bool((self.width_m > 0).any())

    def __call__(self, strips: Iterable[Strip]) -> Iterator[Strip]:
        """Yield strips with the links that are cut."""
        for strip, near in _beside(strips, self.segments, np.ones(len(self.segments))):
            cuts = np.zeros(strip.codes.shape, np.uint8)
            cut_links(self.segments[near], strip.first_row, cuts)
            yield replace(strip, cuts=cuts)

    def take(self, strips: Iterable[Strip], kind: int) -> Iterator[Strip]:
        """Yield strips in which the cells with data whose centre is on a wide barrier are of a class."""
        wide = self.width_m > 0
        segments, metres = self.segments[wide], self.width_m[wide] / 2
        _, lowest = _smallest_cell(self.grid)
        for strip, near in _beside(strips, segments, metres / lowest + 1):
            codes, sizes = strip.codes.copy(), strip.sizes
            take_cells(
                segments[near],
                metres[near] / self.grid.length_unit_m,
                strip.first_row,
                sizes.width,
                sizes.height,
                sizes.area_line,
                sizes.edge_line,
                _least(sizes),
                kind,
                codes,
            )
            yield replace(strip, codes=codes)


def place_barriers(
    grid: Grid, geometries: Sequence[Any], crs: CRS | None, width_m: Widths = None
) -> Barriers:
    """Return lines as barriers of a grid.

    Parameters
    ----------
    geometries : lines and multilines; anything else is left out and counted
    crs : of the lines; None only where the grid is a plane without an Earth under it
    width_m : their width in metres

    Raises
    ------
    ConfigError
        a width that is no number of 0 or more, or not one width a line
    LayerError
        no way from the lines' CRS to the grid's
    """
    widths = barrier_widths(width_m, len(geometries))
    placer = Placer(grid, crs)
    parts, owners, reasons = [np.empty((0, 4))], [np.empty(0)], []
    for geometry, width in zip(geometries, widths, strict=True):
        reason = unusable_line(geometry)
        placed = None if reason else placer(shapely.multilinestrings(line_parts(geometry)))
        if placed is not None and not np.isfinite(shapely.get_coordinates(placed)).all():
            reason, placed = "reaches where the raster's CRS is not defined", None
        reasons.append(reason)
        for line in () if placed is None else shapely.get_parts(placed):
            xy = shapely.get_coordinates(line)
            parts.append(np.column_stack([xy[:-1], xy[1:]]))
            owners.append(np.full(len(xy) - 1, width))
    left_out = dict(Counter(reason for reason in reasons if reason))
    return _turned(Barriers(grid, np.concatenate(parts), np.concatenate(owners), left_out))


def joined(grid: Grid, parts: Sequence[Barriers]) -> Barriers:
    """Return the barriers of several layers as one."""
    left_out = Counter[str]()
    for part in parts:
        left_out.update(part.left_out)
    segments = np.concatenate([np.empty((0, 4)), *(part.segments for part in parts)])
    width_m = np.concatenate([np.empty(0), *(part.width_m for part in parts)])
    return Barriers(grid, segments, width_m, dict(left_out))


def barrier_widths(width_m: Widths, lines: int) -> Floats:
    """Return the width of each line.

    Raises
    ------
    ConfigError
        a width that is no number of 0 or more, or not one width a line
    """
    stated = list(width_m) if isinstance(width_m, Iterable) else [width_m] * lines
    if len(stated) != lines:
        raise ConfigError(
            f"barrier_width_m has {len(stated)} widths for {lines} barriers; give one for each."
        )
    widths = np.array([0.0 if width is None else width for width in stated], np.float64)
    for width in widths[~(np.isfinite(widths) & (widths >= 0))]:
        raise ConfigError(f"barrier_width_m: {width} is no width; allowed are numbers of metres, 0 or more.")
    return widths


def _beside(strips: Iterable[Strip], segments: Floats, beyond: Floats) -> Iterator[tuple[Strip, Ints]]:
    """Yield strips with the numbers of the segments that come within so many rows of them."""
    top = np.minimum(segments[:, 1], segments[:, 3]) - beyond
    bottom = np.maximum(segments[:, 1], segments[:, 3]) + beyond
    order = np.argsort(top, kind="stable")
    tops, begun, near = top[order], 0, order[:0]
    for strip in strips:
        stop = int(np.searchsorted(tops, strip.first_row + strip.rows))
        near = np.concatenate([near, order[begun:stop]])
        near = near[bottom[near] >= strip.first_row]
        begun = stop
        yield strip, near


def _least(sizes: CellSizes) -> Floats:
    """Return (rows, 2) what no cell of a row falls below in width and height, in the grid's unit."""
    across = sizes.width if sizes.width.shape[1] == 1 else np.diff(sizes.width, axis=1)
    narrowest, lowest = across.min(axis=1), sizes.height.min(axis=1)[sizes.area_line]
    width = np.minimum(narrowest[sizes.edge_line[:-1]], narrowest[sizes.edge_line[1:]])
    return np.column_stack([np.maximum(width, 1), lowest]).astype(np.float64)


def _smallest_cell(grid: Grid) -> Floats:
    """Return metres that no cell of a grid falls below in width and height."""
    sides = [length(vectors) for vectors in grid.lattice]
    smallest: Floats = np.array([0.98 * np.nanmin(side[side > 0]) for side in sides])
    return smallest


def _turned(barriers: Barriers) -> Barriers:
    """Add the copies of segments a full turn of longitude away that come near the grid."""
    grid, segments, width_m = barriers.grid, barriers.segments, barriers.width_m
    if grid.kind != "rows":
        return barriers
    narrowest, _ = _smallest_cell(grid)
    copies, widths = [segments], [width_m]
    for turn in (-grid.full_turn, grid.full_turn):
        moved = segments + np.array([turn, 0.0, turn, 0.0])
        across, beyond = moved[:, [0, 2]], width_m / 2 / narrowest + 1
        near = (across.min(axis=1) < grid.columns + beyond) & (across.max(axis=1) > -beyond)
        copies.append(moved[near])
        widths.append(width_m[near])
    return replace(barriers, segments=np.concatenate(copies), width_m=np.concatenate(widths))


def unusable_line(geometry: Any) -> str:
    """Return why a geometry is no barrier; empty where it is one."""
    if geometry is None:
        return "missing geometry"
    if geometry.geom_type not in {"LineString", "MultiLineString", "LinearRing"}:
        return f"{geometry.geom_type}, not a line"
    if geometry.is_empty:
        return "empty geometry"
    if not np.isfinite(shapely.get_coordinates(geometry)).all():
        return "coordinates that are not numbers"
    return "" if len(line_parts(geometry)) else "zero length"


def line_parts(geometry: Any) -> Any:
    """Return the parts of a line in two dimensions, without those that are one point and so no barrier."""
    parts = shapely.get_parts(shapely.force_2d(geometry))
    return parts[shapely.length(parts) > 0]
