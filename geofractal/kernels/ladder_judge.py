"""What a ladder is evidence of: dimension, its two uncertainties, and whether a power law holds.

Every model is a weighted least-squares fit of ln L on ln r; docs of the rules and of their constants are
in `geofractal.scaling.judge` and `geofractal.scaling.calibrated`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from geofractal.kernels.jit import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

STRETCHES = 16
"""Stretches of equal length that a feature's steps are counted in."""

WINDOW = 2
"""Stretches that make one window; windows overlap by all but one stretch."""

PLACES = 31
"""Places at which a break is tried."""

POWER_LAW, TWO_REGIME, CURVED, SMOOTH, TOO_FEW = 0, 1, 2, 3, 4

FIELDS = (
    "dimension",
    "low",
    "high",
    "spread",
    "raw_dimension",
    "mean_x",
    "mean_y",
    "residual",
    "r2",
    "rungs",
    "first_x",
    "last_x",
    "verdict",
    "break_x",
    "break_low_x",
    "break_high_x",
    "fine_dimension",
    "coarse_dimension",
    "process_error",
    "own_error",
    "evidence",
)
"""Columns of `judge_ladders`; x is ln r, y is ln L."""


class Constants(NamedTuple):
    """What simulation set, one set an estimator; see `geofractal.scaling.calibrated`."""

    fewest_steps: float
    fewest_ring_steps: float
    sure_ring_steps: float
    sure_steps: float
    ramp: float
    fine_bias: float
    coarse_bias: float
    crowding: float
    own_least: float
    own_low: float
    own_long: float
    own_without: float
    ring: float
    ring_doubt: float
    bend: float
    bias_doubt: float
    quantile: float
    skew: float
    tilt: float
    ripple_share: float
    threshold: float
    break_shift: float
    smooth_below: float
    fewest_decades: float


@kernel
def _weights(x: Floats, steps: Floats, c: Constants) -> Floats:
    """Return weights of sum 1: low where steps are few, rising over the ladder's foot."""
    foot = min(c.ramp, (x[-1] - x[0]) / 3.0)
    w = np.empty(len(x))
    total = 0.0
    for k in range(len(x)):
        w[k] = min(1.0, steps[k] / c.sure_steps) * min(1.0, 0.2 + (x[k] - x[0]) / foot)
        total += w[k]
    for k in range(len(x)):
        w[k] /= total
    return w


@kernel
def _slope(w: Floats, x: Floats, y: Floats) -> tuple[float, float, float, float]:
    """Return slope, mean x, mean y and the variance of x of a weighted line."""
    mean_x, mean_y, xx, xy = 0.0, 0.0, 0.0, 0.0
    for k in range(len(x)):
        mean_x += w[k] * x[k]
        mean_y += w[k] * y[k]
    for k in range(len(x)):
        xx += w[k] * (x[k] - mean_x) ** 2
        xy += w[k] * (x[k] - mean_x) * (y[k] - mean_y)
    return xy / xx, mean_x, mean_y, xx


@kernel
def _without_bias(
    x: Floats, y: Floats, steps: Floats, detail: float, gap: float, open_parts: float, c: Constants
) -> Floats:
    """Return y without what the ends of the ladder add, for a line whose dimension is 1 + `gap`."""
    fine = c.fine_bias * gap**1.5
    coarse = c.coarse_bias * gap / (1.0 + gap) * open_parts
    crowding = c.crowding * gap**1.5 / (x[-1] - x[0]) ** 0.8
    z = np.empty(len(y))
    for k in range(len(y)):
        z[k] = y[k] + fine * np.exp(detail - x[k]) - coarse / steps[k] - crowding * (x[k] - x[0])
    return z


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
def _bends(w: Floats, x: Floats, y: Floats, mean_x: float, xx: float) -> float:
    """Return the mean square of the quadratic and cubic parts of y, in units of the slope.

    A slope's own error is of the size of these neighbours: noise in a ladder is correlated over rungs,
    and a ripple that beats with the ladder's length enters all three alike.
    """
    n = len(x)
    unit = np.sqrt(xx)
    m3, m4 = 0.0, 0.0
    for k in range(n):
        f = (x[k] - mean_x) / unit
        m3 += w[k] * f**3
        m4 += w[k] * f**4
    norm = m4 - 1.0 - m3 * m3
    if norm <= 1e-9:
        return 0.0
    two, cross = 0.0, 0.0
    for k in range(n):
        f = (x[k] - mean_x) / unit
        second = (f * f - 1.0 - m3 * f) / np.sqrt(norm)
        two += w[k] * second * y[k]
        cross += w[k] * f**3 * second
    three, size = 0.0, 0.0
    for k in range(n):
        f = (x[k] - mean_x) / unit
        third = f**3 - m3 - m4 * f - cross * (f * f - 1.0 - m3 * f) / np.sqrt(norm)
        size += w[k] * third * third
        three += w[k] * third * y[k]
    if size <= 1e-9:
        return float(two * two / xx)
    return float((two * two + three * three / size) / (2.0 * xx))


@kernel
def _own_error(x: Floats, steps: Floats, tallies: Floats) -> float:
    """Return the standard deviation of the slope between the windows of a line's stretches.

    Fitted over the rungs on which a window holds at least eight steps, or else the first three. What
    counting whole steps adds, were each count the mean of two walks, is taken out, up to three quarters.
    """
    pieces = tallies.shape[1]
    windows = pieces - WINDOW + 1
    used = 0
    for k in range(len(x)):
        if steps[k] * WINDOW >= 8.0 * pieces:
            used = k + 1
    used = min(max(used, 3), len(x))
    mean_x, xx = 0.0, 0.0
    for k in range(used):
        mean_x += x[k] / used
    for k in range(used):
        xx += (x[k] - mean_x) ** 2
    rounding = 0.0
    for k in range(used):
        whole = steps[k] * WINDOW / pieces
        rounding += ((x[k] - mean_x) / xx / whole) ** 2 / 12.0
    total, square = 0.0, 0.0
    for b in range(windows):
        slope = 0.0
        for k in range(used):
            count = 0.5
            for j in range(WINDOW):
                count += tallies[k, b + j]
            slope += (x[k] - mean_x) * np.log(count)
        slope /= xx
        total += slope
        square += slope * slope
    between = max(square - total * total / windows, 0.0) / (windows - 1)
    return float(np.sqrt(max(between - rounding, 0.25 * between)))


@kernel
def _slope_of_some(w: Floats, x: Floats, y: Floats, first: int, last: int, every: int) -> float:
    """Return the slope over every so many rungs from `first` to before `last`."""
    some = np.zeros(len(w))
    total = 0.0
    for k in range(first, last, every):
        total += w[k]
    for k in range(first, last, every):
        some[k] = w[k] / total
    return float(_slope(some, x, y)[0])


@kernel
def _line_spread(w: Floats, x: Floats, y: Floats, noise: Floats, slope: float) -> float:
    """Return the standard error of the slope for this line alone: starts and placement of the rulers."""
    n = len(x)
    square = 0.0
    _, mean_x, _, xx = _slope(w, x, y)
    for k in range(n):
        if not np.isnan(noise[k]):
            square += (w[k] * (x[k] - mean_x) / xx * noise[k]) ** 2
    if n >= 6:
        apart = _slope_of_some(w, x, y, 0, n, 2) - _slope_of_some(w, x, y, 1, n, 2)
        first = _slope_of_some(w, x, y, 1, n, 1) - slope
        last = _slope_of_some(w, x, y, 0, n - 1, 1) - slope
        square += 0.25 * apart**2 + 0.5 * (first**2 + last**2)
    return float(np.sqrt(square))


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
def _limits(left: Floats, places: Floats, best: int, freedom: float) -> tuple[float, float]:
    """Return the first and last place whose mean square is not significantly above the best."""
    limit = left[best] * (1.0 + 3.84 / max(freedom, 1.0))
    low, high = best, best
    for i in range(len(places)):
        if left[i] <= limit:
            low, high = min(low, i), max(high, i)
    return places[low], places[high]


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
def _alternatives(
    row: Floats, w: Floats, x: Floats, y: Floats, residual: float, unit: float, c: Constants
) -> None:
    """Compare the straight line with a hinge, a step and a parabola; write verdict and break into `row`.

    `residual` is the straight line's mean square, `unit` the mean square that noise of this line's own
    size would take up. An alternative must take up more than the threshold and leave less than a share.
    """
    gap = row[0] - 1.0
    threshold = c.threshold * (0.45 + min(max(gap - 0.05, 0.0) / 0.15, 1.0) * 0.55)
    threshold += c.threshold * min(max(gap - 0.2, 0.0) / 0.3, 1.0) * 0.8
    threshold *= max(1.0, (x[-1] - x[0]) / 5.0) ** 0.7
    needed = threshold * threshold * unit
    row[20] = np.sqrt(residual / unit) / threshold
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
    row[20] = np.sqrt(max(residual - best, 0.0) / unit) / threshold
    if np.isnan(bend) and (residual - best <= needed or best > c.ripple_share * residual):
        return
    freedom = span / 0.55 - 4.0
    row[12] = TWO_REGIME
    row[16], row[17] = 1.0 - fine, 1.0 - coarse
    if step_left[step] < 0.64 * min(hinge_left[hinge], parabola):
        low, high = _limits(step_left, places, step, freedom)
        row[13], row[14], row[15] = places[step], low - 0.5, high + 0.5
        row[16], row[17] = 1.0 - slope, 1.0 - slope
    elif not np.isnan(bend) and (fine < coarse or best > c.ripple_share * residual):
        row[13], row[14], row[15] = bend, bend - 0.5, bend + 0.5
    elif hinge_left[hinge] <= 3.0 * parabola:
        low, high = _limits(hinge_left, places, hinge, freedom)
        row[13] = places[hinge] + c.break_shift
        row[14], row[15] = low + c.break_shift - 0.7, high + c.break_shift + 0.5
    else:
        row[12] = CURVED


@kernel
def _interval(row: Floats, c: Constants) -> None:
    """Write the 95 % interval of the process.

    Longer upwards near dimension 1, where estimates are skewed, and above 1.5, where short ladders find
    most families too low.
    """
    gap = max(row[0] - 1.0, 0.0)
    half = c.quantile * row[18]
    reach = min(half / max(gap, 0.002), c.skew * (0.05 / max(gap, 0.007)) ** 0.37)
    tilt = min(max((gap - 0.35) / 0.3, 0.0), 1.0)
    short = min(3.0 / (row[11] - row[10]), 1.0) ** 3
    row[1] = max(row[0] - half * (1.0 - 0.1 * tilt), 1.0)
    row[2] = max(row[0] + half + c.tilt * tilt * short, 1.0 + gap * np.exp(reach))
    if row[12] == TWO_REGIME or row[12] == CURVED:
        row[1] = max(min(row[1], row[16], row[17]), 1.0)
        row[2] = max(row[2], row[16], row[17])
    row[1], row[2] = min(row[1], row[0]), min(max(row[2], row[0]), max(2.0, row[0]))


@kernel
def _judge(
    row: Floats, x: Floats, y: Floats, steps: Floats, noise: Floats, tallies: Floats,
    detail: float, open_parts: float, c: Constants,
) -> None:  # fmt: skip
    """Judge the usable rungs of one feature; see `judge_ladders`."""
    row[9], row[10], row[11], row[12] = len(x), x[0], x[-1], TOO_FEW
    span = x[-1] - x[0]
    if len(x) < 4 or span < c.fewest_decades * np.log(10.0) * (1 - 1e-9):
        return
    w = _weights(x, steps, c)
    slope, mean_x, mean_y, xx = _slope(w, x, y)
    row[4] = 1.0 - slope
    z = y
    for _ in range(3):
        gap = min(max(-slope, 0.0), 1.0)
        z = _without_bias(x, y, steps, detail, gap, open_parts, c)
        slope, mean_x, mean_y, xx = _slope(w, x, z)
    row[0], row[5], row[6] = 1.0 - slope, mean_x, mean_y
    total, residual = 0.0, 0.0
    for k in range(len(x)):
        residual += w[k] * (z[k] - mean_y - slope * (x[k] - mean_x)) ** 2
        total += w[k] * (z[k] - mean_y) ** 2
    row[7], row[8] = np.sqrt(residual), 1.0 - residual / total if total > 0.0 else 1.0
    row[3] = _line_spread(w, x, z, noise, slope)
    gap = max(row[0] - 1.0, 1e-6)
    if tallies.shape[1] > 0:
        scale = c.own_low / np.sqrt(max(gap, 0.02))
        scale *= (span / 5.0) ** (c.own_long * max(0.0, 1.0 - gap / 0.15))
        own = _own_error(x, steps, tallies) * max(scale, c.own_least)
    else:
        own = c.own_without * np.sqrt(gap) * (1.0 + 0.5 * gap) / span
    if open_parts == 0.0:
        own *= c.ring
    bends = _bends(w, x, z, mean_x, xx)
    doubt = c.bias_doubt * (row[0] - row[4])
    closure = c.ring_doubt / (steps[-1] * span) if open_parts == 0.0 else 0.0
    row[19] = own
    row[18] = np.sqrt(own * own + c.bend * c.bend * bends + doubt * doubt + closure * closure)
    row[12] = POWER_LAW
    _alternatives(row, w, x, z, residual, xx * max(own, 0.01 * gap) ** 2, c)
    if row[0] <= c.smooth_below and row[12] != TWO_REGIME:
        row[12] = SMOOTH
    _interval(row, c)


@kernel
def judge_ladders(
    offsets: NDArray[np.int64],
    x: Floats,
    y: Floats,
    steps: Floats,
    noise: Floats,
    tallies: Floats,
    usable: NDArray[np.bool_],
    detail: Floats,
    open_parts: Floats,
    c: Constants,
) -> Floats:
    """Judge every feature's ladder.

    Parameters
    ----------
    offsets : (n + 1,) feature i owns rungs ``offsets[i]:offsets[i + 1]``
    x, y : (q,) ln ruler and ln walked length, y NaN where nothing was walked
    steps : (q,) whole steps
    noise : (q,) standard error of y from starts and directions; NaN where unknown
    tallies : (q, STRETCHES) steps by stretch of the line, or (q, 0) where they were not counted
    usable : (q,) rungs that may be used
    detail : (n,) ln of the finest detail of the source, in the unit of the rulers
    open_parts : (n,) number of open lines; 0 where a feature is made of rings alone

    Returns
    -------
    (n, len(FIELDS)) NaN where a field has no value
    """
    n = len(offsets) - 1
    out = np.full((n, len(FIELDS)), np.nan)
    for i in range(n):
        ring = open_parts[i] == 0.0
        most = offsets[i + 1] - offsets[i]
        rx, ry, rsteps, rnoise = np.empty(most), np.empty(most), np.empty(most), np.empty(most)
        rtallies = np.empty((most, tallies.shape[1]))
        used = 0
        for q in range(offsets[i], offsets[i + 1]):
            fewest = c.fewest_steps
            if ring:
                far = used > 0 and x[q] > rx[0] + np.log(10.0)
                fewest = c.sure_ring_steps if far else c.fewest_ring_steps
            if usable[q] and steps[q] >= fewest and np.isfinite(y[q]):
                rx[used], ry[used], rsteps[used], rnoise[used] = x[q], y[q], steps[q], noise[q]
                for b in range(tallies.shape[1]):
                    rtallies[used, b] = tallies[q, b]
                used += 1
        out[i, 9], out[i, 12] = used, TOO_FEW
        if used > 0:
            _judge(
                out[i], rx[:used], ry[:used], rsteps[:used], rnoise[:used], rtallies[:used], detail[i],
                open_parts[i], c,
            )  # fmt: skip
    return out
