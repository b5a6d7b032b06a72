"""What box counting loses where a line comes back to boxes that it has passed through before.

A line that crosses itself, or nearly does, shares boxes with itself, the more of them the larger the boxes:
its counts fall too slowly and its dimension comes out too low, by 0.05 at dimension 1.4 and 0.1 to 0.3 at
1.75. Curves drawn by a rule that never come near themselves lose nothing. How many boxes of the finest size
are come back to from another stretch of the line tells the two apart.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from geofractal.scaling.fit import fit_power_law

if TYPE_CHECKING:
    from geofractal.measure import Floats
    from geofractal.scaling.judge import Judgement
    from geofractal.scaling.ladder import Ladders

LACK = 0.5
"""What the dimension D of a crowded line lacks, times (D - 1) / sqrt(ln(last size / first size)). Set on
fractional trails, random-sided Koch and midpoint curves of 2,000 and 20,000 vertices."""

HALF_CROWDED = 0.01
"""Boxes come back to, as a share of all at the first size, at which half of that lack is made up for."""

DOUBT = 2.2
"""What is made up for, times this, is the half width that its own error adds to the 95 % interval: the share
of boxes come back to differs much between lines of one kind."""


def lacking(ladders: Ladders, boxes: Floats, visits: Floats) -> Floats:
    """Return how much too low each feature's box dimension would come out, (n,).

    Parameters
    ----------
    ladders : box sizes of n features, k in all
    boxes, visits : (k,) as `geofractal.kernels.boxes.count_grid` gives them; NaN where nothing was counted
    """
    counted = np.flatnonzero(np.isfinite(boxes))
    owners = ladders.owners[counted]
    first = counted[np.flatnonzero(np.diff(owners, prepend=-1))]
    last = counted[np.flatnonzero(np.diff(owners, append=len(ladders)))]
    some = ladders.owners[first]
    gap = np.clip(-fit_power_law(ladders, boxes).slope[some] - 1, 0.0, 1.0)
    again = visits[first] / boxes[first] - 1
    span = np.log(ladders.rulers[last] / ladders.rulers[first])
    lack = np.zeros(len(ladders))
    several = span > 0
    lack[some[several]] = (LACK * again / (again + HALF_CROWDED) * gap)[several] / np.sqrt(span[several])
    return lack


def made_up(ladders: Ladders, boxes: Floats, lack: Floats) -> Floats:
    """Return counts, (k,), of which every feature's slope is steeper by what it lacks, (n,)."""
    first = np.repeat(ladders.offsets[:-1], np.diff(ladders.offsets))
    return boxes * (ladders.rulers / ladders.rulers[first]) ** -lack[ladders.owners]


def doubted(found: Judgement, lack: Floats) -> Judgement:
    """Return what was judged from counts made up for, its intervals widened by the doubt about that."""
    doubt = DOUBT * lack
    return replace(
        found,
        low=np.maximum(found.dimension - np.hypot(found.dimension - found.low, doubt), 1.0),
        high=np.minimum(
            found.dimension + np.hypot(found.high - found.dimension, doubt), np.maximum(found.high, 2.0)
        ),
        error=np.hypot(found.error, doubt / 2),
    )
