"""Random lattice lines of exactly known dimension, for `geofractal.synthetic`."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Ints = NDArray[np.int64]

_Q = (1, 0, -1, -1, 0, 1)  # the six neighbours of a hexagon, anticlockwise, in axial coordinates
_R = (0, 1, 1, 0, -1, -1)


@kernel
def erase_loops(
    steps: NDArray[np.uint8], place: NDArray[np.int32], path: Ints, length: int
) -> tuple[int, bool]:
    """Walk on over a square grid and erase every loop as it closes.

    Parameters
    ----------
    steps : (k,) next steps: 0 east, 1 north, 2 west, 3 south
    place : (side, side) 1 + index into the path of each visited cell, else 0; changed in place
    path : cells of the path as row * side + column; changed in place
    length : cells of the path so far, at least 1

    Returns
    -------
    length : cells of the path now
    arrived : whether the walk has reached the grid's rim, where it ends
    """
    side = place.shape[0]
    row, column = path[length - 1] // side, path[length - 1] % side
    for step in steps:
        row += (step == 1) * 1 - (step == 3) * 1
        column += (step == 0) * 1 - (step == 2) * 1
        seen = place[row, column]
        if seen > 0:
            for j in range(seen, length):
                place[path[j] // side, path[j] % side] = 0
            length = seen
        else:
            path[length] = row * side + column
            length += 1
            place[row, column] = length
        if row == 0 or column == 0 or row == side - 1 or column == side - 1:
            return length, True
    return length, False


@kernel
def explore_hexagons(seed: np.uint64, corners: NDArray[np.float64]) -> None:
    """Follow the border between black and white hexagons of critical percolation from a coloured rim.

    Hexagons below the first row are black left of the start and white right of it; every other one is
    coloured by a fair coin that is a hash of its place and the seed, so nothing need be remembered.

    Parameters
    ----------
    seed : of the colours
    corners : (n, 2) filled with the corners passed, in units of the distance between hexagons
    """
    q, r, facing = -1, -1, 0  # the black hexagon on the left, and where the white one on the right lies
    for i in range(len(corners)):
        left, right = (facing + 1) % 6, (facing + 5) % 6
        ahead_q, ahead_r = q + _Q[left], r + _R[left]
        sum_q, sum_r = 2 * q + q + _Q[facing] + _Q[left], 2 * r + r + _R[facing] + _R[left]
        corners[i, 0] = (sum_q + 0.5 * sum_r) / 3
        corners[i, 1] = sum_r * np.sqrt(0.75) / 3
        black = ahead_q < 0
        if ahead_r >= 0:
            mixed = np.uint64(ahead_q + 2**31) * np.uint64(0x9E3779B97F4A7C15) + seed
            mixed = (mixed ^ (mixed >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
            mixed = mixed + np.uint64(ahead_r + 2**31) * np.uint64(0x94D049BB133111EB)
            mixed = (mixed ^ (mixed >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
            black = ((mixed ^ (mixed >> np.uint64(31))) >> np.uint64(33)) & np.uint64(1) == np.uint64(0)
        if black:
            q, r, facing = ahead_q, ahead_r, right
        else:
            facing = left
