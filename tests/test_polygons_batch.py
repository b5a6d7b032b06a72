"""Layers of polygons through the batch: fragmentation and patches with zones, groups and barriers."""

import json
import re

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from batches import run, write_batch, write_gpkg
from test_covers_batch import (
    CELL,
    CLASSES,
    CODES,
    DIMENSION,
    FRAGMENTATION,
    GROUPS,
    HALVES,
    KM2,
    NORTH,
    WEST,
    cells,
    estimates,
    faults,
    figures,
    write_map,
    zones,
)

from geofractal.batch.check import check_batch
from geofractal.config import load_config
from geofractal.errors import GeofractalWarning
from geofractal.measure import WHOLE_MAP

NAMES = {code: name for name, code in CLASSES.items()}
POLYGONS = {"measure": "fragmentation", "of": "habitats", "class-column": "kind"}


def habitats(**keys):
    return {"source": "habitats.gpkg", "groups": GROUPS, **keys}


def write_habitats(folder, *further):
    """Write the class map as a polygon a cell; `further` are geometries of class pasture."""
    squares = [cells(c, r, c + 1, r + 1) for r, c in np.ndindex(CODES.shape)]
    kinds = [NAMES[code] for code in CODES.ravel()] + ["pasture"] * len(further)
    write_gpkg(folder / "habitats.gpkg", [*squares, *further], layer="habitats", kind=kinds)


def line(*places):
    return shapely.LineString([(WEST + CELL * column, NORTH - CELL * row) for column, row in places])


@pytest.fixture
def site(tmp_path):
    write_habitats(tmp_path)
    write_gpkg(tmp_path / "zones.gpkg", HALVES, layer="zones")
    return tmp_path


def run_halves(site, asked=POLYGONS, **keys):
    asked = {**asked, "zones": "zones", "covers": ["habitat", "pasture"], **keys}
    layers = {"habitats": habitats(), "zones": zones()}
    layers |= {name: {"source": f"{name}.gpkg"} for name in keys.get("barriers", ())}
    return run(site, layers, [asked])


def test_zones_and_groups_give_the_figures_of_the_raster_of_the_same_map(site):
    run_halves(site)
    write_map(site / "cover.tif")
    asked = {**FRAGMENTATION, "zones": "zones", "covers": ["habitat", "pasture"]}
    cover = {"source": "cover.tif", "classes": CLASSES, "groups": GROUPS}
    run(site, {"cover": cover, "zones": zones()}, [asked], {"folder": "raster"})
    keys = ["reporting_unit", "cover", "quantity", "border_rule"]
    raster = pd.read_csv(site / "raster" / "cover_figures.csv", keep_default_na=False, na_values=[""])
    polygons, raster = (one.set_index(keys)["estimate"] for one in (figures(site, "habitats"), raster))
    assert set(polygons.index) == set(raster.index)
    assert polygons.to_numpy() == pytest.approx(raster[polygons.index].to_numpy(), rel=1e-5, nan_ok=True)


def test_figures_become_columns_of_the_zones_copy(site):
    run_halves(site, prefix="now")
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    assert copy["now_habitat_area_km2"].tolist() == pytest.approx([6 * KM2, 5 * KM2], rel=1e-6)
    mesh = copy["now_habitat_effective_mesh_size_cut_at_the_border_km2"]
    assert mesh[0] == pytest.approx(6**2 / 8 * KM2, rel=1e-6)


def test_the_whole_map_is_said_to_be_what_polygons_cover(site):
    run_halves(site)
    table = figures(site, "habitats")
    rows = table[(table.cover == "all covers") & (table.quantity == "area")].set_index("reporting_unit")
    assert "where the area mapped ends is not known" in rows.note[WHOLE_MAP]
    assert rows.note.isna().tolist() == [True, True, False]


BOWTIE = shapely.Polygon([(WEST, NORTH), (WEST + 200, NORTH - 200), (WEST + 200, NORTH), (WEST, NORTH - 200)])


def test_rows_that_are_no_polygon_are_left_out_and_counted(tmp_path):
    collapsed = shapely.Polygon([(WEST, NORTH), (WEST + 10, NORTH), (WEST + 20, NORTH)])
    write_habitats(tmp_path, None, shapely.Polygon(), BOWTIE, collapsed)
    frame = gpd.read_file(tmp_path / "habitats.gpkg")
    frame.loc[0, "kind"] = None
    frame.to_file(tmp_path / "habitats.gpkg", layer="habitats")
    record = run(tmp_path, {"habitats": habitats()}, [POLYGONS])
    told = record["layers"]["habitats"]["measures"][0]["polygons_left_out"]
    assert sum(told.values()) == 5
    assert told["no class"] == 1
    assert told["invalid: Self-intersection"] == 2  # the bow tie, and the one without area
    assert estimates(tmp_path, "area", name="habitats")[WHOLE_MAP, "all covers"] == pytest.approx(
        15 * KM2, rel=1e-6
    )


def test_a_barrier_parts_patches_and_leaves_the_area(site):
    write_gpkg(site / "roads.gpkg", [line((1, -1), (1, 5)), None], layer="roads")
    record = run_halves(site, barriers=["roads"])
    areas, patches = (estimates(site, name, name="habitats") for name in ("area", "patches"))
    assert areas["row 0", "habitat"] == pytest.approx(6 * KM2, rel=1e-6)
    assert patches["row 0", "habitat"] == 2
    assert record["layers"]["habitats"]["measures"][0]["barriers_left_out"] == {"missing geometry": 1}


def test_a_barrier_with_a_width_takes_a_strip_of_every_class(site):
    write_gpkg(site / "roads.gpkg", [line((1, -1), (1, 5))], layer="roads")
    layers = {"habitats": habitats(), "roads": {"source": "roads.gpkg"}}
    run(site, layers, [{**POLYGONS, "barriers": [{"layer": "roads", "width-m": 20}]}])
    areas = estimates(site, "area", name="habitats")
    assert areas[WHOLE_MAP, "all covers"] == pytest.approx(16 * KM2, rel=1e-6)
    assert areas[WHOLE_MAP, "barrier"] == pytest.approx(4 * np.sqrt(KM2) * 0.02, rel=1e-6)


def test_patches_are_those_of_groups_zones_and_barriers(site):
    write_gpkg(site / "roads.gpkg", [line((1, -1), (1, 5))], layer="roads")
    asked = {**DIMENSION, "of": "habitats", "class-column": "kind", "edge-patches": True, "patches": True}
    run_halves(site, asked, barriers=["roads"])
    patches = gpd.read_parquet(site / "out" / "habitats_patches.parquet")
    areas = sorted(patches[patches["cover"] == "habitat"].area)
    # the road parts the habitat's first column, whose 2 cells the other 9 do not reach
    assert areas == pytest.approx([3 * CELL**2, 8 * CELL**2])


@pytest.mark.filterwarnings("ignore:.*no measure uses the layer")
@pytest.mark.parametrize(
    ("layer", "asked", "words"),
    [
        ({}, {"class-column": "kinds"}, r"layer 'habitats' has no column 'kinds'.*mean 'kind'"),
        ({"groups": {"pasture": ["reedbed"]}}, {}, "'pasture' is the name of a class already"),
        ({}, {"dissolve": False}, "fragmentation takes those of a class as one"),
        ({}, {"class-column": None}, "no column names the class of a polygon"),
        ({}, {"zones": "zone"}, r"no layer 'zone' is defined.*did you mean 'zones'"),
    ],
)
def test_a_fault_of_the_batch_file_is_told_with_its_place(site, layer, asked, words):
    keys = {key: value for key, value in {**POLYGONS, **asked}.items() if value is not None}
    layers = {"habitats": habitats(**layer), "zones": zones()}
    assert re.search(words, faults(site, layers, [keys]), flags=re.DOTALL)


def test_a_class_that_no_polygon_has_is_warned_of_and_has_no_area(site):
    asked = {**POLYGONS, "covers": ["reedbad", "habitat"]}
    with pytest.warns(GeofractalWarning, match=r"covers\[0\].*no polygon.*'reedbad'.*did you mean 'reedbed'"):
        run(site, {"habitats": habitats()}, [asked])
    assert estimates(site, "area", name="habitats")[WHOLE_MAP, "reedbad"] == 0


def test_a_class_that_no_polygon_has_bounds_no_interior_and_is_warned_of(site):
    asked = {**POLYGONS, "interior-depths-m": [10], "depth-by-neighbour-m": {"pastur": 20}}
    with pytest.warns(GeofractalWarning, match=r"depth-by-neighbour-m.*'pastur'.*did you mean 'pasture'"):
        run(site, {"habitats": habitats()}, [asked])


def test_the_record_of_polygons_measured_both_ways_tells_of_rows_and_of_classes(site):
    run(site, {"habitats": habitats()}, [POLYGONS, {"measure": "box-dimension", "of": "habitats"}])
    record = json.loads((site / "out" / "run_record.json").read_text(encoding="utf-8"))
    told = record["layers"]["habitats"]
    assert {one["measure"] for one in told["measures"]} == {"box-dimension", "fragmentation"}
    assert told["copies"]
    assert told["files"]
    assert told["rows"] == CODES.size


def test_check_tells_plane_groups_and_zones_beforehand(site):
    asked = {**POLYGONS, "zones": "zones", "covers": ["habitat"]}
    batch = load_config(write_batch(site, {"habitats": habitats(), "zones": zones()}, [asked]))
    told = "\n".join(check_batch(batch).lines())
    assert "distances between polygons are off by" in told
    assert "group habitat: reedbed, carr woodland" in told
    assert "each of the 2 rows of zones" in told


def test_zones_that_are_odd_keep_their_row_and_say_why(site):
    write_gpkg(site / "zones.gpkg", [HALVES[0], BOWTIE, cells(50, 50, 52, 52), None], layer="zones")
    record = run_halves(site)
    told = record["layers"]["habitats"]["measures"][0]["zones_refused"]
    assert told == {
        "row 1": "invalid: Self-intersection",
        "row 2": "off the map",
        "row 3": "missing geometry",
    }
    copy = gpd.read_file(site / "out" / "zones.gpkg")
    assert copy["habitat_area_km2"].isna().tolist() == [False, True, True, True]
