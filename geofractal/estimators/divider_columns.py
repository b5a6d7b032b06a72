"""What the columns of `divider-dimension` are called and mean."""

from __future__ import annotations

from geofractal.estimators.ladder_table import judged_columns, ladder_columns
from geofractal.measure import PLANES, Column

MANDELBROT = "Mandelbrot 1967, Science 156:636-638"

DIMENSION_COLUMNS = (
    Column(
        "divider_dim",
        "div_dim",
        "number",
        "",
        "divider dimension between the first and the last ruler used; null where there are too few scales",
        "D = 1 - slope of ln L(r) on ln r",
        MANDELBROT,
    ),
    *judged_columns(
        "divider",
        "div",
        "ruler",
        "ruler",
        scatter="starts, directions, placement of the rulers",
        fitted="ln L",
        source="set by simulation on curves of exactly known dimension; `geofractal calibrate` repeats it",
    ),
    Column(
        "divider_content",
        "div_conten",
        "number",
        "m^D",
        "prefactor that states a length at any ruler of the ladder; contents of different dimension do not"
        " compare, and it is no estimate of a Hausdorff measure",
        "L(r) = content x r^(1 - D)",
    ),
    Column("divider_log10_content", "div_logcon", "number", "", "decimal logarithm of divider_content"),
    Column(
        "divider_left_out_km",
        "div_out_km",
        "number",
        "km",
        "length of the parts that are too short for the last ruler used",
    ),
)

PLANE_COLUMNS = (
    Column(
        "divider_distortion_percent",
        "div_distor",
        "number",
        "percent",
        "worst relative distance error of the plane on which the feature was walked",
    ),
    Column("divider_plane", "div_plane", "text", "", "on what the feature was walked: " + ", ".join(PLANES)),
)


LADDER_COLUMNS = ladder_columns(
    Column("ruler_m", "ruler_m", "number", "m", "the ruler"),
    Column(
        "length_km",
        "length_km",
        "number",
        "km",
        "length walked with the ruler; null where no part of the line is long enough for it",
        "L(r) = r n + d: n whole steps of r, last straight distance d; mean of the walks",
        MANDELBROT,
    ),
    Column(
        "length_spread_km",
        "lensprd_km",
        "number",
        "km",
        "standard error of length_km from starts and directions, as of two walks; other lines of the same"
        " kind differ by more",
    ),
    Column("steps", "steps", "number", "", "whole steps, mean of the walks"),
    fitted=Column(
        "length_fit_km",
        "lenfit_km",
        "number",
        "km",
        "length that the fitted line gives at the ruler, effects of the ladder's ends taken out; null at"
        " rungs that were not used",
        "content x r^(1 - D)",
    ),
)


def length_columns(ruler: str, index: int) -> tuple[Column, Column, Column, Column]:
    """Return the columns of the length at a stated ruler: walked, fitted, and the fit's interval.

    Parameters
    ----------
    ruler : metres as plain text: 1000, 2500.5
    index : place among the stated rulers, which makes short names unique where the ruler is too long
    """
    tag = ruler.replace(".", "_")
    short = f"{tag}m" if len(tag) <= 6 else f"_{index}"
    name = f"length_at_{tag}m_ruler"
    fit = "content x r^(1 - D)"
    return (
        Column(
            f"{name}_km",
            f"len{short}",
            "number",
            "km",
            f"length walked with a ruler of {ruler} m; null below the source's detail",
            "L(r) = r n + d: n whole steps of r, last straight distance d; mean of both directions, rings"
            " also of 16 evenly spaced starts",
            MANDELBROT,
        ),
        Column(
            f"{name}_fit_km",
            f"fit{short}",
            "number",
            "km",
            f"length that the fitted line gives at a ruler of {ruler} m; null outside the ladder",
            fit,
        ),
        Column(
            f"{name}_low_km",
            f"lo_{short}".replace("__", "_"),
            "number",
            "km",
            "lower end of the 95 % interval in which one more walk of this line at that ruler is expected",
        ),
        Column(
            f"{name}_high_km",
            f"hi_{short}".replace("__", "_"),
            "number",
            "km",
            "upper end of the same interval",
        ),
    )
