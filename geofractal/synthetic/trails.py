"""Random lines that were not grown from a generator."""

from __future__ import annotations

import numpy as np

from geofractal.kernels.random_walks import erase_loops, explore_hexagons
from geofractal.synthetic.curve import Curve, Regime, extent


def fractional_trail(dimension: float, *, vertices: int, seed: int) -> Curve:
    """Trail of fractional Brownian motion in the plane, both coordinates of Hurst exponent H = 1 / D.

    Parameters
    ----------
    dimension : 1 <= D <= 2; 2 is Brownian motion, 1 a straight line in a random direction
    vertices : number wanted, at equal steps of time; millions take seconds
    seed : of the draw

    Returns
    -------
    Curve
        Starts at the origin; a step along each axis has standard deviation 1. Trails with D above 1 cross
        themselves.

    Notes
    -----
    Process: Mandelbrot & Van Ness (1968), SIAM Rev. 10:422-437. Dimension of the trail min(2, 1/H):
    Falconer, Fractal Geometry, ch. 16. Sampled exactly, not approximately, by circulant embedding: Davies
    & Harte (1987), Biometrika 74:95-101; real and imaginary part are independent samples: Dietrich &
    Newsam (1997), SIAM J. Sci. Comput. 18:1088-1107.
    """
    if not 1 <= dimension <= 2:
        raise ValueError(f"dimension {dimension}: a fractional Brownian trail in the plane has 1 <= D <= 2")
    if vertices < 3:
        raise ValueError(f"{vertices} vertices: a trail has at least 3")
    rng = np.random.default_rng(seed)
    half = 1 << int(np.ceil(np.log2(vertices - 1)))
    powers = np.arange(half + 2, dtype=np.float64) ** (2 / dimension)
    covariance = 0.5 * (powers[2:] - 2 * powers[1:-1] + powers[:-2])
    row = np.concatenate([[1.0], covariance, covariance[-2::-1]])
    # The exact eigenvalues are not negative for any H; rounding may leave some just below zero.
    spread = np.sqrt(np.maximum(np.fft.fft(row).real, 0) / len(row))
    noise = rng.standard_normal(2 * len(row)).view(np.complex128)
    steps = np.fft.fft(spread * noise)[: vertices - 1]
    xy = np.concatenate([np.zeros((1, 2)), np.cumsum(steps).view(np.float64).reshape(-1, 2)])
    finest = float(np.median(np.hypot(*np.diff(xy, axis=0).T)))
    source = "fractional Brownian motion (Mandelbrot & Van Ness 1968); trail D = 1/H (Falconer, ch. 16)"
    return Curve(xy, False, (Regime(finest, max(extent(xy), finest), dimension),), source)


def loop_erased_walk(radius: int, *, seed: int) -> Curve:
    """Loop-erased random walk on the square lattice, from the middle of a square to its rim.

    Parameters
    ----------
    radius : half the square's side in lattice steps; the line has about radius^(5/4) vertices. Needs
        16 radius^2 bytes and about 2 radius^2 steps: 0.1 s and 64 MB at 2,000
    seed : of the draw

    Returns
    -------
    Curve
        A line that never meets itself, D = 5/4.

    Notes
    -----
    Lawler (1980), Duke Math. J. 47:655-693; dimension: Kenyon (2000), Acta Math. 185:239-286.
    """
    if radius < 2:
        raise ValueError(f"radius {radius}: at least 2 lattice steps")
    side = 2 * radius + 1
    place = np.zeros((side, side), dtype=np.int32)
    place[radius, radius] = 1
    path = np.zeros(side * side, dtype=np.int64)
    path[0] = radius * side + radius
    rng = np.random.default_rng(seed)
    length, arrived = 1, False
    while not arrived:
        steps = rng.integers(0, 4, 1 << 16, dtype=np.uint8)
        length, arrived = erase_loops(steps, place, path, length)
    rows, columns = np.divmod(path[:length], side)
    xy = np.column_stack([columns - radius, rows - radius]).astype(np.float64)
    return Curve(xy, False, (Regime(1.0, extent(xy), 5 / 4),), "loop-erased walk (Lawler 1980; Kenyon 2000)")


def percolation_border(*, vertices: int, seed: int) -> Curve:
    """Border between the colours of critical percolation on hexagons, started at a two-coloured rim.

    Parameters
    ----------
    vertices : number wanted; hexagons lie 1 apart, steps are 1 / sqrt(3) long
    seed : of the draw

    Returns
    -------
    Curve
        A line that never meets itself but nearly does everywhere, D = 7/4.

    Notes
    -----
    Smirnov (2001), C. R. Acad. Sci. Paris 333:239-244 (its limit is SLE with kappa = 6); dimension 1 +
    kappa / 8: Beffara (2008), Ann. Probab. 36:1421-1452.
    """
    if vertices < 3:
        raise ValueError(f"{vertices} vertices: a border has at least 3")
    xy = np.empty((vertices, 2))
    explore_hexagons(np.random.default_rng(seed).integers(0, 2**63, dtype=np.uint64), xy)
    regimes = (Regime(3**-0.5, extent(xy), 7 / 4),)
    return Curve(xy, False, regimes, "percolation on hexagons (Smirnov 2001; Beffara 2008)")
