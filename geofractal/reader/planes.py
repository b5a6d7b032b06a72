"""Equal-distance planes: which one a feature is measured on, and how far its distances are off.

A feature lies on the plane of its own (azimuthal equidistant about its middle) or of its layer. Where
the worst distance error breaks the budget, a conic equidistant plane fitted to the feature is tried,
then three dimensions on the ellipsoid; else the feature is refused with the figure.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError, LayerError
from geofractal.kernels import planes as kernels
from geofractal.measure import PLANES, Bools, Floats, Ints, Lines
from geofractal.reader.conic import Conic, conic_distortion, fit_conic, on_conic
from geofractal.reader.crs import Bounds, SourceCrs, scale_factors, source_crs

FEATURE_AZIMUTHAL, FEATURE_CONIC, LAYER_AZIMUTHAL, LAYER_CONIC, THREE_DIMENSIONS, AS_GIVEN = range(
    len(PLANES)
)

LONGEST_PIECE_M = 20e3
"""No straight piece is longer: on a plane within budget its sagitta is then under 1e-4 of its length,
and in three dimensions its chord is shorter than its arc by under 1e-6."""

STRAIGHT_UP_TO_M = 500.0
"""Edges of projected layers up to this length are taken as straight without a look."""

OUTSIDE = "coordinates outside the CRS's world"


@dataclass(frozen=True, slots=True)
class LayerPlane:
    """The one plane of a whole layer: a conic, or else azimuthal about `centre` (radians)."""

    centre: tuple[float, float]
    azimuthal_distortion: float
    conic: Conic | None

    @property
    def conic_distortion(self) -> float:
        """Worst relative distance error of the conic; infinite where none can be fitted."""
        return np.inf if self.conic is None else self.conic.distortion


@dataclass(frozen=True, slots=True)
class Projector:
    """Lays ragged source coordinates on equal-distance planes, in metres; frozen and picklable.

    Attributes
    ----------
    crs : the layer's CRS (code, WKT)
    plane : ``feature``, each on its own plane, or ``layer``, all on one
    budget : worst relative distance error allowed (0.005 = 0.5 %)
    three_dimensions : whether features over budget may be measured on the ellipsoid itself
    edges : ``straight`` in the source's CRS, as maps draw them, or ``geodesic``
    bounds : the layer's extent in its CRS; needed for ``layer``

    Raises
    ------
    LayerError
        where the CRS cannot carry a layer.
    ConfigError
        where a layer plane is asked without bounds.
    """

    crs: str
    plane: Literal["feature", "layer"] = "feature"
    budget: float = 0.005
    three_dimensions: bool = True
    edges: Literal["straight", "geodesic"] = "straight"
    bounds: Bounds | None = None

    def __post_init__(self) -> None:
        source_crs(self.crs)
        if self.plane == "layer" and self.bounds is None:
            raise ConfigError("a plane for the whole layer needs the layer's bounds")

    def lines(
        self, rows: Ints, xy: Floats, part_offsets: Ints, feature_offsets: Ints, closed: Bools
    ) -> tuple[tuple[Lines, ...], dict[int, str]]:
        """Project features given as ragged arrays (see `Lines`), x before y, no coordinate missing.

        Returns
        -------
        chunks : planar features in one, three-dimensional ones in another; none is empty, order is kept
        problems : index of each feature left out, and why
        """
        if not len(rows):
            return (), {}
        source = source_crs(self.crs)
        given = _Ragged(rows, xy, part_offsets, feature_offsets, closed, np.ones(len(xy), np.bool_))
        if source.kind == "as-given":
            return (_as_given(given, source),), {}
        lonlat = source.lonlat(xy)
        outside = _outside(source, given, lonlat)
        problems = dict.fromkeys(np.flatnonzero(outside).tolist(), OUTSIDE)
        if outside.any():
            lonlat = lonlat[np.repeat(~outside, np.diff(given.runs))]
            given = given.take(~outside)
        if not len(given.rows):
            return (), problems
        places = np.flatnonzero(~outside)
        laid, refused = _lay(self, source, _densify(self.edges, source, given, lonlat))
        problems |= {int(places[i]): text for i, text in refused.items()}
        return laid, problems


@dataclass(frozen=True, slots=True)
class _Ragged:
    """Features in any coordinates, as `Lines` holds them."""

    rows: Ints
    xy: Floats
    part_offsets: Ints
    feature_offsets: Ints
    closed: Bools
    source_vertex: Bools

    @property
    def runs(self) -> Ints:
        """Vertex offsets of the features."""
        return self.part_offsets[self.feature_offsets]

    def take(self, keep: Bools) -> _Ragged:
        """Return the features to keep."""
        parts = np.repeat(keep, np.diff(self.feature_offsets))
        vertices = np.repeat(parts, np.diff(self.part_offsets))
        return _Ragged(
            self.rows[keep],
            self.xy[vertices],
            _offsets(np.diff(self.part_offsets)[parts]),
            _offsets(np.diff(self.feature_offsets)[keep]),
            self.closed[parts],
            self.source_vertex[vertices],
        )


def _offsets(counts: Ints) -> Ints:
    return np.concatenate([np.zeros(1, np.int64), np.cumsum(counts)])


def _as_given(given: _Ragged, source: SourceCrs) -> Lines:
    n = len(given.rows)
    return Lines(
        given.rows,
        given.xy * source.unit,
        given.part_offsets,
        given.feature_offsets,
        given.closed,
        given.source_vertex,
        np.full(n, AS_GIVEN, np.uint8),
        np.zeros(n),
        np.full(n, np.inf),
    )


def _outside(source: SourceCrs, given: _Ragged, lonlat: Floats) -> Bools:
    """Return which features leave the CRS's world.

    The outermost vertices of a projected layer are also taken there and back: the batch's, and where
    one of them is lost, every feature's.
    """
    runs = given.runs
    outside: Bools = np.logical_or.reduceat(~source.in_world(lonlat), runs[:-1])
    if source.kind == "projected" and not _comes_back(source, given.xy, lonlat, runs[[0, -1]]).all():
        outside |= ~_comes_back(source, given.xy, lonlat, runs)
    return outside


def _comes_back(source: SourceCrs, xy: Floats, lonlat: Floats, runs: Ints) -> Bools:
    """Return whether the westernmost, easternmost, southernmost and northernmost vertex of each run does."""
    outer = kernels.outermost(xy, runs)
    width, height = xy[outer[:, 1], 0] - xy[outer[:, 0], 0], xy[outer[:, 3], 1] - xy[outer[:, 2], 1]
    size = np.repeat(np.hypot(width, height), 4)
    at = outer.ravel()
    return np.asarray(source.comes_back(xy[at], lonlat[at], size).reshape(-1, 4).all(axis=1))


def _densify(edges: str, source: SourceCrs, given: _Ragged, lonlat: Floats) -> _Ragged:
    """Return the features in longitude and latitude (radians), their long edges cut."""
    offsets, marks = given.part_offsets, given.source_vertex
    if edges == "geodesic":
        xyz = kernels.geocentric(lonlat, source.a, source.e2)
        pieces = kernels.pieces_by_length(xyz, offsets, LONGEST_PIECE_M)
        if pieces.max() > 1:
            lonlat, offsets, marks = kernels.cut_on_geodesics(
                lonlat, xyz, offsets, pieces, source.a, source.e2
            )
    elif source.kind == "geographic":
        pieces = kernels.pieces_on_graticule(lonlat, offsets, LONGEST_PIECE_M / source.a)
        if pieces.max() > 1:
            lonlat, offsets, marks = kernels.cut(lonlat, offsets, marks, pieces, 2.0 * np.pi)
    else:
        return _densify_projected(source, given, lonlat)
    return replace(given, xy=lonlat, part_offsets=offsets, source_vertex=marks)


def _densify_projected(source: SourceCrs, given: _Ragged, lonlat: Floats) -> _Ragged:
    """Cut edges to the longest piece, then where the middle of a piece, taken back, lies off its chord."""
    pieces = kernels.pieces_by_length(given.xy, given.part_offsets, LONGEST_PIECE_M / source.unit)
    if pieces.max() > 1:
        given = _cut(given, pieces)
        lonlat = source.lonlat(given.xy)
    pieces = kernels.pieces_by_length(given.xy, given.part_offsets, STRAIGHT_UP_TO_M / source.unit)
    long = np.flatnonzero(pieces > 1)
    if len(long):
        middle = source.lonlat(0.5 * (given.xy[long] + given.xy[long + 1]))
        places = (lonlat[long], middle, lonlat[long + 1])
        pieces[:] = 1
        pieces[long] = kernels.pieces_by_bend(*(kernels.geocentric(at, source.a, source.e2) for at in places))
        if pieces.max() > 1:
            given = _cut(given, pieces)
            lonlat = source.lonlat(given.xy)
    return replace(given, xy=lonlat)


def _cut(given: _Ragged, pieces: Ints) -> _Ragged:
    xy, offsets, marks = kernels.cut(given.xy, given.part_offsets, given.source_vertex, pieces, 0.0)
    return replace(given, xy=xy, part_offsets=offsets, source_vertex=marks)


def _lay(projector: Projector, source: SourceCrs, given: _Ragged) -> tuple[tuple[Lines, ...], dict[int, str]]:
    """Choose the plane of each feature, given in radians, and lay it there."""
    runs = given.runs
    xyz = kernels.geocentric(given.xy, source.a, source.e2)
    centres = kernels.centres(xyz, given.part_offsets, given.feature_offsets, given.closed, source.e2)
    if projector.plane == "layer":
        laid = _lay_on_layer(projector, source, given.xy, xyz, runs)
    else:
        xy, distortion = kernels.azimuthal(xyz, runs, centres, source.a, source.e2)
        laid = _Laid.on(xy, distortion, FEATURE_AZIMUTHAL)
    refused: dict[int, str] = {}
    for i in np.flatnonzero(laid.distortion > projector.budget).tolist():
        run = slice(runs[i], runs[i + 1])
        text = _over_budget(projector, source, laid, i, run, given.xy[run], xyz[run], centres[i])
        if text:
            refused[i] = text
    keep = np.ones(len(runs) - 1, np.bool_)
    keep[list(refused)] = False
    spatial = laid.plane == THREE_DIMENSIONS
    chunks = ((laid.xy, keep & ~spatial), (xyz, keep & spatial))
    return tuple(_chunk(given, points, laid, chosen) for points, chosen in chunks if chosen.any()), refused


@dataclass(frozen=True, slots=True)
class _Laid:
    """Features on planes: coordinates, and plane, distortion and radius of each, as `Lines` holds them."""

    xy: Floats
    plane: NDArray[np.uint8]
    distortion: Floats
    radius: Floats

    @classmethod
    def on(cls, xy: Floats, distortion: Floats, plane: int) -> _Laid:
        n = len(distortion)
        return cls(xy, np.full(n, plane, np.uint8), distortion, np.full(n, np.inf))


def _over_budget(
    projector: Projector,
    source: SourceCrs,
    laid: _Laid,
    i: int,
    run: slice,
    lonlat: Floats,
    xyz: Floats,
    centre: Floats,
) -> str:
    """Move one feature to a plane, or space, that keeps the budget; return why there is none, else empty."""
    least = laid.distortion[i]
    if projector.plane == "feature":
        fitted = fit_conic(source, lonlat)
        if fitted is not None and fitted.distortion <= projector.budget:
            laid.plane[i], laid.distortion[i] = FEATURE_CONIC, fitted.distortion
            laid.xy[run] = on_conic(source, fitted, lonlat)
            return ""
        least = min(least, np.inf if fitted is None else fitted.distortion)
    if not projector.three_dimensions:
        return _refusal(least, projector.budget, "allow three-dimensions or raise budget-percent")
    laid.plane[i] = THREE_DIMENSIONS
    laid.radius[i], laid.distortion[i] = _ruler_radius(source, xyz, centre)
    if laid.distortion[i] > projector.budget:
        return _refusal(laid.distortion[i], projector.budget, "raise budget-percent")
    return ""


def _refusal(distortion: float, budget: float, way_out: str) -> str:
    figure = f"{100.0 * distortion:.2g} %" if distortion < 1.0 else "over 100 %"
    return f"distance error {figure} exceeds the budget of {100.0 * budget:.2g} %; {way_out}"


def _chunk(given: _Ragged, points: Floats, laid: _Laid, chosen: Bools) -> Lines:
    """Return the chosen features as one chunk, rings closed to the bit."""
    given = replace(given, xy=points)
    if not chosen.all():
        given = given.take(chosen)
    kernels.close_rings(given.xy, given.part_offsets, given.closed)
    return Lines(
        given.rows,
        given.xy,
        given.part_offsets,
        given.feature_offsets,
        given.closed,
        given.source_vertex,
        laid.plane[chosen],
        laid.distortion[chosen],
        laid.radius[chosen],
    )


def _ruler_radius(source: SourceCrs, xyz: Floats, centre: Floats) -> tuple[float, float]:
    """Return the radius that turns a ruler into its chord, and the worst relative error of doing so.

    Every curvature radius met lies between the meridian's at the lowest latitude that the feature's
    surroundings reach and the prime vertical's at the highest. Rulers go up to the feature's extent, at
    most a quarter of the globe: beyond it a chord hardly grows with its arc.
    """
    middle = kernels.geocentric(centre[None], source.a, source.e2)
    farthest = np.sqrt(((xyz - middle) ** 2).sum(axis=1).max())
    reach = 2.0 * np.arcsin(min(1.0, farthest / (2.0 * source.b)))
    lowest = np.sin(max(0.0, abs(centre[1]) - reach))
    highest = np.sin(min(0.5 * np.pi, abs(centre[1]) + reach))
    least = source.a * (1.0 - source.e2) / (1.0 - source.e2 * lowest**2) ** 1.5
    radii = np.array([least, source.a / np.sqrt(1.0 - source.e2 * highest**2)])
    radius = float(radii.mean())
    angle = min(reach, 0.25 * np.pi)
    walked = radii * np.arcsin(np.minimum(1.0, radius * np.sin(angle) / radii))
    return radius, float(np.abs(walked - radius * angle).max() / (radius * angle)) if angle > 0.0 else 0.0


@cache
def layer_plane(crs: str, bounds: Bounds) -> LayerPlane:
    """Return the two planes that a layer of these bounds could lie on, with their worst distance errors.

    Raises
    ------
    LayerError
        where no part of the bounds lies in the CRS's world.
    """
    source = source_crs(crs)
    lonlat = sample_bounds(source, bounds)
    xyz = kernels.geocentric(lonlat, source.a, source.e2)
    runs = np.array([0, len(lonlat)])
    centre = kernels.centres(xyz, runs, np.array([0, 1]), np.array([False]), source.e2)
    _, distortion = kernels.azimuthal(xyz, runs, centre, source.a, source.e2)
    return LayerPlane((centre[0, 0], centre[0, 1]), float(distortion[0]), fit_conic(source, lonlat))


def sample_bounds(source: SourceCrs, bounds: Bounds) -> Floats:
    """Return longitudes and latitudes (radians) of a grid of points over the bounds, edges included."""
    x, y = np.meshgrid(np.linspace(*bounds[::2], 33), np.linspace(*bounds[1::2], 33))
    lonlat = source.lonlat(np.column_stack([x.ravel(), y.ravel()]))
    lonlat = lonlat[source.in_world(lonlat)]
    if not len(lonlat):
        raise LayerError(f"bounds {bounds} lie outside the world of {source.name}; is the CRS wrong?")
    return lonlat


def _lay_on_layer(projector: Projector, source: SourceCrs, lonlat: Floats, xyz: Floats, runs: Ints) -> _Laid:
    assert projector.bounds is not None  # checked when the projector was made
    plane = layer_plane(projector.crs, projector.bounds)
    if plane.conic is None or plane.azimuthal_distortion <= plane.conic.distortion:
        centres = np.tile(np.array(plane.centre), (len(runs) - 1, 1))
        return _Laid.on(*kernels.azimuthal(xyz, runs, centres, source.a, source.e2), LAYER_AZIMUTHAL)
    away = lonlat - np.array([plane.conic.lon0, 0.0])
    away[:, 0] -= 2.0 * np.pi * np.round(away[:, 0] / (2.0 * np.pi))
    west, south, east, north = kernels.boxes(away, runs).T
    distortion = conic_distortion(source, plane.conic, south, north, 0.5 * (east - west))
    distortion[np.maximum(-west, east) >= 0.5 * np.pi] = np.inf
    return _Laid.on(on_conic(source, plane.conic, lonlat), distortion, LAYER_CONIC)


@dataclass(frozen=True, slots=True)
class LayerDistortion:
    """Worst relative errors over a layer's bounds; NaN where the question has no meaning.

    On the equidistant planes the worst area error equals the worst distance error: one of the two
    principal scales is 1 everywhere.
    """

    crs_distance: float
    crs_area: float
    azimuthal: float
    conic: float


def layer_distortion(crs: str, bounds: Bounds) -> LayerDistortion:
    """Return how far distances are off over the bounds: in a projected CRS itself, and on layer planes.

    Raises
    ------
    LayerError
        where no part of the bounds lies in the CRS's world.
    """
    source = source_crs(crs)
    if source.kind == "as-given":
        return LayerDistortion(np.nan, np.nan, np.nan, np.nan)
    own = (np.nan, np.nan)
    if source.kind == "projected":
        own = scale_factors(source, sample_bounds(source, bounds))
    plane = layer_plane(crs, bounds)
    return LayerDistortion(*own, plane.azimuthal_distortion, plane.conic_distortion)
