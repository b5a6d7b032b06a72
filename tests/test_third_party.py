"""A third party's measure, in a package of its own, through a whole batch: in processes, and in this one."""

import geopandas as gpd
import numpy as np
import plugin_packages
import pyarrow as pa
import pytest
import shapely
from batches import UTM, run, wiggle, write_gpkg

from geofractal.batch.parts import RowsPart, measure_part
from geofractal.batch.plan import plan_batch
from geofractal.config import load_config
from geofractal.registry import load_measure


@pytest.fixture
def installed(tmp_path, monkeypatch):
    site = tmp_path / "site"
    site.mkdir()
    plugin_packages.install_example(site)
    plugin_packages.open_folder(site, monkeypatch)
    monkeypatch.setenv("PYTHONPATH", str(site))  # spawned processes start with their own path
    yield site
    monkeypatch.undo()
    plugin_packages.forget()


@pytest.mark.usefixtures("installed")
@pytest.mark.parametrize("workers", [1, 2])
def test_it_runs_in_processes_and_gives_numpys_own_figures(tmp_path, workers):
    lines = [wiggle(seed, vertices=30) for seed in range(60)]
    write_gpkg(tmp_path / "in.gpkg", lines)
    asked = [{"measure": "vertex-spacing", "of": "rivers"}]
    run(tmp_path, {"rivers": {"source": "in.gpkg"}}, asked, run={"workers": workers})
    copy = gpd.read_file(tmp_path / "out" / "in.gpkg")
    (name,) = [column for column in copy.columns if column.endswith("_m")]
    spacing = [np.median(np.hypot(*np.diff(shapely.get_coordinates(line), axis=0).T)) for line in lines]
    # UTM's scale near its central meridian is 0.9996 (common practice).
    np.testing.assert_allclose(copy[name] * 0.9996, spacing, rtol=1e-3)
    assert load_measure("vertex-spacing").holds_gil


@pytest.mark.usefixtures("installed")
def test_its_parts_are_the_same_in_this_process(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [wiggle(seed, vertices=30) for seed in range(10)])
    asked = [{"measure": "vertex-spacing", "of": "rivers"}]
    run(tmp_path, {"rivers": {"source": "in.gpkg"}}, asked)
    copy = gpd.read_file(tmp_path / "out" / "in.gpkg")
    (layer,) = plan_batch(load_config(tmp_path / "batch.yaml")).layers
    frame = gpd.read_file(tmp_path / "in.gpkg").to_crs(UTM)
    wkb = shapely.to_wkb(frame.geometry.to_numpy())
    here = measure_part(layer.work, RowsPart(np.arange(10), pa.array(wkb, pa.binary()))).results
    for column in layer.columns:
        written = copy[column.name]
        assert here.column(column.name).to_pylist() == written.where(written.notna(), None).tolist()
