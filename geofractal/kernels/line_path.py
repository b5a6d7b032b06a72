"""Where the walks of a part start, and where the stretches of its line end."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.jit import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Ints = NDArray[np.int64]

_SNAP = 1e-6
"""A place within this share of a segment from one of its ends is that vertex itself."""


@kernel
def _gap(points: Floats, i: int, j: int) -> float:
    """Straight distance of two vertices."""
    dx = points[j, 0] - points[i, 0]
    dy = points[j, 1] - points[i, 1]
    dz = points[j, 2] - points[i, 2] if points.shape[1] == 3 else 0.0
    return math.sqrt(dx * dx + dy * dy + dz * dz)


@kernel
def _line_way(points: Floats) -> int:
    """Direction of a line, 1 or -1, that is the same whichever way it is stored: from lower x (y, z)."""
    for k in range(points.shape[1]):
        if points[0, k] != points[-1, k]:
            return 1 if points[0, k] < points[-1, k] else -1
    return 1


@kernel
def part_length(points: Floats) -> float:
    """Length of a polyline, the same to the bit whichever way it is stored."""
    way = _line_way(points)
    i = 0 if way > 0 else len(points) - 1
    total = 0.0
    for _ in range(len(points) - 1):
        total += _gap(points, i, i + way)
        i += way
    return total


@kernel
def _places(points: Floats, way: int, before: float, whole: float, count: int) -> Ints:
    """Vertices nearest along the line to each of the `count` - 1 inner divisions of `whole`.

    The points, taken in direction `way`, begin after a length of `before`. A division that lies before
    them is placed before the first, one that lies behind them at ``len(points)``.
    """
    places = np.empty(max(count - 1, 0), np.int64)
    for k in range(len(places)):
        places[k] = len(points)
    i = 0 if way > 0 else len(points) - 1
    along = before
    passed = 0
    for n in range(len(points) if count > 1 else 0):
        step = _gap(points, i - way, i) if n > 0 else 0.0
        along += step
        while passed < count - 1 and whole * (passed + 1) / count <= along - step / 2:
            places[passed] = i - way
            passed += 1
        i += way
    return places


@kernel
def stretch_ends(points: Floats, before: float, whole: float, stretches: int) -> Ints:
    """Last vertices of all but the last of the stretches of equal length that a feature is cut into.

    The part begins after a length of `before` out of `whole`; a stretch that ends before it or behind it
    ends at vertex -1 or ``len(points)``.
    """
    return _places(points, 1, before, whole, stretches)


@kernel
def line_starts(points: Floats, starts: int, length: float) -> Ints:
    """Vertices where walks of an open line start: the first, then those nearest to ``length / starts`` each.

    Further starts are the same points whichever way the line is stored.
    """
    way = _line_way(points)
    found = np.zeros(starts, np.int64)
    inner = _places(points, way, 0.0, length, starts)
    for k in range(starts - 1):
        found[k + 1] = min(max(inner[k], 0), len(points) - 1)
    return found


@kernel
def _outermost(ring: Floats) -> int:
    """Find a ring's vertex farthest from its centre: a start that does not depend on how it is stored."""
    size = ring.shape[1]
    centre = np.zeros(3)
    total = 0.0
    for i in range(len(ring) - 1):
        step = _gap(ring, i, i + 1)
        total += step
        for k in range(size):
            centre[k] += step * ((ring[i, k] + ring[i + 1, k]) / 2 - ring[0, k])
    farthest = -1.0
    found = 0
    for i in range(len(ring) - 1):
        square = 0.0
        for k in range(size):
            square += (ring[i, k] - ring[0, k] - centre[k] / total) ** 2
        if square > farthest:
            farthest = square
            found = i
    return found


@kernel
def lay_ring(ring: Floats, starts: int, length: float) -> tuple[Floats, Ints]:
    """Copy a ring from its outermost vertex on, with a vertex at every ``length / starts`` of it.

    Returns the points, the first repeated at the end, and the vertices of the starts.
    """
    size = ring.shape[1]
    points = np.empty((len(ring) + starts - 1, size))
    found = np.zeros(starts, np.int64)
    i = _outermost(ring)
    for k in range(size):
        points[0, k] = ring[i, k]
    filled = 1
    start = 1
    along = 0.0
    for _ in range(len(ring) - 1):
        j = i + 1 if i + 1 < len(ring) - 1 else 0
        step = _gap(ring, i, j)
        while start < starts and length * start / starts < along + step * (1 - _SNAP):
            t = (length * start / starts - along) / step
            if t > _SNAP:
                for k in range(size):
                    points[filled, k] = ring[i, k] + t * (ring[j, k] - ring[i, k])
                filled += 1
            found[start] = filled - 1
            start += 1
        for k in range(size):
            points[filled, k] = ring[j, k]
        filled += 1
        along += step
        i = j
    return points[:filled], found
