"""The ladder: which rulers a feature is walked with, chosen from its own detail."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.line_scales import line_scales

if TYPE_CHECKING:
    from geofractal.measure import Floats, Ints, Lines

FIRST_RUNG_SEGMENTS = 3.0
"""First rung, in median source segments. Lines generalised to a tolerance t have segments of 2 to 5 t and
give lengths within 2 % of the full line's from rulers of 2 t on, so that three segments are above what
generalisation took. The same share of length that an unthinned fractional Brownian trail lacks there is
taken out by the fit."""

FIRST_RUNG_LONG_SEGMENTS = 2.0
"""First rung, in segments in which half of the length is reached, shortest first: decides where much of a
line is drawn in long segments."""

FIRST_RUNG_CELLS = 6.0
"""First rung of a staircase, in the longer sides of its cells. Tracing through cells, or snapping to a grid
as coarse as the vertices are dense, adds 4 to 25 % to the length at two cells (the more the higher the
dimension), 1 to 9 % at four and 0 to 4 % at eight."""

LAST_RUNG_EXTENT = 1.0 / 3.0
"""Last rung as a share of the extent; rungs on which too few steps were taken are then left out."""

RUNGS_PER_DECADE = 12


@dataclass(frozen=True, slots=True)
class Ladders:
    """Geometric ladders of n features: feature i owns ``rulers[offsets[i]:offsets[i + 1]]``.

    Attributes
    ----------
    offsets : (n + 1,)
    rulers : (k,) metres, ascending within a feature; a feature without usable scales owns none
    """

    offsets: Ints
    rulers: Floats

    def __len__(self) -> int:
        """Return the number of features."""
        return len(self.offsets) - 1

    @property
    def owners(self) -> Ints:
        """Return the feature that each rung belongs to, (k,)."""
        return np.repeat(np.arange(len(self)), np.diff(self.offsets))


def divider_ladders(
    lines: Lines,
    *,
    ruler_min_m: float | None = None,
    ruler_max_m: float | None = None,
    rungs: int | None = None,
    scales: Floats | None = None,
) -> Ladders:
    """Choose each feature's rulers from its own vertex spacing and extent.

    Parameters
    ----------
    lines : projected lines
    ruler_min_m, ruler_max_m : first and last ruler in metres; None chooses them from the feature
    rungs : number of rulers; None takes `RUNGS_PER_DECADE` a decade
    scales : (n, 4) of the lines where they are known already, see `scales_of`

    Returns
    -------
    Ladders
        A feature without length, or whose first ruler is not below its last, owns no rung.
    """
    scales = scales_of(lines) if scales is None else scales
    n = len(lines)
    lowest = np.full(n, float(ruler_min_m)) if ruler_min_m is not None else finest_rulers(scales)
    highest = np.full(n, float(ruler_max_m)) if ruler_max_m is not None else LAST_RUNG_EXTENT * scales[:, 1]
    highest[np.isnan(scales[:, 0])] = np.nan
    return geometric_ladders(lowest, highest, rungs)


def scales_of(lines: Lines) -> Floats:
    """Return the scales that each feature carries, (n, 4) as `line_scales` gives them."""
    return line_scales(lines.xy, lines.source_vertex, lines.part_offsets, lines.feature_offsets)


def finest_rulers(scales: Floats) -> Floats:
    """Return each feature's finest ruler above what its mapping resolved, metres, (n,).

    Parameters
    ----------
    scales : (n, 4) as `geofractal.kernels.line_scales.line_scales` gives them; NaN stays NaN
    """
    segments = np.maximum(FIRST_RUNG_SEGMENTS * scales[:, 0], FIRST_RUNG_LONG_SEGMENTS * scales[:, 2])
    return np.maximum(segments, FIRST_RUNG_CELLS * scales[:, 3])


def geometric_ladders(lowest: Floats, highest: Floats, rungs: int | None = None) -> Ladders:
    """Return one geometric ladder a feature, both ends included; none where not lowest < highest."""
    usable = (lowest > 0) & (lowest < highest) & np.isfinite(highest)
    decades = np.zeros(len(lowest))
    decades[usable] = np.log10(highest[usable] / lowest[usable])
    counts = np.ceil(decades * RUNGS_PER_DECADE).astype(np.int64) + 1 if rungs is None else rungs
    counts = np.where(usable, counts, 0)
    offsets = np.concatenate(([0], np.cumsum(counts)))
    place = np.arange(offsets[-1]) - np.repeat(offsets[:-1], counts)
    share = place / np.repeat(np.maximum(counts - 1, 1), counts)
    rulers = np.repeat(lowest, counts) * 10.0 ** (share * np.repeat(decades, counts))
    return Ladders(offsets.astype(np.int64), rulers)
