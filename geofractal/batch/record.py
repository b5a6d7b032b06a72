"""The run record: what went in, with what it was measured, what came out and what was refused."""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any, Self

import pyarrow as pa
import pyarrow.compute as pc

from geofractal.batch.covers import cover_record
from geofractal.batch.parts import NOT_WANTED, note_name
from geofractal.config.models import Batch, MeasureRequest
from geofractal.errors import GeofractalError
from geofractal.measure import Column
from geofractal.registry import load_measure
from geofractal.versions import show_versions

if TYPE_CHECKING:
    from geofractal.batch.covers import MeasuredCover
    from geofractal.batch.run import Measured

REASONS_KEPT = 50

CAUTIONS = (
    "The figures describe mapped geometry at stated scales. They are not for navigation, flood or erosion "
    "hazard lines, legal boundaries or title, or engineering design; such uses follow local codes, the "
    "competent authority and licensed practice. Habitat and river decisions need field evidence and a "
    "qualified ecologist or geomorphologist."
)


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

    A row counts as refused where it was to be measured and the measure's first column is null; the
    reason is the first thing that its note says.
    """

    request: MeasureRequest
    columns: Sequence[Column]
    note: str
    rows: int = 0
    left_out: int = 0
    refused: int = 0
    reasons: Counter[str] = field(default_factory=Counter)
    ranges: dict[str, tuple[float, float]] = field(default_factory=dict)
    words: dict[str, Counter[str]] = field(default_factory=dict)

    @classmethod
    def of(cls, request: MeasureRequest) -> Self:
        """Return an empty tally of one measure asked of one layer."""
        return cls(request, request.columns(), note_name(request))

    def refusals(self, batch: pa.RecordBatch) -> pa.Array:
        """Return which rows were to be measured and have no figure."""
        unwanted = pc.equal(batch.column(self.note), NOT_WANTED).fill_null(False)
        return pc.and_not(pc.is_null(batch.column(self.columns[0].name)), unwanted)

    def add(self, batch: pa.RecordBatch) -> None:
        """Add the rows of one part."""
        missing = self.refusals(batch)
        self.rows += batch.num_rows
        self.refused += int(pc.sum(missing).as_py() or 0)
        self.left_out += int(pc.sum(pc.equal(batch.column(self.note), NOT_WANTED)).as_py() or 0)
        notes = batch.column(self.note).filter(missing).fill_null("no reason given")
        self.reasons.update(_counted(pc.list_element(pc.split_pattern(notes, "; ", max_splits=1), 0)))
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
            "measure": self.request.measure,
            "prefix": self.request.prefix,
            "version": load_measure(self.request.measure).version,
            "options": self.request.options.model_dump(mode="json", by_alias=True),
            "rows": self.rows,
            "left_out_by_where": self.left_out,
            "answered": self.rows - self.left_out - self.refused,
            "refused": self.refused,
            "refused_by_reason": reasons,
            "ranges": {name: {"min": low, "max": high} for name, (low, high) in self.ranges.items()},
            "words": {name: dict(sorted(words.items())) for name, words in self.words.items()},
        }


def _counted(values: pa.Array) -> dict[str, int]:
    return {entry["values"]: entry["counts"] for entry in pc.value_counts(values).to_pylist()}


def run_record(
    batch: Batch,
    measured: Sequence[Measured],
    covers: Sequence[MeasuredCover],
    failed: dict[str, GeofractalError],
    started: datetime,
) -> dict[str, Any]:
    """Return the record of a run that has ended."""
    layers = {found.plan.name: layer_record(found, batch) for found in measured}
    maps = {found.plan.name: cover_record(found) for found in covers}
    refused = sum(tally.refused for found in measured for tally in found.tallies)
    refused += sum(tally["refused"] for told in maps.values() for tally in told["measures"])
    inputs = {found.plan.info.path: found.before for found in measured}
    for found in covers:
        inputs |= found.prints
    return {
        "batch": batch.name,
        "batch_file": str(batch.file) if batch.file else None,
        "started": started.isoformat(timespec="seconds"),
        "seconds": round((datetime.now(UTC) - started).total_seconds(), 3),
        "peak_memory_mb": peak_memory_mb(),
        "exit_code": 3 if failed else int(refused > 0 and batch.run.refusals == "fail"),
        "refused": refused,
        "inputs": [
            {"path": str(path), "size_bytes": before.size, "sha256": before.sha256}
            for path, before in sorted(inputs.items())
        ],
        "layers": layers | {name: _joined(layers.get(name), told) for name, told in maps.items()},
        "failed_layers": {name: str(error) for name, error in failed.items()},
        "versions": show_versions(),
        "cautions": CAUTIONS,
    }


def _joined(layer: dict[str, Any] | None, cover: dict[str, Any]) -> dict[str, Any]:
    """Return the record of a class map; with that of its rows, where polygons were measured both ways."""
    if layer is None:
        return cover
    seconds = {step: round(layer["seconds"][step] + cover["seconds"][step], 3) for step in cover["seconds"]}
    return cover | layer | {"measures": [*layer["measures"], *cover["measures"]], "seconds": seconds}


def layer_record(found: Measured, batch: Batch) -> dict[str, Any]:
    """Return what the record says of a measured layer."""
    from pyproj import CRS

    info, work = found.plan.info, found.plan.work
    return {
        "source": str(info.path),
        "layer": info.layer,
        "format": info.driver,
        "geometry": info.geometry,
        "crs": {"name": CRS.from_user_input(info.crs).name, "wkt": info.crs},
        "rows": info.features,
        "where": found.plan.layer.where,
        "prepare": work.prepare.model_dump(mode="json", by_alias=True),
        "plane": {
            "asked": work.projector.plane,
            "budget_percent": 100.0 * work.projector.budget,
            "three_dimensions": work.projector.three_dimensions,
            "edges": work.projector.edges,
        },
        "measures": [tally.summary() for tally in found.tallies],
        "ladder_tables": [
            {
                "measure": table.request.measure,
                "files": [str(path) for path in table.targets(batch)],
                "rows": found.ladder_rows[table.name],
            }
            for table in work.ladders
        ],
        "copies": {
            word: {
                "files": [str(path) for path in written.paths],
                "rows": written.rows,
                "losses": [str(loss) for loss in written.losses],
            }
            for word, written in found.written.items()
        },
        "seconds": {"measuring": round(found.seconds, 3), "writing": round(found.writing_s, 3)},
    }
