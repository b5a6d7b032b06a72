"""Slopes along ladders: at each rung, of a line through the rungs about it."""

from __future__ import annotations

import numpy as np

from geofractal.kernels.jit import kernel
from geofractal.measure import Floats, Ints


@kernel
def local_slopes(offsets: Ints, x: Floats, y: Floats, half_width: float) -> Floats:
    """Return the least-squares slope of y on x over the rungs within `half_width`, NaN under three."""
    slopes = np.full(len(x), np.nan)
    for ladder in range(len(offsets) - 1):
        for rung in range(offsets[ladder], offsets[ladder + 1]):
            n, sx, sy, sxx, sxy = 0, 0.0, 0.0, 0.0, 0.0
            for other in range(offsets[ladder], offsets[ladder + 1]):
                away = x[other] - x[rung]
                if abs(away) <= half_width and not np.isnan(y[other]):
                    n += 1
                    sx += away
                    sy += y[other]
                    sxx += away * away
                    sxy += away * y[other]
            spread = n * sxx - sx * sx
            if n >= 3 and spread > 0.0 and not np.isnan(y[rung]):
                slopes[rung] = (n * sxy - sx * sy) / spread
    return slopes
