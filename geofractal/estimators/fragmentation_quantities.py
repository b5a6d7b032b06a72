"""What the table of fragmentation holds: each figure with its unit, meaning, formula and source."""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import TYPE_CHECKING

from geofractal.estimators.box_columns import HENTSCHEL_PROCACCIA
from geofractal.estimators.divider import plain_number
from geofractal.measure import Quantity

if TYPE_CHECKING:
    from geofractal.estimators.fragmentation import FragmentationOptions

CUT, ACROSS = "cut at the border", "across the border"
CHANGES, ALL_EDGES = "class changes", "with zone and map borders"
BOUNDS, OPEN = "map edge bounds", "map edge is open"

JAEGER = "Jaeger 2000, Landscape Ecology 15:115-130"
MOSER = "Moser et al. 2007, Landscape Ecology 22"
SAURA = "Saura & Pascual-Hortal 2007; Saura et al. 2011"
PLOTNICK = "Allain & Cloitre 1991; Plotnick et al. 1993, Landscape Ecology 8:201-211"

_SIZE = "patches cut at the zone's border, of at least the smallest size"

FIXED = (
    Quantity(
        "area",
        "area",
        "amount",
        "km2",
        "area of the class; of all covers: area with data; of barrier: cells that wide barriers take",
    ),
    Quantity(
        "area_not_covered",
        "nodata",
        "amount",
        "km2",
        "area of the zone without data, off the map included",
        together=True,
    ),
    Quantity("share", "share", "amount", "percent", "area of the class over all area with data"),
    Quantity("patches", "patches", "amount", "", f"number of {_SIZE}", border_rules=(CUT,)),
    Quantity(
        "patch_density", "pat_den", "amount", "1/km2", "patches over the area with data", border_rules=(CUT,)
    ),
    Quantity("mean_patch", "mean", "amount", "km2", f"mean area of {_SIZE}", border_rules=(CUT,)),
    Quantity("median_patch", "median", "amount", "km2", f"median area of {_SIZE}", border_rules=(CUT,)),
    Quantity(
        "weighted_mean_patch",
        "wt_mean",
        "amount",
        "km2",
        "mean area of the patch that a place in the class lies in",
        "sum A_i^2 / sum A_i",
        border_rules=(CUT,),
    ),
    Quantity(
        "largest_patch", "largest", "amount", "km2", f"area of the largest of {_SIZE}", border_rules=(CUT,)
    ),
    Quantity(
        "edge_length",
        "edge",
        "border",
        "km",
        "cell edges to other classes, half of those on a zone border; or all edges of its patches, with "
        "those to the map's edge, to cells without data, to other zones and to barriers",
        border_rules=(CHANGES, ALL_EDGES),
    ),
    Quantity(
        "edge_density",
        "edg_den",
        "border",
        "km/km2",
        "edge length over the area with data",
        border_rules=(CHANGES, ALL_EDGES),
    ),
    Quantity(
        "coherence",
        "coheren",
        "connectedness",
        "",
        "chance that two places of the zone lie in one patch",
        "sum (A_i / A_t)^2; A_t: area with data, other classes included",
        JAEGER,
        border_rules=(CUT,),
    ),
    Quantity(
        "division",
        "divisn",
        "connectedness",
        "",
        "chance that they do not",
        "1 - coherence",
        JAEGER,
        border_rules=(CUT,),
    ),
    Quantity(
        "splitting",
        "splittg",
        "connectedness",
        "",
        "number of equal patches of the same coherence",
        "A_t / effective mesh size",
        JAEGER,
        border_rules=(CUT,),
    ),
    Quantity(
        "effective_mesh_size",
        "mesh",
        "connectedness",
        "km2",
        "area that can be reached from a place chosen at random; across the border, patches count whole and "
        "those that reach the edge of the data make it a lower bound",
        "cut: sum A_i^2 / A_t; across: sum inside_i complete_i / A_t",
        f"{JAEGER}; {MOSER}",
        border_rules=(CUT, ACROSS),
    ),
    Quantity(
        "effective_mesh_density",
        "meshden",
        "connectedness",
        "1/1000km2",
        "effective meshes in 1000 km2",
        "1000 / effective mesh size",
        JAEGER,
        border_rules=(CUT, ACROSS),
    ),
)

NEAREST = tuple(
    Quantity(
        f"{word}_nearest_distance",
        short,
        "separation",
        "m",
        f"{word} distance of a patch to the nearest other one of its class, cell edge to cell edge, across "
        "zone borders; of patches with a part in the zone",
    )
    for word, short in (("mean", "dist_mn"), ("median", "dist_md"))
)

CONNECTED = (
    Quantity(
        "equivalent_connected_area",
        "connect",
        "connectedness",
        "km2",
        "one patch of this area would connect as much; paths may leave the zone",
        "sqrt(sum_i sum_j a_i a_j p*_ij), p = 1/2 at the median dispersal distance",
        SAURA,
        interval=True,
    ),
    Quantity(
        "own_area_share", "con_own", "connectedness", "percent", "of the sum under the root: i = j", "", SAURA
    ),
    Quantity(
        "direct_link_share", "con_dir", "connectedness", "percent", "of that sum: direct links", "", SAURA
    ),
    Quantity(
        "stepping_stone_share",
        "con_stp",
        "connectedness",
        "percent",
        "of that sum: what paths over other patches add",
        "",
        SAURA,
    ),
)


def box_quantities(*, edge: bool) -> tuple[Quantity, ...]:
    """Return the figures of box counting of a class, or of its edge."""
    what = "the cells of the class"
    if edge:
        what = "the cells of the class that another class touches by a side, or of its edge to other polygons"
    name, short = ("edge_box", "ebx") if edge else ("box", "box")
    scale = partial(Quantity, group="scaling")
    found = (
        scale(
            f"{name}_dim",
            f"{short}_dim",
            unit="",
            meaning=f"box dimension of {what}, between the first and the last box size used; under "
            "two-regime and curved the interval holds both ends of that range",
            formula="D = -slope of ln N(s) on ln s, plus half of what maps of known dimension lack",
            interval=True,
        ),
        scale(
            f"{name}_verdict",
            f"{short}verd",
            unit="",
            meaning="whether a dimension exists: power-law; two-regime (one on each side of a break); "
            "curved; smooth (nothing beyond dimension 1); too-few-scales (under half a decade of box sizes)",
            formula="a hinge and a cubic against the straight line on logarithmic axes",
            kind="text",
        ),
        scale(f"{name}_size_min", f"{short}_min", unit="m", meaning="first box size that was used"),
        scale(f"{name}_size_max", f"{short}_max", unit="m", meaning="last box size that was used"),
        scale(
            f"{name}_break",
            f"{short}_brk",
            unit="m",
            meaning="box size at which two regimes meet",
            interval=True,
        ),
        scale(
            f"{name}_fine_dim",
            f"{short}fine",
            unit="",
            meaning="dimension below the break; under curved, of the fine sizes",
        ),
        scale(
            f"{name}_coarse_dim",
            f"{short}coar",
            unit="",
            meaning="dimension above the break; under curved, of the coarse sizes",
        ),
    )
    return found if edge else (*found, *_weighted_boxes())


def _weighted_boxes() -> tuple[Quantity, ...]:
    return tuple(
        Quantity(
            f"box_{word}_dim",
            short,
            "scaling",
            "",
            f"{word} dimension (q = {q}): as box_dim, each box weighted by the cells in it; the verdict is "
            "that of box_dim, and the interval was tried on maps that are evenly filled only",
            f"as box_dim, with {formula} for N, p the share of the cells in each box",
            HENTSCHEL_PROCACCIA,
            interval=True,
        )
        for word, short, q, formula in (
            ("information", "boxinfo", 1, "exp(-sum p ln p)"),
            ("correlation", "boxcorr", 2, "1 / sum p^2"),
        )
    )


def named(word: str, metres: float, what: str) -> str:
    """Return the name of a quantity at a stated length, such as ``interior_area_at_100m_depth``."""
    return f"{word}_at_{plain_number(metres).replace('.', '_')}m_{what}"


def coarse(size: float) -> Quantity:
    """Return the edge density at a stated cell size."""
    return Quantity(
        named("edge_density", size, "cells"),
        f"ed{plain_number(size)}"[:7],
        "border",
        "km/km2",
        "edge to other classes that a map of this cell size shows, over the area with data; compares maps "
        "whose cells are smaller",
        "changes of class between cells this far apart, of all that there are",
        interval=True,
        border_rules=(CHANGES,),
    )


def interior(depth: float) -> tuple[Quantity, Quantity]:
    """Return interior area at a depth, and its share of the class."""
    meaning = "cells whose centre is farther than the depth from the nearest edge of another class"
    return (
        Quantity(
            named("interior_area", depth, "depth"),
            f"in{plain_number(depth)}"[:7],
            "interior",
            "km2",
            meaning,
        ),
        Quantity(
            named("interior_share", depth, "depth"),
            f"is{plain_number(depth)}"[:7],
            "interior",
            "percent",
            "interior area over the area of the class",
        ),
    )


def lacunarity(size: float) -> tuple[Quantity, Quantity]:
    """Return lacunarity in boxes of a side, and the number of boxes."""
    return (
        Quantity(
            named("lacunarity", size, "boxes"),
            f"la{plain_number(size)}"[:7],
            "connectedness",
            "",
            "how unevenly the class fills boxes wholly inside the area with data; 1 where evenly",
            "E[M^2] / E[M]^2",
            PLOTNICK,
            border_rules=(CUT,),
        ),
        Quantity(
            named("lacunarity_boxes", size, "boxes"),
            f"ln{plain_number(size)}"[:7],
            "connectedness",
            "",
            "number of boxes wholly inside the area with data",
            border_rules=(CUT,),
        ),
    )


def quantities_of(options: FragmentationOptions) -> tuple[Quantity, ...]:
    """Return all that the table holds under some options."""
    found = list(FIXED)
    found += [coarse(size) for size in options.edge_cell_sizes_m]
    rules = (BOUNDS if options.map_edge_bounds_interior else OPEN,)
    found += [
        replace(one, border_rules=rules) for depth in options.interior_depths_m for one in interior(depth)
    ]
    found += NEAREST if options.distances else ()
    found += [one for size in options.lacunarity_boxes_m for one in lacunarity(size)]
    found += CONNECTED if options.dispersal_m is not None else ()
    found += [one for edge in (False, True) if options.box_dimension for one in box_quantities(edge=edge)]
    return tuple(found)
