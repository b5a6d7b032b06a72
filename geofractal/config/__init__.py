"""The batch file: YAML in, frozen models out, every fault with its line and column, the JSON Schema."""

from geofractal.config.load import load_config, wrong_kinds
from geofractal.config.models import (
    Batch,
    Format,
    MeasureRequest,
    Outputs,
    Prepare,
    Projection,
    Run,
    VectorLayer,
)
from geofractal.config.schema import json_schema
from geofractal.config.yaml_tree import KeyPath, config_error

__all__ = [
    "Batch",
    "Format",
    "KeyPath",
    "MeasureRequest",
    "Outputs",
    "Prepare",
    "Projection",
    "Run",
    "VectorLayer",
    "config_error",
    "json_schema",
    "load_config",
    "wrong_kinds",
]
