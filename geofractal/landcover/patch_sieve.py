"""Patches that a measure has a use for; of the smaller ones only their number is kept."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field

import numpy as np

from geofractal.landcover.grid import Grid
from geofractal.landcover.labelling import PatchTable
from geofractal.landcover.perimeter import area_m2

CLASSES = 1 << 16
"""More than there are indices of classes."""


@dataclass
class Sieve:
    """Lets patches through that are large enough, and counts the others by zone and class.

    Attributes
    ----------
    grid : that the patches lie on
    smallest_cells, smallest_area_m2 : patches below either are not let through
    counts : number of those, by zone and index of the class
    """

    grid: Grid
    smallest_cells: int = 1
    smallest_area_m2: float = 0.0
    counts: Counter[tuple[int, int]] = field(default_factory=Counter)

    def __call__(self, patches: PatchTable) -> PatchTable:
        """Return the patches that are large enough, in their order."""
        small = patches["cells"] < self.smallest_cells
        small |= area_m2(patches, self.grid) < self.smallest_area_m2
        if not small.any():
            return patches
        keys, counts = np.unique(
            patches["zone"][small] * CLASSES + patches["class"][small], return_counts=True
        )
        for key, count in zip(keys.tolist(), counts.tolist(), strict=True):
            self.counts[divmod(key, CLASSES)] += count
        return patches.take(~small)
