"""A layer of polygons with its zones and barriers as faces and edges: what cells are to a class map."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely
from numpy.typing import NDArray

from geofractal.landcover.barriers import BARRIER
from geofractal.landcover.grid import Ints, ellipsoid, is_engineering
from geofractal.landcover.planar import Geometries, Planar, corners, lay_over
from geofractal.landcover.polygons import line_lengths, polygon_areas

if TYPE_CHECKING:
    from pyproj import CRS

Bools = NDArray[np.bool_]

SNAP_M = 0.001
"""What is narrower is no face: outlines that fail to meet by less are taken to meet."""

AREA_UNIT_M2, LENGTH_UNIT_M = 1e-4, 1e-6
"""Areas and lengths are whole numbers of these, so that sums do not depend on their order."""

NOTHING = 0
"""Kind of faces that no polygon covers."""


@dataclass(frozen=True, slots=True)
class Unit:
    """A part of a map: a zone, or all of it.

    Attributes
    ----------
    faces : (f,) its faces, ascending
    edges : (e,) edges with a side in it
    inside : (e, 2) which of their sides are
    """

    faces: Ints
    edges: Ints
    inside: Bools


@dataclass(frozen=True)
class PolygonMap:
    """Faces of a layer of polygons, what covers each, and the edges between them.

    The number of faces itself stands for what lies beyond all of them.

    Attributes
    ----------
    planar : faces and edges
    classes : (c,) names; what barriers with a width take is the last one, `BARRIER`
    kinds : (f + 1,) number of each face's set of classes
    sets : classes of each kind, more than one where polygons overlap
    zone_faces : faces of each zone, ascending; none for zones that cannot be measured
    extent_faces : faces of the area mapped, None where it is not known
    barred : (e,) edges that lie on a barrier
    rim : (e,) edges that lie where the area mapped ends
    area, length : (f + 1,), (e,) in `AREA_UNIT_M2` and `LENGTH_UNIT_M`
    """

    planar: Planar
    classes: tuple[str, ...]
    kinds: Ints
    sets: tuple[frozenset[int], ...]
    zone_faces: tuple[Ints, ...]
    extent_faces: Ints | None
    barred: Bools
    rim: Bools
    area: Ints
    length: Ints

    @property
    def covered(self) -> Bools:
        """Return which faces (f + 1,) are covered."""
        found: Bools = self.kinds != NOTHING
        return found

    def member(self, names: Iterable[str]) -> Bools:
        """Return which faces (f + 1,) some classes cover."""
        wanted = {self.classes.index(name) for name in names if name in self.classes}
        found: Bools = np.array([not wanted.isdisjoint(one) for one in self.sets], np.bool_)[self.kinds]
        return found

    @cached_property
    def corners(self) -> Ints:
        """Return (e, 2, 2) what faces at a node have in common where no barrier parts them."""
        return corners(self.planar, self.barred)

    @cached_property
    def whole(self) -> Unit:
        """Return the whole map."""
        faces, sides = len(self.planar.faces), self.planar.sides
        return Unit(np.arange(faces), np.arange(len(sides)), sides < faces)

    @cached_property
    def zones(self) -> tuple[Unit, ...]:
        """Return each zone."""
        return tuple(self.unit(faces) for faces in self.zone_faces)

    def unit(self, faces: Ints) -> Unit:
        """Return a part of the map by its faces."""
        edges = self.edges_of(faces)
        mine = np.zeros(len(self.kinds), np.bool_)
        mine[faces] = True
        return Unit(faces, edges, mine[self.planar.sides[edges]])

    @cached_property
    def _by_face(self) -> tuple[Ints, Ints]:
        order = np.argsort(self.planar.sides.ravel(), kind="stable")
        starts = np.searchsorted(self.planar.sides.ravel()[order], np.arange(len(self.kinds)))
        return order // 2, starts

    def edges_of(self, faces: Ints) -> Ints:
        """Return the edges with a side in some faces, ascending."""
        edges, starts = self._by_face
        count = starts[faces + 1] - starts[faces]
        place = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
        return np.unique(edges[np.repeat(starts[faces], count) + place])

    def components(self, faces: Ints, edges: Ints, neighbours: int) -> Ints:
        """Return the number of the patch of each face, from 0.

        Faces are one patch where they share an edge on no barrier or, with 8 neighbours, a node where no
        barrier passes between them.
        """
        from scipy.sparse import coo_array
        from scipy.sparse.csgraph import connected_components

        place = np.full(len(self.kinds), -1, np.int64)
        place[faces] = np.arange(len(faces))
        sides = place[self.planar.sides[edges]]
        joined = sides[(sides >= 0).all(axis=1) & ~self.barred[edges]]
        links, number = [joined], len(faces)
        if neighbours == 8:
            corner = self.corners[edges][sides >= 0]
            places, place = np.unique(corner, return_inverse=True)
            held = np.repeat(sides[sides >= 0], 2)
            links.append(np.stack([held, number + place.ravel()], axis=1))
            number += len(places)
        first, second = np.concatenate(links).T
        graph = coo_array((np.ones(len(first), np.bool_), (first, second)), shape=(number, number))
        _, label = connected_components(graph, directed=False)
        _, found = np.unique(label[: len(faces)], return_inverse=True)
        return np.asarray(found, np.int64)

    def sums(self, patch: Ints, faces: Ints) -> Ints:
        """Return the area of each patch, given the patch of each of some faces."""
        found = np.zeros(int(patch.max(initial=-1)) + 1, np.int64)
        np.add.at(found, patch, self.area[faces])
        return found


def polygon_map(
    polygons: Geometries,
    cover: Sequence[str],
    crs: CRS,
    *,
    zones: Sequence[Any] = (),
    barriers: Geometries | None = None,
    strips: Geometries | None = None,
    extent: Any = None,
) -> PolygonMap:
    """Return polygons as a map of faces.

    Parameters
    ----------
    polygons, cover : (n,) sound polygons and the class of each
    crs : of all geometries
    zones : sound polygons, None for those that cannot be measured
    barriers : lines that part what they cross
    strips : polygons that barriers of some width take from all classes
    extent : area mapped
    """
    empty = np.empty(0, object)
    lines, strips = (empty if one is None else one for one in (barriers, strips))
    drawn = [polygons, np.array([*zones, extent, None], object)[:-1], strips]
    snap = SNAP_M / metres_a_unit(crs)
    planar = lay_over(_rings(np.concatenate(drawn)), lines, snap)
    points = shapely.STRtree(shapely.point_on_surface(planar.faces))
    classes = (*dict.fromkeys(cover), *([BARRIER] if len(strips) else []))
    number = {name: k for k, name in enumerate(classes)}
    of = np.array([number[name] for name in cover], np.int64)
    polygon, face = points.query(polygons, predicate="intersects")
    kinds, sets = _kinds(len(planar.faces), len(classes), face, of[polygon])
    _, taken = points.query(strips, predicate="intersects")
    kinds[taken[kinds[taken] != NOTHING]] = len(classes)
    middle = shapely.STRtree(shapely.line_interpolate_point(planar.edges, 0.5, normalized=True))

    def on(line: Any) -> Bools:
        found = np.zeros(len(planar.edges), np.bool_)
        if len(line) and len(planar.edges):
            found[middle.query(line, predicate="dwithin", distance=snap)[1]] = True
        return found

    def inside(zone: Any) -> Ints:
        return np.unique(points.query(zone, predicate="intersects")) if zone is not None else np.empty(0, int)

    return PolygonMap(
        planar,
        classes,
        kinds,
        sets,
        tuple(inside(zone) for zone in zones),
        None if extent is None else inside(extent),
        on(shapely.get_parts(lines)),
        on(empty if extent is None else shapely.get_parts(extent.boundary)),
        np.append(_whole(polygon_areas(planar.faces, crs) / AREA_UNIT_M2), 0),
        _whole(line_lengths(planar.edges, crs) / LENGTH_UNIT_M),
    )


def _rings(geometries: Geometries) -> Geometries:
    found: Geometries = shapely.get_rings(shapely.get_parts(geometries))
    return found


def _kinds(faces: int, classes: int, face: Ints, of: Ints) -> tuple[Ints, tuple[frozenset[int], ...]]:
    """Return the number of each face's set of classes, and the sets."""
    sets: dict[frozenset[int], int] = {frozenset([k]): k + 1 for k in range(classes)}
    pairs = np.unique(face * max(classes, 1) + of)
    face, of = np.divmod(pairs, max(classes, 1))
    kinds = np.full(faces + 1, NOTHING, np.int64)
    kinds[face] = of + 1
    several = np.bincount(face, minlength=faces)[face] > 1
    together: dict[int, list[int]] = {}
    for one, kind in zip(face[several].tolist(), of[several].tolist(), strict=True):
        together.setdefault(one, []).append(kind)
    for one, held in together.items():
        kinds[one] = sets.setdefault(frozenset(held), len(sets) + 1)
    return kinds, (frozenset(), *sets)


def _whole(values: NDArray[np.float64]) -> Ints:
    found: Ints = np.rint(values).astype(np.int64)
    return found


def metres_a_unit(crs: CRS) -> float:
    """Return about how many metres a unit of a CRS is."""
    unit = float(crs.axis_info[0].unit_conversion_factor)
    return unit * (1.0 if is_engineering(crs) or not crs.is_geographic else ellipsoid(crs)[0])
