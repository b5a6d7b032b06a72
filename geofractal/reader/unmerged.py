"""GeoPackages with changes that are still in a file beside them, after a crash or while a program edits them.

Whoever opens such a database through SQLite, GDAL's reading included, merges the changes into it. So
such sources are read from a merged copy.
"""

from __future__ import annotations

import atexit
import shutil
import sqlite3
import tempfile
from contextlib import closing
from functools import lru_cache
from pathlib import Path

from geofractal import interrupt
from geofractal.errors import SourceError

_SUFFIXES = ("-wal", "-journal")


def changes_beside(path: Path) -> tuple[Path, ...]:
    """Return the files beside a database that hold changes of it."""
    beside = (path.with_name(path.name + suffix) for suffix in _SUFFIXES)
    return tuple(file for file in beside if file.exists() and file.stat().st_size)


def file_to_open(path: Path) -> Path:
    """Return the path, or for a GeoPackage with changes beside it a merged copy that stays until the end."""
    if path.suffix.lower() != ".gpkg" or not (beside := changes_beside(path)):
        return path
    state = tuple((file, file.stat().st_size, file.stat().st_mtime_ns) for file in (path, *beside))
    return _merged(path.absolute(), state)


def copy_merged(source: Path, target: Path) -> None:
    """Copy a database with the changes beside it merged; the source's files are only read.

    The copy is left in the journal mode that needs no files beside it.
    """
    for file in changes_beside(source):
        shutil.copyfile(file, target.with_name(target.name + file.name[len(source.name) :]))
    shutil.copyfile(source, target)
    with closing(sqlite3.connect(target)) as database:
        database.execute("SELECT count(*) FROM sqlite_master").fetchone()
        database.execute("PRAGMA journal_mode = DELETE").fetchone()


@lru_cache(maxsize=8)
def _merged(path: Path, _state: tuple[tuple[Path, int, int], ...]) -> Path:
    folder = Path(tempfile.mkdtemp(prefix="geofractal-"))
    interrupt.register(folder)
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    copy = folder / path.name
    try:
        copy_merged(path, copy)
    except sqlite3.Error as error:
        raise SourceError(
            f"{path}: the changes in {changes_beside(path)[0].name} cannot be merged in a copy ({error}); "
            "close the program that edits it, or save the layer anew"
        ) from error
    return copy
