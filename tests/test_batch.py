"""A batch from YAML to copies: every row comes out, and a row without a figure says why."""

import os
import shutil
import sqlite3
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
import shapely
from batches import UTM, run, run_rivers, wiggle, write_batch, write_gpkg

import geofractal
from geofractal.batch import parts
from geofractal.batch.parts import part_key
from geofractal.batch.plan import parts_of, plan_batch
from geofractal.config import load_config
from geofractal.errors import ConfigError, OutputError
from geofractal.progress import Progress
from geofractal.reader import layers as source_layers

DIVIDER = {"measure": "divider-dimension", "of": "rivers"}


def _nan_line():
    with np.errstate(invalid="ignore"):
        return shapely.LineString([(0, 0), (np.nan, 1), (2, 2)])


BAD_ROWS = [
    (None, "missing geometry"),
    (shapely.LineString(), "empty geometry"),
    (shapely.Point(5e5, 6e6), "points where lines are wanted"),
    (shapely.LineString([(5e5, 6e6), (5e5, 6e6)]), "zero length"),
    (_nan_line(), "coordinates that are not numbers"),
    (shapely.LineString([(5e5, 6e6), (np.inf, 6e6)]), "coordinates that are not numbers"),
    (shapely.GeometryCollection([wiggle()]), "geometry collection"),
    (shapely.Polygon([(0, 0), (9, 9), (9, 0), (0, 9)]), "invalid polygon"),
    (shapely.LineString([(5e12, 6e12), (5e12, 6.1e12)]), "coordinates outside the CRS's world"),
]


@pytest.mark.parametrize(("geometry", "reason"), BAD_ROWS, ids=[reason for _, reason in BAD_ROWS])
def test_a_bad_row_stays_with_nulls_and_a_note_and_the_batch_goes_on(tmp_path, geometry, reason):
    good = wiggle()
    record, copy = run_rivers(tmp_path, [good, geometry, good])
    assert len(copy) == 3
    assert copy["name"].tolist() == ["row 0", "row 1", "row 2"]
    assert copy["divider_dim"].isna().tolist() == [False, True, False]
    assert reason in copy["divider_note"][1]
    tally = record["layers"]["rivers"]["measures"][0]
    assert (tally["rows"], tally["answered"], tally["refused"]) == (3, 2, 1)
    assert sum(tally["refused_by_reason"].values()) == 1
    assert record["exit_code"] == 0


def test_refusals_fail_the_run_where_the_user_says_so(tmp_path):
    record, _ = run_rivers(tmp_path, [wiggle(), None], run={"refusals": "fail"})
    assert record["exit_code"] == 1


def test_heights_and_measures_are_carried_and_not_measured(tmp_path):
    flat = wiggle()
    xy = shapely.get_coordinates(flat)
    steep = shapely.LineString(np.column_stack([xy, np.arange(len(xy)) * 1000.0]))
    _, copy = run_rivers(tmp_path, [flat, steep])
    assert copy["divider_dim"][0] == copy["divider_dim"][1]
    assert copy.geometry[1].has_z
    assert copy.geometry[1].coords[5][2] == 5000.0


def test_a_self_crossing_line_is_measured_as_it_is(tmp_path):
    _, copy = run_rivers(tmp_path, [wiggle(step=30.0, seed=4)])
    assert not copy.geometry[0].is_simple
    assert copy["divider_dim"][0] > 1


def test_a_layer_without_rows_comes_out_without_rows(tmp_path):
    frame = gpd.GeoDataFrame({"name": np.array([], dtype=str)}, geometry=gpd.GeoSeries([], crs=UTM))
    frame.to_file(tmp_path / "in.gpkg", layer="rivers", geometry_type="LineString")
    record = run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER])
    assert record["layers"]["rivers"]["rows"] == 0
    copy = gpd.read_file(tmp_path / "out" / "in.gpkg")
    assert len(copy) == 0
    assert "divider_dim" in copy.columns


def test_a_layer_without_crs_says_so_and_the_others_go_on(tmp_path):
    write_gpkg(tmp_path / "good.gpkg", [wiggle()])
    gpd.GeoDataFrame(geometry=[wiggle()]).to_file(tmp_path / "bare.shp")
    layers = {"rivers": {"source": "good.gpkg"}, "bare": {"source": "bare.shp"}}
    record = run(tmp_path, layers, [DIVIDER, {**DIVIDER, "of": "bare"}])
    assert record["exit_code"] == 3
    assert "crs" in record["failed_layers"]["bare"]
    assert "bare.shp" in record["failed_layers"]["bare"]
    assert gpd.read_file(tmp_path / "out" / "good.gpkg")["divider_dim"].notna().all()


def test_a_truncated_geopackage_is_named_and_the_others_go_on(tmp_path):
    write_gpkg(tmp_path / "good.gpkg", [wiggle()])
    whole = write_gpkg(tmp_path / "whole.gpkg", [wiggle(i) for i in range(300)])
    (tmp_path / "cut.gpkg").write_bytes(whole.read_bytes()[: whole.stat().st_size // 2])
    layers = {"rivers": {"source": "good.gpkg"}, "cut": {"source": "cut.gpkg"}}
    record = run(tmp_path, layers, [DIVIDER, {**DIVIDER, "of": "cut"}])
    assert record["exit_code"] == 3
    assert "cut.gpkg" in record["failed_layers"]["cut"]
    assert not (tmp_path / "out" / "cut.gpkg").exists()
    assert (tmp_path / "out" / "good.gpkg").exists()


@pytest.mark.parametrize("missing", [".dbf", ".shx"])
def test_a_shapefile_that_lacks_a_part_says_so_or_keeps_its_rows(tmp_path, missing):
    gpd.GeoDataFrame({"name": ["one"]}, geometry=[wiggle()], crs=UTM).to_file(tmp_path / "in.shp")
    (tmp_path / "in.shp").with_suffix(missing).unlink()
    before = {path: path.read_bytes() for path in tmp_path.glob("in.*")}
    record = run(tmp_path, {"rivers": {"source": "in.shp"}}, [DIVIDER])
    if "rivers" in record["failed_layers"]:
        assert missing in record["failed_layers"]["rivers"]
    else:
        assert len(gpd.read_file(tmp_path / "out" / "rivers.gpkg")) == 1
    assert {path: path.read_bytes() for path in tmp_path.glob("in.*")} == before


def test_a_wrong_prj_is_told_row_by_row(tmp_path):
    degrees = gpd.GeoDataFrame(geometry=[wiggle()], crs=UTM)
    degrees.to_file(tmp_path / "in.shp")
    (tmp_path / "in.prj").write_text(gpd.GeoSeries([], crs=4326).crs.to_wkt("WKT1_ESRI"))
    run(tmp_path, {"rivers": {"source": "in.shp"}}, [DIVIDER])
    copy = gpd.read_file(tmp_path / "out" / "rivers.gpkg")
    assert copy["divider_dim"].isna().all()
    assert "outside the CRS's world" in copy["divider_note"][0]


def test_awkward_names_and_long_text_come_through(tmp_path):
    awkward = 'a "quoted" name; DROP TABLE x --\nnext'
    columns = {awkward: [1], "Größe": ["ø" * 300], "select": [2.5]}
    _, copy = run_rivers(tmp_path, [wiggle()], columns=columns)
    assert copy[awkward].tolist() == [1]
    assert copy["Größe"][0] == "ø" * 300
    assert copy["select"].tolist() == [2.5]
    assert copy["divider_dim"].notna().all()


def test_a_source_that_changes_while_it_is_read_keeps_its_earlier_output(tmp_path):
    path = write_gpkg(tmp_path / "in.gpkg", [wiggle(i) for i in range(20)])
    layers = {"rivers": {"source": "in.gpkg"}}
    run(tmp_path, layers, [DIVIDER])
    earlier = (tmp_path / "out" / "in.gpkg").read_bytes()

    class Meddler(Progress):
        def closed(self, _stage):
            with sqlite3.connect(path) as database:
                database.execute("UPDATE gpkg_contents SET description = 'edited meanwhile'")

    record = run(tmp_path, layers, [DIVIDER], progress=Meddler())
    assert "changed while it was read" in record["failed_layers"]["rivers"]
    assert record["exit_code"] == 3
    assert (tmp_path / "out" / "in.gpkg").read_bytes() == earlier


def test_a_read_only_output_folder_is_told(tmp_path, monkeypatch):
    write_gpkg(tmp_path / "in.gpkg", [wiggle()])
    real = Path.mkdir

    def refuse(self, *args, **kwargs):
        if "out" in self.parts:
            raise PermissionError(13, "Permission denied", str(self))
        return real(self, *args, **kwargs)

    monkeypatch.setattr(Path, "mkdir", refuse)
    with pytest.raises(OutputError, match=r"out.*no permission.*choose another output folder"):
        run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER])


@pytest.mark.skipif(not shutil.which("mount") or os.name != "posix" or os.geteuid() != 0, reason="needs root")
def test_a_full_disk_is_told_and_leaves_the_earlier_output(tmp_path):
    disk = tmp_path / "small"
    disk.mkdir()
    if os.system(f"mount -t tmpfs -o size=400k tmpfs {disk} 2>/dev/null"):  # noqa: S605 - a path of our own
        pytest.skip("cannot mount")
    try:
        outputs = {"folder": str(disk), "formats": ["geopackage"]}
        write_gpkg(tmp_path / "in.gpkg", [wiggle()])
        run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER], outputs)
        earlier = (disk / "in.gpkg").read_bytes()
        write_gpkg(tmp_path / "in.gpkg", [wiggle(i, vertices=2000) for i in range(50)], layer="rivers")
        with pytest.raises(OutputError, match="disk is full"):
            run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER], outputs)
        assert (disk / "in.gpkg").read_bytes() == earlier
    finally:
        os.system(f"umount {disk}")  # noqa: S605 - as above


@pytest.mark.parametrize("how", ["path", "link", "case"])
def test_a_source_is_never_written_to(tmp_path, how):
    source = write_gpkg(tmp_path / "in.gpkg", [wiggle()])
    before = source.read_bytes()
    out = tmp_path / "out"
    if how == "path":
        folder = tmp_path
    else:
        out.mkdir()
        folder = out
        if how == "link":
            (out / "in.gpkg").symlink_to(source)
        else:
            (out / "IN.gpkg").hardlink_to(source)
            (out / "in.gpkg").hardlink_to(source)
    outputs = {"folder": str(folder), "formats": ["geopackage"]}
    with pytest.raises(OutputError, match="would overwrite the source"):
        run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER], outputs)
    assert source.read_bytes() == before


def test_two_layers_of_one_geopackage_come_out_in_one_copy(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [wiggle(1)])
    write_gpkg(tmp_path / "in.gpkg", [wiggle(2)], layer="shore")
    layers = {
        "rivers": {"source": "in.gpkg", "layer": "rivers"},
        "coast": {"source": "in.gpkg", "layer": "shore"},
    }
    run(tmp_path, layers, [DIVIDER, {**DIVIDER, "of": "coast"}])
    assert [path.name for path in (tmp_path / "out").glob("*.gpkg")] == ["in.gpkg"]
    for layer in ("rivers", "shore"):
        assert gpd.read_file(tmp_path / "out" / "in.gpkg", layer=layer)["divider_dim"].notna().all()


def test_where_leaves_rows_in_with_a_note(tmp_path):
    _, copy = run_rivers(
        tmp_path,
        [wiggle(1), wiggle(2)],
        layer={"where": "status = 'natural'"},
        columns={"status": ["natural", "canal"]},
    )
    assert copy["divider_dim"].notna().tolist() == [True, False]
    assert copy["divider_note"][1] == "left out by the layer's where"


def test_faults_of_layers_are_all_told_before_a_row_is_measured(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [shapely.Point(5e5, 6e6)])
    layers = {"rivers": {"source": "in.gpkg", "id": "nome", "where": "stat = 1"}}
    with pytest.raises(ConfigError, match="nome") as caught:
        run(tmp_path, layers, [DIVIDER])
    said = str(caught.value)
    assert "did you mean 'name'" in said
    assert "stat" in said
    assert "measures lines" in said
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize("workers", [1, 2, 3])
def test_results_do_not_depend_on_the_number_of_workers(tmp_path, workers):
    lines = [wiggle(i, vertices=50) for i in range(40)]
    _, alone = run_rivers(tmp_path, lines, run={"workers": 1})
    first = (tmp_path / "out" / "in.gpkg").read_bytes()
    _, together = run_rivers(tmp_path, lines, run={"workers": workers})
    assert together.equals(alone)
    assert len((tmp_path / "out" / "in.gpkg").read_bytes()) == len(first)


class _StoppedError(Exception):
    pass


class _StopAfter(Progress):
    def __init__(self, rows):
        self.rows = rows

    def advanced(self, stage):
        if stage.done >= self.rows:
            raise _StoppedError


def test_a_stopped_run_keeps_its_parts_and_the_next_goes_on_from_them(tmp_path, monkeypatch):
    monkeypatch.setattr(source_layers, "_BATCH_ROWS", (8, 10))
    write_gpkg(tmp_path / "in.gpkg", [wiggle(i, vertices=40) for i in range(60)])
    layers = {"rivers": {"source": "in.gpkg"}}
    with pytest.raises(_StoppedError):
        run(tmp_path, layers, [DIVIDER], progress=_StopAfter(30), run={"workers": 1})
    assert [path.name for path in (tmp_path / "out").iterdir()] == [".geofractal-parts"]
    kept = len([*(tmp_path / "out" / ".geofractal-parts").glob("*.arrow")])
    assert 3 <= kept < 6
    measured = []
    real = parts.measure_part
    monkeypatch.setattr(parts, "measure_part", lambda *given: measured.append(given) or real(*given))
    run(tmp_path, layers, [DIVIDER], run={"workers": 1})
    assert len(measured) == 6 - kept
    resumed = (tmp_path / "out" / "in.gpkg").read_bytes()
    run(tmp_path, layers, [DIVIDER], run={"workers": 1})
    assert (tmp_path / "out" / "in.gpkg").read_bytes() == resumed
    assert not (tmp_path / "out" / ".geofractal-parts").exists()


def test_a_run_leaves_the_kept_parts_to_another_that_is_at_work(tmp_path):
    folder = tmp_path / "out" / ".geofractal-parts"
    folder.mkdir(parents=True)
    with subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE) as other:
        (folder / f"{other.pid}.run").touch()
        run_rivers(tmp_path, [wiggle(0)])
        assert any(folder.glob("*.arrow"))
        other.kill()
    run_rivers(tmp_path, [wiggle(0)])
    assert not folder.exists()


@pytest.mark.parametrize("left", [b"", b"not whole", None])
def test_a_kept_part_that_a_power_cut_spoilt_is_measured_anew(tmp_path, left):
    write_gpkg(tmp_path / "in.gpkg", [wiggle(1), wiggle(2)])
    (layer,) = plan_batch(
        load_config(write_batch(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER]))
    ).layers
    (part,) = parts_of(layer, tmp_path)
    whole = parts.measured_part(layer.work, part, tmp_path).results
    (kept,) = tmp_path.glob("*.arrow")
    kept.write_bytes(kept.read_bytes()[:-400] if left is None else left)
    assert parts.measured_part(layer.work, part, tmp_path).results.equals(whole)
    assert parts.measured_part(layer.work, part, tmp_path).results.equals(whole)


def test_a_key_changes_with_rows_options_and_nothing_else(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [wiggle(1), wiggle(2)])

    def keys(**options):
        file = write_batch(tmp_path, {"rivers": {"source": "in.gpkg"}}, [{**DIVIDER, **options}])
        (layer,) = plan_batch(load_config(file)).layers
        (part,) = parts_of(layer, tmp_path)
        return part_key(layer.work, part), part_key(layer.work, replace(part, wkb=part.wkb[::-1]))

    first, other_rows = keys()
    assert keys() == (first, other_rows)
    assert len({first, other_rows, *keys(rungs=9), *keys(prefix="new")}) == 6


def test_a_network_is_counted_whole_and_walked_as_one_path_only(tmp_path):
    trunk = wiggle(3, vertices=900)
    branch = shapely.LineString([trunk.coords[450], *shapely.affinity.rotate(trunk, 90).coords])
    columns = {"river": ["a", "a"]}
    write_gpkg(tmp_path / "in.gpkg", [trunk, branch], **columns)
    box = {"measure": "box-dimension", "of": "rivers"}
    run(tmp_path, {"rivers": {"source": "in.gpkg", "group-by": "river"}}, [DIVIDER, box])
    copy = gpd.read_file(tmp_path / "out" / "in.gpkg")
    assert copy["divider_dim"].isna().all()
    assert copy["divider_note"].str.contains("do not form one path").all()
    (whole,) = geofractal.box_dimension([shapely.MultiLineString([trunk, branch])], crs=UTM)["box_dim"]
    assert copy["box_dim"].tolist() == pytest.approx([whole, whole], rel=1e-9)
