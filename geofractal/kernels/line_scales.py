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

RUN = 128
"""Consecutive segments that are looked at together for a grid: few enough to have one north."""

RUNS = 5
"""Runs of a feature that are looked at."""

FEWEST = 16
"""Segments of a run at least."""

ALIGNED = 0.1
"""Share of segments within 1.5 degrees of one direction, or square to it, from which that one is tried."""

FEWEST_ALIGNED = 6
"""Such segments at least: in a short line three or four agree by chance."""

OFF_GRID = 0.05
"""Distance from whole steps, in steps, up to which a coordinate difference counts as whole."""

ON_GRID = 0.9
"""Share of coordinate differences that are whole steps at least."""

LARGEST_WHOLE = 4.5
"""Whole steps up to which differences are looked at: scale varies over a map, long ones add up its error."""

SMALLEST_CELL = 0.3
"""Smallest step of a grid, in median segments. Below it a grid is only how coordinates were rounded."""


@kernel
def _source_lengths(xy: Floats, source: NDArray[np.bool_], starts: NDArray[np.int64]) -> Floats:
    """Return lengths above zero of segments between source vertices, at most about `SAMPLE`.

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
def _moves(xy: Floats, source: NDArray[np.bool_], starts: NDArray[np.int64], first: int) -> Floats:
    """Return up to `RUN` moves (east, north) between successive source vertices from vertex `first` on.

    In three dimensions they are laid on the plane square to the radius at `first`.
    """
    east, north = np.zeros(3), np.zeros(3)
    east[0], north[1] = 1.0, 1.0
    if xy.shape[1] == 3:
        x, y, z = xy[first, 0], xy[first, 1], xy[first, 2]
        flat, radius = np.sqrt(x * x + y * y), np.sqrt(x * x + y * y + z * z)
        if flat == 0.0:
            return np.empty((0, 2))
        east[0], east[1] = -y / flat, x / flat
        north[0], north[1], north[2] = -z * x / (flat * radius), -z * y / (flat * radius), flat / radius
    moves = np.zeros((RUN, 2))
    found = 0
    for p in range(len(starts) - 1):
        last = max(starts[p], first)
        for v in range(last + 1, starts[p + 1]):
            if found == RUN:
                break
            if not source[v]:
                continue
            moves[found] = 0.0
            for c in range(xy.shape[1]):
                moves[found, 0] += (xy[v, c] - xy[last, c]) * east[c]
                moves[found, 1] += (xy[v, c] - xy[last, c]) * north[c]
            if moves[found, 0] != 0.0 or moves[found, 1] != 0.0:
                found += 1
            last = v
    return moves[:found]


@kernel
def _step(sizes: Floats) -> float:
    """Return the largest step of which nearly all of the ascending sizes are whole multiples, or zero."""
    tenth = sizes[len(sizes) // 10]
    for part in range(1, 5):
        step = tenth / part
        for _ in range(2):
            whole, total, looked, on = 0.0, 0.0, 0, 0
            for k in range(len(sizes)):
                share = sizes[k] / step
                if share > LARGEST_WHOLE:
                    break
                looked += 1
                nearest = np.floor(share + 0.5)
                if abs(share - nearest) <= OFF_GRID:
                    on += 1
                    whole += nearest
                    total += sizes[k]
            if whole > 0.0:
                step = total / whole
        if 2 * looked >= len(sizes) and on >= ON_GRID * looked:
            return float(step)
    return 0.0


@kernel
def _cell(moves: Floats, turn: float) -> float:
    """Return the longer side of the cells of a grid at `turn` radians that the moves keep to, or zero.

    Where they keep to every second of its corners, it is a square grid at 45 degrees to `turn`, or one of
    triangles, as Koch's curve lies on, which no raster has.
    """
    n = len(moves)
    along = np.empty((2, n))
    sizes = np.empty((2, n))
    counts = np.zeros(2, np.int64)
    lengths = np.empty(n)
    for k in range(n):
        along[0, k] = np.cos(turn) * moves[k, 0] + np.sin(turn) * moves[k, 1]
        along[1, k] = np.cos(turn) * moves[k, 1] - np.sin(turn) * moves[k, 0]
        lengths[k] = np.hypot(moves[k, 0], moves[k, 1])
        for c in range(2):
            if abs(along[c, k]) > OFF_GRID * lengths[k]:
                sizes[c, counts[c]] = abs(along[c, k])
                counts[c] += 1
    if min(counts[0], counts[1]) < max(3.0, 0.05 * n):
        return 0.0
    one, two = _step(np.sort(sizes[0, : counts[0]])), _step(np.sort(sizes[1, : counts[1]]))
    if one == 0.0 or two == 0.0:
        one = _step(np.sort(np.concatenate((sizes[0, : counts[0]], sizes[1, : counts[1]]))))
        two = one
    if min(one, two) < SMALLEST_CELL * np.median(lengths):
        return 0.0
    even = 0
    for k in range(n):
        whole = np.floor(along[0, k] / one + 0.5) + np.floor(along[1, k] / two + 0.5)
        even += 1 if whole % 2.0 == 0.0 else 0
    if even < 0.98 * n:
        return float(max(one, two))
    return float(np.sqrt(2.0) * one) if abs(one / two - 1.0) < OFF_GRID else 0.0


@kernel
def _run_cell(moves: Floats) -> float:
    """Return the longer side of the cells that a run of moves was drawn along, or zero.

    Whatever way the grid is turned, some of the moves run along its axes or diagonals: directions that many
    share, a quarter turn apart or not, are tried.
    """
    n = len(moves)
    if n < FEWEST:
        return 0.0
    angles = np.empty(n)
    counts = np.zeros(90, np.int64)
    for k in range(n):
        angles[k] = np.degrees(np.arctan2(moves[k, 1], moves[k, 0])) % 90.0
        counts[int(angles[k] + 0.5) % 90] += 1
    for _ in range(4):
        best, most = 0, 0
        for a in range(90):
            near = counts[a - 1] + counts[a] + counts[(a + 1) % 90]
            if near > most:
                best, most = a, near
        if most < max(FEWEST_ALIGNED, ALIGNED * n):
            return 0.0
        total, near = 0.0, 0
        for k in range(n):
            off = (angles[k] - best + 45.0) % 90.0 - 45.0
            if abs(off) <= 1.5:
                total += off
                near += 1
        cell = _cell(moves, np.radians(best + total / max(near, 1)))
        if cell > 0.0:
            return cell
        for a in range(-1, 2):
            counts[(best + a) % 90] = 0
    return 0.0


@kernel
def _cell_side(xy: Floats, source: NDArray[np.bool_], starts: NDArray[np.int64]) -> float:
    """Return the median side of the cells that most runs of a line were drawn along, or zero."""
    size = starts[-1] - starts[0]
    runs = min(RUNS, max(1, size // RUN))
    cells = np.empty(runs)
    found, looked = 0, 0
    for r in range(runs):
        moves = _moves(xy, source, starts, starts[0] + r * (size // runs))
        if len(moves) >= FEWEST:
            looked += 1
            cells[found] = _run_cell(moves)
            found += 1 if cells[found] > 0.0 else 0
    return float(np.median(cells[:found])) if 2 * found > looked else 0.0


@kernel
def line_scales(
    xy: Floats,
    source: NDArray[np.bool_],
    part_offsets: NDArray[np.int64],
    feature_offsets: NDArray[np.int64],
) -> Floats:
    """Return (n, 4) scales of each feature in metres, NaN where it has no length.

    Columns: median source segment; extent of the largest part; length-weighted median source segment;
    longer side of the raster cells that it was drawn along, 0 for none.
    """
    n = len(feature_offsets) - 1
    out = np.full((n, 4), np.nan)
    for i in range(n):
        starts = part_offsets[feature_offsets[i] : feature_offsets[i + 1] + 1]
        lengths = _source_lengths(xy, source, starts)
        if len(lengths) == 0:
            continue
        lengths.sort()
        out[i, 0] = lengths[len(lengths) // 2]
        out[i, 2] = _half_of_length(lengths)
        extent = 0.0
        for p in range(len(starts) - 1):
            extent = max(extent, _part_extent(xy, starts[p], starts[p + 1]))
        out[i, 1] = extent
        out[i, 3] = _cell_side(xy, source, starts)
    return out
