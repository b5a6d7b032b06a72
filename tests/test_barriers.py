"""Barriers cut the links whose centre line they cross."""

import numpy as np
import pytest
import shapely
from class_maps import PLANE, components, plane_grid, strips
from hypothesis import given
from hypothesis import strategies as st
from pyproj import CRS
from scipy import ndimage

from geofractal.cover_api import fragmentation
from geofractal.kernels import barrier_cuts
from geofractal.landcover.barriers import place_barriers
from geofractal.landcover.grid import Grid
from geofractal.landcover.polygon_zones import place_polygon_barriers
from geofractal.landcover.strips import CUT_DOWN, CUT_DOWN_LEFT, CUT_DOWN_RIGHT, CUT_RIGHT


def cut(shape, lines, rows=None):
    codes = np.zeros(shape)
    barriers = place_barriers(plane_grid(codes), lines, PLANE)
    return np.concatenate([strip.cuts for strip in barriers(strips(codes, rows))])


def line(*points):
    """Return a line through (column, row) points."""
    return shapely.LineString([(x, -y) for x, y in points])


STEPS = {CUT_RIGHT: (1, 0), CUT_DOWN: (0, 1), CUT_DOWN_RIGHT: (1, 1), CUT_DOWN_LEFT: (-1, 1)}


class TestLinks:
    def test_a_line_between_two_columns(self):
        found = cut((2, 3), [line((1, -1), (1, 3))])
        assert (found & CUT_RIGHT).tolist() == [[CUT_RIGHT, 0, 0]] * 2
        assert (found & CUT_DOWN == 0).all()
        assert (found[0] & CUT_DOWN_RIGHT).tolist() == [CUT_DOWN_RIGHT, 0, 0]
        assert (found[0] & CUT_DOWN_LEFT).tolist() == [0, CUT_DOWN_LEFT, 0]

    def test_a_line_that_ends_short_of_a_centre_line_cuts_nothing_there(self):
        assert (cut((3, 3), [line((1, -1), (1, 0.4))]) == 0).all()
        assert (cut((3, 3), [line((1, -1), (1, 0.6))]) & CUT_RIGHT).sum() == CUT_RIGHT

    @given(st.integers(0, 10**6), st.integers(1, 6))
    def test_against_crossings_of_segments(self, seed, rows):
        """Generic lines: a link is cut where its centre line and the barrier cross, by shapely."""
        rng = np.random.default_rng(seed)
        barrier = line(*rng.uniform(-1, 7, (4, 2)))
        found = cut((6, 6), [barrier], rows)
        for r, c in np.ndindex(6, 6):
            for bit, (across, down) in STEPS.items():
                inside = 0 <= c + across < 6 and r + down < 6
                link = line((c + 0.5, r + 0.5), (c + 0.5 + across, r + 0.5 + down))
                if inside:
                    assert bool(found[r, c] & bit) == link.crosses(barrier)

    @given(st.integers(0, 10**6), st.sampled_from([4, 8]))
    def test_a_closed_barrier_leaks_nowhere(self, seed, neighbours):
        rng = np.random.default_rng(seed)
        ring = shapely.Point(6, -6).buffer(rng.uniform(1, 5), 4).exterior
        ring = shapely.LineString(shapely.get_coordinates(ring) + rng.uniform(-0.3, 0.3, 2))
        number = components(np.zeros((12, 12), int), neighbours, cuts=cut((12, 12), [ring]))
        r, c = np.indices((12, 12)) + 0.5
        inside = shapely.contains_xy(shapely.Polygon(ring), c, -r)
        assert not set(number[inside]) & set(number[~inside])

    def test_what_is_no_line_is_left_out_and_counted(self):
        rows = [None, shapely.Point(1, 1), shapely.LineString()]
        barriers = place_barriers(plane_grid(np.zeros((2, 2))), rows, PLANE)
        assert barriers.left_out == {"missing geometry": 1, "Point, not a line": 1, "empty geometry": 1}
        assert len(barriers.segments) == 0

    def test_points_drawn_as_lines_are_left_out_whatever_the_crs(self):
        """Edges are divided on the way to another CRS, which a line of one place has none of."""
        point = [(9.0, 54.0), (9.0, 54.0)]
        rows = [shapely.LineString(point), shapely.LineString([(np.nan, 54), (9, 54)])]
        rows.append(shapely.MultiLineString([point, [(9, 54), (9.001, 54)]]))
        left_out = {"zero length": 1, "coordinates that are not numbers": 1}
        barriers = place_barriers(
            Grid(2, 2, (10.0, 0, 5e5, 0, -10.0, 6e6), CRS("EPSG:32632")), rows, CRS("EPSG:4326")
        )
        assert barriers.left_out == left_out
        assert np.hypot(*(barriers.segments[:, 2:] - barriers.segments[:, :2]).T).all()
        placed = place_polygon_barriers(rows, CRS("EPSG:4326"), CRS("EPSG:32632"))
        assert placed.left_out == left_out
        assert len(placed.lines) == 1


def test_a_diagonal_barrier_holds_under_eight_neighbours():
    """Drawn into cells a diagonal leaks through corners; as a line it does not."""
    barrier = line((-1, 0.1), (8, 9.1))
    number = components(np.zeros((8, 8), int), 8, cuts=cut((8, 8), [barrier]))
    r, c = np.indices((8, 8))
    assert number.max() == 1
    assert (number == number[0, 7])[c >= r].all()
    leaking, count = ndimage.label(~np.eye(8, dtype=bool), np.ones((3, 3)))
    assert count == 1
    assert leaking.max() == 1


@pytest.mark.parametrize("seed", range(5))
def test_compiled_kernels_equal_their_interpreted_twins(seed):
    rng = np.random.default_rng(seed)
    segments = np.round(rng.uniform(-2, 9, (12, 4)) * 2) / 2 if seed % 2 else rng.uniform(-2, 9, (12, 4))
    compiled, twin = np.zeros((2, 5, 7), np.uint8)
    barrier_cuts.cut_links(segments, 1, compiled)
    names = (
        "along_rows",
        "along_columns",
        "along_diagonals",
        "along_other_diagonals",
        "mark",
        "lines_between",
    )
    with pytest.MonkeyPatch.context() as patch, np.errstate(divide="ignore", invalid="ignore"):
        for name in names:
            patch.setattr(barrier_cuts, name, getattr(barrier_cuts, name).py_func)
        barrier_cuts.cut_links.py_func(segments, 1, twin)
    assert (compiled == twin).all()


def test_barriers_left_out_are_told_beside_the_area_of_the_map():
    found = fragmentation((np.ones((2, 2), int), (1, 0, 0, 0, -1, 0), PLANE), barriers=[shapely.Point(1, -1)])
    assert found["note"][0] == "barriers left out: Point, not a line (1)"
