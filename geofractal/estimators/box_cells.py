"""Box counting of the raster cells of a class, in one pass over strips of rows."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from geofractal.estimators.box import GRID_SHIFTS
from geofractal.estimators.divider import FEWEST_RUNGS
from geofractal.kernels.cell_boxes import count_rows
from geofractal.scaling.fit import fit_power_law
from geofractal.scaling.ladder import RUNGS_PER_DECADE, Ladders

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

FIRST_BOX_CELLS = 4
"""First box side in cells. Boxes of one cell fit the cells exactly and larger ones seldom do, so that fits
that begin with them come out 0.05 to 0.1 too low on maps of known dimension; from 4 cells on 0.01 to 0.06."""

REACH_BELOW, REACH_ABOVE = 0.15, 0.28
"""How far the interval of a dimension of cells reaches below and above it. Set on maps of 400 to 1,000 cells
a side (trails of D 1.1 to 1.7, midpoint curves, critical percolation clusters, random carpets), whose boxes
come out up to 0.16 too low on the mean, the denser the set the more; on fresh draws the truth was inside."""


@dataclass(frozen=True, slots=True)
class CellCounts:
    """Boxes of each size that hold cells of the class, on the grid with the fewest.

    Attributes
    ----------
    sizes : (k,) sides of the boxes, in cells
    boxes : (k,) fewest boxes over the shifted grids; 0 where the class is absent
    evenness : (k, 2) effective numbers of boxes on that grid: exp(-sum p ln p) and 1 / sum p^2 over the
        share p of the cells in each box; NaN where the class is absent
    grids : (k, g) boxes on each grid tried, NaN for the others
    """

    sizes: Ints
    boxes: Ints
    evenness: Floats
    grids: Floats


def cell_sizes(rows: int, columns: int) -> Ints:
    """Return whole box sides from `FIRST_BOX_CELLS` to an eighth of the map's shorter side, near-geometric.

    Examples
    --------
    >>> cell_sizes(64, 100)
    array([4, 5, 6, 7, 8])
    >>> cell_sizes(7, 100)
    array([4])
    """
    top = max(min(rows, columns) // 8, FIRST_BOX_CELLS)
    count = int(np.ceil(np.log10(top / FIRST_BOX_CELLS) * RUNGS_PER_DECADE)) + 1
    return np.unique(np.round(np.geomspace(FIRST_BOX_CELLS, top, count)).astype(np.int64))


class CellBoxCounter:
    """Counts boxes while the map streams by.

    Parameters
    ----------
    rows, columns : of the whole map
    sizes : sides of the boxes in cells; `cell_sizes` where left out. A size has as many grids as it has
        shifts, or none and those of the lines' grids

    Memory is 8 bytes a column, and 8 bytes for every column of boxes of every grid.
    """

    def __init__(self, rows: int, columns: int, sizes: Ints | None = None) -> None:
        self.sizes = cell_sizes(rows, columns) if sizes is None else np.asarray(sizes, dtype=np.int64)
        if self.sizes.size == 0 or (self.sizes < 1).any() or (np.diff(self.sizes) <= 0).any():
            raise ValueError(f"box sizes {self.sizes.tolist()}: whole numbers of cells from 1 up, ascending")
        shifts = [_whole_shifts(int(size)) for size in self.sizes]
        self._grids = np.array([len(each) for each in shifts])
        self._shifts = np.concatenate(shifts)
        self._sides = np.repeat(self.sizes, self._grids)
        across = -(-(columns + self._shifts[:, 1]) // self._sides)
        self._offsets = np.concatenate([[0], np.cumsum(across)])
        self._columns = np.zeros(columns + 1, dtype=np.int64)
        self._below = np.zeros(self._offsets[-1], dtype=np.int64)
        self._found = np.zeros((len(self._sides), 3))
        self._rows, self._seen = rows, 0

    def add(self, cells: Bools) -> None:
        """Count the next rows of the map, from the top downwards: True where a cell is of the class."""
        if (
            cells.ndim != 2
            or cells.shape[1] != len(self._columns) - 1
            or self._seen + len(cells) > self._rows
        ):
            raise ValueError(
                f"strip of shape {cells.shape} after {self._seen} rows does not fit a map of"
                f" {self._rows} rows and {len(self._columns) - 1} columns"
            )
        count_rows(
            np.ascontiguousarray(cells),
            self._seen,
            self._rows,
            self._sides,
            self._shifts,
            self._offsets,
            self._columns,
            self._below,
            self._found,
        )
        self._seen += len(cells)

    def counts(self) -> CellCounts:
        """Return the counts once every row has been added."""
        if self._seen < self._rows:
            raise ValueError(f"{self._seen} of {self._rows} rows have been counted; add the rest first")
        firsts = np.concatenate([[0], np.cumsum(self._grids)])
        grids = np.full((len(self.sizes), int(self._grids.max())), np.nan)
        for k, (a, b) in enumerate(pairwise(firsts)):
            grids[k, : b - a] = self._found[a:b, 0]
        best = self._found[firsts[:-1] + np.nanargmin(grids, axis=1)]
        total = float(self._columns[-1])
        with np.errstate(divide="ignore", invalid="ignore"):
            evenness = np.column_stack([total * np.exp(-best[:, 1] / total), total**2 / best[:, 2]])
        return CellCounts(self.sizes, best[:, 0].astype(np.int64), evenness, grids)


def cell_dimensions(counts: CellCounts) -> tuple[float, float, float]:
    """Fit box, information and correlation dimension through the counts, by least squares.

    NaN where fewer than `FEWEST_RUNGS` sizes were counted, or the class is absent. `cell_interval` gives
    the box dimension's interval; no verdict is calibrated for sets of cells.
    """
    if len(counts.sizes) < FEWEST_RUNGS or counts.boxes[0] == 0:
        return np.nan, np.nan, np.nan
    ladders = Ladders(np.array([0, len(counts.sizes)]), counts.sizes.astype(np.float64))
    box, even, paired = (
        -float(fit_power_law(ladders, values).slope[0])
        for values in (counts.boxes.astype(np.float64), *counts.evenness.T)
    )
    return box, even, paired


def cell_interval(counts: CellCounts) -> tuple[float, float]:
    """Return the 95 % interval of the box dimension for the process that made the map.

    `REACH_BELOW` and `REACH_ABOVE` of the figure, and half of what the fine and the coarse half of the
    sizes differ by. NaN where there is no dimension.
    """
    dimension = cell_dimensions(counts)[0]
    if not np.isfinite(dimension):
        return np.nan, np.nan
    half = len(counts.sizes) // 2
    x, y = np.log(counts.sizes), np.log(counts.boxes)
    fine, coarse = (_slope(x[part], y[part]) for part in (slice(half), slice(half, None)))
    bend = 0.5 * abs(fine - coarse)
    return max(0.0, dimension - REACH_BELOW - bend), min(2.0, dimension + REACH_ABOVE + bend)


def _slope(x: Floats, y: Floats) -> float:
    away = x - x.mean()
    return float((away * (y - y.mean())).sum() / (away * away).sum())


def _whole_shifts(size: int) -> Ints:
    """Return the shifts of a size in whole cells: all of them, or none and those of the lines' grids."""
    if size <= 3:
        return np.stack(np.divmod(np.arange(size * size), size), axis=1)
    spread = np.floor(GRID_SHIFTS[:, :2] * size).astype(np.int64)
    return np.unique(np.concatenate([np.zeros((1, 2), dtype=np.int64), spread]), axis=0)


def count_cells(cells: Bools, sizes: Ints | None = None) -> CellCounts:
    """Count the boxes of a map that is at hand: (rows, columns), True where a cell is of the class."""
    counter = CellBoxCounter(cells.shape[0], cells.shape[1], sizes)
    counter.add(cells)
    return counter.counts()
