"""Interior area of polygons: what is left of each face beyond a depth from edges of other classes."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import shapely

from geofractal.estimators import fragmentation_quantities as words
from geofractal.landcover.polygon_map import NOTHING

if TYPE_CHECKING:
    from geofractal.estimators.fragmentation import FragmentationOptions
    from geofractal.estimators.fragmentation_polygons import PolygonLayer
    from geofractal.estimators.fragmentation_table import Figures
    from geofractal.landcover.covers import Pack
    from geofractal.landcover.planar import Geometries
    from geofractal.landcover.polygon_map import Bools, PolygonMap, Unit
    from geofractal.measure import Floats, Ints

QUARTER_SEGMENTS = 16
"""Chords that a quarter circle about an end of an edge is drawn with; the depth is short of it by 0.12 %."""

ABSENT = "the class is absent"


def add_interior(
    layer: PolygonLayer,
    pack: Pack,
    units: Mapping[int, Unit],
    options: FragmentationOptions,
    figures: Figures,
) -> None:
    """Add the rows of interior area and of its share at each depth."""
    if not options.interior_depths_m:
        return
    found, ground = layer.faces, layer.ground
    problem = ground.problem
    lay = ground.lay
    maps = None if problem else OnGround(found, lay(found.planar.faces), lay(found.planar.edges))
    rule = words.BOUNDS if options.map_edge_bounds_interior else words.OPEN
    for metres in options.interior_depths_m:
        names = [one.name for one in words.interior(metres)]
        for kind, name in figures.about.wanted(pack):
            members = pack.members[kind] if pack.names else frozenset([name])
            left = None if maps is None else maps.interior(members, metres, options)
            member = found.member(members)
            for number, unit in units.items():
                faces = unit.faces[member[unit.faces]]
                whole = int(found.area[faces].sum())
                inner = math.nan if left is None else math.fsum(left[faces] * found.area[faces])
                share = 100 * inner / whole if whole else math.nan
                area = inner * figures.about.area_unit_m2 / 1e6
                figures.add(number, name, names[0], area, rule=rule, note=problem)
                note = problem or (None if whole else ABSENT)
                figures.add(number, name, names[1], share, rule=rule, note=note)


@dataclass(frozen=True)
class OnGround:
    """Faces and edges of a map on a plane of true distances, in metres."""

    map: PolygonMap
    faces: Geometries
    edges: Geometries

    def interior(self, members: frozenset[str], metres: float, options: FragmentationOptions) -> Floats:
        """Return (f,) the share of each face of a cover that is farther than its depth from other classes."""
        pure = np.flatnonzero(self.map.member(members)[:-1] & ~self._others(members, None)[:-1])
        left, share = self.faces[pure], np.zeros(len(self.faces))
        bounds = self._bounds(members, metres, options)
        for k, (depth, bounding) in enumerate(bounds):
            deeper = np.logical_or.reduce([edges for _, edges in bounds[k:]])
            left = self._without(left, pure, depth, bounding, deeper, alone=len(bounds) == 1)
        share[pure] = shapely.area(left) / shapely.area(self.faces[pure])
        return share

    def _without(
        self, left: Geometries, faces: Ints, depth: float, bounding: Bools, deeper: Bools, *, alone: bool
    ) -> Geometries:
        """Return what is left of faces farther than a depth from bounding edges.

        Where all edges of a face are bounding at this depth or a greater one, those behind them are farther
        away and need no look; where all are at this one, alone, the face shrinks.
        """
        owner, own = self._own(faces)
        count, here, there = (
            np.bincount(owner[one[own]], minlength=len(faces))
            for one in (np.ones(len(bounding), np.bool_), bounding, deeper)
        )
        shrinking, closed = (here == count) & alone, there == count
        left = left.copy()
        left[shrinking] = shapely.buffer(left[shrinking], -depth, quad_segs=QUARTER_SEGMENTS)
        own_too = bounding[own] & (closed & ~shrinking)[owner]
        edges, opened = np.flatnonzero(bounding), np.flatnonzero(~closed)
        tree = shapely.STRtree(self.edges[edges])
        face, edge = tree.query(self.faces[faces[opened]], predicate="dwithin", distance=depth)
        face = np.concatenate([owner[own_too], opened[face]])
        edge = np.concatenate([own[own_too], edges[edge]])
        order = np.argsort(face, kind="stable")
        near, place = np.unique(face[order], return_inverse=True)
        if len(near):
            lines = shapely.multilinestrings(self.edges[edge[order]], indices=place)
            strips = shapely.buffer(lines, depth, quad_segs=QUARTER_SEGMENTS)
            left[near] = shapely.difference(left[near], strips)
        return left

    def _own(self, faces: Ints) -> tuple[Ints, Ints]:
        """Return place in `faces` and edge, of each edge of some faces."""
        place = np.full(len(self.map.kinds), -1)
        place[faces] = np.arange(len(faces))
        sides = place[self.map.planar.sides]
        edge, side = np.nonzero((sides >= 0) & (sides[:, :1] != sides[:, 1:]))
        return sides[edge, side], edge

    def _others(self, members: frozenset[str], wanted: frozenset[str] | None) -> Bools:
        """Return which faces (f + 1,) a class covers that is no member; and is wanted, if any are named."""
        classes = set(self.map.classes) - members
        return self.map.member(classes if wanted is None else classes & wanted)

    def _bounds(
        self, members: frozenset[str], metres: float, options: FragmentationOptions
    ) -> list[tuple[float, Bools]]:
        """Return each depth with the edges that it is kept from: those where classes of that depth end."""
        depths = {name: options.depth_by_neighbour_m.get(name, metres) for name in self.map.classes}
        sides, found = self.map.planar.sides, []
        for depth in sorted({metres, *depths.values()}):
            names = frozenset(name for name, own in depths.items() if own == depth)
            there = self._others(members, names)
            if depth == metres and options.map_edge_bounds_interior:
                there = there | (self.map.kinds == NOTHING)
            ends = there[sides]
            found.append((depth, ends[:, 0] != ends[:, 1]))
        return found
