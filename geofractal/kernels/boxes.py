"""Exact box counting of lines, in the plane or in three dimensions.

A box is counted when a positive length of line lies in it; a line along the edge between boxes lies in the
box above or to the right of it, and touching an edge or a corner in a point does not count. Coordinates
within `TIE` of a box side from an edge lie on it, so that rounding decides nothing.

Boxes are kept in tiles of 64, found by hash only when the line leaves a tile.
"""

# ruff: noqa: FBT001 - kernels take flat values one by one, by position

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.ladder_judge import STRETCHES

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

TIE = 1e-9
"""Tolerance of all ties, in box sides."""

BLOCK = 64
"""Vertices of a block, passed over in one step where it lies inside one box."""

TILE = 64
"""Boxes of a tile: 8 x 8 in the plane, 4 x 4 x 4 in three dimensions."""

_TINY = 1e-300  # marks a box whose share of the length is lost to rounding

_USED, _TILE, _TILE_I, _TILE_J, _TILE_K = 0, 1, 2, 3, 4


class Tables(NamedTuple):
    """Boxes met so far: empty before each grid and after it.

    Attributes
    ----------
    slots : (a power of two, at least twice the tiles,) hash table of the tiles' numbers plus one
    keys, places : (tiles,) each tile's key and its place in `slots`
    masses : (tiles, TILE) length of line in each box
    seen : (tiles, TILE) stretches of the line that met the box, one bit each
    """

    slots: Ints
    keys: Ints
    places: Ints
    masses: Floats
    seen: NDArray[np.uint16]


@kernel
def measure_along(xy: Floats, part_offsets: Ints, feature_offsets: Ints) -> tuple[Floats, Floats]:
    """Return the length along each feature, and the bounds of every block of vertices.

    Parameters
    ----------
    xy : (m, 2) or (m, 3)
    part_offsets, feature_offsets : as in `Lines`

    Returns
    -------
    along : (m,) length from the feature's first vertex; the gap between two parts has none
    bounds : (m // BLOCK, 6) lowest, then highest coordinates of each whole block, a missing axis zero
    """
    m, axes = xy.shape
    along = np.zeros(m)
    for f in range(len(feature_offsets) - 1):
        passed = 0.0
        for p in range(feature_offsets[f], feature_offsets[f + 1]):
            along[part_offsets[p]] = passed
            for v in range(part_offsets[p] + 1, part_offsets[p + 1]):
                square = 0.0
                for c in range(axes):
                    square += (xy[v, c] - xy[v - 1, c]) ** 2
                passed += np.sqrt(square)
                along[v] = passed
    bounds = np.zeros((m // BLOCK, 6))
    for b in range(m // BLOCK):
        for c in range(axes):
            low, high = xy[b * BLOCK, c], xy[b * BLOCK, c]
            for v in range(b * BLOCK + 1, (b + 1) * BLOCK):
                low, high = min(low, xy[v, c]), max(high, xy[v, c])
            bounds[b, c], bounds[b, c + 3] = low, high
    return along, bounds


@kernel
def _snap(u: float) -> float:
    """Return the edge that `u` lies on, or `u`."""
    edge = np.floor(u + 0.5)
    return edge if abs(u - edge) < TIE else u


@kernel
def _first(u: float, move: float) -> int:
    """Return the box in which a move from `u` begins."""
    return int(np.floor(u)) if move >= 0.0 else int(np.ceil(u)) - 1


@kernel
def _last(u: float, move: float) -> int:
    """Return the box in which a move to `u` ends."""
    return int(np.ceil(u)) - 1 if move > 0.0 else int(np.floor(u))


@kernel
def _crossing(box: int, goal: int, u: float, move: float) -> float:
    """Return the share of a move from `u` after which it leaves the box; infinite in the last box."""
    if box == goal:
        return np.inf
    return (box + 1 - u) / move if goal > box else (box - u) / move


@kernel
def _find_tile(key: int, tables: Tables, state: Ints) -> None:
    """Make the tile of this key the current one, adding it where it is new."""
    slots, keys = tables.slots, tables.keys
    mask = len(slots) - 1
    mixed = key * 0x9E3779B1
    slot = (mixed ^ (mixed >> 29)) & mask
    while slots[slot] != 0 and keys[slots[slot] - 1] != key:
        slot = (slot + 1) & mask
    if slots[slot] == 0:
        keys[state[_USED]] = key
        tables.places[state[_USED]] = slot
        state[_USED] += 1
        slots[slot] = state[_USED]
    state[_TILE] = slots[slot] - 1


@kernel
def _put(
    i: int,
    j: int,
    k: int,
    start: float,
    stop: float,
    stretch: float,
    solid: bool,
    span: Ints,
    tables: Tables,
    state: Ints,
    tallies: Floats,
) -> None:
    """Add the line between two places along it to a box, and the box to the tallies of its stretches."""
    bits, bits_k = (2, 2) if solid else (3, 0)
    tile_i, tile_j, tile_k = i >> bits, j >> bits, k >> bits_k
    if tile_i != state[_TILE_I] or tile_j != state[_TILE_J] or tile_k != state[_TILE_K]:
        _find_tile((tile_i * span[1] + tile_j) * span[2] + tile_k, tables, state)
        state[_TILE_I], state[_TILE_J], state[_TILE_K] = tile_i, tile_j, tile_k
    tile = state[_TILE]
    box = i - (tile_i << bits) + ((j - (tile_j << bits)) << bits) + ((k - (tile_k << bits_k)) << (2 * bits))
    tables.masses[tile, box] += max(stop - start, _TINY)
    last = min(int(stop / stretch - TIE), STRETCHES - 1)
    for s in range(min(int(start / stretch + TIE), last), last + 1):
        if (tables.seen[tile, box] >> s) & 1 == 0:
            tables.seen[tile, box] |= 1 << s
            tallies[s] += 1.0


@kernel
def _drain(tables: Tables, used: int) -> tuple[float, float, float, float]:
    """Return boxes, Shannon entropy, sum of squared shares and visits, and leave the tables empty."""
    boxes, total, logs, squares, visits = 0.0, 0.0, 0.0, 0.0, 0.0
    for t in range(used):
        tables.slots[tables.places[t]] = 0
        for b in range(TILE):
            mass = tables.masses[t, b]
            if mass > 0.0:
                boxes += 1.0
                total += mass
                logs += mass * np.log(mass)
                squares += mass * mass
                tables.masses[t, b] = 0.0
                seen = np.int64(tables.seen[t, b])
                tables.seen[t, b] = 0
                while seen > 0:
                    visits += (seen & 3) == 1
                    seen >>= 1
    if boxes == 0.0:
        return 0.0, np.nan, np.nan, 0.0
    return boxes, np.log(total) - logs / total, squares / total**2, visits


@kernel
def count_grid(
    xy: Floats,
    along: Floats,
    bounds: Floats,
    starts: Ints,
    size: float,
    origin: Floats,
    span: Ints,
    tables: Tables,
    tallies: Floats,
) -> tuple[float, float, float, float]:
    """Count the boxes of one grid that the parts pass through, and how the length is spread over them.

    Parameters
    ----------
    xy, along, bounds : of the whole chunk, as `measure_along` gives them
    starts : first vertex of each part and the end of the last
    size : side of a box
    origin : (3,) corner of the grid, at or below every coordinate; 0 for a missing axis
    span : (3,) at least the number of tiles along each axis
    tables : with room for every tile that the line can touch
    tallies : (STRETCHES,) boxes in each stretch of equal length of the line; added to

    Returns
    -------
    boxes, entropy, squares, visits
        Boxes counted, -sum p ln p and sum p^2 over the share p of length in each; 0 and NaN without length.
        Visits are boxes counted again for every stretch of the line, or row of them, that comes back to them
    """
    solid = xy.shape[1] == 3
    state = np.full(5, -1)
    state[_USED] = 0
    lean, scale = TIE * size, 1.0 / size
    stretch = max(along[starts[-1] - 1], _TINY) / STRETCHES
    for p in range(len(starts) - 1):
        low_x, low_y, low_z, high_x, high_y, high_z = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
        i, j, k, entered, inside = 0, 0, 0, along[starts[p]], False
        v = starts[p] + 1
        while v < starts[p + 1]:
            if v % BLOCK == 0 and v + BLOCK <= starts[p + 1]:
                b = bounds[v // BLOCK]
                flat = b[0] > low_x and b[3] < high_x and b[1] > low_y and b[4] < high_y
                if flat and (not solid or (b[2] > low_z and b[5] < high_z)):
                    v += BLOCK
                    continue
            x, y = xy[v, 0], xy[v, 1]
            v += 1
            if low_x < x < high_x and low_y < y < high_y and (not solid or low_z < xy[v - 1, 2] < high_z):
                continue
            x0, y0 = _snap((xy[v - 2, 0] - origin[0]) * scale), _snap((xy[v - 2, 1] - origin[1]) * scale)
            x1, y1 = _snap((x - origin[0]) * scale), _snap((y - origin[1]) * scale)
            z0 = _snap((xy[v - 2, 2] - origin[2]) * scale) if solid else 0.0
            z1 = _snap((xy[v - 1, 2] - origin[2]) * scale) if solid else 0.0
            dx, dy, dz = x1 - x0, y1 - y0, z1 - z0
            length = np.sqrt(dx * dx + dy * dy + dz * dz)
            if length == 0.0:
                continue
            at = along[v - 2]
            i1, j1, k1 = _first(x0, dx), _first(y0, dy), _first(z0, dz)
            if inside and (i1 != i or j1 != j or k1 != k):
                _put(i, j, k, entered, at, stretch, solid, span, tables, state, tallies)
                entered = at
            i, j, k, inside = i1, j1, k1, True
            i1, j1, k1 = _last(x1, dx), _last(y1, dy), _last(z1, dz)
            while i != i1 or j != j1 or k != k1:
                cross_x, cross_y = _crossing(i, i1, x0, dx), _crossing(j, j1, y0, dy)
                cross_z = _crossing(k, k1, z0, dz)
                cross = min(cross_x, cross_y, cross_z)
                at = along[v - 2] + cross * (along[v - 1] - along[v - 2])
                _put(i, j, k, entered, at, stretch, solid, span, tables, state, tallies)
                entered = at
                cross += TIE / length
                i += (1 if dx > 0.0 else -1) if cross_x <= cross else 0
                j += (1 if dy > 0.0 else -1) if cross_y <= cross else 0
                k += (1 if dz > 0.0 else -1) if cross_z <= cross else 0
            low_x, high_x = origin[0] + i * size + lean, origin[0] + (i + 1) * size - lean
            low_y, high_y = origin[1] + j * size + lean, origin[1] + (j + 1) * size - lean
            low_z, high_z = origin[2] + k * size + lean, origin[2] + (k + 1) * size - lean
        if inside:
            at = along[starts[p + 1] - 1]
            _put(i, j, k, entered, at, stretch, solid, span, tables, state, tallies)
    return _drain(tables, state[_USED])


@kernel
def count_ladders(
    xy: Floats,
    part_offsets: Ints,
    feature_offsets: Ints,
    offsets: Ints,
    sizes: Floats,
    shifts: Floats,
    enough: int,
    tables: Tables,
) -> tuple[Floats, Floats]:
    """Count every feature at every rung of its ladder on shifted grids.

    Parameters
    ----------
    xy : (m, 2) or (m, 3)
    part_offsets, feature_offsets : as in `Lines`
    offsets, sizes : (n + 1,) and (k,) rungs of each feature; a NaN size is not counted
    shifts : (g, 3) of the grids, in box sides below the corner of the feature's bounds
    enough : no further grid is tried once so many boxes have been counted at a rung
    tables : as in `count_grid`

    Returns
    -------
    found : (k, g, 4) boxes, entropy, sum of squares and visits as in `count_grid`; NaN for grids not tried
    tallies : (k, STRETCHES) boxes of the first grid in each stretch of equal length of the line
    """
    axes = xy.shape[1]
    along, bounds = measure_along(xy, part_offsets, feature_offsets)
    out = np.full((len(sizes), len(shifts), 4), np.nan)
    tallies, unused = np.zeros((len(sizes), STRETCHES)), np.zeros(STRETCHES)
    low, high, origin, span = np.zeros(3), np.zeros(3), np.zeros(3), np.ones(3, dtype=np.int64)
    for f in range(len(feature_offsets) - 1):
        starts = part_offsets[feature_offsets[f] : feature_offsets[f + 1] + 1]
        for c in range(axes):
            low[c], high[c] = np.inf, -np.inf
            for v in range(starts[0], starts[-1]):
                low[c], high[c] = min(low[c], xy[v, c]), max(high[c], xy[v, c])
        for r in range(offsets[f], offsets[f + 1]):
            counted = 0.0
            for g in range(len(shifts)):
                if np.isnan(sizes[r]) or counted >= enough:
                    break
                for c in range(axes):
                    origin[c] = low[c] - shifts[g, c] * sizes[r]
                    span[c] = int((high[c] - low[c]) / sizes[r]) // 4 + 2
                found = count_grid(
                    xy,
                    along,
                    bounds,
                    starts,
                    sizes[r],
                    origin,
                    span,
                    tables,
                    tallies[r] if g == 0 else unused,
                )
                out[r, g, 0], out[r, g, 1], out[r, g, 2], out[r, g, 3] = found
                counted += found[0]
    return out, tallies
