"""Constants set by simulation on curves of exactly known dimension, one set an estimator.

`tests/benchmarks/calibration_tables.py` prints what they achieve; the developers' guide tells which curves
set them and which were kept apart to judge them.
"""

from __future__ import annotations

from geofractal.kernels.ladder_judge import Constants

DIVIDER = Constants(
    fewest_steps=4.0,
    fewest_ring_steps=8.0,
    sure_steps=50.0,
    ramp=1.2,
    fine_bias=0.4,
    coarse_bias=1.2,
    crowding=0.0,
    own_least=0.52,
    own_low=0.42,
    own_long=0.5,
    own_without=0.6,
    ring=1.5,
    bend=0.6,
    bias_doubt=1.0,
    quantile=2.35,
    skew=1.0,
    tilt=0.08,
    ripple_share=0.56,
    threshold=1.1,
    break_shift=0.38,
    smooth_below=1.01,
    fewest_decades=0.5,
)

BOX = DIVIDER._replace(own_without=0.6)
