"""Parts of class maps: one measure of one map, with a content key; finished ones are kept on disk."""

from __future__ import annotations

import hashlib
import json
import os
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from geofractal.batch.cover_plan import CoverPlan, CoverWork, class_values
from geofractal.batch.patch_layers import draw_patches
from geofractal.batch.zone_layers import (
    barriers_of,
    polygon_barriers_of,
    polygon_zones_of,
    read_rows,
    zones_of,
)
from geofractal.cover_map import RasterCover
from geofractal.kernels.codes import count_codes
from geofractal.landcover.covers import asked_packs
from geofractal.landcover.strips import Strip
from geofractal.measure import FIGURE_COLUMNS, CoverMap, Ints
from geofractal.polygon_cover import PolygonCover
from geofractal.progress import Progress, Stage
from geofractal.reader.raster import Raster
from geofractal.registry import load_cover_measure
from geofractal.versions import code_digest
from geofractal.writer.commit import flush, in_plain_words
from geofractal.writer.sources import Fingerprint, check_unchanged

Prints = Mapping[Path, Fingerprint]
"""Fingerprints of the files that a batch reads."""

FIGURES = pa.schema(
    [
        pa.field(name, pa.float64() if name in {"cell_size_m", "estimate", "low", "high"} else pa.string())
        for name in FIGURE_COLUMNS
    ]
)


@dataclass(frozen=True)
class CoverPart:
    """What one measure of a class map gave.

    Attributes
    ----------
    figures : columns `FIGURE_COLUMNS`
    patches : file of the patches asked for, with their polygons; None where there are none
    zone_problems : name of each zone that could not be measured, and why
    zone_overlaps : name of each zone that shares cells with others, and those
    barriers_left_out, polygons_left_out : why geometries are no barrier or patch, and how many
    classes : cells of each class that was met
    seconds : time that measuring took, when it was done
    """

    figures: pa.Table
    patches: Path | None
    zone_problems: dict[str, str]
    zone_overlaps: dict[str, list[str]]
    barriers_left_out: dict[str, int]
    polygons_left_out: dict[str, int]
    classes: dict[str, int]
    seconds: float


@dataclass(frozen=True)
class WatchedRaster(Raster):
    """A raster that tells each strip it hands out."""

    told: Callable[[Strip], None] = lambda _: None

    def strips(self) -> Iterator[Strip]:
        """Yield the raster's strips; each is told once the caller is done with it."""
        for strip in super().strips():
            yield strip
            self.told(strip)


@dataclass
class Census:
    """Counts the cells of each class in the first reading of a map, and tells the rows of all readings."""

    stage: Stage
    counts: Ints = field(default_factory=lambda: np.zeros(1, np.int64))
    first: bool = True

    def __call__(self, strip: Strip) -> None:
        """Add a strip."""
        self.stage.advance(strip.rows)
        if self.first:
            most = int(strip.codes.max()) + 2
            self.counts = np.pad(self.counts, (0, max(0, most - len(self.counts))))
            count_codes(np.ascontiguousarray(strip.codes).ravel(), self.counts)
            self.first = not strip.last


@dataclass
class Opening:
    """The map of a part, opened once it is needed, and what is told of its readings."""

    plan: CoverPlan
    work: CoverWork
    census: Census

    @cached_property
    def cover(self) -> CoverMap:
        """Return the map as its measure gets it."""
        return open_cover(self.plan, self.work, self.census)


def cover_part(
    plan: CoverPlan, work: CoverWork, prints: Prints, folder: Path, progress: Progress
) -> CoverPart:
    """Return what a measure of a class map gives, from an earlier run where that is kept in `folder`."""
    key = part_key(plan, work, prints)
    kept, patches = folder / f"{key}.figures.parquet", folder / f"{key}.patches.parquet"
    with progress.stage(plan.name, work.request.measure, None, "rows") as stage:
        opening = Opening(plan, work, Census(stage))
        if not kept.exists():
            _measure(opening, prints, kept)
    table = pq.read_table(kept)
    told = json.loads(table.schema.metadata[b"geofractal"])
    figures = table.replace_schema_metadata(None)
    if work.request.patch_rule() is None:
        return CoverPart(figures, None, **told)
    if not patches.exists():
        _draw(opening, prints, figures, patches, progress)
    return CoverPart(figures, patches, **told)


def part_key(plan: CoverPlan, work: CoverWork, prints: Prints) -> str:
    """Return the content key of a part: equal for equal sources, options and code."""
    request = work.request
    measure = load_cover_measure(request.measure)
    said = [code_digest(), request.measure, str(measure.version), request.options.model_dump_json()]
    said += [repr(request.covers), repr(plan.groups), repr((request.class_column, request.dissolve))]
    said += [repr([one.width_m for one in request.barriers])]
    said.append(repr(plan.budget_percent if plan.raster is None else plan.raster.options))
    said += [prints[file].sha256 for file in plan.files]
    for layer in (*((plan.polygons,) if plan.polygons else ()), *work.layers):
        held = layer.layer
        said.append(repr((layer.info.layer, layer.info.crs, held.id, held.where, held.prepare.repair)))
        said.append(prints[layer.info.path].sha256)
    return hashlib.blake2b("\x00".join(said).encode(), digest_size=16).hexdigest()


def confirm(prints: Prints) -> None:
    """Raise `SourceChangedError` if a file that was read is not what it was."""
    for path, before in prints.items():
        check_unchanged(path, before)


def _measure(opening: Opening, prints: Prints, kept: Path) -> None:
    """Measure, and keep the figures."""
    begun = time.monotonic()
    work, census, cover = opening.work, opening.census, opening.cover
    measure = load_cover_measure(work.request.measure)
    if cover.raster is not None and (readings := measure.readings(cover, work.request.options)) is not None:
        census.stage.total = readings * cover.raster.grid.rows
    result = measure.measure(cover, work.request.options)
    confirm(prints)  # else the key would be that of other bytes
    names = cover.raster.legend.names if cover.raster else []
    zones = cover.zones
    told = {
        "zone_problems": _named(zones, "problems"),
        "zone_overlaps": {
            name: [zones.names[other] for other in others]
            for name, others in (_named(zones, "overlaps")).items()
        },
        "barriers_left_out": cover.barriers.left_out if cover.barriers else {},
        "polygons_left_out": cover.left_out if isinstance(cover, PolygonCover) else {},
        "classes": {name: int(count) for name, count in zip(names, census.counts[1:], strict=False) if count},
        "seconds": time.monotonic() - begun,
    }
    table = pa.Table.from_pandas(result.figures[list(FIGURE_COLUMNS)], FIGURES, preserve_index=False)
    keep(table.replace_schema_metadata({"geofractal": json.dumps(told)}), kept)


def _draw(opening: Opening, prints: Prints, figures: pa.Table, drawn: Path, progress: Progress) -> None:
    """Draw the patches of a measure into a file that is kept; of a raster this takes a further reading."""
    cover = opening.cover
    total = None
    if cover.raster is not None:
        total = len(asked_packs(cover.covers, cover.groups)) * cover.raster.grid.rows
    unit = "patches" if total is None else "rows"
    with progress.stage(opening.plan.name, "draw patches", total, unit) as stage, being_kept(drawn) as part:
        opening.census.stage = stage
        for count in draw_patches(cover, opening.work, figures, part):
            if total is None:
                stage.advance(count)
        confirm(prints)  # else the polygons would not be those of the figures


def _named(zones: Any, what: str) -> dict[str, Any]:
    """Return what is told of zones, by name, where there is something to tell."""
    if zones is None:
        return {}
    return {name: told for name, told in zip(zones.names, getattr(zones, what), strict=True) if told}


def open_cover(plan: CoverPlan, work: CoverWork, told: Callable[[Strip], None]) -> CoverMap:
    """Return the map of a part as its measure gets it; `told` hears of every strip that is read."""
    if plan.polygons is not None:
        return _polygons(plan, work)
    assert plan.raster is not None
    watched = WatchedRaster(
        **{name: getattr(plan.raster, name) for name in Raster.__dataclass_fields__}, told=told
    )
    grid = plan.raster.grid
    zones = None if work.zones is None else zones_of(work.zones, read_rows(work.zones), grid)
    widths = [one.width_m for one in work.request.barriers]
    barriers = barriers_of(work.barriers, widths, grid) if work.barriers else None
    return RasterCover(watched, zones, barriers, plan.groups, work.request.covers)


def _polygons(plan: CoverPlan, work: CoverWork) -> PolygonCover:
    from pyproj import CRS

    assert plan.polygons is not None
    info, rows, request = plan.polygons.info, read_rows(plan.polygons), work.request
    classes = None
    if request.class_column is not None:
        classes = np.array([*class_values(info, request.class_column), None], object)[:-1][rows.wanted]
    crs, polygons = CRS.from_user_input(info.crs), rows.geometries[rows.wanted]
    widths = [one.width_m for one in request.barriers]
    return PolygonCover(
        polygons,
        classes,
        crs,
        request.covers,
        request.dissolve,
        None if work.zones is None else polygon_zones_of(work.zones, polygons, crs),
        polygon_barriers_of(work.barriers, widths, crs) if work.barriers else None,
        plan.groups,
        budget=plan.budget_percent / 100,
    )


def keep(table: pa.Table, kept: Path) -> None:
    """Write a table that is kept."""
    with being_kept(kept) as part:
        pq.write_table(table, part)


@contextmanager
def being_kept(kept: Path) -> Iterator[Path]:
    """Give a file to write beside its place, and rename it into it when whole."""
    unfinished = kept.with_suffix(f".{os.getpid()}.part")
    with in_plain_words(kept):
        yield unfinished
        flush(unfinished)
        unfinished.replace(kept)
