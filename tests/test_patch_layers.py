"""Layers of patches through the batch: those of the Python API, drawn while the map is read, then kept."""

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from batches import UTM, run
from class_maps import strips
from hypothesis import given, settings
from hypothesis import strategies as st
from pandas.testing import assert_frame_equal
from test_covers_batch import CELL, NORTH, WEST, write_map

from geofractal import area_perimeter_dimension, raster_patches
from geofractal.batch import cover_parts, patch_layers
from geofractal.cover_map import RasterCover
from geofractal.estimators.area_perimeter import area_perimeter_residual
from geofractal.estimators.cover_measures import AreaPerimeterDimension
from geofractal.landcover.labelling import label_patches
from geofractal.measure import PatchRule
from geofractal.patches import open_class_map
from geofractal.reader.raster import RasterOptions

CLASSES = {"reed": 1, "carr": 2, "pasture": 3, "heath": 4, "sand": 5}
GROUPS = {"wet": ["reed", "carr"], "green": ["carr", "pasture"]}
"""Two groups that share a class, so that the map is read again for the second."""

ROAD = 20
"""Row of cells that the road takes."""

SMALLEST = 2


def rough(seed=5, shape=(70, 80)):
    """Return patches of many sizes, and some cells without data."""
    rng = np.random.default_rng(seed)
    codes = rng.integers(1, 6, (14, 16)).repeat(5, axis=0).repeat(5, axis=1)[: shape[0], : shape[1]]
    speckles = rng.random(codes.shape) < 0.25
    return np.where(speckles, rng.integers(0, 6, codes.shape), codes).astype(np.uint8)


def write_road(folder):
    """Write a road along the middle of a row of cells, from side to side."""
    y = NORTH - CELL * (ROAD + 0.5)
    road = shapely.LineString([(WEST - 100, y), (WEST + 81 * CELL, y)])
    gpd.GeoDataFrame(geometry=[road], crs=UTM).to_file(folder / "roads.gpkg")


def drawn(folder, covers=(), road_m=None, zones=None, **options):
    """Return the layer of patches that the batch writes for the rough map."""
    write_map(folder / "cover.tif", rough(), nodata=0)
    layers = {"cover": {"source": "cover.tif", "classes": CLASSES, "groups": GROUPS}}
    asked = {"measure": "area-perimeter-dimension", "of": "cover", "patches": True, "covers": list(covers)}
    asked |= {"smallest-cells": SMALLEST, "edge-patches": True, **options}
    if road_m:
        write_road(folder)
        layers["roads"] = {"source": "roads.gpkg"}
        asked["barriers"] = [{"layer": "roads", "width-m": road_m}]
    if zones:
        layers["zones"] = {"source": str(zones), "id": "name"}
        asked["zones"] = "zones"
    run(folder, layers, [asked], {"folder": "out", "formats": ["geoparquet"]})
    return gpd.read_parquet(folder / "out" / "cover_patches.parquet")


def by_api(cover, codes, **options):
    """Return the patches of a class or group by the Python API, with the residual of each."""
    members = [CLASSES[name] for name in GROUPS.get(cover, [cover])]
    own = np.where(np.isin(codes, members), 1, np.where(codes > 0, 2, 0)).astype(np.uint8)
    transform = (CELL, 0, WEST, 0, -CELL, NORTH)
    patches = raster_patches((own, transform, UTM), geometry=True, nodata=(0,), **options)
    patches = patches[patches["cover"] == "1"].assign(cover=cover)
    plain = pd.DataFrame(patches).drop(columns="geometry")
    line = area_perimeter_dimension(plain, smallest_cells=SMALLEST, edge_patches=True)
    return patches.assign(residual=area_perimeter_residual(plain, line))


def in_order(patches, columns):
    """Return columns of patches and their polygons as text, by cover and polygon."""
    polygons = shapely.to_wkt(shapely.normalize(patches.geometry.to_numpy()))
    table = pd.DataFrame(patches)[columns].assign(polygon=polygons).astype({"cover": str})
    return table.sort_values(["cover", "polygon"]).reset_index(drop=True)


FIGURES = ["cover", "cells", "area_m2", "perimeter_m", "touches_edge", "residual"]
EVERY = (*CLASSES, *GROUPS)


@pytest.mark.parametrize("neighbours", [4, 8])
@pytest.mark.parametrize("perimeter", ["cell-edges", "outer-cell-edges", "smoothed"])
@pytest.mark.parametrize("covers", [(), ("green", "reed"), ("wet",)])
def test_the_layer_is_that_of_the_api(tmp_path, covers, perimeter, neighbours):
    found = drawn(tmp_path, covers, perimeter=perimeter, neighbours=neighbours)
    each = [by_api(name, rough(), perimeter=perimeter, neighbours=neighbours) for name in covers or EVERY]
    expected = gpd.GeoDataFrame(pd.concat(each), geometry="geometry")
    columns = FIGURES + (["filled_area_m2", "holes"] if perimeter == "outer-cell-edges" else [])
    assert sorted(found) == sorted([*columns, "geometry"])
    assert found["residual"].notna().all()
    assert_frame_equal(in_order(found, columns), in_order(expected, columns), check_exact=True)


def test_cells_of_a_road_are_in_no_patch_and_cut_the_others(tmp_path):
    codes = rough()
    codes[ROAD][codes[ROAD] > 0] = 9  # on the map, of no class
    found = drawn(tmp_path, ("wet", "pasture"), road_m=CELL / 2)
    expected = gpd.GeoDataFrame(pd.concat([by_api(name, codes) for name in ("wet", "pasture")]))
    assert_frame_equal(in_order(found, FIGURES), in_order(expected, FIGURES), check_exact=True)


@pytest.mark.parametrize("perimeter", ["cell-edges", "outer-cell-edges"])
def test_rows_of_the_layer_do_not_depend_on_zones(tmp_path, perimeter):
    """Residuals of outer edges do: patches across zone borders are no part of that fit."""
    boxes = [shapely.box(WEST, NORTH - 40 * CELL, WEST + x * CELL, NORTH) for x in (30, 50)]
    gpd.GeoDataFrame({"name": ["a", "b"]}, geometry=boxes, crs=UTM).to_file(tmp_path / "zones.gpkg")
    plain = drawn(tmp_path, perimeter=perimeter)
    zoned = drawn(tmp_path, perimeter=perimeter, zones="zones.gpkg")
    columns = [name for name in plain if name != "residual" or perimeter == "cell-edges"]
    assert_frame_equal(pd.DataFrame(zoned[columns]), pd.DataFrame(plain[columns]))


def opened(rows=None):
    options = RasterOptions(nodata=(0,), strip_rows=rows)
    return open_class_map((rough(), (CELL, 0, WEST, 0, -CELL, NORTH), UTM), options, {})


def polygons(raster, covers=()):
    groups = {"low": ("1", "2"), "high": ("2", "3")}
    return pd.concat(RasterCover(raster, None, None, groups, covers).polygons(PatchRule()), ignore_index=True)


def test_a_group_may_have_any_name():
    cover = RasterCover(opened(), None, None, {"other": ("1", "2")}, ("other",))
    alone = RasterCover(opened(), None, None, {"low": ("1", "2")}, ("low",))
    found, expected = (pd.concat(one.polygons(PatchRule())) for one in (cover, alone))
    assert found["area_m2"].tolist() == expected["area_m2"].tolist()


@pytest.mark.parametrize("rows", [1, 7, 64])
def test_strips_change_neither_rows_nor_their_order(rows):
    assert_frame_equal(polygons(opened(rows)), polygons(opened()))


def test_rows_are_in_the_order_told():
    """Classes before groups, a reading for each pack of these; then by last row, then by first cell."""
    found = polygons(opened())
    reading = found["cover"].astype(str).map({"low": 1, "high": 2}).fillna(0)
    order = pd.DataFrame(found[["last_row", "first_row", "first_column"]]).assign(reading=reading)
    expected = order.sort_values(["reading", "last_row", "first_row", "first_column"])
    assert expected.index.tolist() == list(range(len(found)))


class Killed(BaseException):
    """What ends a run without being asked."""


def test_a_run_killed_while_drawing_goes_on_from_its_figures(tmp_path, monkeypatch):
    tables = patch_layers._tables

    def first_table_then_killed(*given):
        yield next(tables(*given))
        raise Killed

    monkeypatch.setattr(patch_layers, "_tables", first_table_then_killed)
    with pytest.raises(Killed):
        drawn(tmp_path)
    assert not (tmp_path / "out" / "cover_patches.parquet").exists()
    monkeypatch.setattr(patch_layers, "_tables", tables)
    monkeypatch.setattr(cover_parts, "_measure", None)  # not called again
    found = drawn(tmp_path)
    monkeypatch.undo()
    other = tmp_path / "other"
    other.mkdir()
    assert_frame_equal(pd.DataFrame(found), pd.DataFrame(drawn(other)))


def test_a_run_killed_while_writing_draws_nothing_again(tmp_path, monkeypatch):
    def killed(*_):
        raise Killed

    with monkeypatch.context() as patch:
        patch.setattr("geofractal.batch.covers.write_patches", killed)
        with pytest.raises(Killed):
            drawn(tmp_path)
    monkeypatch.setattr(cover_parts, "draw_patches", None)  # not called again
    assert len(drawn(tmp_path)) == sum(len(by_api(name, rough())) for name in EVERY)


def test_the_fits_hold_no_patch_that_they_do_not_use():
    asked = []

    class Told(RasterCover):
        def patches(self, **rule):
            for found in super().patches(**rule):
                asked.append(found)
                yield found

    options = AreaPerimeterDimension.options(patches=True, smallest_cells=9)
    AreaPerimeterDimension().measure(Told(opened()), options)
    (held,) = asked
    cells = raster_patches((rough(), (CELL, 0, WEST, 0, -CELL, NORTH), UTM), nodata=(0,))["cells"]
    assert len(held.table) == (cells >= 9).sum()
    assert held.smaller["patches"].sum() == (cells < 9).sum()


def test_a_map_without_data_gives_a_layer_without_rows(tmp_path):
    write_map(tmp_path / "cover.tif", np.zeros((5, 4), np.uint8), nodata=0)
    asked = {"measure": "area-perimeter-dimension", "of": "cover", "patches": True}
    layers = {"cover": {"source": "cover.tif", "classes": CLASSES}}
    run(tmp_path, layers, [asked], {"folder": "out", "formats": ["geoparquet"]})
    found = gpd.read_parquet(tmp_path / "out" / "cover_patches.parquet")
    assert len(found) == 0
    assert list(found) == [*FIGURES, "geometry"]


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10**6), rows=st.integers(1, 9), wanted=st.sets(st.integers(0, 2)))
def test_runs_of_some_classes_are_those_among_all(seed, rows, wanted):
    codes = np.random.default_rng(seed).integers(-1, 3, (9, 8)).astype(np.int16)

    def runs(**asked):
        return [
            (part.patches["class"][line], part.patches["first_row"][line], *run)
            for part in label_patches(strips(codes, rows), runs=True, **asked)
            for line, *run in part.runs.tolist()
        ]

    chosen = runs(runs_of=lambda classes: np.isin(classes, list(wanted)))
    assert chosen == [one for one in runs() if one[0] in wanted]
