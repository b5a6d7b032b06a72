"""Cells within a depth of another class: exact distances from centres to cell edges, by rows and columns."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import span

Ints = NDArray[np.int64]


@kernel
def change_distances(
    codes: NDArray[np.int16], first: int, stop: int, most: int, rows_to_change: NDArray[np.int32]
) -> None:
    """Write the number of rows from each cell to the first cell of another class above or below it.

    Parameters
    ----------
    codes : rows with those above and below that matter
    first, stop : the rows wanted
    most : number of rows from which on it does not matter: written in place of all that are larger
    rows_to_change : (stop - first, columns)
    """
    columns = codes.shape[1]
    run = np.full(columns, most, np.int32)
    for r in range(1, stop):
        for c in range(columns):
            run[c] = 1 if codes[r, c] != codes[r - 1, c] else min(run[c] + 1, most)
        if r >= first:
            rows_to_change[r - first] = run
    if first == 0:
        rows_to_change[0] = most
    run[:] = most
    for r in range(codes.shape[0] - 2, first - 1, -1):
        for c in range(columns):
            run[c] = 1 if codes[r, c] != codes[r + 1, c] else min(run[c] + 1, most)
        if r < stop:
            for c in range(columns):
                rows_to_change[r - first, c] = min(rows_to_change[r - first, c], run[c])


@kernel
def reach_by_rows(depth: float, width: float, height: float, reach: NDArray[np.int32]) -> None:
    """Write how many columns to either side are within a depth of an edge so many rows away.

    Place 0 is for another class in the row itself, the last one for none at all. A cell's edges are half a
    cell nearer than its centre; what lies at the depth exactly is within it.
    """
    squared = (depth * (1 + 1e-9)) ** 2
    for rows in range(len(reach)):
        up = max(rows - 0.5, 0.0) * height
        left = squared - up * up
        reach[rows] = -1 if left < 0 else int(np.floor(np.sqrt(left) / width + 0.5))
    reach[len(reach) - 1] = -1


@kernel
def mark_near(
    codes: NDArray[np.int16],
    rows_to_change: NDArray[np.int32],
    reaches: NDArray[np.int32],
    reach_line: Ints,
    open_sides: bool,  # noqa: FBT001 - kernels take flat arguments
    near: NDArray[np.bool_],
) -> None:
    """Mark the cells that another class is within reach of.

    Each cell of a row hands on what is above or below it to its neighbours of the same class, as far as that
    reaches; a cell of another class in the row ends it and is nearer than all behind it.

    Parameters
    ----------
    codes : (rows, columns)
    reaches : (lines, most + 1) of `reach_by_rows`; row r uses line reach_line[r]
    open_sides : whether the sides of the map bound nothing
    near : (rows, columns), changed in place
    """
    rows, columns = codes.shape
    far = np.empty(columns, np.int64)
    for r in range(rows):
        reach = reaches[reach_line[r]]
        until = -1 if open_sides else reach[0] - 1
        for c in range(columns):
            if c > 0 and codes[r, c] != codes[r, c - 1]:
                until = c - 1 + reach[0]
            until = max(until, c + reach[rows_to_change[r, c]])
            far[c] = until
        begin = columns if open_sides else columns - reach[0]
        for k in range(columns):
            c = columns - 1 - k
            if c < columns - 1 and codes[r, c] != codes[r, c + 1]:
                begin = c + 1 - reach[0]
            begin = min(begin, c - reach[rows_to_change[r, c]])
            if far[c] >= c or begin <= c:
                near[r, c] = True


@kernel
def add_far(
    near: NDArray[np.bool_],
    counted: NDArray[np.int16],
    zones: NDArray[np.int32],
    area: Ints,
    area_line: Ints,
    interior: Ints,
) -> None:
    """Add the area of cells that nothing is near, by zone and class.

    Parameters
    ----------
    counted : (rows, columns) class of each cell, negative for those that are not summed
    zones : (rows, columns) or (0, 0)
    interior : (zones + 1, classes) sums, the last row for the whole map; changed in place
    """
    whole = interior.shape[0] - 1
    for r in range(near.shape[0]):
        for c in range(near.shape[1]):
            if not near[r, c] and counted[r, c] >= 0:
                size = span(area, area_line[r], c, c + 1)
                interior[whole, counted[r, c]] += size
                if zones.size > 0 and zones[r, c] >= 0:
                    interior[zones[r, c], counted[r, c]] += size
