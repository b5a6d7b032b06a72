"""Names of result columns once a prefix stands before them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from geofractal.measure import Column

_SHORT_BYTES = 10


def prefixed(columns: Sequence[Column], prefix: str | None) -> tuple[Column, ...]:
    """Return the columns with ``<prefix>_`` before their names.

    Short names take the prefix's first two letters and keep as much of themselves as ten bytes hold;
    where two become one, the later ends in a number. Without a prefix nothing changes.
    """
    if prefix is None:
        return tuple(columns)
    taken: set[str] = set()
    renamed = []
    for column in columns:
        short = _free(prefix[:2] + column.short, taken)
        taken.add(short)
        renamed.append(replace(column, name=f"{prefix}_{column.name}", short=short))
    return tuple(renamed)


def _free(wanted: str, taken: set[str]) -> str:
    short = wanted[:_SHORT_BYTES]
    number = 2
    while short in taken:
        ending = str(number)
        short = wanted[: _SHORT_BYTES - len(ending)] + ending
        number += 1
    return short
