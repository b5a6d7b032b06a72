"""The sample layers: made anew alike, sound, small, and in tune with the batch that is shipped for them."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import geopandas
import numpy as np
import pyogrio
import pytest
import rasterio
import shapely

FOLDER = Path(__file__).parents[1] / "sample_layers"
BATCHES = FOLDER.parent / "config"
PACKAGE = FOLDER / "archipelago.gpkg"
VECTORS = [(PACKAGE, layer) for layer in ("shoreline", "shore_stretches", "channels", "basins", "roads")]
VECTORS += [(FOLDER / "shore_medium_scale.geojson", None), (FOLDER / "shore_small_scale.shp", None)]
COVERS = {2006: 50.0, 2024: 25.0}


def read(layer):
    return geopandas.read_file(PACKAGE, layer=layer)


@pytest.fixture(scope="module")
def made_anew(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sample_layers")
    subprocess.run([sys.executable, FOLDER / "make_sample_layers.py", folder], check=True, timeout=300)
    return folder


@pytest.mark.parametrize(("path", "layer"), VECTORS)
def test_vectors_are_made_anew_alike(made_anew, path, layer):
    shipped = geopandas.read_file(path, layer=layer)
    anew = geopandas.read_file(made_anew / path.name, layer=layer)
    assert anew.crs == shipped.crs
    assert anew.drop(columns="geometry").equals(shipped.drop(columns="geometry"))
    there = shipped.geometry.notna()
    assert shapely.equals_exact(anew.geometry[there], shipped.geometry[there], tolerance=0.01).all()


@pytest.mark.parametrize("year", COVERS)
def test_land_cover_is_made_anew_alike(made_anew, year):
    name = f"land_cover_{year}.tif"
    with rasterio.open(FOLDER / name) as shipped, rasterio.open(made_anew / name) as anew:
        assert anew.profile == shipped.profile
        assert np.array_equal(anew.read(1), shipped.read(1))
    assert (made_anew / f"{name}.aux.xml").read_text("utf-8") == (FOLDER / f"{name}.aux.xml").read_text(
        "utf-8"
    )


def test_the_folder_holds_what_the_script_makes_and_stays_small(made_anew):
    made = {path.name for path in made_anew.iterdir()}
    shipped = {path.name for path in FOLDER.iterdir() if path.suffix not in {".py", ".md"} and path.is_file()}
    assert shipped == made
    assert sum((FOLDER / name).stat().st_size for name in made) < 5e6


def test_it_lies_in_the_open_ocean():
    """33 W 48 N: some 900 km of water to the nearest land."""
    west, south, east, north = read("shoreline").to_crs("EPSG:4326").total_bounds
    assert -33.6 < west < east < -32.4
    assert 47.7 < south < north < 48.3


@pytest.mark.parametrize(("path", "layer"), VECTORS)
def test_geometry_is_valid(path, layer):
    rows = geopandas.read_file(path, layer=layer)
    missing = rows.geometry.isna()
    assert rows[~missing].geometry.is_valid.all()
    assert missing.sum() == (1 if layer == "channels" else 0)


def test_basins_cover_the_land_without_overlap():
    land, basins = read("shoreline").union_all(), read("basins")
    assert basins.area.sum() == pytest.approx(land.area, rel=1e-6)
    assert basins.union_all().symmetric_difference(land).area < 1e-6 * land.area


def test_rivers_flow_together_and_end_at_the_shore():
    channels = read("channels").set_index("reach_id")
    shore = read("shoreline").union_all().boundary
    drawn = channels[channels.geometry.notna()]
    for _, reach in drawn.iterrows():
        mouth = shapely.Point(reach.geometry.coords[-1])
        if not isinstance(reach.flows_to, str):
            assert mouth.distance(shore) < 0.2
        else:
            assert mouth.equals(shapely.Point(channels.geometry[reach.flows_to].coords[0]))
            assert channels.upstream_km2[reach.flows_to] >= reach.upstream_km2


def test_natural_reaches_of_a_river_form_one_line_but_where_the_middle_was_canalised():
    channels = read("channels")
    named = channels[(channels.status == "natural") & channels.river.notna()]
    lines = named.groupby("river").geometry.apply(lambda reaches: shapely.line_merge(reaches.union_all()))
    broken = lines[lines.geom_type != "LineString"]
    canalised = set(channels.river[channels.status == "canalised"])
    assert len(broken) == 1
    assert set(broken.index) < canalised


def test_names_are_beyond_ascii_and_in_three_scripts_letters():
    names = set(read("channels").river.dropna()) | set(read("shoreline").island.dropna())
    text = "".join(names)
    assert all(not name.isascii() for name in names)
    assert all(letter in text for letter in ("ö", "ł", "λ"))


def test_editions_are_of_the_same_shores_with_ever_fewer_vertices():
    fine = read("shoreline").set_index("shore_id")
    vertices = [len(fine.geometry.iloc[0].exterior.coords)]
    for path, layer in VECTORS[-2:]:
        coarse = geopandas.read_file(path, layer=layer).set_index("shore_id").to_crs(fine.crs)
        assert set(coarse.index) < set(fine.index)
        assert coarse.island.tolist() == fine.island[coarse.index].tolist()
        both = coarse.geometry.iloc[0].intersection(fine.geometry.iloc[0]).area
        assert both == pytest.approx(fine.geometry.iloc[0].area, rel=0.03)
        vertices.append(len(coarse.geometry.iloc[0].exterior.coords))
    assert vertices[0] > 5 * vertices[1] > 25 * vertices[2]


@pytest.mark.parametrize("year", COVERS)
def test_land_cover_follows_the_land(year):
    with rasterio.open(FOLDER / f"land_cover_{year}.tif") as cover:
        assert cover.res == (COVERS[year],) * 2
        codes, palette = cover.read(1), cover.colormap(1)
        land_cells = (codes > 0).sum() * cover.res[0] ** 2
    assert set(np.unique(codes)) == set(range(14))
    assert len({palette[code] for code in range(1, 14)}) == 13
    assert land_cells == pytest.approx(read("shoreline").area.sum(), rel=0.005)


def test_land_cover_changes_between_the_dates():
    """Towns grow, reedbed is drained, woods return to the banks."""
    share = {}
    for year in COVERS:
        with rasterio.open(FOLDER / f"land_cover_{year}.tif") as cover:
            counts = np.bincount(cover.read(1).ravel(), minlength=14)[1:]
        share[year] = counts / counts.sum()
    built_up, reedbed, carr = 12, 3, 5
    assert share[2024][built_up] > 2 * share[2006][built_up]
    assert share[2024][reedbed] < 0.9 * share[2006][reedbed]
    assert share[2024][carr] > 1.2 * share[2006][carr]


def test_class_names_stand_beside_the_maps():
    from geofractal.reader.raster_classes import own_names

    with rasterio.open(FOLDER / "land_cover_2006.tif") as cover:
        names = own_names(cover, 1)
    assert names[1] == "open water"
    assert names[13] == "built-up"
    assert len(names) == 13


def test_the_shipped_batch_uses_these_layers():
    from geofractal.config import load_config

    batch = load_config(BATCHES / "first_batch.yaml")
    for layer in batch.layers.values():
        assert layer.source.parent == FOLDER or layer.source.parent.resolve() == FOLDER
        columns = set(pyogrio.read_info(layer.source, layer=layer.layer)["fields"])
        assert {name for name in (layer.id, layer.group_by) if name} <= columns
    head = (BATCHES / "first_batch.yaml").read_text("utf-8").splitlines()[:2]
    schema = "./geofractal.schema.json"
    assert head == [f"# yaml-language-server: $schema={schema}", f"# $schema: {schema}"]
