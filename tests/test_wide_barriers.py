"""Barriers with a width take the cells whose centre lies on them: by hand, by distances, by strips."""

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from class_maps import PLANE, plane_grid, strips
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import CRS, Geod, Transformer
from test_fragmentation import CHANGES, CUT, EVERYTHING, KM, cells, figure, measured

from geofractal.cover_api import fragmentation
from geofractal.cover_map import RasterCover
from geofractal.errors import ConfigError
from geofractal.kernels import barrier_cells
from geofractal.landcover.barriers import BARRIER, joined, place_barriers
from geofractal.landcover.grid import Grid
from geofractal.patches import open_class_map

UTM = CRS(25832)
WGS84 = CRS(4326)
TAKEN = 7


def taken(grid, lines, crs, width_m, rows=None, codes=None):
    """Return which cells barriers take."""
    codes = np.zeros((grid.rows, grid.columns)) if codes is None else codes
    barriers = place_barriers(grid, lines, crs, width_m)
    return (
        np.concatenate([one.codes for one in barriers.take(strips(codes, rows, grid=grid), TAKEN)]) == TAKEN
    )


def on_plane(shape, lines, width_m, cell=(1.0, 1.0), rows=None):
    return taken(plane_grid(np.zeros(shape), cell), lines, PLANE, width_m, rows)


class TestByHand:
    def test_a_level_line_takes_the_rows_within_half_its_width(self):
        """Centres at 0.5, 1.5, ... 4.5 down; the line at 2.4, so 0.9 away at most: rows 1 and 2."""
        found = on_plane((5, 4), [shapely.LineString([(-1, -2.4), (9, -2.4)])], 2 * 0.95)
        assert found.all(axis=1).tolist() == [False, True, True, False, False]
        assert found.sum() == 2 * 4

    def test_an_upright_line_narrower_than_a_cell_takes_the_column_whose_centres_it_meets(self):
        line = shapely.LineString([(2.6, 1), (2.6, -9)])
        assert on_plane((3, 5), [line], 0.3).all(axis=0).tolist() == [False, False, True, False, False]
        assert not on_plane((3, 5), [line], 0.1).any()

    def test_a_diagonal_takes_cells_by_their_distance_across_it(self):
        """Centres of cell (row, column) lie |row - column| / sqrt(2) from the diagonal."""
        row, column = np.indices((6, 6))
        away = np.abs(row - column) / np.sqrt(2)
        for width in (0.5, 1.5, 3.0):
            found = on_plane((6, 6), [shapely.LineString([(-3, 3), (9, -9)])], width)
            assert (found == (away <= width / 2)).all()

    def test_cells_that_are_not_square(self):
        """Cells of 3 by 1: a line across at 3.5 reaches two rows each way, a line down its own column."""
        across = on_plane((7, 3), [shapely.LineString([(-5, -3.5), (20, -3.5)])], 4.1, cell=(3.0, 1.0))
        assert across.all(axis=1).tolist() == [False, True, True, True, True, True, False]
        down = on_plane((7, 3), [shapely.LineString([(4.5, 5), (4.5, -20)])], 4.1, cell=(3.0, 1.0))
        assert down.all(axis=0).tolist() == [False, True, False]

    def test_a_centre_at_half_the_width_is_on_the_barrier(self):
        found = on_plane((4, 1), [shapely.LineString([(-1, -2), (2, -2)])], 1.0)
        assert found[:, 0].tolist() == [False, True, True, False]

    def test_an_end_is_round(self):
        found = on_plane((3, 5), [shapely.LineString([(-1, -1.5), (1.5, -1.5)])], 2.2)
        expected = [[1, 1, 0, 0, 0], [1, 1, 1, 0, 0], [1, 1, 0, 0, 0]]
        centre = np.hypot(*(np.indices((3, 5)) - np.array([1, 1])[:, None, None]))
        assert expected == ((centre <= 1.1) | (np.indices((3, 5))[1] < 1)).astype(int).tolist()
        assert found.astype(int).tolist() == expected

    def test_cells_without_data_stay_without(self):
        codes = np.array([[0, -1, 0]])
        line = shapely.LineString([(-1, -0.5), (4, -0.5)])
        assert taken(plane_grid(codes), [line], PLANE, 1, codes=codes).tolist() == [[True, False, True]]

    def test_each_line_has_its_own_width(self):
        lines = [shapely.LineString([(x, 1), (x, -9)]) for x in (1.5, 4.5, 7.5)]
        found = on_plane((3, 9), lines, [2.1, None, 0.2])
        assert np.flatnonzero(found.all(axis=0)).tolist() == [0, 1, 2, 7]


class TestAgainstDistances:
    @given(st.integers(0, 10**6), st.integers(1, 9), st.floats(0.05, 5))
    def test_random_lines_on_a_plane(self, seed, rows, width):
        """Every centre's distance from the lines, by shapely; on cells of any shape."""
        rng = np.random.default_rng(seed)
        cell = tuple(rng.uniform(0.3, 3, 2))
        lines = [shapely.LineString(rng.uniform(-2, 11, (3, 2)) * (cell[0], -cell[1])) for _ in range(2)]
        found = on_plane((9, 8), lines, [width, width / 3], cell, rows)
        row, column = np.indices((9, 8)) + 0.5
        centres = shapely.points(column * cell[0], -row * cell[1])
        away = [shapely.distance(line, centres) for line in lines]
        assert (found == ((away[0] <= width / 2) | (away[1] <= width / 6))).all()

    @pytest.mark.parametrize("turn", [0, 17, 45, 133])
    @pytest.mark.parametrize("rows", [1, 7, 60])
    def test_a_rotated_projected_grid(self, turn, rows):
        """Metres of the plane over the scale of the projection there (0.9996 beside its meridian)."""
        angle, cell = np.radians(turn), 20.0
        a, b = cell * np.cos(angle), cell * np.sin(angle)
        grid = Grid(60, 70, (a, b, 500_000, b, -a, 5_600_000), UTM)
        rng = np.random.default_rng(turn)
        placed = rng.uniform(0, 60, (4, 2))
        line = shapely.LineString(placed @ np.array([[a, b], [b, -a]]) + (500_000, 5_600_000))
        found = taken(grid, [line], UTM, 90.0, rows)
        row, column = np.indices((60, 70)) + 0.5
        centres = shapely.points(a * column + b * row + 500_000, b * column - a * row + 5_600_000)
        away = shapely.distance(line, centres) / 0.9996
        sure = np.abs(away - 45) > 0.05
        assert sure.mean() > 0.99
        assert (found == (away <= 45))[sure].all()

    @pytest.mark.parametrize("lat", [0.3, 60.0, -79.0])
    def test_a_geographic_grid(self, lat):
        """Cells of 0.01 degrees, distances along geodesics to a finely divided line."""
        grid = Grid(40, 50, (0.01, 0, 10, 0, -0.01, lat), WGS84)
        line = shapely.LineString([(10.05, lat - 0.31), (10.21, lat - 0.12), (10.44, lat - 0.27)])
        width = 2600.0
        found = taken(grid, [line], WGS84, width)
        fine = shapely.get_coordinates(shapely.segmentize(line, 1e-3))
        row, column = np.indices((40, 50)) + 0.5
        lon, north = 10 + 0.01 * column, lat - 0.01 * row
        geod = Geod(ellps="WGS84")
        away = np.array(
            [
                geod.inv(*(np.full(len(fine), one) for one in place), *fine.T)[2].min()
                for place in zip(lon.ravel(), north.ravel(), strict=True)
            ]
        ).reshape(lon.shape)
        sure = np.abs(away - width / 2) > 8
        assert sure.mean() > 0.9
        assert (found == (away <= width / 2))[sure].all()
        assert found.any()

    def test_lines_in_another_crs(self):
        grid = Grid(50, 60, (100, 0, 500_000, 0, -100, 5_600_000), UTM)
        line = shapely.LineString([(500_730, 5_596_160), (504_270, 5_599_480)])
        change = Transformer.from_crs(UTM, WGS84, always_xy=True).transform
        degrees = shapely.transform(shapely.segmentize(line, 50), lambda xy: np.stack(change(*xy.T), axis=1))
        there = taken(grid, [degrees], WGS84, 430.0)
        assert there.any()
        assert (there == taken(grid, [line], UTM, 430.0)).all()

    def test_a_line_past_a_full_turn_cuts_and_takes(self):
        """A grid of longitudes from 0 to 360 holds 10 W at column 350."""
        grid = Grid(3, 360, (1, 0, 0, 0, -1, 1), WGS84)
        line = shapely.LineString([(-10, 5), (-10, -5)])
        found = taken(grid, [line], WGS84, 120_000.0)
        assert np.flatnonzero(found.all(axis=0)).tolist() == [349, 350]
        barriers = place_barriers(grid, [line], WGS84)
        cuts = np.concatenate([one.cuts for one in barriers(strips(np.zeros((3, 360)), grid=grid))])
        assert np.flatnonzero(cuts.any(axis=0)).tolist() == [349, 350]


class TestFigures:
    """A 5 x 5 map of class 1 with a road of one cell along its middle column."""

    ROAD = shapely.LineString([(2500, 500), (2500, -5500)])

    def found(self, **given):
        return measured(np.ones((5, 5)), barriers=[self.ROAD], barrier_width_m=900, **given)

    def test_cells_of_barriers_are_of_no_class_but_count_as_area(self):
        found = self.found()
        assert figure(found, "area", "all covers") == pytest.approx(25)
        assert figure(found, "area") == pytest.approx(20)
        assert figure(found, "area", BARRIER) == pytest.approx(5)
        assert figure(found, "share") + figure(found, "share", BARRIER) == pytest.approx(100)
        assert set(found[found["cover"] == BARRIER]["quantity"]) == {"area", "share"}

    def test_patches_and_mesh(self):
        """Two patches of 10 on 25: coherence 2 (10/25)^2, mesh size 200/25."""
        found = self.found()
        assert figure(found, "patches") == 2
        assert figure(found, "coherence") == pytest.approx(2 * (10 / 25) ** 2)
        assert figure(found, "effective_mesh_size", rule=CUT) == pytest.approx(2 * 10**2 / 25)

    def test_edges_to_a_barrier_are_class_changes(self):
        found = self.found()
        assert figure(found, "edge_length", rule=CHANGES) == pytest.approx(2 * 5)
        assert figure(found, "edge_length", "all covers", rule=CHANGES) == pytest.approx(2 * 5)

    def test_interior_depth_counts_from_a_barrier(self):
        """Centres at 0.5 and 1.5 km from the road's cells, on either side."""
        found = self.found(interior_depths_m=[1000])
        assert figure(found, "interior_area_at_1000m_depth") == pytest.approx(2 * 5)
        deep = self.found(interior_depths_m=[1000], depth_by_neighbour_m={BARRIER: 400})
        assert figure(deep, "interior_area_at_1000m_depth") == pytest.approx(20)

    def test_groups_alone_have_the_barriers_area_too(self):
        found = self.found(groups={"all of it": ["1"]}, covers=["all of it"])
        assert figure(found, "share", "all of it") == pytest.approx(80)
        assert figure(found, "share", BARRIER) == pytest.approx(20)

    def test_a_width_that_takes_no_cell_still_cuts(self):
        road = shapely.LineString([(3000, 500), (3000, -5500)])
        found = measured(np.ones((5, 5)), barriers=[road], barrier_width_m=12)
        assert figure(found, "area", BARRIER) == 0
        assert figure(found, "coherence") == pytest.approx((15 / 25) ** 2 + (10 / 25) ** 2)

    def test_without_a_width_there_is_no_such_cover(self):
        for width in (None, 0, [0], [None]):
            found = measured(np.ones((5, 5)), barriers=[self.ROAD], barrier_width_m=width)
            assert BARRIER not in set(found["cover"])

    def test_zones_have_their_own(self):
        found = self.found(zones=[cells(0, 0, 3, 5), cells(3, 0, 5, 2)])
        assert figure(found, "area", BARRIER, unit=1) == pytest.approx(5)
        assert figure(found, "share", BARRIER, unit=1) == pytest.approx(100 * 5 / 15)
        assert figure(found, "area", BARRIER, unit=2) == 0


@settings(max_examples=15)
@given(st.integers(0, 10**6), st.integers(1, 20), st.floats(100, 6000))
def test_strip_height_never_changes_a_figure(seed, rows, width):
    rng = np.random.default_rng(seed)
    roads = [shapely.LineString(rng.uniform(0, 17, (3, 2)) * (1000, -1000)) for _ in range(3)]
    asked = EVERYTHING | {
        "zones": [cells(1, 2, 9, 18)],
        "barriers": roads,
        "barrier_width_m": [width, 0, width / 2],
        "groups": {"both": ["1", "2"]},
    }
    codes = rng.integers(0, 4, (20, 17))
    pd.testing.assert_frame_equal(
        measured(codes, rows=rows, **asked), measured(codes, **asked), check_exact=True
    )


def test_a_map_with_barriers_is_that_map_with_a_class_more():
    """Cells drawn into the map by hand, with the same links cut, have the same figures of habitat."""
    rng = np.random.default_rng(8)
    codes = rng.integers(1, 3, (30, 30)).repeat(2, axis=0).repeat(2, axis=1)
    road = shapely.LineString([(-500, -20_300), (22_000, -31_400), (61_000, -5_200)])
    row, column = np.indices(codes.shape) + 0.5
    near = shapely.distance(road, shapely.points(1000 * column, -1000 * row)) <= 1400
    asked = {
        "barriers": [road],
        "interior_depths_m": [1500],
        "covers": ["1", "2"],
        "lacunarity_boxes_m": [5000],
    }
    drawn = measured(np.where(near, 3, codes), **asked)
    found = measured(codes, barrier_width_m=2800, **asked)
    pd.testing.assert_frame_equal(
        found[found["cover"] != BARRIER].reset_index(drop=True), drawn, check_exact=True
    )


def test_patches_leave_barriers_out_and_no_cover_is_named_so():
    opened = open_class_map((np.ones((5, 5), np.uint8), KM, PLANE), None, {})
    barriers = place_barriers(opened.grid, [TestFigures.ROAD], PLANE, 900)
    (found,) = RasterCover(opened, None, barriers).patches()
    assert found.table["cover"].astype(str).tolist() == ["1", "1"]
    assert found.table["cells"].tolist() == [10, 10]
    assert list(found.table["cover"].cat.categories) == ["1"]
    assert opened.legend.names == []  # the map itself learns of no barrier
    (found,) = RasterCover(opened, None, barriers).patches(smallest_cells=100)
    assert found.smaller.to_numpy().tolist() == [["1", 2]]  # the barrier is not even counted


class TestRefused:
    def test_a_class_or_group_named_barrier(self):
        asked = {"barriers": [TestFigures.ROAD], "barrier_width_m": 900}
        with pytest.raises(ConfigError, match="'barrier' is what cells are called that barriers"):
            measured(np.ones((5, 5)), groups={BARRIER: ["1"]}, **asked)

    def test_widths_that_are_none(self):
        for width, told in (
            ([1, 2], "has 2 widths for 1 barriers"),
            (-1, "-1.0 is no width"),
            ([np.inf], "inf"),
        ):
            with pytest.raises(ConfigError, match=told):
                measured(np.ones((5, 5)), barriers=[TestFigures.ROAD], barrier_width_m=width)

    def test_a_width_without_barriers(self):
        with pytest.raises(ConfigError, match="barrier_width_m goes with barriers"):
            measured(np.ones((5, 5)), barrier_width_m=3)


def test_layers_of_barriers_are_joined():
    grid = plane_grid(np.zeros((2, 9)))
    lines = [shapely.LineString([(x, 1), (x, -9)]) for x in (1.5, 7.5)]
    parts = [
        place_barriers(grid, [line, None], PLANE, width) for line, width in zip(lines, (0, 3), strict=True)
    ]
    one = joined(grid, parts)
    assert one.left_out == {"missing geometry": 2}
    assert one.width_m.tolist() == [0, 3]
    assert len(joined(grid, []).segments) == 0


@pytest.mark.parametrize("seed", range(3))
def test_compiled_kernels_equal_their_interpreted_twins(seed):
    rng = np.random.default_rng(seed)
    grid = Grid(6, 8, (0.02, 0, 10, 0, -0.01, 60), WGS84)
    sizes = grid.sizes(1, 5)
    segments, reach = rng.uniform(-2, 9, (6, 4)), rng.uniform(0, 3000, 6) / grid.length_unit_m
    segments[0, 3] = segments[0, 1]
    lines = sizes.width, sizes.height, sizes.area_line, sizes.edge_line
    given = (segments, reach, 1, *lines, np.full((5, 2), 500 / grid.length_unit_m), 3)
    compiled, twin = np.zeros((2, 5, 8), np.int16)
    barrier_cells.take_cells(*given, compiled)
    with pytest.MonkeyPatch.context() as patch:
        for name in ("stretch", "distance", "span", "upright"):
            patch.setattr(barrier_cells, name, getattr(barrier_cells, name).py_func)
        barrier_cells.take_cells.py_func(*given, twin)
    assert compiled.any()
    assert (compiled == twin).all()


def test_frames_of_lines_may_have_a_width_each():
    frame = gpd.GeoDataFrame({"width": [900.0]}, geometry=[TestFigures.ROAD])
    found = fragmentation(
        (np.ones((5, 5), np.uint8), KM, PLANE),
        barriers=list(frame.geometry),
        barrier_width_m=frame["width"],
    )
    assert figure(found, "area", BARRIER) == pytest.approx(5)
