import datetime as dt
import decimal
import json
from zoneinfo import ZoneInfo

import geopandas as gpd
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import shapely
from writer_cases import COLUMNS, SUFFIXES, Answers, as_wkb, lines, make, read_rows

from geofractal.errors import OutputError
from geofractal.reader.vector import layer_info
from geofractal.writer import expected_losses, write_layer

BERLIN = ZoneInfo("Europe/Berlin")
COLUMNS_OF_PARQUET = {
    "u64": pa.array([1, 2**53 + 1, None], pa.uint64()),
    "i8": pa.array([1, -2, None], pa.int8()),
    "half": pa.array(np.array([0.5, 1.5, 2], np.float16)),
    "x": pa.array([np.nan, np.inf, None]),
    "dec": pa.array([decimal.Decimal("1.10"), None, decimal.Decimal("-2.25")]),
    "big": pa.array(["", None, "日本"], pa.large_string()),
    "class": pa.array(["a", None, "a"]).dictionary_encode(),
    "naive": pa.array([dt.datetime(2020, 1, 2, 3, 4, 5, 678901), None, None], pa.timestamp("us")),  # noqa: DTZ001 - meant
    "zoned": pa.array(
        [dt.datetime(2020, 7, 2, 3, 4, 5, tzinfo=BERLIN), None, None], pa.timestamp("ms", "Europe/Berlin")
    ),
    "day": pa.array([dt.date(2020, 1, 2), None, None]),
    "clock": pa.array([dt.time(1, 2, 3, 4), None, None], pa.time64("us")),
    "span": pa.array([90, None, -1], pa.duration("s")),
    "list": pa.array([[1, 2], [], None]),
    "struct": pa.array([{"a": 1, "b": "é"}, None, {"a": None, "b": None}]),
    "nothing": pa.nulls(3),
    "bytes": pa.array([b"\x00\xff", None, b""]),
    "flag": pa.array([True, None, False]),
}


@pytest.fixture
def parquet(tmp_path):
    """Return a GeoParquet file of many types in two row groups, with metadata of its own."""
    crs = json.loads(gpd.GeoSeries(crs="EPSG:2193").crs.to_json())
    column = {
        "encoding": "WKB",
        "geometry_types": ["LineString"],
        "crs": crs,
        "edges": "planar",
        "epoch": 2020.5,
    }
    geo = {"version": "1.0.0", "primary_column": "shape", "columns": {"shape": column}, "extra": "kept"}
    arrays = {"shape": as_wkb(lines(3)), **COLUMNS_OF_PARQUET}
    schema = pa.schema(
        [pa.field(name, array.type) for name, array in arrays.items()],
        metadata={"geo": json.dumps(geo), "survey": "spring"},
    )
    table = pa.Table.from_arrays(list(arrays.values()), schema=schema)
    pq.write_table(table, tmp_path / "a.parquet", row_group_size=2, compression="gzip")
    return layer_info(tmp_path / "a.parquet")


def copied(info, tmp_path, layout):
    fids = np.arange(1, info.features + 1) if info.fid_column else None
    return write_layer(info, Answers(info.features, fids), COLUMNS, tmp_path / f"b{SUFFIXES[layout]}", layout)


def test_every_column_and_the_geometry_bytes_are_passed_through(parquet, tmp_path):
    copied(parquet, tmp_path, "geoparquet")
    before, after = (pq.read_table(tmp_path / name) for name in ("a.parquet", "b.parquet"))
    assert repr(after.select(before.schema.names).to_pydict()) == repr(before.to_pydict())  # NaN equals NaN
    assert after.schema.types[: len(before.schema)] == before.schema.types


def test_metadata_of_the_file_is_kept_to_the_letter(parquet, tmp_path):
    copied(parquet, tmp_path, "geoparquet")
    before, after = (pq.read_schema(tmp_path / name).metadata for name in ("a.parquet", "b.parquet"))
    assert after == before


def test_the_codec_of_the_file_is_kept(parquet, tmp_path):
    copied(parquet, tmp_path, "geoparquet")
    assert pq.read_metadata(tmp_path / "b.parquet").row_group(0).column(0).compression == "GZIP"


def test_new_columns_stand_at_the_end_with_their_types(parquet, tmp_path):
    copied(parquet, tmp_path, "geoparquet")
    fields = list(pq.read_schema(tmp_path / "b.parquet"))[-4:]
    assert [(field.name, field.type) for field in fields] == [
        ("divider_dim", pa.float64()),
        ("divider_rungs", pa.int64()),
        ("divider_note", pa.string()),
        ("shore_is_closed", pa.bool_()),
    ]


def test_no_loss_is_expected_from_geoparquet_to_geoparquet(parquet):
    assert expected_losses(parquet, COLUMNS, "geoparquet") == ()


@pytest.mark.parametrize(
    ("name", "values", "loss"),
    [
        ("u64", [1, 2**53 + 1, None], "whole numbers above 2^63 are refused"),
        ("i8", [1, -2, None], None),
        ("half", [0.5, 1.5, 2.0], "values that are not a number (NaN) become missing"),
        ("x", [None, np.inf, None], "values that are not a number (NaN) become missing"),
        ("dec", [1.1, None, -2.25], "decimal numbers become binary ones of 15 digits"),
        ("big", ["", None, "日本"], None),
        ("class", ["a", None, "a"], "categories become plain values"),
        ("naive", ["2020-01-02T03:04:05.678", None, None], "times are cut to milliseconds"),
        (
            "zoned",
            ["2020-07-02T01:04:05Z", None, None],
            "times of a named zone become the same instants in UTC",
        ),
        ("day", [dt.date(2020, 1, 2), None, None], None),
        ("clock", ["01:02:03.000004", None, None], "times of day become text"),
        ("span", [90, None, -1], "durations become whole numbers, in the unit of duration[s]"),
        ("list", ["[1, 2]", "[]", None], "nested values become JSON text"),
        ("struct", ['{"a": 1, "b": "é"}', None, '{"a": null, "b": null}'], "nested values become JSON text"),
        ("nothing", [None] * 3, None),
        ("bytes", [b"\x00\xff", None, b""], None),
        ("flag", [True, None, False], None),
    ],
)
def test_each_type_reaches_a_geopackage_or_its_loss_is_told(parquet, tmp_path, name, values, loss):
    written = copied(parquet, tmp_path, "geopackage")
    found, _ = read_rows(tmp_path / "b.gpkg")
    assert found[name] == values
    assert [x.what for x in written.losses if x.column == name] == ([] if loss is None else [loss])


@pytest.mark.parametrize("layout", ["shapefile", "flatgeobuf", "geojson"])
def test_every_type_reaches_each_other_format(parquet, tmp_path, layout):
    written = copied(parquet, tmp_path, layout)
    found, _ = read_rows(written.paths[0])
    assert (found["half"], found["class"], found["span"]) == (
        [0.5, 1.5, 2.0],
        ["a", None, "a"],
        [90, None, -1],
    )


def test_whole_numbers_beyond_64_bits_with_sign_are_refused_with_a_way_out(tmp_path):
    frame = gpd.GeoDataFrame({"cell": np.array([2**63], np.uint64)}, geometry=lines(1), crs=4326)
    frame.to_parquet(tmp_path / "a.parquet")
    with pytest.raises(
        OutputError, match=r"column 'cell' holds whole numbers above 2.63, which only geoparquet"
    ):
        copied(layer_info(tmp_path / "a.parquet"), tmp_path, "geopackage")


def test_a_copy_from_another_format_states_version_types_and_crs(tmp_path):
    info = make(tmp_path / "a.fgb", lines(2), {"n": pa.array([1, 2])}, crs="EPSG:2193")
    copied(info, tmp_path, "geoparquet")
    geo = json.loads(pq.read_schema(tmp_path / "b.parquet").metadata[b"geo"])
    column = geo["columns"]["geometry"]
    assert (geo["version"], geo["primary_column"], column["encoding"]) == ("1.1.0", "geometry", "WKB")
    assert (column["geometry_types"], column["crs"]["id"]["code"]) == (["LineString"], 2193)


@pytest.mark.filterwarnings("ignore:'crs' was not provided")
def test_a_layer_without_crs_says_so(tmp_path):
    info = make(tmp_path / "a.fgb", lines(2), {"n": pa.array([1, 2])}, crs=None)
    copied(info, tmp_path, "geoparquet")
    geo = json.loads(pq.read_schema(tmp_path / "b.parquet").metadata[b"geo"])
    assert geo["columns"]["geometry"]["crs"] is None


@pytest.mark.parametrize(
    ("texts", "values"),
    [
        (
            ["2020-01-02T03:04:05.678+05:30", None, "2020-01-02T00:00:00Z"],
            [
                dt.datetime(2020, 1, 1, 21, 34, 5, 678000, dt.UTC),
                None,
                dt.datetime(2020, 1, 2, tzinfo=dt.UTC),
            ],
        ),
        (["2020-01-02T03:04:05", None, None], [dt.datetime(2020, 1, 2, 3, 4, 5), None, None]),  # noqa: DTZ001 - meant
        (["2020-01-02T03:04:05", None, "2020-01-02T00:00:00Z"],) * 2,
        ([None] * 3, [None] * 3),
    ],
    ids=["with zones", "without zones", "some with zones", "none at all"],
)
def test_times_become_instants_wall_clock_or_stay_text_by_their_zones(tmp_path, texts, values):
    marks = {"t": {"GDAL:OGR:type": "DateTime"}}
    info = make(tmp_path / "a.fgb", lines(3), {"t": pa.array(texts, pa.string())}, marks=marks)
    copied(info, tmp_path, "geoparquet")
    assert pq.read_table(tmp_path / "b.parquet")["t"].to_pylist() == values


def test_a_source_column_named_geometry_stays_a_column(tmp_path):
    info = make(tmp_path / "a.gpkg", lines(2), {"geometry": pa.array(["a", "b"])})
    copied(info, tmp_path, "geoparquet")
    frame = gpd.read_parquet(tmp_path / "b.parquet")
    assert (frame["geometry"].tolist(), frame.active_geometry_name) == (["a", "b"], "geometry_1")


def test_mixed_types_are_all_named(tmp_path):
    shapes = shapely.from_wkt(
        ["LINESTRING (0 0, 1 1)", "MULTILINESTRING ((0 0, 1 1))", "POLYGON Z ((0 0 1, 0 1 1, 1 1 1, 0 0 1))"]
    )
    info = make(tmp_path / "a.gpkg", list(shapes), {"n": pa.array([1, 2, 3])})
    copied(info, tmp_path, "geoparquet")
    geo = json.loads(pq.read_schema(tmp_path / "b.parquet").metadata[b"geo"])
    assert geo["columns"]["geometry"]["geometry_types"] == ["LineString", "MultiLineString", "Polygon Z"]
