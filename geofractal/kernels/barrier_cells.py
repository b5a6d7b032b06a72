"""Barriers with a width over cells: which cells have their centre on one."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import span, upright

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

TIE = 1.0 + 1e-9
"""Centres this much beyond half the width are on the barrier, so that rounding decides no tie."""


@kernel
def take_cells(
    segments: Floats,
    reach: Floats,
    first_row: int,
    width: Ints,
    height: Ints,
    area_line: Ints,
    edge_line: Ints,
    least: Floats,
    kind: int,
    codes: NDArray[np.int16],
) -> None:
    """Give the covered cells of a strip whose centre is within reach of a segment a class of their own.

    Distances are those of a rectangle of the cell's own width and height; lengths are in the grid's unit.

    Parameters
    ----------
    segments : (n, 4) x, y of both ends, in columns and rows
    reach : (n,) half the width of each
    first_row : row of the map that the strip begins with
    width, height, area_line, edge_line : of `geofractal.landcover.grid.CellSizes`
    least : (rows, 2) at most the least width and height of the cells of each row, above 0
    kind : the class
    codes : (rows, columns) classes, below 0 where not covered; changed in place
    """
    rows, columns = codes.shape
    lowest = least[:, 1].min()
    for i in range(len(segments)):
        x0, y0, x1, y1 = segments[i, 0], segments[i, 1], segments[i, 2], segments[i, 3]
        beyond = reach[i] * TIE / lowest + 0.5
        top = max(0.0, np.ceil(min(y0, y1) - beyond - first_row))
        bottom = min(float(rows - 1), np.floor(max(y0, y1) + beyond - first_row))
        for row in range(int(top), int(bottom) + 1):
            middle = first_row + row + 0.5
            start, stop = stretch(y0, y1, middle, reach[i] * TIE / least[row, 1])
            if start > stop:
                continue
            ends = x0 + start * (x1 - x0), x0 + stop * (x1 - x0)
            beside = reach[i] * TIE / least[row, 0] + 0.5
            left = max(0.0, np.ceil(min(ends) - beside))
            right = min(float(columns - 1), np.floor(max(ends) + beside))
            for column in range(int(left), int(right) + 1):
                if codes[row, column] < 0:
                    continue
                across = span(width, edge_line[row], column, column + 1)
                across += span(width, edge_line[row + 1], column, column + 1)
                down = upright(height, area_line[row], column) + upright(height, area_line[row], column + 1)
                away = distance(
                    (x0 - column - 0.5) * across / 2,
                    (y0 - middle) * down / 2,
                    (x1 - column - 0.5) * across / 2,
                    (y1 - middle) * down / 2,
                )
                if away <= reach[i] * TIE:
                    codes[row, column] = kind


@kernel
def stretch(y0: float, y1: float, middle: float, reach: float) -> tuple[float, float]:
    """Return from where to where, in shares of its length, a segment is within reach of a level line."""
    if y0 == y1:
        return (0.0, 1.0) if abs(y0 - middle) <= reach else (1.0, 0.0)
    one, other = (middle - reach - y0) / (y1 - y0), (middle + reach - y0) / (y1 - y0)
    return max(0.0, min(one, other)), min(1.0, max(one, other))


@kernel
def distance(x0: float, y0: float, x1: float, y1: float) -> float:
    """Return the distance of the origin from a segment."""
    across, down = x1 - x0, y1 - y0
    squared = across * across + down * down
    along = 0.0 if squared == 0.0 else min(1.0, max(0.0, -(x0 * across + y0 * down) / squared))
    return float(np.hypot(x0 + along * across, y0 + along * down))
