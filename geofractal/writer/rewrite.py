"""Copies through GDAL: any layer to GeoPackage, Shapefile, FlatGeobuf or GeoJSON, rows in their order."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from itertools import chain
from pathlib import Path

import pyarrow as pa
import pyogrio
import pyogrio.raw

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.reader.vector import Batch, LayerInfo
from geofractal.writer.commit import advice
from geofractal.writer.names import SHAPEFILE_NAME_BYTES, fitted, short_names
from geofractal.writer.portable import portable
from geofractal.writer.rows import Progress, Results, empty_batch, joined
from geofractal.writer.survey import declared_type, promoted, survey

DRIVERS = {
    "geopackage": "GPKG",
    "shapefile": "ESRI Shapefile",
    "flatgeobuf": "FlatGeobuf",
    "geojson": "GeoJSON",
    "geojson-lines": "GeoJSONSeq",
}
_INDEX_BYTES = "64000000"  # beyond it GDAL builds the R-tree on disk, so memory stays flat
SHAPEFILE_BYTES = 1 << 31
_NEAR_LIMIT = 1 << 28  # the feature that did not fit was smaller
_GEOMETRY_MARK = {"ARROW:extension:name": "geoarrow.wkb"}


@dataclass(frozen=True, slots=True)
class Names:
    """Names in the copy: of the source's columns, the new ones, the stored feature id and the geometry."""

    fields: tuple[str, ...]
    new: tuple[str, ...]
    ids: str
    geometry: str


def copy_names(info: LayerInfo, columns: Sequence[Column], layout: str) -> Names:
    """Return the names that a copy in `layout` has; GDAL takes names that differ by case for one."""
    ids = [info.fid_column] if _has_ids(info) else []
    most = SHAPEFILE_NAME_BYTES if layout == "shapefile" else None
    own = fitted([*info.field_names, *ids], most_bytes=most)
    fields, kept = own[: len(info.fields)], own[len(info.fields) :]
    new = short_names(columns, own) if layout == "shapefile" else tuple(column.name for column in columns)
    geometry, spare = fitted(["geom", "fid"], taken=(*own, *new))
    return Names(fields, new, kept[0] if kept else spare, geometry)


def field_names(info: LayerInfo, columns: Sequence[Column], layout: str) -> tuple[tuple[str, str], ...]:
    """Return (full name, name in the copy) of each of its fields, in the order they stand there."""
    names = copy_names(info, columns, layout)
    ids = ((info.fid_column, names.ids),) if _has_ids(info) else ()
    full = (*info.field_names, *(column.name for column in columns))
    return (*ids, *zip(full, (*names.fields, *names.new), strict=True))


def rewrite(
    info: LayerInfo,
    results: Results,
    columns: Sequence[Column],
    part: Path,
    layout: str,
    progress: Progress | None,
) -> None:
    """Write a copy of the layer with its new columns to `part`.

    Raises
    ------
    OutputError
        The format cannot hold the layer, or the file cannot be written.
    """
    found = survey(info)
    named = f"{info.path}: layer {info.layer!r}"
    declared, multi = declared_type(found, layout, named)
    names = copy_names(info, columns, layout)
    keep_ids = _keeps_ids(info, layout, rising=found.rising_ids)
    feed = _Feed(info, results, names, layout, keep_ids=keep_ids, multi=multi, progress=progress)
    with _settings(info), warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what GDAL remarks on is listed among the losses
        try:
            pyogrio.raw.write_arrow(
                feed.reader(),
                part,
                layer=info.layer,
                driver=DRIVERS[layout],
                geometry_name=names.geometry,
                geometry_type=declared,
                crs=info.crs,
                **_options(info, layout, names, keep_ids=keep_ids),
            )
        except (RuntimeError, ValueError) as error:
            if feed.failure is None:
                _refuse_too_large(part, named)
                raise OutputError(
                    f"{part.parent}: GDAL could not write {named} as {layout} ({error}); {advice(part)}"
                ) from error
    if feed.failure is not None:
        raise feed.failure


def _refuse_too_large(part: Path, named: str) -> None:
    """Raise if a Shapefile ended at its limit, which GDAL reports as a missing file."""
    for suffix in (".shp", ".dbf"):
        file = part.with_suffix(suffix)
        if part.suffix == ".shp" and file.exists() and file.stat().st_size > SHAPEFILE_BYTES - _NEAR_LIMIT:
            raise OutputError(
                f"{named} does not fit into a Shapefile, whose {suffix} holds 2 GB at most: "
                "choose another format, such as geopackage, or split the layer"
            )


class _Feed:
    """The batches that GDAL pulls; it swallows what is raised in there, so `failure` keeps it."""

    def __init__(
        self,
        info: LayerInfo,
        results: Results,
        names: Names,
        layout: str,
        *,
        keep_ids: bool,
        multi: bool,
        progress: Progress | None,
    ) -> None:
        self.failure: BaseException | None = None
        self._names = names
        self._layout = layout
        self._keep_ids = keep_ids
        self._multi = multi
        self._pairs = joined(info, results, progress)
        first = next(self._pairs, None) or empty_batch(info, results)
        self._first = self._batch(*first)

    def reader(self) -> pa.RecordBatchReader:
        """Return the batches as a stream."""
        return pa.RecordBatchReader.from_batches(self._first.schema, self._batches())

    def _batches(self) -> Iterator[pa.RecordBatch]:
        try:
            rest = (self._batch(*pair) for pair in self._pairs)
            yield from chain([self._first] if self._first.num_rows else [], rest)
        except BaseException as error:
            self.failure = error
            raise

    def _batch(self, batch: Batch, new: pa.RecordBatch) -> pa.RecordBatch:
        fields = [
            field.with_name(name)
            for field, name in zip(batch.attributes.schema, self._names.fields, strict=True)
        ]
        fields += [field.with_name(name) for field, name in zip(new.schema, self._names.new, strict=True)]
        arrays = [*batch.attributes.columns, *new.columns]
        ported = [portable(array, field, self._layout) for array, field in zip(arrays, fields, strict=True)]
        if self._keep_ids:
            ids = pa.array([] if batch.fids is None else batch.fids, pa.int64())
            ported.insert(0, (ids, pa.field(self._names.ids, pa.int64())))
        wkb = promoted(batch.wkb) if self._multi else batch.wkb
        ported.append((wkb, pa.field(self._names.geometry, wkb.type, metadata=_GEOMETRY_MARK)))
        schema = pa.schema([field for _, field in ported])
        return pa.RecordBatch.from_arrays([array for array, _ in ported], schema=schema)


def _keeps_ids(info: LayerInfo, layout: str, *, rising: bool) -> bool:
    """Tell whether stored ids go along; a GeoPackage sorts its rows by them, and order comes first."""
    return _has_ids(info) and (rising or layout != "geopackage")


def _has_ids(info: LayerInfo) -> bool:
    return info.driver == "geopackage" and bool(info.fid_column)


def _options(info: LayerInfo, layout: str, names: Names, *, keep_ids: bool) -> dict[str, str]:
    day = _changed(info).strftime("%Y-%m-%d")
    exact = {"ID_FIELD": names.ids} if keep_ids else {}
    options = {
        "geopackage": {"GEOMETRY_NAME": names.geometry, "FID": names.ids},
        "shapefile": {"ENCODING": "UTF-8", "2GB_LIMIT": "YES", "DBF_DATE_LAST_UPDATE": day},
        "flatgeobuf": {"SPATIAL_INDEX": "NO"},  # the index would change the order of rows
        "geojson": {"SIGNIFICANT_FIGURES": "17", **exact},
        "geojson-lines": {"COORDINATE_PRECISION": "17", **exact},
    }
    return options[layout]


@contextmanager
def _settings(info: LayerInfo) -> Iterator[None]:
    """Bound GDAL's memory, and date the copy by its source so that the same input gives the same bytes."""
    wanted = {
        "OGR_CURRENT_DATE": _changed(info).strftime("%Y-%m-%dT%H:%M:%S.000Z"),
        "OGR_GPKG_MAX_RAM_USAGE_RTREE": _INDEX_BYTES,
    }
    before = {name: pyogrio.get_gdal_config_option(name) for name in wanted}
    pyogrio.set_gdal_config_options(wanted)
    try:
        yield
    finally:
        pyogrio.set_gdal_config_options(before)


def _changed(info: LayerInfo) -> datetime:
    return datetime.fromtimestamp(int(info.path.stat().st_mtime), UTC)
