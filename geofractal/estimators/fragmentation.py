"""Fragmentation of classes and habitat groups, for each zone and for the whole map."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from functools import partial
from typing import Annotated, Any, ClassVar, Literal, cast

import numpy as np
from pydantic import Field

from geofractal.estimators import fragmentation_quantities as words
from geofractal.estimators.fragmentation_cells import CellFigures
from geofractal.estimators.fragmentation_links import link_figures
from geofractal.estimators.fragmentation_polygons import PolygonLayer, polygon_fragmentation
from geofractal.estimators.fragmentation_table import Figures, Reporting, told_barriers
from geofractal.landcover.ahead import run_ahead
from geofractal.landcover.covers import Pack, asked_packs
from geofractal.landcover.edges import SharedEdges
from geofractal.landcover.grid import Grid
from geofractal.landcover.labelling import PatchTable, label_patches
from geofractal.landcover.patch_totals import PatchTotals, Totals
from geofractal.landcover.strips import Strip
from geofractal.landcover.zones import ZonePainter, grid_area, zone_sets
from geofractal.measure import CoverMap, CoverMeasure, CoverResult, Options, Quantity

Metres = Annotated[float, Field(gt=0)]


class FragmentationOptions(Options):
    """Options of `Fragmentation`."""

    neighbours: Literal[4, 8] = Field(
        8, description="cells that are one patch: those that share an edge (4), or also a corner (8)"
    )
    smallest_patch_m2: Annotated[float, Field(ge=0)] = Field(
        0.0,
        description="smaller ones are left out of figures of patches; one size for maps of different cells",
    )
    edge_cell_sizes_m: tuple[Metres, ...] = Field(
        (), description="cell sizes, coarser than the map's, at which edge density is stated"
    )
    interior_depths_m: tuple[Metres, ...] = Field((), description="depths at which interior area is stated")
    depth_by_neighbour_m: dict[str, Metres] = Field(
        {}, description="depth from a class, in place of the stated one"
    )
    map_edge_bounds_interior: bool = Field(
        False, description="take the map's edge and cells without data for another class"
    )
    lacunarity_boxes_m: tuple[Metres, ...] = Field((), description="sides of the boxes of lacunarity")
    distances: bool = Field(False, description="state distances to the nearest patch")
    dispersal_m: Metres | None = Field(
        None, description="median dispersal distance, for the equivalent connected area"
    )
    most_patches: Annotated[int, Field(ge=1, le=5_000)] = Field(
        1_000,
        description="patches of a class in a zone up to which distances and connected area are stated",
    )
    box_dimension: bool = Field(False, description="state box dimensions of classes and of their edges")


class Fragmentation(CoverMeasure[FragmentationOptions]):
    """How a class or a habitat group is broken up."""

    name: ClassVar[str] = "fragmentation"
    title: ClassVar[str] = "Fragmentation of classes and habitat groups"
    formula: ClassVar[str] = "effective mesh size = sum A_i^2 / A_t; further ones with each figure"
    sources: ClassVar[tuple[str, ...]] = (words.JAEGER, words.MOSER, words.SAURA, words.PLOTNICK)
    version: ClassVar[int] = 2
    stem: ClassVar[str] = "fragmentation"
    from_polygons: ClassVar[bool] = True
    dissolves: ClassVar[bool] = True
    options: ClassVar[type[Options]] = FragmentationOptions

    def quantities(self, options: FragmentationOptions) -> tuple[Quantity, ...]:
        """Return the figures of amount, border and mesh size, and those asked for."""
        return words.quantities_of(options)

    def readings(self, cover: CoverMap, options: FragmentationOptions) -> int:
        """Return at most how often the map is read: distances are only looked at where patches are few."""
        sizes = (*options.edge_cell_sizes_m, *options.interior_depths_m, *options.lacunarity_boxes_m)
        cells = bool(sizes) or options.box_dimension
        links = options.distances or options.dispersal_m is not None
        return len(asked_packs(cover.covers, cover.groups)) * (
            len(zone_sets(cover.zones)) * (1 + cells) + links
        )

    def measure(self, cover: CoverMap, options: FragmentationOptions) -> CoverResult:
        """Measure classes in one reading for each set of zones, then what was asked for beyond."""
        if cover.raster is None:
            return CoverResult(polygon_fragmentation(cast("PolygonLayer", cover), options))
        figures = Figures(about(cover), options)
        for pack in figures.about.packs():
            totals = count_patches(cover, pack, options)
            figures.add_totals(pack, totals)
            CellFigures(cover, pack, options, totals).add_to(figures)
            link_figures(cover, pack, options, totals, figures)
        return CoverResult(figures.table())


def about(cover: CoverMap) -> Reporting:
    """Return what the rows of a class map's table are about."""
    grid, zones = cover.raster.grid, cover.zones
    told = (
        {}
        if zones is None
        else {
            "zones": zones.names,
            "problems": zones.problems,
            "overlaps": zones.overlaps,
            "outside_m2": zones.outside_m2,
        }
    )
    return Reporting(
        cover.raster.legend.names,
        cover.groups,
        cover.covers,
        math.sqrt(math.prod(grid.typical_cell)),
        grid.area_unit_m2,
        grid.length_unit_m,
        barred=cover.barriers is not None and cover.barriers.wide,
        said=[""] * (0 if zones is None else len(zones)) + [told_barriers(cover.barriers)],
        **told,
    )


@dataclass(frozen=True)
class MapTotals:
    """What reading a map once for each set of zones gave; the unit after the last zone is the whole map.

    Attributes
    ----------
    patches : totals by unit and cover of the pack
    all_area : (units,) area of all cells, covered or not, in the grid's unit
    shared : twice the length that edges on zone borders add, by zone and cover
    """

    grid: Grid
    patches: PatchTotals
    all_area: Any
    shared: Any

    @property
    def whole(self) -> int:
        """Return the unit of the whole map."""
        return self.patches.units - 1

    def of(self, unit: int, kind: int) -> Totals:
        """Return the totals of a unit and cover."""
        return self.patches.of(unit, kind)

    def twice_edge(self, unit: int, kind: int) -> int:
        """Return twice the length of class-change edges, in the grid's unit."""
        zoned = unit < self.whole and kind < self.shared.shape[1]
        return 2 * self.of(unit, kind).inner_edge + (int(self.shared[unit, kind]) if zoned else 0)

    def twice_all_edges(self, unit: int) -> int:
        """Return twice the length of edges between any two covers, each of which has them."""
        return sum(self.twice_edge(unit, kind) for kind in range(self.patches.classes)) // 2

    def covered(self, unit: int) -> int:
        """Return the covered area of a unit, in the grid's unit."""
        return sum(self.of(unit, kind).area for kind in range(self.patches.classes))

    def uncovered(self, unit: int) -> int:
        """Return the area of a unit's cells without data, in the grid's unit."""
        return int(self.all_area[unit]) - self.covered(unit)


def map_strips(cover: CoverMap, pack: Pack, members: tuple[int, ...] = ()) -> Iterator[Strip]:
    """Yield a map's strips: covers in place of classes, with barriers and the zones of one set."""
    strips = pack.remap(cover.raster.strips(), cover.raster.legend.names)
    if cover.barriers is not None:
        strips = cover.barriers(strips)
    if members:
        strips = ZonePainter(cover.zones, members, np.zeros(len(cover.zones), np.int64))(strips)
    return iter(strips)


def count_patches(cover: CoverMap, pack: Pack, options: FragmentationOptions) -> MapTotals:
    """Return the totals of patches: one reading for each set of zones without overlap."""
    grid, n = cover.raster.grid, 0 if cover.zones is None else len(cover.zones)
    smallest = int(np.ceil(options.smallest_patch_m2 / grid.area_unit_m2 * (1 - 1e-9)))
    totals, area, shared = PatchTotals(n + 1, smallest), np.zeros(n + 1, np.int64), SharedEdges(n)
    for first, members in enumerate(zone_sets(cover.zones)):
        strips = _weighed(map_strips(cover, pack), area if first == 0 else np.zeros(1, np.int64))
        if members:
            shared.begin()
            strips = shared(ZonePainter(cover.zones, members, area)(strips))
        for found in label_patches(run_ahead(partial(iter, strips)), neighbours=options.neighbours):
            if first == 0:
                everywhere = np.full(len(found.patches), n)
                totals.add(everywhere, found.patches)
                totals.add_across(everywhere, found.patches, found.patches)
            if members:
                totals.add(found.pieces["zone"], found.pieces)
                whole = PatchTable(found.patches.values[found.part_of])
                totals.add_across(found.parts["zone"], found.parts, whole)
    return MapTotals(grid, totals, area, shared.twice)


def _weighed(strips: Iterator[Strip], area: Any) -> Iterator[Strip]:
    """Pass strips on while the area of all their cells is added to the last place of `area`."""
    for strip in strips:
        area[-1] += grid_area(strip)
        yield strip
