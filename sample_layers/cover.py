"""Land cover of the invented land at two dates: what grows where, and what people changed."""
# ruff: noqa: INP001 - modules of a script, not a package

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from relief import CELL, COLUMNS, ROWS, TOP, WEST, Relief, drift, noise, rough, shore_field, uniform
from scipy import ndimage

CLASSES = {
    "open water": (92, 150, 196),
    "sand and shingle": (233, 216, 166),
    "salt marsh": (168, 178, 132),
    "reedbed": (146, 168, 84),
    "wet grassland": (176, 208, 142),
    "carr woodland": (86, 128, 88),
    "broadleaf woodland": (52, 140, 66),
    "conifer plantation": (24, 92, 72),
    "heath": (176, 124, 146),
    "bare rock": (168, 164, 160),
    "pasture": (206, 226, 152),
    "cropland": (240, 214, 110),
    "built-up": (204, 74, 66),
}
"""Names and colours; codes run from 1 in this order, 0 is sea and outside."""

CODE = {name: code for code, name in enumerate(CLASSES, start=1)}


@dataclass(frozen=True)
class Date:
    """What differs between the two surveys."""

    built_up: float
    ploughed: float
    drained_east: float
    felled: float
    wooded_banks: float


EARLIER = Date(built_up=1.0, ploughed=0.30, drained_east=0.0, felled=0.02, wooded_banks=0.0)
LATER = Date(built_up=1.5, ploughed=0.38, drained_east=1.0, felled=0.14, wooded_banks=0.12)


class Ground:
    """Fields that land cover follows, on the routing grid."""

    def __init__(self, relief: Relief, towns: np.ndarray) -> None:
        self.towns = towns
        rivers = (relief.drained >= 60).reshape(relief.land.shape) & relief.land
        above = relief.height.ravel().copy()
        flowing = rivers.ravel()
        base = np.where(flowing, above, 0.0)
        for cell in relief.order.tolist():
            if not flowing[cell]:
                base[cell] = base[relief.receiver[cell]]
        to_river = ndimage.distance_transform_edt(~rivers) * CELL
        down, across = np.gradient(ndimage.uniform_filter(relief.height, 5), CELL)
        size = np.sqrt(relief.drained.reshape(relief.land.shape))
        self.fields = {
            "height": relief.height,
            "above_river": (above - base).reshape(relief.land.shape),
            "to_river": to_river,
            "slope": np.sqrt(down * down + across * across),
            "lagoon": ndimage.binary_dilation(relief.land & (relief.field <= 0.0), np.ones((3, 3))) * 1.0,
            "channel": ndimage.maximum_filter(np.where(rivers, size, 0.0), 3),
        }

    def at(self, name: str, rows: np.ndarray, columns: np.ndarray) -> np.ndarray:
        """Return a field between its cell centres (bilinear)."""
        field = self.fields[name]
        row = np.minimum(np.maximum(rows, 0.0), ROWS - 1.001)
        column = np.minimum(np.maximum(columns, 0.0), COLUMNS - 1.001)
        r, c = row.astype(np.int64), column.astype(np.int64)
        v, u = row - r, column - c
        upper = field[r, c] * (1.0 - u) + field[r, c + 1] * u
        lower = field[r + 1, c] * (1.0 - u) + field[r + 1, c + 1] * u
        return upper * (1.0 - v) + lower * v


def parcels(x: np.ndarray, y: np.ndarray, size: float) -> tuple[np.ndarray, np.ndarray]:
    """Return two random numbers for each point, the same all over a field of about `size` metres."""
    chance = uniform(201, 4 * 256 * 256).reshape(4, 256, 256)
    column, row = np.floor(x / size).astype(np.int64), np.floor(y / size).astype(np.int64)
    nearest, first, second = np.full(x.shape, np.inf), np.zeros(x.shape), np.zeros(x.shape)
    for right in (-1, 0, 1):
        for up in (-1, 0, 1):
            at = ((row + up) & 255, (column + right) & 255)
            dx = (column + right + chance[0][at]) * size - x
            dy = (row + up + chance[1][at]) * size - y
            square = dx * dx + dy * dy
            closer = square < nearest
            nearest = np.where(closer, square, nearest)
            first = np.where(closer, chance[2][at], first)
            second = np.where(closer, chance[3][at], second)
    return first, second


def classify(ground: Ground, easting: np.ndarray, northing: np.ndarray, date: Date) -> np.ndarray:
    """Return class codes (uint8) at the points of a grid of eastings and northings, 0 at sea."""
    grid = np.meshgrid(easting, northing)
    shore = shore_field(*grid)
    codes = np.zeros(shore.shape, np.uint8)
    land = shore > 0.0
    codes[land] = _on_land(ground, grid[0][land], grid[1][land], shore[land], date)
    inland = ground.at("lagoon", (TOP - grid[1]) / CELL - 0.5, (grid[0] - WEST) / CELL - 0.5) > 0.5
    codes[inland & ~land] = CODE["open water"]
    return codes


def _on_land(ground: Ground, x: np.ndarray, y: np.ndarray, shore: np.ndarray, date: Date) -> np.ndarray:
    """Return class codes of points on land: each cover in turn takes what suits it from those before."""
    moved_x, moved_y = drift(x, y)
    rows = (TOP - (2.0 * y - moved_y)) / CELL - 0.5
    columns = ((2.0 * x - moved_x) - WEST) / CELL - 0.5
    height, above, to_river, slope, channel = (
        ground.at(name, rows, columns) for name in ("height", "above_river", "to_river", "slope", "channel")
    )
    patchy = rough(x, y, 301, longest=2_600.0, octaves=6, gain=0.62)
    broad = noise(x / 9_000.0, y / 9_000.0, 311)
    first, second = parcels(x + 90.0 * patchy, y - 90.0 * patchy, 340.0)
    big, _ = parcels(x + 150.0 * patchy, y + 150.0 * patchy, 900.0)
    high = height + 60.0 * patchy + 40.0 * broad
    east = np.minimum(np.maximum((x - 505_000.0) / 8_000.0, 0.0), 1.0) * date.drained_east
    town = sum(
        weight / (1.0 + ((x - east_of) ** 2 + (y - north_of) ** 2) / 9.0e5)
        for east_of, north_of, weight in ground.towns.tolist()
    )
    suits = {
        "cropland": (height < 150.0 + 40.0 * broad) & (slope < 0.16) & (first < date.ploughed + 0.25 * broad),
        "broadleaf woodland": (slope + 0.12 * patchy > 0.145) | (patchy > 0.62),
        "conifer plantation": (high > 165.0) & (big < 0.42) & (second > date.felled),
        "heath": (high > 225.0) | ((high > 165.0) & (big < 0.42) & (second < date.felled)),
        "bare rock": (high > 318.0) & (slope + 0.2 * patchy > 0.12),
        "wet grassland": (to_river < 560.0) & (above < 17.0 + 9.0 * patchy),
        "carr woodland": (to_river < 420.0) & (above < 15.0) & (patchy > 0.10 - date.wooded_banks),
        "reedbed": (above < 12.0) & (to_river < 520.0) & (height < 80.0) & (patchy < -0.08 - 0.25 * east),
        "salt marsh": (height < 26.0) & (slope < 0.14) & (shore < 0.16 + 0.10 * patchy) & (broad > -0.12),
        "sand and shingle": shore < 0.020 + 0.03 * noise(x / 3_000.0, y / 3_000.0, 321),
        "open water": (channel > 62.0) & (to_river < 62.0),
        "built-up": date.built_up * town + 0.22 * patchy + 0.12 * (second - 0.5) > 0.78,
    }
    cover = np.full(x.shape, CODE["pasture"], np.uint8)
    for name, where in suits.items():
        cover[where] = CODE[name]
    return cover
