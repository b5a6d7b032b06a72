"""Box counting: kernels against brute force, known counts, and the measure `box-dimension`."""

from itertools import pairwise, product
from math import log, pi

import numpy as np
import pytest
import shapely
from hypothesis import assume, given, settings
from hypothesis import strategies as st

import geofractal
from geofractal import synthetic
from geofractal.estimators import box
from geofractal.kernels import boxes as kernels
from geofractal.kernels.ladder_judge import STRETCHES
from geofractal.scaling import crowding
from geofractal.scaling.fit import fit_power_law
from geofractal.scaling.judge import judge
from geofractal.scaling.ladder import Ladders
from geofractal.testing import check_measure, lines_of, specimens


def tables(tiles=4096):
    return kernels.Tables(
        np.zeros(4 * tiles, np.int64),
        np.zeros(tiles, np.int64),
        np.zeros(tiles, np.int64),
        np.zeros((tiles, kernels.TILE)),
        np.zeros((tiles, kernels.TILE), np.uint16),
    )


def grid_of(parts, size, origin=(0, 0, 0), tallies=None, call=kernels.count_grid):
    """Return boxes, entropy, sum of squares and visits of one grid over parts, each (k, 2) or (k, 3)."""
    xy = np.ascontiguousarray(np.concatenate(parts), dtype=float)
    starts = np.concatenate([[0], np.cumsum([len(part) for part in parts])])
    along, bounds = kernels.measure_along(xy, starts, np.array([0, len(parts)]))
    args = xy, along, bounds, starts, size, np.array(origin, float), np.array([9, 99, 99])
    return call(*args, tables(), np.zeros(STRETCHES) if tallies is None else tallies)


def shares_by_shapely(parts):
    """Length of the parts in each unit box: along an edge it is that of the box above or to the right."""
    segments = [shapely.LineString(pair) for part in parts for pair in pairwise(part)]
    shares = []
    for i, j in product(range(7), range(7)):
        beyond = shapely.LineString([(i, j + 1), (i + 1, j + 1), (i + 1, j)])
        cell = shapely.box(i, j, i + 1, j + 1)
        taken = shapely.length(shapely.intersection(segments, cell)).sum()
        shares.append(taken - shapely.length(shapely.intersection(segments, beyond)).sum())
    shares = np.array(shares)
    assert shares.sum() == pytest.approx(shapely.length(segments).sum())
    return shares[shares > 1e-7]


def shares_by_crossings(part, size):
    """Length of a line in each box of any number of axes, from its crossings with the grid's planes."""
    shares = {}
    for a, b in pairwise(part / size):
        times = [0.0, 1.0]
        for low, high in zip(a, b, strict=True):
            planes = np.arange(np.ceil(min(low, high)), np.floor(max(low, high)) + 1)
            times += list((planes - low) / (high - low))
        for start, stop in pairwise(sorted(times)):
            key = tuple(np.floor(a + (start + stop) / 2 * (b - a)).astype(int))
            shares[key] = shares.get(key, 0.0) + (stop - start) * np.linalg.norm(b - a)
    return np.array([share for share in shares.values() if share > 1e-12])


def visits_by_crossings(part):
    """Visits to unit boxes: runs of neighbouring stretches, sixteenths of the length, that meet each box."""
    moves = np.linalg.norm(np.diff(part, axis=0), axis=1)
    ends = np.concatenate([[0.0], np.cumsum(moves)])
    met = set()
    for a, b, start, stop in zip(part, part[1:], ends, ends[1:], strict=False):
        cuts = [np.arange(np.ceil(min(p, q)), np.floor(max(p, q)) + 1) for p, q in zip(a, b, strict=True)]
        times = [(cut - p) / (q - p) for cut, p, q in zip(cuts, a, b, strict=True)]
        sixteenths = (np.arange(17) / 16 * ends[-1] - start) / (stop - start)
        times = np.sort(np.concatenate([[0.0, 1.0], *times, sixteenths]))
        for t in (times[1:] + times[:-1])[(times[:-1] >= 0) & (times[1:] <= 1)] / 2:
            stretch = int((start + t * (stop - start)) / ends[-1] * 16)
            met.add((*np.floor(a + t * (b - a)).astype(int).tolist(), stretch))
    return sum((*box, stretch - 1) not in met for *box, stretch in met)


def expected(shares):
    p = shares / shares.sum()
    return len(p), -np.sum(p * np.log(p)), np.sum(p * p)


class TestCountGrid:
    def test_straight_line_along_the_grid(self):
        # a line of 4 sides along an edge lies in the 4 boxes above it
        assert grid_of([[(0, 1), (4, 1)]], 1.0) == pytest.approx((4, log(4), 1 / 4, 4))

    def test_straight_line_across_edges(self):
        # shares 1/2, 1, 1/2 of 2
        found = grid_of([[(0.5, 0.5), (2.5, 0.5)]], 1.0)
        assert found == pytest.approx((3, 0.5 * log(4) + 0.5 * log(2), 1 / 16 + 1 / 4 + 1 / 16, 3))

    @pytest.mark.parametrize("ends", [[(0, 0), (5, 5)], [(0, 5), (5, 0)], [(5, 0), (0, 5)]])
    def test_diagonal_through_corners_touches_no_further_box(self, ends):
        assert grid_of([ends], 1.0)[0] == 5

    @pytest.mark.parametrize("third", [1 / 3, 0.1, 1e-3, 7e5])
    def test_corners_hold_where_sizes_are_rounded(self, third):
        assert grid_of([np.array([(0, 0), (9, 9)]) * third], third)[0] == 9

    def test_unit_square_around_boxes(self):
        # the outline of 3 x 3 boxes: right and upper sides lie in the boxes beyond
        ring = np.array([(0, 0), (3, 0), (3, 3), (0, 3), (0, 0)])
        assert grid_of([ring], 1.0)[0] == 3 + 3 + 3 + 3 - 1

    def test_unit_square_through_boxes(self):
        ring = np.array([(0, 0), (3, 0), (3, 3), (0, 3), (0, 0)]) + 0.5
        assert grid_of([ring], 1.0)[0] == 12

    def test_touching_an_edge_does_not_count(self):
        assert grid_of([[(0.2, 0.5), (0.5, 1.0), (0.8, 0.5)]], 1.0)[0] == 1

    def test_long_segment_meets_every_box_on_its_way(self):
        assert grid_of([[(0.5, 0.5), (400.5, 0.5)]], 1.0)[0] == 401

    def test_lines_without_length_lie_in_no_box(self):
        assert grid_of([[(0.5, 0.5), (0.5, 0.5)]], 1.0)[0] == 0

    def test_the_gap_between_parts_is_no_line(self):
        assert grid_of([[(0.5, 0.5), (0.6, 0.5)], [(7.5, 0.5), (7.6, 0.5)]], 1.0) == pytest.approx(
            (2, log(2), 1 / 2, 2)
        )

    def test_parts_share_boxes(self):
        part = [(0.5, 0.5), (2.5, 0.5)]
        assert grid_of([part, part], 1.0)[:3] == pytest.approx(grid_of([part], 1.0)[:3])

    def test_boxes_that_a_line_comes_back_to_are_visited_again(self):
        # out through 8 boxes and back: only about the turn do stretches of the way out and back adjoin
        assert grid_of([[(0.5, 0.5), (7.5, 0.5), (0.5, 0.5)]], 1.0)[3] == 8 + 6

    @settings(max_examples=40, deadline=None)
    @given(st.integers(0, 2**32), st.sampled_from([2, 3]))
    def test_visits_equal_the_runs_of_stretches_by_box(self, seed, axes):
        part = np.random.default_rng(seed).uniform(0, 5, (12, axes))
        assert grid_of([part], 1.0)[3] == visits_by_crossings(part)

    @settings(max_examples=60, deadline=None)
    @given(st.integers(0, 2**32), st.booleans(), st.integers(1, 3))
    def test_it_equals_shapely(self, seed, whole, number):
        rng = np.random.default_rng(seed)
        parts = [rng.uniform(0, 5, (rng.integers(2, 9), 2)) for _ in range(number)]
        if whole:  # vertices on halves of the grid: edges and corners everywhere
            parts = [np.round(part * 2) / 2 for part in parts]
        assume(any((part != part[0]).any() for part in parts))
        assert grid_of(parts, 1.0)[:3] == pytest.approx(expected(shares_by_shapely(parts)), abs=1e-6)

    @settings(max_examples=40, deadline=None)
    @given(st.integers(0, 2**32), st.sampled_from([2, 3]))
    def test_it_equals_the_crossings(self, seed, axes):
        part = np.cumsum(np.random.default_rng(seed).normal(size=(300, axes)), axis=0)
        part -= part.min(axis=0)
        assert grid_of([part], 2.5)[:3] == pytest.approx(expected(shares_by_crossings(part, 2.5)), rel=1e-9)

    def test_three_dimensions_of_a_flat_line_are_those_of_the_plane(self):
        flat = np.add(synthetic.koch(level=5).xy, [0, 1])
        solid = np.column_stack([flat, np.full(len(flat), 0.5)])
        assert grid_of([solid], 0.05) == pytest.approx(grid_of([flat], 0.05))

    def test_blocks_pass_over_nothing(self):
        # 1,000 vertices in one box, then a spike of one vertex out of it and back
        part = np.full((1000, 2), 0.5) + 0.1 * np.random.default_rng(1).random((1000, 2))
        part[700] = (3.5, 0.5)
        assert grid_of([part], 1.0)[0] == 4

    @pytest.mark.parametrize("axes", [2, 3])
    def test_it_equals_its_interpreted_twin(self, axes):
        rng = np.random.default_rng(3)
        parts = [rng.uniform(0, 6, (n, axes)) for n in (2, 30, 90)]
        parts[1] = np.round(parts[1])
        origin = np.full(3, -0.25) * (np.arange(3) < axes)
        slow = grid_of(parts, 1.0, origin, call=kernels.count_grid.py_func)
        assert grid_of(parts, 1.0, origin) == slow

    def test_measuring_along_equals_its_interpreted_twin(self):
        args = np.random.default_rng(3).random((200, 3)), np.array([0, 2, 131, 200]), np.array([0, 2, 3])
        fast, slow = kernels.measure_along(*args), kernels.measure_along.py_func(*args)
        assert np.array_equal(fast[0], slow[0])
        assert np.array_equal(fast[1], slow[1])

    def test_stretches_tell_where_the_boxes_are(self):
        # 16 stretches of one box side each, then the same way back: boxes are counted once a stretch
        tallies = np.zeros(STRETCHES)
        grid_of([[(0, 0.5), (8, 0.5), (0, 0.5)]], 1.0, tallies=tallies)
        assert tallies.tolist() == [1.0] * 16
        tallies = np.zeros(STRETCHES)
        grid_of([[(0, 0.5), (4, 0.5), (4, 4.5)]], 0.5, tallies=tallies)
        assert tallies.sum() == grid_of([[(0, 0.5), (4, 0.5), (4, 4.5)]], 0.5)[0]

    def test_one_box_lies_in_every_stretch(self):
        tallies = np.zeros(STRETCHES)
        grid_of([[(0.1, 0.5), (0.9, 0.5)]], 1.0, tallies=tallies)
        assert tallies.tolist() == [1.0] * 16


class TestLadders:
    lines = lines_of([[synthetic.random_koch(1.3, level=6, seed=1).xy * 1e4]])

    def ladders(self, *sizes, features=1):
        return Ladders(np.arange(features + 1) * len(sizes), np.tile(np.array(sizes, float), features))

    def test_fewest_over_the_grids(self):
        ladders = self.ladders(500.0, 1500.0)
        alone = [
            box.count(self.lines, ladders, shifts=box.GRID_SHIFTS[k : k + 1]).boxes for k in range(box.GRIDS)
        ]
        assert np.array_equal(box.count(self.lines, ladders).boxes, np.min(alone, axis=0))
        assert box.count(self.lines, ladders).spread == pytest.approx(np.log(alone).std(axis=0, ddof=1))

    def test_further_grids_stop_where_boxes_are_many(self, monkeypatch):
        monkeypatch.setattr(box, "ENOUGH_BOXES", 10)
        assert np.isnan(box.count(self.lines, self.ladders(500.0)).spread[0])

    def test_grids_are_shifted_along_every_axis_by_other_amounts(self):
        shifts = box.GRID_SHIFTS
        assert ((shifts > 0) & (shifts < 1)).all()
        assert all(np.diff(np.sort(shifts.ravel())) > 1e-3)

    def test_moving_the_line_changes_nothing(self):
        ladders = self.ladders(*np.geomspace(50, 2000, 9))
        moved = lines_of([[np.add(self.lines.xy, [123_456, -7_890_123])]])
        assert np.array_equal(box.count(self.lines, ladders).boxes, box.count(moved, ladders).boxes)

    def test_reversing_the_line_changes_nothing(self):
        ladders = self.ladders(*np.geomspace(50, 2000, 9))
        back = lines_of([[self.lines.xy[::-1]]])
        here, there = box.count(self.lines, ladders), box.count(back, ladders)
        assert np.array_equal(here.boxes, there.boxes)
        assert np.array_equal(here.tallies, there.tallies[:, ::-1])
        assert here.even == pytest.approx(there.even, rel=1e-9)
        assert here.paired == pytest.approx(there.paired, rel=1e-9)

    def test_units_change_nothing(self):
        feet = lines_of([[self.lines.xy / 0.3048]])
        sizes = np.geomspace(50, 2000, 9)
        here, there = (
            box.count(self.lines, self.ladders(*sizes)),
            box.count(feet, self.ladders(*sizes / 0.3048)),
        )
        assert np.array_equal(here.boxes, there.boxes)

    def test_a_network_counts_as_one(self):
        # a river and its tributary cut into reaches cover the same boxes as uncut
        river, branch = self.lines.xy, self.lines.xy[:900] @ [[0, 1], [-1, 0]]
        reaches = lines_of([[river[:2000], river[1999:], branch[:400], branch[399:]], [river, branch]])
        found = box.count(reaches, self.ladders(100.0, 800.0, features=2))
        assert np.array_equal(found.boxes[:2], found.boxes[2:])

    def test_boxes_beyond_the_tables_are_left_out(self, monkeypatch):
        monkeypatch.setattr(box, "MOST_TILES", 50)
        found = box.count(self.lines, self.ladders(1.0, 2000.0))
        assert np.isnan(found.boxes[0])
        assert found.boxes[1] > 0

    @pytest.mark.parametrize("dimension", [1.0, 1.5, 1.9])
    def test_tables_hold_every_tile(self, dimension):
        lines = lines_of([[synthetic.random_koch(dimension, level=6, seed=2).xy]])
        ladders = self.ladders(*np.geomspace(1e-4, 1, 9))
        tiles = [grid_of([lines.xy + 1], size * 8)[0] for size in ladders.rulers]
        assert (box._tiles(lines, ladders) >= tiles).all()

    def test_counting_equals_its_interpreted_twin(self):
        lines = lines_of(
            [[np.random.default_rng(1).random((40, 2)) * 9], [[(0, 0), (5, 5)], [(1, 0), (9, 1)]]]
        )
        args = (
            lines.xy,
            lines.part_offsets,
            lines.feature_offsets,
            np.array([0, 2, 4]),
            np.array([1.0, 2.0, np.nan, 3.0]),
            box.GRID_SHIFTS,
            30,
        )
        fast, slow = kernels.count_ladders(*args, tables()), kernels.count_ladders.py_func(*args, tables())
        assert np.array_equal(fast[0], slow[0], equal_nan=True)
        assert np.array_equal(fast[1], slow[1])


def measured(xy, **options):
    return box.BoxDimension().measure(lines_of([[xy]]), box.BoxOptions(**options))


def turned(xy, angle):
    return xy @ np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])


class TestDimensions:
    @pytest.mark.parametrize(
        ("curve", "error"),
        [
            (synthetic.koch(1.1, level=8), 0.02),
            (synthetic.gosper_island(level=8), 0.02),
            (synthetic.koch(level=8), 0.02),
            (synthetic.minkowski_island(level=8), 0.025),
            (synthetic.koch(1.4, level=8), 0.02),
            (synthetic.quadratic_koch(1, level=7), 0.04),
            (synthetic.quadratic_koch(2, level=5), 0.03),
            (synthetic.dragon_boundary(level=16), 0.06),
            (synthetic.gasket(level=9), 0.03),
        ],
    )
    @pytest.mark.parametrize("angle", [0.0, 0.4])
    def test_exact_curves_lie_in_their_interval(self, curve, error, angle):
        values = measured(turned(curve.xy, angle) * 1e5)
        assert values["box_dim"][0] == pytest.approx(curve.dimension, abs=error)
        assert values["box_dim_low"][0] <= curve.dimension <= values["box_dim_high"][0]
        assert values["box_verdict"][0] == "power-law"

    def test_lines_that_cross_themselves_are_made_up_for(self):
        trails = [synthetic.fractional_trail(1.5, vertices=5_000, seed=seed).xy for seed in range(20)]
        lines = lines_of([[trail] for trail in trails])
        ladders = box.box_ladders(lines)
        counts = box.count(lines, ladders)
        bare = -fit_power_law(ladders, counts.boxes).slope
        assert np.mean(bare) < 1.42  # as counted they come out too low
        found = box.BoxDimension().measure(lines, box.BoxOptions())["box_dim"]
        assert np.mean(found) == pytest.approx(1.5, abs=0.05)

    @pytest.mark.parametrize("angle", [0.0, 0.1, pi / 4])
    def test_straight_line_is_smooth(self, angle):
        values = measured(turned(synthetic.line(vertices=20_001).xy, angle) * 1e5)
        for name in ("box_dim", "box_information_dim", "box_correlation_dim"):
            assert values[name][0] == pytest.approx(1, abs=0.01)
        assert values["box_verdict"][0] == "smooth"

    def test_meander_breaks_at_its_bend(self):
        curve = synthetic.meander(1.2, bends=400).scaled(100)
        values = measured(curve.xy)
        assert values["box_verdict"][0] == "two-regime"
        assert curve.breaks[0] / 2 < values["box_break_m"][0] < 2 * curve.breaks[0]

    def test_uneven_mass_parts_the_dimensions(self):
        # a straight kilometre of one line, and one of 99 lines drawn over each other: two unlike densities
        thin, thick = [(0, 0), (1e3, 0)], [(1e3, 0), (2e3, 0)]
        counts = box.count(lines_of([[thin, *[thick] * 99]]), Ladders(np.array([0, 1]), np.array([1e3])))
        assert counts.paired[0] < counts.even[0] < counts.boxes[0]


class TestCrowding:
    def test_curves_that_keep_off_themselves_lack_nothing(self):
        lines = lines_of([[synthetic.koch(d, level=7).xy] for d in (1.1, 1.3, 1.4)])
        ladders = box.box_ladders(lines)
        counts = box.count(lines, ladders)
        assert crowding.lacking(ladders, counts.boxes, counts.visits) == pytest.approx(0, abs=1e-3)

    def test_what_is_lacking_by_the_formula_and_made_up_for(self):
        """Boxes 1000 s^-1.5, a tenth come back to: LACK 0.1 / (0.1 + HALF_CROWDED) 0.5 / sqrt(ln 8)."""
        sizes = np.array([2.0, 4.0, 8.0, 16.0, 32.0, 1.0])
        ladders = Ladders(np.array([0, 5, 5, 6]), sizes)
        boxes = 1000 * sizes**-1.5
        boxes[4] = np.nan
        again = 0.1 / (0.1 + crowding.HALF_CROWDED)
        lack = crowding.lacking(ladders, boxes, 1.1 * boxes)
        assert lack == pytest.approx([crowding.LACK * again * 0.5 / np.sqrt(np.log(8)), 0, 0])
        fit = fit_power_law(ladders, crowding.made_up(ladders, boxes, lack))
        assert fit.slope[0] == pytest.approx(-1.5 - lack[0])

    def test_its_doubt_widens_the_interval(self):
        lines = lines_of([[synthetic.fractional_trail(1.3, vertices=3_000, seed=1).xy]])
        ladders, scales = box.box_ladders(lines), box.scales_of(lines)
        counts = box.count(lines, ladders)
        found = judge(ladders, box.box_rungs(lines, scales, ladders, counts, counts.boxes), estimator="box")
        less, none = crowding.doubted(found, np.array([0.1])), crowding.doubted(found, np.zeros(1))
        assert none.low == pytest.approx(found.low)
        assert none.high == pytest.approx(found.high)
        reach = np.hypot(found.high - found.dimension, 0.1 * crowding.DOUBT)
        assert less.high == pytest.approx(found.dimension + reach)
        assert less.low < found.low
        assert less.error > found.error


class TestMeasure:
    def test_it_keeps_the_contract(self):
        check_measure(box.BoxDimension)

    def test_no_dimension_without_scales(self):
        values = measured([(0, 0), (1, 0), (2, 1)])
        assert np.isnan(values["box_dim"][0])
        assert values["box_verdict"][0] == "too-few-scales"
        assert "too few box sizes" in values["box_note"][0]

    def test_globe_is_counted_in_cubes(self):
        values = box.BoxDimension().measure(specimens()["three dimensions"], box.BoxOptions())
        assert values["box_dim"][0] == pytest.approx(1, abs=0.02)  # an arc of a great circle
        assert values["box_plane"].tolist() == ["three-dimensions"] * 2

    def test_every_option_changes_the_result(self):
        xy = synthetic.random_koch(1.3, level=6, seed=1).xy * 1e4
        plain = measured(xy)
        for key, value in (("size_min_m", 90.0), ("size_max_m", 900.0), ("rungs", 17), ("grids", 1)):
            assert measured(xy, **{key: value})["box_dim"][0] != plain["box_dim"][0], key

    def test_columns_are_those_that_are_filled(self):
        names = [column.name for column in box.BoxDimension().columns(box.BoxOptions())]
        assert list(measured(synthetic.koch(level=4).xy)) == names

    def test_lines_along_cells_are_said_to_be(self):
        shore = synthetic.traced(synthetic.random_koch(1.2, level=7, seed=1, island=True), 1 / 500)
        values = measured(shore.xy * 1e5)
        assert "raster cells" in values["box_note"][0]
        assert values["box_size_min_m"][0] > 3 * 200

    def test_frames_go_in_and_come_out(self):
        shore = shapely.Polygon(synthetic.koch(level=6, island=True).xy * 1e5)
        found = geofractal.box_dimension([shore, None, shapely.Point(0, 0)], crs="EPSG:2193")
        assert found["box_dim"][0] == pytest.approx(log(4) / log(3), abs=0.03)
        assert found["box_dim"].isna().tolist() == [False, True, True]
        assert found["box_note"][1] == "missing geometry"
        fewer = geofractal.box_dimension([shore], crs="EPSG:2193", size_min_m=2000, rungs=12, grids=1)
        assert fewer["box_size_min_m"][0] == pytest.approx(2000)
        assert fewer["box_rungs"][0] <= 12

    def test_sizes_out_of_order_are_refused(self):
        with pytest.raises(ValueError, match=r"size-min-m \(9\) must be below size-max-m \(9\)"):
            box.BoxOptions(size_min_m=9.0, size_max_m=9.0)
