"""The batch file: YAML in, frozen models out, every fault with its line and column, the JSON Schema."""

from geofractal.config.load import load_config, wrong_kinds
from geofractal.config.models import (
    Batch,
    CoverRequest,
    Format,
    MeasureRequest,
    Outputs,
    Prepare,
    Projection,
    RasterLayer,
    Run,
    VectorLayer,
)
from geofractal.config.schema import json_schema

__all__ = [
    "Batch",
    "CoverRequest",
    "Format",
    "MeasureRequest",
    "Outputs",
    "Prepare",
    "Projection",
    "RasterLayer",
    "Run",
    "VectorLayer",
    "json_schema",
    "load_config",
    "wrong_kinds",
]
