"""Box counts of a cover and of its edge, in a part of a class map."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.estimators.box_cells import CellBoxCounter, cell_dimensions, cell_interval
from geofractal.landcover.windows import Window


@dataclass(frozen=True, slots=True)
class Part:
    """A part of a map: rows, columns, and the zone that cells must be of, None for all."""

    rows: slice
    columns: slice
    zone: int | None


class CoverBoxes:
    """Counts boxes of a cover's cells, or of those that touch another class by a side, in a part of a map."""

    halo = 1

    def __init__(self, part: Part, cover: int, *, edge: bool) -> None:
        self.part, self.cover, self.edge = part, cover, edge
        self._counter = CellBoxCounter(
            part.rows.stop - part.rows.start, part.columns.stop - part.columns.start
        )

    def add(self, window: Window, codes: NDArray[np.int16]) -> None:
        """Add the strip of a window; `codes` are the window's covers."""
        first = max(self.part.rows.start - window.strip.first_row, 0)
        stop = min(self.part.rows.stop - window.strip.first_row, window.strip.rows)
        if stop <= first:
            return
        cells = codes[window.offset : window.stop] == self.cover
        if self.edge:
            cells &= _changes(codes)[window.offset : window.stop]
        if self.part.zone is not None and window.strip.zones is not None:
            cells &= window.strip.zones == self.part.zone
        self._counter.add(np.ascontiguousarray(cells[first:stop, self.part.columns]))

    def dimension(self) -> tuple[float, tuple[float, float], tuple[int, int]]:
        """Return dimension and interval, NaN where there is none, and first and last box size in cells."""
        counts = self._counter.counts()
        sizes = int(counts.sizes[0]), int(counts.sizes[-1])
        return cell_dimensions(counts)[0], cell_interval(counts), sizes


def _changes(codes: NDArray[np.int16]) -> NDArray[np.bool_]:
    """Return which cells share a side with a covered cell of another class."""
    found = np.zeros(codes.shape, np.bool_)
    for one, other in (
        ((slice(1, None), slice(None)), (slice(None, -1), slice(None))),
        ((slice(None), slice(1, None)), (slice(None), slice(None, -1))),
    ):
        changed = (codes[one] != codes[other]) & (codes[one] >= 0) & (codes[other] >= 0)
        found[one] |= changed
        found[other] |= changed
    return found
