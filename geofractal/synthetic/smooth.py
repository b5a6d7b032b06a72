"""Curves without roughness: what every dimension must call 1."""

from __future__ import annotations

from math import pi

import numpy as np

from geofractal.synthetic.curve import Curve, Regime


def _check(vertices: int) -> None:
    if vertices < 2:
        raise ValueError(f"{vertices} vertices: a line has at least 2")


def line(*, vertices: int, angle: float = 0.0) -> Curve:
    """Straight line of length 1 from the origin, at `angle` radians, with evenly spaced vertices."""
    _check(vertices)
    xy = np.linspace(0, 1, vertices)[:, None] * np.array([np.cos(angle), np.sin(angle)])
    return Curve(xy, False, (Regime(1 / (vertices - 1), 1.0, 1.0),) if vertices > 2 else (), "straight line")


def arc(turn: float, *, vertices: int) -> Curve:
    """Arc of the unit circle that turns by `turn` radians (up to 2 pi), with evenly spaced vertices."""
    _check(vertices)
    if not 0 < turn <= 2 * pi:
        raise ValueError(f"turn {turn}: an arc turns by more than 0 and at most 2 pi radians")
    at = np.linspace(0, turn, vertices)
    xy = np.column_stack([np.cos(at), np.sin(at)])
    return Curve(xy, False, (Regime(turn / (vertices - 1), min(turn, 1.0), 1.0),), "arc of a circle")


def circle(*, vertices: int) -> Curve:
    """Draw the unit circle as a ring of `vertices` sides."""
    ring = arc(2 * pi, vertices=vertices + 1)
    ring.xy[-1] = ring.xy[0]
    return Curve(ring.xy, True, ring.regimes, "circle")


def meander(amplitude: float, *, bends: int, vertices_per_bend: int = 64) -> Curve:
    """Sine-generated meander with bends half a unit of length apart along the channel.

    Parameters
    ----------
    amplitude : largest angle between channel and valley, radians; below about 2.2 it never crosses itself
    bends : number of half waves
    vertices_per_bend : vertices along each half wave

    Returns
    -------
    Curve
        Smooth below a bend and straight above many: dimension 1 on both sides of a break at half the
        wavelength along the valley, J0(amplitude) / 2, so never one power law. Sinuosity 1 / J0(amplitude).

    Notes
    -----
    Langbein & Leopold (1966), USGS Professional Paper 422-H.
    """
    if bends < 1 or vertices_per_bend < 8:
        raise ValueError(f"{bends} bends of {vertices_per_bend} vertices: at least 1 bend of 8 vertices")
    step = 0.5 / vertices_per_bend
    middle = (np.arange(bends * vertices_per_bend) + 0.5) * step
    heading = amplitude * np.sin(2 * pi * middle)
    moves = np.column_stack([np.cos(heading), np.sin(heading)]) * step
    xy = np.concatenate([np.zeros((1, 2)), np.cumsum(moves, axis=0)])
    half_wave = 0.5 * float(
        np.cos(amplitude * np.sin(2 * pi * np.linspace(0, 1, 4096, endpoint=False))).mean()
    )
    regimes = (Regime(step, half_wave, 1.0), Regime(half_wave, half_wave * bends, 1.0))
    return Curve(xy, False, regimes, "sine-generated curve (Langbein & Leopold 1966)")
