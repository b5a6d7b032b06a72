"""A batch file read whole: everything that is wrong with it is found before anything is measured."""

from __future__ import annotations

import json
import os
import warnings
from collections import defaultdict
from collections.abc import Collection, Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, Field, ValidationError

from geofractal.config.models import (
    Batch,
    BatchSections,
    CoverHead,
    CoverRequest,
    MeasureRequest,
    RequestHead,
    kind_of_layer,
)
from geofractal.config.wording import near_match, problems_in
from geofractal.config.yaml_tree import KeyPath, YamlTree, config_error, read_yaml
from geofractal.errors import GeofractalWarning, MeasureError, Problem
from geofractal.measure import CoverMeasure
from geofractal.registry import (
    COVER_KEYS,
    REQUEST_KEYS,
    AnyMeasure,
    load_any_measure,
    load_cover_measure,
    measure_names,
)

Request = MeasureRequest | CoverRequest
M = TypeVar("M", bound=BaseModel)


class _BatchFile(BatchSections):
    """A batch whose measures are not yet looked at."""

    measures: tuple[dict[str, Any], ...] = Field(min_length=1, description="what is measured, of which layer")


def load_config(path: str | os.PathLike[str]) -> Batch:
    """Read a batch file and check all of it that can be checked without opening a layer.

    Parameters
    ----------
    path : the YAML file; paths in it are seen from its folder

    Returns
    -------
    Batch
        frozen and picklable

    Raises
    ------
    ConfigError
        with everything that is wrong with the file, each with line, column and key, also as
        `ConfigError.problems`

    Warns
    -----
    GeofractalWarning
        for a layer that no measure uses
    """
    tree, problems = read_yaml(Path(path))
    sections = _validated(_BatchFile, tree, (), tree.data, problems)
    requests = {
        at: request for at, entry in _entries(tree) if (request := _request(tree, at, entry, problems))
    }
    problems += [*_layer_name_problems(tree), *_kind_problems(tree, requests), *_clashes(tree, requests)]
    if problems or sections is None:
        raise config_error(tree.path, problems)
    held = {name: getattr(sections, name) for name in BatchSections.model_fields}
    batch = Batch.model_construct(**held, measures=tuple(requests.values()))
    batch._tree = tree  # noqa: SLF001 - the one place that knows where a batch came from
    for problem in _unused_layers(tree):
        warnings.warn(str(problem), GeofractalWarning, stacklevel=2)
    return batch


def wrong_kinds(batch: Batch, kinds: Mapping[str, Collection[str]]) -> list[Problem]:
    """Return the measures asked of layers that hold nothing they can measure.

    Parameters
    ----------
    batch : the batch
    kinds : for each layer the kinds of geometry found in it (``points``, ``lines``, ``polygons`` ...);
        a layer left out, or with no kinds, is not judged
    """
    usable = {
        "lines": {"lines", "polygons", "collections", "curves", "unknown"},
        "polygons": {"polygons", "collections", "curves", "unknown"},
        "barriers": {"lines", "collections", "curves", "unknown"},
    }
    return [
        batch.problem(at, f"{said}; layer {name!r} holds {' and '.join(sorted(found))}", allowed=allowed)
        for index, request in enumerate(batch.measures)
        for at, name, needed, said, allowed in _needed(("measures", index), request)
        if (found := kinds.get(name)) and not usable[needed] & set(found)
    ]


def _needed(at: KeyPath, request: Request) -> Iterator[tuple[KeyPath, str, str, str, str]]:
    """Yield where a request names a layer, its name, what it must hold, and how to say so."""
    if isinstance(request, MeasureRequest):
        said = f"{request.measure} measures lines"
        yield (*at, "of"), request.of, "lines", said, "a layer of lines or polygons"
        return
    said = f"{request.measure} takes patches from polygons"
    yield (*at, "of"), request.of, "polygons", said, "a layer of polygons, or a class map"
    if request.zones is not None:
        yield (*at, "zones"), request.zones, "polygons", "zones are polygons", "a layer of polygons"
    for place, barrier in enumerate(request.barriers):
        at_barrier = (*at, "barriers", place)
        yield at_barrier, barrier.layer, "barriers", "barriers are lines", "a layer of lines"


def _validated(
    model: type[M],
    tree: YamlTree,
    at: KeyPath,
    value: Any,
    problems: list[Problem],
    also: Collection[str] = (),
) -> M | None:
    """Return the model of a value, or None after noting what is wrong with it.

    The value goes in as JSON, whose lists are tuples and whose texts are paths to a strict model.
    """
    context = {"folder": tree.path.parent}
    try:
        return model.model_validate_json(json.dumps(value), by_alias=True, by_name=False, context=context)
    except ValidationError as error:
        problems += problems_in(error, model, tree, at, tuple(also))
        return None


def _entries(tree: YamlTree) -> Iterator[tuple[KeyPath, dict[str, Any]]]:
    """Yield the measures' entries that are mappings; the rest are refused by `_BatchFile`."""
    entries = tree.data.get("measures")
    for index, entry in enumerate(entries if isinstance(entries, list) else ()):
        if isinstance(entry, dict):
            yield ("measures", index), entry


def _request(tree: YamlTree, at: KeyPath, entry: dict[str, Any], problems: list[Problem]) -> Request | None:
    """Return the request of an entry, or None after noting what is wrong with it."""
    known = len(problems)
    word = entry.get("measure")
    measure = _measure(tree, at, word, problems) if isinstance(word, str) else None
    cover = isinstance(measure, CoverMeasure)
    keys = COVER_KEYS if cover else REQUEST_KEYS
    own = {key: value for key, value in entry.items() if key not in keys}
    if measure and not cover:
        problems += _misplaced_keys(tree, at, measure, own)
    head = _validated(
        CoverHead if cover else RequestHead,
        tree,
        at,
        {key: entry[key] for key in keys if key in entry},
        problems,
    )
    options = _validated(measure.options, tree, at, own, problems, keys) if measure else None
    if head is None or options is None or len(problems) > known:
        return None
    try:
        if cover:
            request = CoverRequest(**dict(head), options=options)
            request.quantities()
            return request
        plain = MeasureRequest(**dict(head), options=options)
        plain.columns()
    except MeasureError as error:
        problems.append(tree.problem((*at, "measure"), str(error)))
        return None
    return plain


def _misplaced_keys(
    tree: YamlTree, at: KeyPath, measure: AnyMeasure, own: dict[str, Any]
) -> Iterator[Problem]:
    """Yield the keys of class maps that stand in the entry of a measure of lines, and take them out."""
    for key in set(COVER_KEYS) & set(own) - set(measure.options.model_fields):
        del own[key]
        said = f"the key {key!r} belongs to measures of class maps; {measure.name} measures lines"
        yield tree.problem((*at, key), said, on_key=True)


def _measure(tree: YamlTree, at: KeyPath, word: str, problems: list[Problem]) -> AnyMeasure | None:
    at = (*at, "measure")
    names = measure_names()
    if word not in names:
        near = near_match(word.replace("_", "-"), names)
        said = f"no measure {word!r} is installed"
        problems.append(tree.problem(at, said, allowed=", ".join(names), near=near))
        return None
    try:
        return load_any_measure(word)
    except MeasureError as error:
        problems.append(tree.problem(at, str(error)))
        return None


def _layers(tree: YamlTree) -> dict[str, Any]:
    layers = tree.data.get("layers")
    return layers if isinstance(layers, dict) else {}


def _layers_named(tree: YamlTree) -> Iterator[tuple[KeyPath, str]]:
    """Yield every place where a measure's entry names a layer."""
    for at, entry in _entries(tree):
        barriers = entry.get("barriers")
        places = [((*at, key), entry.get(key)) for key in ("of", "zones")]
        for place, said in enumerate(barriers if isinstance(barriers, list) else ()):
            path = (*at, "barriers", place)
            places.append(((*path, "layer"), said.get("layer")) if isinstance(said, dict) else (path, said))
        yield from ((path, name) for path, name in places if isinstance(name, str))


def _layer_name_problems(tree: YamlTree) -> Iterator[Problem]:
    """Yield layers asked for that are not there, and layers whose files would have one name."""
    layers = _layers(tree)
    for path, name in _layers_named(tree):
        if name not in layers:
            near = near_match(name, layers)
            said = f"no layer {name!r} is defined under layers"
            yield tree.problem(path, said, allowed=", ".join(layers), near=near)
    first: dict[str, str] = {}
    for name in layers:
        twin = first.setdefault(name.casefold(), name)
        if twin != name:
            said = f"the layers {twin!r} and {name!r} differ only by case, and so would their files"
            yield tree.problem(("layers", name), said, allowed="names that differ otherwise", on_key=True)


def _kind_problems(tree: YamlTree, requests: Mapping[KeyPath, Request]) -> Iterator[Problem]:
    """Yield class maps where a layer of lines or polygons is wanted, and the other way round."""
    layers = _layers(tree)
    vectors = ", ".join(name for name in layers if kind_of_layer(layers[name]) == "vector") or "none"
    rasters = ", ".join(name for name in layers if kind_of_layer(layers[name]) == "raster") or "none"
    asked: dict[tuple[str, str], dict[str | None, KeyPath]] = defaultdict(dict)
    for at, request in requests.items():
        is_map = kind_of_layer(layers.get(request.of)) == "raster"
        if isinstance(request, MeasureRequest):
            if is_map:
                said = f"{request.measure} measures lines; {request.of!r} is a class map"
                yield tree.problem((*at, "of"), said, allowed=vectors)
            continue
        earlier = asked[request.measure, request.of]
        if earlier and (request.prefix is None or request.prefix in earlier):
            line, _ = tree.values[earlier.get(request.prefix, next(iter(earlier.values())))]
            said = f"{request.measure} is asked of {request.of!r} already, at line {line}"
            allowed = "a prefix of its own, for the names of its files and columns"
            yield tree.problem((*at, "measure"), said, allowed=allowed)
        earlier.setdefault(request.prefix, at)
        if not is_map and request.of in layers:
            yield from _polygon_problems(tree, at, request, rasters)
        elif request.class_column is not None and is_map:
            said = f"{request.of!r} is a class map, which names its classes under layers"
            yield tree.problem((*at, "class-column"), said, on_key=True)
        named = [((*at, "zones"), request.zones)]
        named += [((*at, "barriers", place), one.layer) for place, one in enumerate(request.barriers)]
        for path, name in named:
            if name in layers and kind_of_layer(layers[name]) == "raster":
                yield tree.problem(path, f"{name!r} is a class map", allowed=vectors)


def _polygon_problems(tree: YamlTree, at: KeyPath, request: CoverRequest, rasters: str) -> Iterator[Problem]:
    """Yield what a measure of class maps cannot do with a layer of polygons."""
    measure = load_cover_measure(request.measure)
    if not measure.from_polygons:
        said = f"{request.measure} measures class maps; {request.of!r} is no raster"
        yield tree.problem((*at, "of"), said, allowed=rasters)
        return
    if not request.dissolve and (measure.dissolves or request.barriers):
        why = "barriers part" if request.barriers else f"{request.measure} takes"
        said = f"dissolve: false keeps polygons that touch apart; {why} those of a class as one"
        yield tree.problem((*at, "dissolve"), said, allowed="true")
    groups = _layers(tree)[request.of].get("groups")
    if groups and request.class_column is None:
        said = f"the groups of {request.of!r} are of classes, and no column names the class of a polygon"
        yield tree.problem((*at, "measure"), said, allowed="the key class-column beside it", on_key=True)


def _unused_layers(tree: YamlTree) -> Iterator[Problem]:
    used = {name for _, name in _layers_named(tree)}
    for name in _layers(tree):
        if name not in used:
            yield tree.problem(("layers", name), f"no measure uses the layer {name!r}", on_key=True)


def _clashes(tree: YamlTree, requests: Mapping[KeyPath, Request]) -> Iterator[Problem]:
    """Yield requests whose columns have names that an earlier request gives the same layer."""
    owners: dict[tuple[str | None, str, str], KeyPath] = {}
    for at, request in requests.items():
        if isinstance(request, CoverRequest):  # short names of these are numbered where they clash
            layer = request.zones
            names = [("column", one.column.name) for one in request.zone_columns()]
        else:
            layer = request.of
            columns = request.columns()
            names = [("column", column.name) for column in columns]
            names += [("short column name", column.short) for column in columns]
        shared = [key for key in names if owners.setdefault((layer, *key), at) != at]
        if shared:
            line, _ = tree.values[owners[layer, *shared[0]]]
            said = "{} has the {} {!r} already, from the measure at line {}".format(
                "this layer" if layer == request.of else f"the layer {layer!r}", *shared[0], line
            )
            yield tree.problem((*at, "measure"), said, allowed="a prefix that sets the two apart")
