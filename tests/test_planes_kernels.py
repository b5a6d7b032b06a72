"""The projector's kernels: published worked examples, and compiled code against its interpreted twin."""

from __future__ import annotations

import numpy as np
import pyproj
import pytest

from geofractal.kernels import planes as kernels

CLARKE_1866 = (6378206.4, 6356583.8)
INTERNATIONAL = (6378388.0, 6378388.0 * (1 - 1 / 297))
WGS84 = (6378137.0, 6378137.0 * (1 - 1 / 298.257223563))
SPHERE = (1.0, 1.0)


def e2_of(axes):
    return 1 - (axes[1] / axes[0]) ** 2


def azimuthal(points, centre, axes):
    xyz = kernels.geocentric(np.radians(np.atleast_2d(points)), axes[0], e2_of(axes))
    runs = np.array([0, len(xyz)])
    return kernels.azimuthal(xyz, runs, np.radians([centre]), axes[0], e2_of(axes))


@pytest.mark.parametrize(
    ("radius", "centre", "point", "expected"),
    [
        (3.0, (-100, 40), (100, -20), (-5.8311398, 5.5444634)),
        (1.0, (0, 0), (40, 30), (0.62896, 0.56493)),
    ],
)
def test_azimuthal_on_the_sphere(radius, centre, point, expected):
    """Snyder 1987, worked example of the azimuthal equidistant and table 30, as PROJ's tests quote them."""
    xy, _ = azimuthal(point, centre, (radius, radius))
    assert xy[0] == pytest.approx(expected, abs=6e-6)


def test_azimuthal_on_yap():
    """IOGP 373-7-2, p. 85, modified azimuthal equidistant less its false origin, as PROJ's tests quote."""
    centre, point = (138.1687444500492, 9.546708325068591), (138.19303001104092, 9.596525859439623)
    xy, _ = azimuthal(point, centre, CLARKE_1866)
    assert xy[0] == pytest.approx((2665.90, 5509.82), abs=0.01)


def test_azimuthal_on_guam():
    """IOGP 373-7-2, p. 85, Guam projection; false origin of 50 km taken off, as PROJ's tests quote.

    That projection keeps the plane only to terms of x^2; the next is y x^2 / (3 radius^2).
    """
    centre, point = (144.74875069444445, 13.47246633333333), (144.63533129166666, 13.33903846111111)
    x, y = -12287.52, -14758.00
    xy, _ = azimuthal(point, centre, CLARKE_1866)
    third_order = abs(y) * x**2 / (3 * CLARKE_1866[1] ** 2)
    assert xy[0] == pytest.approx((x, y), abs=third_order + 0.01)


@pytest.mark.parametrize(("latitude", "expected"), [(85, 558485.4), (80, 1116885.2), (70, 2233100.9)])
def test_azimuthal_at_the_pole(latitude, expected):
    """Snyder 1987, table 31 (International ellipsoid): distance from the pole.

    The chord is turned into an arc with the pole's own curvature radius, so the distance is off by
    less than a tenth of e2 c^2; the kernel's stated local error is three times that.
    """
    xy, _ = azimuthal((30, latitude), (0, 90), INTERNATIONAL)
    allowed = kernels.ARITHMETIC / 3 * e2_of(INTERNATIONAL) * np.radians(90 - latitude) ** 2 + 1e-7
    assert np.hypot(*xy[0]) == pytest.approx(expected, rel=allowed)


@pytest.mark.parametrize(
    ("distance", "sphere", "ellipsoid"),
    [
        (100e3, 4.106e-5, 4.097e-5),
        (250e3, 2.567e-4, 2.561e-4),
        (500e3, 1.0273e-3, 1.0247e-3),
        (1000e3, 4.118e-3, 4.107e-3),
        (2000e3, 1.662e-2, 1.656e-2),
    ],
)
def test_azimuthal_distortion(distance, sphere, ellipsoid):
    """c / sin c - 1 on the sphere; s12 / m12 - 1 on the ellipsoid at 45 N in azimuth 60 (computed)."""
    ground = pyproj.Geod(ellps="WGS84")
    lon, lat, _ = ground.fwd(0, 45, 60, distance)
    _, worst = azimuthal((lon, lat), (0, 45), WGS84)
    assert worst[0] >= ellipsoid * (1 - 5e-4)
    assert worst[0] == pytest.approx(ellipsoid, rel=0.02)
    radius = 6371007.181
    _, worst = azimuthal((np.degrees(distance / radius), 0), (0, 0), (radius, radius))
    assert worst[0] == pytest.approx(sphere, rel=5e-4)


def test_azimuthal_arithmetic_stays_within_its_stated_error():
    """Local lengths against PROJ's exact azimuthal equidistant, up to 5,000 km, at all latitudes."""
    ground = pyproj.Geod(ellps="WGS84")
    rng = np.random.default_rng(1)
    for distance in (100e3, 1000e3, 5000e3):
        for latitude in (0.0, 20.0, 45.0, 70.0, 89.0):
            n = 50
            lon, lat, _ = ground.fwd(
                np.full(n, 5.0), np.full(n, latitude), rng.uniform(0, 360, n), np.full(n, distance)
            )
            lon2, lat2, _ = ground.fwd(lon, lat, rng.uniform(0, 360, n), np.full(n, distance / 1000))
            points = np.vstack([np.column_stack([lon, lat]), np.column_stack([lon2, lat2])])
            ours, _ = azimuthal(points, (5, latitude), WGS84)
            exact = np.column_stack(pyproj.Proj(f"+proj=aeqd +lat_0={latitude} +lon_0=5")(*points.T))
            ratio = np.hypot(*(ours[n:] - ours[:n]).T) / np.hypot(*(exact[n:] - exact[:n]).T)
            allowed = kernels.ARITHMETIC * e2_of(WGS84) * (distance / WGS84[1]) ** 2
            assert np.abs(ratio - 1).max() < allowed


def test_geocentric_agrees_with_proj():
    points = np.random.default_rng(2).uniform([-180, -90], [180, 90], (50, 2))
    to_space = pyproj.Transformer.from_pipeline("+proj=cart +ellps=WGS84")
    expected = to_space.transform(*points.T, np.zeros(50), radians=False, errcheck=True)
    ours = kernels.geocentric(np.radians(points), WGS84[0], e2_of(WGS84))
    assert ours == pytest.approx(np.column_stack(expected), abs=1e-6)


def test_a_bend_is_the_sideways_offset_of_the_middle_over_the_chord():
    """A chord of 100 km with its middle 50 m aside of it: sagitta 5e-4, cut to 1e-4 each; below: no bend."""
    start, end = np.array([[6.4e6, -5e4, 0.0]]), np.array([[6.4e6, 5e4, 0.0]])
    aside, beneath = np.array([[6.4e6, 0.0, 50.0 - 1e-6]]), np.array([[6.39e6, 0.0, 0.0]])
    assert kernels.pieces_by_bend(start, aside, end).tolist() == [5]
    assert kernels.pieces_by_bend(start, beneath, end).tolist() == [1]


def test_an_edge_crosses_the_seam_the_short_way():
    turn = 2 * np.pi
    lonlat = np.radians([[179.0, 10], [-179.0, 12]])
    out, offsets, given = kernels.cut(
        lonlat, np.array([0, 2]), np.array([True, True]), np.array([4, 1]), turn
    )
    assert np.degrees(out[:, 0]) == pytest.approx([179, 179.5, 180, 180.5, -179])
    assert np.degrees(out[:, 1]) == pytest.approx([10, 10.5, 11, 11.5, 12])
    assert offsets.tolist() == [0, 5]
    assert given.tolist() == [True, False, False, False, True]


def test_meridians_need_no_cutting_but_for_length_and_parallels_turn_by_their_sine():
    """Along a meridian: 1 degree in pieces of 0.3. Along 30 N: 1 degree turns by sin(30) degrees."""
    lonlat = np.radians([[0.0, 60], [0, 61], [0, 30], [1, 30]])
    pieces = kernels.pieces_on_graticule(lonlat, np.array([0, 2, 4]), np.radians(0.3))
    assert pieces.tolist() == [4, 1, int(np.ceil(np.radians(0.5) / kernels.TURN)), 1]


RNG = np.random.default_rng(3)
LONLAT = np.radians(RNG.uniform([-180, -88], [180, 88], (12, 2)))
XYZ = kernels.geocentric(LONLAT, WGS84[0], e2_of(WGS84))
PARTS = np.array([0, 5, 7, 12])
GIVEN = np.ones(12, np.bool_)
PIECES = np.where(np.isin(np.arange(12), PARTS[1:] - 1), 1, RNG.integers(1, 5, 12))
CASES = {
    "pieces_on_graticule": (LONLAT, PARTS, 0.01),
    "pieces_by_length": (XYZ, PARTS, 2e4),
    "pieces_by_bend": (XYZ[:4], XYZ[4:8], XYZ[8:]),
    "cut": (LONLAT, PARTS, GIVEN, PIECES, 2 * np.pi),
    "cut_on_geodesics": (LONLAT, XYZ, PARTS, PIECES, WGS84[0], e2_of(WGS84)),
    "geocentric": (LONLAT, WGS84[0], e2_of(WGS84)),
    "centres": (XYZ, PARTS, np.array([0, 2, 3]), np.array([True, False, False]), e2_of(WGS84)),
    "boxes": (XYZ, PARTS),
    "outermost": (LONLAT, PARTS),
    "azimuthal": (XYZ, PARTS, np.radians([[0.0, 10], [90, -80], [10, 90]]), WGS84[0], e2_of(WGS84)),
    "conic": (LONLAT, 0.1, 6e6, 0.3, 1e5, np.array([6.4e6, -1.6e4, 20.0])),
}


@pytest.mark.parametrize("name", CASES)
def test_compiled_and_interpreted_kernels_agree(name):
    compiled = getattr(kernels, name)
    ours, twin = (found if isinstance(found, tuple) else (found,) for found in _both(compiled, CASES[name]))
    for one, other in zip(ours, twin, strict=True):
        assert one == pytest.approx(other, rel=1e-12, abs=1e-6 if one.dtype == float else 0)


def _both(compiled, given):
    return compiled(*given), compiled.py_func(*given)


def test_compiled_and_interpreted_rings_close_alike():
    closed = np.array([True, False, True])
    ours, twin = XYZ.copy(), XYZ.copy()
    kernels.close_rings(ours, PARTS, closed)
    kernels.close_rings.py_func(twin, PARTS, closed)
    assert np.array_equal(ours, twin)
    assert np.array_equal(ours[4], XYZ[0])
    assert np.array_equal(ours[6], XYZ[6])


def test_every_kernel_is_compared_with_its_twin():
    found = {name for name, value in vars(kernels).items() if hasattr(value, "py_func")}
    assert found == {*CASES, "close_rings"}
