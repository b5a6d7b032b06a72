"""Patches as measures ask for them: from a size on, in the columns wanted, smaller ones counted."""

import numpy as np
import pandas as pd
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from pandas.testing import assert_frame_equal

from geofractal.cover_map import RasterCover
from geofractal.estimators.area_perimeter import area_perimeter_dimension
from geofractal.estimators.number_area import number_area_exponent
from geofractal.landcover.covers import Pack, asked_packs
from geofractal.landcover.zones import place_zones
from geofractal.patches import open_class_map
from geofractal.polygon_cover import PolygonCover
from geofractal.reader.raster import RasterOptions

PLANE = 'LOCAL_CS["plane",UNIT["metre",1]]'
GROUPS = {"pair": ("1", "2"), "other pair": ("2", "3")}


def opened(codes, rows=None):
    options = RasterOptions(nodata=(0,), strip_rows=rows)
    return open_class_map((codes, (10, 0, 0, 0, -10, 0), PLANE), options, {})


def overlapping(raster):
    boxes = [shapely.box(0, -60, 70, 0), shapely.box(50, -100, 110, -30), shapely.box(80, -100, 120, -90)]
    return place_zones(raster.grid, boxes, ["west", "middle", "east"], raster.grid.crs)


def counted(table, keys):
    """Return the number of rows by keys, as what was left out is counted."""
    counts = table.groupby(keys, observed=True).size()
    return {key: int(count) for key, count in counts.items()}


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 10**6),
    zoned=st.booleans(),
    covers=st.sampled_from([(), ("pair", "3", "9"), ("4",), ("other pair", "pair")]),
    cells=st.integers(1, 8),
    area_m2=st.sampled_from([0.0, 150.0, 400.0]),
)
def test_smaller_patches_are_left_out_and_counted(seed, zoned, covers, cells, area_m2):
    codes = np.random.default_rng(seed).integers(0, 5, (10, 12)).astype(np.uint8)

    def found(rows=None, **asked):
        raster = opened(codes, rows)
        cover = RasterCover(raster, overlapping(raster) if zoned else None, None, GROUPS, covers)
        return list(cover.patches(neighbours=8, perimeter="cell-edges", map_edge=True, **asked))

    whole = found()
    sifted = found(3, columns=("touches_edge", "cells"), smallest_cells=cells, smallest_area_m2=area_m2)
    assert [part.zones for part in sifted] == [part.zones for part in whole]
    assert len(whole) == (2 if zoned else 1)
    for every, part in zip(whole, sifted, strict=True):
        assert not len(every.smaller)
        keys = ["zone", "cover"] if zoned else ["cover"]
        small = (every.table["cells"] < cells) | (every.table["area_m2"] < area_m2)
        columns = [name for name in every.table if name in {*keys, "cells", "touches_edge"}]
        expected = every.table.loc[~small, columns].reset_index(drop=True)
        assert_frame_equal(part.table[columns], expected)
        assert set(part.table) == set(columns)
        assert counted(every.table[small], keys) == part.smaller.set_index(keys)["patches"].to_dict()


def test_smaller_polygons_are_left_out_and_counted():
    squares = [shapely.box(x, 0, x + side, side) for x, side in [(0, 1), (5, 2), (10, 3), (20, 1)]]
    cover = PolygonCover(np.array(squares, object), np.array(["a", "a", "b", "b"], object), PLANE)
    (part,) = cover.patches(columns=("area_m2",), smallest_area_m2=4.0, smallest_cells=100)
    assert sorted(part.table["area_m2"]) == pytest.approx([4.0, 9.0])
    assert set(part.table) == {"cover", "area_m2"}
    assert part.smaller.to_numpy().tolist() == [["a", 1], ["b", 1]]


def random_patches(rng, n=400):
    area = 10.0 * np.exp(rng.uniform(0, 8, n)).round()
    return pd.DataFrame(
        {
            "zone": rng.integers(-2, 3, n).astype(np.int32),
            "cover": pd.Categorical.from_codes(rng.integers(0, 3, n), ["reed", "carr", "heath"]),
            "cells": area.astype(np.int64),
            "area_m2": area,
            "perimeter_m": area**0.7 * rng.uniform(2, 4, n),
            "touches_edge": rng.random(n) < 0.2,
        }
    )


@pytest.mark.parametrize("by", [("cover",), ("zone", "cover"), ()])
@pytest.mark.parametrize("estimate", [area_perimeter_dimension, number_area_exponent])
def test_patches_that_were_only_counted_make_no_difference(estimate, by):
    patches = random_patches(np.random.default_rng(3))
    patches.loc[patches["cover"] == "carr", ["cells", "area_m2"]] = 1  # a class of small patches alone
    small = patches["area_m2"] < 300
    smaller = patches[small].groupby(["zone", "cover"], observed=True).size().rename("patches").reset_index()
    given = {"by": by, "smallest_area_m2": 300.0}
    whole = estimate(patches, **given)
    assert_frame_equal(estimate(patches[~small], **given, smaller=smaller), whole)
    assert whole["patches_left_out_small"].sum() == small.sum()
    if by == ("cover",):
        assert whole["cover"].tolist() == ["reed", "carr", "heath"]
        assert whole["patches_used"].tolist()[1] == 0


@pytest.mark.parametrize("estimate", [area_perimeter_dimension, number_area_exponent])
def test_a_patch_without_a_class_is_in_no_group(estimate):
    patches = random_patches(np.random.default_rng(4))
    unknown = patches.assign(cover=patches["cover"].where(patches["cells"] != patches["cells"].max()))
    known = unknown[unknown["cover"].notna()]
    assert len(known) < len(patches)
    assert_frame_equal(estimate(unknown), estimate(known))


@pytest.mark.parametrize(
    ("covers", "expected"),
    [
        ((), [(), ("pair",), ("other pair",)]),  # the pairs share a class
        (("3",), [()]),
        (("other pair",), [("other pair",)]),
        (("pair", "9"), [(), ("pair",)]),
    ],
)
def test_packs_hold_what_is_asked_for(covers, expected):
    packs = asked_packs(covers, GROUPS)
    assert [pack.names for pack in packs] == expected
    assert (Pack() in packs) == (() in expected)
