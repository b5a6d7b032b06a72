import shutil
import sqlite3
from contextlib import closing

import pyarrow as pa
import pytest
from writer_cases import lines, make

from geofractal.reader.unmerged import copy_merged, file_to_open
from geofractal.reader.vector import layer_info, list_layers, stream


@pytest.fixture
def wal(tmp_path):
    """Return a GeoPackage in WAL mode whose third row is still in the file beside it, as after a crash."""
    info = make(tmp_path / "a.gpkg", lines(2), {"a": pa.array([1, 2])}, SPATIAL_INDEX="NO")
    folder = tmp_path / "crashed"
    folder.mkdir()
    with closing(sqlite3.connect(info.path)) as database:
        database.execute("PRAGMA journal_mode = WAL")
        database.execute("PRAGMA wal_autocheckpoint = 0")
        database.execute("INSERT INTO shore (a) VALUES (3)")
        database.commit()
        for name in ("a.gpkg", "a.gpkg-wal"):
            shutil.copy(tmp_path / name, folder / name)
    return folder / "a.gpkg"


@pytest.fixture
def rolled(tmp_path):
    """Return a database of rows 0 and the journal of a transaction that a crash has cut."""
    path = tmp_path / "a.gpkg"
    with closing(sqlite3.connect(path, isolation_level=None)) as database:
        database.execute("CREATE TABLE t (a, filler)")
        database.execute("BEGIN")
        database.executemany("INSERT INTO t VALUES (0, ?)", [("x" * 500,)] * 2_000)
        database.execute("COMMIT")
        database.execute("PRAGMA cache_size = 5")  # too small for the change, so half of it reaches the file
        database.execute("BEGIN")
        database.execute("UPDATE t SET a = 1")
        (tmp_path / "crashed").mkdir()
        for name in ("a.gpkg", "a.gpkg-journal"):
            shutil.copy(tmp_path / name, tmp_path / "crashed" / name)
    return tmp_path / "crashed" / "a.gpkg"


def everything(folder):
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_reading_merges_nothing_into_the_source(wal):
    before = everything(wal.parent)
    list_layers(wal)
    list(stream(layer_info(wal), columns=None))
    assert everything(wal.parent) == before


def test_rows_beside_the_database_are_read(wal):
    found = [batch.attributes.column("a").to_pylist() for batch in stream(layer_info(wal), columns=None)]
    assert found == [[1, 2, 3]]


def test_one_copy_serves_until_the_source_changes(wal):
    first = file_to_open(wal)
    assert file_to_open(wal) == first
    with closing(sqlite3.connect(wal)) as database:
        database.execute("PRAGMA wal_autocheckpoint = 0")
        database.execute("INSERT INTO shore (a) VALUES (4)")
        database.commit()
        assert file_to_open(wal) != first


def test_a_database_without_changes_beside_it_is_read_where_it_is(tmp_path):
    info = make(tmp_path / "a.gpkg", lines(2), {"a": pa.array([1, 2])})
    assert file_to_open(info.path) == info.path


def test_a_transaction_cut_by_a_crash_is_rolled_back_in_the_copy_alone(rolled, tmp_path):
    before = everything(rolled.parent)
    copy_merged(rolled, tmp_path / "copy.gpkg")
    with closing(sqlite3.connect(tmp_path / "copy.gpkg")) as database:
        assert database.execute("SELECT DISTINCT a FROM t").fetchall() == [(0,)]
    assert everything(rolled.parent) == before
