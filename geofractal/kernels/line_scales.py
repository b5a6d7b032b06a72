"""The scales that a mapped line carries: its vertex spacing and its extent."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.jit import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

SAMPLE = 16_384
"""Segments sorted for a feature's quantiles at most: longer features give an even sample."""


@kernel
def _source_segments(
    xy: NDArray[np.float64], source: NDArray[np.bool_], starts: NDArray[np.int64]
) -> NDArray[np.float64]:
    """Return the lengths above zero of the segments between source vertices, parts kept apart.

    `starts` holds the first vertex of each part and the end of the last.
    """
    step = max(1, (starts[-1] - starts[0]) // SAMPLE)
    lengths = np.empty((starts[-1] - starts[0]) // step + len(starts))
    found, seen = 0, 0
    for p in range(len(starts) - 1):
        last = starts[p]
        for v in range(starts[p] + 1, starts[p + 1]):
            if not source[v]:
                continue
            seen += 1
            if seen % step == 0:
                square = 0.0
                for c in range(xy.shape[1]):
                    square += (xy[v, c] - xy[last, c]) ** 2
                if square > 0.0:
                    lengths[found] = np.sqrt(square)
                    found += 1
            last = v
    return lengths[:found]


@kernel
def _part_extent(xy: NDArray[np.float64], start: int, stop: int) -> float:
    """Return sqrt(12) times the radius of gyration of a part's length: the length of a straight line.

    Unlike a bounding box it does not change when the map is turned or the start of a ring is moved.
    """
    size = xy.shape[1]
    first = np.zeros(3)
    weight, second = 0.0, 0.0
    for v in range(start + 1, stop):
        square = 0.0
        for c in range(size):
            square += (xy[v, c] - xy[v - 1, c]) ** 2
        length = np.sqrt(square)
        weight += length
        for c in range(size):
            middle = 0.5 * (xy[v, c] + xy[v - 1, c]) - xy[start, c]
            first[c] += length * middle
            second += length * middle * middle
        second += length * square / 12.0
    if weight == 0.0:
        return 0.0
    spread = second / weight - (first[0] ** 2 + first[1] ** 2 + first[2] ** 2) / weight**2
    return float(np.sqrt(12.0 * max(spread, 0.0)))


@kernel
def line_scales(
    xy: NDArray[np.float64],
    source: NDArray[np.bool_],
    part_offsets: NDArray[np.int64],
    feature_offsets: NDArray[np.int64],
) -> NDArray[np.float64]:
    """Return (n, 2) median source segment and extent of the largest part, NaN where there is no length."""
    n = len(feature_offsets) - 1
    out = np.full((n, 2), np.nan)
    for i in range(n):
        starts = part_offsets[feature_offsets[i] : feature_offsets[i + 1] + 1]
        lengths = _source_segments(xy, source, starts)
        if len(lengths) == 0:
            continue
        lengths.sort()
        out[i, 0] = lengths[len(lengths) // 2]
        extent = 0.0
        for p in range(len(starts) - 1):
            extent = max(extent, _part_extent(xy, starts[p], starts[p + 1]))
        out[i, 1] = extent
    return out
