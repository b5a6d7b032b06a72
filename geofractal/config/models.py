"""What a batch file says, as frozen models. Descriptions are the text of the schema and of the errors."""

from __future__ import annotations

import codecs
import os
import re
from difflib import get_close_matches
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    Discriminator,
    Field,
    PrivateAttr,
    SerializeAsAny,
    Tag,
    ValidationInfo,
    WithJsonSchema,
    field_validator,
)
from pydantic_core import PydanticCustomError

from geofractal.config.columns import ZoneColumn, prefixed, zone_columns
from geofractal.config.yaml_tree import KeyPath, YamlTree
from geofractal.errors import LayerError, Problem
from geofractal.measure import Column, LadderMeasure, LadderOptions, Options, PatchRule, Quantity
from geofractal.registry import columns_of, load_cover_measure, load_measure, quantities_of

RASTER_ENDINGS = (".tif", ".tiff", ".vrt")
"""Endings of sources that are read as class maps."""

Format = Literal["geopackage", "shapefile", "flatgeobuf", "geojson", "geojson-lines", "geoparquet"]


def _refusal(allowed: str, near: str = "") -> PydanticCustomError:
    """Return the error of a value; `allowed` and `near` become those of a `Problem`."""
    return PydanticCustomError("refused", "{allowed}", {"allowed": allowed, "near": near})


def _beside_file(path: Path, info: ValidationInfo) -> Path:
    """Return `path` as seen from the folder of the batch file."""
    folder: Path = (info.context or {}).get("folder", Path())
    return Path(os.path.normpath((folder / path.expanduser()).absolute()))


def _there(path: Path) -> Path:
    if path.exists():
        return path
    folder = next(parent for parent in path.parents if parent.exists())
    missing = path.relative_to(folder).parts[0]
    near = get_close_matches(missing, sorted(entry.name for entry in folder.iterdir()), n=1)
    raise _refusal(
        f"a path that exists, seen from the batch file's folder; {folder} has no {missing!r}", *near
    )


def _no_file(path: Path) -> Path:
    if path.exists() and not path.is_dir():
        raise _refusal(f"a folder, existing or new; {path} is a file")
    return path


def _known_crs(text: str) -> str:
    from geofractal.reader.crs import parse_crs  # PROJ is slow to load

    try:
        parse_crs(text)
    except LayerError as error:
        raise _refusal("an authority code such as EPSG:3035, or WKT, that PROJ knows") from error
    return text


def _known_encoding(text: str) -> str:
    try:
        codecs.lookup(text)
    except LookupError as error:
        raise _refusal("the name of an encoding, such as UTF-8 or ISO-8859-1") from error
    return text


def _named_by(pattern: str, rule: str) -> tuple[AfterValidator, WithJsonSchema]:
    """Return what makes a text follow a pattern, which errors put in words."""

    def check(text: str) -> str:
        if not re.fullmatch(pattern, text):
            raise _refusal(rule)
        return text

    return AfterValidator(check), WithJsonSchema({"type": "string", "pattern": f"^{pattern}$"})


SourcePath = Annotated[Path, AfterValidator(_beside_file), AfterValidator(_there)]
Text = Annotated[str, Field(min_length=1)]
LayerName = Annotated[  # becomes a file's name, on any system
    str,
    *_named_by(
        r'[^\s./\\:*?"<>|]([^/\\:*?"<>|\r\n\t]*[^\s./\\:*?"<>|])?',
        'a name without / \\ : * ? " < > |, with neither dot nor space at its ends',
    ),
]
Prefix = Annotated[
    str,
    *_named_by(r"[a-z][a-z0-9]*(_[a-z0-9]+)*", "lower-case words and digits joined by single underscores"),
]


class Section(BaseModel):
    """Base of all sections: frozen, strict, no free keys; YAML spells the keys with hyphens."""

    model_config = Options.model_config


class Prepare(Section):
    """Steps that a layer goes through before anything is measured; the source itself stays as it is."""

    repair: bool = Field(False, description="make invalid geometry valid")
    join_within_m: float | None = Field(
        None,
        ge=0,
        description="join lines whose ends lie within this many metres of each other; null joins none",
    )
    drop_repeated: bool = Field(False, description="drop vertices that repeat the one before")
    boundaries: Literal["all", "outer"] = Field(
        "all", description="lines taken from polygons: every ring, or outer rings only"
    )
    branches: Literal["refuse", "main-path"] = Field(
        "refuse",
        description="a group that forms no single path, for measures that need one: refuse it, or keep its "
        "main path",
    )


class VectorLayer(Section):
    """A layer of lines or polygons."""

    source: SourcePath = Field(description="file that holds the layer, seen from the batch file's folder")
    layer: Text | None = Field(None, description="the layer's name in a file that holds several")
    crs: Annotated[Text, AfterValidator(_known_crs)] | None = Field(
        None, description="CRS of a layer that states none: an authority code such as EPSG:3035, or WKT"
    )
    override_crs: bool = Field(False, description="take `crs` even where the layer states another")
    id: Text | None = Field(None, description="column that names a row in notes, tables and the run record")
    group_by: Text | None = Field(
        None, description="column whose equal values make one line, such as the reaches of a river"
    )
    where: Text | None = Field(
        None, description="SQL expression; only rows for which it is true are measured"
    )
    encoding: Annotated[Text, AfterValidator(_known_encoding)] | None = Field(
        None, description="encoding of text in a Shapefile that states it wrongly or not at all"
    )
    groups: dict[Text, tuple[Text, ...]] = Field(
        {},
        description="names for several classes of polygons taken together, such as habitat, where a class "
        "column is named",
    )
    edges: Literal["straight", "geodesic"] = Field(
        "straight", description="edges between vertices: straight in the layer's CRS, or geodesics"
    )
    prepare: Prepare = Field(Prepare(), description="steps before anything is measured")

    @field_validator("override_crs")
    @classmethod
    def _override_needs_crs(cls, value: bool, info: ValidationInfo) -> bool:  # noqa: FBT001 - pydantic's shape
        if value and info.data.get("crs", "") is None:
            raise _refusal("true only beside crs, which says what replaces the layer's own")
        return value


class RasterLayer(Section):
    """A class map: land cover as cells."""

    source: SourcePath = Field(description="raster file, seen from the batch file's folder")
    band: int = Field(1, ge=1, description="band that holds the classes, counted from 1")
    crs: Annotated[Text, AfterValidator(_known_crs)] | None = Field(
        None, description="CRS of a raster that states none: an authority code such as EPSG:3035, or WKT"
    )
    classes: dict[Text, int | Text | tuple[int | Text, ...]] | None = Field(
        None,
        description="name of each class and its codes, or the names that the raster itself gives to codes; "
        "left out, the raster's own names and codes are the classes",
    )
    rest: Text | None = Field(
        None, description="class for all codes not named; left out, such a code is an error"
    )
    groups: dict[Text, tuple[Text, ...]] = Field(
        {}, description="names for several classes taken together, such as habitat"
    )
    nodata: tuple[int, ...] = Field((), description="further codes of cells without data")
    whole_numbers: bool = Field(False, description="take a raster of floats as whole numbers")
    grid: Literal["auto", "source", "warp"] = Field(
        "auto",
        description="grid to measure on: the source's, or one warped to an equal-distance plane; auto warps "
        "only where the source's grid breaks the budget",
    )
    cell_size_m: float | None = Field(
        None, gt=0, description="cell size of a warped grid in metres; left out, the source's"
    )


def kind_of_layer(layer: Any) -> str:
    """Return which model a layer's mapping is meant for, by the ending of its source."""
    source = layer.get("source") if isinstance(layer, dict) else getattr(layer, "source", None)
    return "raster" if str(source).lower().endswith(RASTER_ENDINGS) else "vector"


Layer = Annotated[
    Annotated[VectorLayer, Tag("vector")] | Annotated[RasterLayer, Tag("raster")],
    Discriminator(kind_of_layer),
]


class RequestHead(Section):
    """The keys that every measure's entry has."""

    measure: str = Field(description="what to measure; `geofractal measures` lists the words")
    of: str = Field(description="name of the layer to measure")
    prefix: Prefix | None = Field(
        None,
        description="word set before the names of the new columns, where two measures would share one; a "
        "measure asked of one class map again also has it in the names of its files",
    )


class MeasureRequest(RequestHead):
    """One measure asked of one layer."""

    options: SerializeAsAny[Options] = Field(description="the measure's own options")

    def columns(self) -> tuple[Column, ...]:
        """Return the columns that this request adds, prefix included.

        Raises
        ------
        MeasureError
            where the measure cannot be loaded or its columns break the contract
        """
        return prefixed(columns_of(load_measure(self.measure), self.options), self.prefix)

    def ladder_columns(self) -> tuple[Column, ...]:
        """Return the measure's columns of the ladder table; none where no such table is asked."""
        if not (isinstance(self.options, LadderOptions) and self.options.ladder_table):
            return ()
        measure = load_measure(self.measure)
        assert isinstance(measure, LadderMeasure)  # no other measure has such options
        return measure.ladder_columns


class BarrierLayer(Section):
    """A layer of lines that cut what they cross."""

    layer: Text = Field(description="name of the layer")
    width_m: float = Field(
        0.0,
        ge=0,
        description="width of the lines in metres. Cells whose centre lies within half of it, and the strip "
        "of that width of polygons, are of no class but stay in the area with data, as the cover barrier, "
        "and bound other classes as another class does",
    )


def _barrier_layer(said: Any) -> Any:
    """Return what a layer's name alone stands for."""
    if isinstance(said, str):
        return {"layer": said}
    if isinstance(said, dict | BarrierLayer):
        return said
    raise _refusal("the name of a layer, or a mapping of layer and width-m")


Barrier = Annotated[BarrierLayer, BeforeValidator(_barrier_layer, json_schema_input_type=Text | BarrierLayer)]


class CoverHead(RequestHead):
    """The keys that the entry of every measure of class maps has."""

    covers: tuple[Text, ...] = Field(
        (),
        description="classes and groups to measure, whose figures also become columns of the zones' copy; "
        "left out, the table has all of them and the zones get no columns",
    )
    zones: Text | None = Field(
        None, description="name of a layer of polygons, for each of which figures are given"
    )
    barriers: tuple[Barrier, ...] = Field(
        (),
        description="layers of lines, such as roads, that cut what they cross: their names, or "
        "{layer: name, width-m: metres}",
    )
    class_column: Text | None = Field(
        None, description="column that names the class of each polygon, of a layer of polygons"
    )
    dissolve: bool = Field(
        True, description="make polygons of one class that overlap or share a boundary one patch"
    )


class CoverRequest(CoverHead):
    """One measure asked of one class map."""

    options: SerializeAsAny[Options] = Field(description="the measure's own options")

    def quantities(self) -> tuple[Quantity, ...]:
        """Return the figures that this request gives.

        Raises
        ------
        MeasureError
            where the measure cannot be loaded or its quantities break the contract
        """
        return quantities_of(load_cover_measure(self.measure), self.options)

    def patch_rule(self) -> PatchRule | None:
        """Return by which rule patches are to be written as a layer; None where none are asked for."""
        return load_cover_measure(self.measure).patch_rule(self.options)

    def zone_columns(self) -> tuple[ZoneColumn, ...]:
        """Return the columns that the zones' copy gains, prefix included; none unless covers are named."""
        if self.zones is None or not self.covers:
            return ()
        stem = load_cover_measure(self.measure).stem
        return zone_columns(self.covers, self.quantities(), stem, self.prefix)


class Projection(Section):
    """On what plane distances are measured."""

    plane: Literal["feature", "layer"] = Field(
        "feature", description="an equidistant plane for each feature, or one for the whole layer"
    )
    budget_percent: float = Field(
        0.5, gt=0, le=100, description="greatest distance error that a plane may have, in percent"
    )
    three_dimensions: bool = Field(
        True,
        description="measure features beyond the budget in three dimensions on the ellipsoid, "
        "rather than refuse them",
    )


class Outputs(Section):
    """What is written, and where."""

    folder: Annotated[Path, AfterValidator(_beside_file), AfterValidator(_no_file)] = Field(
        description="folder for all results, seen from the batch file's folder; made where missing"
    )
    formats: tuple[Format, ...] = Field(
        ("geopackage",), min_length=1, description="formats of the copied layers"
    )
    tables: tuple[Literal["csv", "parquet"], ...] = Field(
        ("csv",), min_length=1, description="formats of the tables of figures and of ladders"
    )


class Run(Section):
    """How the batch runs."""

    workers: Literal["auto"] | Annotated[int, Field(ge=1, le=1024)] = Field(
        "auto", description="parts measured at once; auto takes every processor; results never depend on it"
    )
    refusals: Literal["keep", "fail"] = Field(
        "keep", description="rows without a figure: keep them and end well, or end with exit code 1"
    )


class BatchSections(Section):
    """All of a batch but its measures."""

    name: Text = Field(alias="batch", description="title of the batch")
    layers: dict[LayerName, Layer] = Field(min_length=1, description="the layers, by names of your own")
    projection: Projection = Field(Projection(), description="on what plane distances are measured")
    outputs: Outputs = Field(description="what is written, and where")
    run: Run = Field(Run(), description="how the batch runs")


class Batch(BatchSections):
    """One batch: layers in, the same layers with measured columns out."""

    measures: tuple[MeasureRequest | CoverRequest, ...] = Field(
        min_length=1, description="what is measured, of which layer"
    )

    _tree: YamlTree | None = PrivateAttr(None)

    @property
    def vector_layers(self) -> dict[str, VectorLayer]:
        """Return the layers of lines or polygons, by name."""
        return {name: layer for name, layer in self.layers.items() if isinstance(layer, VectorLayer)}

    @property
    def raster_layers(self) -> dict[str, RasterLayer]:
        """Return the class maps, by name."""
        return {name: layer for name, layer in self.layers.items() if isinstance(layer, RasterLayer)}

    @property
    def file(self) -> Path | None:
        """Return the batch file as it was named, None for a batch that code put together."""
        return self._tree.path if self._tree else None

    def requests_of(self, layer: str) -> tuple[MeasureRequest, ...]:
        """Return the measures of lines asked of a layer, in the file's order."""
        return tuple(r for r in self.measures if r.of == layer and isinstance(r, MeasureRequest))

    def cover_requests_of(self, layer: str) -> tuple[CoverRequest, ...]:
        """Return the measures of class maps asked of a layer, in the file's order."""
        return tuple(request for request in self.cover_requests if request.of == layer)

    @property
    def cover_requests(self) -> tuple[CoverRequest, ...]:
        """Return the measures of class maps, in the file's order."""
        return tuple(request for request in self.measures if isinstance(request, CoverRequest))

    @property
    def layers_used(self) -> set[str]:
        """Return the names of the layers that some measure uses, be it as zones or barriers."""
        used = {request.of for request in self.measures}
        return used.union(
            *((r.zones or r.of, *(one.layer for one in r.barriers)) for r in self.cover_requests)
        )

    def zone_columns_of(self, layer: str) -> tuple[Column, ...]:
        """Return the columns that class maps give a layer as their zones."""
        requests = [request for request in self.cover_requests if request.zones == layer]
        return tuple(one.column for request in requests for one in request.zone_columns())

    def problem(self, at: KeyPath, said: str, *, allowed: str = "", near: str = "") -> Problem:
        """Return a problem at a path of keys such as ``("layers", "shore", "id")``, placed in the file."""
        tree = self._tree or YamlTree(Path("batch"), None)
        return tree.problem(at, said, allowed=allowed, near=near)
