"""Zones by cell centre: borders, overlaps, other CRSs, rows that cannot be measured."""

import numpy as np
import pytest
import shapely
from class_maps import PLANE, plane_grid, strips
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import CRS, Transformer
from shapely import affinity

from geofractal.errors import ConfigError, LayerError
from geofractal.kernels import zone_rows
from geofractal.landcover.grid import Grid
from geofractal.landcover.zones import ZonePainter, place_zones

UTM = CRS("EPSG:32632")


def painted(grid, geometries, rows=None, crs=PLANE, members=None):
    """Return the zones of each cell, one array a set, and the zones."""
    zones = place_zones(grid, geometries, range(len(geometries)), crs)
    codes = np.zeros((grid.rows, grid.columns))
    found = []
    for one in zones.sets if members is None else [members]:
        painter = ZonePainter(zones, one, np.zeros(len(zones), np.int64))
        found.append(np.concatenate([strip.zones for strip in painter(strips(codes, rows, grid=grid))]))
    return found, zones


def box(left, top, right, bottom):
    """Return a box in columns and rows of a grid of unit cells, whose y runs upwards from 0."""
    return shapely.box(left, -bottom, right, -top)


class TestCentres:
    def test_cells_with_their_centre_inside(self):
        found, _ = painted(plane_grid(np.zeros((3, 3))), [box(0.4, 0, 2.6, 1.6)])
        assert found[0].tolist() == [[0, 0, 0], [0, 0, 0], [-1, -1, -1]]
        found, _ = painted(plane_grid(np.zeros((3, 3))), [box(0.6, 0, 2.4, 1.4)])
        assert found[0].tolist() == [[-1, 0, -1], [-1, -1, -1], [-1, -1, -1]]

    def test_a_centre_on_a_border_belongs_to_the_right_and_below(self):
        halves = [box(0, 0, 1.5, 3), box(1.5, 0, 3, 3)]
        found, zones = painted(plane_grid(np.zeros((3, 3))), halves)
        assert zones.sets == ((0, 1),)
        assert found[0].tolist() == [[0, 1, 1]] * 3
        stacked = [box(0, 0, 3, 1.5), box(0, 1.5, 3, 3)]
        found, _ = painted(plane_grid(np.zeros((3, 3))), stacked)
        assert found[0].tolist() == [[0] * 3, [1] * 3, [1] * 3]

    @pytest.mark.parametrize("turn", [0, 30, 45, 90, 137])
    def test_fans_of_triangles_share_no_cell_and_leave_none_out(self, turn):
        """Six triangles around a cell centre tile a hexagon: every cell in it is in exactly one."""
        ring = [(20 * np.cos(k * np.pi / 3), 20 * np.sin(k * np.pi / 3)) for k in range(7)]
        fan = [shapely.Polygon([(0, 0), ring[k], ring[k + 1]]) for k in range(6)]
        fan = [affinity.translate(affinity.rotate(one, turn, (0, 0)), 20.5, -20.5) for one in fan]
        grid = plane_grid(np.zeros((41, 41)))
        found, zones = painted(grid, fan)
        assert len(zones.sets) == 1
        r, c = np.indices((41, 41)) + 0.5
        inside = shapely.contains_xy(shapely.union_all(fan).buffer(-1e-9), c, -r)
        assert (found[0][inside] >= 0).all()

    @settings(max_examples=60)
    @given(st.integers(0, 10**6), st.integers(1, 12))
    def test_lobed_and_holed_zones_against_shapely(self, seed, rows):
        rng = np.random.default_rng(seed)
        blobs = [
            shapely.Point(rng.uniform(0, 12, 2) * (1, -1)).buffer(rng.uniform(1, 5), 3) for _ in range(4)
        ]
        zone = shapely.union_all(blobs[:3]).difference(blobs[3])
        grid = plane_grid(np.zeros((12, 12)))
        r, c = np.indices((12, 12)) + 0.5
        inside = shapely.contains_xy(zone, c, -r)
        found, zones = painted(grid, [zone], rows)
        if not inside.any():
            assert found == []
            assert zones.problems[0]
            return
        assert (found[0] == np.where(inside, 0, -1)).all()


class TestSets:
    def test_nested_and_overlapping_zones_are_kept_apart(self):
        zones = [box(0, 0, 4, 4), box(1, 1, 3, 3), box(4, 0, 6, 4), box(3, 3, 6, 4)]
        found, placed = painted(plane_grid(np.zeros((4, 6))), zones)
        assert placed.sets == ((0, 2), (1, 3))
        assert placed.overlaps == ((1, 3), (0,), (3,), (0, 2))
        assert (found[0] == [[0, 0, 0, 0, 2, 2]] * 4).all()

    def test_an_overlap_without_a_centre_is_none(self):
        _, placed = painted(plane_grid(np.zeros((4, 4))), [box(0, 0, 2.2, 4), box(1.8, 0, 4, 4)])
        assert placed.sets == ((0, 1),)
        assert placed.overlaps == ((), ())

    def test_area_of_cells_covered_or_not(self):
        grid = plane_grid(np.zeros((4, 4)), cell=(10, 20))
        zones = place_zones(grid, [shapely.box(0, -40, 20, 0)], ["a"], PLANE)
        painter = ZonePainter(zones, (0,), np.zeros(1, np.int64))
        list(painter(strips(np.full((4, 4), -1), 3, grid=grid)))
        assert painter.area[0] * grid.area_unit_m2 == pytest.approx(2 * 2 * 10 * 20)


class TestRefusals:
    def test_each_row_says_why(self):
        bow = shapely.Polygon([(0, 0), (2, -2), (2, 0), (0, -2)])
        rows = [None, shapely.Point(1, -1), shapely.Polygon(), bow, box(50, 0, 60, 2), box(0.6, 0, 0.9, 2)]
        zones = place_zones(plane_grid(np.zeros((4, 4))), rows, "abcdef", PLANE)
        assert zones.problems == (
            "missing geometry",
            "Point, not a polygon",
            "empty geometry",
            "invalid: Self-intersection",
            "off the map",
            "no cell has its centre inside",
        )
        assert zones.sets == ()

    def test_names_twice(self):
        with pytest.raises(ConfigError, match="names of their own; a is given more than once"):
            place_zones(plane_grid(np.zeros((4, 4))), [None, None], ["a", "a"], PLANE)

    def test_no_crs(self):
        grid = Grid(4, 4, (1, 0, 500_000, 0, -1, 5_600_000), UTM)
        with pytest.raises(LayerError, match="Zones and barriers need a CRS"):
            place_zones(grid, [box(0, 0, 1, 1)], ["a"], None)

    def test_no_way_between_the_crss(self):
        with pytest.raises(LayerError, match="There is no way from 'WGS 84 / UTM zone 32N'"):
            place_zones(plane_grid(np.zeros((4, 4))), [box(0, 0, 1, 1)], ["a"], UTM)


class TestOtherCrs:
    def test_zones_in_degrees_on_a_metric_grid(self):
        """A UTM box drawn in degrees with dense edges covers the same cells."""
        grid = Grid(50, 60, (100, 0, 500_000, 0, -100, 5_600_000), UTM)
        zone = shapely.segmentize(shapely.box(500_730, 5_596_160, 504_270, 5_599_480), 50)
        to_degrees = Transformer.from_crs(UTM, 4326, always_xy=True)
        drawn = shapely.transform(zone, lambda xy: np.stack(to_degrees.transform(*xy.T), axis=1))
        ours, _ = painted(grid, [drawn], crs=CRS(4326))
        direct, _ = painted(grid, [zone], crs=UTM)
        assert (ours[0] == direct[0]).all()

    def test_a_zone_past_a_full_turn_is_found(self):
        """A grid of longitudes from 0 to 360 holds 10 W at column 350."""
        grid = Grid(10, 360, (1, 0, 0, 0, -1, 5), CRS(4326))
        found, _ = painted(grid, [shapely.box(-10, -5, 10, 5)], crs=CRS(4326))
        columns = np.flatnonzero((found[0] == 0).all(axis=0))
        assert columns.tolist() == [*range(10), *range(350, 360)]

    def test_area_beyond_the_map(self):
        grid = plane_grid(np.zeros((4, 4)), cell=(10, 10))
        zones = place_zones(grid, [shapely.box(-50, -40, 20, 0)], ["a"], PLANE)
        assert zones.outside_m2[0] == pytest.approx(50 * 40)

    def test_area_beyond_the_map_on_the_ellipsoid(self):
        """The degree cell north of the equator, between parallels: 12308.464 km2 on WGS 84 (by geodesics of
        many short edges)."""
        grid = Grid(1, 1, (1, 0, 0, 0, -1, 1), CRS(4326))
        zones = place_zones(grid, [shapely.box(0, 0, 2, 1)], ["a"], CRS(4326))
        assert zones.outside_m2[0] == pytest.approx(12308.464e6, abs=1e3)


@given(st.integers(0, 10**6))
def test_compiled_kernels_equal_their_interpreted_twins(seed):
    rng = np.random.default_rng(seed)
    edges = rng.uniform(-2, 12, (8, 4))
    edges[:, [1, 3]] = np.sort(edges[:, [1, 3]], axis=1)
    zone, n = rng.integers(0, 3, 8), zone_rows.count_crossings(edges, 0, 9)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(zone_rows, "rows_crossed", zone_rows.rows_crossed.py_func)
        assert zone_rows.count_crossings.py_func(edges, 0, 9) == n
        found, twin = np.empty((2, n, 3), np.int64)
        zone_rows.find_crossings(edges, zone, 0, 9, 10, found)
        zone_rows.find_crossings.py_func(edges, zone, 0, 9, 10, twin)
    assert (found == twin).all()
    runs = np.sort(rng.integers(0, 9, (6, 4)), axis=1)[:, [0, 1, 2, 3]]
    runs = np.ascontiguousarray(runs[np.lexsort((runs[:, 2], runs[:, 0]))])
    one, other = np.full((2, 4, 2), -1, np.int64)
    assert zone_rows.overlapping(runs, one) == zone_rows.overlapping.py_func(runs, other)
    assert (one == other).all()
    strip, twin_strip = np.full((2, 9, 10), -1, np.int32)
    zone_rows.paint_runs(runs, 0, strip)
    zone_rows.paint_runs.py_func(runs, 0, twin_strip)
    assert (strip == twin_strip).all()
