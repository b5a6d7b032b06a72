"""Constants set by simulation on curves of exactly known dimension, one set an estimator.

`tests/benchmarks/calibration_tables.py` prints what they achieve; the developers' guide tells which curves
set them and which were kept apart to judge them.
"""

from __future__ import annotations

from geofractal.kernels.ladder_judge import Constants

DIVIDER = Constants(
    fewest_steps=4.0,
    fewest_ring_steps=8.0,
    sure_ring_steps=24.0,
    sure_steps=50.0,
    ramp=1.2,
    fine_bias=0.4,
    coarse_bias=1.2,
    crowding=0.0,
    own_least=0.52,
    own_low=0.42,
    own_long=0.5,
    own_without=0.6,
    ring=1.8,
    ring_doubt=1.0,
    bend=0.6,
    ripple=3.0,
    bias_doubt=1.0,
    quantile=2.3,
    skew=1.0,
    tilt=0.1,
    ripple_share=0.56,
    threshold=1.1,
    break_shift=0.38,
    smooth_below=1.01,
    fewest_decades=0.5,
)

BOX = DIVIDER._replace(
    coarse_bias=0.0,
    crowding=0.25,
    own_least=0.6,
    own_low=0.6,
    ring_doubt=0.0,
    ripple=0.0,
    bias_doubt=1.5,
    quantile=2.8,
    tilt=0.16,
    threshold=1.8,
)
"""`crowding`: strands that lie close share boxes, so that counts are the more too low the higher the
dimension and the shorter the ladder. 0.4 would set trails right that cross themselves, 0 curves drawn by a
rule: 0.25 lies between, and the doubt about it widens the interval."""
