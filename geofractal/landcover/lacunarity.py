"""Lacunarity: how unevenly a cover fills gliding boxes (Allain & Cloitre 1991, Plotnick et al. 1993)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.lacunarity import BOXES, CARRY, CARRY_BITS, MASS, SQUARES, glide
from geofractal.landcover.grid import Grid, Ints
from geofractal.landcover.windows import Window

MOST_CELLS = 2_000
"""Largest side of a box in cells: sums over a row must fit into 64 bits."""


@dataclass(frozen=True, slots=True)
class Boxes:
    """Size of gliding boxes: as stated, and in whole cells."""

    metres: float
    rows: int
    columns: int


def boxes_of(grid: Grid, metres: float) -> Boxes:
    """Return boxes of a stated side, to the nearest cell of typical size, at least one."""
    width, height = grid.typical_cell
    return Boxes(metres, max(1, round(metres / height)), max(1, round(metres / width)))


class GlidingSums:
    """Adds up one cover in boxes of one size, by zone and for the whole map.

    Parameters
    ----------
    zones : number of zones
    cover : (classes + 1,) whether a class belongs to the cover; last: cells of no class
    with_whole : whether boxes across zones are summed, too, for the whole map
    """

    def __init__(
        self, grid: Grid, zones: int, cover: NDArray[np.bool_], boxes: Boxes, *, with_whole: bool
    ) -> None:
        self.cover, self.boxes, self.halo = cover, boxes, boxes.rows
        self.sums: Ints = np.zeros((zones + 1, 4), np.int64)
        ways = [True] if with_whole else []
        ways += [False] if zones else []
        self._ways = [(way, np.zeros((2, grid.columns), np.int32)) for way in ways]

    def add(self, window: Window, codes: NDArray[np.int16]) -> None:
        """Add the boxes that end in the strip of a window; `codes` are the window's covers."""
        zones = np.empty((0, 0), np.int32) if window.zones is None else window.zones[: window.stop]
        size = (self.boxes.rows, self.boxes.columns)
        for whole, (good, held) in self._ways:
            glide(codes[: window.stop], zones, window.offset, self.cover, *size, whole, good, held, self.sums)

    def lacunarity(self, zone: int) -> tuple[float, int]:
        """Return E[M^2] / E[M]^2 and the number of boxes; NaN where the cover is absent from all of them.

        Zone -1 is the whole map.
        """
        row = [int(value) for value in self.sums[zone]]
        squares = row[SQUARES] + (row[CARRY] << CARRY_BITS)
        if row[MASS] == 0:
            return float("nan"), row[BOXES]
        return row[BOXES] * squares / row[MASS] ** 2, row[BOXES]
