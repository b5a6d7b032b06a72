"""The rungs behind a dimension: what the ladder tables of divider and box counting have in common."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geofractal.measure import Column, LadderRows
from geofractal.scaling.fit import local_dimensions

if TYPE_CHECKING:
    from geofractal.measure import Values
    from geofractal.scaling.judge import Judgement, Rungs
    from geofractal.scaling.ladder import Ladders

_SHARED = (
    Column("used", "used", "flag", "", "whether the dimension of the feature rests on this rung"),
    Column(
        "local_dim",
        "local_dim",
        "number",
        "",
        "dimension around the rung: over it and two rungs on either side, fewer at the ladder's ends; null"
        " where fewer than three of them have a figure",
        "1 - slope of ln L on ln r by least squares, where L is the length or boxes times their size",
    ),
    Column(
        "local_dim_spread",
        "local_sprd",
        "number",
        "",
        "standard error of local_dim for this line alone: by the spread of the rungs or by how far they lie"
        " off their straight line, whichever is more; neighbouring values share rungs",
    ),
)


def ladder_columns(*own: Column, fitted: Column) -> tuple[Column, ...]:
    """Return the columns of a ladder table: a measure's own, those shared, and what its fit gives."""
    return (*own, *_SHARED, fitted)


def ladder_rows(own: Values, ladders: Ladders, rungs: Rungs, found: Judgement) -> LadderRows:
    """Return the rows of a ladder table.

    Parameters
    ----------
    own : the measure's own columns, its fit's among them
    ladders, rungs : what was found where
    found : what it was judged to be
    """
    local = local_dimensions(ladders, rungs.lengths, rungs.noise)
    shared: Values = {
        "used": found.used.astype(np.int8),
        "local_dim": local.dimension,
        "local_dim_spread": local.spread,
    }
    return LadderRows(ladders.owners, own | shared)
