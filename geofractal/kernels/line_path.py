"""A line's part laid out for walking: in an order of its own, with vertices where walks start."""

# ruff: noqa: FBT001 - kernels take flat values one by one, by position

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
"""A start within this share of a segment from one of its ends is that vertex itself."""


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
def part_length(xy: Floats, first: int, last: int, closed: bool) -> float:
    """Length of the vertices ``first`` to ``last``, exclusive: to the bit whichever way a line is stored."""
    i, way = (first, 1) if closed else _line_order(xy, first, last)
    total = 0.0
    for _ in range(last - first - 1):
        total += _gap(xy, i, i + way)
        i += way
    return total


@kernel
def lay_path(
    xy: Floats, first: int, last: int, closed: bool, starts: int, length: float
) -> tuple[Floats, Ints]:
    """Copy a part in an order of its own, with a vertex at every ``length / starts`` of it.

    Open lines begin at the end with the lower x (then y, z), rings at their outermost vertex, which is
    repeated at the end: the path of an open line is the same to the bit whichever way it is stored.

    Returns the path, (m, 2) or (m, 3), and the vertices of the starts.
    """
    i, way = (_outermost(xy, first, last), 1) if closed else _line_order(xy, first, last)
    size = xy.shape[1]
    path = np.empty((last - first + starts - 1, size))
    places = np.zeros(starts, np.int64)
    for k in range(size):
        path[0, k] = xy[i, k]
    filled = 1
    start = 1
    along = 0.0
    for _ in range(last - first - 1):
        j = i + way
        if closed and j == last - 1:
            j = first
        step = _gap(xy, i, j)
        while start < starts and length * start / starts < along + step * (1 - _SNAP):
            t = (length * start / starts - along) / step
            if t > _SNAP:
                for k in range(size):
                    path[filled, k] = xy[i, k] + t * (xy[j, k] - xy[i, k])
                filled += 1
            places[start] = filled - 1
            start += 1
        for k in range(size):
            path[filled, k] = xy[j, k]
        filled += 1
        along += step
        i = j
    return path[:filled], places


@kernel
def stretch_ends(path: Floats, before: float, whole: float, stretches: int) -> Ints:
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
