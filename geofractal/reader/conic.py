"""The equidistant conic plane fitted to a stretch of the globe, its distortion in closed form."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache

import numpy as np

from geofractal.kernels import planes as kernels
from geofractal.measure import Floats
from geofractal.reader.crs import SourceCrs


@dataclass(frozen=True, slots=True)
class Conic:
    """An equidistant conic plane and its worst relative distance error over what it was fitted to.

    A parallel at meridian distance M has the scale (c0 - n (M - m0)) / (its radius), least at the latitude
    `least`; n = 0 is a cylinder. Angles in radians, lengths in metres.
    """

    lon0: float
    c0: float
    n: float
    m0: float
    least: float
    distortion: float


def fit_conic(source: SourceCrs, lonlat: Floats) -> Conic | None:
    """Return the equidistant conic with the least worst scale over (m, 2) radians, or None.

    The scale of parallels is equally far from 1 at both ends of the latitudes and, the other way, at
    its least between them. None for features that span half the globe's longitudes or reach a pole.
    """
    lon0, half = _longitudes(lonlat[:, 0])
    low, high = _reach(lonlat[:, 1].min(), lonlat[:, 1].max(), half)
    if half >= 0.5 * np.pi or max(-low, high) > 0.5 * np.pi - 1e-6:
        return None
    latitude = np.linspace(low, max(high, low + 1e-6), 257)
    meridian, parallel = _meridian(source, latitude), _parallel(source, latitude)
    m0 = meridian[0]
    tilt = (1.0 - parallel[-1] / parallel[0]) / (meridian[-1] - m0)
    shape = (1.0 - tilt * (meridian - m0)) / parallel
    c0 = 2.0 / (shape[0] + shape.min())
    fitted = Conic(lon0, c0, c0 * tilt, m0, float(latitude[shape.argmin()]), 0.0)
    worst = conic_distortion(source, fitted, latitude[:1], latitude[-1:], np.array([half]))
    return replace(fitted, distortion=float(worst[0]))


def conic_distortion(source: SourceCrs, plane: Conic, low: Floats, high: Floats, half: Floats) -> Floats:
    """Return the worst relative distance error of a conic over latitude bands `half` longitudes wide.

    Straight lines on the plane bow polewards like geodesics do: from the edge of the band nearer the
    cone's tip, at distance rho from it, down to rho cos(n half).
    """
    edge = high if plane.n >= 0.0 else low
    c = plane.c0 - plane.n * (_meridian(source, edge) - plane.m0)
    bow = c * half**2 * abs(plane.n) * 0.5 * np.sinc(0.5 * plane.n * half / np.pi) ** 2
    bow /= source.a * (1.0 - source.e2)
    tip = np.clip(edge + np.copysign(bow, plane.n), -0.5 * np.pi, 0.5 * np.pi)
    least = np.clip(plane.least, np.minimum(low, tip), np.maximum(high, tip))
    worst = np.zeros(len(low))
    for latitude in (low, high, tip, least):
        scale = (plane.c0 - plane.n * (_meridian(source, latitude) - plane.m0)) / _parallel(source, latitude)
        worst = np.maximum(worst, np.abs(scale - 1.0))
    return worst


def _longitudes(lon: Floats) -> tuple[float, float]:
    """Return middle and half width of longitudes (radians) that span less than half a turn."""
    first = np.arctan2(np.sin(lon).mean(), np.cos(lon).mean())
    away = lon - first
    away -= 2.0 * np.pi * np.round(away / (2.0 * np.pi))
    return float(first + 0.5 * (away.max() + away.min())), float(0.5 * np.ptp(away))


def _reach(low: float, high: float, half: float) -> tuple[float, float]:
    """Return the latitudes that geodesics reach between points of a band `half` wide each way."""
    bow = max(np.cos(half), 1e-12)
    north = float(np.arctan(np.tan(high) / bow)) if high > 0.0 else high
    south = float(np.arctan(np.tan(low) / bow)) if low < 0.0 else low
    return south, north


def _parallel(source: SourceCrs, latitude: Floats) -> Floats:
    """Return the radius of parallels in metres; never quite 0."""
    sine = np.sin(latitude)
    return source.a * np.maximum(np.cos(latitude), 1e-12) / np.sqrt(1.0 - source.e2 * sine * sine)


@cache
def _meridian_series(a: float, b: float) -> tuple[float, ...]:
    """Return the terms of the meridian's length, to the fourth power of the third flattening (Helmert)."""
    n = (a - b) / (a + b)
    mean = a / (1.0 + n)
    return (
        mean * (1.0 + n**2 / 4.0 + n**4 / 64.0),
        -mean * 1.5 * (n - n**3 / 8.0),
        mean * 15.0 / 16.0 * (n**2 - n**4 / 4.0),
        -mean * 35.0 / 48.0 * n**3,
        mean * 315.0 / 512.0 * n**4,
    )


def _meridian(source: SourceCrs, latitude: Floats) -> Floats:
    """Return metres along the meridian from the equator."""
    terms = _meridian_series(source.a, source.b)
    length = terms[0] * latitude
    for k, term in enumerate(terms[1:], start=1):
        length = length + term * np.sin(2.0 * k * latitude)
    return length


def on_conic(source: SourceCrs, plane: Conic, lonlat: Floats) -> Floats:
    """Return (m, 2) metres on the plane of (m, 2) radians."""
    series = np.array(_meridian_series(source.a, source.b))
    return kernels.conic(lonlat, plane.lon0, plane.c0, plane.n, plane.m0, series)
