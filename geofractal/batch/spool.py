"""Result columns on disk, addressed by source row: they join the parts with the writer's own reading."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any, Self

import numpy as np
import pyarrow as pa

from geofractal.measure import Column, Ints
from geofractal.writer.commit import in_plain_words

_STORED = {"number": "<f8", "count": "<i8", "text": "<i4", "flag": "i1"}
ROW, FID = "source_row", "source_fid"
"""Names of the columns that a part's results have beside their figures."""

_NO_ID = np.iinfo(np.int64).min


class RowSpool:
    """A file of fixed-size records, one per source row.

    Parts may come in any order of rows, and memory does not grow with their number; only the
    vocabulary of distinct texts (verdicts, notes) is kept.

    Parameters
    ----------
    path : file to create
    columns : the result columns, in output order
    n_rows : rows of the source layer
    """

    def __init__(self, path: Path, columns: Sequence[Column], n_rows: int) -> None:
        self.columns = tuple(columns)
        self.n_rows = n_rows
        self.rows_written = 0
        self._record = np.dtype([(FID, "<i8"), *((c.name, _STORED[c.kind]) for c in self.columns)])
        self._texts: list[str] = []
        self._codes: dict[str, int] = {}
        self._path = path
        with in_plain_words(path):
            self._file = path.open("w+b")

    def write(self, batch: pa.RecordBatch) -> None:
        """Write one record for each row of a part's results; their source rows increase."""
        rows = batch.column(ROW).to_numpy()
        records = np.empty(len(rows), self._record)
        records[FID] = batch.column(FID).fill_null(_NO_ID).to_numpy()
        for column in self.columns:
            records[column.name] = self._stored(column, batch.column(column.name))
        breaks = np.flatnonzero(np.diff(rows) != 1) + 1
        for run_rows, run in zip(np.split(rows, breaks), np.split(records, breaks), strict=True):
            if len(run):
                with in_plain_words(self._path):
                    self._file.seek(int(run_rows[0]) * self._record.itemsize)
                    self._file.write(run.tobytes())
                    self._file.flush()  # a full disk is told here, not when the file is read or closed
        self.rows_written += len(rows)

    def read(self, start: int, stop: int) -> pa.RecordBatch:
        """Return the columns of rows `start` to `stop`, nulls as Arrow nulls."""
        records = self._records(start, stop)
        arrays = [self._arrow(c, records[c.name]) for c in self.columns]
        return pa.RecordBatch.from_arrays(arrays, names=[c.name for c in self.columns])

    def fids(self, start: int, stop: int) -> Ints | None:
        """Return the source's feature ids of these rows, or None where the format has none."""
        fids = self._records(start, stop)[FID].astype(np.int64)
        return None if len(fids) and fids[0] == _NO_ID else fids

    def __enter__(self) -> Self:
        """Return the spool itself."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close the file and remove it."""
        with suppress(OSError):  # what could not be written was told when it was to be
            self._file.close()
        self._path.unlink(missing_ok=True)

    def _records(self, start: int, stop: int) -> Any:
        size = self._record.itemsize
        self._file.seek(start * size)
        return np.frombuffer(self._file.read((stop - start) * size), self._record)

    def _stored(self, column: Column, array: pa.Array) -> Any:
        if column.kind == "text":
            encoded = array.dictionary_encode()
            codes = np.array([self._code(text) for text in encoded.dictionary.to_pylist()] + [-1], np.int32)
            return codes[encoded.indices.fill_null(len(codes) - 1).to_numpy(zero_copy_only=False)]
        null = {"number": np.nan, "count": np.iinfo(np.int64).min, "flag": -1}[column.kind]
        array = array.cast(pa.int8()) if column.kind == "flag" else array
        return array.fill_null(null).to_numpy(zero_copy_only=False)

    def _code(self, text: str) -> int:
        if text not in self._codes:
            self._codes[text] = len(self._texts)
            self._texts.append(text)
        return self._codes[text]

    def _arrow(self, column: Column, stored: Any) -> pa.Array:
        if column.kind == "number":
            return pa.array(stored, pa.float64(), mask=np.isnan(stored))
        if column.kind == "count":
            return pa.array(stored, pa.int64(), mask=stored == np.iinfo(np.int64).min)
        if column.kind == "flag":
            return pa.array(stored == 1, mask=stored < 0)
        indices = pa.array(stored, pa.int32(), mask=stored < 0)
        return pa.DictionaryArray.from_arrays(indices, pa.array(self._texts, pa.string())).cast(pa.string())
