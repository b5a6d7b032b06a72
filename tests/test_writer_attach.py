# ruff: noqa: S608 - the statements are made of the test's own names
import shutil
import sqlite3
import struct
from contextlib import closing

import pyarrow as pa
import pyogrio
import pytest
import shapely
from writer_cases import COLUMNS, Answers, lines, make

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.reader.vector import layer_info
from geofractal.writer import expected_losses, write_layer
from geofractal.writer.attach import can_attach

CURVE = struct.pack("<BII6d", 1, 8, 3, 0, 0, 1, 1, 2, 0)  # ISO 13249-3: type 8 is a circular string


def sql(path, *statements):
    with closing(sqlite3.connect(path)) as database:
        for statement in statements:
            database.execute(statement)
        database.commit()


def rows(path, query):
    with closing(sqlite3.connect(path)) as database:
        return database.execute(query).fetchall()


def content(path, table):
    """Return everything in a database, that table's rows without new columns, its SQL without their names."""
    found = {}
    with closing(sqlite3.connect(path)) as database:
        schema = database.execute("SELECT type, name, sql FROM sqlite_master").fetchall()
        for kind, name, _ in schema:
            if kind == "table":
                quoted = name.replace('"', '""')
                columns = [row[1] for row in database.execute(f'PRAGMA table_info("{quoted}")')]
                kept = [c for c in columns if name != table or c not in {column.name for column in COLUMNS}]
                listed = ", ".join('"' + c.replace('"', '""') + '"' for c in kept)
                typed = ", ".join('typeof("' + c.replace('"', '""') + '")' for c in kept)
                found[name] = database.execute(f'SELECT {listed}, {typed} FROM "{quoted}"').fetchall()
        pragmas = [database.execute(f"PRAGMA {p}").fetchone() for p in ("application_id", "user_version")]
    others = sorted((kind, name, text) for kind, name, text in schema if (kind, name) != ("table", table))
    return found, others, pragmas


@pytest.fixture
def rich(tmp_path):
    """Return a GeoPackage with all that must stay: ids with gaps, styles, triggers, a curve, Z and M."""
    path = tmp_path / "rich.gpkg"
    shapes = [
        *lines(3),
        CURVE,
        None,
        shapely.from_wkt("LINESTRING EMPTY"),
        shapely.from_wkt("LINESTRING ZM (0 0 1 2, 3 4 5 6)"),
    ]
    columns = {
        "key": pa.array([7, 20, 21, 30, 31, 40, 4_000_000_000]),
        "when": pa.array(["2020-01-02T03:04:05.678+05:30"] * 7),
        'odd "name", \n; DROP TABLE shore': pa.array(["x", "", None, "é", "'", '"', ";"]),
    }
    make(path, shapes, columns, marks={"when": {"GDAL:OGR:type": "DateTime"}}, FID="key")
    make(path, lines(2), {"a": pa.array([1, 2])}, layer="other layer")
    sql(
        path,
        "CREATE TABLE layer_styles (id INTEGER PRIMARY KEY, f_table_name TEXT, styleSLD TEXT)",
        "INSERT INTO layer_styles VALUES (1, 'shore', '<sld/>')",
        "CREATE TABLE log (text TEXT)",
        "CREATE TRIGGER watch AFTER UPDATE ON shore BEGIN INSERT INTO log VALUES ('changed'); END",
        'CREATE INDEX by_time ON shore ("when")',
        "ALTER TABLE shore ADD COLUMN checked INTEGER DEFAULT 5 CHECK (checked > 0)",
        "UPDATE gpkg_contents SET last_change = '2001-02-03T04:05:06.000Z'",
    )
    return layer_info(path, layer="shore")


def attached(info, target, columns=COLUMNS, **options):
    keys = [row[0] for row in rows(info.path, f'SELECT "{info.fid_column}" FROM "{info.layer}" ORDER BY 1')]
    return write_layer(info, Answers(info.features, keys, columns), columns, target, "geopackage", **options)


def test_nothing_in_the_file_changes_beyond_the_new_columns(rich, tmp_path):
    attached(rich, tmp_path / "out.gpkg")
    assert content(tmp_path / "out.gpkg", "shore") == content(rich.path, "shore")


def test_the_source_keeps_every_bit(rich, tmp_path):
    before = rich.path.read_bytes()
    attached(rich, tmp_path / "out.gpkg")
    assert rich.path.read_bytes() == before


@pytest.mark.parametrize("column", COLUMNS, ids=lambda column: column.kind)
def test_each_kind_of_column_holds_its_values_and_nulls_by_id(rich, tmp_path, column):
    attached(rich, tmp_path / "out.gpkg")
    found = rows(tmp_path / "out.gpkg", f"SELECT {column.name} FROM shore ORDER BY key")
    assert [value for (value,) in found] == Answers(rich.features).column(column)


def test_new_columns_have_the_types_of_the_standard(rich, tmp_path):
    """OGC 12-128r19, table 1: REAL is a double, INTEGER has 64 bits, BOOLEAN and TEXT are themselves."""
    attached(rich, tmp_path / "out.gpkg")
    found = rows(tmp_path / "out.gpkg", "PRAGMA table_info(shore)")
    assert [(row[1], row[2]) for row in found][-4:] == [
        ("divider_dim", "REAL"),
        ("divider_rungs", "INTEGER"),
        ("divider_note", "TEXT"),
        ("shore_is_closed", "BOOLEAN"),
    ]


def test_new_columns_read_back_through_gdal_with_their_types(rich, tmp_path):
    attached(rich, tmp_path / "out.gpkg")
    found = pyogrio.read_info(tmp_path / "out.gpkg", layer="shore")
    assert found["dtypes"][-4:].tolist() == ["float64", "int64", "object", "bool"]


def test_triggers_are_back_and_were_not_fired(rich, tmp_path):
    attached(rich, tmp_path / "out.gpkg")
    assert rows(tmp_path / "out.gpkg", "SELECT count(*) FROM log") == [(0,)]
    assert (
        rows(
            tmp_path / "out.gpkg", "SELECT name FROM sqlite_master WHERE type = 'trigger' AND name = 'watch'"
        )
        != []
    )


def test_the_date_of_the_last_change_is_let_alone(rich, tmp_path):
    attached(rich, tmp_path / "out.gpkg")
    assert rows(tmp_path / "out.gpkg", "SELECT DISTINCT last_change FROM gpkg_contents") == [
        ("2001-02-03T04:05:06.000Z",)
    ]


def test_the_same_input_gives_the_same_bytes(rich, tmp_path):
    attached(rich, tmp_path / "a.gpkg")
    attached(rich, tmp_path / "b.gpkg")
    assert (tmp_path / "a.gpkg").read_bytes() == (tmp_path / "b.gpkg").read_bytes()


def test_the_copy_is_a_sound_database(rich, tmp_path):
    attached(rich, tmp_path / "out.gpkg")
    assert rows(tmp_path / "out.gpkg", "PRAGMA integrity_check") == [("ok",)]


def test_names_with_quotes_spaces_statements_and_newlines_are_only_names(tmp_path):
    odd = 'it\'s "a" river; DROP TABLE gpkg_contents; --\nx'
    info = make(tmp_path / "a.gpkg", lines(3), {"a": pa.array([1, 2, 3])}, layer=odd)
    column = Column(odd, "odd", "number", "", "")
    write_layer(info, Answers(3, [1, 2, 3], [column]), [column], tmp_path / "out.gpkg", "geopackage")
    found = pyogrio.raw.read(tmp_path / "out.gpkg", layer=odd)
    assert (found[0]["fields"].tolist(), found[3][1].tolist()) == (["a", odd], [1, 1 + 1 / 7, 1 + 2 / 7])


def test_changes_still_beside_a_database_in_wal_mode_are_in_the_copy(tmp_path):
    info = make(tmp_path / "a.gpkg", lines(3), {"a": pa.array([1, 2, 3])})
    with closing(sqlite3.connect(info.path)) as database:
        database.execute("PRAGMA journal_mode = WAL")
        database.execute("PRAGMA wal_autocheckpoint = 0")
        database.execute("UPDATE gpkg_contents SET description = 'from the side file'")
        database.commit()
        shutil.copy(info.path, tmp_path / "b.gpkg")
        shutil.copy(tmp_path / "a.gpkg-wal", tmp_path / "b.gpkg-wal")
    before = (tmp_path / "b.gpkg").read_bytes(), (tmp_path / "b.gpkg-wal").read_bytes()
    wal = layer_info(tmp_path / "b.gpkg")
    write_layer(wal, Answers(3, [1, 2, 3]), COLUMNS, tmp_path / "out.gpkg", "geopackage")
    assert rows(tmp_path / "out.gpkg", "SELECT description FROM gpkg_contents") == [("from the side file",)]
    assert ((tmp_path / "b.gpkg").read_bytes(), (tmp_path / "b.gpkg-wal").read_bytes()) == before
    assert sorted(p.name for p in tmp_path.glob("b.gpkg*")) == ["b.gpkg", "b.gpkg-wal"]
    assert sorted(p.name for p in tmp_path.glob("*out.gpkg*")) == ["out.gpkg"]


def test_no_loss_is_expected_of_an_attached_copy(rich):
    assert expected_losses(rich, COLUMNS, "geopackage") == ()


def test_a_crs_given_by_the_batch_is_told_to_be_left_out(rich):
    other = layer_info(rich.path, layer="shore", crs="EPSG:4258", override_crs=True)
    assert any(
        "CRS given in the batch file is not written" in str(loss)
        for loss in expected_losses(other, COLUMNS, "geopackage")
    )


@pytest.fixture
def views(tmp_path):
    """Return a GeoPackage with a view, in falling order of ids, and a table keyed by text."""
    path = tmp_path / "views.gpkg"
    make(path, lines(3), {"a": pa.array([1, 2, 3])}, layer="base")
    sql(
        path,
        "CREATE VIEW seen AS SELECT fid AS id, a * 10 AS a10, geom FROM base ORDER BY fid DESC",
        "CREATE TABLE keyed (a INT, geom BLOB, name TEXT PRIMARY KEY)",
        "INSERT INTO keyed SELECT a, geom, 'n' || a FROM base",
        *(
            statement
            for v in ("seen", "keyed")
            for statement in (
                f"INSERT INTO gpkg_contents VALUES ('{v}', 'features', '{v}', '', '', 0, 0, 1, 1, 4326)",
                f"INSERT INTO gpkg_geometry_columns VALUES ('{v}', 'geom', 'LINESTRING', 4326, 0, 0)",
            )
        ),
    )
    return path


@pytest.mark.parametrize("layer", ["seen", "keyed"])
def test_views_and_tables_without_integer_key_are_not_attached_to(views, layer):
    assert not can_attach(layer_info(views, layer=layer))


@pytest.mark.parametrize(
    ("layer", "column", "values"), [("seen", "a10", [30, 20, 10]), ("keyed", "a", [1, 2, 3])]
)
def test_views_and_tables_without_integer_key_are_written_anew_in_their_order(
    views, tmp_path, layer, column, values
):
    info = layer_info(views, layer=layer)
    write_layer(info, Answers(3), COLUMNS, tmp_path / "out.gpkg", "geopackage")
    found = rows(tmp_path / "out.gpkg", f"SELECT CAST({column} AS INTEGER), divider_dim FROM {layer}")
    assert found == list(zip(values, Answers(3).column(COLUMNS[0]), strict=True))


def test_a_view_written_anew_is_told_to_lose_the_rest_of_its_file(views):
    losses = expected_losses(layer_info(views, layer="seen"), COLUMNS, "geopackage")
    assert "other layers, styles, aliases" in str(losses[0])


def test_rows_that_are_gone_are_found_out(rich, tmp_path):
    with pytest.raises(OutputError, match="6 of 7 measured rows were found by their id"):
        write_layer(
            rich, Answers(7, [7, 20, 21, 30, 31, 40, 41]), COLUMNS, tmp_path / "out.gpkg", "geopackage"
        )
    assert not (tmp_path / "out.gpkg").exists()


def test_results_of_another_number_of_rows_are_refused(rich, tmp_path):
    with pytest.raises(OutputError, match="has 7 rows, but 6 were measured"):
        write_layer(rich, Answers(6, [7] * 6), COLUMNS, tmp_path / "out.gpkg", "geopackage")


def test_a_name_in_use_is_refused_before_anything_is_written(rich, tmp_path):
    column = Column("WHEN", "when", "text", "", "")
    with pytest.raises(OutputError, match="already has a column named 'WHEN'"):
        attached(rich, tmp_path / "out.gpkg", [column])
    assert not (tmp_path / "out.gpkg").exists()


def test_the_source_as_target_is_refused_and_stays(rich):
    before = rich.path.read_bytes()
    with pytest.raises(OutputError, match="would overwrite the source"):
        attached(rich, rich.path)
    assert rich.path.read_bytes() == before


def test_a_full_disk_leaves_the_earlier_output(rich, tmp_path):
    resource = pytest.importorskip("resource")
    (tmp_path / "out.gpkg").write_text("earlier")
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (rich.path.stat().st_size, hard))
    wide = [Column(f"note_{i}", f"n{i}", "text", "", "") for i in range(200)]
    try:
        with pytest.raises(OutputError, match="could not get its columns"):
            attached(rich, tmp_path / "out.gpkg", wide)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert (tmp_path / "out.gpkg").read_text() == "earlier"
    assert list(tmp_path.glob(".out*")) == []


def test_progress_counts_every_row(rich, tmp_path):
    done = []
    attached(rich, tmp_path / "out.gpkg", progress=done.append)
    assert sum(done) == 7
