"""Area-perimeter dimension of the patches of a class: P = c A^(D/2).

D equals the dimension of the patches' boundaries only where the areas themselves scale with dimension 2
(Cheng 1995, Math. Geol. 27). Both lines through the logarithms are given, as the literature is divided:
least squares of ln P on ln A, and the reduced major axis (Warton et al. 2006, Biol. Rev. 81:259-291).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError
from geofractal.estimators.patch_groups import patch_groups

if TYPE_CHECKING:
    import pandas as pd

Floats = NDArray[np.float64]

SMALLEST_CELLS = 100
"""Patches below this many cells are left out: on a grid the perimeter of a small patch is bound to its
cells. From this size on the dimension is off by at most 0.025 on discs, Koch islands and percolation
clusters; at 10 cells by up to 0.14. See ``tests/benchmarks/area_perimeter.py``."""

CELL_BIAS = 0.8
"""The interval is widened by this over (cells of the smallest patch)^(3/4): what the grid still does to the
dimension on the worst of those families, percolation clusters."""

LEAST_PATCHES = 30
LEAST_DECADES = 1.0  # of area
LEAST_BEND = 0.1  # difference of dimension below which two regimes or a curve do not matter
EVIDENCE = 10.0  # difference of BIC: very strong, Kass & Raftery 1995
SIDE = 30  # patches on either side of a break, at least
SIDE_DECADES = 0.5  # and decades of area
BREAKS = 200  # places tried for a break
SMOOTH = 1.02
COLLAPSED = 0.95  # on one side of a break


@dataclass(frozen=True, slots=True)
class Line:
    """A line y = a + b x with its residual sum of squares and the robust standard error of b."""

    a: float
    b: float
    squares: float
    error: float


@dataclass(frozen=True, slots=True)
class Break:
    """Two lines that meet: slopes below and above x = at, the break's 95 % interval, squares left."""

    at: float
    low: float
    high: float
    below: float
    above: float
    squares: float


def area_perimeter_dimension(
    patches: pd.DataFrame,
    *,
    by: Sequence[str] = ("cover",),
    smallest_cells: int = SMALLEST_CELLS,
    smallest_area_m2: float = 0.0,
    edge_patches: bool = False,
    area: str = "area_m2",
    smaller: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """Return the area-perimeter dimension of each class.

    Parameters
    ----------
    patches : table as of `geofractal.raster_patches` or `geofractal.polygon_patches`
    by : columns that make a group; with ``zone`` among them, patches across zone borders or in no zone
        are left out, and always those across zone borders whose perimeter is not known
    smallest_cells : patches of fewer cells are left out, where the table has cells
    smallest_area_m2 : smaller patches are left out; a common size for sources that differ in scale
    edge_patches : whether patches that touch the map's edge are used
    area : column of areas; ``filled_area_m2`` counts holes as part of the patch
    smaller : further patches that are too small and were only counted: the columns of `by`, and ``patches``,
        their number

    Returns
    -------
    DataFrame
        one row a group: the columns of `by`, then ``area_perimeter_dim`` (2 x slope of ln P on ln A)
        with its 95 % interval ``_low``, ``_high`` for the process that made the patches,
        ``area_perimeter_dim_reduced`` (2 sd ln P / sd ln A), ``area_perimeter_verdict``,
        ``area_perimeter_prefactor`` (c, in m^(1-D)), ``area_perimeter_break_m2`` with interval and
        ``area_perimeter_dim_below``, ``area_perimeter_dim_above`` where two regimes were found,
        ``area_min_m2`` and ``area_max_m2`` of the patches used, ``patches_used``,
        ``patches_left_out_small``, ``patches_left_out_edge``, ``patches_left_out_zone``,
        ``area_perimeter_note``.

    Notes
    -----
    Verdicts: ``power-law``, ``two-regime`` (Krummel et al. 1987, Oikos 48:321-324), ``curved``, ``smooth``
    (nothing beyond dimension 1) and ``too-few-scales`` (fewer than 30 patches, or less than a decade of
    area: no dimension). Dimensions below 1 cannot be: patches whose outline has collapsed give them, and
    get no dimension and no verdict but a note.
    """
    import pandas as pd

    missing = [name for name in (*by, area, "perimeter_m", "touches_edge") if name not in patches]
    if missing:
        raise ConfigError(
            f"The patches lack the columns {', '.join(missing)}; they have {', '.join(patches)}."
        )
    small = (patches[area] < smallest_area_m2) | (patches["perimeter_m"] == 0)
    if "cells" in patches:
        small |= patches["cells"] < smallest_cells
    rows = []
    for key, group, too_small in patch_groups(patches, by, small, smaller):
        edge = group["touches_edge"] & (not edge_patches)
        astray = (group["perimeter_m"].isna() | ("zone" in by and group["zone"] < 0)) & ~edge
        used = group[~(edge | astray)]
        cells = int(used["cells"].min()) if "cells" in used and len(used) else None
        figures = fit_patches(used[area].to_numpy(float), used["perimeter_m"].to_numpy(float), cells)
        counts = {"small": too_small, "edge": int(edge.sum()), "zone": int(astray.sum())}
        left_out = {f"patches_left_out_{why}": number for why, number in counts.items()}
        note = figures.pop("area_perimeter_note")
        rows.append(dict(zip(by, key, strict=True)) | figures | left_out | {"area_perimeter_note": note})
    return pd.DataFrame(rows, columns=None if rows else [*by, *fit_patches(np.empty(0), np.empty(0), None)])


def area_perimeter_residual(
    patches: pd.DataFrame, dimensions: pd.DataFrame, *, by: Sequence[str] = ("cover",), area: str = "area_m2"
) -> Floats:
    """Return, patch by patch, ln P less what the line of its class says; NaN where that has no dimension.

    It is NaN, too, of a patch without perimeter: one that touches nothing but the map's edge, left out.
    A patch has no dimension of its own: it would depend on the unit of length. Positive values are
    patches with more edge than the class's patches of that size have.
    """
    keys = list(by)
    lines = dimensions[[*keys, "area_perimeter_dim", "area_perimeter_prefactor"]]
    joined = patches[[*keys, area, "perimeter_m"]].astype({"cover": str} if "cover" in keys else {})
    joined = joined.merge(lines.astype({"cover": str} if "cover" in keys else {}), on=keys, how="left")
    expected = joined["area_perimeter_prefactor"] * joined[area] ** (joined["area_perimeter_dim"] / 2)
    perimeter = joined["perimeter_m"].where(joined["perimeter_m"] > 0)
    return np.asarray(np.log(perimeter / expected), np.float64)


def fit_patches(area: Floats, perimeter: Floats, smallest_cells: int | None) -> dict[str, Any]:
    """Return the figures of one group of patches, in any order, all of them used.

    Examples
    --------
    No patches, or too few of them, give no dimension.

    >>> fit_patches(np.empty(0), np.empty(0), None)["area_perimeter_verdict"]
    'too-few-scales'
    """
    order = np.lexsort((perimeter, area))
    x, y = np.log(area[order]), np.log(perimeter[order])
    figures: dict[str, Any] = dict.fromkeys(_NUMBERS, np.nan) | {"area_perimeter_verdict": None}
    figures |= {"patches_used": len(x), "area_perimeter_note": None}
    if len(x):
        figures |= {"area_min_m2": float(area.min()), "area_max_m2": float(area.max())}
    if len(x) < LEAST_PATCHES or x[-1] - x[0] < LEAST_DECADES * np.log(10):
        decades = (x[-1] - x[0]) / np.log(10) if len(x) else 0.0
        needed = f"at least {LEAST_PATCHES} over {LEAST_DECADES:g}"
        note = f"{len(x)} patches over {decades:.1f} decades of area; {needed} are needed"
        return figures | {"area_perimeter_verdict": "too-few-scales", "area_perimeter_note": note}
    line = fit_line(x, y)
    half = _student(len(x) - 2) * 2 * line.error + _cell_bias(smallest_cells)
    dim = 2 * line.b
    if dim + half < 1 - 1e-9:
        note = f"fitted dimension {dim:.2f} is below 1: outlines have collapsed; use a source of finer scale"
        return figures | {"area_perimeter_note": note}
    verdict, bend = judge(x, y, line, dim - half)
    figures |= {
        "area_perimeter_dim": _held(dim),
        "area_perimeter_dim_low": _held(dim - half),
        "area_perimeter_dim_high": _held(dim + half),
        "area_perimeter_dim_reduced": _held(2 * float(np.std(y) / np.std(x))),
        "area_perimeter_prefactor": float(np.exp(np.mean(y) - _held(dim) / 2 * np.mean(x))),
        "area_perimeter_verdict": verdict,
    }
    if bend is not None:
        figures |= {
            "area_perimeter_break_m2": float(np.exp(bend.at)),
            "area_perimeter_break_low_m2": float(np.exp(bend.low)),
            "area_perimeter_break_high_m2": float(np.exp(bend.high)),
            "area_perimeter_dim_below": _side(2 * bend.below),
            "area_perimeter_dim_above": _side(2 * bend.above),
        }
        if 2 * min(bend.below, bend.above) < COLLAPSED:
            figures["area_perimeter_note"] = (
                "on one side of the break outlines have collapsed: no dimension there"
            )
    return figures


_NUMBERS = (
    "area_perimeter_dim",
    "area_perimeter_dim_low",
    "area_perimeter_dim_high",
    "area_perimeter_dim_reduced",
    "area_perimeter_prefactor",
    "area_perimeter_break_m2",
    "area_perimeter_break_low_m2",
    "area_perimeter_break_high_m2",
    "area_perimeter_dim_below",
    "area_perimeter_dim_above",
    "area_min_m2",
    "area_max_m2",
)


def _side(dimension: float) -> float:
    """Return the dimension on one side of a break; NaN where its patches have collapsed."""
    return np.nan if dimension < COLLAPSED else _held(dimension)


def _held(dimension: float) -> float:
    """Return a dimension held between those of a smooth line and of the plane."""
    return float(min(max(dimension, 1.0), 2.0))


def _cell_bias(smallest_cells: int | None) -> float:
    return 0.0 if smallest_cells is None else CELL_BIAS / float(max(smallest_cells, 1)) ** 0.75


def _student(freedom: int) -> float:
    from scipy.special import stdtrit

    return float(stdtrit(freedom, 0.975))


def fit_line(x: Floats, y: Floats) -> Line:
    """Return the least-squares line, its slope's error by the jackknife-like HC3 (MacKinnon & White 1985)."""
    dx = x - x.mean()
    spread = float((dx**2).sum())
    b = float((dx * y).sum() / spread)
    a = float(y.mean() - b * x.mean())
    residual = y - a - b * x
    leverage = 1 / len(x) + dx**2 / spread
    error = float(np.sqrt((dx**2 * (residual / np.maximum(1 - leverage, 1e-6)) ** 2).sum())) / spread
    return Line(a, b, float((residual**2).sum()), error)


def judge(x: Floats, y: Floats, line: Line, low: float) -> tuple[str, Break | None]:
    """Return the verdict on sorted x, and the break where there are two regimes."""
    n = len(x)

    def bic(squares: float, parameters: int) -> float:
        return n * float(np.log(max(squares, 1e-300) / n)) + parameters * float(np.log(n))

    straight = bic(line.squares, 2)
    bend = fit_break(x, y)
    curve = np.polynomial.Polynomial.fit(x, y, 2)
    squares = float(((y - curve(x)) ** 2).sum())
    ends = curve.deriv()(np.quantile(x, [0.05, 0.95]))
    bends = bend is not None and 2 * abs(bend.above - bend.below) > LEAST_BEND and bend.squares <= squares
    if bend is not None and bends and straight - bic(bend.squares, 4) > EVIDENCE:
        return "two-regime", bend
    if straight - bic(squares, 3) > EVIDENCE and 2 * abs(ends[1] - ends[0]) > LEAST_BEND:
        return "curved", None
    return ("smooth" if low <= 1 and 2 * line.b <= SMOOTH else "power-law"), None


def fit_break(x: Floats, y: Floats) -> Break | None:
    """Return the best pair of lines that meet, x sorted; None where a side would be too small.

    The break is searched over the data's own quantiles; its interval is that of the profile of squares.
    """
    n = len(x)
    if n < 2 * SIDE + 2:
        return None
    places = np.unique(x[np.linspace(SIDE, n - 1 - SIDE, min(BREAKS, n - 2 * SIDE)).astype(int)])
    reach = SIDE_DECADES * np.log(10)
    places = places[(places >= x[0] + reach) & (places <= x[-1] - reach)]
    if not len(places):
        return None
    slopes, squares = _hinges(x, y, places)
    best = int(np.argmin(squares))
    allowed = squares[best] * (1 + _student(n - 4) ** 2 / (n - 4))
    inside = places[squares <= allowed]
    below, change = slopes[best].tolist()
    ends = float(inside[0]), float(inside[-1])
    return Break(float(places[best]), *ends, below, below + change, float(squares[best]))


def _hinges(x: Floats, y: Floats, places: Floats) -> tuple[Floats, Floats]:
    """Return, for lines that meet at each place, the slope below, what is added above, and squares left.

    Squares are infinite where there are no such lines.
    """
    normal, right = np.empty((len(places), 3, 3)), np.empty((len(places), 3, 1))
    for i, design in enumerate(_designs(x, places)):
        normal[i], right[i, :, 0] = design.T @ design, design.T @ y
    beta = _solved(normal, right)[:, :, 0]
    squares = np.array(
        [((y - design @ line) ** 2).sum() for design, line in zip(_designs(x, places), beta, strict=True)]
    )
    return beta[:, 1:], np.where(np.isfinite(squares), squares, np.inf)


def _designs(x: Floats, places: Floats) -> Iterator[Floats]:
    """Yield 1, x - place and what of that is positive, as columns of one array that is filled anew."""
    design = np.ones((len(x), 3))
    for place in places:
        np.subtract(x, place, out=design[:, 1])
        np.maximum(design[:, 1], 0, out=design[:, 2])
        yield design


def _solved(normal: Floats, right: Floats) -> Floats:
    """Return the solutions of many systems; NaN where there is none."""
    try:
        return np.asarray(np.linalg.solve(normal, right))
    except np.linalg.LinAlgError:
        if len(normal) == 1:
            return np.full_like(right, np.nan)
        return np.concatenate([_solved(normal[i : i + 1], right[i : i + 1]) for i in range(len(normal))])
