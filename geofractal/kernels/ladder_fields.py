"""The columns of a judged ladder, and the codes of its verdict; x is ln r, y is ln L."""

from __future__ import annotations

FIELDS = (
    "dimension",
    "low",
    "high",
    "spread",
    "raw_dimension",
    "mean_x",
    "mean_y",
    "residual",
    "r2",
    "rungs",
    "first_x",
    "last_x",
    "verdict",
    "break_x",
    "break_low_x",
    "break_high_x",
    "fine_dimension",
    "coarse_dimension",
    "process_error",
    "own_error",
    "evidence",
)

(
    DIMENSION,
    LOW,
    HIGH,
    SPREAD,
    RAW_DIMENSION,
    MEAN_X,
    MEAN_Y,
    RESIDUAL,
    R2,
    RUNGS,
    FIRST_X,
    LAST_X,
    VERDICT,
    BREAK_X,
    BREAK_LOW_X,
    BREAK_HIGH_X,
    FINE_DIMENSION,
    COARSE_DIMENSION,
    PROCESS_ERROR,
    OWN_ERROR,
    EVIDENCE,
) = range(len(FIELDS))

POWER_LAW, TWO_REGIME, CURVED, SMOOTH, TOO_FEW = range(5)
