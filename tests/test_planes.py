"""The projector: distances against geodesics, every outcome forced, seams, poles, edges and refusals."""

from __future__ import annotations

import pickle

import numpy as np
import pyproj
import pytest
from geographiclib.geodesic import Geodesic
from hypothesis import given
from hypothesis import strategies as st

from geofractal.errors import ConfigError, LayerError
from geofractal.kernels import planes as kernels
from geofractal.measure import PLANES
from geofractal.reader import conic
from geofractal.reader.crs import source_crs
from geofractal.reader.planes import OUTSIDE, Projector, layer_distortion, layer_plane

GROUND = pyproj.Geod(ellps="WGS84")
UTM = "EPSG:32632"


def ragged(*features, closed=False):
    """Arrays of features of one part each."""
    xy = np.vstack([np.asarray(feature, float) for feature in features])
    n = len(features)
    offsets = np.concatenate([[0], np.cumsum([len(feature) for feature in features])])
    return np.arange(10, 10 + n), xy, offsets, np.arange(n + 1), np.full(n, closed)


def only(projector, *features, closed=False):
    """The one chunk of features that none is refused of."""
    (chunk,), problems = projector.lines(*ragged(*features, closed=closed))
    assert problems == {}
    return chunk


def steps(chunk):
    return np.sqrt((np.diff(chunk.xy, axis=0) ** 2).sum(axis=1))


def lengths(chunk):
    within = steps(chunk)
    within[chunk.part_offsets[1:-1] - 1] = 0
    return np.add.reduceat(within, chunk.part_offsets[:-1])


def apart(chunk, i, j):
    """Ground distance that the chunk's points stand for: straight on a plane, an arc in three dimensions."""
    straight = np.sqrt(((chunk.xy[i] - chunk.xy[j]) ** 2).sum(axis=1))
    radius = chunk.radius[0]
    return straight if np.isinf(radius) else 2 * radius * np.arcsin(straight / (2 * radius))


def scattered(west, south, east, north, n=60):
    return np.random.default_rng(7).uniform([west, south], [east, north], (n, 2))


LONG_ALONG_PARALLELS = np.column_stack([
    np.linspace(-25, 25, 80), 50 + np.sin(np.linspace(0, 30, 80))
])  # fmt: skip
CONTINENT = scattered(-25, 5, 25, 55)


# --- outcomes ---------------------------------------------------------------------------------------


def plane_names(projector, *features):
    chunks, problems = projector.lines(*ragged(*features))
    return {
        row: PLANES[plane] for chunk in chunks for row, plane in zip(chunk.rows, chunk.plane, strict=True)
    }, problems


def test_each_outcome_of_feature_planes():
    small = [(10, 50), (10.2, 50.1)]
    names, problems = plane_names(Projector("EPSG:4326"), CONTINENT, small, LONG_ALONG_PARALLELS)
    assert names == {10: "three-dimensions", 11: "feature-azimuthal", 12: "feature-conic"}
    assert problems == {}


def test_without_three_dimensions_a_continent_is_refused_with_the_figure():
    names, problems = plane_names(Projector("EPSG:4326", three_dimensions=False), [(0, 0), (1, 1)], CONTINENT)
    assert names == {10: "feature-azimuthal"}
    assert list(problems) == [1]
    assert problems[1].startswith("distance error ")
    assert problems[1].endswith(
        "% exceeds the budget of 0.5 %; allow three-dimensions or raise budget-percent"
    )


def test_where_even_three_dimensions_break_the_budget_the_figure_is_given():
    _, problems = plane_names(Projector("EPSG:4326", budget=1e-7), CONTINENT)
    assert "exceeds the budget of 1e-05 %; raise budget-percent" in problems[0]


def test_the_budget_decides():
    names, _ = plane_names(Projector("EPSG:4326", budget=0.1), CONTINENT)
    assert names == {10: "feature-azimuthal"}


@pytest.mark.parametrize(
    ("bounds", "plane"), [((0, 40, 3, 50), "layer-azimuthal"), ((-25, 48, 25, 50), "layer-conic")]
)
def test_the_plane_of_a_layer_is_the_one_with_the_least_distortion(bounds, plane):
    projector = Projector("EPSG:4326", plane="layer", bounds=bounds)
    west, south, east, north = bounds
    chunk = only(projector, [(west, south), (west + 1, south + 1)], [(east - 1, north - 1), (east, north)])
    assert [PLANES[code] for code in chunk.plane] == [plane, plane]
    chosen = layer_plane("EPSG:4326", bounds)
    both = chosen.azimuthal_distortion, chosen.conic_distortion
    assert max(chunk.distortion) <= min(both) * (1 + 1e-6)
    between = GROUND.inv(west, south, east, north)[2]
    assert apart(chunk, [0], [len(chunk.xy) - 1])[0] == pytest.approx(between, rel=min(both))


def test_a_layer_too_wide_for_its_plane_goes_to_three_dimensions_or_is_refused():
    bounds, far = (-30, 10, 60, 70), [(59, 69), (60, 70)]
    names, _ = plane_names(Projector("EPSG:4326", plane="layer", bounds=bounds), far)
    assert names == {10: "three-dimensions"}
    refusing = Projector("EPSG:4326", plane="layer", bounds=bounds, three_dimensions=False)
    _, problems = plane_names(refusing, far)
    assert "allow three-dimensions" in problems[0]


def test_a_layer_plane_needs_bounds():
    with pytest.raises(ConfigError, match="needs the layer's bounds"):
        Projector("EPSG:4326", plane="layer")


def test_bounds_off_the_globe_are_refused():
    with pytest.raises(LayerError, match="lie outside the world of WGS 84"):
        layer_plane("EPSG:4326", (700.0, 0.0, 800.0, 10.0))


# --- distances against geodesics ----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("points", "budget", "plane"),
    [
        (scattered(5, 45, 6, 46), 0.005, "feature-azimuthal"),
        (scattered(-5, 40, 10, 55), 0.02, "feature-azimuthal"),
        (scattered(0, 80, 360, 90), 0.01, "feature-azimuthal"),
        (scattered(-20, -3, 20, 3), 0.005, "feature-conic"),
        (scattered(170, 60, 220, 62), 0.005, "feature-conic"),
        (scattered(-25, -50, 25, -48), 0.005, "feature-conic"),
        (scattered(-25, 5, 25, 55), 0.005, "three-dimensions"),
        (scattered(0, -89, 360, -55), 0.005, "three-dimensions"),
    ],
)
def test_straight_distances_keep_the_stated_distortion(points, budget, plane):
    """Independent: Karney's geodesics in geographiclib, between pairs of a scattered feature's vertices."""
    chunk = only(Projector("EPSG:4326", budget=budget), points)
    assert PLANES[chunk.plane[0]] == plane
    own = np.flatnonzero(chunk.source_vertex)
    i, j = np.triu_indices(len(points), 1)
    i, j = i[::9], j[::9]
    true = [
        Geodesic.WGS84.Inverse(points[a, 1], points[a, 0], points[b, 1], points[b, 0])["s12"]
        for a, b in zip(i, j, strict=True)
    ]
    error = apart(chunk, own[i], own[j]) / np.array(true) - 1
    assert np.abs(error).max() <= chunk.distortion[0]
    assert np.abs(error).max() >= chunk.distortion[0] / 25


def test_half_a_hemisphere_is_measured_in_three_dimensions_up_to_a_quarter_of_the_globe():
    """Pairs up to 10,000 km, the longest rulers that the stated distortion speaks for."""
    points = scattered(-20, -35, 120, 75)
    chunk = only(Projector("EPSG:4326"), points)
    assert PLANES[chunk.plane[0]] == "three-dimensions"
    own = np.flatnonzero(chunk.source_vertex)
    i, j = np.triu_indices(len(points), 1)
    true = GROUND.inv(*points[i].T, *points[j].T)[2]
    near = true < 1e7
    error = apart(chunk, own[i[near]], own[j[near]]) / true[near] - 1
    assert np.abs(error).max() <= chunk.distortion[0] < 0.002


@pytest.mark.parametrize(
    ("ring", "perimeter"),
    [
        ([(0, 89), (90, 89), (180, 89), (270, 89), (0, 89)], 631819.8745),
        ([(-1, 0), (0, -1), (1, 0), (0, 1), (-1, 0)], 627598.2731),
        ([(0, 0), (1, 0), (1, 1), (0, 1), (0, 0)], 443770.917248302),
    ],
)
def test_perimeters_of_geodesic_polygons(ring, perimeter):
    """Published perimeters of Karney's library tests: a polar cap, a diamond, a cell at the equator."""
    chunk = only(Projector("EPSG:4326", edges="geodesic"), ring, closed=True)
    assert 1 - 1e-8 <= lengths(chunk)[0] / perimeter <= 1 + chunk.distortion[0]


@pytest.mark.parametrize(
    ("latitude", "along", "up"),
    [(0, 111319.491, 110574.304), (45, 78846.835, 111131.778), (60, 55800.002, 111412.273)],
)
def test_lengths_of_one_degree(latitude, along, up):
    """Degrees of longitude (along the parallel) and of latitude, centred; tables of the trade, recomputed."""
    parallel, meridian = [(7, latitude), (8, latitude)], [(7, latitude - 0.5), (7, latitude + 0.5)]
    if latitude == 0:
        meridian = [(7, 0), (7, 1)]
    chunk = only(Projector("EPSG:4326"), parallel, meridian)
    assert lengths(chunk) == pytest.approx([along, up], rel=3e-5)


def test_a_known_line_of_the_geodesist():
    """Flinders Peak to Buninyong on GRS80: 54,972.271 m (from memory, recomputed elsewhere)."""
    peak = (144 + 25 / 60 + 29.52440 / 3600, -(37 + 57 / 60 + 3.72030 / 3600))
    hill = (143 + 55 / 60 + 35.38390 / 3600, -(37 + 39 / 60 + 10.15610 / 3600))
    chunk = only(Projector("EPSG:4283", edges="geodesic"), [peak, hill])
    assert lengths(chunk)[0] == pytest.approx(54972.271, abs=0.001)


def test_equidistant_conic_of_the_handbook():
    """Snyder 1987: parallels 29.5 and 45.5 N, origin 23 N 96 W, 35 N 75 W; Clarke 1866, unit sphere."""
    for axes, expected, last_digit in (
        ((6378206.4, 6356583.8), (1885051.9, 1540507.6), 0.1),
        ((1.0, 1.0), (0.2952057, 0.2424021), 1e-7),
    ):
        source = source_crs(f"+proj=longlat +a={axes[0]} +b={axes[1]} +type=crs")
        first, second, origin = np.radians([29.5, 45.5, 23.0])
        m1, m2 = conic._parallel(source, np.array([first, second]))
        along = conic._meridian(source, np.array([first, second, origin]))
        n = (m1 - m2) / (along[1] - along[0])
        plane = conic.Conic(np.radians(-96), m1 + n * (along[0] - along[2]), n, along[2], 0.0, 0.0)
        xy = conic.on_conic(source, plane, np.radians([[-75.0, 35.0]]))
        assert xy[0] == pytest.approx(expected, abs=last_digit / 2)
    assert n == pytest.approx(0.6067853, abs=5e-8)
    scale = conic.conic_distortion(source, plane, *np.radians([[35.0], [35.0], [0.0]]))
    assert 1 - scale[0] == pytest.approx(0.9914014, abs=5e-8)


def test_a_conic_without_a_cone_is_the_ellipsoidal_equidistant_cylinder():
    """IOGP 373-7-2, 3.2.5: WGS 84, 55 N 10 E."""
    source = source_crs("EPSG:4326")
    plane = conic.Conic(0.0, source.a, 0.0, 0.0, 0.0, 0.0)
    xy = conic.on_conic(source, plane, np.radians([[10.0, 55.0]]))
    assert xy[0] == pytest.approx((1113194.91, 6097230.31), abs=0.006)


def test_meridian_lengths():
    """Snyder 1987, table 31 (International ellipsoid): from the pole to 85, 80 and 70 N."""
    source = source_crs("+proj=longlat +ellps=intl +type=crs")
    pole, *along = conic._meridian(source, np.radians([90.0, 85, 80, 70]))
    assert pole - np.array(along) == pytest.approx([558485.4, 1116885.2, 2233100.9], abs=0.06)


def test_a_fitted_conic_has_no_more_distortion_than_any_with_standard_parallels():
    """Brute force over pairs of standard parallels, scales in Snyder's form."""
    source = source_crs("EPSG:4326")
    points = np.radians(scattered(-20, 50, 20, 52))
    fitted = conic.fit_conic(source, points)
    low, high = conic._reach(points[:, 1].min(), points[:, 1].max(), np.ptp(points[:, 0]) / 2)
    latitudes = np.linspace(low, high, 200)
    m, along = conic._parallel(source, latitudes), conic._meridian(source, latitudes)
    best = np.inf
    for i in range(199):
        for j in range(i + 1, 200):
            n = (m[i] - m[j]) / (along[j] - along[i])
            scale = (m[i] + n * (along[i] - along)) / m
            best = min(best, np.abs(scale - 1).max())
    reached = np.abs((fitted.c0 - fitted.n * (along - fitted.m0)) / m - 1).max()
    assert reached <= best
    assert reached == pytest.approx(best, rel=0.02)


# --- seams and poles ------------------------------------------------------------------------------------


@pytest.mark.parametrize("budget", [0.005, 1e-4])
@pytest.mark.parametrize(
    "longitudes", [(179, -179, -178.5, 178), (179, 181, 181.5, 178), (-181, -179, -178.5, -182)]
)
def test_a_shape_on_the_antimeridian_is_the_same_as_elsewhere(longitudes, budget):
    latitudes = (-17, -16.2, -18.4, -19)
    here = only(Projector("EPSG:4326", budget=budget), np.column_stack([longitudes, latitudes]))
    there = only(Projector("EPSG:4326", budget=budget), np.column_stack([(19, 21, 21.5, 18), latitudes]))
    assert here.plane == there.plane
    assert lengths(here) == pytest.approx(lengths(there), rel=1e-9)
    ends = [0, len(here.xy) - 1]
    assert apart(here, ends, ends[::-1]) == pytest.approx(apart(there, ends, ends[::-1]), rel=1e-9)


@given(st.floats(-360, 360), st.integers(0, 2**32 - 1))
def test_turning_the_globe_changes_no_length(turn, seed):
    line = np.random.default_rng(seed).uniform([-3, -80], [3, 80], 2) + np.random.default_rng(seed).normal(
        0, 0.5, (6, 2)
    )
    line[:, 1] = np.clip(line[:, 1], -89, 89)
    turned = (line[:, 0] + turn + 180) % 360 - 180
    here, there = (only(Projector("EPSG:4326"), xy) for xy in (line, np.column_stack([turned, line[:, 1]])))
    assert lengths(there) == pytest.approx(lengths(here), rel=1e-8)
    assert there.distortion == pytest.approx(here.distortion, rel=1e-6, abs=1e-12)


def test_a_conic_lies_across_the_antimeridian():
    here = only(Projector("EPSG:4326"), LONG_ALONG_PARALLELS + np.array([180.0, 0.0]))
    there = only(Projector("EPSG:4326"), LONG_ALONG_PARALLELS)
    assert [PLANES[chunk.plane[0]] for chunk in (here, there)] == ["feature-conic"] * 2
    assert here.xy == pytest.approx(there.xy, abs=1e-3)


@pytest.mark.parametrize("pole", [90, -90])
def test_a_ring_around_a_pole_is_a_circle(pole):
    """Its radius is the meridian's length of one degree at the pole, 111,694 m."""
    longitudes = np.linspace(-180, 180, 361)
    ring = np.column_stack([longitudes, np.full(361, pole * 89 / 90)])
    chunk = only(Projector("EPSG:4326"), ring, closed=True)
    true = Geodesic.WGS84.Inverse(pole, 0, pole * 89 / 90, 0)["s12"]
    assert np.hypot(*chunk.xy.T) == pytest.approx(true, abs=0.05)
    assert np.array_equal(chunk.xy[0], chunk.xy[-1])


def test_an_edge_through_the_pole_along_meridians_is_straight():
    chunk = only(Projector("EPSG:4326"), [(30, 89), (30, 90), (-150, 90), (-150, 89)])
    assert lengths(chunk)[0] == pytest.approx(2 * Geodesic.WGS84.Inverse(89, 0, 90, 0)["s12"], rel=1e-6)


# --- edges ----------------------------------------------------------------------------------------------


def sideways(points, ends):
    """Greatest distance of points from the straight line between two ends, over the line's length."""
    (x, y), chord = (points - ends[0]).T, ends[1] - ends[0]
    return np.abs(x * chord[1] - y * chord[0]).max() / (chord @ chord)


@pytest.mark.parametrize(
    ("crs", "edge"),
    [
        ("EPSG:4326", [(0, 50), (8, 50)]),
        ("EPSG:4326", [(0, 50), (5, 56)]),
        ("EPSG:4326", [(-3, -4), (4, 3)]),
        ("EPSG:4326", [(10, 85), (60, 86)]),
        ("EPSG:3857", [(0, 8e6), (6e5, 8.2e6)]),
        ("EPSG:3035", [(2.0e6, 4.5e6), (2.6e6, 4.5e6)]),
        (UTM, [(2e5, 5e6), (2e5, 5.5e6)]),
    ],
)
def test_pieces_hold_to_the_source_edge(crs, edge):
    """Points of the source's straight edge lie within 1e-4 of each piece's length (on PROJ's own plane)."""
    chunk = only(Projector(crs), edge)
    n = len(chunk.xy) - 1
    assert n > 1
    assert chunk.source_vertex.tolist() == [True] + [False] * (n - 1) + [True]
    shares = np.linspace(0, 1, 4 * n + 1)[:, None]
    source = source_crs(crs)
    lonlat = source.lonlat((1 - shares) * np.array(edge[0]) + shares * np.array(edge[1]))
    middle = np.degrees(lonlat[2 * n])
    plane = pyproj.Proj(
        f"+proj=aeqd +lat_0={middle[1]:.9f} +lon_0={middle[0]:.9f} +a={source.a} +b={source.b}"
    )
    true = np.column_stack(plane(*np.degrees(lonlat).T))
    assert np.hypot(*(true[4::4] - true[:-4:4]).T) == pytest.approx(steps(chunk), rel=1e-3)
    for piece in range(n):
        assert sideways(true[4 * piece : 4 * piece + 5], true[[4 * piece, 4 * piece + 4]]) <= 1.02e-4


def test_short_edges_cost_no_vertex():
    for crs, line in (("EPSG:4326", [(10, 50), (10.02, 50.01)]), (UTM, [(5e5, 5e6), (5.02e5, 5.001e6)])):
        assert only(Projector(crs), line).source_vertex.all()


def test_geodesic_edges_follow_geodesics():
    """The new vertex at a quarter of a 600 km edge leaves the geodesic by less than 1e-6 of its length."""
    ends = [(0.0, 50.0), (8.0, 52.0)]
    line = Geodesic.WGS84.InverseLine(50, 0, 52, 8)
    chunk = only(Projector("EPSG:4326", edges="geodesic"), ends)
    assert lengths(chunk)[0] == pytest.approx(line.s13, rel=chunk.distortion[0])
    source = source_crs("EPSG:4326")
    xyz = kernels.geocentric(np.radians(ends), source.a, source.e2)
    lonlat, _, _ = kernels.cut_on_geodesics(
        np.radians(ends), xyz, np.array([0, 2]), np.array([4, 1]), source.a, source.e2
    )
    lon, lat = np.degrees(lonlat[1])
    off = min(
        Geodesic.WGS84.Inverse(lat, lon, at["lat2"], at["lon2"])["s12"]
        for at in (line.Position(line.s13 / 4 + along) for along in np.arange(-150, 150, 0.2))
    )
    assert off <= 1e-6 * line.s13


def test_straight_and_geodesic_edges_differ():
    """One degree of arc along 60 N: the parallel is longer than the geodesic between its ends."""
    edge = [(0, 60), (10, 60)]
    straight, geodesic = (
        lengths(only(Projector("EPSG:4326", edges=kind), edge))[0] for kind in ("straight", "geodesic")
    )
    assert straight > geodesic * 1.0009
    assert geodesic == pytest.approx(Geodesic.WGS84.Inverse(60, 0, 60, 10)["s12"], rel=1e-4)


def test_edges_in_three_dimensions_do_not_cut_beneath_the_surface():
    chunk = only(Projector("EPSG:4326"), CONTINENT)
    assert (steps(chunk) / 6.3e6).max() ** 2 / 24 < 1e-5
    assert np.hypot(
        np.hypot(chunk.xy[:, 0], chunk.xy[:, 1]) / 6378137, chunk.xy[:, 2] / 6356752.314245
    ) == pytest.approx(1, abs=1e-9)


# --- what is kept -----------------------------------------------------------------------------------------


def test_rows_parts_and_rings_survive_a_mixed_batch():
    rows = np.array([5, 3, 9])
    xy = np.vstack([
        [(10, 50), (10.1, 50), (10.1, 50.1), (10, 50)],
        [(10.2, 50.2), (10.3, 50.3)],
        CONTINENT[:6],
        [(0, 95), (1, 96)],
    ])  # fmt: skip
    (flat, deep), problems = Projector("EPSG:4326").lines(
        rows, xy, np.array([0, 4, 6, 12, 14]), np.array([0, 2, 3, 4]), np.array([True, False, False, False])
    )
    assert problems == {2: OUTSIDE}
    assert (flat.rows.tolist(), deep.rows.tolist()) == ([5], [3])
    assert flat.feature_offsets.tolist() == [0, 2]
    assert flat.closed.tolist() == [True, False]
    for chunk in (flat, deep):
        assert chunk.part_offsets[-1] == len(chunk.xy) == len(chunk.source_vertex)
    assert deep.source_vertex.sum() == 6
    assert deep.xy.shape[1] == 3


@pytest.mark.parametrize(
    ("crs", "scale", "origin"), [("EPSG:4326", 1.0, (179.9, 60.0)), (UTM, 5e4, (5e5, 5e6))]
)
@pytest.mark.parametrize("budget", [0.005, 1e-6])
def test_rings_close_to_the_bit_and_equal_points_stay_equal(crs, scale, origin, budget):
    corner = np.array([(0, 0), (1, 0), (1, 1), (0, 0), (-1, 1), (0, 0)]) * scale + origin
    chunk = only(Projector(crs, budget=budget), corner, closed=True)
    assert chunk.xy.shape[1] == (3 if budget == 1e-6 else 2)
    places = chunk.xy[chunk.source_vertex]
    assert np.array_equal(places[0], places[-1])
    assert np.array_equal(places[0], places[3])


def test_neither_start_nor_direction_of_a_ring_moves_its_plane():
    ring = scattered(0, 50, 3, 52, 12)
    around = [*ring, ring[0]]
    shifted = [*ring[5:], *ring[:6]]
    found = [only(Projector("EPSG:4326"), walked, closed=True) for walked in (around, shifted, around[::-1])]
    assert lengths(found[1]) == pytest.approx(lengths(found[0]), rel=1e-13)
    assert lengths(found[2]) == pytest.approx(lengths(found[0]), rel=1e-13)
    assert found[1].distortion == pytest.approx(found[0].distortion, rel=1e-9)


def test_a_ring_given_with_both_names_of_the_antimeridian_closes_to_the_bit():
    chunk = only(Projector("EPSG:4326"), [(180, 60), (179, 60), (179, 61), (-180, 60)], closed=True)
    assert np.array_equal(chunk.xy[0], chunk.xy[-1])


def test_outside_the_world():
    _, problems = Projector("EPSG:4326").lines(
        *ragged([(0, 0), (1, 91)], [(0, 0), (1, 1)], [(600, 0), (601, 0)])
    )
    assert problems == {0: OUTSIDE, 2: OUTSIDE}
    (chunk,), problems = Projector(UTM).lines(*ragged([(5e5, 5e6), (5.1e5, 5e6)], [(5e7, 5e6), (5.1e7, 5e6)]))
    assert problems == {1: OUTSIDE}
    assert chunk.rows.tolist() == [10]


def test_nothing_in_nothing_out():
    nothing = (
        np.empty(0, np.int64),
        np.empty((0, 2)),
        np.zeros(1, np.int64),
        np.zeros(1, np.int64),
        np.empty(0, bool),
    )
    for crs in ("EPSG:4326", UTM, 'LOCAL_CS["site",UNIT["metre",1]]'):
        assert Projector(crs).lines(*nothing) == ((), {})


def test_a_local_plane_is_measured_as_given_in_metres():
    chunk = only(Projector('LOCAL_CS["site",UNIT["foot",0.3048]]'), [(0, 0), (300, 400)])
    assert PLANES[chunk.plane[0]] == "as-given"
    assert chunk.distortion[0] == 0
    assert lengths(chunk)[0] == pytest.approx(500 * 0.3048)


def test_survey_feet_come_out_in_metres():
    """10,000 US survey feet (12 / 39.37 m) on the state grid, over its scale where the line lies."""
    line = np.array([(1.5e6, 5e5), (1.51e6, 5e5)])
    ends = source_crs("EPSG:2264").lonlat(line)
    scale = pyproj.Proj("EPSG:2264").get_factors(*ends.mean(axis=0), radians=True).parallel_scale
    chunk = only(Projector("EPSG:2264"), line)
    assert lengths(chunk)[0] == pytest.approx(10_000 * 12 / 39.37 / scale, rel=1e-8)


def test_grads_come_out_in_metres():
    """A tenth of a grad of latitude and longitude on Clarke 1880 IGN; independent: geographiclib."""
    ellipsoid = Geodesic(6378249.2, 1 - 6356515.0 / 6378249.2)
    north, east = [(1, 52), (1, 52.1)], [(1, 52), (1.01, 52)]
    chunk = only(Projector("EPSG:4807"), north, east)
    expected = [
        ellipsoid.Inverse(46.8, 0.9, 46.89, 0.9)["s12"],
        ellipsoid.Inverse(46.8, 0.9, 46.8, 0.909)["s12"],
    ]
    assert lengths(chunk) == pytest.approx(expected, rel=1e-6)


def test_a_sphere_is_measured_as_a_sphere():
    chunk = only(Projector("+proj=longlat +R=1000000 +type=crs"), [(0, 0), (0, 1)], [(0, 60), (0.1, 60)])
    assert lengths(chunk) == pytest.approx([1e6 * np.radians(1), 0.5e6 * np.radians(0.1)], rel=1e-6)


def test_a_projector_travels_between_processes():
    projector = Projector("EPSG:4326", plane="layer", bounds=(0.0, 45.0, 6.0, 50.0), edges="geodesic")
    again = pickle.loads(pickle.dumps(projector))  # noqa: S301 - our own bytes
    line = [(1, 46), (2, 47)]
    assert again == projector
    assert np.array_equal(only(again, line).xy, only(projector, line).xy)


# --- what check asks ----------------------------------------------------------------------------------------


def test_distortion_of_a_projected_layer():
    """Mercator's scale is 1 / cos(latitude) on its sphere: at 60 N about 2, an area error of about 3."""
    x = 6378137 * np.radians(10)
    y = 6378137 * np.log(np.tan(np.pi / 4 + np.radians(60) / 2))
    found = layer_distortion("EPSG:3857", (0.0, 0.0, x, y))
    assert found.crs_distance == pytest.approx(1, rel=0.01)
    assert found.crs_area == pytest.approx(3, rel=0.01)
    assert 0 < found.azimuthal < 0.1


def test_distortion_of_layers_in_degrees_and_on_local_planes():
    degrees = layer_distortion("EPSG:4326", (0.0, 45.0, 6.0, 50.0))
    assert np.isnan([degrees.crs_distance, degrees.crs_area]).all()
    corner = GROUND.inv(3, 47.5, 6, 45)[2]
    assert degrees.azimuthal == pytest.approx((corner / 6.38e6) ** 2 / 6, rel=0.1)
    assert np.isinf(layer_distortion("EPSG:4326", (-180.0, -80.0, 180.0, 80.0)).conic)
    local = layer_distortion('LOCAL_CS["site",UNIT["metre",1]]', (0.0, 0.0, 1.0, 1.0))
    assert np.isnan([local.crs_distance, local.azimuthal, local.conic]).all()
