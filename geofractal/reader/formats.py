"""Layers that GDAL reads: GeoPackage, Shapefile, FlatGeobuf and GeoJSON, streamed as Arrow batches."""

from __future__ import annotations

import codecs
import warnings
import zipfile
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from functools import lru_cache
from pathlib import Path, PurePosixPath
from typing import IO, Any

import pyarrow as pa
import pyogrio
import pyogrio.raw

from geofractal.errors import LayerError, SourceError
from geofractal.reader.flatgeobuf import gathered, starts_over
from geofractal.reader.layers import SAMPLE_ROWS, LayerInfo, driver_of, finite_bounds, kind_of, sampled
from geofractal.reader.unmerged import file_to_open

_DRIVERS = {
    "geopackage": "GPKG",
    "shapefile": "ESRI Shapefile",
    "flatgeobuf": "FlatGeobuf",
    "geojson": "GeoJSON",
    "geojson-lines": "GeoJSONSeq",
}


_ONE_LAYER = ("geojson", "geojson-lines")
"""Text formats, read whole whenever they are opened: not for a layer's name, which the file's does for."""


def layer_names(path: Path) -> tuple[str, ...]:
    """Return the names of the layers that have geometry."""
    if path.suffix.lower() == ".zip":
        return tuple(_zipped(path))
    driver = driver_of(path)
    if driver in _ONE_LAYER:
        return (path.stem,)
    if driver == "shapefile":
        _check_shapefile(path, path.stem)
    with _reading(path), _quiet():
        return tuple(name for name, kind in pyogrio.list_layers(file_to_open(path)) if kind is not None)


def describe(path: Path, layer: str, encoding: str | None) -> LayerInfo:
    """Return what a layer's header tells; its CRS as it stands there."""
    _check_encoding(path, layer, encoding)
    if path.suffix.lower() == ".zip":
        _check_shapefile(path, layer)
    with _reading(path, layer), _quiet():
        target, inside = _target(path, layer)
        found = pyogrio.read_info(
            target,
            layer=inside,
            encoding=encoding,
            force_feature_count=True,
            force_total_bounds=True,
        )
    driver = driver_of(path)
    if driver is None or found["driver"] != _DRIVERS[driver]:
        raise SourceError(f"{path}: holds {found['driver']} data; give the file the ending of its format")
    if driver == "geojson-lines":
        _check_lines(path, int(found["features"]))
    if found["geometry_type"] is None:
        raise LayerError(f"{path}: layer {layer!r} has no geometry")
    declared = str(found["geometry_type"])
    if encoding is None and found["encoding"] != "UTF-8":
        encoding = found["encoding"]  # of a Shapefile that states none; GDAL would hand over the raw bytes
    info = LayerInfo(
        path=path,
        layer=layer,
        driver=driver,
        geometry=kind_of(declared),
        has_z=declared.endswith((" Z", " ZM")),
        has_m=False,  # the header's type is given without its M; the first features tell
        crs=found["crs"],
        features=int(found["features"]),
        fid_column=found["fid_column"],
        fields=_fields(path, layer, encoding),
        bounds=finite_bounds(found["total_bounds"]),
        encoding=encoding,
        rows_per_batch=1,
    )
    first = (piece.column(piece.num_columns - 1) for piece in pieces(info, (), SAMPLE_ROWS))
    return sampled(info, first, _bytes_of(path))


def _bytes_of(path: Path) -> int:
    """Return the size of a file's contents; zipped ones count unpacked."""
    if path.suffix.lower() == ".zip":
        with zipfile.ZipFile(path) as archive:
            return sum(member.file_size for member in archive.infolist())
    return path.stat().st_size


def pieces(info: LayerInfo, columns: tuple[str, ...], rows: int) -> Iterator[pa.RecordBatch]:
    """Yield batches of at most `rows` rows: feature ids first where stored, geometry last."""
    folded = {name.casefold() for name in info.field_names}
    # GDAL leaves columns out by name whatever their case, so of `Name` and `name` it drops the wrong one
    ask = list(columns) if len(folded) == len(info.fields) else None
    with _reading(info.path, info.layer), ExitStack() as stack:
        gaps = _lacks_geometry(info)
        size = 1 if gaps else rows
        reader = _open(stack, info.path, info.layer, info.encoding, ask, size, fids=bool(info.fid_column))
        first = 1 if info.fid_column else 0
        names = reader.schema.names
        last = len(names) - 1
        chosen = [*range(first), *(names.index(name, first, last) for name in columns), last]
        for batch in gathered(reader, rows) if gaps else reader:
            yield batch.select(chosen)


def _lacks_geometry(info: LayerInfo) -> bool:
    """Tell whether a FlatGeobuf layer has rows without geometry; it is read once to know."""
    if info.driver != "flatgeobuf":
        return False
    stat = info.path.stat()
    return _starts_over(info.path, info.layer, (stat.st_size, stat.st_mtime_ns))


@lru_cache(maxsize=32)
def _starts_over(path: Path, layer: str, _state: tuple[int, int]) -> bool:
    with ExitStack() as stack:
        return starts_over(_open(stack, path, layer, None, [], 100, fids=False))


def _open(
    stack: ExitStack,
    path: Path,
    layer: str,
    encoding: str | None,
    columns: list[str] | None,
    rows: int,
    *,
    fids: bool,
) -> Any:
    target, inside = _target(path, layer)
    with _quiet():
        _, reader = stack.enter_context(
            pyogrio.raw.open_arrow(
                target,
                layer=inside,
                encoding=encoding,
                columns=columns,
                return_fids=fids,
                batch_size=rows,
                use_pyarrow=True,
                datetime_as_string=True,
            )
        )
    return reader


def _fields(path: Path, layer: str, encoding: str | None) -> tuple[tuple[str, str], ...]:
    with ExitStack() as stack:
        schema = _open(stack, path, layer, encoding, None, 1, fids=False).schema
    fields = [schema.field(i) for i in range(len(schema) - 1)]
    return tuple((f.name, "datetime" if _is_time(f) else str(f.type)) for f in fields)


def _is_time(field: pa.Field) -> bool:
    return (field.metadata or {}).get(b"GDAL:OGR:type") == b"DateTime"


def _check_encoding(path: Path, layer: str, encoding: str | None) -> None:
    if encoding is None:
        return
    try:
        codecs.lookup(encoding)
    except LookupError:
        raise LayerError(
            f"{path}: layer {layer!r}: encoding {encoding!r} is not known; UTF-8, ISO-8859-1 and CP1252 are"
        ) from None


@contextmanager
def _quiet() -> Iterator[None]:
    """Keep GDAL's remarks (a WAL file opened read-only, M values) from the user; errors still raise."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        yield


@contextmanager
def _reading(path: Path, layer: str | None = None) -> Iterator[None]:
    """Turn what the libraries raise into our errors, which name the file and the layer."""
    named = f"{path}" if layer is None else f"{path}: layer {layer!r}"
    try:
        yield
    except (
        pyogrio.errors.DataSourceError,
        pyogrio.errors.DataLayerError,
        pa.ArrowException,
        OSError,
        IndexError,  # what pyogrio makes of a file whose header is cut off
        UnicodeDecodeError,
        zipfile.BadZipFile,
    ) as error:
        raise SourceError(f"{named} cannot be read; it may be damaged or cut off ({error})") from error


def _check_lines(path: Path, features: int) -> None:
    """Refuse a line-delimited file of which GDAL skips a line that it cannot read, and says nothing."""
    with path.open("rb") as file:
        texts = sum(1 for line in file if line.strip(b"\x1e \t\r\n"))
    with path.open("rb") as file:
        if file.read(1) == b"\x1e":  # RFC 8142: a text may run over several lines
            texts = 1 + sum(block.count(b"\x1e") for block in iter(lambda: file.read(1 << 20), b""))
    if texts != features:
        raise SourceError(
            f"{path}: {texts} features stand in it and {features} can be read; "
            "a line is damaged or cut off: save the layer anew"
        )


def _zipped(path: Path) -> dict[str, str]:
    """Return layer name -> member of each Shapefile in an archive."""
    with _reading(path), zipfile.ZipFile(path) as archive:
        members = [PurePosixPath(name) for name in archive.namelist()]
    shapes = [m for m in members if m.suffix.lower() == ".shp" and m.parts[0] != "__MACOSX"]
    if not shapes:
        raise SourceError(f"{path}: holds no .shp; a .zip is read as a zipped Shapefile")
    stems = [m.stem for m in shapes]
    names = stems if len(set(stems)) == len(stems) else [str(m.with_suffix("")) for m in shapes]
    return dict(zip(names, map(str, shapes), strict=True))


def _target(path: Path, layer: str) -> tuple[Path | str, str | int]:
    """Return what GDAL opens, and the layer in it."""
    if path.suffix.lower() == ".zip":
        return f"/vsizip/{{{path.resolve()}}}/{_zipped(path)[layer]}", 0
    return file_to_open(path), 0 if driver_of(path) in _ONE_LAYER else layer


def _check_shapefile(path: Path, layer: str) -> None:
    """Refuse a Shapefile that lacks a part, or whose .shp is shorter than its own header says.

    GDAL reads the first without its attributes and the second with missing geometries, and says
    nothing of either.
    """
    with ExitStack() as stack:
        if path.suffix.lower() == ".zip":
            archive = stack.enter_context(zipfile.ZipFile(path))
            member = _zipped(path)[layer]
            there = archive.namelist()
            size = archive.getinfo(member).file_size
            stream: IO[bytes] = stack.enter_context(archive.open(member))
        else:
            member = path.name
            there = [p.name for p in path.parent.iterdir()]
            size = path.stat().st_size
            stream = stack.enter_context(path.open("rb"))
        stem = member[:-4]
        beside = {name[len(stem) :].lower() for name in there if name.startswith(stem)}
        for part, loss in ((".shx", "the index of its shapes"), (".dbf", "its attributes")):
            if part not in beside:
                raise SourceError(
                    f"{path}: {stem}{part} is missing, which holds {loss}; copy it from where the Shapefile "
                    "came from, or save the layer anew (the source itself is never repaired)"
                )
        header = stream.read(28)
        stated = 2 * int.from_bytes(header[24:28], "big")
        if size < max(stated, 100):
            raise SourceError(f"{path}: {member} is cut off: {size} bytes of {stated}; copy it anew")
