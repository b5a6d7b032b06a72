"""Ladders start above what the mapping resolved, and fits are plain least squares."""

import math
from itertools import product

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Transformer

from geofractal import synthetic
from geofractal.calibration import lines_of
from geofractal.kernels import ladder_fit, line_scales
from geofractal.measure import Lines
from geofractal.scaling.fit import fit_power_law, local_dimensions
from geofractal.scaling.ladder import FIRST_RUNG_CELLS, Ladders, divider_ladders
from geofractal.synthetic import Curve


def lines(*parts, source=None, closed=False):
    """One feature made of parts."""
    xy = np.ascontiguousarray(np.concatenate(parts), dtype=float)
    counts = [len(part) for part in parts]
    return Lines(
        rows=np.zeros(1, np.int64),
        xy=xy,
        part_offsets=np.concatenate(([0], np.cumsum(counts))),
        feature_offsets=np.array([0, len(parts)]),
        closed=np.full(len(parts), closed),
        source_vertex=np.ones(len(xy), bool) if source is None else np.asarray(source),
        plane=np.zeros(1, np.uint8),
        distortion=np.zeros(1),
        radius=np.full(1, np.inf),
    )


def scales(feature):
    return line_scales.line_scales(
        feature.xy, feature.source_vertex, feature.part_offsets, feature.feature_offsets
    )[0]


def turned(xy, angle):
    c, s = math.cos(angle), math.sin(angle)
    return xy @ np.array([[c, s], [-s, c]])


def straight(count, step=1.0):
    return np.column_stack([np.arange(count) * step, np.zeros(count)])


def test_first_ruler_is_three_median_segments_and_last_a_third_of_the_extent():
    ladder = divider_ladders(lines(straight(1001, 2.0)))
    assert ladder.rulers[0] == pytest.approx(3 * 2.0)
    assert ladder.rulers[-1] == pytest.approx(2000 / 3)


def test_rulers_are_geometric_and_at_least_eight_a_decade():
    ladder = divider_ladders(lines(straight(1001)))
    ratios = ladder.rulers[1:] / ladder.rulers[:-1]
    assert ratios == pytest.approx(np.full(len(ratios), ratios[0]))
    assert ratios[0] <= 10 ** (1 / 8)


def test_densified_vertices_do_not_count_as_detail():
    feature = lines(straight(1001), source=np.arange(1001) % 10 == 0)
    assert divider_ladders(feature).rulers[0] == pytest.approx(3 * 10)


def test_a_line_drawn_half_in_long_segments_starts_above_them():
    """60 segments of 1 and 10 of 10: half of the length, 160, is reached among the long ones."""
    x = np.concatenate(([0], np.cumsum([1.0] * 60 + [10.0] * 10)))
    ladder = divider_ladders(lines(np.column_stack([x, 0 * x])))
    assert ladder.rulers[0] == pytest.approx(2 * 10)


def test_stated_ladder_is_honoured():
    ladder = divider_ladders(lines(straight(1001)), ruler_min_m=1, ruler_max_m=100, rungs=5)
    assert ladder.rulers == pytest.approx(10 ** np.array([0, 0.5, 1, 1.5, 2]))


@pytest.mark.parametrize("xy", [np.zeros((3, 2)), straight(2), straight(4)])
def test_features_without_usable_scales_have_no_rulers(xy):
    ladder = divider_ladders(lines(xy))
    assert ladder.offsets.tolist() == [0, 0]
    assert ladder.rulers.size == 0


def test_extent_of_a_straight_line_is_its_length_and_of_a_circle_sqrt_12_radii():
    angle = np.linspace(0, 2 * math.pi, 2001)
    circle = np.column_stack([np.cos(angle), np.sin(angle)])
    assert scales(lines(straight(11)))[1] == pytest.approx(10)
    assert scales(lines(circle))[1] == pytest.approx(math.sqrt(12), rel=1e-5)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.floats(0, 6.3), st.floats(-1e6, 1e6), st.booleans())
def test_shift_turn_and_reversal_leave_the_ladder(seed, angle, shift, backwards):
    xy = np.random.default_rng(seed).normal(size=(300, 2)).cumsum(axis=0)
    moved = turned(xy, angle)[:: -1 if backwards else 1] + shift
    one, other = divider_ladders(lines(xy)), divider_ladders(lines(moved))
    assert other.rulers == pytest.approx(one.rulers, rel=1e-6)


@pytest.mark.parametrize("aspect", [1.0, 0.6], ids=["square cells", "flat cells"])
@pytest.mark.parametrize("diagonal", [True, False], ids=["8 ways", "4 ways"])
@pytest.mark.parametrize("dimension", [1.05, 1.3, 1.6])
def test_lines_traced_from_cells_are_found_out_however_they_are_turned(dimension, diagonal, aspect):
    trail = synthetic.fractional_trail(dimension, vertices=20_000, seed=1)
    stretched = Curve(trail.xy * [1, 1 / aspect], False, (), "")
    traced = synthetic.traced(stretched, 4.0, diagonal=diagonal).xy * [1, aspect]
    merged = shapely.get_coordinates(shapely.simplify(shapely.LineString(traced), 1e-9))
    for angle, xy in product((0.0, 0.3, 1.9), (traced, merged)):
        feature = lines(turned(xy, angle))
        assert scales(feature)[3] == pytest.approx(4.0, rel=0.01)
        assert divider_ladders(feature).rulers[0] >= FIRST_RUNG_CELLS * 4.0 * 0.99


@pytest.mark.parametrize(
    "curve",
    [
        synthetic.line(vertices=500, angle=0.3),
        *(synthetic.koch(d, level=5) for d in (1.05, math.log(4) / math.log(3), 1.5, 1.9)),
        *(synthetic.random_koch(d, level=5, seed=1) for d in (1.05, 1.4, 1.5, 1.75, 1.9)),
        *(synthetic.random_midpoint(d, level=10, seed=1) for d in (1.05, 1.5, 1.9)),
        synthetic.two_regimes(1.0, 1.5, fine_level=3, coarse_level=3, seed=1),
        synthetic.gosper_island(level=5),
        synthetic.gasket(level=7),
        synthetic.percolation_border(vertices=2000, seed=1),
        synthetic.meander(1.0, bends=20),
        synthetic.fractional_trail(1.3, vertices=2000, seed=1),
        synthetic.generalised(synthetic.fractional_trail(1.3, vertices=20_000, seed=1), 5.0),
    ],
    ids=lambda curve: curve.source[:20],
)
def test_other_lines_are_no_staircases(curve):
    for angle in (0.0, 0.4):
        assert scales(lines(turned(curve.xy, angle)))[3] == 0


@pytest.mark.parametrize("coarse", [0.0, 0.5, 0.75], ids=lambda tolerance: f"simplified by {tolerance}")
@pytest.mark.parametrize(
    "ring",
    [
        synthetic.circle(vertices=400).scaled(300),
        synthetic.random_koch(1.1, level=5, seed=1, island=True).scaled(500),
    ],
    ids=["circle", "Koch island"],
)
def test_an_outline_along_cell_edges_is_a_staircase_without_its_collinear_vertices(ring, coarse):
    outline = synthetic.generalised(synthetic.polygonised(ring, 1.0), coarse).xy
    assert scales(lines(turned(outline, 0.7), closed=True))[3] == pytest.approx(1, rel=0.03)


@pytest.mark.parametrize("solid", [False, True], ids=["on a plane", "on the ellipsoid"])
def test_cells_of_geographic_rasters_are_found_after_projection(solid):
    """Cells of 1/120 degree, 90 degrees of a meridian being 10,002 km: at 60 degrees half as wide as high."""
    traced = synthetic.traced(synthetic.fractional_trail(1.2, vertices=3000, seed=1), 4.0).xy / 4 / 120
    lonlat = traced - traced.mean(axis=0) + [20, 60]
    target = "EPSG:4978" if solid else "+proj=aeqd +lat_0=60 +lon_0=20 +ellps=WGS84"
    project = Transformer.from_crs("EPSG:4979" if solid else "EPSG:4326", target, always_xy=True)
    xyz = project.transform(*lonlat.T, 0 * lonlat[:, 0])[: 3 if solid else 2]
    assert scales(lines(np.column_stack(xyz)))[3] == pytest.approx(1e7 / 90 / 120, rel=0.03)


@pytest.mark.parametrize(
    ("curve", "step"),
    [
        (synthetic.quadratic_koch(2, level=4), 4.0**-4),
        (synthetic.minkowski_island(level=5), 5.0**-2.5),
        (synthetic.dragon_boundary(level=10), 2.0**-5),
        (synthetic.loop_erased_walk(200, seed=1), 1.0),
        (synthetic.snapped(synthetic.fractional_trail(1.2, vertices=3000, seed=1), 1.5), 1.5),
    ],
    ids=lambda value: value.source[:20] if isinstance(value, Curve) else "",
)
def test_curves_on_a_square_lattice_lie_on_cells_of_its_step(curve, step):
    """No line tells whether it was drawn along cells or was made of such steps itself."""
    assert scales(lines(turned(curve.xy, 0.4)))[3] == pytest.approx(step)


def test_fit_is_least_squares_with_gaps_left_out():
    """Against numpy.polyfit."""
    rng = np.random.default_rng(0)
    rulers = np.geomspace(1, 50, 12)
    values = 9 * rulers**-0.3 * rng.lognormal(0, 0.1, 12)
    values[[2, 7]] = np.nan
    fit = fit_power_law(Ladders(np.array([0, 12, 13, 13]), np.append(rulers, 1.0)), np.append(values, 5.0))
    good = np.isfinite(values)
    slope, intercept = np.polyfit(np.log(rulers[good]), np.log(values[good]), 1)
    r2 = np.corrcoef(np.log(rulers[good]), np.log(values[good]))[0, 1] ** 2
    assert [fit.slope[0], fit.intercept[0], fit.r2[0]] == pytest.approx([slope, intercept, r2])
    assert fit.rungs.tolist() == [10, 1, 0]
    assert np.isnan(fit.slope[1:]).all()


def test_local_dimension_tells_where_a_hinge_is():
    """L = r^-0.1 up to 10 and steeper by r^-0.3 above: 1.1 and 1.4 away from the hinge."""
    rulers = np.geomspace(1, 100, 25)
    lengths = rulers**-0.1 * np.maximum(rulers / 10, 1) ** -0.3
    lengths[5] = np.nan
    found = local_dimensions(Ladders(np.array([0, 25]), rulers), lengths, np.zeros(25)).dimension
    assert found[:5] == pytest.approx(np.full(5, 1.1))
    assert np.isnan(found[5])
    assert found[15:] == pytest.approx(np.full(10, 1.4))
    two = local_dimensions(Ladders(np.array([0, 2]), rulers[:2]), lengths[:2], np.zeros(2))
    assert np.isnan(two).all()


def test_local_dimension_has_the_error_of_its_line_or_of_its_rungs_whichever_is_more():
    """Scatter as numpy.polyfit has it; where there is none, noise s gives s / sqrt(sum (x - mean)^2)."""
    rng = np.random.default_rng(4)
    rulers = np.geomspace(1, 30, 9)
    x = np.log(rulers)
    lengths = rulers**-0.2 * rng.lognormal(0, 0.01, 9)
    ladders = Ladders(np.array([0, 9]), rulers)
    found = local_dimensions(ladders, lengths, np.full(9, np.nan))
    slope, covariance = np.polyfit(x[2:7], np.log(lengths[2:7]), 1, cov=True)
    assert [found.dimension[4], found.spread[4]] == pytest.approx([1 - slope[0], np.sqrt(covariance[0, 0])])
    noisy = local_dimensions(ladders, rulers**-0.2, 0.03 * rulers**-0.2)
    assert noisy.spread[4] == pytest.approx(0.03 / np.sqrt(((x[2:7] - x[4]) ** 2).sum()))


def test_compiled_kernels_agree_with_their_interpreted_twins(monkeypatch):
    rng = np.random.default_rng(3)
    features = [lines_of([synthetic.traced(synthetic.fractional_trail(1.3, vertices=400, seed=1), 2.0)])]
    features += [lines(rng.normal(size=(n, 2)).cumsum(axis=0)) for n in (2, 40, 400)]
    features += [lines(rng.normal(size=(50, 3)), rng.normal(size=(9, 3)))]
    features += [lines(synthetic.koch(level=3).xy, source=np.arange(65) % 2 == 0)]
    features += [lines(synthetic.dragon_boundary(level=6).xy)]
    compiled = [scales(feature) for feature in features]
    offsets, x, y = np.array([0, 5, 5, 9]), rng.normal(size=9), rng.normal(size=9)
    fitted = ladder_fit.fit_lines(offsets, x, y)
    assert ladder_fit.fit_lines.py_func(offsets, x, y) == pytest.approx(fitted, nan_ok=True)
    noise = np.where(rng.random(9) < 0.3, np.nan, 0.5)
    slopes = ladder_fit.local_slopes(offsets, x, y, noise, 1)
    assert ladder_fit.local_slopes.py_func(offsets, x, y, noise, 1) == pytest.approx(slopes, nan_ok=True)
    for name, function in list(vars(line_scales).items()):
        if hasattr(function, "py_func"):
            monkeypatch.setattr(line_scales, name, function.py_func)
    for feature, expected in zip(features, compiled, strict=True):
        assert scales(feature) == pytest.approx(expected, nan_ok=True)
