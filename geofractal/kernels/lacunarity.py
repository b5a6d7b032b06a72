"""Gliding boxes over a map, row by row: sums of what each holds, and of its square."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Ints = NDArray[np.int64]

BOXES, MASS, SQUARES, CARRY = range(4)
CARRY_BITS = 60


@kernel
def even_run(codes: NDArray[np.int16], zones: NDArray[np.int32], row: int, run: NDArray[np.int32]) -> None:
    """Write how many covered cells of one zone end at each cell of a row, itself included."""
    for c in range(codes.shape[1]):
        if codes[row, c] < 0:
            run[c] = 0
        elif c > 0 and codes[row, c - 1] >= 0 and (zones.size == 0 or zones[row, c] == zones[row, c - 1]):
            run[c] = run[c - 1] + 1
        else:
            run[c] = 1


@kernel
def glide(
    codes: NDArray[np.int16],
    zones: NDArray[np.int32],
    first: int,
    cover: NDArray[np.bool_],
    high: int,
    wide: int,
    whole: bool,  # noqa: FBT001 - kernels take flat arguments
    good: NDArray[np.int32],
    held: NDArray[np.int32],
    sums: Ints,
) -> None:
    """Add the boxes of one size whose last row is in a strip.

    Parameters
    ----------
    codes, zones : the strip below as many rows before it as there are, up to `high`; zones may be empty
    first : row of these that the strip begins with
    cover : (classes + 1,) whether a class is counted; the last place is for cells of no class
    high, wide : rows and columns of a box
    whole : whether boxes may lie across zones; then all go to the last row of `sums`
    good : (columns,) rows up to the one before the strip in which cells of one zone, as many as a box is
        wide, end at a column; changed in place
    held : (columns,) cells of the cover in the last `high` rows before the strip; changed in place
    sums : (zones + 1, 4) boxes, cells in them, squares of these and what these carry; changed in place
    """
    rows, columns = codes.shape
    run = np.empty(columns, np.int32)
    total = np.zeros(columns + 1, np.int64)
    none = zones[:0]
    for r in range(first, rows):
        even_run(codes, none if whole else zones, r, run)
        for c in range(columns):
            held[c] += 1 if cover[codes[r, c]] else 0
            if r >= high and cover[codes[r - high, c]]:
                held[c] -= 1
            total[c + 1] = total[c] + held[c]
        here, boxes, mass, squares = sums.shape[0] - 1, 0, 0, 0
        for c in range(columns):
            if run[c] < wide:
                good[c] = 0
                continue
            if not whole and r > 0 and zones.size > 0 and zones[r, c] != zones[r - 1, c]:
                good[c] = 0
            good[c] += 1
            if good[c] < high:
                continue
            if not whole and zones[r, c] != here:
                flush(sums, here, boxes, mass, squares)
                here, boxes, mass, squares = int(zones[r, c]), 0, 0, 0
            inside = total[c + 1] - total[c + 1 - wide]
            boxes += 1
            mass += inside
            squares += inside * inside
        flush(sums, here, boxes, mass, squares)


@kernel
def flush(sums: Ints, zone: int, boxes: int, mass: int, squares: int) -> None:
    """Add to the sums of a zone; none is kept of cells in no zone."""
    if zone < 0 or boxes == 0:
        return
    sums[zone, BOXES] += boxes
    sums[zone, MASS] += mass
    sums[zone, SQUARES] += squares
    sums[zone, CARRY] += sums[zone, SQUARES] >> CARRY_BITS
    sums[zone, SQUARES] &= (1 << CARRY_BITS) - 1
