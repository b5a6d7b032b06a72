"""What a ladder is evidence of: dimension, its two uncertainties, and whether a power law holds.

Every model is a weighted least-squares fit of ln L on ln r; docs of the rules and of their constants are
in `geofractal.scaling.judge` and `geofractal.scaling.calibrated`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from geofractal.kernels.jit import kernel
from geofractal.kernels.ladder_evidence import (
    bend_square,
    line_spread,
    own_error,
    rung_weights,
    weighted_slope,
    without_bias,
)
from geofractal.kernels.ladder_fields import (
    COARSE_DIMENSION,
    CURVED,
    DIMENSION,
    FIELDS,
    FINE_DIMENSION,
    FIRST_X,
    HIGH,
    LAST_X,
    LOW,
    MEAN_X,
    MEAN_Y,
    OWN_ERROR,
    POWER_LAW,
    PROCESS_ERROR,
    R2,
    RAW_DIMENSION,
    RESIDUAL,
    RUNGS,
    SMOOTH,
    SPREAD,
    TOO_FEW,
    TWO_REGIME,
    VERDICT,
)
from geofractal.kernels.ladder_models import compare_models

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

STRETCHES = 16
"""Stretches of equal length that a feature's steps are counted in."""


class Constants(NamedTuple):
    """What simulation set, one set an estimator; see `geofractal.scaling.calibrated`."""

    fewest_steps: float
    fewest_ring_steps: float
    sure_ring_steps: float
    sure_steps: float
    ramp: float
    fine_bias: float
    coarse_bias: float
    ring_turn: float
    own_least: float
    own_low: float
    own_long: float
    own_long_below: float
    own_without: float
    ring: float
    ring_doubt: float
    bend: float
    ripple: float
    bias_doubt: float
    quantile: float
    skew: float
    tilt: float
    tilt_fade: float
    tilt_power: float
    lean: float
    ripple_share: float
    threshold: float
    rough_threshold: float
    break_shift: float
    smooth_below: float
    fewest_decades: float


@kernel
def _interval(row: Floats, c: Constants) -> None:
    """Write the 95 % interval of the process.

    Longer upwards near dimension 1, where estimates are skewed, and above 1.5, where short ladders find
    most families too low.
    """
    gap = max(row[DIMENSION] - 1.0, 0.0)
    half = c.quantile * row[PROCESS_ERROR]
    reach = min(half / max(gap, 0.002), c.skew * (0.05 / max(gap, 0.007)) ** 0.37)
    tilt = min(max((gap - 0.35) / 0.3, 0.0), 1.0)
    short = min(3.0 / (row[LAST_X] - row[FIRST_X]), 1.0) ** c.tilt_fade
    row[LOW] = max(row[DIMENSION] - half * (1.0 - c.lean * tilt), 1.0)
    above = (half**c.tilt_power + (c.tilt * tilt * short) ** c.tilt_power) ** (1.0 / c.tilt_power)
    row[HIGH] = max(row[DIMENSION] + above, 1.0 + gap * np.exp(reach))
    if row[VERDICT] == TWO_REGIME or row[VERDICT] == CURVED:
        row[LOW] = max(min(row[LOW], row[FINE_DIMENSION], row[COARSE_DIMENSION]), 1.0)
        row[HIGH] = max(row[HIGH], row[FINE_DIMENSION], row[COARSE_DIMENSION])
    row[LOW], row[HIGH] = (
        min(row[LOW], row[DIMENSION]),
        min(max(row[HIGH], row[DIMENSION]), max(2.0, row[DIMENSION])),
    )


@kernel
def _judge(
    row: Floats, x: Floats, y: Floats, steps: Floats, noise: Floats, tallies: Floats,
    detail: float, parts: tuple[float, float], c: Constants,
) -> None:  # fmt: skip
    """Judge the usable rungs of one feature; see `judge_ladders`."""
    row[RUNGS], row[FIRST_X], row[LAST_X], row[VERDICT] = len(x), x[0], x[-1], TOO_FEW
    span = x[-1] - x[0]
    if len(x) < 4 or span < c.fewest_decades * np.log(10.0) * (1 - 1e-9):
        return
    w = rung_weights(x, steps, c)
    slope, mean_x, mean_y, xx = weighted_slope(w, x, y)
    row[RAW_DIMENSION] = 1.0 - slope
    z = y
    for _ in range(3):
        gap = min(max(-slope, 0.0), 1.0)
        z = without_bias(x, y, steps, detail, gap, parts, c)
        slope, mean_x, mean_y, xx = weighted_slope(w, x, z)
    row[DIMENSION], row[MEAN_X], row[MEAN_Y] = 1.0 - slope, mean_x, mean_y
    total, residual = 0.0, 0.0
    for k in range(len(x)):
        residual += w[k] * (z[k] - mean_y - slope * (x[k] - mean_x)) ** 2
        total += w[k] * (z[k] - mean_y) ** 2
    row[RESIDUAL], row[R2] = np.sqrt(residual), 1.0 - residual / total if total > 0.0 else 1.0
    row[SPREAD] = line_spread(w, x, z, noise, slope)
    gap = max(row[DIMENSION] - 1.0, 1e-6)
    ring = parts[0] == 0.0
    if tallies.shape[1] > 0:
        scale = c.own_low / np.sqrt(max(gap, 0.02))
        if not ring:
            scale *= (span / 5.0) ** (c.own_long * max(0.0, 1.0 - gap / c.own_long_below))
        own = own_error(x, steps, tallies) * max(scale, c.own_least)
    else:
        own = c.own_without * np.sqrt(gap) * (1.0 + 0.5 * gap) / span
    if ring:
        own *= c.ring
    bends = bend_square(w, x, z, mean_x, xx)
    doubt = c.bias_doubt * (row[DIMENSION] - row[RAW_DIMENSION])
    closure = c.ring_doubt / (steps[-1] * span) if ring else 0.0
    ripple = c.ripple * row[RESIDUAL] / (span * span)
    row[OWN_ERROR] = own
    row[PROCESS_ERROR] = np.sqrt(own**2 + c.bend**2 * bends + doubt**2 + closure**2 + ripple**2)
    row[VERDICT] = POWER_LAW
    compare_models(row, w, x, z, residual, xx * (max(own, 0.01 * gap) ** 2 + doubt**2), c)
    if row[DIMENSION] <= c.smooth_below and row[VERDICT] != TWO_REGIME:
        row[VERDICT] = SMOOTH
    _interval(row, c)


@kernel
def used_rungs(
    offsets: NDArray[np.int64],
    x: Floats,
    y: Floats,
    steps: Floats,
    usable: NDArray[np.bool_],
    open_parts: Floats,
    c: Constants,
) -> NDArray[np.bool_]:
    """Return which rungs a feature is judged by, (q,): those with a length and enough steps.

    Parameters as in `judge_ladders`, and `usable`, (q,): the rungs that may be used at all.
    """
    used = np.zeros(len(x), np.bool_)
    for i in range(len(offsets) - 1):
        ring = open_parts[i] == 0.0
        first = np.inf
        for q in range(offsets[i], offsets[i + 1]):
            fewest = c.fewest_steps
            if ring:
                far = x[q] > first + np.log(10.0)
                fewest = c.sure_ring_steps if far else c.fewest_ring_steps
            if usable[q] and steps[q] >= fewest and np.isfinite(y[q]):
                used[q] = True
                first = min(first, x[q])
    return used


@kernel
def judge_ladders(
    offsets: NDArray[np.int64],
    x: Floats,
    y: Floats,
    steps: Floats,
    noise: Floats,
    tallies: Floats,
    used: NDArray[np.bool_],
    detail: Floats,
    open_parts: Floats,
    rings: Floats,
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
    used : (q,) the rungs to judge by, see `used_rungs`
    detail : (n,) ln of the finest detail of the source, in the unit of the rulers
    open_parts : (n,) number of open lines; 0 where a feature is made of rings alone
    rings : (n,) number of rings whose turning back is to be taken out

    Returns
    -------
    (n, len(FIELDS)) NaN where a field has no value
    """
    n = len(offsets) - 1
    out = np.full((n, len(FIELDS)), np.nan)
    for i in range(n):
        most = offsets[i + 1] - offsets[i]
        rx, ry, rsteps, rnoise = np.empty(most), np.empty(most), np.empty(most), np.empty(most)
        rtallies = np.empty((most, tallies.shape[1]))
        n_used = 0
        for q in range(offsets[i], offsets[i + 1]):
            if used[q]:
                rx[n_used], ry[n_used], rsteps[n_used], rnoise[n_used] = x[q], y[q], steps[q], noise[q]
                for b in range(tallies.shape[1]):
                    rtallies[n_used, b] = tallies[q, b]
                n_used += 1
        out[i, RUNGS], out[i, VERDICT] = n_used, TOO_FEW
        if n_used > 0:
            _judge(
                out[i], rx[:n_used], ry[:n_used], rsteps[:n_used], rnoise[:n_used], rtallies[:n_used],
                detail[i], (open_parts[i], rings[i]), c,
            )  # fmt: skip
    return out
