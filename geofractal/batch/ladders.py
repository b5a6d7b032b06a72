"""Ladder tables: what was found at every rung, kept part by part and written as one long table."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import pyarrow as pa

from geofractal.config.models import Batch, MeasureRequest
from geofractal.measure import Column
from geofractal.progress import Progress
from geofractal.reader.vector import LayerInfo
from geofractal.registry import load_measure
from geofractal.writer.rows import new_fields
from geofractal.writer.tables import write_batches

_ROW = Column("row", "row", "count", "", "number of the row in its layer, from 1; of a group its first row")
_WHOLE_NUMBERS = {"int8", "int16", "int32", "int64", "uint8", "uint16", "uint32"}


@dataclass(frozen=True)
class LadderTable:
    """The table of one measure on one layer, one row a feature and rung.

    Rows of the layer come in its own order. Groups come by bucket, a number that depends on a group's value
    and on the layer's size alone, and in the order of their values within it. What has no ladder has no row.

    Attributes
    ----------
    request : the measure
    named : the column that names a feature, None where its row number must do
    """

    request: MeasureRequest
    named: Column | None

    @cached_property
    def columns(self) -> tuple[Column, ...]:
        """All of its columns."""
        return (_ROW, *([self.named] if self.named else []), *self.request.ladder_columns())

    @cached_property
    def schema(self) -> pa.Schema:
        """Its columns as Arrow."""
        return pa.schema(new_fields(self.columns))

    @property
    def name(self) -> str:
        """What its files are called, but for their endings."""
        words = (self.request.of, self.request.prefix, load_measure(self.request.measure).stem, "ladder")
        return "_".join(word for word in words if word)

    def targets(self, batch: Batch) -> list[Path]:
        """Return its files."""
        return [batch.outputs.folder / f"{self.name}.{word}" for word in batch.outputs.tables]


def naming_column(id_column: str | None, group_by: str | None, info: LayerInfo) -> Column | None:
    """Return the column that names a layer's features in tables: ``group``, ``id`` or none."""
    if group_by:
        return Column(
            "group", "group", "text", "", f"value of the column {group_by!r} in the rows of the group"
        )
    if id_column:
        kind = dict(info.fields)[id_column]
        meaning = f"value of the column {id_column!r}"
        return Column("id", "id", "count" if kind in _WHOLE_NUMBERS else "text", "", meaning)
    return None


def ladder_file(folder: Path, key: str, place: int) -> Path:
    """Return where a part keeps the rows of the layer's ladder table of that number."""
    return folder / f"{key}.{place}.ladder"


def write_ladder_table(
    table: LadderTable,
    target: Path,
    files: Sequence[tuple[Path, int]],
    progress: Progress,
) -> int:
    """Publish a ladder table from what the parts kept, and return its number of rows.

    Parameters
    ----------
    files : what each part kept, in the order of the table, and how many rows of the layer the part had
    """
    total = sum(rows for _, rows in files)
    with progress.stage(table.request.of, f"write {target.name}", total) as stage:

        def batches() -> Iterator[pa.RecordBatch]:
            for path, rows in files:
                with pa.OSFile(str(path)) as source, pa.ipc.open_stream(source) as stream:
                    yield from stream
                stage.advance(rows)

        return write_batches(batches(), table.schema, target)
