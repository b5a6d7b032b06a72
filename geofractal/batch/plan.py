"""The plan of a batch: each layer's header, what it is measured with, and where its copies go."""

from __future__ import annotations

import os
from collections import defaultdict
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import pyarrow as pa

from geofractal.batch.cover_plan import CoverPlan, plan_covers
from geofractal.batch.ladders import naming_column
from geofractal.batch.parts import GroupsPart, LayerWork, PartInput, RowsPart
from geofractal.config.load import wrong_kinds
from geofractal.config.models import Batch, VectorLayer
from geofractal.config.yaml_tree import config_error
from geofractal.errors import LayerError, OutputError, Problem, SourceError
from geofractal.measure import Column
from geofractal.reader.groups import bucket_rows
from geofractal.reader.layers import allowed
from geofractal.reader.planes import Projector
from geofractal.reader.vector import Batch as Rows
from geofractal.reader.vector import LayerInfo, layer_info, stream
from geofractal.reader.where import Where
from geofractal.writer.attach import can_attach
from geofractal.writer.layer import SUFFIXES
from geofractal.writer.losses import Loss, expected_losses
from geofractal.writer.names import refuse_clashes
from geofractal.writer.sources import refuse_sources


@dataclass(frozen=True)
class LayerPlan:
    """One layer of lines or polygons of the batch, ready to be measured.

    `zone_columns` are those that class maps give it as their zones.
    """

    name: str
    layer: VectorLayer
    info: LayerInfo
    where: Where | None
    work: LayerWork
    zone_columns: tuple[Column, ...] = ()

    @cached_property
    def columns(self) -> tuple[Column, ...]:
        """Columns that its copies gain."""
        return (*self.work.columns, *self.zone_columns)


@dataclass(frozen=True)
class Plan:
    """All layers that can be measured, why the others cannot, and what each copy will not hold.

    `layers` are those of lines and polygons that gain columns, `covers` the class maps.
    """

    batch: Batch
    layers: tuple[LayerPlan, ...]
    covers: tuple[CoverPlan, ...]
    failed: dict[str, SourceError]
    losses: dict[tuple[str, str], tuple[Loss, ...]]

    @cached_property
    def targets(self) -> dict[tuple[str, str], Path]:
        """Return the file of each layer's copy, by layer and format.

        Layers that come from one GeoPackage go into one copy of it, named like it.
        """
        folder = self.batch.outputs.folder
        return {
            (plan.name, word): folder / f"{_stem(plan, word)}{SUFFIXES[word]}"
            for plan in self.layers
            for word in self.batch.outputs.formats
        }


def _stem(plan: LayerPlan, word: str) -> str:
    together = word == "geopackage" and can_attach(plan.info)
    return plan.info.path.stem if together else plan.name


def plan_batch(batch: Batch) -> Plan:
    """Look at every layer's header and plan the batch; no row is measured.

    A layer that cannot be read is noted in `Plan.failed` and the others go on.

    Raises
    ------
    ConfigError
        The batch file asks what a layer does not have: all such faults at once.
    OutputError
        An output would overwrite a source or another output, or a column's name is taken.
    """
    problems: list[Problem] = []
    vectors: dict[str, LayerPlan] = {}
    failed: dict[str, SourceError] = {}
    for name, layer in batch.vector_layers.items():
        if name not in batch.layers_used:
            continue
        try:
            vectors[name] = _plan_layer(batch, name, layer, problems)
        except SourceError as error:
            failed[name] = error
    problems += wrong_kinds(batch, {name: {plan.info.geometry} for name, plan in vectors.items()})
    covers = plan_covers(batch, vectors, failed, problems)
    if problems:
        raise config_error(batch.file or Path("batch"), problems)
    plans = [plan for plan in vectors.values() if plan.columns]
    losses: dict[tuple[str, str], tuple[Loss, ...]] = {
        (plan.name, word): expected_losses(plan.info, plan.columns, word)
        for plan in plans
        for word in batch.outputs.formats
    }
    plan = Plan(batch, tuple(plans), covers, failed, losses)
    _refuse_outputs(plan)
    return plan


def _plan_layer(batch: Batch, name: str, layer: VectorLayer, problems: list[Problem]) -> LayerPlan:
    info = layer_info(
        layer.source,
        layer=layer.layer,
        crs=layer.crs,
        override_crs=layer.override_crs,
        encoding=layer.encoding,
    )
    problems += _column_problems(batch, name, layer, info)
    where = None
    if layer.where is not None:
        try:
            where = Where(layer.where, info.fields)
        except LayerError as error:
            problems.append(batch.problem(("layers", name, "where"), str(error)))
    projection = batch.projection
    assert info.crs is not None  # layer_info refuses a layer without one
    projector = Projector(
        info.crs,
        plane=projection.plane if info.bounds else "feature",
        budget=projection.budget_percent / 100.0,
        three_dimensions=projection.three_dimensions,
        edges=layer.edges,
        bounds=info.bounds,
    )
    requests = batch.requests_of(name)
    tables = any(request.ladder_columns() for request in requests)
    named = naming_column(layer.id, layer.group_by, info) if tables else None
    work = LayerWork(requests, projector, layer.prepare, layer.group_by is not None, named)
    return LayerPlan(name, layer, info, where, work, batch.zone_columns_of(name))


def _column_problems(batch: Batch, name: str, layer: VectorLayer, info: LayerInfo) -> Iterable[Problem]:
    for key, column in (("id", layer.id), ("group-by", layer.group_by)):
        if column is not None and column not in info.field_names:
            said = f"{info.path}: layer {info.layer!r} has no column {column!r}"
            yield batch.problem(("layers", name, key), f"{said}; {allowed(info.field_names, column)}")


def _refuse_outputs(plan: Plan) -> None:
    """Refuse targets that are sources or one another's, and columns whose names are taken."""
    tables = [(target, cover.name) for cover in plan.covers for target in cover.targets(plan.batch)]
    ladders = [table for layer in plan.layers for table in layer.work.ladders]
    tables += [(target, f"ladders of {t.request.of}") for t in ladders for target in t.targets(plan.batch)]
    targets = [*plan.targets.values(), *(target for target, _ in tables)]
    refuse_sources(targets, [layer.source for layer in plan.batch.layers.values()])
    origins: dict[str, set[str]] = defaultdict(set)
    for target, name in tables:
        origins[str(target).casefold()].add(name)
    attached: dict[tuple[Path, str], tuple[Column, ...]] = defaultdict(tuple)
    for layer in plan.layers:
        attached[layer.info.path, layer.info.layer] += layer.columns
        together = attached[layer.info.path, layer.info.layer]
        refuse_clashes(layer.info, together if "geopackage" in plan.batch.outputs.formats else layer.columns)
        for word in plan.batch.outputs.formats:
            target = plan.targets[layer.name, word]
            origins[str(target).casefold()].add(
                str(layer.info.path) if target.stem != layer.name else layer.name
            )
    for folded, sources in origins.items():
        if len(sources) > 1:
            raise OutputError(
                f"{folded}: {' and '.join(sorted(sources))} would both be written to this file; "
                "rename a layer in the batch file"
            )


def parts_of(layer: LayerPlan, folder: Path) -> Iterator[PartInput]:
    """Yield a layer's parts, cut by the source alone; groups are first spooled in `folder`."""
    key = layer.layer.group_by
    ids = layer.layer.id if layer.work.named and not key else None
    columns = {*(layer.where.columns if layer.where else ()), *filter(None, (key, ids))}
    batches = (
        (batch, layer.where.mask(batch.attributes) if layer.where else None)
        for batch in stream(layer.info, columns=sorted(columns))
    )
    if key:
        for bucket in bucket_rows(batches, key, layer.info, folder / f"{layer.name}.{os.getpid()}.groups"):
            yield GroupsPart(bucket)
    else:
        for batch, wanted in batches:
            yield RowsPart(
                batch.rows, batch.wkb, batch.fids, wanted, _ids(batch, ids, layer) if ids else None
            )


def _ids(batch: Rows, column: str, layer: LayerPlan) -> pa.Array:
    """Return the values that name a batch's rows in ladder tables."""
    values = batch.attributes.column(column)
    try:
        return values.cast(layer.work.ladders[0].schema.field("id").type)
    except pa.ArrowException:
        raise LayerError(
            f"{layer.info.path}: layer {layer.info.layer!r}: column {column!r} of type {values.type} cannot "
            "name rows in a table; id takes text or numbers"
        ) from None
