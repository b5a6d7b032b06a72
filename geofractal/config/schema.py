"""The JSON Schema of batch files, for editors that complete and check."""

from __future__ import annotations

from typing import Any

from pydantic import BaseModel

from geofractal.config.models import Batch, BatchSections, CoverHead, RequestHead
from geofractal.measure import CoverMeasure
from geofractal.registry import AnyMeasure, load_measures

DRAFT = "http://json-schema.org/draft-07/schema#"


def json_schema() -> dict[str, Any]:
    """Return the schema of batch files, with every installed measure and its options.

    Draft-07, the latest that editors read.
    """
    definitions: dict[str, Any] = {}
    batch = _schema_of(BatchSections, definitions)
    entries = [_entry(measure, definitions) for measure in load_measures().values()]
    batch["properties"]["measures"] = {
        "description": "what is measured, of which layer",
        "type": "array",
        "minItems": 1,
        "items": {"oneOf": entries, "discriminator": {"propertyName": "measure"}},
    }
    batch["required"].append("measures")
    head = {"$schema": DRAFT, "title": "geofractal batch file", "description": Batch.__doc__}
    tidied: dict[str, Any] = _tidied({**batch, "definitions": definitions})
    return {**head, **tidied, **head}  # the head first, and in its own words


def _entry(measure: AnyMeasure, definitions: dict[str, Any]) -> dict[str, Any]:
    """Return the schema of one measure's entry: the keys of every entry, then its own options."""
    head = _schema_of(CoverHead if isinstance(measure, CoverMeasure) else RequestHead, definitions)
    own = _schema_of(measure.options, definitions, f"{measure.name}.")
    word = {"const": measure.name, "description": measure.title}
    return {
        "type": "object",
        "description": measure.title,
        "properties": {**head["properties"], "measure": word, **own.get("properties", {})},
        "required": [*head["required"], *own.get("required", [])],
        "additionalProperties": False,
    }


def _schema_of(model: type[BaseModel], definitions: dict[str, Any], prefix: str = "") -> dict[str, Any]:
    """Return a model's schema; what it refers to goes to `definitions`."""
    schema = model.model_json_schema(by_alias=True, ref_template=f"#/definitions/{prefix}{{model}}")
    definitions |= {prefix + name: inner for name, inner in schema.pop("$defs", {}).items()}
    return schema


def _tidied(node: Any) -> Any:
    """Return a schema without made-up titles, in draft-07, where nothing may stand beside a reference."""
    if isinstance(node, list):
        return [_tidied(item) for item in node]
    if not isinstance(node, dict):
        return node
    tidy = {
        key: _tidied(value) for key, value in node.items() if not (key == "title" and isinstance(value, str))
    }
    if "patternProperties" in tidy:
        tidy["additionalProperties"] = False
    if "oneOf" in tidy and "discriminator" not in tidy:  # a layer's key may fit both kinds
        tidy["anyOf"] = tidy.pop("oneOf")
    if "$ref" in tidy and len(tidy) > 1:
        tidy["allOf"] = [{"$ref": tidy.pop("$ref")}]
    return tidy
