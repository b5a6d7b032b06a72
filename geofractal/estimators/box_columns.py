"""What the columns of `box-dimension` are called and mean."""

from __future__ import annotations

from geofractal.estimators.ladder_table import judged_columns, ladder_columns
from geofractal.measure import PLANES, Column

HENTSCHEL_PROCACCIA = "Hentschel & Procaccia 1983, Physica D 8:435-444"

BOX_COLUMNS = (
    Column(
        "box_dim",
        "box_dim",
        "number",
        "",
        "box dimension between the first and the last box size used; null where there are too few scales",
        "D = -slope of ln N(s) on ln s; N(s): boxes of side s that hold a length of the line, the fewest over"
        " shifted grids, with what they lose where the line comes back to a box made up for",
        "common practice; its errors: Gonzato, Mulargia & Ciccotti 2000, Geophys. J. Int. 142:108-116",
    ),
    *judged_columns(
        "box",
        "box",
        "box size",
        "size",
        scatter="where grids and box sizes happen to lie",
        fitted="ln(N s)",
        source="set by simulation on curves of exactly known dimension",
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
