"""A strip of a class map: the chunk that the raster reader yields and every cell measure takes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.patch_tables import CUT_DOWN, CUT_DOWN_LEFT, CUT_DOWN_RIGHT, CUT_RIGHT
from geofractal.landcover.grid import CellSizes

__all__ = [
    "CUT_DOWN",
    "CUT_DOWN_LEFT",
    "CUT_DOWN_RIGHT",
    "CUT_RIGHT",
    "NOT_COVERED",
    "OUTSIDE",
    "Codes",
    "Strip",
]

NOT_COVERED = -1
"""Class index of a cell without data (nodata, mask, outside the source)."""

OUTSIDE = -1
"""Zone code of a cell in no zone."""

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
    cuts : (rows, columns) links from each cell to its neighbours that a barrier removes, as bits
        `CUT_RIGHT`, `CUT_DOWN`, `CUT_DOWN_RIGHT`, `CUT_DOWN_LEFT`; None where there are no barriers
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
