"""The invented land's relief: noise, a shore field, and valleys cut by the water that they carry.

Only sums, products, quotients and square roots are used, on numbers from the raw bit stream of a seeded
generator, so that every processor and every numpy draws the same land.
"""
# ruff: noqa: INP001 - modules of a script, not a package

from __future__ import annotations

import heapq

import numpy as np
from scipy import ndimage

CELL = 100.0
ROWS, COLUMNS = 520, 640
EAST, NORTH = 500_000.0, 5_316_000.0
WEST, TOP = EAST - COLUMNS * CELL / 2, NORTH + ROWS * CELL / 2

NEIGHBOURS = ((-1, -1), (-1, 0), (-1, 1), (0, -1), (0, 1), (1, -1), (1, 0), (1, 1))
STEEPEST = 0.55

_EIGHTHS = ((1.0, 0.0), (0.924, 0.383), (0.707, 0.707), (0.383, 0.924))
GRADIENTS = np.array(_EIGHTHS + tuple((-y, x) for x, y in _EIGHTHS))
GRADIENTS = np.vstack([GRADIENTS, -GRADIENTS])


def uniform(seed: int, count: int) -> np.ndarray:
    """Return numbers in [0, 1) from a generator's raw stream, which no version of numpy may change."""
    return (np.random.PCG64(seed).random_raw(count) >> np.uint64(11)) * 2.0**-53


def noise(x: np.ndarray, y: np.ndarray, seed: int) -> np.ndarray:
    """Return gradient noise of wavelength 1, between about -0.7 and 0.7."""
    shuffled = np.argsort(uniform(seed, 256), kind="stable")
    slopes_across, slopes_along = GRADIENTS[shuffled & 15].T.copy()
    column, row = np.floor(x).astype(np.int64), np.floor(y).astype(np.int64)
    u, v = x - column, y - row

    def corner(right: int, up: int) -> np.ndarray:
        hashed = (shuffled[(column + right) & 255] + row + up) & 255
        return slopes_across[hashed] * (u - right) + slopes_along[hashed] * (v - up)

    across, along = u * u * (3.0 - 2.0 * u), v * v * (3.0 - 2.0 * v)
    low = corner(0, 0) * (1.0 - across) + corner(1, 0) * across
    high = corner(0, 1) * (1.0 - across) + corner(1, 1) * across
    return low * (1.0 - along) + high * along


def rough(
    x: np.ndarray, y: np.ndarray, seed: int, *, longest: float, octaves: int, gain: float
) -> np.ndarray:
    """Return a sum of noises whose wavelengths halve from `longest` metres, each `gain` of the one before."""
    total, weight, wavelength = np.zeros(np.shape(x)), 1.0, longest
    for octave in range(octaves):
        total += weight * noise(x / wavelength + 17.3 * octave, y / wavelength - 9.1 * octave, seed + octave)
        weight, wavelength = weight * gain, wavelength / 2.0
    return total


def shore_field(easting: np.ndarray, northing: np.ndarray) -> np.ndarray:
    """Return a field that is positive on land: a warped oval, frayed, with long inlets in the north."""
    x, y = easting - EAST, northing - NORTH
    warp = rough(x, y, 11, longest=21_000.0, octaves=2, gain=0.5)
    x, y = x + 5_500.0 * warp, y + 4_500.0 * rough(x, y, 21, longest=19_000.0, octaves=2, gain=0.5)
    oval = 0.85 - (x / 26_500.0) ** 2 - (y / 19_500.0) ** 2
    inlets = np.minimum(np.maximum(y / 12_000.0 + 0.2, 0.0), 1.0) * noise(x / 3_400.0, y / 13_000.0, 31)
    return oval + 0.95 * rough(x, y, 41, longest=8_000.0, octaves=9, gain=0.63) + 1.1 * inlets


def drift(easting: np.ndarray, northing: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return places moved smoothly, to take the grid's eight directions out of what was routed on it."""
    bends = {"longest": 1_700.0, "octaves": 3, "gain": 0.55}
    return (
        easting + 210.0 * rough(easting, northing, 61, **bends),
        northing + 210.0 * rough(easting, northing, 71, **bends),
    )


def centres(cell: float) -> tuple[np.ndarray, np.ndarray]:
    """Return easting of columns and northing of rows of a grid of `cell` metres over the whole area."""
    columns, rows = round(COLUMNS * CELL / cell), round(ROWS * CELL / cell)
    return WEST + (np.arange(columns) + 0.5) * cell, TOP - (np.arange(rows) + 0.5) * cell


class Relief:
    """Heights and flow on the routing grid.

    Attributes
    ----------
    field : (rows, columns) the shore field
    land : (rows, columns) whether a cell is land; lagoons count as land
    height : metres; below 0 at sea
    receiver : flat index of the cell that each land cell drains to
    drained : cells drained through each cell, itself included
    order : land cells, each before those that drain to it
    """

    def __init__(self) -> None:
        easting, northing = np.meshgrid(*centres(CELL))
        self.field = field = shore_field(easting, northing)
        basins, _ = ndimage.label(field <= 0.0)
        self.land = basins != basins[0, 0]
        texture = rough(easting, northing, 81, longest=7_000.0, octaves=6, gain=0.55)
        tilt = 110.0 * rough(easting, northing, 91, longest=30_000.0, octaves=2, gain=0.5)
        height = np.where(self.land, 160.0 * np.maximum(field, 0.0) + 90.0 * texture + tilt + 300.0, -20.0)
        for trial in range(4):
            self._route(height)
            height = self._carved() + (14.0 * (texture + 1.0) if trial < 3 else 0.0)
            height = np.where(self.land, np.maximum(height, 0.5), -20.0)
        self.height = height

    def _route(self, height: np.ndarray) -> None:
        """Fill hollows, then send each cell down its steepest slope and add up what drains."""
        filled = _filled(height, self.land)
        best = np.zeros(filled.shape)
        receiver = np.arange(filled.size).reshape(filled.shape)
        flat = receiver.copy()
        for row, column in NEIGHBOURS:
            shift = (-row, -column)
            slope = (filled - np.roll(filled, shift, (0, 1))) / np.sqrt(float(row * row + column * column))
            steeper = self.land & (slope > best)
            best[steeper] = slope[steeper]
            receiver[steeper] = np.roll(flat, shift, (0, 1))[steeper]
        self.receiver = receiver.ravel()
        cells = np.flatnonzero(self.land)
        self.order = cells[np.argsort(filled.ravel()[cells], kind="stable")]
        drained = np.ones(filled.size)
        for cell in self.order[::-1].tolist():
            drained[self.receiver[cell]] += drained[cell]
        self.drained = drained

    def _carved(self) -> np.ndarray:
        """Return heights whose slopes fall with the root of what drains, as rivers grade their beds."""
        height = np.zeros(self.drained.size)
        slope = np.minimum(0.34 / np.sqrt(self.drained), STEEPEST) * CELL
        away = np.abs(self.receiver - np.arange(self.receiver.size))
        slope *= np.where((away == 1) | (away == COLUMNS), 1.0, np.sqrt(2.0))
        for cell, receiver in zip(self.order.tolist(), self.receiver[self.order].tolist(), strict=True):
            height[cell] = height[receiver] + slope[cell]
        return height.reshape(self.land.shape)


def _filled(height: np.ndarray, land: np.ndarray) -> np.ndarray:
    """Return heights raised so that every land cell has a way down to the sea (priority flood).

    Filled hollows are rippled, or water would cross them in straight lines.
    """
    filled = np.where(land, np.inf, height)
    shore = ndimage.binary_dilation(land, np.ones((3, 3))) & ~land
    queue = [(filled[row, column], row, column) for row, column in np.argwhere(shore).tolist()]
    heapq.heapify(queue)
    given, out, dry = height.tolist(), filled.tolist(), land.tolist()
    ripple = (1e-3 + 0.5 * uniform(101, land.size).reshape(land.shape)).tolist()
    while queue:
        level, row, column = heapq.heappop(queue)
        for down, right in NEIGHBOURS:
            r, c = row + down, column + right
            if 0 <= r < ROWS and 0 <= c < COLUMNS and dry[r][c]:
                dry[r][c] = False
                out[r][c] = max(given[r][c], level + ripple[r][c])
                heapq.heappush(queue, (out[r][c], r, c))
    return np.array(out)
