"""A layer of polygons opened for a measure: its zones and barriers, its patches and faces."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.cover_map import OWN_BARRIER
from geofractal.errors import ConfigError, LayerError
from geofractal.estimators.fragmentation_polygons import cover_faces
from geofractal.held_patches import sifted
from geofractal.landcover.barriers import BARRIER
from geofractal.landcover.polygon_map import PolygonMap, polygon_map
from geofractal.landcover.polygon_zones import PolygonBarriers, PolygonZones
from geofractal.landcover.polygons import Geometries, measured_patches, unusable
from geofractal.measure import Bools, CoverPatches, Ints, Outline, PatchRule
from geofractal.patches import polygon_patches, polygon_table
from geofractal.reader.ground import GroundPlane

if TYPE_CHECKING:
    import pandas as pd

ROUNDING = 1e-9  # share of a patch's area that says nothing about where it lies


@dataclass(frozen=True)
class PolygonCover:
    """A layer of polygons as measures get it: see `geofractal.measure.CoverMap`.

    Holds all polygons, and for fragmentation their faces, at once.

    Attributes
    ----------
    geometries : (n,) shapely geometries
    classes : (n,) class of each, None for one that has none; None where all are one class
    crs : of the polygons
    dissolve : whether polygons of one class that overlap or share a boundary are one patch
    extent : area mapped, None where it is not known
    budget : worst relative error of distances allowed on the plane of the layer
    left_out : why geometries are in no patch, and how many; known once patches were asked for
    """

    geometries: Any
    classes: Any
    crs: Any
    covers: tuple[str, ...] = ()
    dissolve: bool = True
    zones: PolygonZones | None = None
    barriers: PolygonBarriers | None = None
    groups: dict[str, tuple[str, ...]] = field(default_factory=dict)
    extent: Any = None
    budget: float = 0.005
    left_out: dict[str, int] = field(default_factory=dict)
    raster: None = None
    _made: dict[tuple[int, Outline], pd.DataFrame] = field(default_factory=dict, init=False, repr=False)

    def __post_init__(self) -> None:
        """Refuse classes and groups with the name of what barriers take."""
        wide = self.barriers is not None and self.barriers.wide
        if wide and BARRIER in {*self._names, *self.groups}:
            raise ConfigError(OWN_BARRIER)

    @cached_property
    def _usable(self) -> Bools:
        names = self._names
        reasons = [
            unusable(one) or ("no class" if name is None else "")
            for one, name in zip(self.geometries, names, strict=True)
        ]
        self.left_out.update(Counter(reason for reason in reasons if reason))
        return np.array([not reason for reason in reasons], np.bool_)

    @cached_property
    def _names(self) -> Any:
        return np.full(len(self.geometries), "all", object) if self.classes is None else self.classes

    @cached_property
    def faces(self) -> PolygonMap:
        """Return the map that the polygons make with zones, barriers and extent."""
        return polygon_map(
            shapely.force_2d(self.geometries[self._usable]),
            [str(name) for name in self._names[self._usable]],
            self.crs,
            zones=[] if self.zones is None else list(self.zones.geometries),
            barriers=None if self.barriers is None else self.barriers.lines,
            strips=None if self.barriers is None else self.barriers.strips,
            extent=self.extent,
        )

    @cached_property
    def ground(self) -> GroundPlane:
        """Return the plane that distances are measured on."""
        usable: Geometries = self.geometries[self._usable]
        west, south, east, north = shapely.total_bounds(usable) if len(usable) else (0.0, 0.0, 0.0, 0.0)
        return GroundPlane(self.crs, (float(west), float(south), float(east), float(north)), self.budget)

    def patches(
        self,
        *,
        neighbours: int = 8,
        perimeter: Outline = "cell-edges",
        map_edge: bool = True,  # noqa: ARG002 - polygons have none
        columns: Sequence[str] | None = None,
        smallest_cells: int = 1,  # noqa: ARG002 - polygons have none
        smallest_area_m2: float = 0.0,
    ) -> Iterator[CoverPatches]:
        """Yield the patches of the covers asked for, once for each set of zones that share no area."""
        table = self._every(neighbours, perimeter)
        for members in (() if self.zones is None else self.zones.sets) or ((),):
            told = table.assign(zone=self._zone_of(table, members)) if members else table
            yield sifted(told, members, columns, smallest_area_m2)

    def polygons(self, rule: PatchRule) -> Iterator[pd.DataFrame]:
        """Yield the patches of the covers asked for with their polygons: one table, cover after cover."""
        yield self._every(rule.neighbours, rule.perimeter)

    def _every(self, neighbours: int, perimeter: Outline) -> pd.DataFrame:
        """Return the patches of the covers asked for; they are made once."""
        import pandas as pd

        if perimeter == "smoothed":
            raise LayerError("perimeter: smoothed is for class maps; polygons have no cells to smooth.")
        if (found := self._made.get((neighbours, perimeter))) is not None:
            return found
        classes = dict.fromkeys(str(name) for name in self._names[self._usable])
        names = self.covers or (*classes, *self.groups)
        tables = [self._table(name, neighbours, perimeter).assign(cover=name) for name in names]
        table = pd.concat(tables, ignore_index=True)
        table["cover"] = pd.Categorical(table["cover"], pd.Index(names, dtype=str))
        self._made[neighbours, perimeter] = table
        return table

    def _table(self, name: str, neighbours: int, perimeter: Outline) -> pd.DataFrame:
        """Return the patches of a cover; its polygons make them alone unless barriers cut these."""
        members = frozenset(self.groups.get(name, (name,)))
        if self.barriers is None:
            own = self._usable & np.isin(self._names.astype(str), list(members))
            return polygon_patches(
                self.geometries[own],
                crs=self.crs,
                neighbours=neighbours,
                dissolve=self.dissolve,
                perimeter=perimeter,
                extent=self.extent,
            )
        cover = cover_faces(self.faces, members, neighbours)
        order = np.argsort(cover.patch, kind="stable")
        parts = shapely.multipolygons(self.faces.planar.faces[cover.faces[order]], indices=cover.patch[order])
        whole = shapely.union_all(parts[:, None], axis=1)
        found = measured_patches(np.full(len(whole), name, object), whole, self.crs, {})
        return polygon_table(found, perimeter, self.extent)

    def _zone_of(self, table: pd.DataFrame, members: tuple[int, ...]) -> Ints:
        """Return the zone that each patch lies in alone, -1 where in none, -2 where in several or partly."""
        assert self.zones is not None
        patches: Geometries = table["geometry"].to_numpy(object)
        zones = self.zones.geometries[list(members)]
        zone, patch = shapely.STRtree(patches).query(zones, "intersects")
        shared = shapely.area(shapely.intersection(zones[zone], patches[patch]))
        share = shared / shapely.area(patches[patch])
        found = np.full(len(patches), -1)
        found[patch[share > ROUNDING]] = -2
        within = share > 1 - ROUNDING
        found[patch[within]] = np.array(members)[zone[within]]
        return found
