"""Box counting of the raster cells of a class, in one pass over strips of rows."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from geofractal.estimators.box import GRID_SHIFTS
from geofractal.kernels.cell_boxes import BLOCKS, count_rows
from geofractal.scaling.cells import CellJudgement, effective_dimension, judge_cells
from geofractal.scaling.ladder import RUNGS_PER_DECADE

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

FIRST_BOX_CELLS = 4
"""First box side in cells. Boxes of one cell fit the cells exactly and larger ones seldom do, so that fits
that begin with them come out 0.05 to 0.1 too low on maps of known dimension; from 4 cells on 0.01 to 0.06."""


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
    tallies : (k, 16) boxes in each of 4 x 4 blocks of the map, on the grid with the fewest
    """

    sizes: Ints
    boxes: Ints
    evenness: Floats
    grids: Floats
    tallies: Ints


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
        self._tallies = np.zeros((len(self._sides), BLOCKS**2), dtype=np.int64)
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
            self._tallies,
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
        fewest = firsts[:-1] + np.nanargmin(grids, axis=1)
        best = self._found[fewest]
        total = float(self._columns[-1])
        with np.errstate(divide="ignore", invalid="ignore"):
            evenness = np.column_stack([total * np.exp(-best[:, 1] / total), total**2 / best[:, 2]])
        return CellCounts(self.sizes, best[:, 0].astype(np.int64), evenness, grids, self._tallies[fewest])


class CellDimensions(NamedTuple):
    """Dimensions of a set of cells; `found` has the box dimension, its ladder and the verdict on all three.

    `information` (q = 1) and `correlation` (q = 2) are a dimension and both ends of its 95 % interval.
    """

    found: CellJudgement
    information: tuple[float, float, float]
    correlation: tuple[float, float, float]


def cell_dimensions(counts: CellCounts) -> CellDimensions:
    """Return what counts are evidence of.

    Examples
    --------
    >>> cell_dimensions(count_cells(np.ones((400, 400), bool))).found.verdict
    'power-law'
    >>> cell_dimensions(count_cells(np.zeros((400, 400), bool))).found
    CellJudgement(verdict='too-few-scales', dimension=nan, low=nan, high=nan, error=nan, size_min=nan, \
size_max=nan, sizes=0, break_at=nan, break_low=nan, break_high=nan, fine=nan, coarse=nan)
    """
    found = judge_cells(counts.sizes, counts.boxes, counts.tallies)
    even, paired = (
        effective_dimension(found, counts.sizes, counts.boxes, effective) for effective in counts.evenness.T
    )
    return CellDimensions(found, even, paired)


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
