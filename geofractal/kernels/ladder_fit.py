"""Least squares through ragged ladders: what every feature's straight line on log-log axes rests on."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.jit import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray


@kernel
def fit_lines(
    offsets: NDArray[np.int64], x: NDArray[np.float64], y: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return (n, 4) slope, intercept, r2 and points used of y on x, one ragged group a row.

    Points with a y that is NaN are skipped; fewer than two distinct x give NaN and the count.
    """
    n = len(offsets) - 1
    out = np.full((n, 4), np.nan)
    for i in range(n):
        used, sum_x, sum_y = 0, 0.0, 0.0
        for k in range(offsets[i], offsets[i + 1]):
            if not np.isnan(y[k]):
                used += 1
                sum_x += x[k]
                sum_y += y[k]
        out[i, 3] = used
        if used < 2:
            continue
        mean_x, mean_y = sum_x / used, sum_y / used
        xx, xy, yy = 0.0, 0.0, 0.0
        for k in range(offsets[i], offsets[i + 1]):
            if not np.isnan(y[k]):
                dx, dy = x[k] - mean_x, y[k] - mean_y
                xx += dx * dx
                xy += dx * dy
                yy += dy * dy
        if xx > 0.0:
            slope = xy / xx
            out[i, 0] = slope
            out[i, 1] = mean_y - slope * mean_x
            out[i, 2] = min(slope * xy / yy, 1.0) if yy > 0.0 else 1.0
    return out


@kernel
def _slope_error(
    x: NDArray[np.float64], y: NDArray[np.float64], noise: NDArray[np.float64], line: NDArray[np.float64]
) -> float:
    """Return the standard error of a fitted slope: by the noise of y or by its scatter, whichever is more."""
    slope, intercept, used = line[0], line[1], line[3]
    mean_x, xx, rest, noisy = 0.0, 0.0, 0.0, 0.0
    for k in range(len(x)):
        if not np.isnan(y[k]):
            mean_x += x[k] / used
    for k in range(len(x)):
        if not np.isnan(y[k]):
            xx += (x[k] - mean_x) ** 2
            rest += (y[k] - intercept - slope * x[k]) ** 2
            if not np.isnan(noise[k]):
                noisy += ((x[k] - mean_x) * noise[k]) ** 2
    return float(np.sqrt(max(rest / (used - 2.0) * xx, noisy)) / xx)


@kernel
def local_slopes(
    offsets: NDArray[np.int64],
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    noise: NDArray[np.float64],
    reach: int,
) -> NDArray[np.float64]:
    """Return at each point the slope over it and its neighbours, up to `reach` on either side, and its error.

    (q, 2); `noise` is each y's standard error, NaN where unknown. NaN where the point's own y is NaN, or
    fewer than three of them have one.
    """
    out = np.full((len(x), 2), np.nan)
    for i in range(len(offsets) - 1):
        for k in range(offsets[i], offsets[i + 1]):
            first, last = max(k - reach, offsets[i]), min(k + reach + 1, offsets[i + 1])
            line = fit_lines(np.array([first, last]), x, y)[0]
            if line[3] >= 3 and not np.isnan(y[k]):
                out[k, 0] = line[0]
                out[k, 1] = _slope_error(x[first:last], y[first:last], noise[first:last], line)
    return out
