"""Tables that the patch kernels share: lines of sums, runs of a row, rings, and the forest of labels.

A *piece* is a set of linked cells of one class and one zone. Every piece owns a line of whole-number sums
(`LINES`); pieces found to be one are joined in a forest whose roots are the smallest labels, hence those of
the first cell in scan order.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Ints = NDArray[np.int64]

LINES = (
    "class",
    "zone",
    "first_row",
    "first_column",
    "last_row",
    "left_column",
    "right_column",
    "cells",
    "area",
    "edge",
    "border_edge",
    "zone_edge",
    "barrier_edge",
    "corners",
    "outer_edge",
    "filled_area",
    "holes",
)
CLASS, ZONE, FIRST_ROW, FIRST_COLUMN, LAST_ROW, LEFT, RIGHT = range(7)
CELLS, AREA, EDGE, BORDER, ZONE_EDGE, BARRIER, CORNERS, OUTER, FILLED, HOLES = range(7, 17)
SUMS_FROM = CELLS

START, STOP, KIND, PLACE, LABEL, LEFT_RING, RIGHT_RING, PAIRS, LAST_BELOW = range(9)
RUN = 9
"""Columns of a run: first cell, cell after the last, class, zone, label, rings of its two ends, pairs with
runs below that are still to come, and the last run below it so far."""

N_LABELS, N_RUNS, N_LINKS, N_RINGS, N_KEPT = range(5)
"""Places of the state: labels and rings in use, runs of the last row, links between zones, runs kept."""

RING_LENGTH, RING_AREA, RING_LABEL = range(3)

CUT_RIGHT, CUT_DOWN, CUT_DOWN_RIGHT, CUT_DOWN_LEFT = 1, 2, 4, 8
"""Bits of the links from a cell to its neighbours that a barrier removes."""


@kernel
def find(parent: Ints, i: int) -> int:
    """Return the root of `i`, halving the path on the way."""
    while parent[i] != i:
        parent[i] = parent[parent[i]]
        i = parent[i]
    return i


@kernel
def join(parent: Ints, i: int, j: int) -> int:
    """Make two trees one; the smaller root stays."""
    a, b = find(parent, i), find(parent, j)
    low, high = min(a, b), max(a, b)
    parent[high] = low
    return low


@kernel
def span(sizes: Ints, line: int, start: int, stop: int) -> int:
    """Return the size of the cells start..stop-1 of a line of sizes, constant or running sums."""
    if sizes.shape[1] == 1:
        return int(sizes[line, 0] * (stop - start))
    return int(sizes[line, stop] - sizes[line, start])


@kernel
def upright(height: Ints, line: int, column: int) -> int:
    """Return the length of the vertical cell edge at a column."""
    return int(height[line, 0] if height.shape[1] == 1 else height[line, column])
