"""What a model refuses, in plain words and placed in the file."""

from __future__ import annotations

import re
import types
from collections.abc import Collection, Iterable, Iterator, Sequence
from difflib import get_close_matches
from typing import Annotated, Any, Union, get_args, get_origin

from pydantic import BaseModel, Tag, ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

from geofractal.config.yaml_tree import KeyPath, YamlTree, described
from geofractal.errors import Problem

_ALLOWED = {
    "string_type": "text",
    "string_too_short": "text that is not empty",
    "string_too_long": "at most {max_length} characters",
    "path_type": "a path, as text",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "finite_number": "a finite number",
    "bool_type": "true or false",
    "tuple_type": "a list",
    "dict_type": "a mapping (key: value)",
    "model_type": "a mapping (key: value)",
    "greater_than": "more than {gt:g}",
    "greater_than_equal": "{ge:g} or more",
    "less_than": "less than {lt:g}",
    "less_than_equal": "{le:g} or less",
    "literal_error": "{expected}",
    "too_short": "at least {min_length} of them",
    "too_long": "at most {max_length} of them",
    "refused": "{allowed}",
}


def problems_in(
    error: ValidationError, model: type[BaseModel], tree: YamlTree, at: KeyPath = (), also: Sequence[str] = ()
) -> list[Problem]:
    """Return one problem for each place of the file that a model refuses.

    Parameters
    ----------
    error : what the model raised
    model : the model
    tree : the file
    at : where the model's mapping stands in it
    also : keys that the mapping may have besides the model's
    """
    grouped: dict[tuple[KeyPath, str], list[ErrorDetails]] = {}
    for details in error.errors(include_url=False):
        path = _place(details, tree, at)
        if details["type"] != "too_short" or len(tree.at(path)) < details["ctx"]["min_length"]:
            grouped.setdefault((path, _kind(details)), []).append(details)
    unknown, missing, refused = {}, {}, []
    for (path, kind), group in grouped.items():
        tags = {str(step) for details in group for step in details["loc"]}
        fields = dict(_fields(model, path[len(at) : -1], tags))
        if kind == "unknown":
            keys = [*fields] if len(path) > len(at) + 1 else [*also, *fields]
            unknown[path] = _unknown(tree, path, keys)
        elif kind == "missing":
            said = f"the key {path[-1]!r} is missing: {fields[str(path[-1])].description}"
            missing[path] = tree.problem(path, said)
        else:
            refused.append(_refused(tree, path, group, on_key=kind == "key"))
    meant = {(*path[:-1], problem.near) for path, problem in unknown.items()}
    return [*unknown.values(), *(problem for path, problem in missing.items() if path not in meant), *refused]


def near_match(word: str, words: Iterable[str]) -> str:
    """Return the word that was probably meant, or an empty text."""
    return next(iter(get_close_matches(word, list(words), n=1)), "")


def _place(details: ErrorDetails, tree: YamlTree, at: KeyPath) -> KeyPath:
    """Return the path of keys that an error speaks of, without the names of union members in it."""
    absent = details["loc"][-1:] if details["type"] == "missing" else ()
    path = at
    for step in details["loc"]:
        if (*path, step) in tree.values:
            path = (*path, step)
    return path + absent


def _kind(details: ErrorDetails) -> str:
    """Return whether an error speaks of an unknown or a missing key, of a key's name, or of a value."""
    if details["loc"][-1:] == ("[key]",):
        return "key"
    return {"extra_forbidden": "unknown", "missing": "missing"}.get(details["type"], "value")


def _unknown(tree: YamlTree, path: KeyPath, keys: Sequence[str]) -> Problem:
    key = str(path[-1])
    hyphened = key.replace("_", "-")
    said = f"keys are spelled with hyphens, not {key!r}" if hyphened in keys else f"unknown key {key!r}"
    near = near_match(hyphened.lower(), keys)
    return tree.problem(path, said, allowed=", ".join(keys), near=near, on_key=True)


def _refused(tree: YamlTree, path: KeyPath, group: Sequence[ErrorDetails], *, on_key: bool) -> Problem:
    value = path[-1] if on_key else tree.at(path)
    own = [str(details["ctx"]["error"]) for details in group if details["type"] == "value_error"]
    if own:  # a validator's own words say what is wrong, not what is allowed
        return tree.problem(path, "; ".join(own))
    allowed = " or ".join(dict.fromkeys(_words(details, value) for details in group))
    contexts = [details.get("ctx", {}) for details in group]
    choices = re.findall(r"'([^']*)'", " ".join(context.get("expected", "") for context in contexts))
    near = next(
        (context["near"] for context in contexts if "near" in context), near_match(str(value), choices)
    )
    return tree.problem(path, f"found {described(value)}", allowed=allowed, near=near, on_key=on_key)


def _words(details: ErrorDetails, value: Any) -> str:
    words = _ALLOWED.get(details["type"])
    if words is None:
        return details["msg"].removeprefix("Input should be ")
    if details["type"] == "string_type" and isinstance(value, bool | int | float):
        words += "; write it in quotes"
    return words.format_map(details.get("ctx", {}))


def _fields(model: Any, path: KeyPath, tags: Collection[str]) -> Iterator[tuple[str, FieldInfo]]:
    """Yield the keys of the mapping that stands at a path under a model; `tags` name the members met."""
    found = [model]
    for step in path:
        found = [inner for annotation in found for inner in _under(annotation, step, tags)]
    for annotation in found:
        for member in _members(annotation, tags):
            if isinstance(member, type) and issubclass(member, BaseModel):
                yield from ((field.alias or name, field) for name, field in member.model_fields.items())


def _under(annotation: Any, step: str | int, tags: Collection[str]) -> Iterator[Any]:
    for member in _members(annotation, tags):
        origin, arguments = get_origin(member), get_args(member)
        if origin is dict:
            yield arguments[1]
        elif origin is tuple:
            yield arguments[0]
        else:
            yield from (field.annotation for key, field in _fields(member, (), tags) if key == step)


def _members(annotation: Any, tags: Collection[str]) -> Iterator[Any]:
    """Yield the members of a union, of a tagged one those met, or the type itself."""
    if get_origin(annotation) in {Union, types.UnionType, Annotated}:
        tag = next((said.tag for said in get_args(annotation)[1:] if isinstance(said, Tag)), None)
        if tag is None or tag in tags:
            for argument in get_args(annotation):
                yield from _members(argument, tags)
    else:
        yield annotation
