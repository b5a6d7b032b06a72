"""Box counts of a cover and of its edge, in a part of a class map."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from geofractal.estimators.box_cells import CellBoxCounter, CellDimensions, cell_dimensions
from geofractal.estimators.fragmentation_quantities import box_quantities
from geofractal.landcover.windows import Window

ABSENT = "the class is absent"
ONE_REGIME = "no break was found"
FILLED = "a filled area, of dimension 2, is not ruled out"


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

    def dimensions(self) -> CellDimensions | None:
        """Return the dimensions of the cells; None where there is none of them."""
        counts = self._counter.counts()
        return cell_dimensions(counts) if counts.boxes[0] else None


class Row(NamedTuple):
    """A row of the table of figures; lengths in metres."""

    quantity: str
    estimate: float
    low: float = math.nan
    high: float = math.nan
    note: str | None = None


def box_rows(dimensions: CellDimensions | None, *, edge: bool, cell: float, remark: str | None) -> list[Row]:
    """Return the rows of a set of cells.

    Parameters
    ----------
    dimensions : of the class, or of its edge; None where it is absent
    edge : whether they are those of the edge
    cell : side of a cell in metres
    remark : what is to be said beside the dimension
    """
    prefix = "edge_" if edge else ""
    if dimensions is None:
        return [
            Row(one.name, math.nan, note=ABSENT) for one in box_quantities(edge=edge) if one.kind != "text"
        ]
    found = dimensions.found
    given = math.isfinite(found.dimension)
    missing = None if given else found.verdict
    beside = [
        found.verdict,
        FILLED if found.verdict == "power-law" and found.high >= 2 else None,
        remark if given else None,
    ]
    whole = None if math.isfinite(found.fine) else missing or ONE_REGIME
    broken = None if math.isfinite(found.break_at) else missing or ONE_REGIME
    breaks = found.break_at * cell, found.break_low * cell, found.break_high * cell
    rows = [
        Row("box_dim", found.dimension, found.low, found.high, "; ".join(filter(None, beside))),
        Row("box_verdict", math.nan, note=found.verdict),
        Row("box_size_min", found.size_min * cell, note=missing),
        Row("box_size_max", found.size_max * cell, note=missing),
        Row("box_break", *breaks, note=broken),
        Row("box_fine_dim", found.fine, note=whole),
        Row("box_coarse_dim", found.coarse, note=whole),
    ]
    if not edge:
        rows.append(Row("box_information_dim", *dimensions.information, note=missing))
        rows.append(Row("box_correlation_dim", *dimensions.correlation, note=missing))
    return [row._replace(quantity=prefix + row.quantity) for row in rows]


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
