"""Cell maps of exactly known dimension, for counting in rasters."""

from __future__ import annotations

from math import log

import numpy as np
from numpy.typing import NDArray

from geofractal.synthetic.curve import CellMap

GASKET = np.array([[True, False], [True, True]])
"""Pattern of the triangle gasket in right-angled form, D = ln 3 / ln 2."""
CARPET = np.array([[True, True, True], [True, False, True], [True, True, True]])
"""Pattern of the square carpet, D = ln 8 / ln 3."""


def carpet(pattern: NDArray[np.bool_] = CARPET, *, level: int) -> CellMap:
    """Replace every True cell by the pattern, `level` times: side^level cells a side.

    Parameters
    ----------
    pattern : (side, side) with at least one True cell; D = ln(True cells) / ln(side)
    level : number of replacements, 0 gives the one cell

    Notes
    -----
    Sierpinski (1916), C. R. Acad. Sci. Paris 162:629-632; dimension Moran (1946).
    """
    side = _side(pattern.shape, level)
    if not pattern.any():
        raise ValueError("pattern without a True cell: the map would be empty and have no dimension")
    cells = np.ones((1, 1), dtype=np.bool_)
    for _ in range(level):
        cells = np.kron(cells, pattern).astype(np.bool_)
    return CellMap(
        cells, log(int(pattern.sum())) / log(side), "carpet (Sierpinski 1916); dimension Moran 1946"
    )


def random_carpet(side: int, kept: int, *, level: int, seed: int) -> CellMap:
    """Divide every cell into side x side and keep `kept` of them at random, `level` times.

    Notes
    -----
    The number kept is fixed, so D = ln(kept) / ln(side) is exact for every draw: Mauldin & Williams
    (1986), Falconer (1986).
    """
    _side((side, side), level)
    if not 1 <= kept <= side**2:
        raise ValueError(f"{kept} cells kept of {side**2}: between 1 and all")
    rng = np.random.default_rng(seed)
    cells = np.ones((1, 1), dtype=np.bool_)
    for _ in range(level):
        rows, columns = np.nonzero(cells)
        draws = np.argsort(rng.random((len(rows), side**2)), axis=1)[:, :kept]
        grown = np.zeros((len(cells) * side, len(cells) * side), dtype=np.bool_)
        grown[rows[:, None] * side + draws // side, columns[:, None] * side + draws % side] = True
        cells = grown
    return CellMap(cells, log(kept) / log(side), "random carpet (Mauldin & Williams 1986, Falconer 1986)")


def _side(shape: tuple[int, ...], level: int) -> int:
    if len(shape) != 2 or shape[0] != shape[1] or shape[0] < 2:
        raise ValueError(f"pattern of shape {shape}: a square of at least 2 x 2 is needed")
    if level < 0:
        raise ValueError(f"level {level}: the number of replacements is 0 or more")
    return shape[0]
