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
from geofractal.errors import ConfigError, LayerError

SHARED = ("area", "share", "patches", "patch_density", "mean_patch", "median_patch", "weighted_mean_patch")
SHARED += ("largest_patch", "coherence", "division", "splitting", "effective_mesh_size")


def as_polygons(codes):
    """Return the cells of a map as polygons, each with its class."""
    rows = [(str(code), cells(c, r, c + 1, r + 1)) for (r, c), code in np.ndenumerate(codes) if code]
    return geopandas.GeoDataFrame(
        {"cover": [name for name, _ in rows]}, geometry=[g for _, g in rows], crs=PLANE
    )


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([4, 8]), st.sampled_from([0.0, 2e6]))
def test_raster_and_polygons_agree_on_the_same_map(seed, neighbours, smallest):
    rng = np.random.default_rng(seed)
    codes = rng.integers(0, 4, (6, 7))
    asked = {
        "zones": [cells(0, 0, 4, 4), cells(2, 1, 7, 6)],
        "neighbours": neighbours,
        "smallest_patch_m2": smallest,
        "groups": {"both": ["1", "2"]},
        "covers": ["1", "both"],
    }
    raster = measured(codes, **asked)
    # where data ends is the map's edge to cells; polygons are told by the extent
    covered = shapely.union_all(as_polygons(codes).geometry.to_numpy())
    polygons = fragmentation(as_polygons(codes), cover="cover", extent=covered, **asked)
    keys = ["reporting_unit", "cover", "quantity", "border_rule"]
    both = [one[one["quantity"].isin(SHARED)].set_index(keys)[["estimate"]] for one in (raster, polygons)]
    pd.testing.assert_frame_equal(*both, rtol=1e-9)


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


def test_barriers_are_for_cells():
    with pytest.raises(ConfigError, match="Barriers cut links between cells; give the classes as a raster"):
        fragmentation(as_polygons(np.ones((2, 2))), barriers=[])


def test_polygons_without_a_crs():
    with pytest.raises(LayerError, match="The polygons carry no CRS; give it with set_crs"):
        fragmentation(geopandas.GeoSeries([shapely.box(0, 0, 1, 1)]))
