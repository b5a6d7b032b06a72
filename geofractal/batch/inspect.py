"""What a file or folder holds, before anybody writes a batch for it."""

from __future__ import annotations

from collections import Counter
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from geofractal.batch.inspect_rasters import RasterReport, inspect_raster
from geofractal.config.models import RASTER_ENDINGS
from geofractal.errors import GeofractalError, SourceError
from geofractal.measure import Floats, Lines
from geofractal.progress import Progress
from geofractal.reader.crs import crs_doubt, parse_crs
from geofractal.reader.geometry import PROBLEMS, read_lines
from geofractal.reader.layers import SUFFIXES, LayerInfo, driver_of
from geofractal.reader.planes import Projector
from geofractal.reader.vector import layer_info, list_layers, stream
from geofractal.scaling.ladder import divider_ladders

SHARES = (0.05, 0.5, 0.95)
"""Quantiles that are told."""

_KINDS = {1: "points", 2: "lines", 3: "polygons", 4: "points", 5: "lines", 6: "polygons", 7: "collections"}

Quantiles = dict[str, float]


@dataclass(frozen=True)
class LayerReport:
    """What one layer holds.

    Attributes
    ----------
    path, layer, driver : where it is and how it is read
    crs : name of its CRS, None where it states none
    rows, vertices : how many; the vertices of lines and boundaries that can be read
    kinds : rows of each kind of geometry
    columns : attributes, name and type
    bounds : least x, least y, greatest x, greatest y of those vertices, in the layer's CRS
    spacing_m : quantiles of the distance from vertex to vertex, metres
    ruler_min_m, ruler_max_m : median first and last ruler of the features' usable ladders, metres
    decades : quantiles of the usable ladder's length in powers of ten
    problems : what stands in the way, and in how many rows
    """

    path: Path
    layer: str
    driver: str
    crs: str | None
    rows: int
    vertices: int
    kinds: dict[str, int]
    columns: dict[str, str]
    bounds: tuple[float, float, float, float] | None
    spacing_m: Quantiles | None
    ruler_min_m: float | None
    ruler_max_m: float | None
    decades: Quantiles | None
    problems: dict[str, int]

    @property
    def measurable(self) -> bool:
        """Whether some row can be measured as a line."""
        return self.vertices > 0


@dataclass(frozen=True)
class Inspection:
    """What a file or folder holds; `unread` says why some of it could not be read."""

    layers: tuple[LayerReport, ...]
    rasters: tuple[RasterReport, ...]
    unread: dict[str, str]

    def as_dict(self) -> dict[str, Any]:
        """Return all of it as plain data for JSON."""
        return {
            "layers": [asdict(layer) | {"path": str(layer.path)} for layer in self.layers],
            "rasters": [asdict(raster) | {"path": str(raster.path)} for raster in self.rasters],
            "unread": self.unread,
        }

    def lines(self) -> list[str]:
        """Return all of it as text."""
        text = [line for layer in self.layers for line in (*_layer_lines(layer), "")]
        text += [line for raster in self.rasters for line in (*raster.lines(), "")]
        text += [f"{path}: cannot be read: {reason}" for path, reason in self.unread.items()]
        return text or ["nothing to measure here"]


def inspect_path(path: Path, *, progress: Progress | None = None) -> Inspection:
    """Read every layer of a file, or of all vector files of a folder, and the headers of its rasters.

    Raises
    ------
    SourceError
        The path is not there, or a single file cannot be read at all.
    """
    progress = progress or Progress()
    if not path.exists():
        raise SourceError(f"{path}: no such file or folder")
    files = sorted(file for file in path.iterdir() if _known(file)) if path.is_dir() else [path]
    if not files:
        endings = ", ".join((*SUFFIXES, *RASTER_ENDINGS))
        raise SourceError(f"{path}: holds no vector or raster file; known endings: {endings}")
    reports: list[LayerReport] = []
    rasters: list[RasterReport] = []
    unread: dict[str, str] = {}
    for file in files:
        if file.suffix.lower() in RASTER_ENDINGS:
            try:
                rasters.append(inspect_raster(file))
            except GeofractalError as error:
                unread[str(file)] = str(error)
            continue
        try:
            names = list_layers(file)
        except SourceError as error:
            if not path.is_dir():
                raise
            unread[str(file)] = str(error)
            continue
        for name in names:
            try:
                reports.append(_inspect_layer(file, name, progress))
            except GeofractalError as error:
                unread[f"{file}, layer {name}"] = str(error)
    return Inspection(tuple(reports), tuple(rasters), unread)


def _known(file: Path) -> bool:
    return driver_of(file) is not None or file.suffix.lower() in RASTER_ENDINGS


class _LogHistogram:
    """Counts of positive numbers in bins 1 % wide: quantiles of any number of them in little memory."""

    WIDTH = np.log(1.01)
    LEAST = 1e-9
    BINS = 5_000  # up to 4e12

    def __init__(self) -> None:
        self._counts = np.zeros(self.BINS, np.int64)

    def add(self, values: Floats) -> None:
        bins = (np.log(np.maximum(values, self.LEAST) / self.LEAST) / self.WIDTH).astype(np.int64)
        self._counts += np.bincount(np.minimum(bins, self.BINS - 1), minlength=self.BINS)

    def quantile(self, share: float) -> float | None:
        """Return a quantile within half a percent, None where nothing was counted."""
        total = int(self._counts.sum())
        if not total:
            return None
        index = int(np.searchsorted(np.cumsum(self._counts), share * total))
        return float(f"{self.LEAST * np.exp((index + 0.5) * self.WIDTH):.3g}")

    def quantiles(self) -> Quantiles | None:
        """Return the quantiles that are told."""
        found = {f"{share:.0%}": self.quantile(share) for share in SHARES}
        return {label: value for label, value in found.items() if value is not None} or None


@dataclass
class _Tally:
    """What the batches of a layer add up to."""

    vertices: int = 0
    kinds: Counter[str] = field(default_factory=Counter)
    problems: Counter[str] = field(default_factory=Counter)
    low: Floats = field(default_factory=lambda: np.full(2, np.inf))
    high: Floats = field(default_factory=lambda: np.full(2, -np.inf))
    spacing: _LogHistogram = field(default_factory=_LogHistogram)
    first_rulers: _LogHistogram = field(default_factory=_LogHistogram)
    last_rulers: _LogHistogram = field(default_factory=_LogHistogram)
    spans: _LogHistogram = field(default_factory=_LogHistogram)

    def add(self, wkb: pa.Array, projector: Projector | None) -> None:
        """Add a batch of geometries."""
        self.kinds.update(_kinds(wkb))
        lines = read_lines(wkb)
        self.problems.update(PROBLEMS[code] for code in lines.problems[lines.problems > 0].tolist())
        if not len(lines):
            return
        self.vertices += len(lines.xy)
        self.low = np.minimum(self.low, lines.xy.min(axis=0))
        self.high = np.maximum(self.high, lines.xy.max(axis=0))
        if projector is None:
            return
        chunks, refused = projector.lines(
            lines.rows, lines.xy, lines.part_offsets, lines.feature_offsets, lines.closed
        )
        self.problems.update(text.partition(";")[0] for text in refused.values())
        for chunk in chunks:
            self._add_projected(chunk)

    def _add_projected(self, lines: Lines) -> None:
        self.spacing.add(_source_steps(lines))
        ladders = divider_ladders(lines)
        usable = np.diff(ladders.offsets) > 0
        first = ladders.rulers[ladders.offsets[:-1][usable]]
        last = ladders.rulers[ladders.offsets[1:][usable] - 1]
        self.first_rulers.add(first)
        self.last_rulers.add(last)
        self.spans.add(last / first)
        without = int(np.count_nonzero(~usable))
        if without:
            self.problems["too few vertices for a ladder of rulers"] += without


def _inspect_layer(path: Path, name: str, progress: Progress) -> LayerReport:
    info = layer_info(path, layer=name, need_crs=False)
    tally = _Tally()
    projector = Projector(info.crs) if info.crs else None
    with progress.stage(f"{path.name}, {name}", "inspect", info.features) as stage:
        for batch in stream(info):
            tally.add(batch.wkb, projector)
            stage.advance(len(batch))
    return _report(info, tally)


def _report(info: LayerInfo, tally: _Tally) -> LayerReport:
    bounds = (*tally.low.tolist(), *tally.high.tolist()) if tally.vertices else None
    problems = dict(tally.problems.most_common())
    if info.crs is None:
        problems["no CRS; state it under crs"] = info.features
    elif bounds and (doubt := crs_doubt(info.crs, bounds)):
        problems[doubt] = info.features
    spans = tally.spans.quantiles()
    return LayerReport(
        path=info.path,
        layer=info.layer,
        driver=info.driver,
        crs=_crs_name(info.crs),
        rows=info.features,
        vertices=tally.vertices,
        kinds=dict(tally.kinds.most_common()),
        columns=dict(info.fields),
        bounds=bounds,
        spacing_m=tally.spacing.quantiles(),
        ruler_min_m=tally.first_rulers.quantile(0.5),
        ruler_max_m=tally.last_rulers.quantile(0.5),
        decades=spans and {share: round(float(np.log10(span)), 2) for share, span in spans.items()},
        problems=problems,
    )


def _crs_name(wkt: str | None) -> str | None:
    if wkt is None:
        return None
    crs = parse_crs(wkt)
    authority = crs.to_authority()
    return f"{crs.name} ({':'.join(authority)})" if authority else str(crs.name)


def _kinds(wkb: pa.Array) -> dict[str, int]:
    """Return how many geometries there are of each kind, from the first bytes of each."""
    counted: Counter[str] = Counter()
    for entry in pc.value_counts(pc.binary_slice(wkb, 0, 5)).to_pylist():
        head, count = entry["values"], entry["counts"]
        if head is None or len(head) < 5:
            counted["missing"] += count
        else:
            code = int.from_bytes(head[1:], "little" if head[0] else "big") & 0xFFFF
            counted[_KINDS.get(code % 1000, "curves")] += count
    return dict(counted)


def _source_steps(lines: Lines) -> Floats:
    """Return the distances above zero from each source vertex to the next of its part."""
    part = np.repeat(np.arange(len(lines.closed)), np.diff(lines.part_offsets))[lines.source_vertex]
    xy = lines.xy[lines.source_vertex]
    steps: Floats = np.linalg.norm(np.diff(xy, axis=0), axis=1)[part[1:] == part[:-1]]
    return steps[steps > 0.0]


def _layer_lines(layer: LayerReport) -> list[str]:
    """Return a layer's report as lines of text."""
    text = [
        f"{layer.path}, layer {layer.layer} ({layer.driver})",
        f"  CRS       {layer.crs or 'none'}",
        f"  rows      {layer.rows:,}: {_counts(layer.kinds)}",
        f"  vertices  {layer.vertices:,} of lines and boundaries",
    ]
    if layer.bounds:
        text.append("  extent    {:.7g}, {:.7g} to {:.7g}, {:.7g}".format(*layer.bounds))
    if layer.spacing_m:
        text.append(f"  spacing   {_shares(layer.spacing_m, ' m')} from vertex to vertex")
    if layer.decades:
        span = f"{layer.ruler_min_m:g} m to {layer.ruler_max_m:g} m"
        text.append(f"  ladder    {_shares(layer.decades, '')} decades; half-way feature: {span}")
    text += [
        f"  problem   {problem} ({'all' if count == layer.rows else f'{count:,} of {layer.rows:,}'} rows)"
        for problem, count in layer.problems.items()
    ]
    return [*text, f"  columns   {', '.join(layer.columns) or 'none'}"]


def _counts(kinds: dict[str, int]) -> str:
    return ", ".join(f"{count:,} {kind}" for kind, count in kinds.items()) or "none"


def _shares(quantiles: Quantiles, unit: str) -> str:
    return ", ".join(f"{value:g}{unit} ({share})" for share, value in quantiles.items())
