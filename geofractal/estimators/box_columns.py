"""What the columns of `box-dimension` are called and mean."""

from __future__ import annotations

from geofractal.estimators.ladder_table import ladder_columns
from geofractal.measure import PLANES, Column

HENTSCHEL_PROCACCIA = "Hentschel & Procaccia 1983, Physica D 8:435-444"

_CALIBRATION = "set by simulation on curves of exactly known dimension"

BOX_COLUMNS = (
    Column(
        "box_dim",
        "box_dim",
        "number",
        "",
        "box dimension between the first and the last box size used; null where there are too few scales",
        "D = -slope of ln N(s) on ln s; N(s): boxes of side s that hold a length of the line, the fewest over"
        " shifted grids",
        "common practice; its errors: Gonzato, Mulargia & Ciccotti 2000, Geophys. J. Int. 142:108-116",
    ),
    Column(
        "box_dim_low",
        "box_dlow",
        "number",
        "",
        "lower end of the 95 % interval for the process that made the line: the one to use when two"
        " different lines are compared; under two-regime and curved it holds both ends of the ladder",
        source=_CALIBRATION,
    ),
    Column("box_dim_high", "box_dhigh", "number", "", "upper end of the same interval", source=_CALIBRATION),
    Column(
        "box_spread",
        "box_spread",
        "number",
        "",
        "standard error of box_dim for this line alone: where grids and box sizes happen to lie; too narrow"
        " to compare two different lines with",
    ),
    Column(
        "box_verdict",
        "box_verdic",
        "text",
        "",
        "whether a dimension exists: power-law; two-regime (one dimension on each side of a break); curved;"
        " smooth (nothing beyond dimension 1); too-few-scales",
        "a hinge, a step and a parabola against the straight line on logarithmic axes",
        _CALIBRATION,
    ),
    Column("box_size_min_m", "box_smin_m", "number", "m", "first box size that was used"),
    Column("box_size_max_m", "box_smax_m", "number", "m", "last box size that was used"),
    Column("box_rungs", "box_rungs", "count", "", "number of box sizes that were used"),
    Column(
        "box_r2",
        "box_r2",
        "number",
        "",
        "share of the variance of ln(N s) that the fitted line explains; near 1 for any line on logarithmic"
        " axes, so no evidence that a dimension exists",
    ),
    Column("box_break_m", "box_brk_m", "number", "m", "box size at which the two regimes meet"),
    Column("box_break_low_m", "box_brkl_m", "number", "m", "lower end of the break's interval"),
    Column("box_break_high_m", "box_brkh_m", "number", "m", "upper end of the break's interval"),
    Column(
        "box_fine_dim",
        "box_fine",
        "number",
        "",
        "dimension below the break; under curved, at the first box size",
    ),
    Column(
        "box_coarse_dim",
        "box_coarse",
        "number",
        "",
        "dimension above the break; under curved, at the last box size",
    ),
    Column(
        "box_information_dim",
        "box_inform",
        "number",
        "",
        "information dimension (q = 1): as box_dim, each box weighted by the length of line in it",
        "as box_dim, with exp(-sum p ln p) for N, p the share of the length in each box of the same grid",
        HENTSCHEL_PROCACCIA,
    ),
    Column(
        "box_correlation_dim",
        "box_correl",
        "number",
        "",
        "correlation dimension (q = 2): as box_dim, from the chance that two points of the line share a box",
        "as box_dim, with 1 / sum p^2 for N, p the share of the length in each box of the same grid",
        HENTSCHEL_PROCACCIA,
    ),
    Column(
        "box_distortion_percent",
        "box_distor",
        "number",
        "percent",
        "worst relative distance error of the plane on which the feature was counted",
    ),
    Column(
        "box_plane",
        "box_plane",
        "text",
        "",
        "on what the feature was counted (in three dimensions the boxes are cubes): " + ", ".join(PLANES),
    ),
)

LADDER_COLUMNS = ladder_columns(
    Column("box_size_m", "boxsize_m", "number", "m", "side of the boxes"),
    Column(
        "boxes",
        "boxes",
        "count",
        "",
        "boxes that hold a length of the line, the fewest over the shifted grids; null where they are too"
        " many to count",
    ),
    Column(
        "boxes_spread",
        "boxesprd",
        "number",
        "",
        "standard deviation of the number of boxes over the shifted grids; null where one grid was enough",
        "standard deviation of ln N x N",
    ),
    fitted=Column(
        "boxes_fit",
        "boxes_fit",
        "number",
        "",
        "boxes that the fitted line gives at the size, effects of the ladder's ends taken out; null at rungs"
        " that were not used",
    ),
)
