"""Constants set by simulation on curves of exactly known dimension, one set an estimator.

`tests/benchmarks/calibration_tables.py` prints what they achieve; the developers' guide tells which curves
set them and which were kept apart to judge them.
"""

from __future__ import annotations

from typing import NamedTuple

from geofractal.kernels.ladder_judge import Constants

DIVIDER = Constants(
    fewest_steps=4.0,
    fewest_ring_steps=8.0,
    sure_ring_steps=24.0,
    sure_steps=50.0,
    ramp=1.2,
    fine_bias=0.4,
    coarse_bias=1.2,
    ring_turn=1.15,
    own_least=0.52,
    own_low=0.425,
    own_long=-0.2,
    own_long_below=0.4,
    own_without=0.6,
    ring=1.8,
    ring_doubt=1.0,
    bend=0.6,
    ripple=3.0,
    bias_doubt=1.0,
    quantile=2.3,
    skew=1.0,
    tilt=0.22,
    tilt_fade=1.9,
    tilt_power=2.0,
    lean=0.25,
    ripple_share=0.66,
    threshold=1.1,
    rough_threshold=1.4,
    break_shift=0.45,
    smooth_below=1.01,
    fewest_decades=0.5,
)

BOX = DIVIDER._replace(
    coarse_bias=0.0,
    ring_turn=0.0,
    own_least=0.6,
    own_low=0.6,
    own_long=0.5,
    own_long_below=0.15,
    ring_doubt=0.0,
    ripple=0.0,
    bias_doubt=1.5,
    quantile=3.1,
    tilt=0.16,
    tilt_fade=2.0,
    tilt_power=1.0,
    lean=0.1,
    ripple_share=0.56,
    threshold=1.8,
    rough_threshold=1.0,
    break_shift=0.38,
)
"""What lines that share boxes with themselves lack is made up for before: `geofractal.scaling.crowding`."""


class CellConstants(NamedTuple):
    """What simulation set for box counts of raster cells; see `geofractal.scaling.cells`."""

    fewest_boxes: int
    fewest_sizes: int
    fewest_decades: float
    sure_boxes: float
    crowding: float
    crowding_fades: float
    corrected: float
    doubt: float
    few_blocks: float
    ripple: float
    quantile: float
    margin: float
    hinge_share: float
    cubic_share: float
    least_bend: float
    sureness: float
    most_residual: float
    clear_turn: float
    effective_reach: float
    smooth_below: float


CELLS = CellConstants(
    fewest_boxes=6,
    fewest_sizes=5,
    fewest_decades=0.5,
    sure_boxes=50.0,
    crowding=1.1,
    crowding_fades=0.7,
    corrected=0.5,
    doubt=0.3,
    few_blocks=0.08,
    ripple=2.0,
    quantile=2.3,
    margin=0.2,
    hinge_share=0.62,
    cubic_share=0.55,
    least_bend=0.018,
    sureness=1.4,
    most_residual=0.12,
    clear_turn=3.0,
    effective_reach=1.25,
    smooth_below=1.03,
)
"""Sizes from the first with fewer than `fewest_boxes` on are left out. `crowding` is what random families
lack of their slope at one decade; `least_bend`, in ln boxes a decade, is what percolation clusters and trails
mostly bend at most; `most_residual` is what carpets on the lattice of the cells mostly leave at most."""
