"""Pairs of cells a lag apart: where coarser cells, one in so many, would see a change of class."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import span, upright

Ints = NDArray[np.int64]


@kernel
def add_pair(zone: int, kind: int, other_zone: int, other_kind: int, length: int, sums: Ints) -> None:
    """Add a pair of cells to the sums of both its zones and of the whole map, once for each of its ends."""
    last, whole = sums.shape[1] - 1, sums.shape[0] - 1
    sums[whole, last] += 2 * length
    sums[zone, last] += length
    sums[other_zone, last] += length
    if kind != other_kind:
        for one in (kind, other_kind):
            sums[whole, one] += 2 * length
            sums[zone, one] += length
            sums[other_zone, one] += length


@kernel
def pairs_across(
    codes: NDArray[np.int16], zones: NDArray[np.int32], lag: int, height: Ints, area_line: Ints, sums: Ints
) -> None:
    """Add the pairs of cells `lag` columns apart, by the height of their row.

    Parameters
    ----------
    zones : (rows, columns) or (0, 0)
    sums : (zones + 2, classes + 1) twice the heights of pairs that one end of a class and one of another
        make, by zone; last column: of all pairs of covered cells; last two rows: in no zone, whole map
    """
    none = sums.shape[0] - 2
    for r in range(codes.shape[0]):
        for c in range(lag, codes.shape[1]):
            kind, other = codes[r, c], codes[r, c - lag]
            if kind >= 0 and other >= 0:
                zone, other_zone = none, none
                if zones.size > 0:
                    zone = zones[r, c] if zones[r, c] >= 0 else none
                    other_zone = zones[r, c - lag] if zones[r, c - lag] >= 0 else none
                add_pair(zone, kind, other_zone, other, upright(height, area_line[r], c), sums)


@kernel
def pairs_down(
    codes: NDArray[np.int16],
    zones: NDArray[np.int32],
    first: int,
    lag: int,
    width: Ints,
    edge_line: Ints,
    sums: Ints,
) -> None:
    """Add the pairs `lag` rows apart whose lower cell is in the strip, by the width of its upper edge.

    `codes` and `zones` hold `first` rows above the strip; `sums` as in `pairs_across`.
    """
    none = sums.shape[0] - 2
    for r in range(max(first, lag), codes.shape[0]):
        for c in range(codes.shape[1]):
            kind, other = codes[r, c], codes[r - lag, c]
            if kind >= 0 and other >= 0:
                zone, other_zone = none, none
                if zones.size > 0:
                    zone = zones[r, c] if zones[r, c] >= 0 else none
                    other_zone = zones[r - lag, c] if zones[r - lag, c] >= 0 else none
                add_pair(zone, kind, other_zone, other, span(width, edge_line[r - first], c, c + 1), sums)
