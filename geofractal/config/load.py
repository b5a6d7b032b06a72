"""A batch file read whole: everything that is wrong with it is found before anything is measured."""

from __future__ import annotations

import json
import os
import warnings
from collections.abc import Collection, Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, Field, ValidationError

from geofractal.config.models import Batch, BatchSections, MeasureRequest, RequestHead
from geofractal.config.wording import near_match, problems_in
from geofractal.config.yaml_tree import KeyPath, YamlTree, config_error, read_yaml
from geofractal.errors import GeofractalWarning, MeasureError, Problem
from geofractal.registry import REQUEST_KEYS, load_measure, measure_names

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
    problems += [*_layer_name_problems(tree), *_clashes(tree, requests)]
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
    usable = {"lines", "polygons", "collections", "curves", "unknown"}
    return [
        batch.problem(
            ("measures", index, "of"),
            f"{request.measure} measures lines; layer {request.of!r} holds {' and '.join(sorted(found))}",
            allowed="a layer of lines or polygons",
        )
        for index, request in enumerate(batch.measures)
        if (found := kinds.get(request.of)) and not usable & set(found)
    ]


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


def _request(
    tree: YamlTree, at: KeyPath, entry: dict[str, Any], problems: list[Problem]
) -> MeasureRequest | None:
    """Return the request of an entry, or None after noting what is wrong with it."""
    known = len(problems)
    word = entry.get("measure")
    measure = None
    if isinstance(word, str):
        measure = _measure(tree, at, word, problems)
    own = {key: value for key, value in entry.items() if key not in REQUEST_KEYS}
    head = _validated(
        RequestHead, tree, at, {key: entry[key] for key in REQUEST_KEYS if key in entry}, problems
    )
    options = _validated(measure.options, tree, at, own, problems, REQUEST_KEYS) if measure else None
    if head is None or options is None or len(problems) > known:
        return None
    request = MeasureRequest(**dict(head), options=options)
    try:
        request.columns()
    except MeasureError as error:
        problems.append(tree.problem((*at, "measure"), str(error)))
        return None
    return request


def _measure(tree: YamlTree, at: KeyPath, word: str, problems: list[Problem]) -> Any:
    at = (*at, "measure")
    names = measure_names()
    if word not in names:
        near = near_match(word.replace("_", "-"), names)
        said = f"no measure {word!r} is installed"
        problems.append(tree.problem(at, said, allowed=", ".join(names), near=near))
        return None
    try:
        return load_measure(word)
    except MeasureError as error:
        problems.append(tree.problem(at, str(error)))
        return None


def _layers(tree: YamlTree) -> dict[str, Any]:
    layers = tree.data.get("layers")
    return layers if isinstance(layers, dict) else {}


def _layer_name_problems(tree: YamlTree) -> Iterator[Problem]:
    """Yield measures of layers that are not there, and layers whose files would have one name."""
    layers = _layers(tree)
    for at, entry in _entries(tree):
        name = entry.get("of")
        if isinstance(name, str) and name not in layers:
            near = near_match(name, layers)
            said = f"no layer {name!r} is defined under layers"
            yield tree.problem((*at, "of"), said, allowed=", ".join(layers), near=near)
    first: dict[str, str] = {}
    for name in layers:
        twin = first.setdefault(name.casefold(), name)
        if twin != name:
            said = f"the layers {twin!r} and {name!r} differ only by case, and so would their files"
            yield tree.problem(("layers", name), said, allowed="names that differ otherwise", on_key=True)


def _unused_layers(tree: YamlTree) -> Iterator[Problem]:
    used = {entry.get("of") for _, entry in _entries(tree)}
    for name in _layers(tree):
        if name not in used:
            yield tree.problem(("layers", name), f"no measure uses the layer {name!r}", on_key=True)


def _clashes(tree: YamlTree, requests: Mapping[KeyPath, MeasureRequest]) -> Iterator[Problem]:
    """Yield requests whose columns have names that an earlier request gives the same layer."""
    owners: dict[tuple[str, str, str], KeyPath] = {}
    for at, request in requests.items():
        columns = request.columns()
        names = [("column", column.name) for column in columns]
        names += [("short column name", column.short) for column in columns]
        shared = [key for key in names if owners.setdefault((request.of, *key), at) != at]
        if shared:
            line, _ = tree.values[owners[request.of, *shared[0]]]
            said = "this layer has the {} {!r} already, from the measure at line {}".format(*shared[0], line)
            yield tree.problem((*at, "measure"), said, allowed="a prefix that sets the two apart")
