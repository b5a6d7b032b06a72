import json
import struct
import time
import zipfile
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyogrio
import pyogrio.raw
import pytest
import shapely
from writer_cases import COLUMNS, SUFFIXES, Answers, as_wkb, lines, make, read_rows

from geofractal.errors import OutputError
from geofractal.reader.vector import layer_info
from geofractal.writer import expected_losses, write_layer

OGR = [name for name in SUFFIXES if name != "geoparquet"]
CURVE = struct.pack("<BII6d", 1, 8, 3, 0, 0, 1, 1, 2, 0)  # ISO 13249-3: type 8 is a circular string
LINE = shapely.from_wkt("LINESTRING (0 0, 1 1)")
RING = shapely.from_wkt("POLYGON ((0 0, 0 1, 1 1, 1 0, 0 0))")  # clockwise


def wkt(*texts):
    return [None if text is None else shapely.from_wkt(text) for text in texts]


def copied(info, target, layout, **options):
    fids = np.arange(1, info.features + 1) if info.fid_column else None
    return write_layer(info, Answers(info.features, fids), COLUMNS, target, layout, **options)


def copy_of(tmp_path, source, geometries, columns, layout, *, name="", **options):
    """Make a source, copy it, and return the copy's columns, its geometries and what was said to be lost."""
    info = make(tmp_path / f"source{name}{SUFFIXES[source]}", geometries, columns, **options)
    written = copied(info, tmp_path / f"copy{name}{SUFFIXES[layout]}", layout)
    found, wkb = read_rows(written.paths[0])
    return found, wkb, [str(loss) for loss in written.losses]


@pytest.fixture(scope="module")
def sources(tmp_path_factory):
    """Return a source of each format with the same 9 rows."""
    folder = tmp_path_factory.mktemp("sources")
    columns = {
        "river": pa.array([None, *(f"Fluß {i}" for i in range(8))]),
        "n": pa.array([*range(8), None], pa.int32()),
        "x": pa.array([i / 8 for i in range(9)]),
    }
    made = {name: make(folder / f"a{SUFFIXES[name]}", lines(9), columns) for name in OGR}
    import geopandas as gpd

    path = folder / "a.parquet"
    frame = gpd.GeoDataFrame(
        {name: array.to_pandas(types_mapper=None) for name, array in columns.items()},
        geometry=lines(9),
        crs="EPSG:4326",
    )
    frame["n"] = frame["n"].astype("Int32")
    frame = frame[["river", "n", "x", "geometry"]]
    frame.to_parquet(path)
    made["geoparquet"] = layer_info(path)
    return made, {name: array.to_pylist() for name, array in columns.items()}


PAIRS = [(a, b) for a in SUFFIXES for b in SUFFIXES]


@pytest.fixture(scope="module")
def copies(sources, tmp_path_factory):
    folder = tmp_path_factory.mktemp("copies")
    return {(a, b): copied(sources[0][a], folder / f"{a}-{b}{SUFFIXES[b]}", b) for a, b in PAIRS}


def columns_of(path):
    import geopandas as gpd

    return gpd.read_parquet(path) if path.suffix == ".parquet" else gpd.read_file(path)


def plain(values):
    return [None if missing else value for value, missing in zip(values.tolist(), values.isna(), strict=True)]


@pytest.mark.parametrize("pair", PAIRS, ids="-to-".join)
def test_attributes_keep_values_nulls_and_order_in_every_pair_of_formats(sources, copies, pair):
    found = columns_of(copies[pair].paths[0])
    for name, values in sources[1].items():
        assert plain(found[name]) == values


@pytest.mark.parametrize("pair", PAIRS, ids="-to-".join)
def test_geometries_keep_every_bit_in_every_pair_of_formats(copies, pair):
    assert [shape.wkb for shape in columns_of(copies[pair].paths[0]).geometry] == [
        shape.wkb for shape in lines(9)
    ]


@pytest.mark.parametrize("pair", PAIRS, ids="-to-".join)
def test_new_columns_hold_their_values_and_nulls_in_every_pair_of_formats(copies, pair):
    found = columns_of(copies[pair].paths[0])
    for column in COLUMNS:
        name = column.short if pair[1] == "shapefile" else column.name
        values, wanted = plain(found[name]), Answers(9).column(column)
        assert values == (pytest.approx(wanted, abs=1e-15) if column.kind == "number" else wanted)


@pytest.mark.parametrize("pair", PAIRS, ids="-to-".join)
def test_the_crs_stays_in_every_pair_of_formats(copies, pair):
    assert columns_of(copies[pair].paths[0]).crs.to_epsg() == 4326


@pytest.mark.parametrize("layout", [name for name in OGR if name not in {"geojson", "geojson-lines"}])
def test_new_columns_have_the_types_of_their_kinds(copies, layout):
    found = pyogrio.read_info(copies["flatgeobuf", layout].paths[0])
    assert found["dtypes"].tolist()[-4:] == ["float64", "int64", "object", "bool"]


@pytest.fixture(scope="module")
def repeated(sources, tmp_path_factory):
    folders = [tmp_path_factory.mktemp("repeated") for _ in range(2)]
    for folder in folders:
        for layout, suffix in SUFFIXES.items():
            copied(sources[0]["flatgeobuf"], folder / layout / f"x{suffix}", layout)
        time.sleep(1.01)  # so that a time in whole seconds would differ
    return folders


@pytest.mark.parametrize("layout", SUFFIXES)
def test_the_same_input_gives_the_same_bytes(repeated, layout):
    first, second = (
        {path.name: path.read_bytes() for path in (folder / layout).iterdir()} for folder in repeated
    )
    assert first == second


@pytest.mark.parametrize("layout", SUFFIXES)
def test_a_layer_without_rows_gives_a_copy_with_its_columns(tmp_path, layout):
    info = make(
        tmp_path / "a.fgb",
        [],
        {"n": pa.array([], pa.int32()), "day": pa.array([], pa.date32())},
        kind="LineString",
    )
    written = copied(info, tmp_path / f"b{SUFFIXES[layout]}", layout)
    assert written.rows == 0
    if not layout.startswith("geojson"):  # which keeps no columns without rows
        assert columns_of(written.paths[0]).columns.tolist()[:2] == ["n", "day"]


@pytest.mark.parametrize("layout", SUFFIXES)
def test_missing_geometries_keep_their_rows(tmp_path, layout):
    info = make(tmp_path / "a.gpkg", [LINE, None, LINE], {"n": pa.array([1, 2, 3])})
    written = copied(info, tmp_path / f"b{SUFFIXES[layout]}", layout)
    found = columns_of(written.paths[0])
    assert found["n"].tolist() == [1, 2, 3]
    assert found.geometry.isna().tolist() == [False, True, False]


def test_a_zipped_shapefile_is_a_source_like_others(tmp_path):
    make(tmp_path / "a.shp", lines(2), {"n": pa.array([1, 2])})
    with zipfile.ZipFile(tmp_path / "a.zip", "w") as archive:
        for path in tmp_path.glob("a.[sdpc]*"):
            archive.write(path, path.name)
    found = columns_of(copied(layer_info(tmp_path / "a.zip"), tmp_path / "b.gpkg", "geopackage").paths[0])
    assert found["n"].tolist() == [1, 2]


@pytest.mark.parametrize("layout", ["shapefile", "flatgeobuf", "geoparquet"])
def test_stored_feature_ids_become_an_ordinary_column(tmp_path, layout):
    info = make(
        tmp_path / "a.gpkg", lines(3), {"id": pa.array([7, 20, 4]), "n": pa.array([1, 2, 3])}, FID="id"
    )
    written = copied(info, tmp_path / f"b{SUFFIXES[layout]}", layout)
    assert columns_of(written.paths[0])["id"].tolist() == [4, 7, 20]
    assert "stored feature ids become the ordinary column 'id'" in map(str, written.losses)


@pytest.mark.parametrize("layout", ["geojson", "geojson-lines"])
def test_stored_feature_ids_become_the_ids_of_geojson(tmp_path, layout):
    info = make(tmp_path / "a.gpkg", lines(2), {"id": pa.array([7, 20]), "n": pa.array([1, 2])}, FID="id")
    path = copied(info, tmp_path / f"b{SUFFIXES[layout]}", layout).paths[0]
    text = path.read_text(encoding="utf-8")
    features = json.loads(text)["features"] if layout == "geojson" else map(json.loads, text.splitlines())
    assert [feature["id"] for feature in features] == [7, 20]


@pytest.mark.parametrize("source", ["flatgeobuf", "geojson"])
def test_a_column_named_as_a_geopackage_would_name_its_own_stays_a_column(tmp_path, source):
    columns = {"fid": pa.array([9, 9, None]), "geom": pa.array(["a", "b", "c"])}
    found, _, _ = copy_of(tmp_path, source, lines(3), columns, "geopackage")
    assert (found["fid"], found["geom"]) == ([9, 9, None], ["a", "b", "c"])


@pytest.mark.parametrize("layout", ["geopackage", "flatgeobuf", "shapefile", "geojson"])
def test_names_that_differ_by_case_alone_are_told_apart(tmp_path, layout):
    import geopandas as gpd

    gpd.GeoDataFrame({"Name": [1, 2], "name": [3, 4]}, geometry=lines(2), crs=4326).to_parquet(
        tmp_path / "a.parquet"
    )
    written = copied(layer_info(tmp_path / "a.parquet"), tmp_path / f"b{SUFFIXES[layout]}", layout)
    found = columns_of(written.paths[0])
    assert (found["Name"].tolist(), found["name_1"].tolist()) == ([1, 2], [3, 4])
    assert "column 'name': is named 'name_1'" in map(str, written.losses)


@pytest.mark.parametrize("layout", [*OGR, "geoparquet"])
def test_names_with_quotes_spaces_statements_and_newlines_are_only_names(tmp_path, layout):
    odd = ['q"t', "a'b", "sp ace", "new\nline", "; DROP --"]
    info = make(tmp_path / "a.fgb", lines(2), {name: pa.array([i, i]) for i, name in enumerate(odd)})
    found = columns_of(copied(info, tmp_path / f"b{SUFFIXES[layout]}", layout).paths[0])
    assert [found[name].tolist() for name in odd] == [[i, i] for i in range(5)]


@pytest.mark.parametrize("layout", ["geopackage", "flatgeobuf", "geojson", "geojson-lines"])
def test_times_keep_their_zones_as_written(tmp_path, layout):
    times = ["2020-01-02T03:04:05.678+05:30", None, "2020-01-02T03:04:05Z", "2020-01-02T03:04:05"]
    found, _, _ = copy_of(
        tmp_path,
        "flatgeobuf",
        lines(4),
        {"t": pa.array(times)},
        layout,
        marks={"t": {"GDAL:OGR:type": "DateTime"}},
    )
    assert found["t"] == times


def test_times_become_text_in_a_shapefile_and_that_is_told(tmp_path):
    times = ["2020-01-02T03:04:05.678+05:30", None]
    found, _, losses = copy_of(
        tmp_path,
        "flatgeobuf",
        lines(2),
        {"t": pa.array(times)},
        "shapefile",
        marks={"t": {"GDAL:OGR:type": "DateTime"}},
    )
    assert found["t"] == times
    assert "column 't': times become text" in losses


def test_not_a_number_becomes_missing_in_a_geopackage_and_that_is_told(tmp_path):
    found, _, losses = copy_of(
        tmp_path, "flatgeobuf", lines(3), {"x": pa.array([np.nan, np.inf, 1.5])}, "geopackage"
    )
    assert found["x"] == [None, np.inf, 1.5]
    assert "column 'x': values that are not a number (NaN) become missing" in losses


@pytest.mark.parametrize("layout", ["geojson", "geojson-lines"])
def test_numbers_that_are_not_finite_become_missing_in_geojson_and_that_is_told(tmp_path, layout):
    found, _, losses = copy_of(
        tmp_path, "flatgeobuf", lines(3), {"x": pa.array([np.nan, np.inf, 1.5])}, layout
    )
    assert found["x"] == [None, None, 1.5]
    assert "column 'x': values that are not finite numbers become missing" in losses


def test_dates_become_times_at_midnight_in_flatgeobuf_and_that_is_told(tmp_path):
    days = pa.array([18263, None], pa.date32())  # days from 1970-01-01 to 2020-01-02
    found, _, losses = copy_of(tmp_path, "geopackage", lines(2), {"d": days}, "flatgeobuf")
    assert found["d"] == ["2020-01-02T00:00:00", None]
    assert "column 'd': dates become times at midnight" in losses


def test_bytes_become_hexadecimal_text_where_a_format_has_none_and_that_is_told(tmp_path):
    found, _, losses = copy_of(tmp_path, "geopackage", lines(1), {"b": pa.array([b"\x00\xff"])}, "geojson")
    assert found["b"] == ["00FF"]
    assert "column 'b': bytes become hexadecimal text" in losses


Z = "LINESTRING Z (0 0 5, 1 1 6)"
ZM = "LINESTRING ZM (0 0 5 7, 1 1 6 8)"
M = "LINESTRING M (0 0 7, 1 1 8)"


@pytest.mark.parametrize("layout", SUFFIXES)
def test_heights_are_carried_through(tmp_path, layout):
    _, wkb, _ = copy_of(
        tmp_path, "geopackage", wkt(Z, Z), {"n": pa.array([1, 2])}, layout, kind="LineString Z"
    )
    if layout == "geoparquet":
        wkb = [shape.wkb for shape in columns_of(tmp_path / "copy.parquet").geometry]
    assert [shapely.from_wkb(bytes(w)).coords[1] for w in wkb] == [(1, 1, 6)] * 2


@pytest.mark.filterwarnings("ignore:Measured")
@pytest.mark.parametrize("layout", ["geopackage", "shapefile", "geoparquet"])
@pytest.mark.parametrize("text", [M, ZM])
def test_measures_of_vertices_are_carried_through_where_a_format_can(tmp_path, layout, text):
    info = make(tmp_path / "a.gpkg", wkt(text), {"n": pa.array([1])})
    path = copied(info, tmp_path / f"b{SUFFIXES[layout]}", layout).paths[0]
    if layout == "geoparquet":
        import pyarrow.parquet as pq

        wkb = pq.read_table(path)["geometry"].to_pylist()
    else:
        wkb = read_rows(path)[1]
    assert wkb == as_wkb(wkt(text)).to_pylist()


def test_measures_of_vertices_are_told_to_be_left_out_of_geojson(tmp_path):
    _, wkb, losses = copy_of(tmp_path, "geopackage", wkt(ZM), {"n": pa.array([1])}, "geojson")
    assert bytes(wkb[0]) == as_wkb(wkt(Z)).to_pylist()[0]
    assert "measures (M) of vertices are left out" in losses


@pytest.mark.parametrize("text", [M, ZM])
def test_measures_of_vertices_are_refused_by_flatgeobuf_with_a_way_out(tmp_path, text):
    info = make(tmp_path / "a.gpkg", wkt(text), {"n": pa.array([1])})
    with pytest.raises(OutputError, match=r"none with measures .*choose another format, such as geopackage"):
        expected_losses(info, COLUMNS, "flatgeobuf")


def test_heights_of_single_and_multi_part_lines_stay_in_flatgeobuf_as_multi_part(tmp_path):
    shapes = wkt(Z, None, "MULTILINESTRING Z ((0 0 1, 1 1 1), (2 2 2, 3 3 3))")
    info = make(tmp_path / "a.gpkg", shapes, {"n": pa.array([1, 2, 3])})
    written = copied(info, tmp_path / "b.fgb", "flatgeobuf")
    found = columns_of(written.paths[0]).geometry
    assert found.isna().tolist() == [False, True, False]
    assert [found[0].wkt, found[2].wkt] == ["MULTILINESTRING Z ((0 0 5, 1 1 6))", shapes[2].wkt]
    assert "single geometries become multi-part ones of one part" in map(str, written.losses)


MIXED = wkt("LINESTRING (0 0, 1 1)", "POLYGON ((0 0, 0 1, 1 1, 0 0))")


def test_mixed_kinds_are_refused_by_a_shapefile_with_a_way_out(tmp_path):
    info = make(tmp_path / "a.gpkg", MIXED, {"n": pa.array([1, 2])})
    with pytest.raises(
        OutputError, match=r"holds LineString, Polygon; a Shapefile holds one kind .*geopackage, or split"
    ):
        copied(info, tmp_path / "b.shp", "shapefile")
    assert list(tmp_path.glob("b*")) == []


@pytest.mark.parametrize("layout", ["geopackage", "flatgeobuf", "geojson", "geojson-lines"])
def test_mixed_kinds_are_kept_where_a_format_can(tmp_path, layout):
    info = make(tmp_path / "a.gpkg", MIXED, {"n": pa.array([1, 2])})
    found = columns_of(copied(info, tmp_path / f"b{SUFFIXES[layout]}", layout).paths[0])
    assert found.geometry.geom_type.tolist() == ["LineString", "Polygon"]


def test_curves_become_chains_of_lines_in_a_shapefile_and_that_is_told(tmp_path):
    info = make(tmp_path / "a.gpkg", [CURVE], {"n": pa.array([1])})
    written = copied(info, tmp_path / "b.shp", "shapefile")
    assert columns_of(written.paths[0]).geometry[0].length == pytest.approx(
        np.pi, rel=1e-3
    )  # half a unit circle
    assert any("curves, where there are any" in str(loss) for loss in written.losses)


def test_curves_are_refused_by_geoparquet_with_a_way_out(tmp_path):
    info = make(tmp_path / "a.gpkg", [CURVE], {"n": pa.array([1])})
    with pytest.raises(OutputError, match=r"holds curves, which GeoParquet has no place for; choose another"):
        copied(info, tmp_path / "b.parquet", "geoparquet")


def test_coordinates_of_another_crs_are_kept_in_geojson_and_that_is_told(tmp_path):
    _, wkb, losses = copy_of(
        tmp_path, "geopackage", lines(2), {"n": pa.array([1, 2])}, "geojson", crs="EPSG:2193"
    )
    assert [bytes(w) for w in wkb] == as_wkb(lines(2)).to_pylist()
    member = json.loads((tmp_path / "copy.geojson").read_text(encoding="utf-8"))["crs"]
    assert member["properties"]["name"] == "urn:ogc:def:crs:EPSG::2193"
    assert any("named in a 'crs' member; programs that follow RFC 7946" in loss for loss in losses)


def test_a_crs_without_code_is_told_to_be_lost_in_geojson(tmp_path):
    _, _, losses = copy_of(
        tmp_path,
        "geopackage",
        lines(1),
        {"n": pa.array([1])},
        "geojson",
        crs='LOCAL_CS["here", UNIT["metre", 1]]',
    )
    assert any(loss.startswith("the CRS is lost") for loss in losses)


def test_another_crs_is_refused_by_line_delimited_geojson_with_a_way_out(tmp_path):
    info = make(tmp_path / "a.gpkg", lines(1), {"n": pa.array([1])}, crs="EPSG:2193")
    with pytest.raises(OutputError, match="coordinates are never changed: choose another format"):
        copied(info, tmp_path / "b.geojsonl", "geojson-lines")


def test_rings_are_told_to_be_turned_in_line_delimited_geojson(tmp_path):
    _, wkb, losses = copy_of(tmp_path, "geopackage", [RING], {"n": pa.array([1])}, "geojson-lines")
    assert shapely.from_wkb(bytes(wkb[0])).exterior.coords[:] == RING.exterior.coords[::-1]
    assert any("rings are turned" in loss for loss in losses)


def test_rings_keep_their_direction_in_geojson(tmp_path):
    _, wkb, _ = copy_of(tmp_path, "geopackage", [RING], {"n": pa.array([1])}, "geojson")
    assert shapely.from_wkb(bytes(wkb[0])).exterior.coords[:] == RING.exterior.coords[:]


def test_rows_keep_their_order_in_flatgeobuf(tmp_path):
    shapes = [shapely.transform(LINE, lambda xy, i=i: xy + np.array([0, i * 37 % 50])) for i in range(50)]
    found, _, losses = copy_of(tmp_path, "geopackage", shapes, {"n": pa.array(range(50))}, "flatgeobuf")
    assert found["n"] == list(range(50))
    assert any("no spatial index" in loss for loss in losses)


def test_what_is_raised_while_rows_are_read_reaches_the_caller(tmp_path):
    class Broken(Answers):
        def read(self, start, stop):
            if start:
                raise LookupError("the spool is gone")
            return super().read(start, stop)

    info = replace(make(tmp_path / "a.fgb", lines(20), {"n": pa.array(range(20))}), rows_per_batch=10)
    with pytest.raises(LookupError, match="the spool is gone"):
        write_layer(info, Broken(20), COLUMNS, tmp_path / "b.gpkg", "geopackage")
    assert list(tmp_path.glob("*b.gpkg*")) == []


@pytest.mark.parametrize("layout", SUFFIXES)
def test_a_full_disk_is_found_out_and_leaves_the_earlier_output(tmp_path, layout):
    resource = pytest.importorskip("resource")
    info = make(tmp_path / "a.fgb", lines(4000), {"n": pa.array(range(4000))})
    target = tmp_path / f"b{SUFFIXES[layout]}"
    target.write_text("earlier")
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (150_000, hard))
    try:
        with pytest.raises(
            OutputError, match=r"(could not write|cannot be written|can be read from what was written)"
        ):
            copied(info, target, layout)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert target.read_text() == "earlier"
    assert list(tmp_path.glob(".b*")) == []


@pytest.mark.parametrize("layout", SUFFIXES)
def test_fewer_rows_than_the_source_holds_are_found_out(sources, tmp_path, layout, monkeypatch):
    monkeypatch.setattr("geofractal.writer.layer.count_rows", lambda *_: 8)
    with pytest.raises(OutputError, match="8 of 9 rows can be read from what was written"):
        copied(sources[0]["geopackage"], tmp_path / f"b{SUFFIXES[layout]}", layout)
    assert list(tmp_path.iterdir()) == []


def test_a_target_with_the_ending_of_another_format_is_refused(sources, tmp_path):
    with pytest.raises(OutputError, match=r"a shapefile file must end in \.shp"):
        copied(sources[0]["geopackage"], tmp_path / "b.gpkg", "shapefile")


@pytest.mark.parametrize("layout", SUFFIXES)
def test_progress_counts_every_row(sources, tmp_path, layout):
    done = []
    copied(sources[0]["geojson"], tmp_path / f"b{SUFFIXES[layout]}", layout, progress=done.append)
    assert sum(done) == 9
