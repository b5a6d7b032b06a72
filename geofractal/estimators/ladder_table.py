"""What the columns and the ladder tables of divider and box counting have in common."""

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


def judged_columns(
    stem: str, short: str, size: str, named: str, *, scatter: str, fitted: str, source: str
) -> tuple[Column, ...]:
    """Return the columns of a dimension's interval, spread and verdict, of its ladder and its break.

    Parameters
    ----------
    stem, short : what their names and their short names begin with
    size : what a rung is, in the singular
    named : the same as in their names
    scatter : what the spread comes from
    fitted : what the line is fitted through
    source : of the interval and the verdict
    """
    return (
        Column(
            f"{stem}_dim_low",
            f"{short}_dlow",
            "number",
            "",
            "lower end of the 95 % interval for the process that made the line: the one to use when two"
            " different lines are compared; under two-regime and curved it holds both ends of the ladder",
            source=source,
        ),
        Column(
            f"{stem}_dim_high",
            f"{short}_dhigh",
            "number",
            "",
            "upper end of the same interval",
            source=source,
        ),
        Column(
            f"{stem}_spread",
            f"{short}_spread",
            "number",
            "",
            f"standard error of {stem}_dim for this line alone: {scatter}; too narrow to compare two"
            " different lines with",
        ),
        Column(
            f"{stem}_verdict",
            f"{short}_verdic",
            "text",
            "",
            "whether a dimension exists: power-law; two-regime (one dimension on each side of a break);"
            " curved; smooth (nothing beyond dimension 1); too-few-scales",
            "a hinge, a step and a parabola against the straight line on logarithmic axes",
            source,
        ),
        Column(f"{stem}_{named}_min_m", f"{short}_{named[0]}min_m", "number", "m", f"first {size} used"),
        Column(f"{stem}_{named}_max_m", f"{short}_{named[0]}max_m", "number", "m", f"last {size} used"),
        Column(f"{stem}_rungs", f"{short}_rungs", "count", "", f"number of {size}s used"),
        Column(
            f"{stem}_r2",
            f"{short}_r2",
            "number",
            "",
            f"share of the variance of {fitted} that the fitted line explains; near 1 for any line on"
            " logarithmic axes, so no evidence that a dimension exists",
        ),
        Column(f"{stem}_break_m", f"{short}_brk_m", "number", "m", f"{size} at which the two regimes meet"),
        Column(f"{stem}_break_low_m", f"{short}_brkl_m", "number", "m", "lower end of the break's interval"),
        Column(f"{stem}_break_high_m", f"{short}_brkh_m", "number", "m", "upper end of the break's interval"),
        Column(
            f"{stem}_fine_dim",
            f"{short}_fine",
            "number",
            "",
            f"dimension below the break; under curved, at the first {size}",
        ),
        Column(
            f"{stem}_coarse_dim",
            f"{short}_coarse",
            "number",
            "",
            f"dimension above the break; under curved, at the last {size}",
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
