"""Vector layers in: what is known beforehand, even batches, every row accounted for, bad files refused."""

from __future__ import annotations

import json
import os
import pickle
import shutil
import sqlite3
import subprocess
import sys
import zipfile
from contextlib import closing

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pyogrio
import pyogrio.raw
import pyproj
import pytest
import shapely
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from shapely.geometry import LineString, Polygon

from geofractal.errors import LayerError, SourceError
from geofractal.reader.vector import layer_info, list_layers, stream

DRIVERS = {
    "geopackage": ("gpkg", "GPKG"),
    "shapefile": ("shp", "ESRI Shapefile"),
    "flatgeobuf": ("fgb", "FlatGeobuf"),
    "geojson": ("geojson", "GeoJSON"),
    "geojson-lines": ("geojsonl", "GeoJSONSeq"),
    "geoparquet": ("parquet", None),
}


def table(n: int = 7, **columns) -> pa.Table:
    shapes = [LineString([(i, 0), (i, 1), (i + 1, 1)]) for i in range(n)]
    names = [None if i == 2 else f"Größe {i}" for i in range(n)]
    plain = {"number": pa.array(range(n), pa.int64()), "name": pa.array(names, pa.string())}
    return pa.table({**(columns or plain), "geometry": pa.array(shapely.to_wkb(shapes), pa.binary())})


def write(path, rows: pa.Table, *, layer=None, kind="LineString", crs="EPSG:4326", driver=None, **options):
    if path.suffix == ".parquet":
        column = {"encoding": "WKB", "geometry_types": [kind], "crs": crs and pyproj.CRS(crs).to_json_dict()}
        geo = {"version": "1.1.0", "primary_column": "geometry", "columns": {"geometry": column}}
        pq.write_table(rows.replace_schema_metadata({"geo": json.dumps(geo)}), path, row_group_size=3)
        return path
    driver = driver or next(name for end, name in DRIVERS.values() if end == path.suffix[1:])
    if driver == "FlatGeobuf":
        options = {"SPATIAL_INDEX": "NO", **options}
    pyogrio.raw.write_arrow(
        rows,
        path,
        layer=layer or path.stem,
        driver=driver,
        geometry_type=kind,
        crs=crs,
        geometry_name="geometry",
        **options,
    )
    return path


@pytest.fixture(params=DRIVERS)
def source(request, tmp_path):
    return request.param, write(tmp_path / f"rivers.{DRIVERS[request.param][0]}", table())


def test_every_format_tells_the_same(source):
    word, path = source
    assert list_layers(path) == ("rivers",)
    info = pickle.loads(pickle.dumps(layer_info(path)))  # noqa: S301 - our own bytes
    assert (info.driver, info.layer, info.features) == (word, "rivers", 7)
    assert info.geometry == "lines"
    assert info.field_names == ("number", "name")
    assert pyproj.CRS(info.crs).to_epsg() == 4326
    assert (info.has_z, info.has_m, info.encoding) == (False, False, None)
    assert info.fid_column == ("fid" if word == "geopackage" else "")
    assert info.bounds == (None if word == "geoparquet" else (0, 0, 7, 1))


@pytest.mark.parametrize("size", [1, 2, 3, 7, 100])
def test_batches_are_even_from_the_start_and_hold_every_row(source, size):
    word, path = source
    batches = list(stream(layer_info(path), columns=["name"], rows_per_batch=size))
    assert [len(b) for b in batches[:-1]] == [size] * (len(batches) - 1)
    assert [b.first_row for b in batches] == list(range(0, 7, size))
    wkb = [value for b in batches for value in b.wkb.to_pylist()]
    assert shapely.equals(shapely.from_wkb(wkb), shapely.from_wkb(table()["geometry"].to_pylist())).all()
    names = [value for b in batches for value in b.attributes["name"].to_pylist()]
    assert names == table()["name"].to_pylist()
    fids = [b.fids for b in batches]
    assert (
        np.concatenate(fids).tolist() == [*range(1, 8)]
        if word == "geopackage"
        else fids == [None] * len(fids)
    )


def test_columns_come_as_asked(source):
    _, path = source
    info = layer_info(path)
    read = {
        names: next(stream(info, columns=names)).attributes.schema.names
        for names in [(), ("name", "number"), None]
    }
    assert read == {(): [], ("name", "number"): ["name", "number"], None: ["number", "name"]}


def test_a_column_that_is_not_there_is_refused_with_the_nearest(source):
    _, path = source
    with pytest.raises(
        LayerError, match=r"rivers.* has no column 'nmae'; allowed: 'number', 'name'; did you mean 'name'"
    ):
        stream(layer_info(path), columns=["nmae"])


@pytest.mark.parametrize(
    "word", [w for w in DRIVERS if w != "geojson-lines"]
)  # it would be a file of no bytes
def test_a_layer_with_no_rows_yields_nothing(word, tmp_path):
    path = write(tmp_path / f"empty.{DRIVERS[word][0]}", table(0))
    info = layer_info(path)
    assert (info.features, list(stream(info, columns=None))) == (0, [])


def test_layers_are_named_or_listed(tmp_path):
    path = write(tmp_path / "two.gpkg", table(1), layer="shore")
    write(path, table(2), layer="channels")
    odd = 'it\'s "odd"; DROP TABLE\nshore'
    write(path, table(3), layer=odd)
    with closing(sqlite3.connect(path)) as base, base:
        base.execute("CREATE TABLE notes (text)")
        base.execute(
            "INSERT INTO gpkg_contents (table_name, data_type, identifier) VALUES ('notes', 'attributes', '')"
        )
    assert list_layers(path) == ("shore", "channels", odd)
    assert [layer_info(path, layer=name).features for name in list_layers(path)] == [1, 2, 3]
    assert sum(len(b) for b in stream(layer_info(path, layer=odd))) == 3
    with pytest.raises(
        LayerError, match="name one of its layers under 'layer'; allowed: 'shore', 'channels'"
    ):
        layer_info(path)
    with pytest.raises(LayerError, match=r"has no layer 'chanels'; .*did you mean 'channels'"):
        layer_info(path, layer="chanels")


@pytest.mark.filterwarnings("ignore:'crs' was not provided")
@pytest.mark.parametrize("word", [w for w in DRIVERS if not w.startswith("geojson")])
def test_a_layer_without_crs_is_refused_until_the_config_gives_one(word, tmp_path):
    path = write(tmp_path / f"bare.{DRIVERS[word][0]}", table(), crs=None)
    with pytest.raises(LayerError, match="layer 'bare' has no CRS; state it under 'crs'"):
        layer_info(path)
    assert layer_info(path, need_crs=False).crs is None
    assert pyproj.CRS(layer_info(path, crs="EPSG:2193").crs).to_epsg() == 2193


def test_a_crs_that_contradicts_the_layer_is_refused_unless_it_overrides(tmp_path):
    path = write(tmp_path / "rivers.gpkg", table(), crs="EPSG:2193")
    assert layer_info(path, crs="EPSG:2193").crs == layer_info(path).crs
    with pytest.raises(
        LayerError,
        match=r"is in 'NZGD2000 / New Zealand .*', but 'crs' says 'WGS 84'.*override-crs",
    ):
        layer_info(path, crs="EPSG:4326")
    assert pyproj.CRS(layer_info(path, crs="EPSG:4326", override_crs=True).crs).to_epsg() == 4326
    with pytest.raises(LayerError, match="crs 'EPSG:0' is not known to PROJ"):
        layer_info(path, crs="EPSG:0")


@pytest.mark.parametrize("srs_id", [-1, 0])
def test_geopackage_words_for_an_undefined_crs_are_none(tmp_path, srs_id):
    path = write(tmp_path / "rivers.gpkg", table())
    with closing(sqlite3.connect(path)) as base, base:
        base.execute("UPDATE gpkg_geometry_columns SET srs_id = ?", (srs_id,))
        base.execute("UPDATE gpkg_contents SET srs_id = ?", (srs_id,))
    with pytest.raises(LayerError, match="has no CRS"):
        layer_info(path)


def test_a_prj_that_says_nothing_is_no_crs(tmp_path):
    path = write(tmp_path / "rivers.shp", table())
    path.with_suffix(".prj").write_text("not a CRS at all")
    with pytest.raises(LayerError, match="has no CRS"):
        layer_info(path)


def test_rows_that_a_format_loses_silently_are_missed(tmp_path):
    """FlatGeobuf's Arrow stream ends without an error where a batch meets GDAL's limit of bytes."""
    path = write(tmp_path / "rivers.fgb", table(200))
    info = layer_info(path)
    pyogrio.set_gdal_config_options({"OGR_ARROW_MEM_LIMIT": "3000"})
    try:
        with pytest.raises(SourceError, match=r"layer 'rivers': \d+ rows were read, but it counts 200"):
            list(stream(info))
    finally:
        pyogrio.set_gdal_config_options({"OGR_ARROW_MEM_LIMIT": None})


@pytest.mark.parametrize("word", DRIVERS)
@pytest.mark.parametrize("kept", [0.02, 0.3, 0.7, 0.97])
def test_a_file_cut_off_is_refused(word, kept, tmp_path):
    path = write(tmp_path / f"rivers.{DRIVERS[word][0]}", table(3000))
    whole = path.read_bytes()
    path.write_bytes(whole[: int(kept * len(whole))])
    with pytest.raises(SourceError, match=r"rivers\.\w+.*(cannot be read|cut off|rows were read)"):
        list(stream(layer_info(path), columns=None))


def test_a_line_that_cannot_be_read_is_not_skipped(tmp_path):
    path = write(tmp_path / "rivers.geojsonl", table(5))
    lines = path.read_text().splitlines()
    path.write_text("\n\n".join(lines))
    assert layer_info(path).features == 5
    path.write_text("".join(f"\x1e{json.dumps(json.loads(line), indent=1)}\n" for line in lines))  # RFC 8142
    assert layer_info(path).features == 5
    path.write_text("\n".join([*lines[:3], "{...}", *lines[3:]]))
    with pytest.raises(SourceError, match="6 features stand in it and 5 can be read"):
        layer_info(path)


@pytest.mark.parametrize(("part", "loss"), [(".shx", "the index of its shapes"), (".dbf", "its attributes")])
def test_a_shapefile_that_lacks_a_part_is_refused_and_never_repaired(tmp_path, part, loss):
    path = write(tmp_path / "rivers.shp", table())
    path.with_suffix(part).unlink()
    before = sorted(p.name for p in tmp_path.iterdir())
    with pytest.raises(SourceError, match=f"rivers{part} is missing, which holds {loss}"):
        layer_info(path)
    assert sorted(p.name for p in tmp_path.iterdir()) == before


def test_upper_case_names_of_a_shapefile(tmp_path):
    path = write(tmp_path / "RIVERS.shp", table())
    for beside in list(tmp_path.iterdir()):
        beside.rename(beside.with_suffix(beside.suffix.upper()))
    assert layer_info(path.with_suffix(".SHP")).features == 7


def zipped(tmp_path, *members) -> object:
    archive = tmp_path / "all.zip"
    with zipfile.ZipFile(archive, "w", zipfile.ZIP_DEFLATED) as out:
        for member in members:
            for beside in tmp_path.glob(f"{member.rpartition('/')[2]}.*"):
                if beside.suffix != ".zip":
                    out.write(beside, f"{member}{beside.suffix}")
        out.writestr("__MACOSX/._rivers.shp", b"")
    return archive


def test_zipped_shapefiles(tmp_path):
    write(tmp_path / "rivers.shp", table())
    write(tmp_path / "shore.shp", table(2))
    archive = zipped(tmp_path, "deep/down/rivers", "shore")
    assert list_layers(archive) == ("rivers", "shore")
    info = layer_info(archive, layer="rivers")
    assert (info.driver, info.features) == ("shapefile", 7)
    (batch,) = stream(info, columns=["name"])
    assert batch.attributes["name"].to_pylist()[3] == "Größe 3"
    (tmp_path / "shore.dbf").unlink()
    with pytest.raises(SourceError, match=r"shore\.dbf is missing"):
        layer_info(zipped(tmp_path, "shore"))
    (tmp_path / "rivers.shp").write_bytes((tmp_path / "rivers.shp").read_bytes()[:-30])
    with pytest.raises(SourceError, match=r"rivers\.shp is cut off: \d+ bytes of \d+"):
        layer_info(zipped(tmp_path, "rivers"))
    with pytest.raises(SourceError, match=r"holds no \.shp"):
        layer_info(zipped(tmp_path))


def test_latin_1_attributes(tmp_path):
    path = tmp_path / "rivers.shp"
    columns = [np.array(table()["name"].to_pylist(), object)]
    wkb = np.array(table()["geometry"].to_pylist(), object)
    how = {"crs": "EPSG:4326", "geometry_type": "LineString", "encoding": "ISO-8859-1"}
    pyogrio.raw.write(path, wkb, columns, ["name"], driver="ESRI Shapefile", **how)
    assert next(stream(layer_info(path), columns=["name"])).attributes["name"][3].as_py() == "Größe 3"
    path.with_suffix(".cpg").unlink()  # by custom ISO-8859-1
    assert next(stream(layer_info(path), columns=["name"])).attributes["name"][3].as_py() == "Größe 3"
    path.with_suffix(".cpg").write_text("UTF-8")
    with pytest.raises(
        LayerError, match="text of column 'name' is not UTF-8; state the right one, such as encoding"
    ):
        list(stream(layer_info(path), columns=["name"]))
    path.with_suffix(".cpg").write_text("KOI8-R")
    assert next(stream(layer_info(path), columns=["name"])).attributes["name"][3].as_py() != "Größe 3"
    right = layer_info(path, encoding="ISO-8859-1")
    assert next(stream(right, columns=["name"])).attributes["name"][3].as_py() == "Größe 3"
    with pytest.raises(LayerError, match="encoding 'klingon' is not known"):
        layer_info(path, encoding="klingon")


@pytest.mark.parametrize("word", ["geojson", "flatgeobuf", "geoparquet"])
def test_columns_that_differ_only_by_case_are_told_apart(word, tmp_path):
    rows = table(1, Name=["upper"], name=["lower"])
    path = tmp_path / f"rivers.{DRIVERS[word][0]}"
    if word == "geoparquet":
        write(path, rows)
    else:
        fields = [rows[name].to_numpy() for name in ("Name", "name")]
        how = {"crs": "EPSG:4326", "geometry_type": "LineString"}
        pyogrio.raw.write(
            path, rows["geometry"].to_numpy(), fields, ["Name", "name"], driver=DRIVERS[word][1], **how
        )
    info = layer_info(path)
    for names in (("Name",), ("name",), ("name", "Name"), ()):
        expected = {name: {"Name": ["upper"], "name": ["lower"]}[name] for name in names}
        assert next(stream(info, columns=names)).attributes.to_pydict() == expected


def test_odd_column_names_and_long_text(tmp_path):
    odd = ["it's", 'a "b"', "x; DROP TABLE y", "new\nline", "Ö"]
    path = write(tmp_path / "rivers.gpkg", table(1, **{name: ["v" * 300] for name in odd}))
    info = layer_info(path)
    assert info.field_names == tuple(odd)
    for name in odd:
        assert next(stream(info, columns=[name])).attributes.to_pydict() == {name: ["v" * 300]}


@pytest.mark.parametrize("word", ["geopackage", "flatgeobuf", "geojson"])
def test_times_keep_their_zones_as_text(word, tmp_path):
    text = pa.array(["2020-01-01T00:00:00+05:30"])
    field = pa.field("seen", pa.string(), metadata={"GDAL:OGR:type": "DateTime"})
    shape = pa.array(shapely.to_wkb([LineString([(0, 0), (1, 1)])]))
    rows = pa.table([text, shape], schema=pa.schema([field, ("geometry", pa.binary())]))
    info = layer_info(write(tmp_path / f"rivers.{DRIVERS[word][0]}", rows))
    assert info.fields == (("seen", "datetime"),)
    attributes = next(stream(info, columns=None)).attributes
    assert attributes["seen"].to_pylist() == ["2020-01-01T00:00:00+05:30"]
    assert attributes.schema.field("seen").metadata[b"GDAL:OGR:type"] == b"DateTime"


@pytest.mark.parametrize(
    ("text", "z", "m"),
    [
        ("LINESTRING Z (0 0 5, 1 1 5)", True, False),
        ("LINESTRING M (0 0 5, 1 1 5)", False, True),
        ("LINESTRING ZM (0 0 5 6, 1 1 5 6)", True, True),
    ],
)
def test_heights_and_measures_are_found_and_carried(tmp_path, text, z, m):
    wkb = shapely.to_wkb(shapely.from_wkt(text), output_dimension=4, flavor="iso")
    rows = pa.table({"a": [1], "geometry": pa.array([wkb], pa.binary())})
    for path in (
        write(tmp_path / "rivers.gpkg", rows, kind="Unknown"),
        write(tmp_path / "rivers.parquet", rows),
    ):
        info = layer_info(path)
        assert (info.has_z, info.has_m) == (z, m)
        assert next(stream(info)).wkb.to_pylist() == [wkb]


def test_curves_come_as_they_are_stored(tmp_path):
    """A circular string has WKB type 8 (ISO 19125-1)."""
    arc = bytes.fromhex("010800000003000000") + np.array([0, 0, 1, 1, 2, 0], "<f8").tobytes()
    rows = pa.table({"a": [1], "geometry": pa.array([arc], pa.binary())})
    path = write(tmp_path / "arcs.gpkg", rows, kind="Unknown")
    info = layer_info(path)
    assert next(stream(info)).wkb.to_pylist() == [arc]


def test_null_geometry_stays(tmp_path):
    rows = pa.table({"a": [1, 2], "geometry": pa.array([None, table(1)["geometry"][0].as_py()], pa.binary())})
    for ending in ("gpkg", "geojson", "parquet", "shp"):
        (batch,) = stream(layer_info(write(tmp_path / f"rivers.{ending}", rows)))
        assert batch.wkb.is_null().to_pylist() == [True, False]


def test_rows_a_batch_follow_from_the_bytes_a_row_takes(tmp_path):
    small = layer_info(write(tmp_path / "small.fgb", table(3)))
    shore = shapely.to_wkb(LineString(np.random.default_rng(1).normal(size=(60_000, 2))))
    rows = pa.table({"a": [1] * 8, "geometry": pa.array([shore] * 8, pa.binary())})
    large = layer_info(write(tmp_path / "large.fgb", rows))
    assert small.rows_per_batch == 5000
    assert large.rows_per_batch == 24_000_000 // (large.path.stat().st_size / 8)


def test_bounds_spoilt_by_a_coordinate_are_unknown(tmp_path):
    wkb = shapely.to_wkb([LineString([(0, 0), (np.inf, 1)]), LineString([(0, 0), (1, 1)])])
    rows = pa.table({"a": [1, 2], "geometry": pa.array(wkb, pa.binary())})
    assert layer_info(write(tmp_path / "rivers.gpkg", rows)).bounds is None


def test_polygons_and_mixed_layers_say_so(tmp_path):
    square = pa.array(shapely.to_wkb([Polygon([(0, 0), (1, 0), (1, 1)])]))
    rows = pa.table({"a": [1], "geometry": square})
    assert layer_info(write(tmp_path / "lakes.gpkg", rows, kind="Polygon")).geometry == "polygons"
    assert layer_info(write(tmp_path / "any.gpkg", rows, kind="Unknown")).geometry == "unknown"


@pytest.mark.parametrize(
    ("name", "content", "message"),
    [
        ("rivers.gpkg", b"hello", "rivers.gpkg cannot be read"),
        ("rivers.fgb", b"hello", "rivers.fgb"),
        ("rivers.parquet", b"hello", "rivers.parquet cannot be read"),
        ("rivers.zip", b"hello", "rivers.zip cannot be read"),
        ("rivers.geojson", b"[1, 2", "rivers.geojson"),
        ("rivers.kml", b"", r"no vector format has this ending; allowed: \.gpkg, \.shp"),
        ("rivers.geojson", None, "no such file; there, allowed: 'rivers.gpkg'; did you mean 'rivers.gpkg'"),
    ],
)
def test_files_that_are_not_what_they_say(tmp_path, name, content, message):
    if content is None:
        (tmp_path / "rivers.gpkg").touch()
    else:
        (tmp_path / name).write_bytes(content)
    with pytest.raises(SourceError, match=message):
        layer_info(tmp_path / name)


def test_a_file_of_another_format_than_its_ending(tmp_path):
    path = write(tmp_path / "rivers.gpkg", table())
    shutil.move(path, tmp_path / "rivers.geojson")
    with pytest.raises(
        SourceError, match=r"rivers\.geojson: holds GPKG data; give the file the ending of its format"
    ):
        layer_info(tmp_path / "rivers.geojson")


def test_parquet_without_geometry_or_with_another_encoding(tmp_path):
    path = tmp_path / "rivers.parquet"
    pq.write_table(table(), path)
    with pytest.raises(SourceError, match="no 'geo' metadata, so it is Parquet but not GeoParquet"):
        layer_info(path)
    geo = {"primary_column": "geometry", "columns": {"geometry": {"encoding": "linestring"}}}
    pq.write_table(table().replace_schema_metadata({"geo": json.dumps(geo)}), path)
    with pytest.raises(
        SourceError, match="geometry is stored as 'linestring'; save it anew with WKB encoding"
    ):
        layer_info(path)


def test_parquet_with_large_binary_and_the_default_crs(tmp_path):
    """GeoParquet 1.1: a column without a CRS key is in OGC:CRS84."""
    path = tmp_path / "rivers.parquet"
    geo = {
        "primary_column": "geometry",
        "columns": {"geometry": {"encoding": "WKB", "bbox": [0, 0, 5, 7, 1, 5]}},
    }
    rows = table().set_column(2, "geometry", table()["geometry"].cast(pa.large_binary()))
    pq.write_table(rows.replace_schema_metadata({"geo": json.dumps(geo)}), path)
    info = layer_info(path)
    assert pyproj.CRS(info.crs).to_authority() == ("OGC", "CRS84")
    assert (info.geometry, info.bounds) == ("unknown", (0, 0, 7, 1))
    assert next(stream(info)).wkb.type == pa.large_binary()


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(n=st.integers(0, 40), size=st.integers(1, 45), group=st.integers(1, 20))
def test_batches_do_not_depend_on_how_the_file_is_cut(tmp_path, n, size, group):
    path = write(tmp_path / "rivers.parquet", table(n))
    metadata = pq.read_schema(path).metadata
    pq.write_table(table(n).replace_schema_metadata(metadata), path, row_group_size=group)
    lengths = [len(b) for b in stream(layer_info(path), rows_per_batch=size)]
    assert lengths == [size] * (n // size) + [n % size] * (n % size > 0)


MEMORY = """
import sys
from pathlib import Path
from geofractal.reader.geometry import read_lines
from geofractal.reader.vector import layer_info, stream
rows = sum(len(read_lines(batch.wkb)) for batch in stream(layer_info(Path(sys.argv[1]))))
(peak,) = (line.split()[1] for line in open("/proc/self/status") if line.startswith("VmHWM"))
print(rows, peak)
"""


@pytest.mark.skipif(sys.platform != "linux", reason="peak memory is told by /proc")
def test_memory_does_not_grow_with_the_rows(tmp_path):
    """From 40 MB of geometry to 160 MB the peak grows by less than a third of the difference."""
    steps = np.cumsum(np.random.default_rng(1).normal(size=(1000, 32, 2)), axis=1)
    shapes = pa.array(shapely.to_wkb(shapely.linestrings(steps)), pa.binary())
    peaks = []
    for times in (75, 300):
        rows = pa.table({"geometry": pa.chunked_array([shapes] * times)})
        path = write(tmp_path / f"r{times}.fgb", rows)
        told = subprocess.run(
            [sys.executable, "-c", MEMORY, path], capture_output=True, text=True, check=True
        )
        read, peak = map(int, told.stdout.split())
        assert read == 1000 * times
        peaks.append(peak)
    assert peaks[1] - peaks[0] < 40_000


READ_ONLY = """
import os, sys
from pathlib import Path
from geofractal.reader.vector import layer_info, stream
def rows(path):
    return sum(len(batch) for batch in stream(layer_info(Path(path))))
rows(sys.argv[1])  # loads all there is to load
if os.geteuid() == 0:  # modes bind everybody else
    os.setegid(65534), os.seteuid(65534)
print(rows(sys.argv[2]))
"""


@pytest.mark.skipif(not hasattr(os, "geteuid"), reason="folders are read-only by mode on POSIX alone")
def test_a_geopackage_in_wal_mode_in_a_read_only_folder(tmp_path_factory):
    plain = write(tmp_path_factory.mktemp("plain") / "rivers.gpkg", table())
    folder = tmp_path_factory.mktemp("wal")
    path = write(folder / "rivers.gpkg", table())
    with closing(sqlite3.connect(path)) as base:
        assert base.execute("PRAGMA journal_mode = WAL").fetchone() == ("wal",)
    for above in folder.parents[:2]:
        above.chmod(0o755)
    path.chmod(0o444)
    folder.chmod(0o555)
    try:
        told = subprocess.run(
            [sys.executable, "-W", "error::RuntimeWarning", "-c", READ_ONLY, plain, path],
            capture_output=True,
            text=True,
            check=False,
        )
        assert told.stdout.strip() == "7", told.stderr
        assert sorted(p.name for p in folder.iterdir()) == ["rivers.gpkg"]
    finally:
        folder.chmod(0o755)
