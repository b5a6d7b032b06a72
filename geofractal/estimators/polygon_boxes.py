"""Box dimension of the class-change edges of polygons, counted as the lines that they are."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.estimators.box import BoxDimension, BoxOptions
from geofractal.estimators.cover_boxes import ONE_REGIME
from geofractal.estimators.fragmentation_quantities import box_quantities
from geofractal.measure import PLANES, Lines, Values

if TYPE_CHECKING:
    from geofractal.estimators.fragmentation import FragmentationOptions
    from geofractal.estimators.fragmentation_polygons import CoverFaces, PolygonLayer, PolygonTotals
    from geofractal.estimators.fragmentation_table import Figures
    from geofractal.landcover.covers import Pack
    from geofractal.landcover.planar import Geometries
    from geofractal.landcover.polygon_map import PolygonMap, Unit

NO_EDGE = "no edge to another class"
AS_LINES = "of boundaries as lines"


def add_boxes(
    layer: PolygonLayer, pack: Pack, totals: PolygonTotals, options: FragmentationOptions, figures: Figures
) -> None:
    """Add the rows of box dimensions of edges, of every unit and cover."""
    if not options.box_dimension:
        return
    found, ground = layer.faces, layer.ground
    edges = None if ground.problem else ground.lay(found.planar.edges)
    for kind, name in figures.about.wanted(pack):
        for number, unit in totals.units.items():
            mine = np.empty(0, object)
            if edges is not None and kind in totals.kept:
                mine = edges[_changes(found, totals.kept[kind], unit)]
            lines = _joined(mine)
            values = BoxDimension().measure(_as_lines(lines, ground), BoxOptions()) if len(lines) else None
            for row in _rows(values, ground.problem or NO_EDGE):
                figures.add(number, name, **row)


def _changes(found: PolygonMap, cover: CoverFaces, unit: Unit) -> Any:
    """Return the edges between a cover and other classes with a side in a unit."""
    sides = found.planar.sides[unit.edges]
    own = cover.member[sides]
    return unit.edges[(own[:, 0] != own[:, 1]) & found.covered[sides].all(axis=1)]


def _joined(edges: Geometries) -> Geometries:
    """Return edges as lines that end where more than two of them meet, or none goes on."""
    if not len(edges):
        return edges
    lines: Geometries = shapely.get_parts(shapely.line_merge(shapely.multilinestrings(edges)))
    return lines


def _as_lines(parts: Geometries, ground: Any) -> Lines:
    """Return parts in metres as one feature."""
    name = ground.name if ground.name in PLANES else f"layer-{ground.name}"
    xy = np.ascontiguousarray(shapely.get_coordinates(parts))
    return Lines(
        rows=np.zeros(1, np.int64),
        xy=xy,
        part_offsets=np.concatenate([[0], np.cumsum(shapely.get_num_coordinates(parts))]).astype(np.int64),
        feature_offsets=np.array([0, len(parts)]),
        closed=np.asarray(shapely.is_closed(parts), np.bool_),
        source_vertex=np.ones(len(xy), np.bool_),
        plane=np.array([PLANES.index(name)], np.uint8),
        distortion=np.array([ground.distortion]),
        radius=np.array([np.inf]),
    )


def _rows(values: Values | None, reason: str) -> list[Mapping[str, Any]]:
    """Return what is measured of a set of edges as arguments of `Figures.add`; without any, the reason."""
    if values is None:
        numbers = [one.name for one in box_quantities(edge=True) if one.kind == "number"]
        return [{"quantity": name, "estimate": math.nan, "note": reason} for name in numbers]
    of = {name: values[f"box_{name}"][0] for name in ("dim", "dim_low", "dim_high", "verdict", "note")}
    of |= {name: values[f"box_{name}_m"][0] for name in ("size_min", "size_max", "break")}
    of |= {name: values[f"box_{name}_m"][0] for name in ("break_low", "break_high")}
    of |= {name: values[f"box_{name}"][0] for name in ("fine_dim", "coarse_dim")}
    given = math.isfinite(of["dim"])
    said = "; ".join(filter(None, (str(of["verdict"]), AS_LINES, of["note"])))

    def row(name: str, low: float = math.nan, high: float = math.nan) -> Mapping[str, Any]:
        missing = None if math.isfinite(of[name]) else ONE_REGIME if given else said
        note = said if name == "dim" else missing
        return {"quantity": f"edge_box_{name}", "estimate": of[name], "low": low, "high": high, "note": note}

    verdict = {"quantity": "edge_box_verdict", "estimate": math.nan, "note": str(of["verdict"])}
    return [
        row("dim", of["dim_low"], of["dim_high"]),
        verdict,
        row("size_min"),
        row("size_max"),
        row("break", of["break_low"], of["break_high"]),
        row("fine_dim"),
        row("coarse_dim"),
    ]
