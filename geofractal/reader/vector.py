"""Vector layers in: what a layer is, and its rows in batches whose boundaries come from the source alone."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from types import ModuleType

import numpy as np
import pyarrow as pa

from geofractal.errors import LayerError, SourceError
from geofractal.reader.layers import SUFFIXES, Batch, LayerInfo, allowed, driver_of

__all__ = ["Batch", "LayerInfo", "layer_info", "list_layers", "stream"]


def list_layers(path: Path) -> tuple[str, ...]:
    """Return the names of a file's layers that have geometry.

    Raises
    ------
    SourceError
        The file is missing, of no known format, or damaged.
    """
    return tuple(_format(path).layer_names(path))


def layer_info(
    path: Path,
    *,
    layer: str | None = None,
    crs: str | None = None,
    override_crs: bool = False,
    encoding: str | None = None,
    need_crs: bool = True,
) -> LayerInfo:
    """Return what is known of a layer before its rows are read.

    Parameters
    ----------
    path : the file
    layer : its name; may be left out where the file has only one
    crs : the CRS of a layer that states none, in any form that PROJ reads
    override_crs : take `crs` even where the layer states another
    encoding : of the text, where the file does not state it or states it wrongly
    need_crs : refuse a layer without CRS

    Raises
    ------
    SourceError
        The file is missing, of no known format, or damaged.
    LayerError
        The layer is not there, has no geometry or no CRS, or `crs` contradicts its own.
    """
    source = _format(path)
    name = _choose(path, source.layer_names(path), layer)
    info: LayerInfo = source.describe(path, name, encoding)
    return replace(info, crs=_crs(info, crs, override=override_crs, needed=need_crs))


def stream(
    info: LayerInfo, *, columns: Sequence[str] | None = (), rows_per_batch: int | None = None
) -> Iterator[Batch]:
    """Yield a layer's rows in order, `rows_per_batch` at a time and the rest at the end.

    Times arrive as text whose field metadata says ``GDAL:OGR:type`` = ``DateTime``, which keeps
    their zones. A layer without rows yields nothing.

    Parameters
    ----------
    info : from `layer_info`
    columns : attributes to read, each once; None reads them all
    rows_per_batch : the layer's own unless stated

    Raises
    ------
    LayerError
        A column is not there, or text is not in the layer's encoding.
    SourceError
        The file is damaged, or holds another number of rows than it says.
    """
    names = info.field_names if columns is None else tuple(dict.fromkeys(columns))
    for name in names:
        if name not in info.field_names:
            raise LayerError(
                f"{info.path}: layer {info.layer!r} has no column {name!r}; {allowed(info.field_names, name)}"
            )
    return _batches(info, names, rows_per_batch or info.rows_per_batch)


def _batches(info: LayerInfo, names: tuple[str, ...], size: int) -> Iterator[Batch]:
    rows = 0
    first = 1 if info.fid_column else 0
    for piece in _even(_format(info.path).pieces(info, names, size), size):
        attributes = piece.select(range(first, piece.num_columns - 1))
        _check_text(info, attributes)
        fids = piece.column(0).to_numpy().astype(np.int64) if first else None
        yield Batch(rows, piece.column(piece.num_columns - 1), fids, attributes)
        rows += piece.num_rows
    if rows != info.features:
        raise SourceError(
            f"{info.path}: layer {info.layer!r}: {rows} rows were read, but it counts {info.features}; "
            "the file is damaged or changed while it was read: save the layer anew, best as GeoPackage"
        )


def _even(pieces: Iterator[pa.RecordBatch], size: int) -> Iterator[pa.RecordBatch]:
    """Yield the same rows in batches of exactly `size`, the last one shorter."""
    held: list[pa.RecordBatch] = []
    for piece in pieces:
        held.append(piece)
        while (count := sum(part.num_rows for part in held)) >= size:
            whole = _joined(held)
            yield whole.slice(0, size)
            held = [whole.slice(size)] if count > size else []
    if any(part.num_rows for part in held):
        yield _joined(held)


def _joined(parts: list[pa.RecordBatch]) -> pa.RecordBatch:
    if len(parts) == 1:
        return parts[0]
    return pa.Table.from_batches(parts).combine_chunks().to_batches()[0]


def _format(path: Path) -> ModuleType:
    from geofractal.reader import formats, parquet  # loaded here: GDAL is slow

    driver = driver_of(path)
    if driver is None:
        raise SourceError(f"{path}: no vector format has this ending; allowed: {', '.join(SUFFIXES)}")
    if not path.is_file():
        beside = [p.name for p in sorted(path.parent.glob("*")) if driver_of(p)]
        raise SourceError(f"{path}: no such file; there, {allowed(beside, path.name)}")
    return parquet if driver == "geoparquet" else formats


def _choose(path: Path, names: Sequence[str], layer: str | None) -> str:
    if not names:
        raise SourceError(f"{path}: holds no layer with geometry; it may be damaged or cut off")
    if layer is None and len(names) == 1:
        return names[0]
    if layer is None:
        raise LayerError(f"{path}: name one of its layers under 'layer'; {allowed(names, '')}")
    if layer not in names:
        raise LayerError(f"{path}: has no layer {layer!r}; {allowed(names, layer)}")
    return layer


def _crs(info: LayerInfo, given: str | None, *, override: bool, needed: bool) -> str | None:
    import pyproj  # loaded here: it is slow

    named = f"{info.path}: layer {info.layer!r}"
    own = pyproj.CRS.from_user_input(info.crs) if info.crs else None
    if own is not None and own.name.lower().startswith("undefined"):  # GeoPackage's words for none
        own = None
    if given is None:
        if own is None and needed:
            raise LayerError(f"{named} has no CRS; state it under 'crs', such as crs: EPSG:2193")
        return own.to_wkt() if own else None
    try:
        stated = pyproj.CRS.from_user_input(given)
    except pyproj.exceptions.CRSError as error:
        raise LayerError(f"{named}: crs {given!r} is not known to PROJ ({error})") from None
    if own is None or override:
        return stated.to_wkt()
    if not own.equals(stated, ignore_axis_order=True) and (own.to_epsg() or -1) != stated.to_epsg():
        raise LayerError(
            f"{named} is in {own.name!r}, but 'crs' says {stated.name!r}; take 'crs' out, "
            "or add override-crs: true if the layer's own is wrong"
        )
    return own.to_wkt()


def _check_text(info: LayerInfo, attributes: pa.RecordBatch) -> None:
    for name, column in zip(attributes.schema.names, attributes.columns, strict=True):
        try:
            column.validate(full=True)
        except pa.ArrowInvalid:
            raise LayerError(
                f"{info.path}: layer {info.layer!r}: text of column {name!r} is not "
                f"{info.encoding or 'UTF-8'}; state the right one, such as encoding: ISO-8859-1"
            ) from None
