"""Distances between patches of polygons, edge to edge, and the area that they make together."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import shapely

from geofractal.estimators.fragmentation_links import ABSENT, add_null, add_unit, many
from geofractal.landcover.connectivity import reach

if TYPE_CHECKING:
    from geofractal.estimators.fragmentation import FragmentationOptions
    from geofractal.estimators.fragmentation_polygons import CoverFaces, PolygonLayer, PolygonTotals
    from geofractal.estimators.fragmentation_table import Figures
    from geofractal.landcover.covers import Pack
    from geofractal.landcover.grid import Ints
    from geofractal.landcover.planar import Geometries
    from geofractal.landcover.polygon_map import PolygonMap
    from geofractal.measure import Floats

PATCHES_AT_ONCE = 500
"""Patches whose pairs are looked for together; each may have all others within reach."""


def add_links(
    layer: PolygonLayer, pack: Pack, totals: PolygonTotals, options: FragmentationOptions, figures: Figures
) -> None:
    """Add distances and connected area of every unit and cover that has no more patches than allowed."""
    if not options.distances and options.dispersal_m is None:
        return
    for kind, name in figures.about.wanted(pack):
        counts = {unit: totals.of(unit, kind).patches for unit in figures.measured()}
        few = any(0 < count <= options.most_patches for count in counts.values())
        if layer.ground.problem or not few:
            for unit, count in counts.items():
                reason = layer.ground.problem or many(count, options)
                add_null(figures, unit, name, options, reason if count else ABSENT)
            continue
        cover = totals.kept[kind]
        large = np.flatnonzero(cover.area >= totals.smallest)
        links = PolygonDistances(layer.ground.lay(_outlines(totals.map, cover, large)))
        for unit in figures.measured():
            patches, area = totals.inside(cover, totals.units[unit])
            mine = np.isin(patches, large)
            inside = np.searchsorted(large, patches[mine]), area[mine]
            add_unit(figures, unit, name, options, links, inside, figures.about.area_unit_m2)


def _outlines(found: PolygonMap, cover: CoverFaces, wanted: Ints) -> Geometries:
    """Return the outline of each wanted patch of a cover, as lines."""
    of = np.full(len(found.kinds), -1)
    of[cover.faces] = cover.patch
    place = np.full(len(cover.area) + 1, -1)
    place[wanted] = np.arange(len(wanted))
    sides = place[of[found.planar.sides]]
    bounds = np.flatnonzero(sides[:, 0] != sides[:, 1])
    edges, patch = np.repeat(bounds, 2), sides[bounds].ravel()
    edges, patch = edges[patch >= 0], patch[patch >= 0]
    order = np.argsort(patch, kind="stable")
    outlines: Geometries = shapely.multilinestrings(found.planar.edges[edges[order]], indices=patch[order])
    return outlines


@dataclass(frozen=True)
class PolygonDistances:
    """Where patches lie on the ground, as `geofractal.estimators.fragmentation_links.Links`.

    Attributes
    ----------
    outlines : (p,) lines, in metres; patches of a class have no other distance than that of their outlines
    """

    outlines: Geometries
    _rows: dict[int, tuple[Ints, Floats]] = field(default_factory=dict)

    @cached_property
    def _tree(self) -> shapely.STRtree:
        return shapely.STRtree(self.outlines)

    def nearest(self, wanted: Ints) -> Floats:
        """Return the gap from each wanted patch to the nearest other one; infinite for a lone patch."""
        found = np.full(len(wanted), np.inf)
        if len(self.outlines) > 1:
            pairs, gaps = self._tree.query_nearest(
                self.outlines[wanted], exclusive=True, return_distance=True, all_matches=False
            )
            found[pairs[0]] = gaps
        return found

    def within_reach(self, wanted: Ints, most: float) -> Ints:
        """Return the patches whose box is within `most` metres of the box of all wanted ones."""
        left, bottom, right, top = shapely.bounds(self.outlines).T
        west, south, east, north = shapely.total_bounds(self.outlines[wanted])
        across = np.maximum(left - east, west - right)
        up = np.maximum(bottom - north, south - top)
        return np.flatnonzero((across <= most) & (up <= most))

    def costs(self, chosen: Ints, dispersal_m: float) -> Floats:
        """Return -ln p between every two chosen patches, p = 1/2 at the median dispersal distance."""
        most = reach(dispersal_m)
        self._look(np.array([one for one in chosen.tolist() if one not in self._rows], np.int64), most)
        found = np.full((len(chosen), len(chosen)), np.inf)
        place = np.full(len(self.outlines), -1)
        place[chosen] = np.arange(len(chosen))
        for row, one in enumerate(chosen.tolist()):
            others, gaps = self._rows[one]
            mine = place[others] >= 0
            found[row, place[others[mine]]] = gaps[mine]
        found[found >= most] = np.inf
        return found * (math.log(2) / dispersal_m)

    def _look(self, wanted: Ints, most: float) -> None:
        """Remember the gaps from patches to all that are within reach, themselves included."""
        for begin in range(0, len(wanted), PATCHES_AT_ONCE):
            some = wanted[begin : begin + PATCHES_AT_ONCE]
            first, second = self._tree.query(self.outlines[some], predicate="dwithin", distance=most)
            order = np.argsort(first, kind="stable")
            first, second = some[first[order]], second[order]
            gaps = shapely.distance(self.outlines[first], self.outlines[second])
            stops = np.flatnonzero(np.diff(first)) + 1
            parts = zip(np.split(second, stops), np.split(gaps, stops), strict=True)
            self._rows.update(zip(some.tolist(), parts, strict=True))
