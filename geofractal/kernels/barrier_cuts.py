"""Barriers over cells: which links between neighbouring cells the lines cross."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import CUT_DOWN, CUT_DOWN_LEFT, CUT_DOWN_RIGHT, CUT_RIGHT

Floats = NDArray[np.float64]


@kernel
def cut_links(segments: Floats, first_row: int, cuts: NDArray[np.uint8]) -> None:
    """Mark the links of a strip that segments cross.

    A link runs from centre to centre. Centres lie at whole numbers and a half; a barrier through a centre
    passes on its right, and one that ends on a link's line is taken to be beyond it.

    Parameters
    ----------
    segments : (n, 4) x, y of both ends, in columns and rows
    first_row : row of the map that the strip begins with
    cuts : bits of each cell's links to the right, down, down right and down left; changed in place
    """
    for i in range(len(segments)):
        x0, y0, x1, y1 = segments[i, 0], segments[i, 1], segments[i, 2], segments[i, 3]
        along_rows(x0, y0, x1, y1, first_row, cuts)
        along_columns(x0, y0, x1, y1, first_row, cuts)
        along_diagonals(x0, y0, x1, y1, first_row, cuts)
        along_other_diagonals(x0, y0, x1, y1, first_row, cuts)


@kernel
def mark(row: int, column: int, bit: int, cuts: NDArray[np.uint8]) -> None:
    """Set a bit of a cell, if it is in the strip."""
    if 0 <= row < cuts.shape[0] and 0 <= column < cuts.shape[1]:
        cuts[row, column] |= bit


@kernel
def lines_between(start: float, stop: float, low: float, high: float) -> tuple[int, int]:
    """Return the whole numbers k, low <= k <= high, with one end of a segment below k and one not."""
    first, last = min(start, stop), max(start, stop)
    return int(np.floor(max(first, low - 1))) + 1, int(np.floor(min(last, high))) + 1


@kernel
def along_rows(x0: float, y0: float, x1: float, y1: float, first_row: int, cuts: NDArray[np.uint8]) -> None:
    """Cut links to the right: crossings of the centre lines of rows."""
    low, high = lines_between(y0 - 0.5, y1 - 0.5, float(first_row), float(first_row + cuts.shape[0] - 1))
    for k in range(low, high):
        x = x0 + (k + 0.5 - y0) / (y1 - y0) * (x1 - x0)
        mark(k - first_row, int(np.floor(x - 0.5)), CUT_RIGHT, cuts)


@kernel
def along_columns(
    x0: float, y0: float, x1: float, y1: float, first_row: int, cuts: NDArray[np.uint8]
) -> None:
    """Cut links down: crossings of the centre lines of columns."""
    low, high = lines_between(x0 - 0.5, x1 - 0.5, 0.0, float(cuts.shape[1] - 1))
    for k in range(low, high):
        y = y0 + (k + 0.5 - x0) / (x1 - x0) * (y1 - y0)
        mark(int(np.floor(y - 0.5)) - first_row, k, CUT_DOWN, cuts)


@kernel
def along_diagonals(
    x0: float, y0: float, x1: float, y1: float, first_row: int, cuts: NDArray[np.uint8]
) -> None:
    """Cut links down right: crossings of lines x - y = k."""
    most = float(first_row + cuts.shape[0] + cuts.shape[1])
    low, high = lines_between(x0 - y0, x1 - y1, -most, most)
    for k in range(low, high):
        x = x0 + (k - x0 + y0) / (x1 - y1 - x0 + y0) * (x1 - x0)
        column = int(np.floor(x - 0.5))
        mark(column - k - first_row, column, CUT_DOWN_RIGHT, cuts)


@kernel
def along_other_diagonals(
    x0: float, y0: float, x1: float, y1: float, first_row: int, cuts: NDArray[np.uint8]
) -> None:
    """Cut links down left: crossings of lines x + y = k."""
    most = float(first_row + cuts.shape[0] + cuts.shape[1])
    low, high = lines_between(x0 + y0, x1 + y1, 0.0, most)
    for k in range(low, high):
        x = x0 + (k - x0 - y0) / (x1 + y1 - x0 - y0) * (x1 - x0)
        column = int(np.floor(x - 0.5)) + 1
        mark(k - 1 - column - first_row, column, CUT_DOWN_LEFT, cuts)
