"""A strip of a class map: the chunk that the raster reader yields and every cell measure takes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.landcover.grid import CellSizes

NOT_COVERED = -1
"""Class index of a cell without data (nodata, mask, outside the source)."""

OUTSIDE = -1
"""Zone code of a cell in no zone."""

CUT_RIGHT, CUT_DOWN, CUT_DOWN_RIGHT, CUT_DOWN_LEFT = 1, 2, 4, 8
"""Bits of `Strip.cuts`: the links from a cell to its neighbours that a barrier removes."""

Codes = NDArray[np.int16]


@dataclass(frozen=True, slots=True)
class Strip:
    """Whole rows of a class map, from the top of the raster downwards and without gaps.

    Attributes
    ----------
    first_row : row of the raster that the strip begins with
    codes : (rows, columns) index of each cell's class, `NOT_COVERED` where there is none
    sizes : true sizes of the cells and of their edges
    last : whether the raster ends with this strip
    zones : (rows, columns) zone of each cell, `OUTSIDE` in none; None where there are no zones
    cuts : (rows, columns) removed links, bits `CUT_RIGHT` and so on; None where there are no barriers
    """

    first_row: int
    codes: Codes
    sizes: CellSizes
    last: bool
    zones: NDArray[np.int32] | None = None
    cuts: NDArray[np.uint8] | None = None

    @property
    def rows(self) -> int:
        """Return the number of rows."""
        return int(self.codes.shape[0])
