"""Box counting of raster cells, row by row: the map itself is never held."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

BLOCKS = 4
"""Blocks of the map, across and down, that boxes are tallied in."""


@kernel
def count_rows(
    cells: NDArray[np.bool_],
    seen: int,
    rows: int,
    sizes: Ints,
    shifts: Ints,
    offsets: Ints,
    columns: Ints,
    below: Ints,
    found: Floats,
    tallies: Ints,
) -> None:
    """Count the boxes of every grid that end in a strip of rows.

    Parameters
    ----------
    cells : (strip rows, width) whether each cell is of the class
    seen : rows of the map before this strip
    rows : rows of the whole map; boxes that its edge cuts end there
    sizes : (g,) box side of each grid, in cells
    shifts : (g, 2) rows and columns by which the grid begins before the map
    offsets : (g + 1,) where each grid's boxes begin in `below`
    columns : (width + 1,) cells of the class in the rows so far and left of each column; changed in place
    below : (offsets[-1],) cells of the class in all finished boxes of each column of boxes; changed in place
    found : (g, 3) boxes, sum of m ln m and sum of m^2 over the cells m in each box; added to
    tallies : (g, BLOCKS^2) boxes by the block of the map that their last row and column lie in; added to
    """
    height, width = cells.shape
    for r in range(height):
        row = 0
        for c in range(width):
            row += 1 if cells[r, c] else 0
            columns[c + 1] += row
        done = seen + r + 1
        for g in range(len(sizes)):
            if (done + shifts[g, 0]) % sizes[g] != 0 and done != rows:
                continue
            left, down = 0, BLOCKS * ((done - 1) * BLOCKS // rows)
            for b in range(offsets[g + 1] - offsets[g]):
                right = min((b + 1) * sizes[g] - shifts[g, 1], width)
                total = columns[right] - columns[left]
                mass = float(total - below[offsets[g] + b])
                if mass > 0.0:
                    found[g, 0] += 1.0
                    found[g, 1] += mass * np.log(mass)
                    found[g, 2] += mass * mass
                    tallies[g, down + (right - 1) * BLOCKS // width] += 1
                below[offsets[g] + b] = total
                left = right
