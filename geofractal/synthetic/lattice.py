"""Boundaries grown on the square lattice."""

from __future__ import annotations

from math import log2

import numpy as np
from numpy.typing import NDArray

from geofractal.synthetic.curve import Curve, Regime, extent
from geofractal.synthetic.koch import as_xy

_TURNED = np.array([[0, 1], [2, 1], [3, 2], [3, 0]], dtype=np.int8)  # steps east, north, west, south


def dragon_boundary(*, level: int) -> Curve:
    """Boundary of the twin dragon (the same dimension as the Heighway dragon's) as a ring of lattice steps.

    Parameters
    ----------
    level : number of doublings; the tile holds 2^level squares and the ring about 3.6 x 1.6956^level steps,
        2 million at level 25

    Returns
    -------
    Curve
        A tile of area 1; D = 2 log2 x with x^3 = x^2 + 2, 1.5236.

    Notes
    -----
    Each square at p becomes two at (1 + i) p; its boundary word follows by replacing every step by two
    and striking out steps that go to and fro: Dekking (1982), Adv. Math. 44:78-104. Digits of D: encyclopedia
    of integer sequences, A272031.
    """
    if level < 0:
        raise ValueError(f"level {level}: the number of doublings is 0 or more")
    word = np.arange(4, dtype=np.int8)
    for _ in range(level):
        word = _reduced(_TURNED[word].ravel())
    points = np.concatenate([[0], np.cumsum(1j ** np.arange(4)[word])]) / (1 + 1j) ** level
    points[-1] = points[0]
    xy = as_xy(points)
    root = max(np.roots([1, -1, 0, -2]).real)
    regimes = (Regime(2 ** (-level / 2), extent(xy), 2 * log2(root)),)
    return Curve(xy, True, regimes, "boundary of the dragon (Dekking 1982; A272031)")


def _reduced(word: NDArray[np.int8]) -> NDArray[np.int8]:
    """Strike out neighbouring steps that undo each other, round the ring as well, until none is left."""
    while (undone := np.flatnonzero(word[1:] == word[:-1] ^ 2)).size:
        run_start = np.concatenate([[True], np.diff(undone) > 1])
        place = np.arange(len(undone))
        in_run = place - np.maximum.accumulate(np.where(run_start, place, 0))
        first = undone[in_run % 2 == 0]
        word = np.delete(word, np.concatenate([first, first + 1]))
    ends = 0
    while ends < len(word) // 2 and word[ends] == word[-1 - ends] ^ 2:
        ends += 1
    return word[ends : len(word) - ends]
