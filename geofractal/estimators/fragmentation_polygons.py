"""Fragmentation of a layer of polygons: amount and mesh size, from the same totals as of class maps."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.estimators.fragmentation import FragmentationOptions
from geofractal.estimators.fragmentation_table import Figures, Reporting
from geofractal.landcover.covers import Pack
from geofractal.landcover.patch_totals import Totals
from geofractal.landcover.polygons import Geometries, PolygonPatches, find_polygon_patches, unusable
from geofractal.measure import Bools, Floats, Ints

if TYPE_CHECKING:
    import pandas as pd
    from pyproj import CRS

AREA_UNIT_M2 = 1e-4
"""Areas are summed as whole numbers of square centimetres."""


@dataclass(frozen=True)
class PolygonLayer:
    """Polygons with their classes, and zones in the same CRS.

    Attributes
    ----------
    geometry, cover : (n,) polygons and class of each
    crs : of the polygons and of the zones
    extent : area mapped; patches that reach its boundary make bounds of figures across borders
    zone_geometry, zone_names : (k,) zones
    groups, covers : as of `geofractal.measure.CoverMap`
    """

    geometry: Geometries
    cover: Sequence[str]
    crs: CRS
    extent: Any = None
    zone_geometry: Sequence[Any] = ()
    zone_names: tuple[str, ...] = ()
    groups: dict[str, tuple[str, ...]] = field(default_factory=dict)
    covers: tuple[str, ...] = ()


def polygon_fragmentation(layer: PolygonLayer, options: FragmentationOptions) -> pd.DataFrame:
    """Return the table of fragmentation of polygons: figures of amount, and mesh size.

    Overlaps of polygons of one class count once; area with data is the union of all polygons. Figures of
    edges and of cells need a class map.
    """
    usable = np.array([not unusable(one) for one in layer.geometry], np.bool_)
    everything = shapely.union_all(layer.geometry[usable])
    problems = tuple(unusable(zone) or _off(zone, everything) for zone in layer.zone_geometry)
    good = [k for k, reason in enumerate(problems) if not reason]
    zones = list(layer.zone_geometry)
    about = Reporting(
        tuple(dict.fromkeys(layer.cover)),
        layer.groups,
        layer.covers,
        math.nan,
        AREA_UNIT_M2,
        1.0,
        layer.zone_names,
        problems,
        [
            tuple(j for j in good if j != k and k in good and _overlap(zones[k], zones[j]))
            for k in range(len(zones))
        ],
        [0.0] * len(zones),
    )
    figures = Figures(about, options)
    for pack in about.packs():
        parts = {k: zones[k] for k in good} | {len(zones): None}
        figures.add_totals(pack, PolygonTotals(layer, pack, parts, everything, options))
    return figures.table()


def _off(zone: Any, everything: Any) -> str:
    return "" if shapely.intersects(zone, everything) else "off the map"


def _overlap(one: Any, other: Any) -> bool:
    return bool(shapely.relate_pattern(one, other, "T********"))


class PolygonTotals:
    """Totals of patches, as `geofractal.estimators.fragmentation_table.UnitTotals`; areas in `AREA_UNIT_M2`.

    Parameters
    ----------
    parts : zone of each unit that can be measured, None for the whole layer
    everything : union of all polygons
    """

    def __init__(
        self,
        layer: PolygonLayer,
        pack: Pack,
        parts: Mapping[int, Any],
        everything: Any,
        options: FragmentationOptions,
    ) -> None:
        self._crs, self._neighbours = layer.crs, options.neighbours
        self._limit = options.smallest_patch_m2 / AREA_UNIT_M2 * (1 - 1e-9)
        self._covered: dict[int, int] = {}
        self._uncovered = dict.fromkeys(parts, 0)
        for unit, zone in parts.items():
            inside = everything if zone is None else shapely.intersection(everything, zone)
            self._covered[unit] = int(self._areas(inside).sum())
            if zone is not None:
                self._uncovered[unit] = int(self._areas(shapely.difference(zone, everything)).sum())
        self._found: dict[tuple[int, int], Totals] = {}
        members = dict(zip(pack.names, pack.members, strict=True))
        classes = np.asarray(layer.cover, object)
        for kind, name in enumerate(pack.covers(tuple(dict.fromkeys(layer.cover)))):
            own = layer.geometry[np.isin(classes, list(members.get(name, {name})))]
            patches = find_polygon_patches(
                own, [name] * len(own), layer.crs, neighbours=options.neighbours, dissolve=True
            )
            edge = None if layer.extent is None else layer.extent.boundary
            reach = np.array(
                [edge is not None and edge.intersects(one) for one in patches.geometry], np.bool_
            )
            for unit, zone in parts.items():
                self._found[unit, kind] = self._totals(patches, reach, zone)

    def _areas(self, geometry: Any) -> Ints:
        """Return the areas of the patches that one geometry makes; what is no area is left out."""
        parts = shapely.get_parts(shapely.get_parts(geometry))
        own = parts[shapely.get_type_id(parts) == shapely.GeometryType.POLYGON]
        found = find_polygon_patches(
            own, [""] * len(own), self._crs, neighbours=self._neighbours, dissolve=True
        )
        return _counted(found.area_m2)

    def _totals(self, patches: PolygonPatches, reach: Bools, zone: Any) -> Totals:
        whole = _counted(patches.area_m2)
        cut = [area[None] for area in whole]
        if zone is not None:
            cut = [self._areas(shapely.intersection(one, zone)) for one in patches.geometry]
        inside = [int(pieces.sum()) for pieces in cut]
        pieces = np.concatenate([np.empty(0, np.int64), *cut])
        sizes = [int(area) for area in pieces[pieces >= self._limit]]
        large = [k for k, area in enumerate(whole) if area >= self._limit and inside[k] > 0]
        return Totals(
            area=sum(inside),
            inner_edge=0,
            outer_edge=0,
            patches=len(sizes),
            patch_area=sum(sizes),
            squares=sum(size**2 for size in sizes),
            across=sum(inside[k] * int(whole[k]) for k in large),
            largest=max(sizes, default=0),
            median=float(np.median(sizes)) if sizes else math.nan,
            open_patches=int(reach[large].sum()),
        )

    def of(self, unit: int, kind: int) -> Totals:
        """Return the totals of a unit and cover."""
        return self._found.get((unit, kind), Totals(0, 0, 0, 0, 0, 0, 0, 0, math.nan, 0))

    def covered(self, unit: int) -> int:
        """Return the area of a unit that polygons cover."""
        return self._covered[unit]

    def uncovered(self, unit: int) -> int:
        """Return the area of a zone that no polygon covers."""
        return self._uncovered[unit]

    def twice_edge(self, unit: int, kind: int) -> None:
        """Give no length: edges are those of cells."""


def _counted(square_metres: Floats) -> Ints:
    whole: Ints = np.rint(square_metres / AREA_UNIT_M2).astype(np.int64)
    return whole
