"""Distances between patches, and the area that they make together for what moves between them."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from geofractal.kernels.patch_gaps import all_gaps, cheapest_paths, nearest_gaps
from geofractal.landcover.grid import Floats, Ints
from geofractal.landcover.patch_runs import PatchRuns

FAINTEST = 1e-4
"""Probability below which a direct link is taken for none; what that may hide is in the interval."""


@dataclass(frozen=True, slots=True)
class Connected:
    """Equivalent connected area (Saura et al. 2011), in the unit of the areas, and what it is made of.

    Attributes
    ----------
    area : root of the sum of a_i a_j p*_ij, over ordered pairs, i = j included
    high : area, were every link left out as strong as the faintest one kept
    own, direct, stepping : shares of that sum: i = j; what direct links give; what paths over other
        patches add
    """

    area: float
    high: float
    own: float
    direct: float
    stepping: float


def connected_area(areas: Floats, costs: Floats, *, faintest: float = 0.0) -> Connected:
    """Return the equivalent connected area of patches.

    Parameters
    ----------
    areas : (n,) of each patch; 0 for one that is a stepping stone only
    costs : (n, n) -ln p of the probability p of moving directly between two patches, infinite for none
    faintest : largest p that was left out

    Examples
    --------
    Without patches there is no area.

    >>> connected_area(np.empty(0), np.empty((0, 0))).area
    0.0
    """
    pairs = np.outer(areas, areas)
    own = float(np.diag(pairs).sum())
    direct = float((pairs * np.exp(-costs)).sum()) - own
    paths = costs.copy()
    cheapest_paths(paths)
    total = float((pairs * np.exp(-paths)).sum())
    if total == 0:
        return Connected(0.0, 0.0, math.nan, math.nan, math.nan)
    high = (
        math.sqrt(total + faintest * float((pairs * ~(paths < -math.log(faintest))).sum()))
        if faintest
        else 0.0
    )
    area = math.sqrt(total)
    return Connected(area, max(area, high), own / total, direct / total, (total - own - direct) / total)


@dataclass(frozen=True)
class Distances:
    """Where the patches of a cover lie on the ground.

    Distances are those of rows and columns by the true sizes of their cells; they do not go around a globe
    past the sides of the map.

    Attributes
    ----------
    found : the patches
    top : (rows + 1,) metres from the map's top to each row's upper edge
    width : (rows,) mean width of a cell
    """

    found: PatchRuns
    top: Floats
    width: Floats

    def nearest(self, wanted: Ints) -> Floats:
        """Return the gap from each wanted patch to the nearest other one; infinite for a lone patch."""
        nearest = np.empty(len(wanted))
        one = self.found
        nearest_gaps(wanted, one.runs, one.offsets, one.boxes(), self.top, self.width, nearest)
        return nearest

    def within_reach(self, wanted: Ints, most: float) -> Ints:
        """Return the patches whose box is within `most` metres of the box of all wanted ones."""
        boxes = self.found.boxes()
        mine = boxes[wanted]
        low_row, high_row = int(mine[:, 0].min()), int(mine[:, 1].max())
        left, right = int(mine[:, 2].min()), int(mine[:, 3].max())
        down = np.maximum(
            self.top[boxes[:, 0]] - self.top[high_row + 1], self.top[low_row] - self.top[boxes[:, 1] + 1]
        )
        narrow = np.minimum(self.width[boxes[:, 0]], self.width[boxes[:, 1]])
        narrow = np.minimum(narrow, min(self.width[low_row], self.width[high_row]))
        across = np.maximum(boxes[:, 2] - right - 1, left - boxes[:, 3] - 1) * narrow
        return np.flatnonzero((down <= most) & (across <= most))

    def costs(self, chosen: Ints, dispersal_m: float) -> Floats:
        """Return -ln p between every two chosen patches, p = 1/2 at the median dispersal distance."""
        one, gaps = self.found, np.empty((len(chosen), len(chosen)))
        rate = math.log(2) / dispersal_m
        all_gaps(chosen, one.runs, one.offsets, one.boxes(), self.top, self.width, reach(dispersal_m), gaps)
        return rate * gaps


def reach(dispersal_m: float) -> float:
    """Return the distance at which a direct link is as faint as those left out."""
    return -math.log(FAINTEST) * dispersal_m / math.log(2)
