"""New columns attached in a copy of a GeoPackage, in which nothing else changes."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator, Sequence
from contextlib import closing
from pathlib import Path
from typing import Any, NamedTuple

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.reader.unmerged import copy_merged, file_to_open
from geofractal.reader.vector import LayerInfo
from geofractal.writer.commit import advice
from geofractal.writer.rows import Progress, Results

_TYPES = {"number": "REAL", "count": "INTEGER", "text": "TEXT", "flag": "BOOLEAN"}
_ROWS_PER_READ = 5_000


def can_attach(info: LayerInfo) -> bool:
    """Tell whether columns can be attached: to a table with an integer primary key, not to a view."""
    if info.driver != "geopackage" or not info.fid_column:
        return False
    # immutable: a database in WAL mode is not touched, not even by files beside it
    address = f"{file_to_open(info.path).resolve().as_uri()}?immutable=1"
    with closing(sqlite3.connect(address, uri=True)) as database:
        kind = database.execute(
            "SELECT type FROM sqlite_master WHERE type IN ('table', 'view') AND name = ? COLLATE NOCASE",
            [info.layer],
        )
        keys = database.execute(
            "SELECT name, type FROM pragma_table_info(?) WHERE pk", [info.layer]
        ).fetchall()
        return kind.fetchone() == ("table",) and [(name, word.upper()) for name, word in keys] == [
            (info.fid_column, "INTEGER")
        ]


class Addition(NamedTuple):
    """A layer, its results by source row, and what their columns are."""

    info: LayerInfo
    results: Results
    columns: Sequence[Column]


def attach(additions: Sequence[Addition], part: Path, progress: Progress | None) -> None:
    """Copy the whole GeoPackage to `part` and fill new columns of its layers by feature id.

    Other layers, styles, metadata, triggers, indexes, stored types and ids stay as they are, and so
    does the date of a layer's last change: the tables' new columns are the whole difference. A
    database in WAL mode is copied with the changes that are still beside it, and the copy is left in
    the mode without side files.

    Raises
    ------
    OutputError
        The copy cannot be written, or holds other rows than were measured.
    """
    info = additions[0].info
    path = info.path
    try:
        copy_merged(path, part)
        with closing(sqlite3.connect(part, isolation_level=None)) as database:
            for info, results, columns in additions:
                _attach(database, info, results, columns, progress)
    except sqlite3.Error as error:
        raise OutputError(
            f"{part.parent}: layer {info.layer!r} of {path} could not get its columns ({error}); "
            f"{advice(part)}"
        ) from error


def _attach(
    database: sqlite3.Connection,
    info: LayerInfo,
    results: Results,
    columns: Sequence[Column],
    progress: Progress | None,
) -> None:
    table = _quoted(info.layer)
    database.execute("PRAGMA journal_mode = OFF")  # the copy is thrown away if anything fails
    database.execute("PRAGMA synchronous = OFF")
    database.execute("BEGIN")
    # R-tree triggers call functions that only GDAL has, and others would change more than was asked
    triggers = database.execute(
        "SELECT name, sql FROM sqlite_master "
        "WHERE type = 'trigger' AND tbl_name = ? COLLATE NOCASE ORDER BY rowid",
        [info.layer],
    ).fetchall()
    for name, _ in triggers:
        database.execute(f"DROP TRIGGER {_quoted(name)}")
    for column in columns:
        database.execute(f"ALTER TABLE {table} ADD COLUMN {_quoted(column.name)} {_TYPES[column.kind]}")
    settings = ", ".join(f"{_quoted(column.name)} = ?" for column in columns)
    statement = f"UPDATE {table} SET {settings} WHERE {_quoted(info.fid_column)} = ?"  # noqa: S608 - names are quoted
    changed = database.executemany(statement, _values(results, progress)).rowcount
    if changed != results.n_rows:
        raise OutputError(
            f"{info.path}: layer {info.layer!r}: {changed} of {results.n_rows} measured rows were found by "
            "their id; the layer changed while it was read"
        )
    for _, statement in triggers:
        database.execute(statement)
    database.execute("COMMIT")


def _values(results: Results, progress: Progress | None) -> Iterator[tuple[Any, ...]]:
    for start in range(0, results.n_rows, _ROWS_PER_READ):
        stop = min(start + _ROWS_PER_READ, results.n_rows)
        fids = results.fids(start, stop)
        if fids is None:
            raise OutputError("a GeoPackage layer was measured without its feature ids; run again")
        columns = [column.to_pylist() for column in results.read(start, stop).columns]
        yield from zip(*columns, fids.tolist(), strict=True)
        if progress is not None:
            progress(stop - start)


def _quoted(name: str) -> str:
    return '"' + name.replace('"', '""') + '"'
