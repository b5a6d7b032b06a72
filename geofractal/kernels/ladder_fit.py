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
def local_slopes(
    offsets: NDArray[np.int64], x: NDArray[np.float64], y: NDArray[np.float64], reach: int
) -> NDArray[np.float64]:
    """Return at each point the slope over it and its neighbours, up to `reach` on either side, (q,).

    NaN where the point's own y is NaN, or fewer than three of them have one.
    """
    out = np.full(len(x), np.nan)
    for i in range(len(offsets) - 1):
        for k in range(offsets[i], offsets[i + 1]):
            some = np.array([max(k - reach, offsets[i]), min(k + reach + 1, offsets[i + 1])])
            line = fit_lines(some, x, y)
            if line[0, 3] >= 3 and not np.isnan(y[k]):
                out[k] = line[0, 0]
    return out
