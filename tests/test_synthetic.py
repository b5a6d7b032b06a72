"""Curves of known dimension: their truth against formulas, published values and independent geometry."""

from itertools import product
from math import cos, log, log2, pi, sqrt

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import comb, j0

from geofractal import synthetic
from geofractal.kernels.random_walks import erase_loops, explore_hexagons
from geofractal.synthetic.koch import koch_generator


def steps(curve):
    return np.hypot(*np.diff(curve.xy, axis=0).T)


class TestSimilarityDimension:
    def test_equal_ratios_have_the_closed_form(self):
        # Moran 1946: n copies of ratio r have ln n / ln(1/r)
        assert synthetic.similarity_dimension([0.25] * 8) == pytest.approx(log(8) / log(4), rel=1e-14)

    def test_a_half_and_a_quarter_give_the_golden_ratio(self):
        # x + x^2 = 1 with x = 2^-D
        assert synthetic.similarity_dimension([0.5, 0.25]) == pytest.approx(
            log2((1 + sqrt(5)) / 2), rel=1e-12
        )

    def test_one_copy_is_a_point(self):
        assert synthetic.similarity_dimension([0.3]) == 0

    def test_it_may_exceed_the_plane(self):
        assert synthetic.similarity_dimension([0.5] * 5) == pytest.approx(log2(5))

    def test_half_the_expected_copies_lower_it(self):
        # Mauldin & Williams 1986: each quarter of a square kept with chance 1/2, D = 2 + log2(1/2)
        assert synthetic.similarity_dimension([0.5] * 4, weights=[0.5] * 4) == pytest.approx(1)

    @given(st.lists(st.floats(0.01, 0.95), min_size=2, max_size=8))
    def test_it_solves_its_equation(self, ratios):
        d = synthetic.similarity_dimension(ratios)
        assert sum(r**d for r in ratios) == pytest.approx(1, rel=1e-9)

    @pytest.mark.parametrize(
        ("ratios", "weights", "message"),
        [
            ([], None, "no ratios"),
            ([0.5, 1.0], None, "between 0 and 1"),
            ([0.5, 0.0], None, "between 0 and 1"),
            ([0.5, float("nan")], None, "between 0 and 1"),
            ([0.5], [0.5], "at least 1 copy"),
            ([0.5, 0.5], [3, -1], "none negative"),
            ([0.5, 0.5], [1], "one per ratio"),
        ],
    )
    def test_it_refuses_what_has_no_dimension(self, ratios, weights, message):
        with pytest.raises(ValueError, match=message):
            synthetic.similarity_dimension(ratios, weights)


class TestExactDimensions:
    @pytest.mark.parametrize(
        ("curve", "dimension"),
        [
            (synthetic.koch(level=3), 1.2618595071),  # ln 4 / ln 3
            (synthetic.quadratic_koch(1, level=2), 1.4649735),  # ln 5 / ln 3
            (synthetic.quadratic_koch(2, level=2), 1.5),
            (synthetic.minkowski_island(level=2), 1.3652124),  # ln 3 / ln sqrt(5)
            (synthetic.gosper_island(level=2), 1.1291500681),  # log_7 9, a mathematicians' mailing list
            (synthetic.dragon_boundary(level=2), 1.5236270862),  # encyclopedia of integer sequences, A272031
            (synthetic.gasket(level=2), 1.5849625007),  # ln 3 / ln 2
        ],
    )
    def test_published_values(self, curve, dimension):
        assert curve.dimension == pytest.approx(dimension, abs=5e-8)

    @pytest.mark.parametrize("degrees", [30, 45, 54, 60, 70, 80])
    def test_koch_of_a_base_angle(self, degrees):
        # ln 4 / ln(2 + 2 cos a); 54 degrees: D = 1.2, Bigerelle et al. 2025, Fractal Fract. 9:483
        d = log(4) / log(2 + 2 * cos(degrees * pi / 180))
        tooth = np.diff(koch_generator(d))
        assert np.degrees(np.angle(tooth[1])) == pytest.approx(degrees, abs=1e-9)
        assert np.abs(tooth) == pytest.approx(4 ** (-1 / d))
        assert synthetic.koch(d, level=1).dimension == pytest.approx(d, rel=1e-12)

    def test_carpets(self):
        assert synthetic.carpet(level=2).dimension == pytest.approx(log(8) / log(3))
        assert synthetic.carpet(synthetic.GASKET, level=2).dimension == pytest.approx(log2(3))
        assert synthetic.random_carpet(3, 5, level=2, seed=0).dimension == pytest.approx(log(5) / log(3))


class TestGrownCurves:
    @pytest.mark.parametrize("dimension", [1.0, 1.05, 1.26, 1.5, 1.9])
    def test_pieces_are_equal_and_as_many_as_stated(self, dimension):
        for curve in (synthetic.koch(dimension, level=4), synthetic.random_koch(dimension, level=4, seed=3)):
            assert len(curve) == 4**4 + 1
            assert steps(curve) == pytest.approx(4 ** (-4 / dimension), rel=1e-9)
            assert curve.xy[[0, -1]] == pytest.approx(np.array([[0, 0], [1, 0]]), abs=1e-12)
        assert steps(synthetic.random_midpoint(dimension, level=6, seed=3)) == pytest.approx(
            2 ** (-6 / dimension)
        )

    def test_sides_are_a_fair_coin(self):
        up = [synthetic.random_koch(1.3, level=1, seed=s).xy[2, 1] > 0 for s in range(400)]
        assert abs(np.mean(up) - 0.5) < 4 * 0.5 / sqrt(400)

    @pytest.mark.parametrize(
        ("curve", "area"),
        [
            (synthetic.koch(level=0, island=True), sqrt(3) / 4),
            # each level adds teeth: A = A0 (8 - 3 (4/9)^n) / 5 (von Koch 1904)
            (synthetic.koch(level=4, island=True), sqrt(3) / 4 * (8 - 3 * (4 / 9) ** 4) / 5),
            (synthetic.quadratic_koch(2, level=3, island=True), 1),
            (synthetic.minkowski_island(level=5), 1),
            (synthetic.gosper_island(level=5), 1.5 * sqrt(3)),
            (synthetic.dragon_boundary(level=9), 1),
        ],
    )
    def test_islands_are_rings_of_known_area(self, curve, area):
        assert curve.closed
        assert np.array_equal(curve.xy[0], curve.xy[-1])
        assert shapely.Polygon(curve.xy).area == pytest.approx(area, rel=1e-9)

    def test_simple_where_it_is_said(self):
        for curve in (
            synthetic.koch(1.6, level=5),
            synthetic.random_koch(log(4) / log(3) - 1e-9, level=5, seed=1),
            synthetic.gosper_island(level=4),
            synthetic.minkowski_island(level=4),
            synthetic.gasket(level=5),
        ):
            assert shapely.LineString(curve.xy).is_simple

    @pytest.mark.parametrize("level", range(1, 9))
    def test_dragon_is_the_outline_of_its_digit_tile(self, level):
        # brute force: unit squares at all sums of d_k (1 + i)^k, d_k in {0, 1}
        tiles = [
            sum(d * (1 + 1j) ** k for k, d in enumerate(digits)) for digits in product((0, 1), repeat=level)
        ]
        tile = shapely.union_all([shapely.box(p.real, p.imag, p.real + 1, p.imag + 1) for p in tiles])
        assert len(synthetic.dragon_boundary(level=level)) - 1 == pytest.approx(tile.length)

    def test_dragon_grows_by_its_root(self):
        counts = [len(synthetic.dragon_boundary(level=k)) - 1 for k in (17, 18)]
        x = counts[1] / counts[0]
        assert x**3 == pytest.approx(x**2 + 2, rel=1e-3)

    @pytest.mark.parametrize("dimension", [1.1, 1.4, 1.8])
    def test_mixed_ratios_keep_their_mean_content(self, dimension):
        # Mauldin & Williams 1986: the sum of piece^D is a martingale of mean 1
        contents = []
        for seed in range(300):
            curve = synthetic.random_ratio_koch(dimension, vertices=400, seed=seed)
            contents.append(np.sum(steps(curve) ** dimension))
        assert abs(np.mean(contents) - 1) < 4 * np.std(contents) / sqrt(300)
        assert np.std(contents) > 0
        assert curve.dimension == pytest.approx(dimension)

    def test_two_regimes_state_their_break(self):
        curve = synthetic.two_regimes(1.0, 1.3, fine_level=2, coarse_level=3, seed=0)
        assert curve.dimension is None
        assert curve.scales is None
        assert curve.breaks == pytest.approx((4 ** (-3 / 1.3),))
        turns = np.diff(np.unwrap(np.arctan2(*np.diff(curve.xy, axis=0).T[::-1])))
        assert np.count_nonzero(np.abs(turns) > 1e-6) == 4**3 - 1

    @pytest.mark.parametrize(
        ("call", "message"),
        [
            (lambda: synthetic.koch(2.0, level=1), "1 <= D < 2"),
            (lambda: synthetic.koch(level=-1), "0 or more"),
            (lambda: synthetic.random_midpoint(0.9, level=1, seed=0), "1 <= D < 2"),
            (lambda: synthetic.random_ratio_koch(1.0, vertices=9, seed=0), "1 < D < 2"),
            (lambda: synthetic.quadratic_koch(3, level=1), "kind 1 or 2"),
            (lambda: synthetic.dragon_boundary(level=-1), "0 or more"),
            (lambda: synthetic.fractional_trail(2.1, vertices=9, seed=0), "1 <= D <= 2"),
            (lambda: synthetic.fractional_trail(1.5, vertices=2, seed=0), "at least 3"),
            (lambda: synthetic.loop_erased_walk(1, seed=0), "at least 2"),
            (lambda: synthetic.percolation_border(vertices=2, seed=0), "at least 3"),
            (lambda: synthetic.carpet(np.zeros((2, 2), bool), level=1), "without a True cell"),
            (lambda: synthetic.carpet(np.ones((2, 3), bool), level=1), "a square"),
            (lambda: synthetic.carpet(level=-1), "0 or more"),
            (lambda: synthetic.random_carpet(2, 5, level=1, seed=0), "between 1 and all"),
            (lambda: synthetic.line(vertices=1), "at least 2"),
            (lambda: synthetic.arc(7.0, vertices=9), "at most 2 pi"),
            (lambda: synthetic.meander(1.0, bends=0), "at least 1 bend"),
            (lambda: synthetic.line(vertices=9).stretch(10, seed=0), "the curve has 9"),
            (lambda: synthetic.polygonised(synthetic.line(vertices=9), 0.1), "only a ring"),
            (lambda: synthetic.polygonised(synthetic.circle(vertices=9), 9.0), "no cell centre"),
            (lambda: synthetic.snapped(synthetic.line(vertices=9), 9.0), "nothing is left"),
        ],
    )
    def test_what_cannot_be_drawn_is_refused(self, call, message):
        with pytest.raises(ValueError, match=message):
            call()


class TestTrails:
    @pytest.mark.parametrize("dimension", [1.1, 1.5, 1.9])
    def test_displacement_grows_with_the_hurst_exponent(self, dimension):
        # Mandelbrot & Van Ness 1968: E|X_t|^2 = 2 t^(2H) with two coordinates of unit step, H = 1/D
        ends = np.array([synthetic.fractional_trail(dimension, vertices=65, seed=s).xy for s in range(2000)])
        for t in (1, 8, 64):
            squares = (ends[:, t] ** 2).sum(axis=1)
            assert abs(squares.mean() - 2 * t ** (2 / dimension)) < 4 * squares.std() / sqrt(2000)

    def test_coordinates_are_independent(self):
        ends = np.array([synthetic.fractional_trail(1.3, vertices=17, seed=s).xy[16] for s in range(2000)])
        assert abs(np.corrcoef(ends.T)[0, 1]) < 4 / sqrt(2000)

    def test_dimension_one_is_straight(self):
        xy = synthetic.fractional_trail(1.0, vertices=100, seed=1).xy
        assert xy == pytest.approx(np.outer(np.arange(100), xy[1]), rel=1e-6)

    @pytest.mark.parametrize("seed", range(3))
    def test_loop_erased_walk_meets_itself_nowhere(self, seed):
        curve = synthetic.loop_erased_walk(60, seed=seed)
        assert steps(curve) == pytest.approx(1)
        assert len(np.unique(curve.xy, axis=0)) == len(curve)
        assert np.abs(curve.xy[-1]).max() == 60
        assert np.abs(curve.xy[:-1]).max() < 60

    def test_loop_erasure_equals_its_definition(self):
        walk = np.random.default_rng(5).integers(0, 4, 300, dtype=np.uint8)
        path, here = [(50, 50)], (50, 50)
        for step in walk:
            here = (here[0] + (0, 1, 0, -1)[step], here[1] + (1, 0, -1, 0)[step])
            path = path[: path.index(here) + 1] if here in path else [*path, here]
        for call in (erase_loops, erase_loops.py_func):
            place, cells = np.zeros((101, 101), np.int32), np.zeros(101**2, np.int64)
            place[50, 50], cells[0] = 1, 50 * 101 + 50
            length, arrived = call(walk, place, cells, 1)
            assert not arrived
            assert [(int(c) // 101, int(c) % 101) for c in cells[:length]] == path

    def test_percolation_border_meets_itself_nowhere(self):
        curve = synthetic.percolation_border(vertices=20_000, seed=4)
        assert steps(curve) == pytest.approx(1 / sqrt(3))
        assert len(np.unique(np.round(curve.xy * 6), axis=0)) == len(curve)

    def test_percolation_border_turns_either_way_by_a_fair_coin(self):
        headings = np.diff(synthetic.percolation_border(vertices=100_000, seed=4).xy, axis=0)
        left = headings[:-1, 0] * headings[1:, 1] - headings[:-1, 1] * headings[1:, 0] > 0
        assert abs(left.mean() - 0.5) < 0.02

    def test_percolation_kernel_equals_its_interpreted_twin(self):
        fast, slow = np.empty((500, 2)), np.empty((500, 2))
        explore_hexagons(np.uint64(7), fast)
        with np.errstate(over="ignore"):
            explore_hexagons.py_func(np.uint64(7), slow)
        assert np.array_equal(fast, slow)

    @pytest.mark.parametrize(
        "draw",
        [
            lambda seed: synthetic.random_koch(1.4, level=4, seed=seed),
            lambda seed: synthetic.random_ratio_koch(1.4, vertices=300, seed=seed),
            lambda seed: synthetic.fractional_trail(1.4, vertices=300, seed=seed),
            lambda seed: synthetic.loop_erased_walk(30, seed=seed),
            lambda seed: synthetic.percolation_border(vertices=300, seed=seed),
            lambda seed: synthetic.two_regimes(1.1, 1.4, fine_level=2, coarse_level=2, seed=seed),
        ],
    )
    def test_the_seed_decides(self, draw):
        assert np.array_equal(draw(1).xy, draw(1).xy)
        assert not np.array_equal(draw(1).xy, draw(2).xy)


class TestSmoothCurves:
    @pytest.mark.parametrize("degrees", [40, 70, 90, 110])
    def test_meander_has_the_sinuosity_of_its_amplitude(self, degrees):
        # Langbein & Leopold 1966: sinuosity 1 / J0(w), e.g. 2.11864 at 90 degrees
        w = degrees * pi / 180
        curve = synthetic.meander(w, bends=40)
        assert steps(curve).sum() / np.hypot(*(curve.xy[-1] - curve.xy[0])) == pytest.approx(
            1 / j0(w), rel=1e-4
        )
        assert curve.breaks == pytest.approx((j0(w) / 2,), rel=1e-9)

    def test_circle_and_arc(self):
        assert shapely.Polygon(synthetic.circle(vertices=1000).xy).area == pytest.approx(pi, rel=1e-4)
        assert steps(synthetic.arc(pi, vertices=1000)).sum() == pytest.approx(pi, rel=1e-5)

    def test_line(self):
        curve = synthetic.line(vertices=11, angle=pi / 6)
        assert curve.xy[-1] == pytest.approx([sqrt(3) / 2, 1 / 2])
        assert steps(curve) == pytest.approx(0.1)


class TestCells:
    def test_gasket_is_the_triangle_of_odd_binomials(self):
        # Lucas 1878: C(i + j, i) is odd where i and j share no binary digit
        cells = synthetic.carpet(synthetic.GASKET, level=4).cells
        odd = np.array([[comb(i + j, i, exact=True) % 2 for j in range(16)] for i in range(16)], bool)
        assert np.array_equal(cells[::-1], odd)

    def test_carpet_keeps_eight_of_nine(self):
        cells = synthetic.carpet(level=3).cells
        assert cells.shape == (27, 27)
        assert cells.sum() == 8**3

    def test_random_carpet_keeps_the_stated_number_in_every_block(self):
        cells = synthetic.random_carpet(3, 4, level=3, seed=2).cells
        blocks = cells.reshape(9, 3, 9, 3).sum(axis=(1, 3))
        assert set(np.unique(blocks)) == {0, 4}
        assert cells.sum() == 4**3


class TestDegradation:
    shore = synthetic.random_koch(1.25, level=6, seed=8, island=True)

    def test_generalisation_stays_within_its_tolerance(self):
        thinned = synthetic.generalised(self.shore, 0.01)
        assert len(thinned) < len(self.shore) / 4
        away = shapely.hausdorff_distance(shapely.LineString(thinned.xy), shapely.LineString(self.shore.xy))
        assert 0 < away <= 0.01
        assert thinned.closed
        assert thinned.scales == (0.01, self.shore.scales[1])

    def test_snapping_leaves_grid_points(self):
        xy = synthetic.snapped(self.shore, 1 / 64).xy
        assert np.array_equal(xy * 64, np.round(xy * 64))
        assert steps(synthetic.snapped(self.shore, 1 / 64)).min() > 0

    @pytest.mark.parametrize("diagonal", [True, False])
    def test_tracing_steps_from_cell_to_cell(self, diagonal):
        cell = 1 / 64
        curve = synthetic.traced(self.shore, cell, diagonal=diagonal)
        lengths = {round(float(s) / cell, 9) for s in steps(curve)}
        assert lengths == ({1.0, round(sqrt(2), 9)} if diagonal else {1.0})
        away = shapely.hausdorff_distance(shapely.LineString(curve.xy), shapely.LineString(self.shore.xy))
        assert away <= (1 if diagonal else 1.6) * cell

    def test_tracing_finds_every_cell_along_a_long_edge(self):
        curve = synthetic.traced(synthetic.line(vertices=2), 0.01)
        assert np.diff(curve.xy[:, 0]) == pytest.approx(0.01)

    def test_polygonised_outline_runs_along_cell_edges(self):
        curve = synthetic.polygonised(self.shore, 1 / 32)
        moves = np.diff(curve.xy, axis=0)
        assert (np.abs(moves).min(axis=1) < 1e-12).all()
        assert shapely.Polygon(curve.xy).area == pytest.approx(shapely.Polygon(self.shore.xy).area, rel=0.1)

    def test_scaling_and_stretches_keep_the_truth(self):
        big = self.shore.scaled(50_000)
        assert big.dimension == self.shore.dimension
        assert big.scales == pytest.approx(tuple(50_000 * s for s in self.shore.scales))
        part = big.stretch(500, seed=1)
        assert len(part) == 500
        assert not part.closed
        assert part.scales[1] == pytest.approx(np.ptp(part.xy, axis=0).max())
