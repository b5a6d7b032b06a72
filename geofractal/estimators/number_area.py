"""Number-area exponent of the patches of a class (Korčák's law): N(area >= a) proportional to a^-K.

By maximum likelihood above a cut chosen from the data, with goodness of fit by simulation and tested against
a lognormal and a power law cut off exponentially: Clauset, Shalizi & Newman 2009, SIAM Rev. 51:661-703.
Never a line through a cumulative plot: its points are sums of each other.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError
from geofractal.estimators.patch_groups import patch_groups
from geofractal.kernels.tails import best_cut

if TYPE_CHECKING:
    import pandas as pd

Floats = NDArray[np.float64]

LEAST_TAIL = 50
"""Patches above the cut below which there is no exponent: the smallest sample that the method's authors
advise for the fit itself (from memory)."""

LEAST_DECADES = 1.0
MOST_PATCHES = 10_000
"""Of more patches only so many, the largest, are looked at: the tail that an exponent speaks of lies among
them, and its standard error is at most a few percent there."""

CUTS = 100  # places tried for the cut, quantiles of the data
SIMULATIONS = 200  # p to within about 0.03
PLAUSIBLE = 0.1  # goodness of fit from which a power law is not ruled out
SURE = 0.05  # of a better alternative
SEED = 20_090_601


@dataclass(frozen=True, slots=True)
class Tail:
    """A power law above a cut.

    Attributes
    ----------
    cut : smallest area of the tail
    exponent : K
    distance : largest difference between the law's and the data's shares (Kolmogorov-Smirnov)
    count : patches in the tail
    """

    cut: float
    exponent: float
    distance: float
    count: int


def number_area_exponent(
    patches: pd.DataFrame,
    *,
    by: Sequence[str] = ("cover",),
    smallest_area_m2: float = 0.0,
    edge_patches: bool = False,
    area: str = "area_m2",
    smaller: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """Return the number-area exponent of each class.

    Parameters
    ----------
    patches : table as of `geofractal.raster_patches` or `geofractal.polygon_patches`
    by : columns that make a group
    smallest_area_m2 : smaller patches are left out before the cut is chosen
    edge_patches : whether patches that touch the map's edge are used; large ones do so more often
    area : column of areas
    smaller : further patches that are too small and were only counted: the columns of `by`, and ``patches``,
        their number

    Returns
    -------
    DataFrame
        one row a group: the columns of `by`, then ``number_area_exponent`` (K) with its 95 % interval
        ``_low``, ``_high`` (the cut chosen anew in every resample), ``number_area_cut_m2``,
        ``number_area_max_m2``, ``number_area_fit_p`` (share of simulated laws that fit worse; below 0.1
        the law is ruled out), ``number_area_verdict``, ``number_area_better`` (the alternative that fits
        better, said wrongly in at most 5 % of cases), ``patches_used`` (above the cut),
        ``patches_below_cut``, ``patches_left_out_small``, ``patches_left_out_edge``.

    Notes
    -----
    Of a group of more than 10,000 patches the largest 10,000 are looked at.
    Verdicts: ``power-law``, ``curved`` (ruled out, or an alternative is better; the exponent then only
    describes the tail) and ``too-few-scales`` (fewer than 50 patches or less than a decade above the cut:
    no exponent). K is not half the area-perimeter dimension in general. Large patches touch the map's edge
    more often than small ones: without the patches that do, K is somewhat too large, with them too small (by
    about 0.05 each way on percolation clusters in maps of 1,500 cells a side).
    """
    import pandas as pd

    missing = [name for name in (*by, area, "touches_edge") if name not in patches]
    if missing:
        raise ConfigError(
            f"The patches lack the columns {', '.join(missing)}; they have {', '.join(patches)}."
        )
    rows = []
    for key, group, too_small in patch_groups(patches, by, patches[area] < smallest_area_m2, smaller):
        edge = group["touches_edge"] & (not edge_patches)
        figures = fit_areas(group.loc[~edge, area].to_numpy(float))
        left_out = {"patches_left_out_small": too_small, "patches_left_out_edge": int(edge.sum())}
        rows.append(dict(zip(by, key, strict=True)) | figures | left_out)
    return pd.DataFrame(rows, columns=None if rows else [*by, *fit_areas(np.empty(0))])


def fit_areas(areas: Floats) -> dict[str, Any]:
    """Return the figures of one group of areas, in any order.

    Examples
    --------
    >>> fit_areas(np.ones(10))["number_area_verdict"]
    'too-few-scales'
    """
    x = np.sort(areas[areas > 0])
    figures: dict[str, Any] = dict.fromkeys(_NUMBERS, np.nan) | {
        "number_area_verdict": "too-few-scales",
        "number_area_better": None,
        "patches_used": 0,
        "patches_below_cut": len(x),
    }
    below, x = len(x) - min(len(x), MOST_PATCHES), x[-MOST_PATCHES:]
    tail = fit_tail(x)
    if tail is None:
        return figures
    rng = np.random.default_rng(SEED)
    above = x[len(x) - tail.count :]
    better = better_alternative(above, tail)
    p = goodness(x, tail, rng)
    low, high = exponent_interval(x, tail, rng)
    good = p >= PLAUSIBLE and better is None
    return figures | {
        "number_area_exponent": tail.exponent,
        "number_area_exponent_low": low,
        "number_area_exponent_high": high,
        "number_area_cut_m2": tail.cut,
        "number_area_max_m2": float(x[-1]),
        "number_area_fit_p": p,
        "number_area_verdict": "power-law" if good else "curved",
        "number_area_better": better,
        "patches_used": tail.count,
        "patches_below_cut": below + len(x) - tail.count,
    }


_NUMBERS = (
    "number_area_exponent",
    "number_area_exponent_low",
    "number_area_exponent_high",
    "number_area_cut_m2",
    "number_area_max_m2",
    "number_area_fit_p",
)


def fit_tail(x: Floats) -> Tail | None:
    """Return the power law above the cut that lies nearest to sorted data; None where too little is left."""
    if len(x) < LEAST_TAIL:
        return None
    places = np.unique(np.linspace(0, len(x) - LEAST_TAIL, CUTS).astype(np.int64))
    first = np.searchsorted(x, x[places])  # equal areas stay together
    first = np.unique(first[x[-1] >= 10**LEAST_DECADES * x[first]])
    if not len(first):
        return None
    place, exponent, distance = best_cut(np.log(x), first.astype(np.int64))
    return Tail(float(x[place]), exponent, distance, len(x) - int(place))


def goodness(x: Floats, tail: Tail, rng: np.random.Generator) -> float:
    """Return the share of simulated samples that lie farther from their own law than the data from theirs.

    Below the cut a sample is drawn from the data, above it from the law (section 4 of the source).
    """
    body, n = x[: len(x) - tail.count], len(x)
    farther = done = 0
    for _ in range(SIMULATIONS):
        in_tail = int(rng.binomial(n, tail.count / n)) if len(body) else n
        drawn = tail.cut * rng.random(in_tail) ** (-1 / tail.exponent)
        sample = np.sort(np.concatenate([rng.choice(body, n - in_tail) if len(body) else body, drawn]))
        found = fit_tail(sample)
        if found is not None:
            done += 1
            farther += found.distance >= tail.distance
    return farther / done if done else float("nan")


def exponent_interval(x: Floats, tail: Tail, rng: np.random.Generator) -> tuple[float, float]:
    """Return the 95 % interval of K from resamples in each of which the cut is chosen anew."""
    found = [fit_tail(np.sort(rng.choice(x, len(x)))) for _ in range(SIMULATIONS)]
    exponents = np.array([one.exponent for one in found if one is not None])
    by_count = tail.exponent / np.sqrt(tail.count)
    spread = max(by_count, float(np.std(exponents)) if len(exponents) > 1 else 0.0)
    return max(0.0, tail.exponent - 1.96 * spread), tail.exponent + 1.96 * spread


def better_alternative(above: Floats, tail: Tail) -> str | None:
    """Return the name of the alternative that fits the tail better than the power law, if one does.

    ``cut-off``: a^-(K+1) exp(-a/s), which contains the law, by its likelihood ratio; ``lognormal`` above
    the cut, by the test of Vuong (1989) for laws that do not contain each other.
    """
    from scipy.special import ndtr
    from scipy.stats import chi2

    y = np.log(above / tail.cut)
    law = np.log(tail.exponent) - tail.exponent * y  # densities of y
    gain = cut_off_gain(y, tail.exponent)
    if chi2.sf(2 * gain, 1) < SURE:
        return "cut-off"
    ratio = lognormal_density(y) - law
    spread = float(np.std(ratio))
    if spread > 0 and ratio.mean() > 0 and 2 * ndtr(-ratio.sum() / (spread * np.sqrt(len(y)))) < SURE:
        return "lognormal"
    return None


def cut_off_gain(y: Floats, exponent: float) -> float:
    """Return the log likelihood that an exponential cut-off adds to the law of y = ln(a / cut)."""
    from scipy.optimize import minimize

    grown = np.exp(y)

    def cost(free: Floats) -> float:
        k, rate = float(free[0]), float(np.exp(free[1]))
        return -float((-k * y - rate * grown).sum() - len(y) * np.log(_cut_off_mass(k, rate)))

    starts = [np.array([exponent, np.log(share / grown[-1])]) for share in (0.01, 1.0)]
    best = min(float(minimize(cost, start, method="Nelder-Mead").fun) for start in starts)
    law = len(y) * float(np.log(exponent)) - exponent * float(y.sum())
    return max(0.0, -best - law)


def _cut_off_mass(k: float, rate: float) -> float:
    """Return the integral of exp(-k y - rate e^y) over y >= 0."""
    y: Floats = np.linspace(0, 1, 2001) ** 2 * max(5.0, np.log(60 / rate) if rate < 1 else 5.0)
    values = np.exp(-k * y - rate * np.exp(np.minimum(y, 700.0)))
    return max(float(np.trapezoid(values, y)), 1e-300)


def lognormal_density(y: Floats) -> Floats:
    """Return log densities of y under the best normal law cut off below 0."""
    from scipy.optimize import minimize
    from scipy.special import log_ndtr

    def cost(free: Floats) -> float:
        return -float(_cut_normal(y, free[0], float(np.exp(free[1]))).sum())

    def _cut_normal(at: Floats, mean: float, sd: float) -> Floats:
        z = (at - mean) / sd
        return np.asarray(-0.5 * z**2 - np.log(sd) - 0.5 * np.log(2 * np.pi) - log_ndtr(mean / sd))

    found = minimize(cost, np.array([float(y.mean()), np.log(float(y.std()) + 1e-9)]), method="Nelder-Mead")
    return _cut_normal(y, found.x[0], float(np.exp(found.x[1])))
