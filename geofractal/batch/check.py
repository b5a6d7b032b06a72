"""Everything that can be known of a batch without measuring it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from math import ceil, isfinite

from geofractal.batch.cover_plan import CoverPlan, CoverWork
from geofractal.batch.plan import LayerPlan, Plan, plan_batch
from geofractal.config.models import Batch
from geofractal.errors import LayerError
from geofractal.measure import Column, Quantity
from geofractal.reader.crs import crs_doubt
from geofractal.reader.planes import layer_distortion

BYTES_PER_VERTEX = 16
"""Of a line in two dimensions in any binary format; what else a file holds makes the estimate a bound."""


@dataclass(frozen=True)
class CheckReport:
    """What a batch would do, as lines of text; `failed` tells whether a layer cannot be read."""

    plan: Plan

    @property
    def failed(self) -> bool:
        """Whether a layer cannot be read."""
        return bool(self.plan.failed)

    def lines(self) -> Iterator[str]:
        """Yield the report."""
        yield f"Batch: {self.plan.batch.name}"
        for layer in self.plan.layers:
            yield ""
            yield from _layer_lines(self.plan, layer)
        for cover in self.plan.covers:
            yield ""
            yield from _cover_lines(self.plan, cover)
        for name, error in self.plan.failed.items():
            yield ""
            yield f"Layer {name}: cannot be measured"
            yield f"  {error}"


def check_batch(batch: Batch) -> CheckReport:
    """Check a batch against its layers' headers; no row is measured and nothing is written.

    Raises
    ------
    ConfigError, OutputError
        as `geofractal.batch.plan.plan_batch`
    """
    return CheckReport(plan_batch(batch))


def _layer_lines(plan: Plan, layer: LayerPlan) -> Iterator[str]:
    info = layer.info
    yield f"Layer {layer.name}: {info.layer!r} of {info.path}"
    vertices = info.path.stat().st_size // BYTES_PER_VERTEX
    batches = ceil(info.features / info.rows_per_batch)
    parts = "groups" if layer.work.grouped else f"{batches:,} part{'s' if batches != 1 else ''}"
    yield f"  {info.driver}, {info.geometry}, {info.features:,} rows, at most about {vertices:,} vertices"
    if layer.work.requests:
        yield f"  work: {parts}, {_count(len(layer.work.requests), 'measure')}"
        yield from (f"  {line}" for line in _plane_lines(layer))
    yield f"  {len(layer.columns)} new columns:"
    yield from map(_column_line, layer.columns)
    for table in layer.work.ladders:
        files = " and ".join(str(path) for path in table.targets(plan.batch))
        yield f"  ladder table of {table.request.measure}, one row a feature and rung: {files}"
        yield from map(_column_line, table.columns)
    for word in plan.batch.outputs.formats:
        yield f"  {word}: {plan.targets[layer.name, word]}"
        yield from (f"    not held: {loss}" for loss in plan.losses[layer.name, word])


def _cover_lines(plan: Plan, cover: CoverPlan) -> Iterator[str]:
    """Yield what is known of a class map before its cells are read."""
    raster = cover.raster
    yield f"{'Polygons' if raster is None else 'Class map'} {cover.name}: {cover.files[0]}"
    if raster is not None:
        grid, source, legend = raster.grid, raster.source_grid, raster.legend
        width, height = grid.typical_cell
        yield f"  CRS: {source.crs.name}"
        yield f"  {grid.rows:,} rows and {grid.columns:,} columns of cells of {width:.4g} by {height:.4g} m"
        told = f"  lengths are off by {_percent(source.distortion)} at most on its own grid"
        warped = f", {_percent(grid.distortion)} on the {grid.plane} plane that it is warped to"
        budget = f"; budget: {raster.options.budget_percent:g} %"
        yield f"{told}{warped if cover.warped else ''}{budget}"
        if grid.seam:
            yield f"  warning: {grid.seam}"
        known = legend.names if legend.closed else [*dict.fromkeys(legend.own_names.values())]
        yield f"  classes: {', '.join(known) or 'the codes that are met'}"
    if cover.ground is not None:
        yield f"  CRS: {cover.ground.crs.name}"
        told = f"  distances between polygons are off by {_percent(cover.ground.distortion)} at most on the"
        yield f"{told} {cover.ground.name} plane; budget: {cover.budget_percent:g} %"
    yield from (f"  group {name}: {', '.join(members)}" for name, members in cover.groups.items())
    for work in cover.works:
        yield from _work_lines(work)
    yield from (f"  file: {target}" for target in cover.targets(plan.batch))


def _work_lines(work: CoverWork) -> Iterator[str]:
    request = work.request
    zones = f" and each of the {work.zones.info.features:,} rows of {work.zones.name}" if work.zones else ""
    lines = [f"{one.layer}{f' ({one.width_m:g} m wide)' if one.width_m else ''}" for one in request.barriers]
    barriers = f", cut by {' and '.join(lines)}" if lines else ""
    covers = ", ".join(request.covers) or "every class and group"
    yield f"  {request.measure} of {covers}, for the whole map{zones}{barriers}:"
    yield from map(_column_line, request.quantities())


def _column_line(column: Column | Quantity) -> str:
    unit = f" [{column.unit}]" if column.unit else ""
    return f"    {column.name}{unit}: {column.meaning}"


def _plane_lines(layer: LayerPlan) -> Iterator[str]:
    """Yield the CRS and how far distances are off in it and on the planes over the layer's extent."""
    from pyproj import CRS

    info, projector = layer.info, layer.work.projector
    yield f"CRS: {CRS.from_user_input(info.crs).name}"
    if info.bounds is None:
        return
    try:
        found = layer_distortion(projector.crs, info.bounds)
    except LayerError as error:
        yield f"warning: {error}"
        return
    warning = crs_doubt(projector.crs, info.bounds)
    if warning:
        yield f"warning: {warning}"
    figures = {
        "in the CRS itself": found.crs_distance,
        "on one azimuthal equidistant plane": found.azimuthal,
        "on one conic equidistant plane": found.conic,
    }
    told = [f"{_percent(value)} {where}" for where, value in figures.items() if isfinite(value)]
    if told:
        yield f"worst distance error over the layer's extent: {', '.join(told)}"
    yield f"budget: {_percent(projector.budget)}; each {projector.plane} on its own plane"


def _count(number: int, word: str) -> str:
    return f"{number} {word}{'s' if number != 1 else ''}"


def _percent(share: float) -> str:
    return f"{100.0 * share:.2g} %"
