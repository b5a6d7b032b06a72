"""Fragmentation of polygons: the same figures as from the raster of the same map."""

import geopandas
import numpy as np
import pandas as pd
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from test_fragmentation import ACROSS, CUT, PLANE, cells, figure, measured

from geofractal.cover_api import fragmentation
from geofractal.errors import LayerError

NEED_CELLS = {"edge_density_at_2000m_cells", "lacunarity_at_2000m_boxes", "lacunarity_boxes_at_2000m_boxes"}
NEED_CELLS |= {"box_dim", "edge_box_dim"}
KEYS = ["reporting_unit", "cover", "quantity", "border_rule"]


def as_polygons(codes, *, joined=False):
    """Return the cells of a map as polygons, each with its class; or each class as one multipolygon."""
    rows = [(str(code), cells(c, r, c + 1, r + 1)) for (r, c), code in np.ndenumerate(codes) if code]
    frame = geopandas.GeoDataFrame(
        {"cover": [name for name, _ in rows]}, geometry=[g for _, g in rows], crs=PLANE
    )
    return frame.dissolve("cover").reset_index() if joined else frame


def line(*places):
    """Return a line through places in columns and rows of the map."""
    return shapely.LineString([(1000 * c, -1000 * r) for c, r in places])


def both(codes, *, extent=None, joined=False, own=None, **asked):
    """Return the tables of the raster and of the polygons of one map, by what each row is about."""
    raster = measured(codes, **{**asked, **(own or {})})
    polygons = fragmentation(as_polygons(codes, joined=joined), cover="cover", extent=extent, **asked)
    assert not raster.duplicated(KEYS).any()
    assert not polygons.duplicated(KEYS).any()
    return raster.set_index(KEYS), polygons.set_index(KEYS)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([4, 8]), st.sampled_from([0.0, 2e6]), st.booleans())
def test_raster_and_polygons_agree_on_the_same_map(seed, neighbours, smallest, joined):
    """All figures that both have: zones that overlap and cut patches, holes in the map, groups."""
    rng = np.random.default_rng(seed)
    codes = rng.integers(0, 4, rng.integers(3, 9, 2))
    codes[0, :2] = 1, 2  # classes that the group names
    rows, columns = codes.shape
    asked = {
        "zones": [cells(0, 0, 2, rows), cells(1, 1, columns, rows), cells(1, 0, columns + 2, 2)],
        "neighbours": neighbours,
        "smallest_patch_m2": smallest,
        "groups": {"both": ["1", "2"]},
        "distances": True,
        "dispersal_m": 900.0,
        "most_patches": int(rng.integers(2, 9)),
    }
    covered = shapely.union_all(as_polygons(codes).geometry.to_numpy())
    raster, polygons = both(codes, extent=covered, joined=joined, **asked)
    # what of a zone has no data is told by either; the map without an end known has none of it
    raster = raster.drop(("whole map", "all covers", "area_not_covered", ""))
    polygons = polygons.drop(("whole map", "all covers", "area_not_covered", ""))
    assert set(raster.index) == set(polygons.index)
    columns = ["estimate", "low", "high", "unit"]
    pd.testing.assert_frame_equal(raster[columns], polygons.loc[raster.index, columns], rtol=1e-8, atol=1e-9)
    assert (raster["note"].isna() == polygons.loc[raster.index, "note"].isna()).all()


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([4, 8]))
def test_raster_and_polygons_agree_on_barriers(seed, neighbours):
    """A ring a hair within sides of cells cuts the links that one along them parts; ties are left aside."""
    rng = np.random.default_rng(seed)
    codes = rng.integers(1, 3, (6, 7))
    across = line((-1, 3), (8, 3))

    def spur(hair):
        return line((3, 5 + hair), (3, 7))

    def ring(hair):
        low, high = 1 + hair, 4 - hair
        return line((low + 1, low), (high + 1, low), (high + 1, high), (low + 1, high), (low + 1, low))

    number = rng.integers(3)
    exact, off = (
        [[ring(hair), spur(hair)], [across, spur(hair)], [ring(hair), across]][number] for hair in (0, 0.01)
    )
    asked = {"barriers": exact, "neighbours": neighbours, "distances": True, "dispersal_m": 900.0}
    asked |= {"zones": [cells(0, 0, 4, 6), cells(4, 0, 7, 6)]}
    raster, polygons = both(codes, own={"barriers": off}, extent=cells(0, 0, 7, 6), **asked)
    assert set(raster.index) == set(polygons.index)
    columns = ["estimate", "low", "high", "unit"]
    pd.testing.assert_frame_equal(raster[columns], polygons.loc[raster.index, columns], rtol=1e-8, atol=1e-9)


@pytest.mark.parametrize("seed", range(4))
def test_raster_and_polygons_agree_on_a_barrier_with_a_width(seed):
    """A road as wide as a cell, along the middle of a row."""
    codes = np.random.default_rng(seed).integers(1, 3, (5, 6))
    asked = {"barriers": [line((-2, 2.5), (8, 2.5))], "barrier_width_m": 1000.0, "distances": True}
    asked |= {"groups": {"both": ["1", "2"]}, "zones": [cells(0, 0, 4, 5)], "extent": cells(0, 0, 6, 5)}
    raster, polygons = both(codes, **asked)
    assert set(raster.index) == set(polygons.index)
    estimates = raster["estimate"], polygons.loc[raster.index, "estimate"]
    pd.testing.assert_series_equal(*estimates, rtol=1e-8, atol=1e-9)


def test_patches_that_reach_the_extent_make_a_lower_bound():
    codes = np.array([[1, 2, 2], [2, 2, 2], [2, 2, 2]])
    found = fragmentation(as_polygons(codes), cover="cover", extent=cells(0, 0, 3, 3))
    note = figure(found, "effective_mesh_size", rule=ACROSS, column="note")
    assert note == "lower bound: 1 of its patches reach the edge of the data"
    assert pd.isna(figure(found, "effective_mesh_size", rule=CUT, column="note"))


def test_zones_off_the_layer_and_invalid_ones():
    bow = shapely.Polygon([(0, 0), (2000, -2000), (2000, 0), (0, -2000)])
    found = fragmentation(as_polygons(np.ones((2, 2))), zones=[bow, cells(9, 9, 11, 11), cells(-1, 0, 1, 2)])
    assert figure(found, "area", "all covers", 1, column="note") == "invalid: Self-intersection"
    assert figure(found, "area", "all covers", 2, column="note") == "off the map"
    assert figure(found, "area_not_covered", "all covers", 3) == pytest.approx(2)
    assert figure(found, "area", "all", 3) == pytest.approx(2)


def test_areas_are_those_of_the_ellipsoid():
    """The degree cell north of the equator has 12308.464 km2 between parallels (WGS 84)."""
    found = fragmentation(geopandas.GeoSeries([shapely.box(0, 0, 1, 1)], crs=4326))
    assert figure(found, "area", "all") == pytest.approx(12308.464, abs=1e-3)


def test_polygons_without_a_crs():
    with pytest.raises(LayerError, match="The polygons carry no CRS; give it with set_crs"):
        fragmentation(geopandas.GeoSeries([shapely.box(0, 0, 1, 1)]))
