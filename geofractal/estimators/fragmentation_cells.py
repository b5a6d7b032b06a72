"""Figures of fragmentation that look at cells rather than patches, in one more reading of the map."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from geofractal.estimators import fragmentation_quantities as words
from geofractal.estimators.cover_boxes import ABSENT, CoverBoxes, Part, box_rows
from geofractal.landcover.coarse_edges import LagSums
from geofractal.landcover.interior import Depth, InteriorSums
from geofractal.landcover.lacunarity import MOST_CELLS, GlidingSums, boxes_of
from geofractal.landcover.windows import windows
from geofractal.landcover.zones import ZonePainter, zone_sets

if TYPE_CHECKING:
    from geofractal.estimators.fragmentation import FragmentationOptions, MapTotals
    from geofractal.estimators.fragmentation_table import Figures
    from geofractal.landcover.covers import Pack
    from geofractal.landcover.grid import Grid
    from geofractal.measure import CoverMap

TOO_FINE = "not coarser than the map's own cells"
TOO_LARGE = f"boxes of more than {MOST_CELLS} cells a side"
NO_BOX = "no box lies wholly inside the area with data"
UNEVEN = 1.05  # ratio of cell sizes over a map from which sizes in cells need a word


class CellFigures:
    """Reads a map once for each set of zones, and adds up what the options ask for.

    Parameters
    ----------
    totals : of the patches of the same pack; all classes are known once these were counted
    """

    def __init__(self, cover: CoverMap, pack: Pack, options: FragmentationOptions, totals: MapTotals) -> None:
        self.map, self.pack, self.options, self.totals = cover, pack, options, totals
        self.grid, self.classes = cover.raster.grid, tuple(cover.raster.legend.names)
        self.zones = totals.whole
        self._uneven = uneven_cells(self.grid)

    def add_to(self, figures: Figures) -> None:
        """Add the rows of edges at stated cell sizes, interior area, lacunarity and box dimensions."""
        wanted = figures.about.wanted(self.pack)
        for turn, members in enumerate(zone_sets(self.map.zones)):
            units = [
                unit for unit in figures.measured() if unit in members or (turn == 0 and unit == self.zones)
            ]
            edges = {size: self._lags(size) for size in self.options.edge_cell_sizes_m}
            depths = {metres: self._interior(metres) for metres in self.options.interior_depths_m}
            boxes = {
                (size, kind): self._gliding(size, kind, whole=turn == 0)
                for size in self.options.lacunarity_boxes_m
                for kind, _ in wanted
            }
            counters = self._counters(units, [kind for kind, _ in wanted])
            self._read(members, [*edges.values(), *depths.values(), *boxes.values(), *counters.values()])
            for unit in units:
                for kind, name in wanted:
                    for size, lags in edges.items():
                        self._add_edge(figures, unit, kind, name, size, lags)
                    for metres, sums in depths.items():
                        self._add_interior(figures, unit, kind, name, metres, sums)
                    for size in self.options.lacunarity_boxes_m:
                        self._add_lacunarity(figures, unit, name, size, boxes[size, kind])
                    if self.options.box_dimension:
                        self._add_boxes(figures, unit, kind, name, counters)

    def _read(
        self,
        members: tuple[int, ...],
        watchers: list[LagSums | InteriorSums | GlidingSums | CoverBoxes | None],
    ) -> None:
        asked = [one for one in watchers if one is not None]
        if not asked:
            return
        strips = self.map.raster.strips()
        if members:
            strips = ZonePainter(self.map.zones, members, np.zeros(self.zones + 1, np.int64))(strips)
        below = max((one.halo for one in asked if isinstance(one, InteriorSums | CoverBoxes)), default=0)
        table = self.pack.table(self.classes)
        for window in windows(strips, max(one.halo for one in asked), below):
            codes = table[window.codes] if self.pack.names else window.codes
            for one in asked:
                one.add(window, codes)

    def _lags(self, size: float) -> LagSums | None:
        coarser = size > max(self.grid.typical_cell) * (1 + 1e-6)
        return LagSums(self.grid, self.zones, len(self.pack.covers(self.classes)), size) if coarser else None

    def _interior(self, metres: float) -> InteriorSums:
        depth = Depth(metres, self.options.depth_by_neighbour_m, self.options.map_edge_bounds_interior)
        return InteriorSums(self.grid, self.zones, self.pack, self.classes, depth)

    def _gliding(self, size: float, kind: int, *, whole: bool) -> GlidingSums | None:
        boxes = boxes_of(self.grid, size)
        if max(boxes.rows, boxes.columns) > MOST_CELLS:
            return None
        places = len(self.pack.covers(self.classes)) + 2
        cover = np.zeros(places, np.bool_)
        if kind < places - 1:
            cover[kind] = True
        return GlidingSums(self.grid, self.zones, cover, boxes, with_whole=whole)

    def _counters(self, units: list[int], kinds: list[int]) -> dict[tuple[int, int, bool], CoverBoxes]:
        if not self.options.box_dimension:
            return {}
        return {
            (unit, kind, edge): CoverBoxes(self._part(unit), kind, edge=edge)
            for unit in units
            for kind in kinds
            for edge in (False, True)
        }

    def _part(self, unit: int) -> Part:
        """Return the rows and columns that a zone's cells lie in."""
        if unit == self.zones:
            return Part(slice(0, self.grid.rows), slice(0, self.grid.columns), None)
        edges = self.map.zones.edges[self.map.zones.edge_zone == unit]
        across, down = edges[:, [0, 2]], edges[:, [1, 3]]
        top, bottom = max(0, math.floor(down.min())), min(self.grid.rows, math.ceil(down.max()))
        left, right = max(0, math.floor(across.min())), min(self.grid.columns, math.ceil(across.max()))
        return Part(slice(top, bottom), slice(left, right), unit)

    def _add_edge(
        self, figures: Figures, unit: int, kind: int, name: str, size: float, lags: LagSums | None
    ) -> None:
        quantity = words.coarse(size).name
        if lags is None:
            figures.add(unit, name, quantity, math.nan, rule=words.CHANGES, note=TOO_FINE, cell=size)
            return
        covered = self.totals.covered(unit) * self.grid.area_unit_m2 / 1e6
        edge = lags.edge(-1 if unit == self.zones else unit, kind)
        values = [
            metres / 1e3 / covered if covered else math.nan for metres in (edge.length, edge.low, edge.high)
        ]
        missing = "no pair of cells this far apart" if covered else "no data in this zone"
        note = self._uneven if math.isfinite(values[0]) else missing
        figures.add(
            unit,
            name,
            quantity,
            values[0],
            rule=words.CHANGES,
            low=values[1],
            high=values[2],
            note=note,
            cell=size,
        )

    def _add_interior(
        self, figures: Figures, unit: int, kind: int, name: str, metres: float, sums: InteriorSums
    ) -> None:
        rule = words.BOUNDS if self.options.map_edge_bounds_interior else words.OPEN
        area, share = words.interior(metres)
        inside = int(sums.area[unit, kind]) if kind < sums.covers else 0
        figures.add(unit, name, area.name, inside * self.grid.area_unit_m2 / 1e6, rule=rule)
        whole = self.totals.of(unit, kind).area
        note = None if whole else ABSENT
        figures.add(unit, name, share.name, 100 * inside / whole if whole else math.nan, rule=rule, note=note)

    def _add_lacunarity(
        self, figures: Figures, unit: int, name: str, size: float, sums: GlidingSums | None
    ) -> None:
        value, count = words.lacunarity(size)
        if sums is None:
            figures.add(unit, name, value.name, math.nan, rule=words.CUT, note=TOO_LARGE)
            return
        found, boxes = sums.lacunarity(-1 if unit == self.zones else unit)
        note = "; ".join(
            filter(None, (f"boxes of {sums.boxes.rows} by {sums.boxes.columns} cells", self._uneven))
        )
        note = note if math.isfinite(found) else NO_BOX if boxes == 0 else ABSENT
        figures.add(unit, name, value.name, found, rule=words.CUT, note=note)
        figures.add(unit, name, count.name, boxes, rule=words.CUT)

    def _add_boxes(
        self,
        figures: Figures,
        unit: int,
        kind: int,
        name: str,
        counters: dict[tuple[int, int, bool], CoverBoxes],
    ) -> None:
        cell = math.sqrt(math.prod(self.grid.typical_cell))
        for edge in (False, True):
            found = counters[unit, kind, edge].dimensions()
            for row in box_rows(found, edge=edge, cell=cell, remark=self._uneven):
                figures.add(unit, name, row.quantity, row.estimate, low=row.low, high=row.high, note=row.note)


def uneven_cells(grid: Grid) -> str | None:
    """Return a word on a map whose cells differ in size; None where they hardly do."""
    ratio = 1.0
    for vectors in grid.lattice:
        sides = np.hypot(*vectors.T)
        sides = sides[np.isfinite(sides) & (sides > 0)]
        ratio = max(ratio, float(sides.max() / sides.min()))
    return None if ratio < UNEVEN else "cells differ in size over the map; metres are those of typical cells"
