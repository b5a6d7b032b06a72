"""What the measures of patches tell of a class, and where it stands in the estimators' tables."""

from __future__ import annotations

from typing import Literal, NamedTuple

from geofractal.measure import Quantity


class Figure(NamedTuple):
    """A quantity, the columns of the estimator's table that it stands in, and why it may be missing."""

    quantity: Quantity
    estimate: str
    low: str | None = None
    high: str | None = None
    missing: str = ""


def _quantity(
    name: str,
    short: str,
    unit: str,
    meaning: str,
    formula: str = "",
    *,
    kind: Literal["number", "text"] = "number",
    interval: bool = False,
) -> Quantity:
    return Quantity(name, short, "scaling", unit, meaning, formula, kind=kind, interval=interval)


_ONE_REGIME = "no break was found"
AREA_PERIMETER = (
    Figure(
        _quantity(
            "area_perimeter_dim",
            "apdim",
            "",
            "area-perimeter dimension by least squares of ln P on ln A; that of the patches' outlines only "
            "where areas scale with dimension 2",
            "D = 2 x slope of ln P on ln A",
            interval=True,
        ),
        "area_perimeter_dim",
        "area_perimeter_dim_low",
        "area_perimeter_dim_high",
    ),
    Figure(
        _quantity(
            "area_perimeter_dim_reduced",
            "apdimr",
            "",
            "area-perimeter dimension by the reduced major axis, which the literature gives beside the other",
            "D = 2 sd(ln P) / sd(ln A)",
        ),
        "area_perimeter_dim_reduced",
    ),
    Figure(
        _quantity(
            "area_perimeter_verdict",
            "apverd",
            "",
            "whether one power law describes the patches: power-law, two-regime, curved, smooth or "
            "too-few-scales",
            kind="text",
        ),
        "area_perimeter_verdict",
    ),
    Figure(
        _quantity(
            "area_perimeter_prefactor",
            "appref",
            "m^(1-D)",
            "perimeter in metres of a patch of one square metre on the fitted line",
            "c in P = c A^(D/2)",
        ),
        "area_perimeter_prefactor",
    ),
    Figure(
        _quantity(
            "area_perimeter_break",
            "apbrk",
            "m2",
            "patch area at which one power law gives way to another",
            "best pair of lines that meet",
            interval=True,
        ),
        "area_perimeter_break_m2",
        "area_perimeter_break_low_m2",
        "area_perimeter_break_high_m2",
        _ONE_REGIME,
    ),
    Figure(
        _quantity("area_perimeter_dim_below", "apbelow", "", "dimension of patches smaller than the break"),
        "area_perimeter_dim_below",
        missing=_ONE_REGIME,
    ),
    Figure(
        _quantity("area_perimeter_dim_above", "apabove", "", "dimension of patches larger than the break"),
        "area_perimeter_dim_above",
        missing=_ONE_REGIME,
    ),
    Figure(
        _quantity("area_perimeter_smallest_patch", "apmin", "m2", "smallest patch that was used"),
        "area_min_m2",
    ),
    Figure(
        _quantity("area_perimeter_largest_patch", "apmax", "m2", "largest patch that was used"), "area_max_m2"
    ),
    Figure(_quantity("area_perimeter_patches_used", "apused", "", "patches that were used"), "patches_used"),
    Figure(
        _quantity(
            "area_perimeter_patches_too_small", "apsmall", "", "patches left out because they are small"
        ),
        "patches_left_out_small",
    ),
    Figure(
        _quantity(
            "area_perimeter_patches_at_edge",
            "apedge",
            "",
            "patches left out because they touch the map's edge or cells without data",
        ),
        "patches_left_out_edge",
    ),
)


NUMBER_AREA = (
    Figure(
        _quantity(
            "number_area_exponent",
            "naexp",
            "",
            "exponent of the number of patches over their area (Korčák's law), above the cut; not half the "
            "area-perimeter dimension in general",
            "K in N(area >= a) proportional to a^-K",
            interval=True,
        ),
        "number_area_exponent",
        "number_area_exponent_low",
        "number_area_exponent_high",
    ),
    Figure(
        _quantity(
            "number_area_verdict",
            "naverd",
            "",
            "whether a power law describes the patches above the cut: power-law, curved or too-few-scales",
            kind="text",
        ),
        "number_area_verdict",
    ),
    Figure(
        _quantity(
            "number_area_fit_share",
            "nafit",
            "",
            "share of simulated power laws that fit their own data worse; below 0.1 the law is ruled out",
        ),
        "number_area_fit_p",
    ),
    Figure(
        _quantity(
            "number_area_better",
            "nabett",
            "",
            "law that describes the patches above the cut better than a power law: lognormal or cut-off",
            kind="text",
        ),
        "number_area_better",
    ),
    Figure(
        _quantity("number_area_cut", "nacut", "m2", "smallest patch of the tail, chosen from the data"),
        "number_area_cut_m2",
    ),
    Figure(_quantity("number_area_largest_patch", "namax", "m2", "largest patch"), "number_area_max_m2"),
    Figure(
        _quantity("number_area_patches_used", "naused", "", "patches above the cut, which were used"),
        "patches_used",
    ),
    Figure(
        _quantity("number_area_patches_below_cut", "nabelow", "", "patches below the cut"),
        "patches_below_cut",
    ),
    Figure(
        _quantity("number_area_patches_too_small", "nasmall", "", "patches left out because they are small"),
        "patches_left_out_small",
    ),
    Figure(
        _quantity(
            "number_area_patches_at_edge",
            "naedge",
            "",
            "patches left out because they touch the map's edge or cells without data",
        ),
        "patches_left_out_edge",
    ),
)
