"""Zones and barriers of class maps: rows of vector layers, named, and placed on the map's grid."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from geofractal.batch.parts import NOT_WANTED
from geofractal.errors import LayerError
from geofractal.landcover.barriers import Barriers, joined, place_barriers
from geofractal.landcover.grid import Grid
from geofractal.landcover.polygon_zones import (
    PolygonBarriers,
    PolygonZones,
    place_polygon_barriers,
    place_polygon_zones,
)
from geofractal.landcover.zones import Zones, place_zones
from geofractal.measure import WHOLE_MAP, Ints
from geofractal.reader.vector import stream

if TYPE_CHECKING:
    from pyproj import CRS

    from geofractal.batch.plan import LayerPlan


@dataclass(frozen=True)
class Rows:
    """Rows of a layer of zones or barriers.

    Attributes
    ----------
    names : (n,) name of each row: of the column that the layer's ``id`` names, else its number from 1
    geometries : (n,) shapely geometries, None where a row has none that can be read
    wanted : (n,) the layer's ``where``
    fids : (n,) stored feature ids, None where ids are only positions
    """

    names: tuple[str, ...]
    geometries: Any
    wanted: Any
    fids: Ints | None

    def problems(self, zones: Zones) -> list[str]:
        """Return for every row why it is no zone; empty where it is one."""
        told = iter(zones.problems)
        return [next(told) if wanted else NOT_WANTED for wanted in self.wanted]


def read_rows(plan: LayerPlan) -> Rows:
    """Read a layer of zones or barriers whole.

    Raises
    ------
    SourceError, LayerError
        the file is damaged
    """
    import shapely

    column, where = plan.layer.id, plan.where
    names: list[str] = []
    geometries: list[Any] = []
    wanted: list[Any] = []
    fids: list[Any] = []
    for batch in stream(
        plan.info, columns=[*((column,) if column else ()), *(where.columns if where else ())]
    ):
        held = batch.attributes.column(column).to_pylist() if column else [None] * len(batch)
        numbers = range(batch.first_row + 1, batch.first_row + len(batch) + 1)
        names += [str(number if name is None else name) for name, number in zip(held, numbers, strict=True)]
        found = shapely.from_wkb(np.array(batch.wkb.to_pylist(), object), on_invalid="ignore")
        geometries.append(_repaired(found) if plan.layer.prepare.repair else found)
        wanted.append(where.mask(batch.attributes) if where else np.ones(len(batch), np.bool_))
        if batch.fids is not None:
            fids.append(batch.fids)
    return Rows(
        tuple(names),
        np.concatenate([np.empty(0, object), *geometries]),
        np.concatenate([np.empty(0, np.bool_), *wanted]),
        np.concatenate(fids) if fids else None,
    )


def _repaired(geometries: Any) -> Any:
    """Return polygons made valid; what else comes of it is dropped."""
    import shapely

    bad = ~shapely.is_valid(geometries) & (shapely.get_dimensions(geometries) == 2)
    for place in np.flatnonzero(bad):
        parts = shapely.get_parts(shapely.make_valid(geometries[place]))
        areas = parts[shapely.get_dimensions(parts) == 2]
        geometries[place] = shapely.union_all(areas)
    return geometries


def zones_of(plan: LayerPlan, rows: Rows, grid: Grid) -> Zones:
    """Return the wanted rows of a layer as zones of a grid.

    Raises
    ------
    LayerError
        two zones have one name, or there is no way from their CRS to the grid's
    """
    return place_zones(grid, rows.geometries[rows.wanted], _zone_names(plan, rows), _crs(plan))


def polygon_zones_of(plan: LayerPlan, polygons: Any, crs: CRS) -> PolygonZones:
    """Return the wanted rows of a layer as zones of polygons, as `zones_of`."""
    rows = read_rows(plan)
    names = _zone_names(plan, rows)
    return place_polygon_zones(rows.geometries[rows.wanted], names, _crs(plan), polygons, crs)


def _zone_names(plan: LayerPlan, rows: Rows) -> list[str]:
    """Return the names of the wanted rows, of which none may be another's or that of the whole map."""
    names = [name for name, wanted in zip(rows.names, rows.wanted, strict=True) if wanted]
    twice = sorted(name for name, count in Counter([*names, WHOLE_MAP]).items() if count > 1)
    if twice:
        said = f"names more than one zone {', '.join(map(repr, twice[:5]))}"
        column = f"column {plan.layer.id!r}"
        raise LayerError(
            f"{plan.info.path}: layer {plan.info.layer!r}: {column} {said}; zones need own names"
        )
    return names


def polygon_barriers_of(plans: Sequence[LayerPlan], widths_m: Sequence[float], crs: CRS) -> PolygonBarriers:
    """Return the wanted rows of some layers as barriers of polygons, as `barriers_of`."""
    lines, strips, left_out = [np.empty(0, object)], [np.empty(0, object)], Counter[str]()
    for plan, width_m in zip(plans, widths_m, strict=True):
        rows = read_rows(plan)
        placed = place_polygon_barriers(rows.geometries[rows.wanted], _crs(plan), crs, width_m)
        lines.append(placed.lines)
        strips.append(placed.strips)
        left_out.update(placed.left_out)
    return PolygonBarriers(np.concatenate(lines), np.concatenate(strips), dict(left_out))


def barriers_of(plans: Sequence[LayerPlan], widths_m: Sequence[float], grid: Grid) -> Barriers:
    """Return the wanted rows of some layers, each of a width, as barriers of a grid.

    Raises
    ------
    SourceError, LayerError
        a file is damaged, or there is no way from its CRS to the grid's
    """
    parts = []
    for plan, width_m in zip(plans, widths_m, strict=True):
        rows = read_rows(plan)
        parts.append(place_barriers(grid, rows.geometries[rows.wanted], _crs(plan), width_m))
    return joined(grid, parts)


def _crs(plan: LayerPlan) -> Any:
    from pyproj import CRS

    return CRS.from_user_input(plan.info.crs)
