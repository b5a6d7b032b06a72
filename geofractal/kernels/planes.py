"""Compiled loops of the projector: long edges split, longitudes and latitudes laid on planes."""

from __future__ import annotations

import math

import numpy as np

from geofractal.kernels.jit import kernel
from geofractal.measure import Bools, Floats, Ints

TURN = 8e-4
"""Radians that one straight piece may stand for: the arc's sagitta is then TURN / 8 of its length."""

ARITHMETIC = 0.3
"""Local error of `azimuthal`, in units of e2 (distance / radius)^2; held by a test against geodesics."""


@kernel
def pieces_on_graticule(lonlat: Floats, part_offsets: Ints, longest: float) -> Ints:
    """Return into how many pieces each edge, straight in longitude and latitude, is to be cut.

    A piece turns by at most `TURN` from a geodesic, and is at most `longest` (radians) long.
    Element i is about the edge from vertex i to i + 1; 1 at the end of a part. The edge
    (dlon, dlat) turns by dlon sin(lat) (2 dlat^2 + u^2) / (dlat^2 + u^2) with u = dlon cos(lat)
    (geodesic curvature of the curve, by Liouville's formula); dlon is the short way round.
    """
    pieces = np.ones(len(lonlat), np.int64)
    for part in range(len(part_offsets) - 1):
        for i in range(part_offsets[part], part_offsets[part + 1] - 1):
            dlon = abs(lonlat[i + 1, 0] - lonlat[i, 0])
            dlat = abs(lonlat[i + 1, 1] - lonlat[i, 1])
            if dlon <= 0.5 * TURN and dlat <= longest:
                continue
            dlon = abs(dlon - 2.0 * math.pi * round(dlon / (2.0 * math.pi)))
            south, north = lonlat[i, 1], lonlat[i + 1, 1]
            high = min(max(abs(south), abs(north)), 0.5 * math.pi)
            low = 0.0 if south * north < 0.0 else min(abs(south), abs(north))
            u = dlon * math.cos(high)
            square = dlat * dlat + u * u
            turn = 0.0 if square == 0.0 else dlon * math.sin(high) * (1.0 + dlat * dlat / square)
            length = math.hypot(dlat, dlon * math.cos(low))
            pieces[i] = max(1, math.ceil(turn / TURN), math.ceil(length / longest))
    return pieces


@kernel
def pieces_by_length(points: Floats, part_offsets: Ints, longest: float) -> Ints:
    """Return into how many pieces of at most `longest` each straight edge is to be cut; (m, d) points."""
    pieces = np.ones(len(points), np.int64)
    for part in range(len(part_offsets) - 1):
        for i in range(part_offsets[part], part_offsets[part + 1] - 1):
            square = 0.0
            for k in range(points.shape[1]):
                square += (points[i + 1, k] - points[i, k]) ** 2
            if square > longest * longest:
                pieces[i] = math.ceil(math.sqrt(square) / longest)
    return pieces


@kernel
def pieces_by_bend(start: Floats, middle: Floats, end: Floats) -> Ints:
    """Return into how many pieces to cut edges whose geocentric (m, 3) start, middle and end are given.

    The middle's offset sideways of the chord, along the ground, over the chord's length is
    the edge's sagitta; n pieces have 1 / n of it each.
    """
    pieces = np.ones(len(start), np.int64)
    for i in range(len(start)):
        cx, cy, cz = end[i, 0] - start[i, 0], end[i, 1] - start[i, 1], end[i, 2] - start[i, 2]
        mx, my, mz = middle[i, 0], middle[i, 1], middle[i, 2]
        sx, sy, sz = my * cz - mz * cy, mz * cx - mx * cz, mx * cy - my * cx
        side = math.sqrt(sx * sx + sy * sy + sz * sz)
        chord = math.sqrt(cx * cx + cy * cy + cz * cz)
        if side > 0.0:
            sagitta = abs(
                (mx - 0.5 * (start[i, 0] + end[i, 0])) * sx
                + (my - 0.5 * (start[i, 1] + end[i, 1])) * sy
                + (mz - 0.5 * (start[i, 2] + end[i, 2])) * sz
            )
            pieces[i] = max(1, math.ceil(sagitta / side / chord / (TURN / 8.0)))
    return pieces


@kernel
def cut(
    xy: Floats, part_offsets: Ints, given: Bools, pieces: Ints, turn: float
) -> tuple[Floats, Ints, Bools]:
    """Return vertices, part offsets and source marks with each edge cut into its `pieces`, evenly in xy.

    `turn` is a full turn of x (edges go the short way round), 0 where x does not wrap.
    """
    total = pieces.sum()
    out, offsets = np.empty((total, 2)), np.zeros(len(part_offsets), np.int64)
    marks = np.zeros(total, np.bool_)
    at = 0
    for part in range(len(part_offsets) - 1):
        for i in range(part_offsets[part], part_offsets[part + 1]):
            out[at, 0], out[at, 1], marks[at] = xy[i, 0], xy[i, 1], given[i]
            at += 1
            if pieces[i] == 1:
                continue
            dx, dy = xy[i + 1, 0] - xy[i, 0], xy[i + 1, 1] - xy[i, 1]
            if turn > 0.0:
                dx -= turn * round(dx / turn)
            for k in range(1, pieces[i]):
                share = k / pieces[i]
                out[at, 0], out[at, 1] = xy[i, 0] + share * dx, xy[i, 1] + share * dy
                at += 1
        offsets[part + 1] = at
    return out, offsets, marks


@kernel
def cut_on_geodesics(
    lonlat: Floats, xyz: Floats, part_offsets: Ints, pieces: Ints, a: float, e2: float
) -> tuple[Floats, Ints, Bools]:
    """Return the same as `cut` with the new vertices above their edge's chord, along the surface's normal.

    They leave the geodesic by less than 1e-6 of the edge's length up to 1,000 km. Latitude by Bowring's
    formula (1976). Edges go the short way; between antipodes none is shorter.
    """
    total = pieces.sum()
    out, offsets = np.empty((total, 2)), np.zeros(len(part_offsets), np.int64)
    marks = np.zeros(total, np.bool_)
    b = a * math.sqrt(1.0 - e2)
    at = 0
    for part in range(len(part_offsets) - 1):
        for i in range(part_offsets[part], part_offsets[part + 1]):
            out[at, 0], out[at, 1], marks[at] = lonlat[i, 0], lonlat[i, 1], True
            at += 1
            for k in range(1, pieces[i]):
                share = k / pieces[i]
                x = (1.0 - share) * xyz[i, 0] + share * xyz[i + 1, 0]
                y = (1.0 - share) * xyz[i, 1] + share * xyz[i + 1, 1]
                z = (1.0 - share) * xyz[i, 2] + share * xyz[i + 1, 2]
                axial = math.hypot(x, y)
                reduced = math.atan2(a * z, b * axial)
                up = z + e2 / (1.0 - e2) * b * math.sin(reduced) ** 3
                out[at, 0] = math.atan2(y, x)
                out[at, 1] = math.atan2(up, axial - e2 * a * math.cos(reduced) ** 3)
                at += 1
        offsets[part + 1] = at
    return out, offsets, marks


@kernel
def geocentric(lonlat: Floats, a: float, e2: float) -> Floats:
    """Return (m, 3) geocentric metres of (m, 2) radians on the ellipsoid of axis `a`, eccentricity^2 `e2`."""
    out = np.empty((len(lonlat), 3))
    for i in range(len(lonlat)):
        sin_lat, cos_lat = math.sin(lonlat[i, 1]), math.cos(lonlat[i, 1])
        prime = a / math.sqrt(1.0 - e2 * sin_lat * sin_lat)
        out[i, 0] = prime * cos_lat * math.cos(lonlat[i, 0])
        out[i, 1] = prime * cos_lat * math.sin(lonlat[i, 0])
        out[i, 2] = prime * (1.0 - e2) * sin_lat
    return out


@kernel
def centres(xyz: Floats, part_offsets: Ints, feature_offsets: Ints, closed: Bools, e2: float) -> Floats:
    """Return (n, 2) longitude and latitude of each feature's middle, that of its box as seen from above.

    Seen from above the mean of its vertices, a ring's last left out: no seam, no pole, and the same
    middle from whichever vertex a ring starts.
    """
    out = np.empty((len(feature_offsets) - 1, 2))
    for feature in range(len(feature_offsets) - 1):
        x = y = z = 0.0
        for part in range(feature_offsets[feature], feature_offsets[feature + 1]):
            for i in range(part_offsets[part], part_offsets[part + 1] - closed[part]):
                x, y, z = x + xyz[i, 0], y + xyz[i, 1], z + xyz[i, 2]
        lon, lat = math.atan2(y, x), math.atan2(z, math.hypot(x, y))
        sin_lon, cos_lon, sin_lat, cos_lat = math.sin(lon), math.cos(lon), math.sin(lat), math.cos(lat)
        west = south = math.inf
        east = north = -math.inf
        square = 0.0
        first, last = part_offsets[feature_offsets[feature]], part_offsets[feature_offsets[feature + 1]]
        for i in range(first, last):
            right = cos_lon * xyz[i, 1] - sin_lon * xyz[i, 0]
            up = cos_lat * xyz[i, 2] - sin_lat * (cos_lon * xyz[i, 0] + sin_lon * xyz[i, 1])
            west, east, south, north = min(west, right), max(east, right), min(south, up), max(north, up)
            square = max(square, xyz[i, 0] ** 2 + xyz[i, 1] ** 2 + xyz[i, 2] ** 2)
        right, up = 0.5 * (west + east), 0.5 * (south + north)
        outward = math.sqrt(max(square - right * right - up * up, 0.0))
        across = cos_lat * outward - sin_lat * up
        x, y = cos_lon * across - sin_lon * right, sin_lon * across + cos_lon * right
        z = sin_lat * outward + cos_lat * up
        out[feature, 0], out[feature, 1] = math.atan2(y, x), math.atan2(z, (1.0 - e2) * math.hypot(x, y))
    return out


@kernel
def boxes(points: Floats, offsets: Ints) -> Floats:
    """Return (n, 2 d): smallest then largest of each of d coordinates, of each run of (m, d) points."""
    d = points.shape[1]
    out = np.empty((len(offsets) - 1, 2 * d))
    for run in range(len(offsets) - 1):
        for k in range(d):
            low = high = points[offsets[run], k]
            for i in range(offsets[run] + 1, offsets[run + 1]):
                low, high = min(low, points[i, k]), max(high, points[i, k])
            out[run, k], out[run, d + k] = low, high
    return out


@kernel
def azimuthal(xyz: Floats, offsets: Ints, centres: Floats, a: float, e2: float) -> tuple[Floats, Floats]:
    """Return azimuthal equidistant (m, 2) metres and the worst relative distance error of each run.

    A run's centre is (lon, lat) in radians. The chord from the centre is turned into an arc with
    the centre's radius of curvature in that azimuth (Euler). Along the plane's radii distances are
    true; across them they are stretched by c / sin(c), c = distance / radius, which bounds every
    straight distance between points no farther out (Snyder 1987, pp. 191-202).
    """
    out, worst = np.empty((len(xyz), 2)), np.zeros(len(offsets) - 1)
    for run in range(len(offsets) - 1):
        sin_lon, cos_lon = math.sin(centres[run, 0]), math.cos(centres[run, 0])
        sin_lat, cos_lat = math.sin(centres[run, 1]), math.cos(centres[run, 1])
        w = 1.0 - e2 * sin_lat * sin_lat
        prime = a / math.sqrt(w)
        meridional = prime * (1.0 - e2) / w
        x0, y0, z0 = prime * cos_lat * cos_lon, prime * cos_lat * sin_lon, prime * (1.0 - e2) * sin_lat
        farthest = 0.0
        for i in range(offsets[run], offsets[run + 1]):
            dx, dy, dz = xyz[i, 0] - x0, xyz[i, 1] - y0, xyz[i, 2] - z0
            east = cos_lon * dy - sin_lon * dx
            north = cos_lat * dz - sin_lat * (cos_lon * dx + sin_lon * dy)
            flat = east * east + north * north
            if flat == 0.0:
                out[i, 0] = out[i, 1] = 0.0
                continue
            half_curvature = 0.5 * (north * north / meridional + east * east / prime) / flat
            c = 2.0 * math.asin(min(1.0, half_curvature * math.sqrt(dx * dx + dy * dy + dz * dz)))
            scale = c / (2.0 * half_curvature * math.sqrt(flat))
            out[i, 0], out[i, 1] = scale * east, scale * north
            farthest = max(farthest, c)
        if farthest > 0.0:
            worst[run] = farthest / max(math.sin(farthest), 1e-9) - 1.0 + ARITHMETIC * e2 * farthest**2
    return out, worst


@kernel
def conic(lonlat: Floats, lon0: float, c0: float, n: float, m0: float, series: Floats) -> Floats:
    """Return equidistant conic (m, 2) metres: meridians true, parallel radius (c0 - n (M - m0)) / n.

    `series` gives the meridian's length M(lat) as series[0] lat + sum of series[k] sin(2 k lat). Written
    so that n = 0, the cylinder, is no special case.
    """
    out = np.empty((len(lonlat), 2))
    for i in range(len(lonlat)):
        dlon = lonlat[i, 0] - lon0
        dlon -= 2.0 * math.pi * round(dlon / (2.0 * math.pi))
        meridian = series[0] * lonlat[i, 1]
        for k in range(1, len(series)):
            meridian += series[k] * math.sin(2.0 * k * lonlat[i, 1])
        c = c0 - n * (meridian - m0)
        angle = n * dlon
        half = 0.5 * angle
        sinc = math.sin(angle) / angle if angle != 0.0 else 1.0
        sinc_half = math.sin(half) / half if half != 0.0 else 1.0
        out[i, 0] = c * dlon * sinc
        out[i, 1] = meridian - m0 + 0.5 * c * n * dlon * dlon * sinc_half * sinc_half
    return out


@kernel
def close_rings(points: Floats, part_offsets: Ints, closed: Bools) -> None:
    """Copy each ring's first point onto its last, so that it closes to the bit."""
    for part in range(len(closed)):
        if closed[part]:
            for k in range(points.shape[1]):
                points[part_offsets[part + 1] - 1, k] = points[part_offsets[part], k]


@kernel
def outermost(xy: Floats, offsets: Ints) -> Ints:
    """Return (n, 4) indices of each run's westernmost, easternmost, southernmost, northernmost vertex."""
    out = np.empty((len(offsets) - 1, 4), np.int64)
    for run in range(len(offsets) - 1):
        out[run, :] = offsets[run]
        for i in range(offsets[run] + 1, offsets[run + 1]):
            for k in range(2):
                if xy[i, k] < xy[out[run, 2 * k], k]:
                    out[run, 2 * k] = i
                if xy[i, k] > xy[out[run, 2 * k + 1], k]:
                    out[run, 2 * k + 1] = i
    return out
