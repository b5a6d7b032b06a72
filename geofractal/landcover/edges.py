"""Class-change edges between zones: half of each belongs to either zone."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.cell_edges import share_edges
from geofractal.landcover.grid import Ints
from geofractal.landcover.strips import NOT_COVERED, OUTSIDE, Strip


class SharedEdges:
    """What class-change edges on zone borders add to the edges that cells of a zone alone have.

    Parameters
    ----------
    zones : number of zones; a strip's zone codes are below it
    """

    def __init__(self, zones: int) -> None:
        self.twice: Ints = np.zeros((zones + 1, 1), np.int64)
        """(zones + 1, classes) twice the length to be added, in the grid's unit; last: in no zone"""
        self._codes: NDArray[np.int16] | None = None
        self._zones: NDArray[np.int32] | None = None

    def begin(self) -> None:
        """Begin at the top of the map, for another set of zones."""
        self._codes = self._zones = None

    def __call__(self, strips: Iterable[Strip]) -> Iterator[Strip]:
        """Pass strips on while their edges are added up."""
        for strip in strips:
            self._add(strip)
            yield strip

    def _add(self, strip: Strip) -> None:
        assert strip.zones is not None
        missing = int(strip.codes.max()) + 1 - self.twice.shape[1]
        if missing > 0:
            self.twice = np.pad(self.twice, ((0, 0), (0, missing)))
        columns = strip.codes.shape[1]
        if self._codes is None or self._zones is None:
            self._codes = np.full(columns, NOT_COVERED, np.int16)
            self._zones = np.full(columns, OUTSIDE, np.int32)
        share_edges(
            strip.codes,
            strip.zones,
            self._codes,
            self._zones,
            strip.sizes.height,
            strip.sizes.width,
            strip.sizes.area_line,
            strip.sizes.edge_line,
            self.twice,
        )
        self._codes, self._zones = strip.codes[-1].copy(), strip.zones[-1].copy()
