"""Everything that can be known of a batch without measuring it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from math import ceil, isfinite

from geofractal.batch.plan import LayerPlan, Plan, plan_batch
from geofractal.config.models import Batch
from geofractal.errors import LayerError
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
    yield f"  work: {parts}, {len(layer.work.requests)} measure{'s' if len(layer.work.requests) != 1 else ''}"
    yield from (f"  {line}" for line in _plane_lines(layer))
    yield f"  {len(layer.columns)} new columns:"
    for column in layer.columns:
        unit = f" [{column.unit}]" if column.unit else ""
        yield f"    {column.name}{unit}: {column.meaning}"
    for word in plan.batch.outputs.formats:
        yield f"  {word}: {plan.targets[layer.name, word]}"
        yield from (f"    not held: {loss}" for loss in plan.losses[layer.name, word])


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


def _percent(share: float) -> str:
    return f"{100.0 * share:.2g} %"
