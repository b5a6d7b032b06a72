"""The Python API: frames in and out, the batch's own figures, public names in step."""

import doctest

import geopandas as gpd
import numpy as np
import pytest
import shapely
from batches import UTM, run_rivers, wiggle

import geofractal
from geofractal import api
from geofractal.errors import ConfigError

PLANE = 'ENGCRS["plane",EDATUM["plane"],CS[Cartesian,2],AXIS["x",east],AXIS["y",north],LENGTHUNIT["metre",1]]'


def test_rows_keep_order_and_index_and_say_why_they_have_no_figure():
    series = gpd.GeoSeries([wiggle(1), None, shapely.Point(5e5, 6e6)], index=["a", "b", "c"], crs=UTM)
    found = geofractal.divider_dimension(series, lengths_at_m=[100])
    assert found.index.tolist() == ["a", "b", "c"]
    assert found["divider_dim"].notna().tolist() == [True, False, False]
    assert found["divider_note"]["b"] == "missing geometry"
    assert "points" in found["divider_note"]["c"]
    assert {"divider_r2", "divider_ruler_min_m", "divider_ruler_max_m", "divider_rungs"} <= {*found.columns}
    assert found["length_at_100m_ruler_km"]["a"] > 0


def test_frames_and_plain_sequences_give_the_same(tmp_path):
    lines = [wiggle(1), wiggle(2)]
    frame = gpd.GeoDataFrame(geometry=lines, crs=UTM)
    from_frame = geofractal.divider_dimension(frame)
    from_list = geofractal.divider_dimension(lines, crs=UTM)
    assert from_frame.equals(from_list)
    _, copy = run_rivers(tmp_path, lines)
    np.testing.assert_array_equal(copy["divider_dim"], from_list["divider_dim"])


def test_no_geometries_give_no_rows_but_all_columns():
    empty = geofractal.divider_dimension([], crs=UTM)
    assert len(empty) == 0
    assert empty.columns.tolist() == geofractal.divider_dimension([wiggle()], crs=UTM).columns.tolist()


def test_a_crs_is_needed_and_must_not_contradict():
    with pytest.raises(ConfigError, match="no CRS; state it"):
        geofractal.divider_dimension([wiggle()])
    with pytest.raises(ConfigError, match="leave crs out or use to_crs"):
        geofractal.divider_dimension(gpd.GeoSeries([wiggle()], crs=UTM), crs=4326)


def test_a_wrong_option_is_told():
    with pytest.raises(ConfigError, match="rungs"):
        geofractal.divider_dimension([wiggle()], crs=UTM, rungs=1)


@pytest.mark.parametrize("angle", [0.0, 0.3, 1.1])
def test_straight_lines_have_dimension_one(angle):
    """A straight line: L(r) does not depend on r, so D = 1."""
    along = np.linspace(0, 1000, 801)
    line = shapely.LineString(np.column_stack([along * np.cos(angle), along * np.sin(angle)]))
    found = geofractal.divider_dimension([line], crs=PLANE).iloc[0]
    assert found["divider_dim"] == pytest.approx(1, abs=1e-9)


def test_semicircles_have_the_sinuosity_of_their_arc():
    """Arc over diameter: pi / 2."""
    turn = np.linspace(0, np.pi, 20_001)
    line = shapely.LineString(np.column_stack([np.cos(turn), np.sin(turn)]) * 1000)
    found = geofractal.sinuosity([line], crs=PLANE, ruler_m=5)
    assert found["sinuosity"][0] == pytest.approx(np.pi / 2, rel=1e-4)


def test_the_ladder_is_the_table_behind_the_dimension():
    lines = gpd.GeoSeries([wiggle(1), None, wiggle(2)], index=["a", "b", "c"], crs=UTM)
    ladder = geofractal.divider_ladder(lines)
    assert ladder.index.unique().tolist() == ["a", "c"]
    assert (ladder.groupby(level=0)["ruler_m"].diff().dropna() > 0).all()
    mean = ladder.groupby(level=0)["local_dim"].mean()
    found = geofractal.divider_dimension(lines)["divider_dim"]
    np.testing.assert_allclose(mean["a"], found["a"], atol=0.15)


def test_public_names_are_in_step():
    assert sorted(geofractal.__all__) == sorted(geofractal._HOMES)
    for name in geofractal.__all__:
        assert callable(getattr(geofractal, name))
    with pytest.raises(AttributeError, match="nothing_like_it"):
        _ = geofractal.nothing_like_it


def test_docstring_examples_hold():
    assert doctest.testmod(api).failed == 0
