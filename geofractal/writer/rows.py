"""The rows of a copy: the source's columns and the new ones side by side, batch by batch."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Protocol

import pyarrow as pa

from geofractal.errors import OutputError
from geofractal.measure import Column, Ints
from geofractal.reader.vector import Batch, LayerInfo, stream

ARROW_TYPES = {"number": pa.float64(), "count": pa.int64(), "text": pa.string(), "flag": pa.bool_()}

Progress = Callable[[int], None]


class Results(Protocol):
    """New columns by source row, such as the batch's spool."""

    n_rows: int

    def read(self, start: int, stop: int) -> pa.RecordBatch:
        """Return the new columns of rows `start` to `stop`, final names and types, nulls as Arrow nulls."""

    def fids(self, start: int, stop: int) -> Ints | None:
        """Return the stored feature ids of these rows, None where ids are only positions."""


def joined(
    info: LayerInfo, results: Results, progress: Progress | None
) -> Iterator[tuple[Batch, pa.RecordBatch]]:
    """Yield each batch of the source with the new columns of its rows."""
    for batch in stream(info, columns=None):
        stop = batch.first_row + len(batch)
        yield batch, results.read(batch.first_row, stop)
        if progress is not None:
            progress(len(batch))


def empty_batch(info: LayerInfo, results: Results) -> tuple[Batch, pa.RecordBatch]:
    """Return a batch without rows, for layers that have none: types that text cannot name become text."""
    schema = pa.schema([pa.field(name, _named(kind)) for name, kind in info.fields])
    attributes = pa.RecordBatch.from_pylist([], schema=schema)
    return Batch(0, pa.array([], pa.binary()), None, attributes), results.read(0, 0)


def new_fields(columns: tuple[Column, ...]) -> list[pa.Field]:
    """Return the Arrow fields of result columns."""
    return [pa.field(column.name, ARROW_TYPES[column.kind]) for column in columns]


def refuse_other_rows(info: LayerInfo, results: Results) -> None:
    """Raise unless there is one result row for each row of the source."""
    if results.n_rows != info.features:
        raise OutputError(
            f"{info.path}: layer {info.layer!r} has {info.features} rows, but {results.n_rows} were "
            "measured; run again"
        )


def _named(kind: str) -> pa.DataType:
    try:
        return pa.type_for_alias(kind)
    except ValueError:
        return pa.string()
