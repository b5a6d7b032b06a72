"""What else than a power law a ladder may show: two regimes, a step, a bend."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.jit import kernel
from geofractal.kernels.ladder_evidence import weighted_slope
from geofractal.kernels.ladder_fields import (
    BREAK_HIGH_X,
    BREAK_LOW_X,
    BREAK_X,
    COARSE_DIMENSION,
    CURVED,
    DIMENSION,
    EVIDENCE,
    FINE_DIMENSION,
    TWO_REGIME,
    VERDICT,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from geofractal.kernels.ladder_judge import Constants

    Floats = NDArray[np.float64]

PLACES = 31
"""Places at which a break is tried."""

NO_BREAK_SHARE = 0.85
"""Share of the straight line's mean square from which on an alternative explains nothing, even where the
first half decade is smooth: a ripple may begin with a stretch that looks it."""

PERIODS = 15
"""Periods that are tried for a ripple, in even ratios."""

SHORTEST_PERIOD = 2.0
"""Shortest ratio of rulers after which a ripple repeats; two rungs lie a factor 1.2 apart."""


@kernel
def _residual(w: Floats, y: Floats, a: Floats, b: Floats) -> tuple[float, float, float]:
    """Return the weighted mean square left by y = s a + t b + constant, and s and t."""
    am, bm, ym = 0.0, 0.0, 0.0
    for k in range(len(y)):
        am += w[k] * a[k]
        bm += w[k] * b[k]
        ym += w[k] * y[k]
    aa, bb, ab, ay, by, yy = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for k in range(len(y)):
        da, db, dy = a[k] - am, b[k] - bm, y[k] - ym
        aa += w[k] * da * da
        bb += w[k] * db * db
        ab += w[k] * da * db
        ay += w[k] * da * dy
        by += w[k] * db * dy
        yy += w[k] * dy * dy
    det = aa * bb - ab * ab
    if det <= 1e-12 * aa * bb:
        return yy, 0.0, 0.0
    s, t = (ay * bb - by * ab) / det, (by * aa - ay * ab) / det
    return max(yy - s * ay - t * by, 0.0), s, t


@kernel
def _best_hinge(w: Floats, x: Floats, y: Floats, places: Floats) -> tuple[Floats, float, float, int]:
    """Return the mean square left by a hinge at each place, both slopes of the best, and its number."""
    left = np.empty(len(places))
    over = np.empty(len(x))
    best, slope, turn = 0, 0.0, 0.0
    for i in range(len(places)):
        for k in range(len(x)):
            over[k] = max(x[k] - places[i], 0.0)
        left[i], s, t = _residual(w, y, x, over)
        if i == 0 or left[i] < left[best]:
            best, slope, turn = i, s, t
    return left, slope, slope + turn, best


@kernel
def _best_step(w: Floats, x: Floats, y: Floats, places: Floats) -> tuple[Floats, float, int]:
    """Return the mean square left by a smooth step at each place, the best's common slope, and its number."""
    left = np.empty(len(places))
    sharp, wide = np.empty(len(x)), np.empty(len(x))
    best, slope = 0, 0.0
    for i in range(len(places)):
        for k in range(len(x)):
            sharp[k] = np.tanh(2.0 * (x[k] - places[i]))
            wide[k] = np.tanh(x[k] - places[i])
        left[i], s, _ = _residual(w, y, x, sharp)
        other, s_wide, _ = _residual(w, y, x, wide)
        if other < left[i]:
            left[i], s = other, s_wide
        if i == 0 or left[i] < left[best]:
            best, slope = i, s
    return left, slope, best


@kernel
def _ripple_left(w: Floats, x: Floats, y: Floats) -> float:
    """Return the mean square left by a line with a sine wave that fits twice into the ladder at least.

    Curves made of equal pieces carry such a wave; its period is the logarithm of their ratio.
    """
    rest = _across(w, x, y)
    cosine, sine = np.empty(len(x)), np.empty(len(x))
    shortest, longest = np.log(SHORTEST_PERIOD), 0.5 * (x[-1] - x[0])
    best = np.inf
    for i in range(PERIODS):
        if longest > shortest:
            period = shortest * (longest / shortest) ** (i / (PERIODS - 1))
            for k in range(len(x)):
                cosine[k] = np.cos(2.0 * np.pi * x[k] / period)
                sine[k] = np.sin(2.0 * np.pi * x[k] / period)
            best = min(best, _residual(w, rest, _across(w, x, cosine), _across(w, x, sine))[0])
    return best


@kernel
def _across(w: Floats, x: Floats, v: Floats) -> Floats:
    """Return what a straight line leaves of v."""
    slope, mean_x, mean_v, _ = weighted_slope(w, x, v)
    return v - mean_v - slope * (x - mean_x)


@kernel
def _limits(left: Floats, places: Floats, best: int, freedom: float) -> tuple[float, float]:
    """Return the first and last place whose mean square is not significantly above the best."""
    limit = left[best] * (1.0 + 3.84 / max(freedom, 1.0))
    low, high = best, best
    for i in range(len(places)):
        if left[i] <= limit:
            low, high = min(low, i), max(high, i)
    return places[low], places[high]


@kernel
def _likely_place(left: Floats, places: Floats, best: int, freedom: float) -> float:
    """Return halfway from the best place to the mean of all, each counted by how nearly it is as good.

    A ripple that beats with the hinge leaves several places nearly as good as the best.
    """
    total, mean = 0.0, 0.0
    for i in range(len(places)):
        worse = left[i] / left[best] - 1.0 if left[best] > 0.0 else np.inf
        likely = 1.0 if i == best else np.exp(-0.25 * max(freedom, 1.0) * worse)
        total += likely
        mean += likely * places[i]
    return float(0.5 * (places[best] + mean / total))


@kernel
def _smooth_up_to(x: Floats, y: Floats, gap: float) -> float:
    """Return where a line that is smooth over the ladder's first half decade stops to be; NaN if it is not.

    Smooth: shorter by less than a fifth of what dimension 1 + `gap` says. It stops where it has lost a tenth
    of its length, or half of what it loses at all, against the foot.
    """
    if gap < 0.01:
        return np.nan
    foot = 0
    while foot < len(x) - 1 and x[foot] < x[0] + 1.15:
        foot += 1
    if foot < 4 or foot > len(x) - 4 or y[0] - y[foot] > 0.2 * gap * (x[foot] - x[0]):
        return np.nan
    enough = min(0.1, 0.5 * (y[foot] - y[-1]))
    for k in range(foot, len(x)):
        if y[foot] - y[k] > enough:
            return float(x[k])
    return float(x[-1])


@kernel
def compare_models(
    row: Floats, w: Floats, x: Floats, y: Floats, residual: float, unit: float, c: Constants
) -> None:
    """Compare the straight line with a hinge, a step and a parabola; write verdict and break into `row`.

    `residual` is the straight line's mean square, `unit` the mean square that noise of this line's own
    size would take up. An alternative must take up more than the threshold and leave less than a share.
    """
    gap = row[DIMENSION] - 1.0
    threshold = c.threshold * (0.45 + min(max(gap - 0.05, 0.0) / 0.15, 1.0) * 0.55)
    threshold += c.threshold * min(max(gap - 0.2, 0.0) / 0.3, c.rough_threshold) * 0.8
    threshold *= max(1.0, (x[-1] - x[0]) / 5.0) ** 0.7
    needed = threshold * threshold * unit
    row[EVIDENCE] = np.sqrt(residual / unit) / threshold
    bend = _smooth_up_to(x, y, gap)
    if np.isnan(bend) and residual <= needed:
        return
    span = x[-1] - x[0]
    margin = max(0.15 * span, min(0.55, 0.3 * span))
    places = np.empty(PLACES)
    for i in range(PLACES):
        places[i] = x[0] + margin + (span - 2.0 * margin) * i / (PLACES - 1)
    hinge_left, fine, coarse, hinge = _best_hinge(w, x, y, places)
    step_left, slope, step = _best_step(w, x, y, places)
    square = np.empty(len(x))
    for k in range(len(x)):
        square[k] = x[k] * x[k]
    parabola = _residual(w, y, x, square)[0]
    best = min(hinge_left[hinge], step_left[step], parabola)
    row[EVIDENCE] = np.sqrt(max(residual - best, 0.0) / unit) / threshold
    if np.isnan(bend) and (residual - best <= needed or best > c.ripple_share * residual):
        return
    if best > NO_BREAK_SHARE * residual or _ripple_left(w, x, y) < best:
        return
    freedom = span / 0.55 - 4.0
    row[VERDICT] = TWO_REGIME
    row[FINE_DIMENSION], row[COARSE_DIMENSION] = 1.0 - fine, 1.0 - coarse
    if step_left[step] < 0.64 * min(hinge_left[hinge], parabola):
        low, high = _limits(step_left, places, step, freedom)
        row[BREAK_X], row[BREAK_LOW_X], row[BREAK_HIGH_X] = places[step], low - 0.5, high + 0.5
        row[FINE_DIMENSION], row[COARSE_DIMENSION] = 1.0 - slope, 1.0 - slope
    elif not np.isnan(bend) and (fine < coarse or best > c.ripple_share * residual):
        row[BREAK_X], row[BREAK_LOW_X], row[BREAK_HIGH_X] = bend, bend - 0.5, bend + 0.5
    elif hinge_left[hinge] <= 3.0 * parabola:
        low, high = _limits(hinge_left, places, hinge, freedom)
        row[BREAK_X] = _likely_place(hinge_left, places, hinge, freedom) + c.break_shift
        row[BREAK_LOW_X], row[BREAK_HIGH_X] = low + c.break_shift - 0.7, high + c.break_shift + 0.5
    else:
        row[VERDICT] = CURVED
