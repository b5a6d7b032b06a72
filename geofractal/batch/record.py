"""The run record: what went in, with what it was measured, what came out and what was refused."""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc

from geofractal.measure import Column

REASONS_KEPT = 50


def peak_memory_mb() -> float | None:
    """Return this process's peak resident memory in MB so far, or None where the system does not say."""
    try:
        import resource
    except ImportError:
        return None
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return round(peak / (1e6 if sys.platform == "darwin" else 1e3), 1)


@dataclass
class MeasureTally:
    """Counts of one measure on one layer, from its columns alone.

    A row counts as refused where the measure's first column is null; the reason is its note.
    """

    measure: str
    columns: Sequence[Column]
    note: str
    rows: int = 0
    refused: int = 0
    reasons: Counter[str] = field(default_factory=Counter)
    ranges: dict[str, tuple[float, float]] = field(default_factory=dict)
    words: dict[str, Counter[str]] = field(default_factory=dict)

    def add(self, batch: pa.RecordBatch) -> None:
        """Add the rows of one part."""
        missing = pc.is_null(batch.column(self.columns[0].name))
        self.rows += batch.num_rows
        self.refused += int(pc.sum(missing).as_py() or 0)
        self.reasons.update(_counted(batch.column(self.note).filter(missing)))
        for column in self.columns:
            values = batch.column(column.name).drop_null()
            if column.kind == "text" and column.name != self.note:
                self.words.setdefault(column.name, Counter()).update(_counted(values))
            elif column.kind in {"number", "count"} and len(values):
                low, high = pc.min_max(values).as_py().values()
                known = self.ranges.get(column.name, (low, high))
                self.ranges[column.name] = (min(low, known[0]), max(high, known[1]))

    def summary(self) -> dict[str, Any]:
        """Return the tally as it stands in the record."""
        kept = sorted(self.reasons.items(), key=lambda item: (-item[1], item[0]))
        reasons = dict(kept[:REASONS_KEPT])
        if len(kept) > REASONS_KEPT:
            reasons["other reasons"] = sum(count for _, count in kept[REASONS_KEPT:])
        return {
            "measure": self.measure,
            "rows": self.rows,
            "answered": self.rows - self.refused,
            "refused": self.refused,
            "refused_by_reason": reasons,
            "ranges": {name: {"min": low, "max": high} for name, (low, high) in self.ranges.items()},
            "words": {name: dict(sorted(words.items())) for name, words in self.words.items()},
        }


def _counted(values: pa.Array) -> dict[str, int]:
    counts = pc.value_counts(values.fill_null("no reason given"))
    return {entry["values"]: entry["counts"] for entry in counts.to_pylist()}
