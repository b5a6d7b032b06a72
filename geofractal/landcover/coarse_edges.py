"""Edge length at a cell size coarser than the source's, and how sure it is.

A coarser map that keeps one cell in k by k sees a change of class where two cells k apart differ. Counted
over all pairs, this is the mean of the k^2 ways to place the coarser cells, and follows the edge's own
scaling, L(s) = c s^(1-D). Sizes between whole numbers of cells are interpolated on logarithmic axes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.lag_edges import pairs_across, pairs_down
from geofractal.landcover.grid import Grid, Ints
from geofractal.landcover.windows import Window

SMOOTHED = 0.5
SHIFTED = 0.08
"""What a source's own making may have changed, in units of min(D - 1, 1/2): maps whose cells take the class
that fills most of them lack edge of up to SMOOTHED / (stated size / cell size), and differ by up to SHIFTED
in how much of a class they keep. From Brownian relief cut at levels and mosaics rough at every scale, at
three cell sizes; see ``tests/benchmarks/edge_at_cell_size.py``."""

PLACEMENT = 1.5
"""Scatter of one coarser map about the mean of all, in units of 1 / sqrt(edges in it)."""

BENDING = 0.5

NONE_SEEN = 3.0
"""Edges of one coarser cell that may be there where none was seen: 1 - exp(-3) is 95 %."""


@dataclass(frozen=True, slots=True)
class CoarseEdge:
    """Edge length at a stated cell size in metres, with interval; NaN where no cells are so far apart."""

    length: float
    low: float
    high: float


class LagSums:
    """Adds up pairs of cells at the lags that a stated cell size asks for.

    Parameters
    ----------
    grid : the grid measured on
    size : stated cell size in metres, coarser than the grid's cells
    """

    def __init__(self, grid: Grid, zones: int, covers: int, size: float) -> None:
        self.size, self._grid = size, grid
        cells = [size / side for side in grid.typical_cell]
        self._lags = [sorted({1, math.floor(_near(k)), math.ceil(_near(k))}) for k in cells]
        self._cells = [_near(k) for k in cells]
        shape = (zones + 2, covers + 1)
        self._across = {lag: np.zeros(shape, np.int64) for lag in self._lags[0]}
        self._down = {lag: np.zeros(shape, np.int64) for lag in self._lags[1]}
        self.halo = self._lags[1][-1]

    def add(self, window: Window, codes: NDArray[np.int16]) -> None:
        """Add the pairs that end in the strip of a window; `codes` are the window's covers."""
        sizes, first, stop = window.strip.sizes, window.offset, window.stop
        zones = np.empty((0, 0), np.int32) if window.zones is None else window.zones[:stop]
        for lag, sums in self._across.items():
            pairs_across(codes[first:stop], zones[first:], lag, sizes.height, sizes.area_line, sums)
        for lag, sums in self._down.items():
            pairs_down(codes[:stop], zones, first, lag, sizes.width, sizes.edge_line, sums)

    def edge(self, zone: int, cover: int) -> CoarseEdge:
        """Return the edge of a cover in a zone; zone -1 is the whole map."""
        parts = [
            _at(sums, cells, zone, cover)
            for sums, cells in zip((self._across, self._down), self._cells, strict=True)
        ]
        unit = self._grid.length_unit_m / 2
        length, finest = (unit * sum(part[k] for part in parts) for k in (0, 1))
        if math.isnan(length):
            return CoarseEdge(length, length, length)
        if length == 0:
            return CoarseEdge(0.0, 0.0, NONE_SEEN * self.size if finest > 0 else 0.0)
        ratio = self.size / math.sqrt(math.prod(self._grid.typical_cell))
        bent = min(max(-math.log(length / finest) / math.log(ratio), 0.0), BENDING)
        half = bent * (SMOOTHED / ratio + SHIFTED) + 2 * PLACEMENT / math.sqrt(length / self.size)
        return CoarseEdge(length, length * math.exp(-half), length * math.exp(half))


def _near(cells: float) -> float:
    """Return a number of cells, whole where it is but for rounding."""
    return float(round(cells)) if abs(cells - round(cells)) < 1e-6 * cells else cells


def _at(sums: dict[int, Ints], cells: float, zone: int, cover: int) -> tuple[float, float]:
    """Return twice the edge length at a lag of so many cells, and at a lag of one, in the grid's unit.

    What the map's edge cuts off of the pairs is made up for by the pairs that there are.
    """

    def length(lag: int) -> float:
        pairs, changes = int(sums[lag][zone, -1]), int(sums[lag][zone, cover])
        beside = int(sums[1][zone, -1])
        if not pairs:
            return math.nan if beside else 0.0
        return changes / pairs * beside / lag

    low, high = math.floor(cells), math.ceil(cells)
    first, second = length(low), length(high)
    if low == high or not (first > 0 and second > 0):
        return first, length(1)
    share = math.log(cells / low) / math.log(high / low)
    return first ** (1 - share) * second**share, length(1)
