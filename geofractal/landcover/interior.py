"""Interior area: cells whose centre is farther than a depth from the nearest edge of another class.

Distances are exact on the ground, by the mean width and height of the cells of each row.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.interior import add_far, change_distances, mark_near, reach_by_rows
from geofractal.landcover.covers import Pack
from geofractal.landcover.grid import CellSizes, Floats, Grid
from geofractal.landcover.strips import NOT_COVERED
from geofractal.landcover.windows import Window


@dataclass(frozen=True)
class Depth:
    """How far from other classes interior begins.

    Attributes
    ----------
    metres : for all neighbours, or for those that `by_neighbour` does not name
    by_neighbour : class -> metres, from that class
    map_edge : whether the map's edge and cells without data bound like another class
    """

    metres: float
    by_neighbour: Mapping[str, float]
    map_edge: bool

    @property
    def steps(self) -> tuple[float, ...]:
        """Return the different depths."""
        return tuple(sorted({self.metres, *self.by_neighbour.values()}))

    def bounding(self, step: float, classes: Sequence[str]) -> NDArray[np.bool_]:
        """Return which classes are to be at least `step` away; last: cells of no class."""
        far = [self.by_neighbour.get(name, self.metres) >= step for name in classes]
        return np.array([*far, self.map_edge and self.metres >= step])


class InteriorSums:
    """Adds up the interior area of the covers of a pack, by zone and for the whole.

    Parameters
    ----------
    grid : the grid measured on
    zones : number of zones
    """

    def __init__(self, grid: Grid, zones: int, pack: Pack, classes: Sequence[str], depth: Depth) -> None:
        self.pack, self.classes, self.depth = pack, tuple(classes), depth
        self._unit = grid.length_unit_m
        self.covers = len(pack.covers(classes))
        self.area = np.zeros((zones + 1, self.covers + 1), np.int64)
        """(zones + 1, covers + 1) in the grid's unit; last row: the whole map, last column: the rest"""
        self.halo = _most_rows(max(depth.steps), grid)

    def add(self, window: Window, codes: NDArray[np.int16]) -> None:
        """Add the strip of a window; `codes` are the window's covers."""
        strip, offset, classes = window.strip, window.offset, window.codes
        if self.depth.map_edge:
            padding = ((int(window.at_top), int(window.at_bottom)), (0, 0))
            classes, codes = (np.pad(one, padding, constant_values=NOT_COVERED) for one in (classes, codes))
            offset += int(window.at_top)
        width, height = row_sizes(strip.sizes, strip.codes.shape[1], self._unit)
        inner = slice(offset, offset + strip.rows)
        zones = np.empty((0, 0), np.int32) if strip.zones is None else strip.zones
        for kinds, steps in self._cases(codes, classes):
            near = np.zeros(strip.codes.shape, np.bool_)
            for step, codes in steps:
                self._mark(step, codes, offset, width, height, near)
            counted = kinds[inner]
            add_far(near, counted, zones, strip.sizes.area, strip.sizes.area_line, self.area)

    def _cases(
        self, covers: NDArray[np.int16], window: NDArray[np.int16]
    ) -> Iterator[tuple[NDArray[np.int16], list[tuple[float, NDArray[np.int16]]]]]:
        """Yield the cells to sum up, with maps of what bounds them at each depth.

        All covers at once where every change between them bounds at one depth, else one after the other.
        """
        alike = len(self.depth.steps) == 1
        if alike and (self.depth.map_edge or not (window == NOT_COVERED).any()):
            yield covers, [(self.depth.metres, covers)]
            return
        own = np.arange(self.covers + 1, dtype=np.int16)
        for k in range(self.covers):
            mine = covers == k
            if mine.any():
                steps = []
                for step in self.depth.steps:
                    bounding = self.depth.bounding(step, self.classes)[window] & ~mine
                    steps.append((step, bounding.astype(np.int16)))
                yield np.where(mine, own[k], np.int16(NOT_COVERED)), steps

    def _mark(
        self,
        step: float,
        codes: NDArray[np.int16],
        offset: int,
        width: Floats,
        height: Floats,
        near: NDArray[np.bool_],
    ) -> None:
        rows, columns = near.shape
        to_change = np.empty((rows, columns), np.int32)
        change_distances(codes, offset, offset + rows, self.halo, to_change)
        sizes, line = np.unique(np.stack([width, height], axis=1), axis=0, return_inverse=True)
        reaches = np.empty((len(sizes), self.halo + 1), np.int32)
        for k, (across, down) in enumerate(sizes):
            reach_by_rows(step, across, down, reaches[k])
        inner = codes[offset : offset + rows]
        mark_near(inner, to_change, reaches, line.astype(np.int64), not self.depth.map_edge, near)


def row_sizes(sizes: CellSizes, columns: int, unit: float) -> tuple[Floats, Floats]:
    """Return the mean width and height in metres of the cells of each row."""
    across = sizes.width[:, 0] if sizes.width.shape[1] == 1 else sizes.width[:, -1] / columns
    middle = (across[sizes.edge_line[:-1]] + across[sizes.edge_line[1:]]) / 2
    down = sizes.height.mean(axis=1)[sizes.area_line]
    return middle * unit, down * unit


def _most_rows(metres: float, grid: Grid) -> int:
    """Return the rows from which on a cell is out of reach."""
    down = np.hypot(*grid.lattice[1].T)
    lowest = float(np.nanmin(down[down > 0]))
    rows: int = int(np.floor(metres / (0.98 * lowest) + 0.5)) + 1
    return min(rows, grid.rows + 1)
