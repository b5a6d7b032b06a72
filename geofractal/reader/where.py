"""Which rows a layer's ``where`` keeps: one dialect, SQLite's, for every format."""

from __future__ import annotations

import re
import sqlite3
from contextlib import closing
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pyarrow as pa

from geofractal.errors import LayerError
from geofractal.measure import Bools
from geofractal.reader.layers import allowed

_LONGEST_VALUE = 50_000_000
_REFUSED = {"random", "randomblob", "load_extension"}
_TOKENS = re.compile(r"""--[^\n]*|/\*.*?\*/|'(?:[^']|'')*'|"((?:[^"]|"")*)\"""", re.DOTALL)


@dataclass(frozen=True)
class Where:
    """A condition on a row's attributes; frozen and picklable.

    Text compares with its case, ``LIKE`` without it; times and dates are their ISO text; a condition
    that is null for a row does not keep it. A condition sees one row only: no aggregate, no
    subquery, no row number, nothing drawn at random, so how rows are batched cannot matter.

    Parameters
    ----------
    expression : such as ``status = 'natural' AND width_m > 3``
    fields : name and Arrow type of each attribute, as in `LayerInfo`

    Attributes
    ----------
    columns : the attributes it uses

    Raises
    ------
    LayerError
        The expression is no condition, or uses a column that is not there; raised before any row is
        read.

    Examples
    --------
    >>> where = Where("width_m > 3", (("name", "string"), ("width_m", "double")))
    >>> where.columns
    ('width_m',)
    >>> where.mask(pa.record_batch({"width_m": [2.0, None, 5.0]})).tolist()
    [False, False, True]
    """

    expression: str
    fields: tuple[tuple[str, str], ...]
    columns: tuple[str, ...] = field(init=False)

    def __post_init__(self) -> None:
        """Compile against an empty table, which tells the columns used."""
        read: set[str] = set()
        for token in _TOKENS.finditer(self.expression):
            if token[1] is not None:  # SQLite takes a misspelt column in double quotes for a text
                self._check_column(token[1].replace('""', '"'))
        with closing(self._table(read)) as table:
            self._kept(table)
        lowered = [name.lower() for name, _ in self.fields]
        for name, kind in self.fields:
            if name in read and (lowered.count(name.lower()) > 1 or not _affinity(kind)):
                reason = (
                    f"of type {kind}" if not _affinity(kind) else "not told from another by more than case"
                )
                raise LayerError(
                    f"where {self.expression!r} uses {name!r}, which is {reason}; use other columns"
                )
        object.__setattr__(self, "columns", tuple(name for name, _ in self.fields if name in read))

    def mask(self, attributes: pa.RecordBatch) -> Bools:
        """Return which rows of a batch are kept; `attributes` holds at least `columns`."""
        kept = np.zeros(attributes.num_rows, np.bool_)
        values = [_values(attributes.column(name)) for name in self.columns]
        with closing(self._table(None)) as table:
            names = ", ".join(map(_quoted, (self._key, *self.columns)))
            marks = ", ".join("?" * (1 + len(values)))
            rows = zip(range(len(kept)), *values, strict=True)
            table.executemany(f"INSERT INTO layer ({names}) VALUES ({marks})", rows)  # noqa: S608 - names quoted
            kept[self._kept(table)] = True
        return kept

    @property
    def _key(self) -> str:
        """Name of the table's own row number, unlike any attribute's."""
        return "row" + "_" * max(len(name) for name, _ in (*self.fields, ("", "")))

    def _table(self, read: set[str] | None) -> sqlite3.Connection:
        """Return a table of the layer's attributes, in which nothing but one row at a time can be read."""
        first: dict[str, tuple[str, str]] = {}
        for name, kind in self.fields:
            first.setdefault(name.lower(), (name, _affinity(kind)))
        columns = "".join(f", {_quoted(name)} {affinity}" for name, affinity in first.values())
        table = sqlite3.connect(":memory:")
        table.setlimit(sqlite3.SQLITE_LIMIT_LENGTH, _LONGEST_VALUE)
        table.execute(f"CREATE TABLE layer ({_quoted(self._key)} INTEGER PRIMARY KEY{columns}) WITHOUT ROWID")
        if read is not None:
            table.set_authorizer(self._guard(read))
        return table

    def _kept(self, table: sqlite3.Connection) -> list[int]:
        query = (
            f"SELECT {_quoted(self._key)} FROM layer "  # noqa: S608 - compiled under `_guard` before any row is there
            f"WHERE CASE WHEN ({self.expression}\n) THEN 1 ELSE 0 END"
        )
        try:
            return [row for (row,) in table.execute(query)]
        except (sqlite3.Error, sqlite3.Warning, ValueError) as error:
            missing = re.fullmatch(r"no such column: (?:layer\.)?(.*)", str(error), re.DOTALL)
            if missing:
                self._check_column(missing[1])
            raise LayerError(
                f"where {self.expression!r} cannot be used: {error}; write a condition on a row's own "
                "columns in SQLite's words, such as status = 'natural'"
            ) from None

    def _guard(self, read: set[str]) -> Any:
        """Return an authorizer that lets one SELECT read the table and notes which columns."""
        selects = 0

        def authorize(action: int, _table: str | None, second: str | None, *_: str | None) -> int:
            nonlocal selects
            if action == sqlite3.SQLITE_READ:
                read.add(str(second))
                return sqlite3.SQLITE_OK
            if action == sqlite3.SQLITE_FUNCTION:
                return sqlite3.SQLITE_DENY if second in _REFUSED else sqlite3.SQLITE_OK
            selects += action == sqlite3.SQLITE_SELECT
            only = action == sqlite3.SQLITE_SELECT and selects == 1
            return sqlite3.SQLITE_OK if only else sqlite3.SQLITE_DENY

        return authorize

    def _check_column(self, name: str) -> None:
        names = [field for field, _ in self.fields]
        if name.lower() not in {field.lower() for field in names}:
            raise LayerError(f"where {self.expression!r} uses {name!r}; {allowed(names, name)}")


def _quoted(name: str) -> str:
    return '"' + name.replace('"', '""') + '"'


def _affinity(kind: str) -> str:
    """Return how SQLite compares values of an Arrow type; empty where it cannot hold them."""
    if kind.startswith(("int", "uint", "bool")):
        return "INTEGER"
    if kind.startswith(("float", "halffloat", "double", "decimal")):
        return "REAL"
    if kind.startswith(("string", "large_string", "date", "time")):
        return "TEXT"
    return ""


def _values(column: pa.Array) -> list[Any]:
    """Return an attribute's values as SQLite takes them: times as ISO text, decimals as numbers."""
    kind = column.type
    if pa.types.is_decimal(kind) or pa.types.is_uint64(kind):
        column = column.cast(pa.float64())
    values: list[Any] = column.to_pylist()
    if pa.types.is_temporal(kind):
        return [None if value is None else value.isoformat() for value in values]
    return values
