"""The exact divider walk over ragged lines, in the plane or in three dimensions.

From a point of the line the next one is the first along the line at straight distance r. Distance is
convex along a straight segment, so it is enough to find the first *vertex* that is not inside the
circle; a hierarchy of bounding boxes passes over whole stretches that are.
"""

# ruff: noqa: FBT001 - kernels take flat values one by one, by position

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

TIE = 1e-9
"""Relative tolerance at which a vertex counts as lying on the circle: rounding would otherwise make a
walk miss circles that only touch the line, as they do all along a Koch curve."""

_SNAP = 1e-6
"""A start within this share of a segment from its end is the vertex itself."""

_SHIFT = 4  # a box holds 2**4 vertices, or as many boxes of the level below
_EDGE = (1 << _SHIFT) - 1


@kernel
def _gap(xy: Floats, i: int, j: int) -> float:
    """Straight distance of two vertices."""
    square = 0.0
    for k in range(xy.shape[1]):
        square += (xy[j, k] - xy[i, k]) ** 2
    return math.sqrt(square)


@kernel
def _outermost(xy: Floats, first: int, last: int) -> int:
    """Find a ring's vertex farthest from its centre: a start that does not depend on how it is stored."""
    size = xy.shape[1]
    centre = np.zeros(3)
    total = 0.0
    for i in range(first, last - 1):
        step = _gap(xy, i, i + 1)
        total += step
        for k in range(size):
            centre[k] += step * ((xy[i, k] + xy[i + 1, k]) / 2 - xy[first, k])
    if total > 0:
        centre /= total
    farthest = -1.0
    origin = first
    for i in range(first, last - 1):
        square = 0.0
        for k in range(size):
            square += (xy[i, k] - xy[first, k] - centre[k]) ** 2
        if square > farthest:
            farthest = square
            origin = i
    return origin


@kernel
def _line_order(xy: Floats, first: int, last: int) -> tuple[int, int]:
    """End and direction of an open line that do not depend on which way it was drawn."""
    for k in range(xy.shape[1]):
        if xy[first, k] < xy[last - 1, k]:
            return first, 1
        if xy[first, k] > xy[last - 1, k]:
            return last - 1, -1
    return first, 1


@kernel
def _order(xy: Floats, first: int, last: int, closed: bool) -> tuple[int, int]:
    """First vertex and direction in which a part is taken."""
    return (_outermost(xy, first, last), 1) if closed else _line_order(xy, first, last)


@kernel
def _next(i: int, first: int, last: int, way: int, closed: bool) -> int:
    """Vertex after `i`; a ring's last vertex is its first."""
    i += way
    if closed and i == last - 1:
        return first
    return last - 2 if closed and i < first else i


@kernel
def _total(xy: Floats, first: int, last: int, origin: int, way: int, closed: bool) -> float:
    """Length of a part's polyline, summed in the order in which it is taken."""
    total = 0.0
    i = origin
    for _ in range(last - first - 1):
        j = _next(i, first, last, way, closed)
        total += _gap(xy, i, j)
        i = j
    return total


@kernel
def _lay_path(
    xy: Floats, first: int, last: int, origin: int, way: int, closed: bool, starts: int, total: float
) -> tuple[Floats, Ints]:
    """Copy a part with vertices inserted where walks start: at every ``total / starts`` of its length.

    Returns the path and the index of each start; a ring ends with its first vertex repeated.
    """
    size = xy.shape[1]
    path = np.empty((last - first + starts - 1, size))
    marks = np.zeros(starts, np.int64)
    for k in range(size):
        path[0, k] = xy[origin, k]
    filled = 1
    mark = 1
    along = 0.0
    i = origin
    for _ in range(last - first - 1):
        j = _next(i, first, last, way, closed)
        step = _gap(xy, i, j)
        while mark < starts and total * mark / starts < along + step * (1 - _SNAP):
            t = (total * mark / starts - along) / step
            if t > _SNAP:
                for k in range(size):
                    path[filled, k] = xy[i, k] + t * (xy[j, k] - xy[i, k])
                filled += 1
            marks[mark] = filled - 1
            mark += 1
        for k in range(size):
            path[filled, k] = xy[j, k]
        filled += 1
        along += step
        i = j
    return path[:filled], marks


@kernel
def _box_levels(count: int) -> Ints:
    """First box of each level of the hierarchy over `count` vertices, and the number of all boxes."""
    levels = 0
    size = count >> _SHIFT
    while size > 1:
        levels += 1
        size >>= _SHIFT
    bases = np.zeros(levels + 1, np.int64)
    size = count
    for level in range(levels):
        size = (size + _EDGE) >> _SHIFT
        bases[level + 1] = bases[level] + size
    return bases


@kernel
def _boxes(path: Floats, bases: Ints) -> Floats:
    """Bounding boxes of every 16, 256, 4096, ... vertices: lowest corner, then highest."""
    size = path.shape[1]
    levels = bases.size - 1
    boxes = np.empty((bases[levels], 2 * size))
    for level in range(levels):
        below = path.shape[0] if level == 0 else bases[level] - bases[level - 1]
        for b in range(bases[level + 1] - bases[level]):
            start = b << _SHIFT
            end = min(start + _EDGE + 1, below)
            for k in range(size):
                low = math.inf
                high = -math.inf
                for i in range(start, end):
                    low = min(low, path[i, k] if level == 0 else boxes[bases[level - 1] + i, k])
                    high = max(high, path[i, k] if level == 0 else boxes[bases[level - 1] + i, size + k])
                boxes[bases[level] + b, k] = low
                boxes[bases[level] + b, size + k] = high
    return boxes


@kernel
def _box_inside(boxes: Floats, b: int, cx: float, cy: float, cz: float, near: float) -> bool:
    """Whether the farthest corner of a box is inside the circle of squared radius `near`."""
    flat = boxes.shape[1] == 4
    high = 2 if flat else 3
    dx = max(cx - boxes[b, 0], boxes[b, high] - cx)
    dy = max(cy - boxes[b, 1], boxes[b, high + 1] - cy)
    dz = 0.0 if flat else max(cz - boxes[b, 2], boxes[b, 5] - cz)
    return bool(dx * dx + dy * dy + dz * dz < near)


@kernel
def _first_outside(
    path: Floats,
    boxes: Floats,
    bases: Ints,
    levels: int,
    k: int,
    stop: int,
    way: int,
    cx: float,
    cy: float,
    cz: float,
    near: float,
) -> int:
    """First vertex from `k` to `stop` that is not inside the circle of squared radius `near`, or -1."""
    flat = path.shape[1] == 2
    corner = 0 if way > 0 else _EDGE
    while (stop - k) * way >= 0:
        if levels > 0 and k & _EDGE == corner and _box_inside(boxes, k >> _SHIFT, cx, cy, cz, near):
            level = 0
            block = k >> _SHIFT
            climbing = True
            while climbing:
                climbing = (
                    level + 1 < levels
                    and block & _EDGE == corner
                    and _box_inside(boxes, bases[level + 1] + (block >> _SHIFT), cx, cy, cz, near)
                )
                if climbing:
                    level += 1
                    block >>= _SHIFT
            k += way << (_SHIFT * (level + 1))
        else:
            dx = path[k, 0] - cx
            dy = path[k, 1] - cy
            dz = 0.0 if flat else path[k, 2] - cz
            if dx * dx + dy * dy + dz * dz >= near:
                return k
            k += way
    return -1


@kernel
def _walk(
    path: Floats,
    boxes: Floats,
    bases: Ints,
    levels: int,
    total: float,
    start: int,
    way: int,
    closed: bool,
    chord: float,
    cuts: Ints,
    tally: Floats,
) -> tuple[int, float]:
    """Walk from vertex `start` to the end of the line, or once around; count steps, measure the rest.

    Each step is also counted in `tally`, for the stretch between two `cuts` in which it ends.
    """
    flat = path.shape[1] == 2
    near = (chord * (1 - TIE)) ** 2
    cx, cy, cz = path[start, 0], path[start, 1], 0.0 if flat else path[start, 2]
    k = start + way
    stop = len(path) - 1 if way > 0 else 0
    end = start if closed else stop
    lap_left = closed
    on_segment = True  # the present point lies on the segment that ends at vertex k
    steps = 0
    stretch = 0
    for _ in range(int(total / chord * (1 + 1e-6)) + 4):
        j = _first_outside(path, boxes, bases, levels, k, stop, way, cx, cy, cz, near)
        if j < 0 and lap_left:
            lap_left = False
            k, stop, on_segment = (1 if way > 0 else len(path) - 2), start, False
        elif j < 0:
            break
        else:
            bx, by, bz = path[j, 0], path[j, 1], 0.0 if flat else path[j, 2]
            dx, dy, dz = bx - cx, by - cy, bz - cz
            far = math.sqrt(dx * dx + dy * dy + dz * dz)
            count = 1
            snap = far <= chord * (1 + TIE)
            if j == k and on_segment:
                count = int(far / chord + TIE)
                snap = far - count * chord <= TIE * chord
                t = count * chord / far
                px, py, pz = cx, cy, cz
            else:
                px, py, pz = path[j - way, 0], path[j - way, 1], 0.0 if flat else path[j - way, 2]
                wx, wy, wz = px - cx, py - cy, pz - cz
                dx, dy, dz = bx - px, by - py, bz - pz
                A = dx * dx + dy * dy + dz * dz
                B = wx * dx + wy * dy + wz * dz
                C = wx * wx + wy * wy + wz * wz - chord * chord
                t = (math.sqrt(max(B * B - A * C, 0.0)) - B) / A if not snap else 1.0
            steps += count
            if tally.size > 0:
                while stretch < cuts.size and j > cuts[stretch]:
                    stretch += 1
                while stretch > 0 and j <= cuts[stretch - 1]:
                    stretch -= 1
                tally[stretch] += count
            if snap:
                cx, cy, cz = bx, by, bz
                k = j + way
            else:
                cx, cy, cz = px + t * dx, py + t * dy, pz + t * dz
                k = j
            on_segment = True
    dx, dy, dz = path[end, 0] - cx, path[end, 1] - cy, 0.0 if flat else path[end, 2] - cz
    return steps, math.sqrt(dx * dx + dy * dy + dz * dz)


@kernel
def _cut(path: Floats, before: float, whole: float, stretches: int) -> Ints:
    """Return the last vertices of all but the last of the stretches of equal length of a feature.

    The path is the part that begins after a length of `before` out of `whole`; a stretch that ends before
    it or after it is cut at vertex -1 or behind its last.
    """
    cuts = np.full(max(stretches - 1, 0), len(path), np.int64)
    along = before
    reached = 0
    for i in range(len(path) if stretches > 1 else 0):
        if i > 0:
            along += _gap(path, i - 1, i)
        while reached < stretches - 1 and along > whole * (reached + 1) / stretches:
            cuts[reached] = i - 1
            reached += 1
    return cuts


@kernel
def _chord(arc: float, radius: float) -> float:
    """Straight distance under an arc on a sphere; NaN where the arc passes the antipode."""
    if math.isinf(radius):
        return arc
    return 2 * radius * math.sin(arc / (2 * radius)) if arc <= math.pi * radius else math.nan


@kernel
def _arc(chord: float, radius: float) -> float:
    """Arc on a sphere over a straight distance."""
    if math.isinf(radius):
        return chord
    return 2 * radius * math.asin(min(chord / (2 * radius), 1.0))


@kernel
def _walk_from(
    path: Floats,
    boxes: Floats,
    bases: Ints,
    levels: int,
    total: float,
    mark: int,
    way: int,
    closed: bool,
    radius: float,
    ruler: float,
    chord: float,
    cuts: Ints,
    tally: Floats,
) -> tuple[int, float]:
    """Return steps and L(r) from vertex `mark`: around a ring one way, or to both ends of an open line."""
    if closed:
        steps, gap = _walk(path, boxes, bases, levels, total, mark, way, closed, chord, cuts, tally)
        return steps, ruler * steps + _arc(gap, radius)
    steps = 0
    rest = 0.0
    for turn in range(1, -2, -2):
        if mark != (len(path) - 1 if turn > 0 else 0):
            taken, gap = _walk(path, boxes, bases, levels, total, mark, turn, closed, chord, cuts, tally)
            steps += taken
            rest += _arc(gap, radius)
    return steps, ruler * steps + rest


@kernel
def _walk_rung(
    path: Floats,
    boxes: Floats,
    bases: Ints,
    marks: Ints,
    total: float,
    closed: bool,
    radius: float,
    ruler: float,
    enough: int,
    cuts: Ints,
    tally: Floats,
) -> tuple[int, float, float, float]:
    """Walk a part both ways from its first start, then from as many further starts as are needed.

    Returns the number of walks, the mean and variance of their L(r), and their mean steps. No walk
    counts where one from an open line's end, or from any start of a ring, takes no step.
    """
    chord = _chord(ruler, radius)
    levels = bases.size - 1
    walked = np.empty(2 * len(marks))
    starts, stride, s, steps, count = 1, 1, 0, 0, 0
    possible = chord > 0
    while s < starts and possible:
        for way in range(1, -2, -2):
            mark = len(path) - 1 if s == 0 and way < 0 and not closed else marks[s * stride]
            if closed or s == 0 or way > 0:
                n, walked[count] = _walk_from(
                    path, boxes, bases, levels, total, mark, way, closed, radius, ruler, chord, cuts, tally
                )
                steps += n
                count += 1
                possible = possible and (n > 0 or (s > 0 and not closed))
        if s == 0:
            while starts < len(marks) and starts * (steps // count) < enough:
                starts = min(2 * starts, len(marks))
            stride = len(marks) // starts
        s += 1
    if not possible:
        return 0, 0.0, 0.0, 0.0
    mean = 0.0
    for s in range(count):
        mean += walked[s] / count
    square = 0.0
    for s in range(count):
        square += (walked[s] - mean) ** 2
    return count, mean, square / (count - 1), steps / count


@kernel
def walk_ladders(
    xy: Floats,
    part_offsets: Ints,
    feature_offsets: Ints,
    closed: Bools,
    radius: Floats,
    rung_offsets: Ints,
    rulers: Floats,
    most_starts: int,
    enough_steps: int,
    inner_starts: bool,
    stretches: int,
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """Walk every feature with every ruler of its own ladder.

    An open line is walked from both ends, a ring both ways around from its vertex farthest from its
    centre. Where such a walk takes fewer than `enough_steps`, further starts are added, evenly spaced
    along the part, until starts x steps reach that number: a ring is walked both ways from each, an
    open line from each to both ends. (Walks the same way around soon fall into each other's steps,
    whatever their start, so that one way alone may be off by more than its starts show.)

    A part is long enough for a ruler where a whole step can be taken from each end of an open line, or
    from every starting point of a ring. The lengths of such parts add up; of the others the length of
    the polyline is left out.

    Parameters
    ----------
    xy, part_offsets, feature_offsets, closed, radius : as in `geofractal.measure.Lines`
    rung_offsets : (n + 1,) feature ``i`` owns rulers ``rung_offsets[i]:rung_offsets[i + 1]``
    rulers : (q,) metres
    most_starts : starts of a part at most, a power of two
    enough_steps : steps that one ruler's walks of a part should take together
    inner_starts : whether open lines have further starts, or rings alone
    stretches : number of stretches of equal length whose steps are counted apart

    Returns
    -------
    length : (q,) mean walked length in metres; NaN where no part is long enough
    spread : (q,) standard deviation of one walk over starts and directions
    steps : (q,) mean number of whole steps of a walk
    left_out : (q,) polyline length in metres of the parts that are not long enough
    tallies : (q, stretches) mean number of whole steps that end in each stretch of the feature
    """
    tallies = np.zeros((rulers.size, stretches))
    tally = np.zeros(stretches)
    length = np.zeros(rulers.size)
    spread = np.zeros(rulers.size)
    steps = np.zeros(rulers.size)
    left_out = np.zeros(rulers.size)
    for f in range(feature_offsets.size - 1):
        lo = rung_offsets[f]
        hi = rung_offsets[f + 1]
        if lo == hi:
            continue
        totals = np.empty(feature_offsets[f + 1] - feature_offsets[f])
        for p in range(feature_offsets[f], feature_offsets[f + 1]):
            origin, way = _order(xy, part_offsets[p], part_offsets[p + 1], closed[p])
            totals[p - feature_offsets[f]] = _total(
                xy, part_offsets[p], part_offsets[p + 1], origin, way, closed[p]
            )
        whole = totals.sum()
        before = 0.0
        for p in range(feature_offsets[f], feature_offsets[f + 1]):
            first = part_offsets[p]
            last = part_offsets[p + 1]
            total = totals[p - feature_offsets[f]]
            if total > 0:
                if closed[p] or (inner_starts and most_starts > 1):
                    origin, way = _order(xy, first, last, closed[p])
                    path, marks = _lay_path(xy, first, last, origin, way, closed[p], most_starts, total)
                else:
                    path, marks = xy[first:last], np.zeros(1, np.int64)
                bases = _box_levels(len(path))
                boxes = _boxes(path, bases)
                cuts = _cut(path, before, whole, stretches)
                before += total
                for q in range(lo, hi):
                    tally[:] = 0.0
                    walks, mean, variance, taken = _walk_rung(
                        path, boxes, bases, marks, total, closed[p], radius[f], rulers[q], enough_steps,
                        cuts, tally,
                    )  # fmt: skip
                    if walks > 0:
                        length[q] += mean
                        spread[q] += variance
                        steps[q] += taken
                        for k in range(stretches):
                            tallies[q, k] += tally[k] / walks
                    else:
                        left_out[q] += total
        for q in range(lo, hi):
            if steps[q] > 0:
                spread[q] = math.sqrt(spread[q])
            else:
                length[q] = math.nan
                spread[q] = math.nan
    return length, spread, steps, left_out, tallies
