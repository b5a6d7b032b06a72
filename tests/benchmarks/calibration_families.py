"""Curves of exactly known dimension for `calibration_tables.py`.

Families marked * were kept apart to judge: no constant was set on them.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
from numba import njit

from geofractal import synthetic
from geofractal.calibration import FAMILIES
from geofractal.synthetic import Curve
from geofractal.synthetic.koch import SQUARE, substitute

DIMENSIONS = (1.05, 1.12, 1.2, 1.3, 1.4, 1.5, 1.6, 1.75)


def open_curve(points: np.ndarray, *, closed: bool = False) -> Curve:
    xy = np.column_stack([points.real, points.imag])
    return Curve(np.ascontiguousarray(xy), closed, (), "drawn for calibration")


def weierstrass_trail(dimension: float, vertices: int, seed: int) -> Curve:
    """Both coordinates sum cosines of frequencies 1.5^k, amplitudes 1.5^(-k / D), random phases.

    Low frequencies are kept until they only turn the line (Mandelbrot & Berry-Lewis functions; D = 1 / H).
    """
    rng = np.random.default_rng(seed)
    exponent, base = 1 / dimension, 1.5
    time_ = np.arange(vertices) / vertices
    first = -int(3.5 / ((1 - exponent) * np.log(base))) - 1
    points = np.zeros(vertices, complex)
    for k in range(first, int(np.log(vertices / 2) / np.log(base)) + 1):
        turn = np.pi * base**k * time_
        for axis in (1, 1j):
            phase = rng.uniform(0, 2 * np.pi)
            points += axis * base ** (-k * exponent) * -2 * np.sin(turn + phase) * np.sin(turn)
    return open_curve(points)


def _displacement(dimension: float) -> float:
    """Standard deviation s with E(|1/2 + s z|^D + |1/2 - s z|^D) = 1 for a complex normal z."""
    from scipy.optimize import brentq

    z = np.random.default_rng(0).normal(size=(100_000, 2)) @ [1, 1j]
    return float(brentq(lambda s: 2 * np.mean(np.abs(0.5 + s * z) ** dimension) - 1, 0, 5))


SCATTER = {d: _displacement(d) for d in DIMENSIONS}


def gaussian_middles(dimension: float, vertices: int, seed: int) -> Curve:
    """Every piece longer than a limit is broken at its middle, moved by a normal vector.

    E sum r^D = 1 (Mauldin & Williams 1986).
    """
    rng = np.random.default_rng(seed)
    pieces, limit = np.ones(1, complex), 1.6 * vertices ** (-1 / dimension)
    while (big := np.abs(pieces) > limit).any():
        z = rng.normal(size=(big.sum(), 2)) @ [1, 1j] * SCATTER[dimension]
        parts = np.where(big, 2, 1)
        first = np.cumsum(parts) - parts
        grown = np.repeat(pieces, parts)
        grown[first[big]] *= 0.5 + z
        grown[first[big] + 1] *= 0.5 - z
        pieces = grown
    return open_curve(np.concatenate(([0], np.cumsum(pieces))))


def closed_trail(dimension: float, vertices: int, seed: int) -> Curve:
    """Ring of fractional Brownian increments: spectrum k^-(2 H + 1)."""
    rng = np.random.default_rng(seed)
    k = np.fft.fftfreq(vertices, 1 / vertices)
    power = np.zeros(vertices)
    power[1:] = (2 * np.sin(np.pi * np.abs(k[1:]) / vertices)) ** -(1 / dimension + 0.5)
    points = np.fft.ifft(power * (rng.normal(size=(vertices, 2)) @ [1, 1j]))
    return open_curve(np.append(points, points[0]), closed=True)


def island(sides: list[Curve], corners: int) -> Curve:
    """Ring of open curves laid end to end along a regular polygon."""
    at = np.exp(-2j * np.pi * np.arange(corners + 1) / corners)
    points = []
    for i, side in enumerate(sides):
        z = side.xy @ [1, 1j]
        points.append((at[i] + (at[i + 1] - at[i]) * (z - z[0]) / (z[-1] - z[0]))[:-1])
    ring = np.concatenate(points)
    return open_curve(np.append(ring, ring[0]), closed=True)


@njit(cache=True)
def _border(seed: int, corners: np.ndarray) -> int:
    """Follow a critical cluster's border from a black hexagon; corners passed until it closes, or -1."""
    step_q, step_r = (1, 0, -1, -1, 0, 1), (0, 1, 1, 0, -1, -1)
    q, r, facing = 0, 0, 0
    for i in range(len(corners)):
        left, right = (facing + 1) % 6, (facing + 5) % 6
        ahead_q, ahead_r = q + step_q[left], r + step_r[left]
        sum_q, sum_r = 3 * q + step_q[facing] + step_q[left], 3 * r + step_r[facing] + step_r[left]
        corners[i, 0], corners[i, 1] = (sum_q + 0.5 * sum_r) / 3, sum_r * np.sqrt(0.75) / 3
        mixed = np.uint64(ahead_q + 2**31) * np.uint64(0x9E3779B97F4A7C15) + np.uint64(seed)
        mixed = (mixed ^ (mixed >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
        mixed += np.uint64(ahead_r + 2**31) * np.uint64(0x94D049BB133111EB)
        mixed = (mixed ^ (mixed >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
        black = ((mixed ^ (mixed >> np.uint64(31))) >> np.uint64(33)) & np.uint64(1) == np.uint64(0)
        black = (black or (ahead_q == 0 and ahead_r == 0)) and not (ahead_q == 1 and ahead_r == 0)
        if black:
            q, r, facing = ahead_q, ahead_r, right
        else:
            facing = left
        if q == 0 and r == 0 and facing == 0:
            return i + 1
    return -1


@njit(cache=True)
def _border_about(seed: int, vertices: int, corners: np.ndarray) -> int:
    for i in range(1_000_000):
        found = _border(seed * 1_000_003 + i * 7919, corners)
        if found > vertices / 1.5:
            return found
    return -1


def cluster_border(vertices: int, seed: int) -> Curve:
    """Closed border of a cluster of critical percolation on hexagons, D = 7/4 (Saleur & Duplantier 1987).

    One of 1/1.5 to 1.5 times so many vertices, among those that start anywhere.
    """
    corners = np.empty((int(1.5 * vertices), 2))
    found = _border_about(seed + 1, vertices, corners)
    return open_curve(np.append(corners[:found], corners[:1], axis=0) @ [1, 1j], closed=True)


def _level(pieces: int, vertices: float) -> int:
    return max(1, round(np.log(vertices) / np.log(pieces)))


THREE = np.array([0, (2 + 1j) / 5, (3 - 1j) / 5, 1])
FIVE = np.array([0, 1, 1 + 1j, 2 + 1j, 2, 3]) / 3
THREE_DIMENSION = 2 * np.log(3) / np.log(5)
FIVE_DIMENSION = np.log(5) / np.log(3)


def flipped(generator: np.ndarray, vertices: int, seed: int, *, ring: bool = False) -> Curve:
    """Equal pieces, each replacement flipped by a fair coin; a ring starts from a square (Moran 1946)."""
    base = np.array(SQUARE if ring else (0, 1), dtype=complex)
    level = _level(len(generator) - 1, vertices / (len(base) - 1))
    points = substitute(base, generator, level, rng=np.random.default_rng(seed))
    points[-1] = points[0] if ring else points[-1]
    return open_curve(points, closed=ring)


SET_ON = {
    "fractional trails": FAMILIES["fractional trails"],
    "random-sided Koch": FAMILIES["random-sided Koch"],
    "random middles": FAMILIES["random middles"],
    "Gaussian middles": gaussian_middles,
    "Weierstrass trails": weierstrass_trail,
    "mixed Koch": FAMILIES["mixed Koch"],
}
ONE_DIMENSION: dict[str, tuple[float, Callable[[int, int], Curve]]] = {
    "loop-erased walks *": (1.25, lambda n, s: synthetic.loop_erased_walk(int(n**0.8), seed=s)),
    "three-piece curves *": (THREE_DIMENSION, partial(flipped, THREE)),
    "quadratic Koch *": (FIVE_DIMENSION, partial(flipped, FIVE)),
    "percolation borders": (1.75, lambda n, s: synthetic.percolation_border(vertices=n, seed=s)),
}
RINGS = {
    "closed trails": closed_trail,
    "random Koch islands": lambda d, n, s: synthetic.random_koch(
        d, level=_level(4, n / 3), seed=s, island=True
    ),
    "middles islands": lambda d, n, s: island(
        [synthetic.random_midpoint(d, level=_level(2, n / 4), seed=4 * s + i) for i in range(4)], 4
    ),
    "Gaussian islands": lambda d, n, s: island([gaussian_middles(d, n // 3, 3 * s + i) for i in range(3)], 3),
}
RINGS_OF_ONE_DIMENSION: dict[str, tuple[float, Callable[[int, int], Curve]]] = {
    "three-piece islands *": (THREE_DIMENSION, partial(flipped, THREE, ring=True)),
    "cluster borders": (1.75, cluster_border),
}
