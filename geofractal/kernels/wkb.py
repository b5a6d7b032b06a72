"""Well-known binary to ragged coordinates, straight from Arrow's buffers.

Little and big endian, ISO codes (1000, 2000, 3000) and the flags of extended WKB; Z and M are skipped.
Nothing is read outside a row's own bytes, whatever they say.
"""

# ruff: noqa: FBT001 - kernels take flat values one by one, by position

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.measure import Bools, Floats, Ints

Bytes = NDArray[np.uint8]

FINE, MISSING, EMPTY, POINTS, ONE_VERTEX, ZERO_LENGTH = 0, 1, 2, 3, 4, 5
NOT_NUMBERS, CURVED, COLLECTION, BROKEN, INVALID, NO_AREA = 6, 7, 8, 9, 10, 11

LINE, POLYGON, MULTI_LINE, MULTI_POLYGON = 2, 3, 5, 6


@kernel
def _uint32(data: Bytes, at: int, little: int) -> int:
    a, b, c, d = int(data[at]), int(data[at + 1]), int(data[at + 2]), int(data[at + 3])
    if little == 1:
        return a | b << 8 | c << 16 | d << 24
    return d | c << 8 | b << 16 | a << 24


@kernel
def _header(data: Bytes, at: int, end: int) -> tuple[int, int, int, int]:
    """Return byte order, kind (-1 where broken), bytes of a vertex, and where the header ends."""
    if at + 5 > end or data[at] > 1:
        return 1, -1, 16, at
    little = int(data[at])
    code = _uint32(data, at + 1, little)
    after = at + 5
    if code & 0x20000000:  # a spatial reference follows
        after += 4
    plain = code & 0x1FFFFFFF
    dimensions = plain // 1000
    if dimensions > 3:
        return little, -1, 16, after
    has_z = code & 0x80000000 != 0 or dimensions in (1, 3)
    has_m = code & 0x40000000 != 0 or dimensions >= 2
    return little, plain % 1000, 16 + 8 * int(has_z) + 8 * int(has_m), after


@kernel
def _all_numbers(data: Bytes, at: int, vertices: int, stride: int, little: int) -> bool:
    """Tell whether x and y are finite: an exponent of ones alone is NaN or infinity."""
    high, next_high = (7, 6) if little == 1 else (0, 1)
    for i in range(vertices):
        x = at + i * stride
        y = x + 8
        if data[x + high] & 0x7F == 0x7F and data[x + next_high] >= 0xF0:
            return False
        if data[y + high] & 0x7F == 0x7F and data[y + next_high] >= 0xF0:
            return False
    return True


@kernel
def _walk(
    data: Bytes,
    start: int,
    end: int,
    outer_only: bool,
    table: Ints,
) -> tuple[int, int, int, int]:
    """Return problem, kind, parts and vertices of one geometry, and list its parts in `table`.

    A row of `table` is: first byte of the coordinates, vertices, bytes of a vertex, byte order.
    With an empty `table` the parts are only counted.
    """
    little, kind, stride, at = _header(data, start, end)
    if kind in (1, 4):
        return POINTS, kind, 0, 0
    if kind == 7:
        return COLLECTION, kind, 0, 0
    if 8 <= kind <= 17:
        return CURVED, kind, 0, 0
    if kind not in (LINE, POLYGON, MULTI_LINE, MULTI_POLYGON):
        return BROKEN, kind, 0, 0
    items = 1
    if kind >= MULTI_LINE:
        if at + 4 > end:
            return BROKEN, kind, 0, 0
        items = _uint32(data, at, little)
        at += 4
        if items * 9 > end - at:
            return BROKEN, kind, 0, 0
    parts, vertices, numbers = 0, 0, True
    for _ in range(items):
        item = kind
        if kind >= MULTI_LINE:
            little, item, stride, at = _header(data, at, end)
            if item != kind - 3:
                return BROKEN, kind, 0, 0
        rings = 1
        if item == POLYGON:
            if at + 4 > end:
                return BROKEN, kind, 0, 0
            rings = _uint32(data, at, little)
            at += 4
            if rings * 4 > end - at:
                return BROKEN, kind, 0, 0
        for ring in range(rings):
            if at + 4 > end:
                return BROKEN, kind, 0, 0
            count = _uint32(data, at, little)
            at += 4
            if count * stride > end - at:
                return BROKEN, kind, 0, 0
            numbers = numbers and _all_numbers(data, at, count, stride, little)
            if ring == 0 or not outer_only:
                if len(table):
                    table[parts, 0] = at
                    table[parts, 1] = count
                    table[parts, 2] = stride
                    table[parts, 3] = little
                parts += 1
                vertices += count
            at += count * stride
    if not numbers:
        return NOT_NUMBERS, kind, 0, 0
    if vertices == 0:
        return EMPTY, kind, 0, 0
    return FINE, kind, parts, vertices


@kernel
def scan_rows(
    data: Bytes,
    offsets: Ints,
    present: Bools,
    outer_only: bool,
    found: Ints,
) -> None:
    """Fill each row of `found` (n, 4) with problem, kind, parts and vertices.

    Parameters
    ----------
    data, offsets : buffers of the Arrow array; row ``i`` is ``data[offsets[i]:offsets[i + 1]]``
    present : (n,) False where the row is null
    outer_only : leave the holes of polygons out
    """
    nothing = np.zeros((0, 4), np.int64)
    for i in range(len(present)):
        if present[i]:
            problem, kind, parts, vertices = _walk(data, offsets[i], offsets[i + 1], outer_only, nothing)
            found[i, 0], found[i, 1], found[i, 2], found[i, 3] = problem, kind, parts, vertices
        else:
            found[i, 0], found[i, 1], found[i, 2], found[i, 3] = MISSING, 0, 0, 0


@kernel
def _copy(data: Bytes, part: Ints, out: Bytes, to: int) -> None:
    """Copy x and y of a part, as the machine's own (little endian) doubles."""
    at, vertices, stride, little = part[0], part[1], part[2], part[3]
    if little == 1 and stride == 16:
        for k in range(16 * vertices):
            out[to + k] = data[at + k]
    elif little == 1:
        for i in range(vertices):
            for k in range(16):
                out[to + 16 * i + k] = data[at + stride * i + k]
    else:
        for i in range(vertices):
            for k in range(8):
                out[to + 16 * i + k] = data[at + stride * i + 7 - k]
                out[to + 16 * i + 8 + k] = data[at + stride * i + 15 - k]


@kernel
def _settle(
    xy: Floats,
    first: int,
    vertices: int,
    drop_repeated: bool,
) -> tuple[int, bool]:
    """Return the vertices kept of a part, none if all are in one place, and whether it is closed."""
    kept = 1
    moves = False
    for i in range(first + 1, first + vertices):
        x, y = xy[i, 0], xy[i, 1]
        same = x == xy[first + kept - 1, 0] and y == xy[first + kept - 1, 1]
        moves = moves or not same
        if not (same and drop_repeated):
            xy[first + kept, 0], xy[first + kept, 1] = x, y
            kept += 1
    if vertices == 0 or not moves:
        return 0, False
    last = first + kept - 1
    return kept, xy[first, 0] == xy[last, 0] and xy[first, 1] == xy[last, 1]


@kernel
def read_rows(
    data: Bytes,
    offsets: Ints,
    found: Ints,
    outer_only: bool,
    drop_repeated: bool,
    xy: Floats,
    part_offsets: Ints,
    feature_offsets: Ints,
    closed: Bools,
) -> tuple[int, int, int]:
    """Read the rows that `scan_rows` found fine; return features, parts and vertices kept.

    A part whose vertices are all in one place is dropped. A row that loses all its parts is no
    feature, and its problem in `found` says why. The output arrays have room for all that was found.
    """
    most = 1
    for i in range(len(found)):
        most = max(most, found[i, 2])
    table = np.zeros((most, 4), np.int64)
    out = xy.reshape(-1).view(np.uint8)
    feature, part, vertex = 0, 0, 0
    for i in range(len(found)):
        if found[i, 0] == FINE:
            _walk(data, offsets[i], offsets[i + 1], outer_only, table)
            before = part
            for j in range(found[i, 2]):
                _copy(data, table[j], out, 16 * vertex)
                kept, ring = _settle(xy, vertex, table[j, 1], drop_repeated)
                if kept:
                    vertex += kept
                    closed[part] = ring
                    part += 1
                    part_offsets[part] = vertex
            if part > before:
                feature += 1
                feature_offsets[feature] = part
            else:
                found[i, 0] = ONE_VERTEX if found[i, 3] == found[i, 2] else ZERO_LENGTH
    return feature, part, vertex
