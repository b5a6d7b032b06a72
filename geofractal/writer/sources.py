"""Sources stay as they are: no output may be one of them, and each is fingerprinted before and after."""

from __future__ import annotations

import hashlib
import unicodedata
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import NamedTuple

from geofractal.errors import OutputError, SourceChangedError, SourceError
from geofractal.reader.unmerged import changes_beside
from geofractal.writer.commit import SHAPEFILE_PARTS

_CHUNK = 1 << 22


class Fingerprint(NamedTuple):
    """Bytes, last change (nanoseconds since 1970) and SHA-256 of a source.

    Of several files: the sum, the latest, and the SHA-256 of the lines ``<sha256>  <name>``, in order
    of names, that ``sha256sum`` prints for them.
    """

    size: int
    mtime_ns: int
    sha256: str


def source_files(path: Path) -> tuple[Path, ...]:
    """Return a source's files: a Shapefile's parts, and changes that a database keeps beside itself."""
    beside: list[Path] = []
    if path.suffix.lower() == ".shp" and path.parent.is_dir():
        parts = {*SHAPEFILE_PARTS}
        beside = [p for p in path.parent.iterdir() if p.stem == path.stem and p.suffix.lower() in parts]
    return (path, *sorted(beside), *changes_beside(path))


def fingerprint(paths: Path | Iterable[Path]) -> Fingerprint:
    """Return the fingerprint of a source, or of several as one.

    Raises
    ------
    SourceError
        A file is missing or cannot be read.
    """
    given = [paths] if isinstance(paths, Path) else list(paths)
    files = [file for path in given for file in source_files(path)]
    try:
        stats = [file.stat() for file in files]
        sums = [_sha256(file) for file in files]
    except OSError as error:
        raise SourceError(f"{error.filename}: cannot be read ({error.strerror})") from error
    lines = sorted((file.name, found) for file, found in zip(files, sums, strict=True))
    listed = "".join(f"{found}  {name}\n" for name, found in lines)
    return Fingerprint(
        sum(stat.st_size for stat in stats),
        max(stat.st_mtime_ns for stat in stats),
        sums[0] if len(sums) == 1 else hashlib.sha256(listed.encode()).hexdigest(),
    )


def check_unchanged(path: Path, before: Fingerprint) -> None:
    """Raise unless a source's bytes are what they were; a mere new date is no change.

    Raises
    ------
    SourceChangedError
        The bytes differ.
    """
    if fingerprint(path).sha256 != before.sha256:
        raise SourceChangedError(
            f"{path}: changed while it was read, so nothing was kept of it; "
            "run again once no other program writes to it, or measure a copy"
        )


def refuse_sources(targets: Iterable[Path], sources: Iterable[Path]) -> None:
    """Raise if writing any target would touch a source: by path, link, or a name that differs by case.

    Raises
    ------
    OutputError
        A target, or a file that belongs to it, is a source or belongs to one.
    """
    guarded = {key: path for path in sources for file in source_files(path) for key in _identities(file)}
    for target in targets:
        for file in _files_of_output(target):
            for key in _identities(file):
                if key in guarded:
                    raise OutputError(
                        f"{target}: would overwrite the source {guarded[key]}; sources are never written to: "
                        "choose another output folder"
                    )


def _files_of_output(target: Path) -> tuple[Path, ...]:
    parts = SHAPEFILE_PARTS if target.suffix.lower() == ".shp" else ()
    return (target, *(target.with_suffix(part) for part in parts))


def _identities(path: Path) -> Iterator[str | tuple[int, int]]:
    """Yield what makes two paths the same file: the folded real path, and device and number if it exists."""
    yield unicodedata.normalize("NFC", str(path.resolve())).casefold()
    if path.exists():
        stat = path.stat()
        yield stat.st_dev, stat.st_ino


def _sha256(path: Path) -> str:
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while chunk := file.read(_CHUNK):
            digest.update(chunk)
    return digest.hexdigest()
