"""The row spool gives back, for any order of parts, what was written."""

import os

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from geofractal.batch.spool import FID, ROW, RowSpool
from geofractal.errors import OutputError
from geofractal.measure import Column

COLUMNS = (
    Column("ratio", "ratio", "number", "", "a number"),
    Column("steps", "steps", "count", "", "a count"),
    Column("verdict", "verdict", "text", "", "a word"),
    Column("closed", "closed", "flag", "", "a flag"),
)


def _part(rows, fids, *figures, names):
    return pa.RecordBatch.from_arrays(
        [pa.array(rows, pa.int64()), pa.array(fids, pa.int64()), *figures], names=[ROW, FID, *names]
    )


def _batch(draw_rows):
    return pa.RecordBatch.from_arrays(
        [
            pa.array([None if r % 5 == 0 else r / 2 for r in draw_rows], pa.float64()),
            pa.array([None if r % 3 == 0 else r - 7 for r in draw_rows], pa.int64()),
            pa.array([None if r % 2 else f"word {r % 4}" for r in draw_rows], pa.string()),
            pa.array([None if r % 7 == 0 else r % 2 == 0 for r in draw_rows], pa.bool_()),
        ],
        names=[column.name for column in COLUMNS],
    )


@given(st.permutations(range(30)), st.integers(1, 30))
def test_parts_in_any_order_come_back_in_row_order(tmp_path_factory, order, size):
    path = tmp_path_factory.mktemp("spool") / "rows"
    with RowSpool(path, COLUMNS, 30) as spool:
        for start in range(0, 30, size):
            rows = np.sort(np.array(order[start : start + size], dtype=np.int64))
            figures = _batch(rows.tolist())
            spool.write(_part(rows, rows + 100, *figures.columns, names=figures.schema.names))
        assert spool.rows_written == 30
        assert spool.read(0, 30).equals(_batch(list(range(30))))
        assert spool.read(7, 11).equals(_batch(list(range(7, 11))))
        assert spool.fids(3, 6).tolist() == [103, 104, 105]
    assert not path.exists()


def test_rows_without_feature_ids_say_so(tmp_path):
    with RowSpool(tmp_path / "rows", COLUMNS, 2) as spool:
        figures = _batch([0, 1])
        spool.write(_part([0, 1], [None, None], *figures.columns, names=figures.schema.names))
        assert spool.fids(0, 2) is None


@pytest.mark.parametrize("kind", ["number", "count", "text", "flag"])
def test_a_column_of_nulls_stays_a_column_of_nulls(tmp_path, kind):
    types = {"number": pa.float64(), "count": pa.int64(), "text": pa.string(), "flag": pa.bool_()}
    column = Column("empty", "empty", kind, "", "nothing")
    nulls = pa.RecordBatch.from_arrays([pa.nulls(3, types[kind])], names=["empty"])
    with RowSpool(tmp_path / "rows", (column,), 3) as spool:
        spool.write(_part([0, 1, 2], [3, 4, 5], *nulls.columns, names=["empty"]))
        assert spool.read(0, 3).equals(nulls)


@pytest.mark.skipif(os.name != "posix", reason="file size limits are POSIX")
@pytest.mark.parametrize("rows", [300, 30_000])
def test_a_full_disk_is_told_when_rows_are_written_and_nothing_stays(tmp_path, rows):
    """However few they are: what waits in memory would fail when it is read back, or at the end."""
    import resource

    column = Column("ratio", "ratio", "number", "", "a number")
    path, places = tmp_path / "rows", np.arange(rows)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    with RowSpool(path, (column,), rows) as spool:
        figures = _part(places, places, pa.array(places / 2), names=["ratio"])
        resource.setrlimit(resource.RLIMIT_FSIZE, (1000, hard))
        try:
            with pytest.raises(OutputError, match="rows: cannot be written: the disk is full"):
                spool.write(figures)
        finally:
            resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert not path.exists()
