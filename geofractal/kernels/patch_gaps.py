"""Gaps between patches, from edge of cell to edge of cell, by their runs of cells."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import span

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


@kernel
def gap(
    runs: Ints, i_first: int, i_stop: int, j_first: int, j_stop: int, top: Floats, width: Floats, most: float
) -> float:
    """Return the gap between two patches, or `most` where it is not smaller.

    Parameters
    ----------
    runs : (n, 3) row, first column, column after the last; by patch, each in scan order
    top : (rows + 1,) metres of the upper edge of each row from the map's
    width : (rows,) mean width of a cell in metres
    """
    best = most * most
    begin = j_first
    for i in range(i_first, i_stop):
        row, start, stop = runs[i, 0], runs[i, 1], runs[i, 2]
        while begin < j_stop and runs[begin, 0] < row and (top[row] - top[runs[begin, 0] + 1]) ** 2 >= best:
            begin += 1
        j = begin
        while j < j_stop:
            other = runs[j, 0]
            down = max(top[other] - top[row + 1], top[row] - top[other + 1], 0.0)
            if down * down >= best and other > row:
                break
            across = max(runs[j, 1] - stop, start - runs[j, 2], 0) * (width[row] + width[other]) / 2
            best = min(best, down * down + across * across)
            j += 1
        if best <= 0.0:
            break
    return float(np.sqrt(best))


@kernel
def box_gap(boxes: Ints, i: int, j: int, top: Floats, width: Floats) -> float:
    """Return a lower bound of the gap between two patches, from their bounding boxes.

    Boxes are first and last row, first and last column, all inclusive.
    """
    down = max(top[boxes[j, 0]] - top[boxes[i, 1] + 1], top[boxes[i, 0]] - top[boxes[j, 1] + 1], 0.0)
    narrow = np.inf
    for row in (boxes[i, 0], boxes[i, 1], boxes[j, 0], boxes[j, 1]):
        narrow = min(narrow, width[row])
    across = max(boxes[j, 2] - boxes[i, 3] - 1, boxes[i, 2] - boxes[j, 3] - 1, 0) * narrow
    return float(np.sqrt(down * down + across * across))


@kernel
def nearest_gaps(
    wanted: Ints, runs: Ints, offsets: Ints, boxes: Ints, top: Floats, width: Floats, nearest: Floats
) -> None:
    """Write the gap from each wanted patch to the nearest other one; infinite where there is none.

    Patch i owns runs offsets[i]:offsets[i + 1]. Others are looked at by what their boxes allow.
    """
    n = len(boxes)
    bound = np.empty(n)
    for k in range(len(wanted)):
        i = wanted[k]
        for j in range(n):
            bound[j] = np.inf if j == i else box_gap(boxes, i, j, top, width)
        order = np.argsort(bound)
        best, place = np.inf, 0
        while place < n - 1 and bound[order[place]] < best:
            j = order[place]
            found = gap(runs, offsets[i], offsets[i + 1], offsets[j], offsets[j + 1], top, width, best)
            best = min(best, found)
            place += 1
        nearest[k] = best


@kernel
def all_gaps(
    chosen: Ints,
    runs: Ints,
    offsets: Ints,
    boxes: Ints,
    top: Floats,
    width: Floats,
    most: float,
    gaps: Floats,
) -> None:
    """Write the gap between every two chosen patches, infinite from `most` on; (n, n), symmetric."""
    for a in range(len(chosen)):
        gaps[a, a] = 0.0
        for b in range(a):
            i, j = chosen[a], chosen[b]
            found = np.inf
            if box_gap(boxes, i, j, top, width) < most:
                found = gap(runs, offsets[i], offsets[i + 1], offsets[j], offsets[j + 1], top, width, most)
                found = np.inf if found >= most else found
            gaps[a, b] = gaps[b, a] = found


@kernel
def count_overlaps(runs: Ints, areas: Ints) -> int:
    """Return how many pairs of a run and a run of a zone share cells; both by row, then by start."""
    n, begin = 0, 0
    for i in range(len(runs)):
        while begin < len(areas) and areas[begin, 0] < runs[i, 0]:
            begin += 1
        j = begin
        while j < len(areas) and areas[j, 0] == runs[i, 0] and areas[j, 2] < runs[i, 2]:
            n += int(areas[j, 3] > runs[i, 1])
            j += 1
    return n


@kernel
def find_overlaps(
    runs: Ints, patch: Ints, areas: Ints, first_row: int, area: Ints, area_line: Ints, found: Ints
) -> None:
    """Write patch, zone and shared area of each of these pairs."""
    n, begin = 0, 0
    for i in range(len(runs)):
        while begin < len(areas) and areas[begin, 0] < runs[i, 0]:
            begin += 1
        j = begin
        while j < len(areas) and areas[j, 0] == runs[i, 0] and areas[j, 2] < runs[i, 2]:
            start, stop = max(areas[j, 2], runs[i, 1]), min(areas[j, 3], runs[i, 2])
            if stop > start:
                found[n, 0], found[n, 1] = patch[i], areas[j, 1]
                found[n, 2] = span(area, area_line[runs[i, 0] - first_row], start, stop)
                n += 1
            j += 1


@kernel
def cheapest_paths(costs: Floats) -> None:
    """Replace costs between every two nodes by those of the cheapest path (Floyd 1962); (n, n)."""
    n = len(costs)
    for k in range(n):
        for i in range(n):
            by_way = costs[i, k]
            if by_way < np.inf:
                for j in range(n):
                    costs[i, j] = min(costs[i, j], by_way + costs[k, j])
