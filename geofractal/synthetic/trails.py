"""Random lines that were not grown from a generator."""

from __future__ import annotations

import numpy as np

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
