"""Barriers of a class map: lines that cut the links between cells which they cross."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.kernels.barrier_cuts import cut_links
from geofractal.landcover.grid import Floats, Grid
from geofractal.landcover.strips import Strip
from geofractal.landcover.zones import Placer

if TYPE_CHECKING:
    from pyproj import CRS


@dataclass(frozen=True)
class Barriers:
    """Barriers on a grid.

    Attributes
    ----------
    segments : (n, 4) x, y of both ends of each segment, in columns and rows
    left_out : why geometries are no barrier, and how many
    """

    segments: Floats
    left_out: dict[str, int]

    def __call__(self, strips: Iterable[Strip]) -> Iterator[Strip]:
        """Yield strips with the links that are cut."""
        top = np.minimum(self.segments[:, 1], self.segments[:, 3])
        bottom = np.maximum(self.segments[:, 1], self.segments[:, 3])
        for strip in strips:
            cuts = np.zeros(strip.codes.shape, np.uint8)
            near = (top < strip.first_row + strip.rows + 1) & (bottom >= strip.first_row)
            cut_links(self.segments[near], strip.first_row, cuts)
            yield replace(strip, cuts=cuts)


def place_barriers(grid: Grid, geometries: Sequence[Any], crs: CRS | None) -> Barriers:
    """Return lines as barriers of a grid.

    Parameters
    ----------
    geometries : lines and multilines; anything else is left out and counted
    crs : of the lines; None only where the grid is a plane without an Earth under it
    """
    placer = Placer(grid, crs)
    parts, reasons = [np.empty((0, 4))], []
    for geometry in geometries:
        reason = _unusable(geometry)
        placed = None if reason else placer(shapely.force_2d(geometry))
        if placed is not None and not np.isfinite(shapely.get_coordinates(placed)).all():
            reason, placed = "reaches where the raster's CRS is not defined", None
        reasons.append(reason)
        for line in () if placed is None else shapely.get_parts(placed):
            xy = shapely.get_coordinates(line)
            parts.append(np.column_stack([xy[:-1], xy[1:]]))
    return Barriers(np.concatenate(parts), dict(Counter(reason for reason in reasons if reason)))


def _unusable(geometry: Any) -> str:
    if geometry is None:
        return "missing geometry"
    if geometry.geom_type not in {"LineString", "MultiLineString", "LinearRing"}:
        return f"{geometry.geom_type}, not a line"
    return "empty geometry" if geometry.is_empty else ""
