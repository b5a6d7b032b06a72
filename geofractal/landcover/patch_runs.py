"""The cells of a cover's patches as runs, for distances; kept within a bound."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.patch_gaps import count_overlaps, find_overlaps
from geofractal.landcover.grid import Floats, Grid, Ints
from geofractal.landcover.interior import row_sizes
from geofractal.landcover.labelling import PatchTable, label_patches
from geofractal.landcover.strips import NOT_COVERED, Strip
from geofractal.landcover.zones import Zones

MOST_RUNS = 10_000_000
BLOCK_ROWS = 1024


@dataclass(frozen=True)
class PatchRuns:
    """The patches of one cover, largest enough to count.

    Attributes
    ----------
    patches : one line a patch
    offsets : (n + 1,) where the runs of each begin
    runs : (m, 3) row, first column and column after the last, by patch, each in scan order
    """

    patches: PatchTable
    offsets: Ints
    runs: Ints

    def boxes(self) -> Ints:
        """Return first and last row, first and last column of each patch."""
        names = ("first_row", "last_row", "left_column", "right_column")
        return np.ascontiguousarray(np.stack([self.patches[name] for name in names], axis=1))

    def inside(self, zones: Zones, grid: Grid) -> Ints:
        """Return patch, zone and area of each part of a patch in a zone."""
        patch = np.repeat(np.arange(len(self.patches)), np.diff(self.offsets))
        order = np.argsort(self.runs[:, 0], kind="stable")
        parts = [np.empty((0, 3), np.int64)]
        for first in range(0, grid.rows, BLOCK_ROWS):
            stop = min(first + BLOCK_ROWS, grid.rows)
            low, high = np.searchsorted(self.runs[order, 0], [first, stop])
            mine = order[low:high]
            areas = zones.runs(range(len(zones)), first, stop, grid.columns)
            areas = np.ascontiguousarray(areas[np.lexsort((areas[:, 2], areas[:, 0]))])
            if len(mine) and len(areas):
                sizes = grid.sizes(first, stop - first)
                runs, found = np.ascontiguousarray(self.runs[mine]), np.empty((0, 3), np.int64)
                found = np.empty((count_overlaps(runs, areas), 3), np.int64)
                find_overlaps(runs, patch[mine], areas, first, sizes.area, sizes.area_line, found)
                parts.append(_merged(found))
        return _merged(np.concatenate(parts))


def _merged(parts: Ints) -> Ints:
    """Add up the areas of equal patch and zone."""
    if not len(parts):
        return parts
    parts = parts[np.lexsort((parts[:, 1], parts[:, 0]))]
    starts = np.flatnonzero(np.r_[True, (np.diff(parts[:, :2], axis=0) != 0).any(axis=1)])
    return np.column_stack([parts[starts, :2], np.add.reduceat(parts[:, 2], starts)])


def gather_runs(
    strips: Iterable[Strip], wanted: Iterable[int], *, neighbours: int, smallest: int
) -> dict[int, PatchRuns]:
    """Return the patches of the wanted covers; those with more runs than can be kept are left out."""
    guard = _Guard(tuple(wanted))
    tables: list[Ints] = []
    runs: list[Ints] = []
    n = 0
    for found in label_patches(guard(strips), neighbours=neighbours, runs=True):
        assert found.runs is not None
        tables.append(found.patches.values)
        runs.append((found.runs + np.array([n, 0, 0, 0])).astype(np.int32))
        n += len(found.patches)
    if not tables:
        return {}
    table, every = np.concatenate(tables), np.concatenate(runs)
    patches = PatchTable(table)
    kept = {}
    for kind in guard.left:
        mine = np.flatnonzero((patches["class"] == kind) & (patches["area"] >= smallest))
        number = np.full(len(table), -1, np.int64)
        number[mine] = np.arange(len(mine))
        own = every[number[every[:, 0]] >= 0].astype(np.int64)
        offsets = np.searchsorted(number[own[:, 0]], np.arange(len(mine) + 1))
        kept[kind] = PatchRuns(PatchTable(table[mine]), offsets, np.ascontiguousarray(own[:, 1:]))
    return kept


class _Guard:
    """Passes strips on with the wanted covers alone, and lets go of those that have too many runs."""

    def __init__(self, wanted: tuple[int, ...]) -> None:
        self.left = list(wanted)
        self._runs = dict.fromkeys(wanted, 0)

    def __call__(self, strips: Iterable[Strip]) -> Iterator[Strip]:
        most = MOST_RUNS // max(1, len(self.left))
        for strip in strips:
            codes: NDArray[np.int16] = np.where(np.isin(strip.codes, self.left), strip.codes, NOT_COVERED)
            begins = codes[:, 1:][codes[:, 1:] != codes[:, :-1]]
            counts = np.bincount(np.r_[begins, codes[:, 0]] + 1, minlength=max(self._runs, default=0) + 2)
            for kind in list(self.left):
                self._runs[kind] += int(counts[kind + 1])
                if self._runs[kind] > most:
                    self.left.remove(kind)
                    codes = np.where(codes == kind, NOT_COVERED, codes)
            yield replace(strip, codes=codes.astype(np.int16))


def row_metres(grid: Grid) -> tuple[Floats, Floats]:
    """Return metres from the map's top to each row's upper edge and the bottom, and mean cell widths."""
    widths, heights = [], []
    for first in range(0, grid.rows, BLOCK_ROWS):
        sizes = grid.sizes(first, min(BLOCK_ROWS, grid.rows - first))
        width, height = row_sizes(sizes, grid.columns, grid.length_unit_m)
        widths.append(width)
        heights.append(height)
    return np.concatenate([[0.0], np.cumsum(np.concatenate(heights))]), np.concatenate(widths)
