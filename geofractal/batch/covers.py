"""Class maps through the batch: measured part by part, then written as tables and patches."""

from __future__ import annotations

import time
from collections import Counter, defaultdict
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from geofractal.batch.cover_parts import CoverPart, confirm, cover_part, keep, part_key
from geofractal.batch.cover_plan import CoverPlan, CoverWork
from geofractal.batch.patch_layers import write_patches
from geofractal.config.models import Batch
from geofractal.measure import Column
from geofractal.patches import warping_effect
from geofractal.progress import Progress
from geofractal.writer.sources import Fingerprint, fingerprint
from geofractal.writer.tables import write_table


@dataclass
class MeasuredCover:
    """A class map whose measures are done.

    Attributes
    ----------
    plan : what was asked
    parts : what each measure gave, in the order of `CoverPlan.works`
    prints : fingerprints of all files that were read for it, before they were
    warping : what warping did to each class, None where the map was not warped
    seconds, writing_s : time taken
    files : what was written
    """

    plan: CoverPlan
    parts: tuple[CoverPart, ...]
    prints: dict[Path, Fingerprint]
    warping: pa.Table | None
    seconds: float
    writing_s: float = 0.0
    files: list[Path] = field(default_factory=list)

    @property
    def works(self) -> Iterator[tuple[CoverWork, CoverPart]]:
        """Yield each measure with what it gave."""
        yield from zip(self.plan.works, self.parts, strict=True)

    @property
    def figures(self) -> dict[str, pa.Table]:
        """Return the tables of figures, by how the names of their files begin."""
        tables = defaultdict(list)
        for stem, part in zip(self.plan.stems, self.parts, strict=True):
            tables[stem].append(part.figures)
        return {stem: pa.concat_tables(parts) for stem, parts in tables.items()}

    @property
    def quantities(self) -> dict[str, tuple[Column, ...]]:
        """Return what the quantities of each table are, for the data dictionary."""
        told: dict[str, tuple[Column, ...]] = defaultdict(tuple)
        for stem, work in zip(self.plan.stems, self.plan.works, strict=True):
            told[f"{stem}_figures"] += tuple(
                Column(q.name, q.short, q.kind, q.unit, q.meaning, q.formula, q.source)
                for q in work.request.quantities()
            )
        return told


def measure_cover(plan: CoverPlan, folder: Path, progress: Progress) -> MeasuredCover:
    """Measure a class map; what is kept in `folder` is not measured again.

    Raises
    ------
    SourceError
        the map, or a layer of zones or barriers, cannot be read, or changed meanwhile
    """
    begun = time.monotonic()
    paths = {*plan.files, *(layer.info.path for work in plan.works for layer in work.layers)}
    prints = {path: fingerprint(path) for path in sorted(paths)}
    parts = [cover_part(plan, work, prints, folder, progress) for work in plan.works]
    warping = _warping(plan, folder, prints, progress) if plan.warped else None
    confirm(prints)
    return MeasuredCover(plan, tuple(parts), prints, warping, time.monotonic() - begun)


def _warping(plan: CoverPlan, folder: Path, prints: dict[Path, Fingerprint], progress: Progress) -> pa.Table:
    """Return what warping does to each class of a map."""
    assert plan.raster is not None
    kept = folder / f"{part_key(plan, plan.works[0], prints)}.warping.parquet"
    if not kept.exists():
        with progress.stage(plan.name, "effect of warping", None, "maps") as stage:
            table = warping_effect(plan.raster.source, options=plan.raster.options)
            keep(pa.Table.from_pandas(table.astype({"cover": str}), preserve_index=False), kept)
            stage.advance(2)
    return pq.read_table(kept).replace_schema_metadata(None)


def write_cover(found: MeasuredCover, batch: Batch, progress: Progress) -> None:
    """Write the tables of a class map, and its patches where they are asked for.

    Raises
    ------
    OutputError
        a file cannot be written
    """
    begun = time.monotonic()
    folder = batch.outputs.folder
    for stem, table in found.figures.items():
        for word in batch.outputs.tables:
            write_table(table, found.plan.table(folder, stem, word))
    if found.warping is not None:
        write_table(found.warping, found.plan.warping_file(folder))
    for part, stem in zip(found.parts, found.plan.stems, strict=True):
        if part.patches is not None:
            targets = found.plan.patch_files(batch, stem).values()
            write_patches(found.plan, part.patches, targets, progress)
    found.files = found.plan.targets(batch)
    found.writing_s = time.monotonic() - begun


def cover_tally(work: CoverWork, part: CoverPart) -> dict[str, Any]:
    """Return counts of a measure's figures as they stand in the record."""
    request = work.request
    words = [quantity.name for quantity in request.quantities() if quantity.kind == "text"]
    table = part.figures
    missing = pc.and_not(
        pc.is_null(table["estimate"], nan_is_null=True),
        pc.is_in(table["quantity"], pa.array(words, pa.string())),
    )
    notes = table["note"].filter(missing).fill_null("no reason given")
    reasons = Counter(note.split("; ")[0] for note in notes.to_pylist())
    refused = sum(reasons.values())
    return {
        "measure": request.measure,
        "prefix": request.prefix,
        "options": request.options.model_dump(mode="json", by_alias=True),
        "covers": list(request.covers),
        "zones": request.zones,
        "zones_refused": part.zone_problems,
        "zones_that_overlap": part.zone_overlaps,
        "barriers": [one.model_dump(mode="json", by_alias=True) for one in request.barriers],
        "barriers_left_out": part.barriers_left_out,
        "polygons_left_out": part.polygons_left_out,
        "rows": table.num_rows,
        "left_out_by_where": 0,
        "answered": table.num_rows - refused,
        "refused": refused,
        "refused_by_reason": dict(reasons.most_common()),
        "seconds": round(part.seconds, 3),
    }


def cover_record(found: MeasuredCover) -> dict[str, Any]:
    """Return what the record says of a measured class map."""
    plan = found.plan
    record: dict[str, Any] = {"source": [str(path) for path in plan.files]}
    if plan.raster is not None:
        grid, source = plan.raster.grid, plan.raster.source_grid
        width, height = grid.typical_cell
        record |= {
            "geometry": "cells",
            "crs": {"name": source.crs.name, "wkt": source.crs.to_wkt()},
            "grid": {
                "measured_on": grid.plane,
                "crs": grid.crs.to_wkt(),
                "rows": grid.rows,
                "columns": grid.columns,
                "cell_width_m": width,
                "cell_height_m": height,
                "distortion_percent": 100.0 * grid.distortion,
                "own_distortion_percent": 100.0 * source.distortion,
            },
            "cells_of_classes": found.parts[0].classes,
            "warnings": [grid.seam] if grid.seam else [],
        }
    if plan.ground is not None:
        record |= {
            "geometry": "polygons",
            "crs": {"name": plan.ground.crs.name, "wkt": plan.ground.crs.to_wkt()},
            "distances": {
                "measured_on": plan.ground.name,
                "distortion_percent": 100.0 * plan.ground.distortion,
            },
        }
    return record | {
        "groups": {name: list(members) for name, members in plan.groups.items()},
        "measures": [cover_tally(work, part) for work, part in found.works],
        "files": [str(path) for path in found.files],
        "seconds": {"measuring": round(found.seconds, 3), "writing": round(found.writing_s, 3)},
    }
