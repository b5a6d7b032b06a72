"""Power laws above many cuts at once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel


@kernel
def best_cut(logs: NDArray[np.float64], first: NDArray[np.int64]) -> tuple[int, float, float]:
    """Return the place of the cut whose power law lies nearest to the data, its exponent and the distance.

    Parameters
    ----------
    logs : sorted logarithms
    first : places of the cuts, ascending; each has at least two different values from there on
    """
    n = len(logs)
    total, upto = np.zeros(len(first)), n
    running = 0.0
    for k in range(len(first) - 1, -1, -1):
        for i in range(upto - 1, first[k] - 1, -1):
            running += logs[i]
        upto = first[k]
        total[k] = running
    best, best_exponent, best_distance = -1, np.nan, np.inf
    for k in range(len(first)):
        start = first[k]
        count = n - start
        exponent = count / (total[k] - count * logs[start])
        distance = 0.0
        for i in range(start, n):
            share = 1.0 - np.exp(-exponent * (logs[i] - logs[start]))
            distance = max(distance, abs(share - (i - start) / count), abs(share - (i - start + 1) / count))
            if distance >= best_distance:
                break
        if distance < best_distance:
            best, best_exponent, best_distance = start, exponent, distance
    return best, best_exponent, best_distance
