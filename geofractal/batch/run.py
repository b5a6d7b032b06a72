"""A batch from plan to published outputs: parts are measured, spooled by row, and joined by the writer."""

from __future__ import annotations

import json
import os
import shutil
import time
from collections.abc import Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from datetime import UTC, datetime
from functools import partial
from pathlib import Path
from typing import Any

from geofractal import interrupt
from geofractal.batch.covers import MeasuredCover, measure_cover, write_cover
from geofractal.batch.executor import available_workers, in_order, make_executor
from geofractal.batch.ladders import ladder_file, write_ladder_table
from geofractal.batch.parts import measured_part
from geofractal.batch.plan import LayerPlan, Plan, parts_of, plan_batch
from geofractal.batch.record import MeasureTally, run_record
from geofractal.batch.refused import write_refused_rows
from geofractal.batch.spool import RowSpool
from geofractal.batch.zone_results import SideBySide, zone_spool
from geofractal.config.models import Batch
from geofractal.errors import GeofractalError, LayerError, SourceError
from geofractal.progress import Progress
from geofractal.writer.attach import Addition
from geofractal.writer.commit import alive, in_plain_words, publish
from geofractal.writer.dictionary import write_data_dictionary
from geofractal.writer.layer import Written, write_layer
from geofractal.writer.rows import Results
from geofractal.writer.sources import Fingerprint, check_unchanged, fingerprint

PARTS_FOLDER = ".geofractal-parts"
RECORD = "run_record.json"


@dataclass
class Measured:
    """A layer whose results are in its spool.

    `parts` are the keys of its parts with their numbers of rows, in the order of the parts, where ladder
    tables are asked for, and `ladder_rows` the rows of those tables that were written.
    """

    plan: LayerPlan
    spool: Results
    tallies: list[MeasureTally]
    parts: list[tuple[str, int]]
    before: Fingerprint
    seconds: float
    written: dict[str, Written] = field(default_factory=dict)
    ladder_rows: dict[str, int] = field(default_factory=dict)
    writing_s: float = 0.0


def run_batch(batch: Batch, *, progress: Progress | None = None) -> dict[str, Any]:
    """Run a batch and return its record, which also stands in the output folder.

    A layer that cannot be read is named in the record with the reason, and the others go on; its
    earlier outputs stay. Measured parts are kept in the output folder until the run ends well, so
    that an interrupted run goes on where it was.

    Parameters
    ----------
    batch : from `geofractal.config.load_config`
    progress : what is told how far the run is

    Returns
    -------
    dict
        the run record; its ``exit_code`` is 0, or 1 where refusals are to fail, or 3 where a layer
        could not be read

    Raises
    ------
    ConfigError, MeasureError
        before any row is measured
    OutputError
        where an output cannot be written; outputs already published stay
    """
    started = datetime.now(UTC)
    progress = progress or Progress()
    plan = plan_batch(batch)
    folder = batch.outputs.folder / PARTS_FOLDER
    failed: dict[str, GeofractalError] = dict(plan.failed)
    measured: list[Measured] = []
    covers: list[MeasuredCover] = []
    with ExitStack() as stack:
        with in_plain_words(folder):
            folder.mkdir(parents=True, exist_ok=True)
            here = folder / f"{os.getpid()}.run"
            here.touch()
        stack.callback(here.unlink, missing_ok=True)
        interrupt.set_kept(f"Measured parts are kept in {folder}; run the batch again to go on from there.")
        for cover in plan.covers:
            try:
                covers.append(measure_cover(cover, folder, progress))
            except SourceError as error:
                failed[cover.name] = error
        for layer in plan.layers:
            try:
                _refuse_missing_maps(layer, batch, failed)
                measured.append(_measure_layer(layer, batch, covers, folder, stack, progress))
            except SourceError as error:
                failed[layer.name] = error
        for found in covers:
            write_cover(found, batch, progress)
        for (target, word), layers in _by_target(plan, measured).items():
            try:
                _write_copy(target, word, layers, progress)
            except SourceError as error:
                failed |= dict.fromkeys((found.plan.name for found in layers), error)
        whole = [found for found in measured if found.plan.name not in failed]
        for done in whole:
            _write_ladders(done, batch, folder, progress)
        columns = {found.plan.name: found.plan.columns for found in whole}
        columns |= {table.name: table.columns for found in whole for table in found.plan.work.ladders}
        columns |= {table: held for found in covers for table, held in found.quantities.items()}
        write_data_dictionary(batch.outputs.folder, columns)
        write_refused_rows(batch.outputs.folder, whole)
        record = run_record(batch, whole, covers, failed, started)
        with publish(batch.outputs.folder / RECORD) as part:
            part.write_text(json.dumps(record, indent=1, ensure_ascii=False), encoding="utf-8")
    if not any(alive(int(other.stem)) for other in folder.glob("*.run")):
        shutil.rmtree(folder, ignore_errors=True)
    return record


def _refuse_missing_maps(layer: LayerPlan, batch: Batch, failed: dict[str, GeofractalError]) -> None:
    """Raise if the layer is to get columns of a class map that could not be measured."""
    for request in batch.cover_requests:
        if request.zones == layer.name and request.zone_columns() and request.of in failed:
            raise LayerError(f"it awaits figures of {request.of!r}, which could not be measured")


def _measure_layer(
    layer: LayerPlan,
    batch: Batch,
    covers: Sequence[MeasuredCover],
    folder: Path,
    stack: ExitStack,
    progress: Progress,
) -> Measured:
    """Return a layer with its results: of its own measures, and of class maps whose zones it is."""
    begun = time.monotonic()
    before = next(
        (found.prints[layer.info.path] for found in covers if layer.info.path in found.prints), None
    ) or fingerprint(layer.info.path)
    tallies = [MeasureTally.of(request) for request in layer.work.requests]
    spools: list[Results] = []
    parts: list[tuple[str, int]] = []
    if tallies:
        spools.append(_measure_rows(layer, batch, tallies, parts, folder, stack, progress))
    if layer.zone_columns:
        spools.append(stack.enter_context(zone_spool(layer, covers, folder)))
    spool = spools[0] if len(spools) == 1 else SideBySide(spools)
    return Measured(layer, spool, tallies, parts, before, time.monotonic() - begun)


def _measure_rows(
    layer: LayerPlan,
    batch: Batch,
    tallies: Sequence[MeasureTally],
    parts: list[tuple[str, int]],
    folder: Path,
    stack: ExitStack,
    progress: Progress,
) -> RowSpool:
    """Measure a layer part by part into a spool, in the order of the parts whatever the workers.

    Where ladder tables are asked for, `parts` is told of each part.
    """
    columns, rows = layer.work.columns, layer.info.features
    spool = stack.enter_context(RowSpool(folder / f"{layer.name}.{os.getpid()}.rows", columns, rows))
    workers = available_workers() if batch.run.workers == "auto" else batch.run.workers
    words = " and ".join(request.measure for request in layer.work.requests)
    with (
        make_executor(workers, processes=layer.work.needs_processes) as executor,
        progress.stage(layer.name, words, layer.info.features) as stage,
    ):
        inputs = ((layer.work, part, folder) for part in parts_of(layer, folder))
        for results, key in in_order(executor, measured_part, inputs, ahead=2 * workers):
            spool.write(results)
            if layer.work.ladders:
                parts.append((key, results.num_rows))
            for tally in tallies:
                tally.add(results)
            stage.advance(results.num_rows)
    return spool


def _by_target(plan: Plan, measured: Sequence[Measured]) -> dict[tuple[Path, str], list[Measured]]:
    """Return the layers that go into each file; layers of one GeoPackage go into one copy of it."""
    together: dict[tuple[Path, str], list[Measured]] = {}
    for found in measured:
        for word in plan.batch.outputs.formats:
            together.setdefault((plan.targets[found.plan.name, word], word), []).append(found)
    return together


def _write_copy(target: Path, word: str, layers: Sequence[Measured], progress: Progress) -> None:
    """Write one file; it is confirmed against its source before it takes its place."""
    begun = time.monotonic()
    first, *also = (Addition(found.plan.info, found.spool, found.plan.columns) for found in layers)
    confirm = partial(check_unchanged, first.info.path, layers[0].before)
    names = " and ".join(found.plan.name for found in layers)
    with progress.stage(names, f"write {target.name}", sum(found.spool.n_rows for found in layers)) as stage:
        written = write_layer(*first, target, word, also=also, progress=stage.advance, confirm=confirm)
    for found in layers:
        found.written[word] = written
        found.writing_s += time.monotonic() - begun


def _write_ladders(found: Measured, batch: Batch, folder: Path, progress: Progress) -> None:
    """Write a layer's ladder tables from what its parts kept."""
    begun = time.monotonic()
    for place, table in enumerate(found.plan.work.ladders):
        files = [(ladder_file(folder, key, place), rows) for key, rows in found.parts]
        for target in table.targets(batch):
            found.ladder_rows[table.name] = write_ladder_table(table, target, files, progress)
    found.writing_s += time.monotonic() - begun
