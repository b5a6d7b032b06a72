"""The scales that a mapped line carries: its vertex spacing, its extent, the cells it was traced from."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.jit import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

SAMPLE = 16_384
"""Segments sorted for a feature's quantiles at most: longer features give an even sample."""

FEW = 256
"""Segments whose directions are looked at."""

FEWEST = 16
"""Segments that a staircase has at least."""

SIDES = 180
"""Classes of direction, one degree each; opposite directions are one."""


@kernel
def _source_segments(
    xy: Floats, source: NDArray[np.bool_], starts: NDArray[np.int64], most: int
) -> tuple[Floats, Floats]:
    """Return lengths above zero and planar directions in degrees of segments between source vertices.

    `starts` holds the first vertex of each part and the end of the last; of more than `most` segments
    an even sample is taken.
    """
    step = max(1, (starts[-1] - starts[0]) // most)
    lengths = np.empty((starts[-1] - starts[0]) // step + len(starts))
    angles = np.empty(len(lengths))
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
                    if most <= FEW:
                        angles[found] = np.degrees(np.arctan2(xy[v, 1] - xy[last, 1], xy[v, 0] - xy[last, 0]))
                    found += 1
            last = v
    return lengths[:found], angles[:found]


@kernel
def _part_extent(xy: Floats, start: int, stop: int) -> float:
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
def _half_of_length(ordered: Floats) -> float:
    """Return the length of the segment in which half of all length is reached, shortest first."""
    whole, reached, k = ordered.sum(), 0.0, -1
    while reached < 0.5 * whole and k < len(ordered) - 1:
        k += 1
        reached += ordered[k]
    return float(ordered[k])


@kernel
def _repeats(ordered: Floats) -> bool:
    """Whether a tenth of the lengths lie within 1.5 % of each other, as steps through cells do."""
    tenth = len(ordered) // 10
    for d in range(10):  # noqa: SIM110 - compiled code has no generators
        if ordered[(d + 1) * tenth - 1] < 1.015 * ordered[d * tenth]:
            return True
    return False


@kernel
def _staircase(lengths: Floats, angles: Floats) -> float:
    """Return the side of the raster cells that a line was traced from, or zero.

    Its steps have four directions at most (two axes and two diagonals, whatever way the raster is
    turned and whatever the cells' shape), two of them 90 or 45 degrees apart, none nearly alone; and
    along each direction they are whole multiples of one step.
    """
    n = len(lengths)
    counts = np.zeros(SIDES, np.int64)
    sides = np.empty(n, np.int64)
    for k in range(n):
        sides[k] = int(np.floor(angles[k] + 360.5)) % SIDES
        counts[sides[k]] += 1
    picked = np.full(4, -1, np.int64)
    held = np.zeros(4, np.int64)
    regular = 0
    cell = np.inf
    for d in range(4):
        best, most = -1, 0
        for a in range(SIDES):
            near = counts[a - 1] + counts[a] + counts[(a + 1) % SIDES]
            if near > most:
                best, most = a, near
        if most < 2:
            continue
        picked[d], held[d] = best, most
        chosen = np.empty(most)
        filled = 0
        for k in range(n):
            if (sides[k] - best + 1) % SIDES < 3 and filled < most:
                chosen[filled] = lengths[k]
                filled += 1
        for a in range(-1, 2):
            counts[(best + a) % SIDES] = 0
        chosen = np.sort(chosen[:filled])
        unit = chosen[filled // 10]
        cell = min(cell, unit) if most >= 0.1 * n else cell
        for k in range(filled):
            share = chosen[k] / unit
            if abs(share - np.floor(share + 0.5)) < 0.05:
                regular += 1
    square = False
    for a in range(4):
        for b in range(a):
            if held[a] > 0 and held[b] > 0:
                turn = abs((picked[a] - picked[b] + 90) % SIDES - 90)
                square = square or turn >= 88 or abs(turn - 45) <= 2
    return cell if square and regular >= 0.8 * n and held[0] <= 0.9 * n else 0.0


@kernel
def line_scales(
    xy: Floats,
    source: NDArray[np.bool_],
    part_offsets: NDArray[np.int64],
    feature_offsets: NDArray[np.int64],
) -> Floats:
    """Return (n, 4) scales of each feature in metres, NaN where it has no length.

    Columns: median source segment; extent of the largest part; length-weighted median source segment;
    side of the raster cells it was traced from, 0 for none (looked for on planes only).
    """
    n = len(feature_offsets) - 1
    out = np.full((n, 4), np.nan)
    for i in range(n):
        starts = part_offsets[feature_offsets[i] : feature_offsets[i + 1] + 1]
        lengths, _ = _source_segments(xy, source, starts, SAMPLE)
        if len(lengths) == 0:
            continue
        lengths.sort()
        out[i, 0] = lengths[len(lengths) // 2]
        out[i, 2] = _half_of_length(lengths)
        extent = 0.0
        for p in range(len(starts) - 1):
            extent = max(extent, _part_extent(xy, starts[p], starts[p + 1]))
        out[i, 1] = extent
        out[i, 3] = 0.0
        if xy.shape[1] == 2 and len(lengths) >= FEWEST and _repeats(lengths):
            few, angles = _source_segments(xy, source, starts, FEW)
            out[i, 3] = _staircase(few, angles)
    return out
