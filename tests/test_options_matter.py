"""Nothing is decoration: changing any one key of a batch file changes what comes out of it."""

import geopandas as gpd
import numpy as np
import pytest
import shapely
from batches import UTM, run, wiggle, write_gpkg

from geofractal.config.models import Outputs, Prepare, Projection, RequestHead, Run, VectorLayer
from geofractal.errors import ConfigError
from geofractal.registry import load_measure

HALVES = [
    shapely.LineString(wiggle(9, vertices=600).coords[:300]),
    shapely.LineString(wiggle(9, vertices=600).coords[299:]),
]
GAP = [HALVES[0], shapely.affinity.translate(HALVES[1], 3.0, 0.0)]
BRANCH = [*HALVES, shapely.LineString([HALVES[1].coords[0], (500_400.0, 6_000_900.0)])]
RING = shapely.Polygon(shapely.LineString(wiggle(3).coords).convex_hull.buffer(400).segmentize(15).exterior)
HOLED = RING.difference(RING.centroid.buffer(200))
BOW_TIE = shapely.Polygon([*wiggle(1).coords, *wiggle(2).coords])
REPEATED = shapely.LineString(np.repeat(shapely.get_coordinates(wiggle(5)), 3, axis=0))
LONG_EAST = shapely.LineString([(0, 50), (15, 50), (30, 50.5)])
CONTINENT = shapely.LineString(shapely.Point(20, 20).buffer(18).exterior.segmentize(0.5).coords)


def figures(folder, *, layer=None, options=None, geometries=None, crs=UTM, columns=None, **sections):
    """Return the copy's columns as one comparable value."""
    write_gpkg(folder / "in.gpkg", geometries or [wiggle(1), wiggle(2)], crs=crs, **(columns or {}))
    asked = {"measure": "divider-dimension", "of": "rivers", **(options or {})}
    record = run(folder, {"rivers": {"source": "in.gpkg", **(layer or {})}}, [asked], **sections)
    files = sorted(path.name for path in (folder / "out").iterdir() if "run_record" not in path.name)
    copies = [path for path in (folder / "out").iterdir() if path.suffix in {".gpkg", ".shp"}]
    frame = gpd.read_file(copies[0]).drop(columns="geometry")
    return files, frame.columns.tolist(), frame.astype(str).to_numpy().tolist(), record["exit_code"]


def case(base=None, **changed):
    """Return what a batch is asked in the base case, and what is changed in it."""
    return base or {}, changed


CASES = {
    ("layer", "where"): case(layer={"where": "name = 'row 0'"}),
    ("layer", "group_by"): case(
        base=dict(geometries=HALVES, columns={"river": ["a", "a"]}), layer={"group-by": "river"}
    ),
    ("layer", "edges"): case(base=dict(geometries=[LONG_EAST], crs=4326), layer={"edges": "geodesic"}),
    ("layer", "prepare"): case(base=dict(geometries=[BOW_TIE]), layer={"prepare": {"repair": True}}),
    ("prepare", "repair"): case(base=dict(geometries=[BOW_TIE]), layer={"prepare": {"repair": True}}),
    ("prepare", "drop_repeated"): case(
        base=dict(geometries=[REPEATED]), layer={"prepare": {"drop-repeated": True}}
    ),
    ("prepare", "boundaries"): case(
        base=dict(geometries=[HOLED]), layer={"prepare": {"boundaries": "outer"}}
    ),
    ("prepare", "join_within_m"): case(
        base=dict(geometries=GAP, columns={"river": ["a", "a"]}, layer={"group-by": "river"}),
        layer={"group-by": "river", "prepare": {"join-within-m": 5}},
    ),
    ("prepare", "branches"): case(
        base=dict(geometries=BRANCH, columns={"river": ["a"] * 3}, layer={"group-by": "river"}),
        layer={"group-by": "river", "prepare": {"branches": "main-path"}},
    ),
    ("projection", "plane"): case(projection={"plane": "layer"}),
    ("projection", "budget_percent"): case(projection={"budget-percent": 1e-9}),
    ("projection", "three_dimensions"): case(
        base=dict(geometries=[CONTINENT], crs=4326),
        projection={"three-dimensions": False},
    ),
    ("outputs", "formats"): case(outputs={"folder": "out", "formats": ["shapefile"]}),
    ("run", "refusals"): case(base=dict(geometries=[wiggle(), None]), run={"refusals": "fail"}),
    ("request", "prefix"): case(options={"prefix": "new"}),
    ("divider-dimension", "ruler_min_m"): case(options={"ruler-min-m": 100}),
    ("divider-dimension", "ruler_max_m"): case(options={"ruler-max-m": 300}),
    ("divider-dimension", "rungs"): case(options={"rungs": 9}),
    ("divider-dimension", "starts"): case(options={"starts": 1}),
    ("divider-dimension", "lengths_at_m"): case(options={"lengths-at-m": [100]}),
    ("divider-dimension", "ladder_table"): case(options={"ladder-table": True}),
    ("divider-dimension", "extrapolate"): case(
        base=dict(options={"lengths-at-m": [20_000]}),
        options={"lengths-at-m": [20_000], "extrapolate": True},
    ),
}

COVERED_ELSEWHERE = {
    ("layer", "source"): "it is the layer",
    ("layer", "layer"): "test_a_layer_is_chosen_by_name",
    ("layer", "crs"): "test_a_stated_crs_is_taken_and_one_that_contradicts_is_refused",
    ("layer", "override_crs"): "test_a_stated_crs_is_taken_and_one_that_contradicts_is_refused",
    ("layer", "id"): "test_refused_rows_are_listed_by_their_id",
    ("layer", "encoding"): "test_a_stated_encoding_reads_the_text_right",
    ("layer", "groups"): "test_zones_and_groups_give_the_figures_of_the_raster_of_the_same_map",
    ("outputs", "folder"): "test_the_folder_is_where_results_go",
    ("outputs", "tables"): "test_ladder_tables.py, test_covers_batch.py",
    ("run", "workers"): "test_batch.py: results do not depend on it",
    ("request", "measure"): "it is the measure",
    ("request", "of"): "it is the layer",
    ("sinuosity", "ruler_m"): "test_sinuosity.py",
}


@pytest.mark.parametrize("key", CASES, ids=".".join)
def test_changing_a_key_changes_the_result(tmp_path, key):
    base, changed = CASES[key]
    (tmp_path / "base").mkdir()
    (tmp_path / "changed").mkdir()
    before = figures(tmp_path / "base", **base)
    assert figures(tmp_path / "changed", **{**base, **changed}) != before


def test_the_folder_is_where_results_go(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [wiggle()])
    asked = [{"measure": "divider-dimension", "of": "rivers"}]
    run(
        tmp_path, {"rivers": {"source": "in.gpkg"}}, asked, {"folder": "elsewhere", "formats": ["geopackage"]}
    )
    assert (tmp_path / "elsewhere" / "in.gpkg").exists()
    assert not (tmp_path / "out").exists()


def test_a_layer_is_chosen_by_name(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [wiggle(1)], layer="rivers")
    write_gpkg(tmp_path / "in.gpkg", [wiggle(2)], layer="canals")
    asked = [{"measure": "divider-dimension", "of": "lines"}]
    run(tmp_path, {"lines": {"source": "in.gpkg", "layer": "canals"}}, asked)
    copy = tmp_path / "out" / "in.gpkg"
    assert "divider_dim" in gpd.read_file(copy, layer="canals")
    assert "divider_dim" not in gpd.read_file(copy, layer="rivers")
    record = run(tmp_path, {"lines": {"source": "in.gpkg"}}, asked)
    assert "name one of its layers" in record["failed_layers"]["lines"]


def test_a_stated_crs_is_taken_and_one_that_contradicts_is_refused(tmp_path):
    gpd.GeoDataFrame({"name": ["bare"]}, geometry=[wiggle()]).to_file(tmp_path / "bare.shp")
    asked = [{"measure": "divider-dimension", "of": "lines", "lengths-at-m": [100]}]

    def length(**layer):
        run(tmp_path, {"lines": {"source": "bare.shp", **layer}}, asked)
        return gpd.read_file(tmp_path / "out" / "lines.gpkg")["length_at_100m_ruler_km"][0]

    # The US survey foot is 1200/3937 m: the same numbers in feet are shorter on the ground (NIST SP 811).
    metres, feet = length(crs="EPSG:32631"), length(crs="EPSG:2264")
    assert metres > 2 * feet
    write_gpkg(tmp_path / "own.gpkg", [wiggle()])
    contradicted = {"lines": {"source": "own.gpkg", "crs": "EPSG:32632"}}
    record = run(tmp_path, contradicted, asked)
    assert "override-crs" in record["failed_layers"]["lines"]
    contradicted["lines"]["override-crs"] = True
    assert run(tmp_path, contradicted, asked)["failed_layers"] == {}


def test_refused_rows_are_listed_by_their_id(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [wiggle(), None, wiggle(2)], code=["a", "b", "c"])
    layer = {"source": "in.gpkg", "id": "code", "where": "code <> 'c'"}
    record = run(tmp_path, {"lines": layer}, [{"measure": "divider-dimension", "of": "lines"}])
    listed = (tmp_path / "out" / "refused_rows.csv").read_text("utf-8-sig").splitlines()
    assert listed == ["layer,row,id,measure,reason", "lines,2,b,divider-dimension,missing geometry"]
    tally = record["layers"]["lines"]["measures"][0]
    assert (tally["rows"], tally["left_out_by_where"], tally["answered"], tally["refused"]) == (3, 1, 1, 1)


def test_a_stated_encoding_reads_the_text_right(tmp_path):
    gpd.GeoDataFrame({"name": ["Größe"]}, geometry=[wiggle()], crs=UTM).to_file(
        tmp_path / "in.shp", encoding="ISO-8859-1"
    )
    (tmp_path / "in.cpg").unlink()
    asked = [{"measure": "divider-dimension", "of": "lines"}]
    run(tmp_path, {"lines": {"source": "in.shp", "encoding": "ISO-8859-1"}}, asked)
    assert gpd.read_file(tmp_path / "out" / "lines.gpkg")["name"].tolist() == ["Größe"]


def test_every_option_has_its_case():
    models = {
        "layer": VectorLayer,
        "prepare": Prepare,
        "projection": Projection,
        "outputs": Outputs,
        "run": Run,
        "request": RequestHead,
        "divider-dimension": load_measure("divider-dimension").options,
        "sinuosity": load_measure("sinuosity").options,
    }
    keys = {(name, field) for name, model in models.items() for field in model.model_fields}
    assert keys == {*CASES, *COVERED_ELSEWHERE}


def test_projection_outcomes_are_all_reached(tmp_path):
    """Layers that force each outcome: a plane of its own, a conic, the layer's, three dimensions, refusal."""
    east = shapely.LineString([(0, 60), (50, 60)]).segmentize(0.05)  # 2,780 km along a parallel
    small = shapely.LineString(np.column_stack([np.linspace(0, 1, 200), 50 + np.cumsum(np.ones(200)) / 1e4]))
    around_the_pole = shapely.LineString([(-180, 86), (180, 86)]).segmentize(0.5)
    cases = {
        "feature-azimuthal": (small, {}),
        "feature-conic": (east, {}),
        "layer-conic": (small, {"plane": "layer"}),
        "layer-azimuthal": (around_the_pole, {"plane": "layer"}),
        "three-dimensions": (CONTINENT, {}),
        None: (CONTINENT, {"three-dimensions": False}),
    }
    for number, (plane, (geometry, projection)) in enumerate(cases.items()):
        folder = tmp_path / str(number)
        folder.mkdir()
        write_gpkg(folder / "in.gpkg", [geometry], crs=4326)
        asked = [{"measure": "divider-dimension", "of": "lines"}]
        run(folder, {"lines": {"source": "in.gpkg"}}, asked, projection=projection)
        row = gpd.read_file(folder / "out" / "in.gpkg").iloc[0]
        if plane is None:
            assert "exceeds the budget of 0.5 %" in row["divider_note"]
        else:
            assert row["divider_plane"] == plane
            assert row["divider_distortion_percent"] <= 0.5


def test_a_budget_that_is_no_number_is_refused(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [wiggle()])
    with pytest.raises(ConfigError, match="budget-percent"):
        run(
            tmp_path,
            {"lines": {"source": "in.gpkg"}},
            [{"measure": "divider-dimension", "of": "lines"}],
            projection={"budget-percent": "half"},
        )
