"""Zones as runs of cells: scan lines through cell centres, in coordinates of columns and rows."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@kernel
def count_crossings(edges: Floats, first_row: int, stop_row: int) -> int:
    """Return how often edges cross the centre lines of rows first_row..stop_row-1.

    `edges` are (n, 4) x, y of the upper and of the lower end: y downwards, upper end first.
    """
    total = 0
    for i in range(len(edges)):
        low, high = rows_crossed(edges[i, 1], edges[i, 3], first_row, stop_row)
        total += max(0, high - low)
    return total


@kernel
def rows_crossed(top: float, bottom: float, first_row: int, stop_row: int) -> tuple[int, int]:
    """Return the rows [low, high) whose centre line y has top <= y < bottom, within a range of rows."""
    low = int(np.ceil(min(max(top - 0.5, first_row), stop_row)))
    high = int(np.ceil(min(max(bottom - 0.5, first_row), stop_row)))
    return low, high


@kernel
def find_crossings(
    edges: Floats, zone: Ints, first_row: int, stop_row: int, columns: int, found: Ints
) -> None:
    """Write row, zone and first column not left of the crossing, of all crossings, into (n, 3) `found`.

    A shared edge gives both its zones the same column, whichever way each runs along it.
    """
    n = 0
    for i in range(len(edges)):
        x0, y0, x1, y1 = edges[i, 0], edges[i, 1], edges[i, 2], edges[i, 3]
        low, high = rows_crossed(y0, y1, first_row, stop_row)
        for row in range(low, high):
            x = x0 + (row + 0.5 - y0) * ((x1 - x0) / (y1 - y0))
            found[n, 0], found[n, 1] = row, zone[i]
            found[n, 2] = int(np.ceil(min(max(x - 0.5, 0.0), float(columns))))
            n += 1


@kernel
def paint_runs(runs: Ints, first_row: int, zones: NDArray[np.int32]) -> None:
    """Write the zone of each run (row, zone, start, stop) into a strip."""
    for i in range(len(runs)):
        row = runs[i, 0] - first_row
        for column in range(runs[i, 2], runs[i, 3]):
            zones[row, column] = runs[i, 1]


@kernel
def overlapping(runs: Ints, pairs: Ints) -> int:
    """Write pairs of runs that share cells, as far as there is room; return how many there are.

    Runs come by row, then by start.
    """
    n = 0
    for i in range(len(runs)):
        j = i + 1
        while j < len(runs) and runs[j, 0] == runs[i, 0] and runs[j, 2] < runs[i, 3]:
            if n < len(pairs):
                pairs[n, 0], pairs[n, 1] = runs[i, 1], runs[j, 1]
            n += 1
            j += 1
    return n
