"""The plan of class maps: each map's header, what it is measured with, and where the tables go."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

from geofractal.config.models import Batch, CoverRequest, RasterLayer
from geofractal.config.wording import near_match
from geofractal.config.yaml_tree import KeyPath
from geofractal.cover_map import OWN_BARRIER
from geofractal.errors import ConfigError, GeofractalWarning, LayerError, Problem, SourceError
from geofractal.landcover.barriers import BARRIER
from geofractal.landcover.polygons import class_name
from geofractal.reader.ground import GroundPlane
from geofractal.reader.layers import LayerInfo, allowed
from geofractal.reader.raster import Raster, RasterOptions, open_raster
from geofractal.reader.raster_source import open_source
from geofractal.reader.vector import stream

if TYPE_CHECKING:
    from geofractal.batch.plan import LayerPlan

PATCH_FORMATS = {"geopackage": ".gpkg", "geoparquet": ".parquet"}


@dataclass(frozen=True)
class CoverWork:
    """One measure of a class map, with the layers of its zones and barriers."""

    request: CoverRequest
    zones: LayerPlan | None
    barriers: tuple[LayerPlan, ...]

    @property
    def layers(self) -> tuple[LayerPlan, ...]:
        """Return the layers of zones and barriers."""
        return (*((self.zones,) if self.zones else ()), *self.barriers)


@dataclass(frozen=True)
class CoverPlan:
    """A class map of the batch, ready to be measured: a raster, or a layer of polygons."""

    name: str
    raster: Raster | None
    polygons: LayerPlan | None
    groups: dict[str, tuple[str, ...]]
    works: tuple[CoverWork, ...]
    budget_percent: float

    @cached_property
    def ground(self) -> GroundPlane | None:
        """Return the plane that distances between polygons are measured on; None of a layer without rows."""
        if self.polygons is None or (bounds := self.polygons.info.bounds) is None:
            return None
        from pyproj import CRS

        return GroundPlane(CRS.from_user_input(self.polygons.info.crs), bounds, self.budget_percent / 100)

    @cached_property
    def files(self) -> tuple[Path, ...]:
        """Return the files that hold the map."""
        if self.polygons is not None:
            return (self.polygons.info.path,)
        assert self.raster is not None
        return raster_files(Path(str(self.raster.source)))

    @property
    def warped(self) -> bool:
        """Whether the map is measured on another grid than its own."""
        return self.raster is not None and self.raster.grid is not self.raster.source_grid

    @cached_property
    def stems(self) -> tuple[str, ...]:
        """Return how each measure's files are named: as the map, and one asked again with its prefix too."""
        met: set[str] = set()
        stems = []
        for request in (work.request for work in self.works):
            stems.append(f"{self.name}_{request.prefix}" if request.measure in met else self.name)
            met.add(request.measure)
        return tuple(stems)

    def table(self, folder: Path, stem: str, word: str) -> Path:
        """Return the file of a table of figures in a format."""
        return folder / f"{stem}_figures.{word}"

    def warping_file(self, folder: Path) -> Path:
        """Return the file of what warping did to each class."""
        return folder / f"{self.name}_warping.csv"

    def patch_files(self, batch: Batch, stem: str) -> dict[str, Path]:
        """Return the file of patches in each format."""
        words = [word for word in batch.outputs.formats if word in PATCH_FORMATS] or ["geopackage"]
        if self.raster is None:
            words = ["geoparquet"]
        folder = batch.outputs.folder
        return {word: folder / f"{stem}_patches{PATCH_FORMATS[word]}" for word in words}

    def targets(self, batch: Batch) -> list[Path]:
        """Return all files that the map's results go to."""
        folder = batch.outputs.folder
        files = [
            self.table(folder, stem, word)
            for stem in dict.fromkeys(self.stems)
            for word in batch.outputs.tables
        ]
        files += [self.warping_file(folder)] if self.warped else []
        for work, stem in zip(self.works, self.stems, strict=True):
            if work.request.patch_rule() is not None:
                files += self.patch_files(batch, stem).values()
        return files


def raster_files(path: Path) -> tuple[Path, ...]:
    """Return the files of a raster: itself, what stands beside it, and what a virtual one is made of."""
    found: dict[Path, None] = {}
    waiting = [path]
    while waiting:
        file = waiting.pop()
        if file in found or not file.is_file():
            continue
        found[file] = None
        if file.suffix.lower() == ".vrt" or file == path:
            with open_source(file) as dataset:
                waiting += [Path(name) for name in dataset.files]
    return tuple(found)


def plan_covers(
    batch: Batch, vectors: Mapping[str, LayerPlan], failed: dict[str, SourceError], problems: list[Problem]
) -> tuple[CoverPlan, ...]:
    """Look at every class map's header; what cannot be read goes to `failed`, what is wrong to `problems`."""
    plans: list[CoverPlan] = []
    budget = batch.projection.budget_percent
    for name, layer in batch.layers.items():
        requests = batch.cover_requests_of(name)
        if not requests or name in failed:
            continue
        try:
            works = tuple(_work(request, vectors, failed) for request in requests)
            if isinstance(layer, RasterLayer):
                raster = open_raster(layer.source, reading_options(layer, batch))
                problems += _cover_problems(batch, name, layer, raster)
                plans.append(CoverPlan(name, raster, None, dict(layer.groups), works, budget))
            else:
                plan = CoverPlan(name, None, vectors[name], dict(layer.groups), works, budget)
                problems += _class_problems(batch, plan)
                plans.append(plan)
        except SourceError as error:
            failed[name] = error
        except ConfigError as error:
            problems.append(batch.problem(("layers", name), str(error)))
    return tuple(plans)


def reading_options(layer: RasterLayer, batch: Batch) -> RasterOptions:
    """Return how a layer's raster is read."""
    return RasterOptions(
        band=layer.band,
        crs=layer.crs,
        classes=layer.classes,
        rest=layer.rest,
        nodata=layer.nodata,
        whole_numbers=layer.whole_numbers,
        grid=layer.grid,
        budget_percent=batch.projection.budget_percent,
        cell_size_m=layer.cell_size_m,
    )


def _work(
    request: CoverRequest, vectors: Mapping[str, LayerPlan], failed: Mapping[str, SourceError]
) -> CoverWork:
    used = [("zones", request.zones or "")] + [("barriers", one.layer) for one in request.barriers]
    for what, name in used:
        if name in failed:
            raise LayerError(f"its {what} {name!r} cannot be read: {failed[name]}")
    zones = None if request.zones is None else vectors[request.zones]
    return CoverWork(request, zones, tuple(vectors[one.layer] for one in request.barriers))


def _cover_problems(batch: Batch, name: str, layer: RasterLayer, raster: Raster) -> Iterator[Problem]:
    """Yield classes that groups and measures name and the map does not have."""
    legend = raster.legend
    known = list(legend.names if legend.closed else dict.fromkeys(legend.own_names.values()))
    free = not legend.closed and not legend.own_names  # names are the codes that will be met

    def unknown(cover: str, names: list[str]) -> bool:
        return cover not in names and not (free and cover.lstrip("-").isdigit())

    def told(cover: str, names: list[str]) -> tuple[str, str, str]:
        said = f"the class map {name!r} has no class {cover!r}"
        return said, ", ".join(names) or "the map's codes, as text", near_match(cover, names)

    for group, members in layer.groups.items():
        if group in known:
            said = f"{group!r} is the name of a class already"
            yield batch.problem(("layers", name, "groups", group), said, allowed="another name")
        for place, member in enumerate(members):
            if unknown(member, known):
                said, allowed, near = told(member, known)
                yield batch.problem(
                    ("layers", name, "groups", group, place), said, allowed=allowed, near=near
                )
    for index, request in enumerate(batch.measures):
        if not isinstance(request, CoverRequest) or request.of != name:
            continue
        taking = [place for place, one in enumerate(request.barriers) if one.width_m]
        if taking and BARRIER in (*known, *legend.own_names.values(), *layer.groups):
            yield batch.problem(("measures", index, "barriers", taking[0]), OWN_BARRIER)
        bounding = [*known, BARRIER] if taking else known
        depths = getattr(request.options, "depth_by_neighbour_m", ())
        named = [
            *((("covers", place), one, [*known, *layer.groups]) for place, one in enumerate(request.covers)),
            *((("depth-by-neighbour-m", one), one, bounding) for one in depths),
        ]
        for at, cover, names in named:
            if unknown(cover, names):
                said, allowed, near = told(cover, names)
                yield batch.problem(("measures", index, *at), said, allowed=allowed, near=near)


def class_values(info: LayerInfo, column: str) -> Iterator[str | None]:
    """Yield the class of each polygon of a layer; None where it has none."""
    for part in stream(info, columns=[column]):
        held = part.attributes.column(column).to_pylist()
        yield from map(class_name, held)


def _class_problems(batch: Batch, plan: CoverPlan) -> Iterator[Problem]:
    """Yield columns of classes that a layer of polygons lacks, and groups that are classes already.

    Warns
    -----
    GeofractalWarning
        for a class that groups or measures name and no polygon is of: it may be gone, or be misspelt
    """
    assert plan.polygons is not None
    info, known = plan.polygons.info, dict[str | None, None]()
    asked = [
        (index, request)
        for index, request in enumerate(batch.measures)
        if isinstance(request, CoverRequest) and request.of == plan.name
    ]
    for index, request in asked:
        column = request.class_column
        if column is not None and column not in info.field_names:
            said = f"{info.path}: layer {info.layer!r} has no column {column!r}"
            words = f"{said}; {allowed(info.field_names, column)}"
            yield batch.problem(("measures", index, "class-column"), words)
            return
    for column in dict.fromkeys(request.class_column for _, request in asked):
        known |= {"all": None} if column is None else dict.fromkeys(class_values(info, column))
    classes = [name for name in known if name is not None]
    for index, request in asked:
        taking = [place for place, one in enumerate(request.barriers) if one.width_m]
        if taking and BARRIER in (*classes, *plan.groups):
            yield batch.problem(("measures", index, "barriers", taking[0]), OWN_BARRIER)
    for group in plan.groups:
        if group in known:
            said = f"{group!r} is the name of a class already"
            yield batch.problem(("layers", plan.name, "groups", group), said, allowed="another name")
    for at, name in _classes_named(batch, plan):
        if name not in known:
            said = f"no polygon of {plan.name!r} is of class {name!r}"
            problem = batch.problem(at, said, allowed=", ".join(classes), near=near_match(name, classes))
            warnings.warn(str(problem), GeofractalWarning, stacklevel=2)


def _classes_named(batch: Batch, plan: CoverPlan) -> Iterator[tuple[KeyPath, str]]:
    """Yield where groups and measures of a layer name classes."""
    for group, members in plan.groups.items():
        for place, member in enumerate(members):
            yield ("layers", plan.name, "groups", group, place), member
    for index, request in enumerate(batch.measures):
        if isinstance(request, CoverRequest) and request.of == plan.name:
            for place, cover in enumerate(request.covers):
                if cover not in plan.groups:
                    yield ("measures", index, "covers", place), cover
            for neighbour in getattr(request.options, "depth_by_neighbour_m", ()):
                if neighbour != BARRIER or not any(one.width_m for one in request.barriers):
                    yield ("measures", index, "depth-by-neighbour-m", neighbour), neighbour
