"""Box counting of raster cells: counts against brute force, and what is concluded from them."""

from math import log, log2

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage

from geofractal import synthetic
from geofractal.config.columns import zone_columns
from geofractal.estimators.box_cells import CellBoxCounter, cell_dimensions, cell_sizes, count_cells
from geofractal.estimators.cover_boxes import box_rows
from geofractal.estimators.fragmentation_quantities import box_quantities
from geofractal.kernels.cell_boxes import count_rows
from geofractal.scaling.calibrated import CELLS
from geofractal.scaling.cells import judge_cells


class TestCells:
    def test_gasket_has_three_to_the_power_of_boxes(self):
        # ln 3 / ln 2: each halving of the box side triples the boxes
        sizes = 2 ** np.arange(8)
        found = count_cells(synthetic.carpet(synthetic.GASKET, level=10).cells, sizes)
        assert found.boxes.tolist() == [3 ** (10 - k) for k in range(8)]
        slope = np.polyfit(np.log(sizes), np.log(found.boxes), 1)[0]
        assert -slope == pytest.approx(log2(3), rel=1e-12)

    def test_carpet_has_eight_to_the_power_of_boxes_evenly_filled(self):
        found = count_cells(synthetic.carpet(level=5).cells, 3 ** np.arange(5))
        assert found.boxes.tolist() == [8 ** (5 - k) for k in range(5)]
        # every box holds the same number of cells, so all dimensions agree
        assert found.evenness == pytest.approx(found.boxes[:, None] * np.ones(2))

    @settings(max_examples=30, deadline=None)
    @given(st.integers(0, 2**32), st.integers(1, 30), st.integers(1, 30), st.integers(1, 9))
    def test_strips_equal_brute_force(self, seed, rows, columns, strip):
        rng = np.random.default_rng(seed)
        cells = rng.random((rows, columns)) < 0.3
        sizes = np.array([1, 2, 3, 7, 40])
        counter = CellBoxCounter(rows, columns, sizes)
        for start in range(0, rows, strip):
            counter.add(cells[start : start + strip])
        found = counter.counts()
        for k, size in enumerate(sizes):
            fewest = []
            for down, right in counter._shifts[counter._sides == size]:
                boxes = {((i + down) // size, (j + right) // size) for i, j in np.argwhere(cells)}
                fewest.append(len(boxes))
            assert found.grids[k][: len(fewest)].tolist() == fewest
            assert found.boxes[k] == min(fewest)

    def test_shares_are_those_of_the_cells(self):
        cells = np.zeros((4, 4), bool)
        cells[:2, :2] = True
        cells[3, 3] = True
        found = count_cells(cells, np.array([1, 2]))
        p = np.array([4, 1]) / 5
        assert found.evenness[0] == pytest.approx([5, 5])
        assert found.evenness[1] == pytest.approx([np.exp(-np.sum(p * np.log(p))), 1 / np.sum(p**2)])

    def test_absent_class_has_no_boxes(self):
        found = count_cells(np.zeros((200, 200), bool))
        assert (found.boxes == 0).all()
        assert np.isnan(found.evenness).all()
        assert np.isnan(cell_dimensions(found).found.dimension)
        assert np.isnan(cell_dimensions(found).information).all()

    def test_full_map_has_dimension_two(self):
        found = cell_dimensions(count_cells(np.ones((512, 512), bool), 2 ** np.arange(7)))
        three = found.found.dimension, found.information[0], found.correlation[0]
        assert three == pytest.approx((2, 2, 2), rel=1e-12)
        assert found.found.high == pytest.approx(2)
        assert found.information[2] == pytest.approx(2)

    def test_boxes_are_tallied_by_blocks(self):
        # 9 boxes of 3 x 3 fill a map of 9; their last rows and columns, 2, 5 and 8, lie in the first, third
        # and last quarter
        found = count_cells(np.ones((9, 9), bool), np.array([3, 9]))
        at = np.array([0, 2, 3])
        by_hand = np.zeros((4, 4), int)
        by_hand[np.ix_(at, at)] = 1
        assert found.tallies[0].reshape(4, 4).tolist() == by_hand.tolist()
        assert found.tallies[1].tolist() == [0] * 15 + [1]

    @pytest.mark.parametrize("rows", [1, 2, 7])
    def test_tallies_add_up_and_come_with_strips_of_any_height(self, rows):
        cells = np.random.default_rng(7).random((23, 31)) < 0.1
        counter = CellBoxCounter(23, 31, np.array([1, 2, 5]))
        for start in range(0, 23, rows):
            counter.add(cells[start : start + rows])
        found = counter.counts()
        assert found.tallies.sum(axis=1).tolist() == found.boxes.tolist()
        assert found.tallies.tolist() == count_cells(cells, np.array([1, 2, 5])).tallies.tolist()

    def test_rows_must_fit(self):
        with pytest.raises(ValueError, match="does not fit a map of 4 rows and 4 columns"):
            CellBoxCounter(4, 4).add(np.ones((2, 5), bool))
        with pytest.raises(ValueError, match="0 of 4 rows"):
            CellBoxCounter(4, 4).counts()
        with pytest.raises(ValueError, match="from 1 up"):
            CellBoxCounter(4, 4, np.array([0, 1]))

    def test_sizes_are_whole_and_geometric(self):
        sizes = cell_sizes(8000, 9000)
        assert sizes[0] == 4
        assert sizes[-1] == 1000
        assert np.diff(np.log(sizes[sizes > 40])).max() < 1.1 * log(10) / 12

    def test_counting_rows_equals_its_interpreted_twin(self):
        cells = np.random.default_rng(2).random((7, 9)) < 0.4
        results = []
        for call in (count_rows, count_rows.py_func):
            found, below, tallies = np.zeros((2, 3)), np.zeros(8, np.int64), np.zeros((2, 16), np.int64)
            sides, shifts = np.array([2, 4]), np.array([[1, 0], [0, 3]])
            offsets, columns = np.array([0, 5, 8]), np.zeros(10, np.int64)
            call(cells, 0, 7, sides, shifts, offsets, columns, below, found, tallies)
            results.append(np.hstack([found, tallies]))
        assert np.array_equal(*results)
        assert results[0][0, 0] > 0


SIZES = 4 * 2 ** np.arange(7)
EVEN = np.full(16, 1 / 16)


def judged(boxes, sizes=SIZES, tallies=None, **constants):
    boxes = np.asarray(boxes)
    tallies = boxes[:, None] * EVEN if tallies is None else tallies
    return judge_cells(np.asarray(sizes), boxes, tallies, CELLS._replace(**constants))


class TestVerdict:
    """Counts that follow a formula exactly; a set whose blocks are all alike."""

    def test_smooth(self):
        found = judged(6 * 2 ** np.arange(6, -1, -1))
        assert found.verdict == "smooth"
        assert found.dimension == pytest.approx(1, abs=1e-12)
        assert (found.size_min, found.size_max, found.sizes) == (4, 256, 7)

    def test_dust_below_one_is_a_power_law(self):
        found = judged(10**9 // 2 ** np.arange(0, 3.5, 0.5))  # N proportional to s^-1/2
        assert found.verdict == "power-law"
        assert found.dimension == pytest.approx(0.5, abs=1e-6)
        assert found.high < 1

    def test_power_law(self):
        found = judged(6 * 3 ** np.arange(6, -1, -1))
        assert found.verdict == "power-law"
        # log2(3), and half of what sets of known dimension lack on a ladder of so many decades
        lacking = CELLS.crowding * (log2(3) - 1) ** 2 * (2 - log2(3)) / (6 * log(2) / log(10)) ** 0.7
        assert found.dimension == pytest.approx(log2(3) + 0.5 * lacking)
        assert found.low < log2(3) < found.high

    def test_two_regimes(self):
        sizes = np.unique(np.geomspace(4, 256, 24).round().astype(int))
        found = judged(np.where(sizes < 32, 65536, 65536 * (32 / sizes) ** 2).astype(int), sizes)
        assert found.verdict == "two-regime"
        assert (found.fine, found.coarse) == pytest.approx((0, 2), abs=0.1)
        assert found.break_low <= found.break_at <= found.break_high
        assert found.break_at == pytest.approx(32, rel=0.1)
        assert (found.low, found.high) == pytest.approx((0, 2), abs=1e-12)

    def test_curved(self):
        x = np.log(SIZES / 4)
        found = judged(np.exp(14 - 1.8 * x + 0.15 * x**2).astype(int))  # from 1.8 to 0.55
        assert found.verdict == "curved"
        assert found.fine > 1.4
        assert found.coarse < 1
        assert np.isnan(found.break_at)

    def test_counts_that_jump_follow_no_line(self):
        jumps = 10**6 * 2.0 ** -np.arange(7) * np.where(np.arange(7) % 2, 1, 1.5)
        assert judged(jumps.astype(int)).verdict == "curved"

    @pytest.mark.parametrize("sizes", [[4, 6, 9, 12], [4, 12], [4, 5, 6]])
    def test_less_than_half_a_decade(self, sizes):
        found = judged(10**6 // np.array(sizes), sizes)
        assert found.verdict == "too-few-scales"
        assert np.isnan([found.dimension, found.low, found.high, found.size_min]).all()

    def test_sizes_of_few_boxes_are_left_out(self):
        found = judged([96, 48, 24, 12, 6, 5, 6])
        assert (found.sizes, found.size_max) == (5, 64)

    def test_error_is_that_of_leaving_out_block_by_block(self):
        """Against a delete-one jackknife (Efron & Stein 1981, Annals of Statistics 9; from memory)."""
        rng = np.random.default_rng(5)
        tallies = (1e5 * SIZES[:, None] ** -rng.normal(1.2, 0.1, 16)).astype(np.int64)
        only = {"few_blocks": 0.0, "ripple": 0.0, "doubt": 0.0, "crowding": 0.0, "sure_boxes": 1.0}
        found = judged(tallies.sum(axis=1), tallies=tallies, **only)
        weights = np.sqrt(np.gradient(np.log(SIZES)))
        without = [
            -np.polyfit(np.log(SIZES), np.log(np.delete(tallies, b, axis=1).sum(axis=1)), 1, w=weights)[0]
            for b in range(16)
        ]
        jackknife = np.sqrt(15 * np.var(without))
        assert found.error == pytest.approx(jackknife, rel=0.05)


def drawn(curve, side=400):
    """Return the cells that a curve's vertices lie in."""
    places = ((curve.xy - curve.xy.min(axis=0)) / np.ptp(curve.xy, axis=0).max() * (side - 2)).astype(int)
    cells = np.zeros((side, side), bool)
    cells[places[:, 1], places[:, 0]] = True
    return cells


class TestKnownMaps:
    """Maps of exactly known dimension and maps that have none, in draws that set nothing."""

    @pytest.mark.parametrize("dimension", [1.1, 1.3, 1.5, 1.7])
    def test_traced_trails(self, dimension):
        inside, words = [], []
        for seed in range(5000, 5020):
            cells = drawn(synthetic.fractional_trail(dimension, vertices=50_000, seed=seed))
            box, *weighted = cell_dimensions(count_cells(cells))
            inside.append([low <= dimension <= high for _, low, high in (box[1:4], *weighted)])
            words.append(box.verdict)
        assert (np.mean(inside, axis=0) >= 0.9).all()
        assert words.count("power-law") + words.count("smooth") >= 16
        assert "too-few-scales" not in words

    def test_percolation_clusters(self):
        """Mass of critical clusters: D = 91/48 (exact; as quoted by Ziff)."""
        words = []
        for seed in range(5000, 5010):
            labels, _ = ndimage.label(np.random.default_rng(seed).random((400, 400)) < 0.592746)
            largest = labels == np.bincount(labels.ravel())[1:].argmax() + 1
            box, *weighted = cell_dimensions(count_cells(largest))
            assert all(low <= 91 / 48 <= high for _, low, high in (box[1:4], *weighted))
            words.append(box.verdict)
        assert words.count("power-law") >= 8

    @pytest.mark.parametrize(("side", "kept"), [(3, 6), (3, 8), (2, 3)])
    def test_random_carpets(self, side, kept):
        level = {2: 9, 3: 6}[side]
        truth = log(kept) / log(side)
        for seed in range(3):
            cells = synthetic.random_carpet(side, kept, level=level, seed=seed).cells
            box, *weighted = cell_dimensions(count_cells(cells))
            assert all(low <= truth <= high for _, low, high in (box[1:4], *weighted))

    @pytest.mark.parametrize("share", [0.003, 0.001])
    def test_scattered_points_are_points_and_then_an_area(self, share):
        # boxes hold a point each at most, until share s^2 = 1
        cells = np.random.default_rng(1).random((1000, 1000)) < share
        found = cell_dimensions(count_cells(cells)).found
        assert found.verdict == "two-regime"
        assert 1 / 1.5 < found.break_at * share**0.5 < 1.5
        assert found.fine < 0.5
        assert found.coarse > 1.7

    def test_compact_shapes_are_no_power_law(self):
        y, x = np.ogrid[:1000, :1000]
        words = [
            cell_dimensions(count_cells((y - 500) ** 2 + (x - column) ** 2 < 400**2)).found.verdict
            for column in (480, 493, 500, 511, 520)
        ]
        assert sum(word in ("curved", "two-regime") for word in words) >= 4

    @pytest.mark.parametrize("angle", [0.0, 0.3, 0.7])
    def test_straight_lines_are_smooth(self, angle):
        along = np.arange(0, 390, 0.25)
        cells = np.zeros((400, 400), bool)
        cells[(np.sin(angle) * along).astype(int), (np.cos(angle) * along).astype(int)] = True
        assert cell_dimensions(count_cells(cells)).found.verdict == "smooth"

    def test_small_maps_have_too_few_scales(self):
        # 4 cells to an eighth of 96 is less than half a decade
        assert cell_dimensions(count_cells(np.ones((96, 300), bool))).found.verdict == "too-few-scales"


class TestRows:
    def test_a_missing_class(self):
        rows = box_rows(None, edge=False, cell=10.0, remark=None)
        assert {row.note for row in rows} == {"the class is absent"}
        assert np.isnan([row.estimate for row in rows]).all()
        assert "box_verdict" not in {row.quantity for row in rows}

    @pytest.mark.parametrize("edge", [False, True])
    def test_every_figure_that_was_announced(self, edge):
        found = cell_dimensions(count_cells(np.ones((200, 200), bool)))
        rows = {row.quantity: row for row in box_rows(found, edge=edge, cell=10.0, remark="uneven")}
        announced = {one.name: one for one in box_quantities(edge=edge)}
        assert set(rows) == set(announced)
        for name, row in rows.items():
            assert announced[name].interval or np.isnan(row.low)
            assert np.isfinite(row.estimate) or row.note
        prefix = "edge_" if edge else ""
        dimension = rows[f"{prefix}box_dim"]
        assert dimension.note == "power-law; a filled area, of dimension 2, is not ruled out; uneven"
        assert rows[f"{prefix}box_verdict"].note == "power-law"
        # 4 and 200 / 8 cells of 10 m
        assert [rows[f"{prefix}box_size_{end}"].estimate for end in ("min", "max")] == [40, 250]
        assert rows[f"{prefix}box_break"].note == "no break was found"

    def test_too_few_scales_leave_no_figure(self):
        found = cell_dimensions(count_cells(np.ones((50, 50), bool)))
        rows = box_rows(found, edge=False, cell=10.0, remark="uneven")
        assert np.isnan([row.estimate for row in rows]).all()
        assert {row.note for row in rows} == {"too-few-scales"}

    def test_a_break_is_in_metres(self):
        points = np.random.default_rng(3).random((600, 600)) < 0.004
        found = cell_dimensions(count_cells(points))
        rows = {row.quantity: row for row in box_rows(found, edge=False, cell=30.0, remark=None)}
        assert rows["box_break"].estimate == 30 * found.found.break_at
        assert rows["box_break"].low <= rows["box_break"].estimate <= rows["box_break"].high
        assert rows["box_fine_dim"].estimate < rows["box_coarse_dim"].estimate

    def test_columns_of_zones(self):
        columns = zone_columns(["Reed"], box_quantities(edge=True), "broken", None)
        found = {one.column.name: one.column.kind for one in columns}
        assert found["reed_edge_box_dim_low"] == found["reed_edge_box_break_high_m"] == "number"
        assert found["reed_edge_box_verdict"] == "text"
        assert found["reed_edge_box_size_min_m"] == "number"
