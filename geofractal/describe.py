"""What a measure is, from its own metadata: for the command line and the tables of the guide."""

from __future__ import annotations

import json
from dataclasses import asdict
from typing import Any

from geofractal.measure import CoverMeasure, LadderMeasure
from geofractal.registry import AnyMeasure


def as_dict(measure: AnyMeasure) -> dict[str, Any]:
    """Return a measure's word, title, formula, sources, options and columns as plain data.

    The columns (of a measure of class maps: the quantities) are those under default options, None where an
    option has no default. Columns of a ladder table are those that follow the row and its name.
    """
    held = "quantities" if isinstance(measure, CoverMeasure) else "columns"
    told = {
        "measure": measure.name,
        "title": measure.title,
        "formula": measure.formula,
        "sources": list(measure.sources),
        "needs": measure.needs,
        "version": measure.version,
        "options": _options(measure),
        held: _by_default(measure),
    }
    if isinstance(measure, LadderMeasure):
        told["ladder_columns"] = [asdict(column) for column in measure.ladder_columns]
    return told


def as_lines(measure: AnyMeasure) -> list[str]:
    """Return the same as text."""
    told = as_dict(measure)
    text = [f"{told['measure']}: {told['title']}", f"  formula: {told['formula']}"]
    text += [f"  source: {source}" for source in told["sources"]]
    text += [f"  version: {told['version']}; measures {told['needs']}", "  options:"]
    for option in told["options"]:
        default = "required" if option["required"] else f"default {json.dumps(option['default'])}"
        text.append(f"    {option['key']} ({option['type']}; {default}): {option['meaning']}")
    if not told["options"]:
        text.append("    none")
    held = "quantities" if "quantities" in told else "columns"
    text.append(f"  {held}, under default options:")
    text += [_column_line(column) for column in told[held] or ()]
    if "ladder_columns" in told:
        text.append("  columns of its table with ladder-table, one row a feature and rung:")
        text += [_column_line(column) for column in told["ladder_columns"]]
    return [*text, ""]


def _column_line(column: dict[str, Any]) -> str:
    unit = f", {column['unit']}" if column["unit"] else ""
    return f"    {column['name']} ({column['short']}; {column['kind']}{unit}): {column['meaning']}"


def _options(measure: AnyMeasure) -> list[dict[str, Any]]:
    schema = measure.options.model_json_schema(by_alias=True)
    return [
        {
            "key": key,
            "type": _type_text(part),
            "required": key in schema.get("required", ()),
            "default": part.get("default"),
            "meaning": part["description"],
        }
        for key, part in schema["properties"].items()
    ]


def _type_text(schema: dict[str, Any]) -> str:
    """Return a schema's type in a few words."""
    if "anyOf" in schema:
        return " or ".join(dict.fromkeys(_type_text(member) for member in schema["anyOf"]))
    if "enum" in schema:
        return " or ".join(map(str, schema["enum"]))
    if "const" in schema:
        return str(schema["const"])
    if schema.get("type") == "array":
        return f"list of {_type_text(schema['items'])}"
    names = {"integer": "whole number", "string": "text", "boolean": "true or false", "object": "mapping"}
    kind = schema.get("type", "mapping")
    return names.get(kind, str(kind))


def _by_default(measure: AnyMeasure) -> list[dict[str, Any]] | None:
    """Return columns or quantities under default options."""
    if any(field.is_required() for field in measure.options.model_fields.values()):
        return None
    if isinstance(measure, CoverMeasure):
        return [asdict(quantity) for quantity in measure.quantities(measure.options())]
    return [asdict(column) for column in measure.columns(measure.options())]
