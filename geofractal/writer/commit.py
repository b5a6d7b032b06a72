"""Outputs appear whole or not at all: written beside their place, flushed to disk, renamed into it."""

from __future__ import annotations

import errno
import os
import re
import shutil
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from geofractal import interrupt
from geofractal.errors import OutputError
from geofractal.reader.unmerged import changes_beside

SHAPEFILE_PARTS = (".shx", ".dbf", ".prj", ".cpg")
"""What is published beside a ``.shp``."""

_SHAPEFILE_INDEXES = (".qix", ".sbn", ".sbx", ".fbn", ".fbx", ".ain", ".aih", ".idm", ".ind", ".qpj")
_LOW_SPACE = 1 << 20


@contextmanager
def publish(target: Path) -> Iterator[Path]:
    """Yield a path to write to; once the block ends well, rename what stands there to `target`.

    The path is in the same folder and named ``.<name>.<pid>.part<suffix>``. For a ``.shp`` its
    ``.shx .dbf .prj .cpg`` go first and the ``.shp`` last, and indexes of an earlier Shapefile are
    removed; any other file whose name starts alike (journals, an R-tree under construction) is
    removed. Whatever happens in the block, an earlier `target` stays as it was until the new one is
    whole. Temporary files that runs no longer alive have left for this target are removed first.

    Raises
    ------
    OutputError
        The folder cannot be written to, the disk is full, or another program is editing the target.
    """
    stem = f".{target.name}.{os.getpid()}.part"
    part = target.with_name(stem + target.suffix)
    with in_plain_words(target):
        target.parent.mkdir(parents=True, exist_ok=True)
        _refuse_edited(target)
        _remove(_left_by_dead_runs(target))
        interrupt.register(target.with_name(stem))
        try:
            part.touch()
            part.unlink()  # GDAL's own words for a folder that cannot be written to are obscure
            yield part
            _rename(part, target, stem)
        finally:
            _remove(_starting(target.parent, stem))
            interrupt.unregister(target.with_name(stem))


@contextmanager
def in_plain_words(target: Path) -> Iterator[None]:
    """Turn the system's errors into an `OutputError` that names the target and says what to do."""
    try:
        yield
    except OSError as error:
        raise OutputError(f"{target}: cannot be written: {_reason(target, error)}") from error


def advice(target: Path) -> str:
    """Return what to try after a library failed to write `target`."""
    free = shutil.disk_usage(target.parent).free
    if free < _LOW_SPACE:
        return "the disk is full; free some space or choose another output folder"
    return f"{free // 1_000_000} MB are free there; choose another output folder or format"


def _reason(target: Path, error: OSError) -> str:
    if error.errno in {errno.EACCES, errno.EPERM, errno.EROFS}:
        return f"no permission to write in {target.parent}; choose another output folder"
    if error.errno in {errno.ENOSPC, errno.EDQUOT, errno.EFBIG}:
        return (
            "the disk is full or a file may not grow further; free some space or choose another output folder"
        )
    return str(error)


def _refuse_edited(target: Path) -> None:
    """Refuse a database that holds changes of another program beside its file: a rename would mix them up."""
    for beside in changes_beside(target):
        raise OutputError(
            f"{target}: another program is editing the earlier output ({beside.name} is not empty); "
            "close it there, or choose another output folder"
        )


def _rename(part: Path, target: Path, stem: str) -> None:
    beside = {path.name[len(stem) :].lower(): path for path in _starting(target.parent, stem)}
    beside.pop(target.suffix.lower(), None)
    wanted = SHAPEFILE_PARTS if target.suffix.lower() == ".shp" else ()
    moves = [(beside[suffix], target.with_suffix(suffix)) for suffix in wanted if suffix in beside]
    for path in (part, *(source for source, _ in moves)):
        flush(path)
    with interrupt.shielded():
        if wanted:
            outdated = {*SHAPEFILE_PARTS, *_SHAPEFILE_INDEXES} - set(beside)
            _remove(target.with_suffix(suffix) for suffix in outdated)
        for source, place in moves:
            source.replace(place)
        part.replace(target)
    _flush_folder(target.parent)


def flush(path: Path) -> None:
    """Have the system write a file to its disk, so that a rename after it never names half a file."""
    with path.open("rb+") as file:
        os.fsync(file.fileno())


def _flush_folder(folder: Path) -> None:
    if os.name != "posix":
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _starting(folder: Path, start: str) -> list[Path]:
    with suppress(FileNotFoundError):
        return sorted(path for path in folder.iterdir() if path.name.startswith(start))
    return []


def _left_by_dead_runs(target: Path) -> Iterator[Path]:
    pattern = re.compile(re.escape(f".{target.name}.") + r"(\d+)\.part")
    for path in _starting(target.parent, f".{target.name}."):
        found = pattern.match(path.name)
        if found and not alive(int(found[1])):
            yield path


def alive(pid: int) -> bool:
    """Tell whether another process of this number runs; in containers a new run often has the old one's."""
    if (
        pid == os.getpid() or os.name != "posix"
    ):  # elsewhere an open file cannot be removed, so trying is safe
        return False
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except (PermissionError, OverflowError):
        return True
    return True


def _remove(paths: Iterator[Path] | list[Path]) -> None:
    for path in paths:
        with suppress(OSError):
            path.unlink()
