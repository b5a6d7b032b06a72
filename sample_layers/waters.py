"""Rivers and basins of the invented land, from the flow over its relief."""
# ruff: noqa: INP001 - modules of a script, not a package

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
import shapely.ops
from outlines import borders, rounded_off, thinned
from relief import CELL, COLUMNS, TOP, WEST, Relief, drift, uniform
from scipy import ndimage

STREAM_CELLS = 150
BASIN_CELLS = 2_400
CANALISED_RIVER, STRAIGHTENED_RIVER = 1, 4


@dataclass
class Reach:
    """A stretch of river between a head, confluences and the mouth, flowing from first vertex to last."""

    cells: list[int]
    stream: int
    drained_km2: float
    status: str = "natural"
    line: np.ndarray | None = None


def reaches(relief: Relief, land: shapely.Geometry) -> list[Reach]:
    """Return the network's reaches; streams are numbered by what they drain, largest first."""
    flowing = (relief.drained >= STREAM_CELLS) & relief.land.ravel()
    donors: dict[int, list[int]] = {}
    for cell in relief.order[flowing[relief.order]].tolist():
        donors.setdefault(int(relief.receiver[cell]), []).append(cell)
    stream_of, mouths = _streams(relief, flowing, donors)
    found: list[Reach] = []
    for cell in relief.order[flowing[relief.order]].tolist():
        is_node = not flowing[relief.receiver[cell]] or len(donors[int(relief.receiver[cell])]) > 1
        if not is_node:
            continue
        cells = [int(relief.receiver[cell]), cell]
        while len(above := donors.get(cells[-1], [])) == 1:
            cells += above
        found.append(Reach(cells[::-1], stream_of[cell], relief.drained[cell] * 0.01))
    _change_by_hand(found)
    for reach in found:
        reach.line = _line(reach, land if reach.cells[-1] in mouths else None)
    return [reach for reach in found if len(reach.line) > 1]


def _streams(
    relief: Relief, flowing: np.ndarray, donors: dict[int, list[int]]
) -> tuple[dict[int, int], set[int]]:
    """Return the stream of each cell, followed up the larger branch, and the sea cells at mouths."""
    starts = relief.order[flowing[relief.order]].tolist()
    mouths = {int(relief.receiver[cell]) for cell in starts if not flowing[relief.receiver[cell]]}
    heads, stream_of = [], {}
    for cell in starts:
        below = int(relief.receiver[cell])
        largest = max(donors[below], key=lambda donor: (relief.drained[donor], donor))
        if flowing[below] and cell == largest:
            stream_of[cell] = stream_of[below]
        else:
            stream_of[cell] = len(heads)
            heads.append(cell)
    ranked = sorted(range(len(heads)), key=lambda stream: (-relief.drained[heads[stream]], heads[stream]))
    rank = {stream: place for place, stream in enumerate(ranked)}
    return {cell: rank[stream] for cell, stream in stream_of.items()}, mouths


def _change_by_hand(found: list[Reach]) -> None:
    """Canalise the lower end of one river, and a stretch in the middle of another."""
    lower = [reach for reach in found if reach.stream == CANALISED_RIVER]
    for reach in sorted(lower, key=lambda reach: -reach.drained_km2)[:2]:
        reach.status = "canalised"
    middle = sorted(
        (r for r in found if r.stream == STRAIGHTENED_RIVER), key=lambda reach: -reach.drained_km2
    )
    middle[len(middle) // 2].status = "canalised"


def ground(cells: np.ndarray) -> np.ndarray:
    """Return drifted easting and northing of flat cell indices."""
    east = WEST + (cells % COLUMNS + 0.5) * CELL
    north = TOP - (cells // COLUMNS + 0.5) * CELL
    return np.column_stack(drift(east, north))


def _line(reach: Reach, land: shapely.Geometry | None) -> np.ndarray:
    """Return a reach's vertices: of a straight canal, or of a winding river, 25 to 50 m apart."""
    line = ground(np.array(reach.cells))
    ends = line[[0, -1]].copy()
    line = rounded_off(line, 2)
    if reach.status == "canalised":
        line = thinned(line, 150.0)
    else:
        for step in range(2):
            line = _wound(line, seed=1000 + 10 * reach.cells[0] + step)
    line[[0, -1]] = ends
    return np.round(line if land is None else _to_shore(line, land), 1)


def _wound(line: np.ndarray, seed: int) -> np.ndarray:
    """Return a line with a vertex set beside the middle of every edge, as far off as a bend is wide."""
    step = np.diff(line, axis=0)
    aside = 0.5 * (uniform(seed, len(step)) - 0.5)[:, None] * np.column_stack([-step[:, 1], step[:, 0]])
    out = np.empty((2 * len(line) - 1, 2))
    out[::2], out[1::2] = line, 0.5 * (line[:-1] + line[1:]) + aside
    return out


def _to_shore(line: np.ndarray, land: shapely.Geometry) -> np.ndarray:
    """Return a river cut where it meets the sea for the last time, or drawn on to the nearest shore."""
    whole = shapely.LineString(line)
    on_land = shapely.get_parts(shapely.intersection(whole, land))
    on_land = on_land[shapely.get_type_id(on_land) == shapely.GeometryType.LINESTRING]
    if not len(on_land):
        return line[:1]
    mouth = max(whole.line_locate_point(shapely.Point(part.coords[-1])) for part in on_land)
    river = np.array(shapely.ops.substring(whole, 0.0, mouth).coords)
    onward = shapely.shortest_line(shapely.Point(river[-1]), shapely.boundary(land))
    return np.vstack([river, onward.coords[-1]]) if onward.length > 0.1 else river


def basins(relief: Relief, land: shapely.Geometry) -> dict[int, shapely.Geometry]:
    """Return the ground drained by each large river, and the coasts nearest its mouth, as land polygons.

    Keys are the flat cells of the rivers' lowest reaches.
    """
    order, receiver = relief.order, relief.receiver
    outlet = np.arange(receiver.size)
    dry = relief.land.ravel()
    for cell in order.tolist():
        if dry[receiver[cell]]:
            outlet[cell] = outlet[receiver[cell]]
    large = dry & (relief.drained[outlet] >= BASIN_CELLS)
    nearest = outlet[_nearest(large.reshape(relief.land.shape))]
    labels = np.where(dry, nearest[outlet], -1)
    labels = labels[_nearest(dry.reshape(relief.land.shape))].reshape(relief.land.shape)
    mouths, numbered = np.unique(labels, return_inverse=True)
    found = {}
    for label, polygons in borders(numbered.reshape(labels.shape), passes=3).items():
        parts = [
            shapely.Polygon(_placed(rings[0]), [_placed(ring) for ring in rings[1:]]) for rings in polygons
        ]
        inside = shapely.intersection(shapely.union_all(parts), land)
        areas = [
            part for part in shapely.get_parts(inside) if part.geom_type == "Polygon" and part.area > 100.0
        ]
        found[int(mouths[label])] = shapely.MultiPolygon(areas)
    return found


def _nearest(chosen: np.ndarray) -> np.ndarray:
    """Return for every cell the flat index of the nearest chosen one."""
    _, (rows, columns) = ndimage.distance_transform_edt(~chosen, return_indices=True)
    return (rows * chosen.shape[1] + columns).ravel()


def _placed(ring: np.ndarray) -> np.ndarray:
    return np.round(np.column_stack(drift(WEST + CELL * ring[:, 0], TOP - CELL * ring[:, 1])), 1)
