"""Nothing is decoration: changing any one key of a class map's entries changes what comes out."""

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from batches import UTM, run, write_gpkg
from test_covers_batch import CELL, NORTH, WEST, write_map

from geofractal.config.models import BarrierLayer, CoverHead, CoverRequest, RasterLayer
from geofractal.errors import ConfigError
from geofractal.registry import load_cover_measure

BLOCKS = np.random.default_rng(5).integers(1, 4, (40, 50)).repeat(4, axis=0).repeat(4, axis=1)
MAP = np.where(np.random.default_rng(6).random(BLOCKS.shape) < 0.05, 0, BLOCKS).astype(np.uint8)
SIDE = CELL * 200
EAST = shapely.box(WEST + SIDE / 2 + 30, NORTH - SIDE, WEST + SIDE, NORTH)
ROAD = shapely.LineString([(WEST + 5_000, NORTH + 100), (WEST + 5_000, NORTH - SIDE)])


@pytest.fixture(scope="module")
def site(tmp_path_factory):
    folder = tmp_path_factory.mktemp("site")
    write_map(folder / "cover.tif", MAP)
    write_map(folder / "other.tif", MAP[::-1] // 2)
    write_map(folder / "floats.tif", MAP.astype(np.float32))
    write_map(folder / "bare.tif", MAP, crs=None)
    write_map(folder / "two.tif", np.stack([MAP, MAP[::-1] // 2]))
    write_gpkg(folder / "zones.gpkg", [EAST], layer="zones")
    write_gpkg(folder / "roads.gpkg", [ROAD], layer="roads")
    write_gpkg(folder / "tracks.gpkg", [ROAD.parallel_offset(3_000)], layer="tracks")
    squares = [shapely.box(x, 0, x + 10 + x / 50, 10 + x / 50) for x in range(0, 40_000, 1000)]
    squares[-1] = shapely.box(38_500, 0, 39_300, 700)  # overlaps the one before
    write_gpkg(folder / "islands.gpkg", squares, layer="islands", kind=["a", "b"] * 20)
    return folder


LAYERS = {
    "cover": {"source": "cover.tif"},
    "zones": {"source": "zones.gpkg"},
    "roads": {"source": "roads.gpkg"},
    "tracks": {"source": "tracks.gpkg"},
    "islands": {"source": "islands.gpkg"},
}


def outcome(site, asked, layer=None):
    """Return all that a batch wrote of figures, zones and patches, or the fault that it was refused for."""
    out = site / "out"
    barriers = [one if isinstance(one, str) else one["layer"] for one in asked.get("barriers", ())]
    used = {asked.get("of", "cover"), asked.get("zones"), *barriers}
    layers = {name: said for name, said in LAYERS.items() if name in used}
    if "cover" in layers:
        layers["cover"] = {**LAYERS["cover"], **(layer or {})}
    for path in out.glob("*") if out.exists() else ():
        path.unlink()
    try:
        record = run(site, layers, [{"of": "cover", **asked}])
    except ConfigError as error:
        return str(error)
    told = [record["failed_layers"], sorted(path.name for path in out.iterdir())]
    for path in sorted(out.iterdir()):
        if path.name.endswith(("_figures.csv", ".gpkg")):
            table = pd.read_csv(path) if path.suffix == ".csv" else gpd.read_file(path)
            told.append(table.astype(str).to_csv())
    return told


AREA = {"measure": "area-perimeter-dimension", "smallest-cells": 4, "covers": ["1"], "zones": "zones"}
OUTER = {**AREA, "perimeter": "outer-cell-edges"}
NUMBER = {"measure": "number-area-exponent", "covers": ["1"]}
BROKEN = {"measure": "fragmentation", "covers": ["1"]}
WIDE = {"layer": "roads", "width-m": 250}
DEEP = {**BROKEN, "interior-depths-m": [150]}
FEW = {**BROKEN, "smallest-patch-m2": 200_000, "most-patches": 5_000}
ISLANDS = {"measure": "area-perimeter-dimension", "of": "islands"}

CASES = {
    ("entry", "covers"): (AREA, {"covers": ["1", "2"]}),
    ("entry", "zones"): ({**AREA, "zones": None}, {"zones": "zones"}),
    ("entry", "barriers"): (BROKEN, {"barriers": ["roads"]}),
    ("barrier", "layer"): ({**BROKEN, "barriers": [WIDE]}, {"barriers": [{**WIDE, "layer": "tracks"}]}),
    ("barrier", "width_m"): ({**BROKEN, "barriers": [WIDE]}, {"barriers": [{**WIDE, "width-m": 90}]}),
    ("entry", "prefix"): (AREA, {"prefix": "old"}),
    ("entry", "class_column"): (ISLANDS, {"class-column": "kind"}),
    ("entry", "dissolve"): (ISLANDS, {"dissolve": False}),
    ("area-perimeter-dimension", "neighbours"): (AREA, {"neighbours": 4}),
    ("area-perimeter-dimension", "smallest_area_m2"): (AREA, {"smallest-area-m2": 200_000}),
    ("area-perimeter-dimension", "edge_patches"): (AREA, {"edge-patches": True}),
    ("area-perimeter-dimension", "perimeter"): (AREA, {"perimeter": "smoothed"}),
    ("area-perimeter-dimension", "map_edge"): ({**AREA, "edge-patches": True}, {"map-edge": False}),
    ("area-perimeter-dimension", "filled"): (OUTER, {"filled": True}),
    ("area-perimeter-dimension", "smallest_cells"): (AREA, {"smallest-cells": 30}),
    ("area-perimeter-dimension", "patches"): (AREA, {"patches": True}),
    ("number-area-exponent", "neighbours"): (NUMBER, {"neighbours": 4}),
    ("number-area-exponent", "smallest_area_m2"): (NUMBER, {"smallest-area-m2": 200_000}),
    ("number-area-exponent", "edge_patches"): (NUMBER, {"edge-patches": True}),
    ("fragmentation", "neighbours"): (BROKEN, {"neighbours": 4}),
    ("fragmentation", "smallest_patch_m2"): (BROKEN, {"smallest-patch-m2": 200_000}),
    ("fragmentation", "edge_cell_sizes_m"): (BROKEN, {"edge-cell-sizes-m": [250]}),
    ("fragmentation", "interior_depths_m"): (BROKEN, {"interior-depths-m": [150]}),
    ("fragmentation", "depth_by_neighbour_m"): (DEEP, {"depth-by-neighbour-m": {"2": 60}}),
    ("fragmentation", "map_edge_bounds_interior"): (DEEP, {"map-edge-bounds-interior": True}),
    ("fragmentation", "lacunarity_boxes_m"): (BROKEN, {"lacunarity-boxes-m": [500]}),
    ("fragmentation", "distances"): (FEW, {"distances": True}),
    ("fragmentation", "dispersal_m"): (FEW, {"dispersal-m": 300}),
    ("fragmentation", "most_patches"): ({**FEW, "distances": True}, {"most-patches": 1}),
    ("fragmentation", "box_dimension"): (BROKEN, {"box-dimension": True}),
}

LAYER_CASES = {
    "source": ({}, {"source": "other.tif"}),
    "band": ({"source": "two.tif"}, {"band": 2}),
    "crs": ({"source": "bare.tif"}, {"crs": UTM}),
    "classes": ({}, {"classes": {"1": [1, 2], "2": 3, "0": 0}}),
    "rest": ({"classes": {"1": 1}}, {"rest": "others"}),
    "groups": ({}, {"groups": {"pair": ["1", "2"]}}),
    "nodata": ({}, {"nodata": [0]}),
    "whole_numbers": ({"source": "floats.tif"}, {"whole-numbers": True}),
    "grid": ({}, {"grid": "warp"}),
    "cell_size_m": ({"grid": "warp"}, {"cell-size-m": 250}),
}


@pytest.mark.parametrize("key", CASES, ids=" ".join)
def test_changing_an_option_changes_what_comes_out(site, key):
    base, changed = CASES[key]
    base = {name: value for name, value in base.items() if value is not None}
    assert outcome(site, {**base, **changed}) != outcome(site, base)


@pytest.mark.parametrize("key", LAYER_CASES)
def test_changing_a_key_of_the_layer_changes_what_comes_out(site, key):
    base, changed = LAYER_CASES[key]
    asked = {"measure": "fragmentation"}
    assert outcome(site, asked, {**base, **changed}) != outcome(site, asked, base)


def test_every_option_has_its_case():
    shipped = ("area-perimeter-dimension", "number-area-exponent", "fragmentation")
    models = {"entry": CoverHead, "barrier": BarrierLayer} | {
        name: load_cover_measure(name).options for name in shipped
    }
    keys = {(name, field) for name, model in models.items() for field in model.model_fields}
    assert keys - {("entry", "measure"), ("entry", "of")} == set(CASES)
    assert set(RasterLayer.model_fields) == set(LAYER_CASES)
    assert set(CoverRequest.model_fields) == {*CoverHead.model_fields, "options"}
