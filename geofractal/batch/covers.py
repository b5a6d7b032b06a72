"""Class maps through the batch: measured part by part, then written as tables and patches."""

from __future__ import annotations

import time
from collections import Counter, defaultdict
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from geofractal.batch.cover_parts import CoverPart, confirm, cover_part, keep, open_cover, part_key
from geofractal.batch.cover_plan import CoverPlan, CoverWork
from geofractal.config.models import Batch
from geofractal.cover_map import RasterCover
from geofractal.measure import Column
from geofractal.patches import warping_effect
from geofractal.progress import Progress
from geofractal.writer.sources import Fingerprint, fingerprint
from geofractal.writer.tables import GEOMETRY, write_patch_layer, write_table

PLACE = ["cover", "first_row", "first_column"]
"""Columns that name a patch: no two patches of a class begin with the same cell."""

INNER = {"zone", "first_row", "first_column", "last_row", "left_column", "right_column"}
"""Columns of patches that speak of the grid and stay out of the layer of patches."""

PATCHES_PER_BATCH = 5_000


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
    parts = []
    for work in plan.works:
        with progress.stage(plan.name, work.request.measure, None, "rows") as stage:
            parts.append(cover_part(plan, work, prints, folder, stage))
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
    for (work, part), stem in zip(found.works, found.plan.stems, strict=True):
        if part.patches is not None:
            targets = found.plan.patch_files(batch, stem).values()
            _write_patches(found.plan, work, part, targets, progress)
    found.files = found.plan.targets(batch)
    found.writing_s = time.monotonic() - begun


def _write_patches(
    plan: CoverPlan, work: CoverWork, part: CoverPart, targets: Iterable[Path], progress: Progress
) -> None:
    """Write the patches of a measure in each format; polygons of cells are drawn once, and kept."""
    from pyproj import CRS

    assert part.patches is not None
    if plan.raster is None:
        assert plan.polygons is not None
        drawn, crs = part.patches, CRS.from_user_input(plan.polygons.info.crs)
    else:
        drawn, crs = part.patches.with_suffix(".polygons.parquet"), plan.raster.grid.crs
        if not drawn.exists():
            _draw(plan, work, part, drawn, progress)
    for target in targets:
        with pq.ParquetFile(drawn) as file:
            rows = file.metadata.num_rows
            shown = [name for name in file.schema_arrow.names if name not in INNER]
            with progress.stage(plan.name, f"write {target.name}", rows, "patches") as stage:
                batches = file.iter_batches(PATCHES_PER_BATCH, columns=shown)
                write_patch_layer(batches, file.schema_arrow, shown, crs, target, stage.advance)


def _draw(plan: CoverPlan, work: CoverWork, part: CoverPart, drawn: Path, progress: Progress) -> None:
    """Keep the patches with their polygons, which takes a further reading of the map."""
    import pandas as pd
    import shapely

    assert part.patches is not None
    cover = open_cover(plan, work, lambda _: None)
    assert isinstance(cover, RasterCover)
    table = pq.read_table(part.patches)
    known, schema = table.to_pandas(), table.schema.append(pa.field(GEOMETRY, pa.binary()))
    unfinished = drawn.with_suffix(".part")
    with (
        progress.stage(plan.name, "draw patches", len(known), "patches") as stage,
        pq.ParquetWriter(unfinished, schema) as writer,
    ):
        for frame in cover.polygons(part.neighbours):
            wkb = shapely.to_wkb(frame[GEOMETRY].to_numpy(object))
            found = pd.DataFrame({**frame[PLACE].astype({"cover": str}), GEOMETRY: wkb})
            joined = found.merge(known, on=PLACE, how="left", validate="1:1")
            writer.write_table(pa.Table.from_pandas(joined[schema.names], schema, preserve_index=False))
            stage.advance(len(frame))
    unfinished.replace(drawn)


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
