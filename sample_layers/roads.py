"""Towns at river mouths and confluences, and the roads of least effort between them."""
# ruff: noqa: INP001 - modules of a script, not a package

from __future__ import annotations

import numpy as np
import scipy.sparse
from outlines import rounded_off
from relief import CELL, COLUMNS, NEIGHBOURS, Relief
from scipy.sparse.csgraph import dijkstra
from waters import Reach, ground

TOWN_STREAMS = (0, 1, 2, 3, 5, 7)
HAMLET_STREAMS = (6, 9, 11, 12, 14, 17, 19, 22, 26, 31)


def settlements(reaches: list[Reach]) -> tuple[list[int], list[int]]:
    """Return cells of towns, near large mouths and one inland confluence, and of hamlets on small streams."""
    lowest: dict[int, Reach] = {}
    for reach in reaches:
        if reach.stream not in lowest or reach.drained_km2 > lowest[reach.stream].drained_km2:
            lowest[reach.stream] = reach
    towns = [lowest[stream].cells[-min(9, len(lowest[stream].cells) - 1)] for stream in TOWN_STREAMS]
    inland = sorted((r for r in reaches if r.stream == 0), key=lambda reach: -reach.drained_km2)[4]
    hamlets = [lowest[stream].cells[len(lowest[stream].cells) // 2] for stream in HAMLET_STREAMS]
    return [*towns, inland.cells[0]], hamlets


def roads(relief: Relief, towns: list[int], hamlets: list[int]) -> list[tuple[str, np.ndarray]]:
    """Return class and line of each road: main ones between towns, minor ones to hamlets.

    Each place is joined to the nearest that has a road, along the way that costs least, and only as far
    as the first road on that way.
    """
    places = [*towns, *hamlets]
    cost, before = dijkstra(_effort(relief), indices=places, return_predecessors=True)
    paved, joined, waiting = {places[0]}, [0], list(range(1, len(places)))
    built = []
    while waiting:
        near = waiting[0] if waiting[0] >= len(towns) else None
        ahead = [place for place in waiting if near is not None or place < len(towns)]
        start, to = min(
            ((a, b) for a in joined for b in ahead), key=lambda pair: (cost[pair[0]][places[pair[1]]], pair)
        )
        waiting.remove(to)
        joined.append(to)
        if not np.isfinite(cost[start][places[to]]):
            continue
        path = [places[to]]
        while path[-1] not in paved:
            path.append(int(before[start][path[-1]]))
        paved.update(path)
        if len(path) > 1:
            line = rounded_off(ground(np.array(path)), 8)
            built.append(("main" if to < len(towns) else "minor", np.round(line, 1)))
    return built


def _effort(relief: Relief) -> scipy.sparse.csr_matrix:
    """Return the cost of going from land cell to neighbour: length, more of it on slopes and banks."""
    land, height = relief.land.ravel(), relief.height.ravel()
    wet = np.where(relief.drained > 400.0, 2.5, 0.0)
    cells = np.flatnonzero(land)
    starts, ends, costs = [], [], []
    for down, right in NEIGHBOURS:
        to = cells + down * COLUMNS + right
        dry = land[to]
        here, there = cells[dry], to[dry]
        length = CELL * np.sqrt(float(down * down + right * right))
        slope = (height[there] - height[here]) / length
        starts.append(here)
        ends.append(there)
        costs.append(length * (1.0 + 160.0 * slope * slope + wet[there] + (height[there] < 4.0)))
    data = (np.concatenate(costs), (np.concatenate(starts), np.concatenate(ends)))
    return scipy.sparse.csr_matrix(data, shape=(land.size, land.size))
