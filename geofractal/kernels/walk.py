"""The exact divider walk over ragged lines, in the plane or in three dimensions.

From a point of the line the next one is the first along the line at straight distance r. Distance is
convex along a straight segment, so it is enough to find the first *vertex* that is not inside the
circle; a hierarchy of bounding boxes passes over whole stretches that are.
"""

# ruff: noqa: FBT001 - kernels take flat values one by one, by position

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.line_path import lay_ring, line_starts, part_length, stretch_ends

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

TIE = 1e-9
"""Relative tolerance at which a vertex counts as lying on the circle: rounding would otherwise make a
walk miss circles that only touch the line, as they do all along a Koch curve."""

MOST_STEPS = 1e12
"""Steps beyond which a ruler is lost in the rounding of the coordinates; such rulers have no length."""


class Part(NamedTuple):
    """One part of a line, ready to be walked; see `geofractal.kernels.line_path`.

    Attributes
    ----------
    points : (m, 2) or (m, 3) vertices; a ring ends with its first again
    starts : vertices from which walks start
    cuts : last vertex of each of the feature's stretches but the last
    boxes, bases : hierarchy of bounding boxes of the vertices
    length : of the polyline
    """

    points: Floats
    starts: Ints
    cuts: Ints
    boxes: Floats
    bases: Ints
    length: float
    closed: bool


_SHIFT = 4  # a box holds 2**4 vertices, or as many boxes of the level below
_EDGE = (1 << _SHIFT) - 1


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
    points: Floats,
    boxes: Floats,
    bases: Ints,
    k: int,
    stop: int,
    way: int,
    cx: float,
    cy: float,
    cz: float,
    near: float,
) -> int:
    """First vertex from `k` to `stop` that is not inside the circle of squared radius `near`, or -1."""
    flat = points.shape[1] == 2
    levels = bases.size - 1
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
            dx = points[k, 0] - cx
            dy = points[k, 1] - cy
            dz = 0.0 if flat else points[k, 2] - cz
            if dx * dx + dy * dy + dz * dz >= near:
                return k
            k += way
    return -1


@kernel
def _walk(part: Part, start: int, way: int, chord: float, tally: Floats) -> tuple[int, float]:
    """Walk from vertex `start` to the end of the line, or once around; count steps, measure the rest.

    Each step is also counted in `tally`, for the stretch in which it ends.
    """
    points, boxes, bases, cuts = part.points, part.boxes, part.bases, part.cuts
    flat = points.shape[1] == 2
    near = (chord * (1 - TIE)) ** 2
    on_circle = (chord * (1 + TIE)) ** 2
    cx, cy, cz = points[start, 0], points[start, 1], 0.0 if flat else points[start, 2]
    k = start + way
    stop = len(points) - 1 if way > 0 else 0
    end = start if part.closed else stop
    lap_left = part.closed
    on_segment = True  # the present point lies on the segment that ends at vertex k
    steps = 0
    stretch = 0
    for _ in range(int(part.length / chord * (1 + 1e-6)) + 4):
        j = _first_outside(points, boxes, bases, k, stop, way, cx, cy, cz, near)
        if j < 0 and lap_left:
            lap_left = False
            k, stop, on_segment = (1 if way > 0 else len(points) - 2), start, False
        elif j < 0:
            break
        else:
            bx, by, bz = points[j, 0], points[j, 1], 0.0 if flat else points[j, 2]
            dx, dy, dz = bx - cx, by - cy, bz - cz
            square = dx * dx + dy * dy + dz * dz
            count = 1
            at_vertex = square <= on_circle
            if at_vertex:
                cx, cy, cz = bx, by, bz
            elif j == k and on_segment:
                far = math.sqrt(square)
                count = int(far / chord + TIE)
                at_vertex = far - count * chord <= TIE * chord
                t = count * chord / far
                cx, cy, cz = (bx, by, bz) if at_vertex else (cx + t * dx, cy + t * dy, cz + t * dz)
            else:
                px, py, pz = points[j - way, 0], points[j - way, 1], 0.0 if flat else points[j - way, 2]
                wx, wy, wz = px - cx, py - cy, pz - cz
                dx, dy, dz = bx - px, by - py, bz - pz
                # |w + t d| = chord, the larger root
                A = dx * dx + dy * dy + dz * dz
                B = wx * dx + wy * dy + wz * dz
                C = wx * wx + wy * wy + wz * wz - chord * chord
                t = (math.sqrt(max(B * B - A * C, 0.0)) - B) / A
                cx, cy, cz = px + t * dx, py + t * dy, pz + t * dz
            k = j + way if at_vertex else j
            on_segment = True
            steps += count
            if tally.size > 0:
                while stretch < cuts.size and j > cuts[stretch]:
                    stretch += 1
                while stretch > 0 and j <= cuts[stretch - 1]:
                    stretch -= 1
                tally[stretch] += count
    dx, dy, dz = points[end, 0] - cx, points[end, 1] - cy, 0.0 if flat else points[end, 2] - cz
    return steps, math.sqrt(dx * dx + dy * dy + dz * dz)


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
    part: Part, start: int, way: int, radius: float, ruler: float, tally: Floats
) -> tuple[int, float]:
    """Return steps and L(r) from vertex `start`: around a ring one way, or to both ends of a line."""
    chord = _chord(ruler, radius)
    if part.closed:
        steps, rest = _walk(part, start, way, chord, tally)
        return steps, ruler * steps + _arc(rest, radius)
    steps = 0
    rest = 0.0
    for turn in range(1, -2, -2):
        if start != (len(part.points) - 1 if turn > 0 else 0):
            taken, gap = _walk(part, start, turn, chord, tally)
            steps += taken
            rest += _arc(gap, radius)
    return steps, ruler * steps + rest


@kernel
def _walk_rung(
    part: Part, radius: float, ruler: float, enough: int, tally: Floats
) -> tuple[int, float, float, float]:
    """Walk a part both ways from its first start, then from as many further starts as are needed.

    Returns the number of walks, the mean and variance of their L(r), and their mean steps. No walk
    counts where one from an open line's end, or from any start of a ring, takes no step.
    """
    most = len(part.starts)
    walked = np.empty(2 * most)
    starts, stride, s, steps, count = 1, 1, 0, 0, 0
    chord = _chord(ruler, radius)
    possible = chord > 0 and part.length / chord < MOST_STEPS
    while s < starts and possible:
        for way in range(1, -2, -2):
            at_end = s == 0 and way < 0 and not part.closed
            start = len(part.points) - 1 if at_end else part.starts[s * stride]
            if part.closed or s == 0 or way > 0:
                n, walked[count] = _walk_from(part, start, way, radius, ruler, tally)
                steps += n
                count += 1
                possible = possible and (n > 0 or (s > 0 and not part.closed))
        if s == 0:
            while starts < most and starts * (steps // count) < enough:
                starts = min(2 * starts, most)
            stride = most // starts
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
def _walk_part(part: Part, radius: float, rulers: Floats, enough: int, found: Floats) -> None:
    """Add what the walks of one part find to a feature's rows, columns as `walk_ladders` returns them."""
    tally = np.zeros(found.shape[1] - 4)
    for q in range(len(rulers)):
        for k in range(len(tally)):
            tally[k] = 0.0
        walks, mean, variance, steps = _walk_rung(part, radius, rulers[q], enough, tally)
        if walks == 0:
            found[q, 3] += part.length
        else:
            found[q, 0] += mean
            found[q, 1] += variance
            found[q, 2] += steps
            for k in range(len(tally)):
                found[q, 4 + k] += tally[k] / walks


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
) -> Floats:
    """Walk every feature with every ruler of its own ladder.

    An open line is walked from both ends, a ring both ways around from its vertex farthest from its
    centre. Where such a walk takes fewer than `enough_steps`, further starts are added, evenly spaced
    along the part, until starts x steps reach that number: a ring is walked both ways from each, an
    open line from the vertex nearest to each to both ends. (Walks the same way around soon fall into
    each other's steps, whatever their start, so that one way alone may be off by more than its starts
    show.)

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
    stretches : number of stretches of equal length of a feature whose steps are counted apart, or 0

    Returns
    -------
    (q, 4 + stretches)
        mean walked length in metres, NaN where no part is long enough; standard deviation of one walk
        over starts and directions; mean number of whole steps of a walk; polyline length in metres of
        the parts that are not long enough; mean number of the whole steps that end in each stretch
    """
    found = np.zeros((rulers.size, 4 + stretches))
    for f in range(feature_offsets.size - 1):
        first, last = feature_offsets[f], feature_offsets[f + 1]
        lo, hi = rung_offsets[f], rung_offsets[f + 1]
        if lo == hi:
            continue
        whole = 0.0
        for p in range(first, last):
            whole += part_length(xy[part_offsets[p] : part_offsets[p + 1]])
        before = 0.0
        for p in range(first, last):
            points = xy[part_offsets[p] : part_offsets[p + 1]]
            length = part_length(points) if last > first + 1 else whole
            if length > 0:
                if closed[p]:
                    points, starts = lay_ring(points, most_starts, length)
                else:
                    starts = line_starts(points, most_starts if inner_starts else 1, length)
                cuts = stretch_ends(points, before, whole, stretches)
                bases = _box_levels(len(points))
                part = Part(points, starts, cuts, _boxes(points, bases), bases, length, closed[p])
                _walk_part(part, radius[f], rulers[lo:hi], enough_steps, found[lo:hi])
                before += length
        for q in range(lo, hi):
            found[q, 1] = math.sqrt(found[q, 1])
            if found[q, 2] == 0:
                found[q, 0] = math.nan
                found[q, 1] = math.nan
    return found
