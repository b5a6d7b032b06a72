"""Coordinate reference systems: kinds, units, ellipsoids and the marks of a wrong one."""

from __future__ import annotations

import numpy as np
import pyproj
import pytest

from geofractal.errors import LayerError
from geofractal.reader.crs import crs_doubt, parse_crs, scale_factors, source_crs

DEGREE, GRAD, SURVEY_FOOT = np.pi / 180, np.pi / 200, 12 / 39.37
ROTATED = "+proj=ob_tran +o_proj=longlat +o_lat_p=39 +o_lon_p=0 +lon_0=18 +R=6371000 +type=crs"
SHIFTED = "+proj=utm +zone=33 +ellps=bessel +towgs84=600,70,400 +type=crs"
UNITLESS = (
    'ENGCRS["plan",EDATUM["d"],CS[Cartesian,2],AXIS["x",unspecified,LENGTHUNIT["unknown",0]],'
    'AXIS["y",unspecified,LENGTHUNIT["unknown",0]]]'
)


@pytest.mark.parametrize(
    ("text", "kind", "unit"),
    [
        ("EPSG:4326", "geographic", DEGREE),
        ("EPSG:4979", "geographic", DEGREE),
        ("EPSG:4807", "geographic", GRAD),
        ("EPSG:3035", "projected", 1),
        ("EPSG:2264", "projected", SURVEY_FOOT),
        ("EPSG:7405", "projected", 1),
        (SHIFTED, "projected", 1),
        (ROTATED, "projected", 6371000 * DEGREE),
        ('LOCAL_CS["site grid",UNIT["metre",1]]', "as-given", 1),
        ('LOCAL_CS["site grid",UNIT["foot",0.3048]]', "as-given", 0.3048),
    ],
)
def test_kind_and_unit(text, kind, unit):
    source = source_crs(text)
    assert source.kind == kind
    assert source.unit == pytest.approx(unit, rel=1e-12)


def test_a_compound_crs_gives_its_horizontal_part_and_a_bound_one_its_source():
    assert pyproj.CRS.from_wkt(source_crs("EPSG:7405").wkt).to_epsg() == 27700
    assert not pyproj.CRS.from_wkt(source_crs(SHIFTED).wkt).is_bound


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("EPSG:5714", "is a Vertical CRS; layers need"),
        ("EPSG:4978", "is a Geocentric CRS; layers need"),
        ("no such thing", "'no such thing' is not understood"),
        (UNITLESS, "'plan' states no unit"),
    ],
)
def test_what_cannot_carry_a_layer_is_refused(text, message):
    with pytest.raises(LayerError, match=message):
        source_crs(text)


def test_longitude_and_latitude_on_the_own_ellipsoid_without_a_datum_shift():
    """Caister water tower on the Airy ellipsoid, the mapping agency's worked example (from memory)."""
    lonlat = source_crs("EPSG:27700").lonlat(np.array([[651409.903, 313177.270]]))
    east, north = 1 + 43 / 60 + 4.5177 / 3600, 52 + 39 / 60 + 27.2531 / 3600
    assert np.degrees(lonlat[0]) == pytest.approx([east, north], abs=0.0001 / 3600)


def test_grads_of_a_projected_base_come_out_as_radians():
    """The false origin of this grid, 600 km and 2,200 km, lies on the Paris meridian at 52 grads."""
    lonlat = source_crs("EPSG:27572").lonlat(np.array([[600000.0, 2200000.0]]))
    assert lonlat[0] == pytest.approx([0, 52 * GRAD], abs=1e-12)


def test_a_rotated_pole_is_undone_to_its_own_base():
    """The rotated origin lies at the new pole's colatitude on the meridian given: 18 E, 90 - 39 N."""
    lonlat = source_crs(ROTATED).lonlat(np.array([[0.0, 0.0]]))
    assert np.degrees(lonlat[0]) == pytest.approx([18, 51])


def test_points_beyond_the_poles_and_far_round_are_out_of_the_world():
    points = np.radians([[0, 90], [0, 90.1], [539, 0], [541, 0], [np.inf, 0], [0, np.inf]])
    assert source_crs("EPSG:4326").in_world(points).tolist() == [True, False, True, False, False, False]


def test_a_projected_point_off_the_map_does_not_come_back():
    """A web map ends at 20,037,508 m (half the equator); beyond it longitudes wrap."""
    source = source_crs("EPSG:3857")
    xy = np.array([[2.0e7, 0], [2.1e7, 0]])
    assert source.comes_back(xy, source.lonlat(xy), np.array([1e3, 1e3])).tolist() == [True, False]


def test_scale_of_a_central_meridian():
    """UTM's scale there is 0.9996 by definition, its area 0.9996^2."""
    lonlat = np.radians([[9.0, 45.0]])
    distance, area = scale_factors(source_crs("EPSG:32632"), lonlat)
    assert distance == pytest.approx(1 - 0.9996, rel=1e-6)
    assert area == pytest.approx(1 - 0.9996**2, rel=1e-6)


@pytest.mark.parametrize(
    ("text", "bounds", "words"),
    [
        ("EPSG:32632", (7.5, 45.0, 8.5, 46.0), "look like degrees"),
        ("EPSG:4326", (4.3e6, 3.2e6, 4.4e6, 3.3e6), "outside the world"),
        ("EPSG:32632", (6.0e7, 1.0e7, 6.1e7, 1.1e7), "outside the world"),
        ("EPSG:3035", (6.0e6, 8.0e6, 6.1e6, 8.1e6), "outside the area of use"),
        ("EPSG:4258", (50.0, -5.0, 52.0, -3.0), "outside the area of use"),
    ],
)
def test_a_wrong_crs_is_doubted(text, bounds, words):
    assert words in crs_doubt(text, bounds)


@pytest.mark.parametrize(
    ("text", "bounds"),
    [
        ("EPSG:32632", (4e5, 5e6, 6e5, 6e6)),
        ("EPSG:4326", (170.0, -20.0, 190.0, -10.0)),
        ("EPSG:3832", (-2e6, -2e6, 6e6, 2e6)),
        ('LOCAL_CS["site grid",UNIT["metre",1]]', (0.0, 0.0, 10.0, 10.0)),
        (SHIFTED, (4e5, 5e6, 6e5, 6e6)),
    ],
)
def test_a_fitting_crs_is_not_doubted(text, bounds):
    assert crs_doubt(text, bounds) is None


def test_parsing_accepts_codes_and_wkt_alike():
    assert parse_crs(pyproj.CRS("EPSG:3035").to_wkt()) == parse_crs("EPSG:3035")
