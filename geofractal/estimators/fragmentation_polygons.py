"""Fragmentation of a layer of polygons: the table of class maps, from exact boundaries."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from geofractal.estimators import fragmentation_quantities as words
from geofractal.estimators.fragmentation_table import Figures, Reporting, told_barriers, told_left_out
from geofractal.estimators.polygon_boxes import add_boxes
from geofractal.estimators.polygon_interior import add_interior
from geofractal.estimators.polygon_links import add_links
from geofractal.landcover.patch_totals import Totals
from geofractal.landcover.polygon_map import AREA_UNIT_M2, LENGTH_UNIT_M, NOTHING

if TYPE_CHECKING:
    import pandas as pd

    from geofractal.estimators.fragmentation import FragmentationOptions
    from geofractal.landcover.covers import Pack
    from geofractal.landcover.grid import Ints
    from geofractal.landcover.polygon_map import Bools, PolygonMap, Unit

NEEDS_CELLS = "needs cells: rasterise the polygons, with cells finer than the size asked for"
EDGE_UNKNOWN = "all that the polygons cover; where the area mapped ends is not known"


class PolygonLayer(Protocol):
    """A layer of polygons, as `geofractal.polygon_cover.PolygonCover`."""

    @property
    def zones(self) -> Any: ...  # noqa: D102 - as of geofractal.measure.CoverMap

    @property
    def barriers(self) -> Any: ...  # noqa: D102 - as of geofractal.measure.CoverMap

    @property
    def groups(self) -> dict[str, tuple[str, ...]]: ...  # noqa: D102 - as of geofractal.measure.CoverMap

    @property
    def covers(self) -> tuple[str, ...]: ...  # noqa: D102 - as of geofractal.measure.CoverMap

    @property
    def left_out(self) -> dict[str, int]:
        """Return why geometries are in no patch, and how many; known once faces were asked for."""

    @property
    def faces(self) -> PolygonMap:
        """Return the map that the polygons make."""

    @property
    def ground(self) -> Any:
        """Return the plane that distances are measured on: `geofractal.reader.ground.GroundPlane`."""


def polygon_fragmentation(layer: PolygonLayer, options: FragmentationOptions) -> pd.DataFrame:
    """Return the table of fragmentation of polygons.

    Polygons of one class that overlap or touch are one; where those of several classes overlap, each has the
    area. Area with data is what polygons cover. Figures that need cells are null.
    """
    found, zones = layer.faces, layer.zones
    problems = () if zones is None else zones.problems
    units = {k: unit for k, unit in enumerate(found.zones) if not problems[k]}
    units[len(problems)] = found.whole
    about = Reporting(
        found.classes,
        layer.groups,
        layer.covers,
        math.nan,
        AREA_UNIT_M2,
        LENGTH_UNIT_M,
        () if zones is None else zones.names,
        problems,
        () if zones is None else zones.overlaps,
        [0.0] * len(problems),
        layer.barriers is not None and layer.barriers.wide,
        [*(_said_of_zone(found, units.get(k)) for k in range(len(problems))), _said_of_map(layer)],
    )
    figures = Figures(about, options)
    for pack in about.packs():
        totals = PolygonTotals(found, pack, units, options)
        figures.add_totals(pack, totals)
        _add_cells(pack, options, figures)
        add_interior(layer, pack, units, options, figures)
        add_links(layer, pack, totals, options, figures)
        add_boxes(layer, pack, totals, options, figures)
    return figures.table()


def _said_of_map(layer: PolygonLayer) -> str:
    """Return what is to be said beside the area of the whole map."""
    edge = EDGE_UNKNOWN if layer.faces.extent_faces is None else ""
    overlap = _said_of_zone(layer.faces, layer.faces.whole)
    left_out = told_left_out("polygons", layer.left_out)
    return "; ".join(filter(None, (edge, overlap, left_out, told_barriers(layer.barriers))))


def _said_of_zone(found: PolygonMap, unit: Unit | None) -> str:
    """Return what is to be said beside the area of a zone, None for one that cannot be measured."""
    if unit is None:
        return ""
    several = np.array([len(one) > 1 for one in found.sets], np.bool_)[found.kinds[unit.faces]]
    twice = int(found.area[unit.faces[several]].sum()) * AREA_UNIT_M2 / 1e6
    return f"polygons of different classes overlap on {twice:.6g} km2, which each has" if twice else ""


def _add_cells(pack: Pack, options: FragmentationOptions, figures: Figures) -> None:
    """Add the rows of figures that only cells can give."""
    sizes = options.lacunarity_boxes_m
    nulls: list[tuple[str, str, float | None]] = [
        (words.coarse(size).name, words.CHANGES, size) for size in options.edge_cell_sizes_m
    ]
    nulls += [(one.name, words.CUT, None) for size in sizes for one in words.lacunarity(size)]
    boxes = words.box_quantities(edge=False) if options.box_dimension else ()
    nulls += [(one.name, "", None) for one in boxes if one.kind == "number"]
    for unit in figures.measured():
        for _, name in figures.about.wanted(pack):
            for quantity, rule, cell in nulls:
                figures.add(unit, name, quantity, math.nan, rule=rule, note=NEEDS_CELLS, cell=cell)


@dataclass(frozen=True)
class CoverFaces:
    """The faces of a cover and their patches, whole.

    Attributes
    ----------
    member : (f + 1,) which faces are the cover's
    faces : (m,) those, ascending
    patch : (m,) number of each one's patch
    area : (p,) of each patch
    opened : (p,) which patches reach the end of the area mapped
    """

    member: Bools
    faces: Ints
    patch: Ints
    area: Ints
    opened: Bools


def cover_faces(found: PolygonMap, names: frozenset[str], neighbours: int) -> CoverFaces:
    """Return the faces of a cover and their patches."""
    member = found.member(names)
    faces = np.flatnonzero(member)
    patch = found.components(faces, found.edges_of(faces), neighbours)
    area = found.sums(patch, faces)
    of = np.full(len(member), -1)
    of[faces] = patch
    ends = of[found.planar.sides[found.rim]].ravel()
    opened = np.zeros(len(area), np.bool_)
    opened[ends[ends >= 0]] = True
    return CoverFaces(member, faces, patch, area, opened)


@dataclass
class PolygonTotals:
    """Totals of patches, as `geofractal.estimators.fragmentation_table.UnitTotals`."""

    map: PolygonMap
    pack: Pack
    units: Mapping[int, Unit]
    options: FragmentationOptions
    kept: dict[int, CoverFaces] = field(default_factory=dict)
    _found: dict[tuple[int, int], tuple[Totals, int]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Add up every cover, in each unit."""
        self.smallest = math.ceil(self.options.smallest_patch_m2 / AREA_UNIT_M2 * (1 - 1e-9))
        for kind, name in enumerate(self.pack.covers(self.map.classes)):
            members = self.pack.members[kind] if self.pack.names else frozenset([name])
            cover = self.kept[kind] = cover_faces(self.map, members, self.options.neighbours)
            for number, unit in self.units.items():
                self._found[number, kind] = self._totals(cover, unit)

    def _totals(self, cover: CoverFaces, unit: Unit) -> tuple[Totals, int]:
        faces = unit.faces[cover.member[unit.faces]]
        pieces = self.map.sums(self.map.components(faces, unit.edges, self.options.neighbours), faces)
        sizes = pieces[pieces >= self.smallest].tolist()
        patches, inside = self.inside(cover, unit)
        large = cover.area[patches] >= self.smallest
        whole = cover.area[patches[large]].tolist()
        totals = Totals(
            area=int(self.map.area[faces].sum()),
            inner_edge=0,
            outer_edge=self._outer(cover, unit),
            patches=len(sizes),
            patch_area=sum(sizes),
            squares=sum(size**2 for size in sizes),
            across=sum(part * size for part, size in zip(inside[large].tolist(), whole, strict=True)),
            largest=max(sizes, default=0),
            median=float(np.median(sizes)) if sizes else math.nan,
            open_patches=int(cover.opened[patches[large]].sum()),
        )
        return totals, self._twice(cover, unit)

    def inside(self, cover: CoverFaces, unit: Unit) -> tuple[Ints, Ints]:
        """Return the patches of a cover with a part in a unit, and what of their area lies inside."""
        faces = unit.faces[cover.member[unit.faces]]
        area = np.zeros(len(cover.area), np.int64)
        mine = cover.patch[np.searchsorted(cover.faces, faces)]
        np.add.at(area, mine, self.map.area[faces])
        patches = np.unique(mine)
        return patches, area[patches]

    def _twice(self, cover: CoverFaces, unit: Unit) -> int:
        """Return twice the length of edges to other classes: half for each side in the unit."""
        sides = self.map.planar.sides[unit.edges]
        own, covered = cover.member[sides], self.map.covered[sides]
        change = (own[:, 0] != own[:, 1]) & covered.all(axis=1)
        return int((self.map.length[unit.edges] * unit.inside.sum(axis=1))[change].sum())

    def _outer(self, cover: CoverFaces, unit: Unit) -> int:
        """Return the length of all edges of patches, both sides of barriers included."""
        own = cover.member[self.map.planar.sides[unit.edges]] & unit.inside
        length, barred = self.map.length[unit.edges], self.map.barred[unit.edges]
        return int(length[own[:, 0] != own[:, 1]].sum() + 2 * length[own.all(axis=1) & barred].sum())

    def of(self, unit: int, kind: int) -> Totals:
        """Return the totals of a unit and cover."""
        nothing = Totals(0, 0, 0, 0, 0, 0, 0, 0, math.nan, 0)
        return self._found.get((unit, kind), (nothing, 0))[0]

    def twice_edge(self, unit: int, kind: int) -> int:
        """Return twice the length of class-change edges of a cover."""
        return self._found.get((unit, kind), (None, 0))[1]

    def twice_all_edges(self, unit: int) -> int:
        """Return twice the length of edges between any two classes."""
        one = self.units[unit]
        kinds = self.map.kinds[self.map.planar.sides[one.edges]]
        change = (kinds[:, 0] != kinds[:, 1]) & (kinds != NOTHING).all(axis=1)
        return int((self.map.length[one.edges] * one.inside.sum(axis=1))[change].sum())

    def covered(self, unit: int) -> int:
        """Return the area of a unit that polygons cover."""
        faces = self.units[unit].faces
        return int(self.map.area[faces[self.map.covered[faces]]].sum())

    def uncovered(self, unit: int) -> int:
        """Return the area of a unit that no polygon covers; none of a whole map whose end is not known."""
        faces = self.units[unit].faces
        if self.units[unit] is self.map.whole:
            faces = np.empty(0, np.int64) if self.map.extent_faces is None else self.map.extent_faces
        return int(self.map.area[faces[~self.map.covered[faces]]].sum())
