"""Figures of class maps as columns of their zones, by row of the zones' layer."""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from geofractal.batch.cover_parts import CoverPart
from geofractal.batch.parts import NOT_WANTED
from geofractal.batch.spool import FID, ROW, RowSpool
from geofractal.batch.zone_layers import read_rows
from geofractal.config.columns import ZoneColumn
from geofractal.measure import Ints
from geofractal.writer.rows import ARROW_TYPES, Results

if TYPE_CHECKING:
    from geofractal.batch.covers import MeasuredCover
    from geofractal.batch.plan import LayerPlan

Place = tuple[str, str, str, str]
"""Reporting unit, cover, quantity and border rule (empty where there is none) of a figure."""


class SideBySide:
    """Columns of several spools of one layer."""

    def __init__(self, parts: Sequence[Results]) -> None:
        self._parts = parts
        self.n_rows = parts[0].n_rows

    def read(self, start: int, stop: int) -> pa.RecordBatch:
        """Return the columns of rows `start` to `stop`."""
        batches = [part.read(start, stop) for part in self._parts]
        names = [name for batch in batches for name in batch.schema.names]
        return pa.RecordBatch.from_arrays(
            [column for batch in batches for column in batch.columns], names=names
        )

    def fids(self, start: int, stop: int) -> Ints | None:
        """Return the source's feature ids of these rows."""
        return self._parts[0].fids(start, stop)


def zone_spool(layer: LayerPlan, covers: Sequence[MeasuredCover], folder: Path) -> RowSpool:
    """Return the columns that a layer of zones gains, in a spool that the caller closes."""
    rows = read_rows(layer)
    n = len(rows.names)
    arrays: dict[str, Any] = {}
    for found in covers:
        for work, part in found.works:
            if work.zones is not None and work.zones.name == layer.name:
                arrays |= _filled(work.request.zone_columns(), part, rows.names, rows.wanted)
    spool = RowSpool(folder / f"{layer.name}.{os.getpid()}.zones", layer.zone_columns, n)
    fids = pa.nulls(n, pa.int64()) if rows.fids is None else pa.array(rows.fids)
    names = [column.name for column in layer.zone_columns]
    held = [pa.array(arrays[c.name], ARROW_TYPES[c.kind], from_pandas=True) for c in layer.zone_columns]
    places = pa.array(np.arange(n, dtype=np.int64))
    spool.write(pa.RecordBatch.from_arrays([places, fids, *held], names=[ROW, FID, *names]))
    return spool


def _filled(
    columns: Sequence[ZoneColumn], part: CoverPart, names: Sequence[str], wanted: Any
) -> dict[str, list[Any]]:
    """Return the values of some columns for each row of the zones' layer."""
    figures = {_place(figure): figure for figure in part.figures.to_pylist()}
    filled: dict[str, list[Any]] = {one.column.name: [] for one in columns}
    for name, is_wanted in zip(names, wanted, strict=True):
        for one in columns:
            filled[one.column.name].append(_value(one, columns, part, figures, name if is_wanted else None))
    return filled


def _place(figure: dict[str, Any]) -> Place:
    return figure["reporting_unit"], figure["cover"], figure["quantity"], figure["border_rule"] or ""


def _value(
    one: ZoneColumn,
    columns: Sequence[ZoneColumn],
    part: CoverPart,
    figures: dict[Place, dict[str, Any]],
    name: str | None,
) -> Any:
    """Return the value of a column for a zone, None for rows that are not wanted."""
    if not one.quantity:
        if name is None:
            return NOT_WANTED
        return part.zone_problems.get(name) or "; ".join(_reasons(columns, figures, name)) or None
    figure = figures.get((name or "", one.cover, one.quantity, one.rule))
    return None if figure is None or name is None else figure[one.field]


def _reasons(columns: Sequence[ZoneColumn], figures: dict[Place, dict[str, Any]], name: str) -> Iterator[str]:
    """Yield why figures of a zone are missing, each reason once with the classes it holds for."""
    told: dict[str, dict[str, None]] = {}
    for one in columns:
        figure = figures.get((name, one.cover, one.quantity, one.rule))
        if figure is not None and one.field == "estimate" and figure["estimate"] is None:
            told.setdefault(figure["note"] or "no reason given", {})[one.cover] = None
    yield from (f"{', '.join(covers)}: {reason}" for reason, covers in told.items())
