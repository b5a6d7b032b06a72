"""One layer's copy with its new columns, in any of the formats, counted before it is published."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.reader.layers import driver_of
from geofractal.reader.vector import LayerInfo
from geofractal.writer.attach import Addition, attach, can_attach
from geofractal.writer.commit import advice, publish
from geofractal.writer.counts import count_rows
from geofractal.writer.dictionary import write_field_name_table
from geofractal.writer.geoparquet import attach_to_geoparquet, write_geoparquet
from geofractal.writer.losses import Loss, expected_losses
from geofractal.writer.rewrite import field_names, rewrite
from geofractal.writer.rows import Progress, Results, refuse_other_rows
from geofractal.writer.sources import refuse_sources

SUFFIXES = {
    "geopackage": ".gpkg",
    "shapefile": ".shp",
    "flatgeobuf": ".fgb",
    "geojson": ".geojson",
    "geojson-lines": ".geojsonl",
    "geoparquet": ".parquet",
}
"""The ending of a copy's name, by format."""


@dataclass(frozen=True, slots=True)
class Written:
    """What was published: files, rows, and what the format could not hold."""

    paths: tuple[Path, ...]
    rows: int
    losses: tuple[Loss, ...]


def write_layer(
    info: LayerInfo,
    results: Results,
    columns: Sequence[Column],
    target: Path,
    format: str,  # noqa: A002 - the word of the batch file
    *,
    also: Sequence[Addition] = (),
    progress: Progress | None = None,
    confirm: Callable[[], None] | None = None,
) -> Written:
    """Write a copy of a layer with its new columns; every row is kept, in order.

    From GeoPackage to GeoPackage the whole file is copied and the columns are attached, from
    GeoParquet to GeoParquet geometry and other columns are passed through; every other pair is
    written anew as far as the format can hold it, and dated by its source, so that the same input
    gives the same bytes. The copy appears at `target` once it is whole and holds as many rows as the
    source.

    Parameters
    ----------
    info : the source, from ``layer_info``
    results : the new columns by source row
    columns : what the new columns are
    target : the file to write, with an ending of its format
    format : one of `SUFFIXES`
    also : further layers of the same GeoPackage, whose columns go into the same copy
    progress : called with the number of rows done since the last call
    confirm : called once the copy is whole; what it raises keeps the copy from being published

    Raises
    ------
    OutputError
        The target is a source or cannot be written, a name is taken, or the format cannot hold the
        layer. An earlier file at `target` is then as it was.
    """
    if driver_of(target) != format:
        raise OutputError(
            f"{target}: a {format} file must end in {SUFFIXES.get(format, 'one of its endings')}"
        )
    refuse_sources([target], [info.path])
    additions = [Addition(info, results, columns), *also]
    for addition in additions:
        refuse_other_rows(addition.info, addition.results)
    losses = expected_losses(info, columns, format)
    with publish(target) as part:
        if format == "geopackage" and can_attach(info):
            attach(additions, part, progress)
        elif format == info.driver == "geoparquet":
            attach_to_geoparquet(info, results, columns, part, progress)
        elif format == "geoparquet":
            write_geoparquet(info, results, columns, part, progress)
        else:
            rewrite(info, results, columns, part, format, progress)
        for addition in additions:
            _refuse_lost_rows(addition.info, part, target, format)
        if confirm is not None:
            confirm()
        beside = []
        if format == "shapefile":
            beside.append(write_field_name_table(target, field_names(info, columns, format), columns))
    return Written((target, *beside), info.features, losses)


def _refuse_lost_rows(info: LayerInfo, part: Path, target: Path, word: str) -> None:
    """Raise unless as many rows can be read from what was written as the source has."""
    rows = count_rows(part, info.layer, word)
    if rows != info.features:
        raise OutputError(
            f"{target}: {max(rows, 0)} of {info.features} rows can be read from what was written, so it "
            f"is not kept; {advice(target)}"
        )
