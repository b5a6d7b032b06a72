"""Amount, border and mesh size of classes and groups, by zone: by hand, by brute force, by strips."""

import math

import geopandas
import numpy as np
import pandas as pd
import pytest
import shapely
from class_maps import components
from hypothesis import given, settings
from hypothesis import strategies as st

from geofractal.cover_api import fragmentation
from geofractal.errors import ConfigError
from geofractal.estimators.fragmentation import FragmentationOptions
from geofractal.estimators.fragmentation_quantities import quantities_of
from geofractal.landcover import patch_totals
from geofractal.measure import FIGURE_COLUMNS, GROUPS
from geofractal.reader.raster import RasterOptions

PLANE = 'LOCAL_CS["plane",UNIT["metre",1]]'
KM = (1000.0, 0.0, 0.0, 0.0, -1000.0, 0.0)
"""Cells of one square kilometre, so that areas in km2 are numbers of cells."""
CUT, ACROSS = "cut at the border", "across the border"
CHANGES, ALL_EDGES = "class changes", "with zone and map borders"


def measured(codes, *, nodata=0, rows=None, **given):
    return fragmentation(
        (np.asarray(codes, np.uint8), KM, PLANE),
        reading=RasterOptions(nodata=(nodata,), strip_rows=rows),
        **given,
    )


def figure(table, quantity, cover="1", unit="whole map", rule=None, column="estimate"):
    """Return the one value of a figure."""
    rows = table[
        (table["quantity"] == quantity) & (table["cover"] == cover) & (table["reporting_unit"] == str(unit))
    ]
    rows = rows if rule is None else rows[rows["border_rule"] == rule]
    assert len(rows) == 1, rows
    return rows[column].iloc[0]


def cells(left, top, right, bottom):
    """Return a box in columns and rows of the map."""
    return shapely.box(left * 1000, -bottom * 1000, right * 1000, -top * 1000)


def of_sizes(sizes, total):
    """Return a one-row map of class 2 with patches of class 1 of some sizes."""
    row = [code for size in sizes for code in [1] * size + [2]]
    return [(row + [2] * total)[:total]]


class TestAmountAndBorder:
    MAP = ((1, 1, 2, 2), (1, 2, 2, 1), (0, 2, 1, 1))

    def test_amount(self):
        found = measured(self.MAP, neighbours=4)
        sizes = [3, 3]
        assert figure(found, "area") == pytest.approx(sum(sizes))
        assert figure(found, "share") == pytest.approx(100 * 6 / 11)
        assert figure(found, "patches") == 2
        assert figure(found, "patch_density") == pytest.approx(2 / 11)
        assert figure(found, "mean_patch") == pytest.approx(6 / 2)
        assert figure(found, "median_patch") == pytest.approx(3)
        assert figure(found, "weighted_mean_patch") == pytest.approx((3**2 + 3**2) / 6)
        assert figure(found, "largest_patch") == pytest.approx(3)
        assert figure(found, "area", "all covers") == pytest.approx(11)
        assert figure(found, "area_not_covered", "all covers") == pytest.approx(1)

    def test_edges_between_classes_and_with_the_maps_border(self):
        """Class changes: across 1 + 2 + 1 in the rows, down 1 + 1 + 1 between them."""
        found = measured(self.MAP)
        changes = (1 + 2 + 1) + (1 + 1 + 1)
        assert figure(found, "edge_length", rule=CHANGES) == pytest.approx(changes)
        assert figure(found, "edge_length", "2", rule=CHANGES) == pytest.approx(changes)
        assert figure(found, "edge_length", "all covers", rule=CHANGES) == pytest.approx(changes)
        border = 2 + 2 + 1 + 2 + 2  # top, left, below by nodata, right, bottom of class 1
        assert figure(found, "edge_length", rule=ALL_EDGES) == pytest.approx(changes + border)
        assert figure(found, "edge_density", rule=CHANGES) == pytest.approx(changes / 11)

    def test_an_edge_between_zones_is_half_to_each(self):
        """The border of the zones runs along two class changes and one edge within class 2."""
        codes = [[1, 2], [1, 2], [2, 2]]
        found = measured(codes, zones=[cells(0, 0, 1, 3), cells(1, 0, 2, 3)])
        for cover in ("1", "2"):
            assert figure(found, "edge_length", cover, 1, CHANGES) == pytest.approx(1 + 2 / 2)
            assert figure(found, "edge_length", cover, 2, CHANGES) == pytest.approx(2 / 2)
            assert figure(found, "edge_length", cover, rule=CHANGES) == pytest.approx(3)
        assert figure(found, "edge_length", "all covers", 1, CHANGES) == pytest.approx(2)
        assert figure(found, "edge_length", "1", 1, ALL_EDGES) == pytest.approx(2 * (1 + 2))
        assert figure(found, "edge_length", "1", 2, ALL_EDGES) == 0

    def test_small_patches_are_left_out_of_patches_alone(self):
        found = measured(of_sizes([5, 2, 1], 12), smallest_patch_m2=2e6)
        assert figure(found, "patches") == 2
        assert figure(found, "area") == pytest.approx(8)
        assert figure(found, "mean_patch") == pytest.approx(7 / 2)
        assert figure(found, "effective_mesh_size", rule=CUT) == pytest.approx((5**2 + 2**2) / 12)

    def test_even_number_of_patches_has_its_median_between(self):
        assert figure(measured(of_sizes([1, 2, 4, 9], 20)), "median_patch") == pytest.approx((2 + 4) / 2)

    def test_groups_are_one_class(self):
        codes = [[1, 2, 3], [3, 3, 3], [1, 3, 2]]
        found = measured(codes, groups={"wet": ["1", "2"], "any": ["2", "3"]}, neighbours=4)
        assert figure(found, "patches", "wet") == 3
        assert figure(found, "area", "wet") == pytest.approx(4)
        assert figure(found, "edge_length", "wet", rule=CHANGES) == pytest.approx(3 + 2 + 2)
        assert figure(found, "patches", "any") == 1
        assert figure(found, "patches", "1") == 2

    def test_groups_alone(self):
        found = measured([[1, 2, 3]], groups={"wet": ["1", "2"]}, covers=["wet"])
        assert set(found["cover"]) == {"wet", "all covers"}
        assert figure(found, "area", "all covers") == pytest.approx(3)

    def test_a_class_that_is_not_there(self):
        found = measured([[1, 1]], covers=["1", "7"])
        assert figure(found, "area", "7") == 0
        assert figure(found, "effective_mesh_size", "7", rule=CUT) == 0
        assert math.isnan(figure(found, "mean_patch", "7"))
        assert figure(found, "mean_patch", "7", column="note") == "no patch of this class"


class TestMeshSize:
    """Formulas of Jaeger 2000; the examples follow from them (no published one with numbers is known)."""

    @pytest.mark.parametrize(
        ("sizes", "total", "coherence"),
        [
            ((8, 8), 17, 128 / 17**2),
            ((12, 4), 17, 160 / 17**2),
            ((60, 30, 10), 102, 4600 / 102**2),
            ((60, 30), 100, 9 / 20),
        ],
    )
    def test_table(self, sizes, total, coherence):
        found = measured(of_sizes(sizes, total))
        assert figure(found, "coherence") == pytest.approx(coherence)
        assert figure(found, "division") == pytest.approx(1 - coherence)
        assert figure(found, "splitting") == pytest.approx(1 / coherence)
        assert figure(found, "effective_mesh_size", rule=CUT) == pytest.approx(coherence * total)
        assert figure(found, "effective_mesh_density", rule=CUT) == pytest.approx(1000 / (coherence * total))

    def test_two_halves_of_a_square(self):
        """8, 8 / 16: coherence 1/2, division 1/2, splitting 2, mesh size 8."""
        found = measured(np.repeat([[1, 1, 2, 2]], 4, axis=0), groups={"all": ["1", "2"]})
        total = sum(figure(found, "effective_mesh_size", cover, rule=CUT) for cover in "12")
        assert total == pytest.approx(8)
        assert figure(found, "splitting", "all") == pytest.approx(1)

    def test_barriers_part_what_they_cross(self):
        """12, 4 / 16: coherence 5/8, division 3/8, splitting 8/5, mesh size 10; a road takes no area."""
        road = shapely.LineString([(3000, 500), (3000, -4500)])
        found = measured(np.ones((4, 4)), barriers=[road])
        assert figure(found, "coherence") == pytest.approx(5 / 8)
        assert figure(found, "division") == pytest.approx(3 / 8)
        assert figure(found, "splitting") == pytest.approx(8 / 5)
        assert figure(found, "effective_mesh_size", rule=CUT) == pytest.approx(10)
        assert figure(found, "edge_length", rule=CHANGES) == 0
        assert figure(found, "edge_length", rule=ALL_EDGES) == pytest.approx(16 + 2 * 4)

    def test_across_the_border(self):
        """Moser et al. 2007: inside 40, 35, 25, complete 100, 35, 60, A_t 100: 34.5 and 67.25."""
        codes = np.full((5, 160), 2)
        codes[0, :100], codes[2, 60:95], codes[4, 75:135] = 1, 1, 1
        inside = shapely.union_all([cells(60, 0, 100, 1), cells(60, 2, 95, 3), cells(75, 4, 100, 5)])
        found = measured(codes, zones=[inside])
        assert figure(found, "area", "all covers", 1) == pytest.approx(100)
        assert figure(found, "effective_mesh_size", unit=1, rule=CUT) == pytest.approx(34.5)
        assert figure(found, "effective_mesh_size", unit=1, rule=ACROSS) == pytest.approx(67.25)

    def test_across_the_border_adds_up(self):
        """Two units of 50, a patch of 30 + 20 across, 20 and 30 beside it: 38, 38 and 38; cut 26 and 26."""
        first = np.repeat([1, 2], [30, 20])
        second = np.repeat([1, 2], [20, 30])
        codes = np.concatenate([first[::-1], second]).reshape(1, 100)
        codes[0, :20], codes[0, 70:] = 3, 3
        found = measured(
            codes,
            zones=[cells(0, 0, 50, 1), cells(50, 0, 100, 1)],
        )
        across = [
            sum(figure(found, "effective_mesh_size", cover, unit, ACROSS) for cover in "13")
            for unit in (1, 2, "whole map")
        ]
        assert across == pytest.approx([38, 38, 38])
        cut = [
            sum(figure(found, "effective_mesh_size", cover, unit, CUT) for cover in "13") for unit in (1, 2)
        ]
        assert cut == pytest.approx([26, 26])

    def test_patches_that_reach_the_edge_of_the_data_make_a_lower_bound(self):
        codes = np.full((5, 5), 2)
        codes[1, 1], codes[3, 3:] = 1, 1
        found = measured(codes, zones=[cells(1, 1, 2, 2), cells(3, 3, 4, 4)])
        assert pd.isna(figure(found, "effective_mesh_size", unit=1, rule=ACROSS, column="note"))
        note = figure(found, "effective_mesh_size", unit=2, rule=ACROSS, column="note")
        assert note == "lower bound: 1 of its patches reach the edge of the data"
        assert figure(found, "effective_mesh_density", unit=2, rule=ACROSS, column="note").startswith("upper")


class TestZonesThatCannotBeMeasured:
    def test_rows_say_why_and_stay_in_order(self):
        found = measured(
            np.ones((3, 3)),
            zones=geopandas.GeoDataFrame(
                {"basin": ["far", "here", "none"]}, geometry=[cells(50, 0, 60, 3), cells(0, 0, 2, 3), None]
            ),
            zone_names="basin",
        )
        assert list(dict.fromkeys(found["reporting_unit"])) == ["far", "here", "none", "whole map"]
        assert figure(found, "area", "all covers", "far", column="note") == "off the map"
        assert figure(found, "area", "all covers", "none", column="note") == "missing geometry"
        assert math.isnan(figure(found, "area", "all covers", "far"))

    def test_overlaps_are_told(self):
        found = measured(np.ones((3, 3)), zones=[cells(0, 0, 2, 2), cells(1, 1, 3, 3)])
        assert figure(found, "area", "all covers", 1, column="note") == "overlaps 2"
        assert figure(found, "area", "all covers", 2) == pytest.approx(4)

    def test_partly_off_the_map_and_partly_without_data(self):
        found = measured([[1, 0], [1, 0]], zones=[cells(-3, 0, 2, 2)])
        assert figure(found, "area", "all covers", 1) == pytest.approx(2)
        assert figure(found, "area_not_covered", "all covers", 1) == pytest.approx(2 + 3 * 2)

    def test_no_data_at_all(self):
        found = measured(np.zeros((3, 3)), zones=[cells(0, 0, 2, 2)], covers=["1"])
        assert figure(found, "area", "all covers", 1) == 0
        assert math.isnan(figure(found, "effective_mesh_size", unit=1, rule=CUT))
        assert figure(found, "share", unit=1, column="note") == "no data in this zone"

    def test_one_cell(self):
        found = measured([[1]])
        assert figure(found, "patches") == 1
        assert figure(found, "splitting") == pytest.approx(1)


def by_hand(codes, inside, cover, *, neighbours, cuts=None):
    """Return area, pieces, sum of squares, inside times complete, twice the edge, by plain counting."""
    mask = inside & (codes == cover)
    whole = components(codes, neighbours, cuts=cuts)
    pieces = components(np.where(inside, codes, -1), neighbours, cuts=cuts)
    sizes = np.bincount(pieces[mask]) if mask.any() else np.zeros(1, int)
    complete = np.bincount(whole[whole >= 0])
    part = np.bincount(whole[mask], minlength=len(complete)) if mask.any() else np.zeros(len(complete), int)
    twice = 0
    for one, other in (
        ((slice(1, None), slice(None)), (slice(None, -1), slice(None))),
        ((slice(None), slice(1, None)), (slice(None), slice(None, -1))),
    ):
        a, b = codes[one], codes[other]
        edge = (a >= 0) & (b >= 0) & (a != b) & ((a == cover) | (b == cover))
        twice += (edge & inside[one]).sum() + (edge & inside[other]).sum()
    return mask.sum(), (sizes > 0).sum(), (sizes**2).sum(), (part * complete).sum(), twice


def random_zones(rng, side):
    """Return overlapping, lobed, holed zones."""
    zones = []
    for _ in range(3):
        blobs = [shapely.Point(rng.uniform(0, side, 2)).buffer(rng.uniform(1, side / 2), 2) for _ in range(3)]
        zones.append(shapely.union_all(blobs[:2]).difference(blobs[2].buffer(-1)))
    return zones


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 9), st.sampled_from([4, 8]))
def test_zones_that_split_patches_against_brute_force(seed, rows, neighbours):
    rng = np.random.default_rng(seed)
    codes = rng.integers(0, 4, (9, 9)) * (rng.random((9, 9)) < 0.9)
    drawn = random_zones(rng, 9)
    zones = [shapely.transform(zone, lambda xy: xy * (1000, -1000)) for zone in drawn]
    found = measured(codes, rows=rows, zones=zones, neighbours=neighbours, covers=["1", "2"])
    r, c = np.indices((9, 9)) + 0.5
    masks = {str(k + 1): shapely.contains_xy(zone, c, r) for k, zone in enumerate(drawn)}
    masks["whole map"] = np.ones((9, 9), bool)
    indexed = np.where(codes == 0, -1, codes)
    for unit, inside in masks.items():
        if not inside.any():
            assert math.isnan(figure(found, "area", "all covers", unit))
            continue
        covered = (inside & (codes > 0)).sum()
        for cover in (1, 2):
            area, pieces, squares, across, twice = by_hand(indexed, inside, cover, neighbours=neighbours)
            name = str(cover)
            assert figure(found, "area", name, unit) == pytest.approx(area)
            assert figure(found, "patches", name, unit) == pieces
            assert figure(found, "edge_length", name, unit, CHANGES) == pytest.approx(twice / 2)
            if covered:
                mesh = figure(found, "effective_mesh_size", name, unit, CUT)
                assert mesh == pytest.approx(squares / covered)
                mesh = figure(found, "effective_mesh_size", name, unit, ACROSS)
                assert mesh == pytest.approx(across / covered)


EVERYTHING = {
    "edge_cell_sizes_m": [1500.0, 2000.0],
    "interior_depths_m": [600.0, 1600.0],
    "lacunarity_boxes_m": [1000.0, 3000.0],
    "distances": True,
    "dispersal_m": 2000.0,
    "box_dimension": True,
}


@settings(max_examples=10, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 20), st.booleans())
def test_strip_height_changes_nothing(seed, rows, bounds):
    rng = np.random.default_rng(seed)
    codes = rng.integers(0, 4, (20, 17))
    zones = [shapely.transform(zone, lambda xy: xy * (1000, -1000)) for zone in random_zones(rng, 17)]
    road = shapely.LineString(rng.uniform(0, 17, (3, 2)) * (1000, -1000))
    asked = EVERYTHING | {"zones": zones, "barriers": [road], "groups": {"both": ["1", "2"]}}
    asked |= {"map_edge_bounds_interior": bounds}
    one = measured(codes, rows=rows, **asked)
    pd.testing.assert_frame_equal(one, measured(codes, **asked), check_exact=True)


def test_sizes_beyond_the_bound_are_rounded_alike(monkeypatch):
    """Medians are kept to 2^-13 once too many different areas were met, however they came."""
    monkeypatch.setattr(patch_totals, "MOST_SIZES", 50)
    monkeypatch.setattr(patch_totals, "WAITING", 30)
    rng = np.random.default_rng(4)
    areas = rng.integers(1, 10**12, 201)
    both = []
    for order in (areas, np.sort(areas)):
        counts = patch_totals.SizeCounts()
        for part in np.array_split(order, 9 if order is areas else 2):
            counts.add(np.zeros(len(part), np.int64), np.ones(len(part), np.int64), part)
        both.append(counts.median(0, 1))
    assert both[0] == both[1]
    assert both[0] == pytest.approx(np.median(areas), rel=2**-13)
    assert math.isnan(counts.median(0, 0))


class TestTable:
    def test_columns_and_quantities_are_as_declared(self):
        found = measured(np.eye(12) + 1, zones=[cells(0, 0, 6, 12)], **EVERYTHING)
        assert tuple(found.columns) == FIGURE_COLUMNS
        options = FragmentationOptions(
            **{k: tuple(v) if isinstance(v, list) else v for k, v in EVERYTHING.items()}
        )
        declared = {one.name: one for one in quantities_of(options)}
        assert set(found["quantity"]) == set(declared)
        for row in found.itertuples():
            assert row.unit == declared[row.quantity].unit
            assert row.border_rule in (declared[row.quantity].border_rules or ("",))
            assert declared[row.quantity].interval or math.isnan(row.low)

    def test_quantities_are_sound(self):
        asked = {k: tuple(v) if isinstance(v, list) else v for k, v in EVERYTHING.items()}
        found = quantities_of(FragmentationOptions(**asked))
        assert len({one.name for one in found}) == len({one.short for one in found}) == len(found)
        assert all(len(one.short) <= 7 and one.group in GROUPS and one.meaning for one in found)

    def test_unknown_options(self):
        with pytest.raises(ConfigError, match="fragmentation: 1 validation error"):
            measured([[1]], depths=[100])

    def test_names_that_do_not_match(self):
        with pytest.raises(ConfigError, match="zone_names has 1 names for 2 zones"):
            measured([[1]], zones=[None, None], zone_names=["a"])

    def test_groups_without_classes(self):
        with pytest.raises(ConfigError, match="The group 'wet' has no classes"):
            measured([[1]], groups={"wet": []})

    @pytest.mark.parametrize(
        ("given", "message"),
        [
            ({"covers": ["reeds"]}, "covers: the raster has no class 'reeds'; there are reed, carr"),
            ({"groups": {"wet": ["reed", "bog"]}}, "groups: the raster has no class 'bog'"),
            ({"groups": {"reed": ["carr"]}}, "groups: 'reed' is the name of a class already"),
            ({"depth_by_neighbour_m": {"road": 9.0}}, "depth_by_neighbour_m: the raster has no class 'road'"),
        ],
    )
    def test_names_that_are_not_there(self, given, message):
        reading = RasterOptions(classes={"reed": 1, "carr": 2})
        with pytest.raises(ConfigError, match=message):
            fragmentation((np.ones((2, 2), np.uint8), KM, PLANE), reading=reading, **given)

    def test_codes_stand_for_names_where_there_are_none(self):
        with pytest.raises(ConfigError, match="there are codes as text, such as '1'"):
            measured([[1]], covers=["reed"])
