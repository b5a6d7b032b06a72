"""The dimension of sets that are made of smaller copies of themselves."""

from __future__ import annotations

from collections.abc import Sequence
from math import log

import numpy as np


def similarity_dimension(ratios: Sequence[float], weights: Sequence[float] | None = None) -> float:
    """Solve sum w_i r_i^D = 1 for D (Moran's equation).

    Parameters
    ----------
    ratios : size of each copy relative to the whole, each above 0 and below 1
    weights : expected number of copies of each ratio, for sets drawn at random; 1 each if not given

    Returns
    -------
    float
        The similarity dimension. It is the dimension of the set where the copies do not overlap (open
        set condition), and may exceed 2 where they must. One copy alone shrinks to a point: 0.

    Raises
    ------
    ValueError
        No ratio at all (the set is empty); a ratio of 1 or more (the copies never shrink), 0 or less;
        a negative weight; fewer than one copy expected (the set dies out).

    Notes
    -----
    Moran (1946), Proc. Camb. Phil. Soc. 42:15-23; the open set condition: Hutchinson (1981), Indiana
    Univ. Math. J. 30:713-747; random sets, E sum r_i^D = 1: Mauldin & Williams (1986), Trans. Am. Math.
    Soc. 295:325-346, and Falconer (1986), Math. Proc. Camb. Phil. Soc. 100:559-582.

    Examples
    --------
    >>> round(similarity_dimension([1 / 3] * 4), 6)
    1.26186
    >>> similarity_dimension([1 / 2])
    0.0
    """
    r = np.asarray(ratios, dtype=np.float64)
    w = np.ones_like(r) if weights is None else np.asarray(weights, dtype=np.float64)
    if r.ndim != 1 or r.size == 0:
        raise ValueError("no ratios: a set without copies is empty and has no dimension; give at least one")
    if w.shape != r.shape or not (w >= 0).all() or w.sum() < 1:
        raise ValueError(f"weights {w.tolist()}: one per ratio, none negative, together at least 1 copy")
    if not ((r > 0) & (r < 1)).all():
        raise ValueError(f"ratios {r.tolist()}: each must lie between 0 and 1, both left out")
    copies = log(w.sum())
    low, high = copies / -log(r.min()), copies / -log(r.max())
    if high - low <= 1e-12 * high:
        return high
    from scipy.optimize import brentq

    return float(brentq(lambda d: log(w @ r**d), low, high, xtol=1e-15, rtol=1e-14))
