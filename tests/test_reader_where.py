"""`where`: which rows are kept, and what is refused before any row is read."""

from __future__ import annotations

import datetime as dt
import pickle

import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from geofractal.errors import LayerError
from geofractal.reader.where import Where

FIELDS = (
    ("status", "string"),
    ("width_m", "double"),
    ("order", "int32"),
    ("checked", "bool"),
    ("seen", "datetime"),
    ("day", "date32[day]"),
    ("Größe 'x\"\n", "string"),
    ("tags", "list<item: string>"),
    ("Code", "string"),
    ("code", "string"),
)
ROWS = pa.record_batch(
    {
        "status": ["natural", "canal", None, "it's"],
        "width_m": [1.0, 5.0, None, 2.5],
        "order": pa.array([1, 2, 3, None], pa.int32()),
        "checked": [True, False, None, True],
        "seen": ["2020-01-01T00:00:00+05:30", "2021-06-01T00:00:00Z", None, ""],
        "day": pa.array([dt.date(2020, 1, 1), dt.date(2021, 1, 1), None, None]),
        "Größe 'x\"\n": ["a", "b", "a", None],
    }
)


@pytest.mark.parametrize(
    ("expression", "kept", "columns"),
    [
        ("status = 'natural'", [0], ("status",)),
        ("STATUS <> 'natural'", [1, 3], ("status",)),
        ("status = 'it''s'", [3], ("status",)),
        ('width_m > 2 and "order" is not null', [1], ("width_m", "order")),
        ("status is null -- no status", [2], ("status",)),
        ("checked", [0, 3], ("checked",)),
        ("day >= '2020-06-01'", [1], ("day",)),
        ("seen < '2021'", [0, 3], ("seen",)),
        ('"Größe \'x""\n" = \'a\'', [0, 2], ("Größe 'x\"\n",)),
        ("status like 'NAT%' or length(status) = 5", [0, 1], ("status",)),
        ("1", [0, 1, 2, 3], ()),
        ("null", [], ()),
    ],
)
def test_keeps_rows(expression, kept, columns):
    where = Where(expression, FIELDS)
    assert where.columns == columns
    assert where.mask(ROWS.select(list(columns)) if columns else ROWS).nonzero()[0].tolist() == kept


@pytest.mark.parametrize(
    ("expression", "message"),
    [
        ("staus = 'natural'", "uses 'staus'; allowed: .*did you mean 'status'"),
        ('status = "natural"', "uses 'natural'; allowed:"),
        ("status =", "cannot be used: .*write a condition"),
        ("", "cannot be used"),
        ("1; DROP TABLE layer", "cannot be used"),
        ("1) UNION SELECT (1", "cannot be used"),
        ("width_m > (SELECT avg(width_m) FROM layer)", "not authorized"),
        ("count(*) > 1", "misuse of aggregate"),
        ("row_number() OVER () < 3", "misuse of window"),
        ("rowid < 3", "uses 'rowid'"),
        ("1) LIMIT (1", "cannot be used"),
        ("random() > 0", "not authorized"),
        ("load_extension('x')", "not authorized"),
        ("tags is null", "'tags', which is of type list"),
        ("code_ = 1", "did you mean"),
        ("code = 'x'", "not told from another by more than case"),
        ("\0", "cannot be used"),
    ],
)
def test_refuses_before_any_row_is_read(expression, message):
    with pytest.raises(LayerError, match=message):
        Where(expression, FIELDS)


@given(st.lists(st.sampled_from(["natural", "canal", None]), max_size=20), st.integers(0, 20))
def test_how_rows_are_batched_does_not_matter(values, cut):
    where = pickle.loads(pickle.dumps(Where("status = 'natural'", FIELDS)))  # noqa: S301 - our own bytes
    batch = pa.record_batch({"status": pa.array(values, pa.string())})
    whole = where.mask(batch).tolist()
    assert whole == [value == "natural" for value in values]
    assert where.mask(batch.slice(0, cut)).tolist() + where.mask(batch.slice(cut)).tolist() == whole
