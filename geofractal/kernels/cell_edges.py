"""Class-change edges that lie on zone borders, for their halves."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import span, upright

Ints = NDArray[np.int64]


@kernel
def share_edges(
    codes: NDArray[np.int16],
    zones: NDArray[np.int32],
    codes_before: NDArray[np.int16],
    zones_before: NDArray[np.int32],
    height: Ints,
    width: Ints,
    area_line: Ints,
    edge_line: Ints,
    moved: Ints,
) -> None:
    """Move half of every class-change edge on a zone border to the zone on its other side.

    Parameters
    ----------
    codes, zones : a strip
    codes_before, zones_before : the row above it
    moved : (zones + 1, classes) twice the length to be added to a class's edge in a zone, by cells of its own
        alone; the last row takes what lies in no zone. Changed in place.
    """
    rows, columns = codes.shape
    for r in range(rows):
        above_codes = codes_before if r == 0 else codes[r - 1]
        above_zones = zones_before if r == 0 else zones[r - 1]
        for c in range(columns):
            if zones[r, c] != above_zones[c] and codes[r, c] != above_codes[c]:
                length = span(width, edge_line[r], c, c + 1)
                move(zones[r, c], codes[r, c], above_zones[c], above_codes[c], length, moved)
        for c in range(1, columns):
            if zones[r, c] != zones[r, c - 1] and codes[r, c] != codes[r, c - 1]:
                length = upright(height, area_line[r], c)
                move(zones[r, c], codes[r, c], zones[r, c - 1], codes[r, c - 1], length, moved)


@kernel
def move(zone: int, kind: int, other_zone: int, other_kind: int, length: int, moved: Ints) -> None:
    """Give each class on the two sides of an edge half of it in either zone."""
    if kind < 0 or other_kind < 0:
        return
    moved[zone, kind] -= length
    moved[zone, other_kind] += length
    moved[other_zone, other_kind] -= length
    moved[other_zone, kind] += length
