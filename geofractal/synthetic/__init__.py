"""Curves and maps of exactly known dimension: for calibration, demonstration and tests.

Every generator is seeded where it draws, and returns its coordinates together with the dimension that is
exact for them, the scales between which it holds, and the source. Lengths are in units of the whole unless
a docstring says otherwise; `Curve.scaled` turns them into metres.
"""

from geofractal.synthetic.cells import CARPET, GASKET, carpet, random_carpet
from geofractal.synthetic.curve import CellMap, Curve, Regime
from geofractal.synthetic.degrade import generalised, polygonised, snapped, traced
from geofractal.synthetic.koch import (
    gasket,
    gosper_island,
    koch,
    minkowski_island,
    quadratic_koch,
    random_koch,
    random_midpoint,
    random_ratio_koch,
    two_regimes,
)
from geofractal.synthetic.lattice import dragon_boundary
from geofractal.synthetic.similarity import similarity_dimension
from geofractal.synthetic.smooth import arc, circle, line, meander
from geofractal.synthetic.trails import fractional_trail, loop_erased_walk, percolation_border

__all__ = [
    "CARPET",
    "GASKET",
    "CellMap",
    "Curve",
    "Regime",
    "arc",
    "carpet",
    "circle",
    "dragon_boundary",
    "fractional_trail",
    "gasket",
    "generalised",
    "gosper_island",
    "koch",
    "line",
    "loop_erased_walk",
    "meander",
    "minkowski_island",
    "percolation_border",
    "polygonised",
    "quadratic_koch",
    "random_carpet",
    "random_koch",
    "random_midpoint",
    "random_ratio_koch",
    "similarity_dimension",
    "snapped",
    "traced",
    "two_regimes",
]
