"""The weighted line through a ladder, and what the line itself tells of its error."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.jit import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from geofractal.kernels.ladder_judge import Constants

    Floats = NDArray[np.float64]

WINDOW = 2
"""Stretches that make one window; windows overlap by all but one stretch."""


@kernel
def rung_weights(x: Floats, steps: Floats, c: Constants) -> Floats:
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
def weighted_slope(w: Floats, x: Floats, y: Floats) -> tuple[float, float, float, float]:
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
def without_bias(
    x: Floats, y: Floats, steps: Floats, detail: float, gap: float, parts: tuple[float, float], c: Constants
) -> Floats:
    """Return y without what the ends of the ladder add, for a line whose dimension is 1 + `gap`.

    `parts` are the numbers of its open lines and of its rings. Each part's last step adds length; a ring
    also turns back, which shortens it the more the straighter it is otherwise, but for a smooth one.
    """
    fine = c.fine_bias * gap**1.5
    coarse = c.coarse_bias * gap / (1.0 + gap) * (parts[0] + parts[1])
    coarse -= c.ring_turn * np.exp(-gap / 0.3) * min(gap / 0.05, 1.0) * parts[1]
    z = np.empty(len(y))
    for k in range(len(y)):
        z[k] = y[k] + fine * np.exp(detail - x[k]) - coarse / steps[k]
    return z


@kernel
def bend_square(w: Floats, x: Floats, y: Floats, mean_x: float, xx: float) -> float:
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
def own_error(x: Floats, steps: Floats, tallies: Floats) -> float:
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
    return float(weighted_slope(some, x, y)[0])


@kernel
def line_spread(w: Floats, x: Floats, y: Floats, noise: Floats, slope: float) -> float:
    """Return the standard error of the slope for this line alone: starts and placement of the rulers."""
    n = len(x)
    square = 0.0
    _, mean_x, _, xx = weighted_slope(w, x, y)
    for k in range(n):
        if not np.isnan(noise[k]):
            square += (w[k] * (x[k] - mean_x) / xx * noise[k]) ** 2
    if n >= 6:
        apart = _slope_of_some(w, x, y, 0, n, 2) - _slope_of_some(w, x, y, 1, n, 2)
        first = _slope_of_some(w, x, y, 1, n, 1) - slope
        last = _slope_of_some(w, x, y, 0, n - 1, 1) - slope
        square += 0.25 * apart**2 + 0.5 * (first**2 + last**2)
    return float(np.sqrt(square))
