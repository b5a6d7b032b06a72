"""A batch file to start from, for layers that were inspected."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Sequence
from pathlib import Path

from geofractal.batch.inspect import LayerReport
from geofractal.errors import OutputError

HEAD = """\
# yaml-language-server: $schema=./geofractal.schema.json
# $schema: ./geofractal.schema.json
# Write the schema beside this file with: geofractal schema geofractal.schema.json
"""


def write_starter(target: Path, layers: Sequence[LayerReport]) -> None:
    """Write a batch file that measures every layer that can be measured.

    Raises
    ------
    OutputError
        The file is there already, cannot be written, or there is no layer to measure.
    """
    measurable = [layer for layer in layers if layer.measurable]
    if not measurable:
        raise OutputError(f"{target}: not written, since no layer can be measured")
    try:
        with target.open("x", encoding="utf-8") as file:
            file.write(starter_text(target.absolute().parent, measurable))
    except FileExistsError as error:
        raise OutputError(f"{target}: is there already; name a new file") from error
    except OSError as error:
        raise OutputError(f"{target}: cannot be written: {error.strerror}") from error


def starter_text(folder: Path, layers: Sequence[LayerReport]) -> str:
    """Return the text of a batch file that stands in `folder`."""
    names = _names(layers)
    text = [HEAD, "batch: first look", "", "layers:"]
    for name, layer in zip(names, layers, strict=True):
        text += _layer_lines(name, layer, folder)
    text += ["", "measures:"]
    for name, layer in zip(names, layers, strict=True):
        text.append(f"  - {{measure: divider-dimension, of: {name}}}")
        if layer.kinds.get("lines"):
            text.append(f"  - {{measure: sinuosity, of: {name}}}")
    return "\n".join([*text, "", "outputs: {folder: out, formats: [geopackage]}", ""])


def _layer_lines(name: str, layer: LayerReport, folder: Path) -> list[str]:
    source = Path(os.path.relpath(layer.path.absolute(), folder)).as_posix()
    text = [f"  {name}:", f"    source: {_quoted(source)}", f"    layer: {_quoted(layer.layer)}"]
    if layer.crs is None:
        text.append("    # crs: EPSG:....   the layer states none, and cannot be measured without")
    if layer.columns:
        text.append(f"    # id, group-by and where may name: {', '.join(map(_quoted, layer.columns))}")
    return text


def _names(layers: Sequence[LayerReport]) -> list[str]:
    """Return a name for each layer, all different, of letters, digits, underscores and hyphens."""
    names: list[str] = []
    for layer in layers:
        base = re.sub(r"[^\w-]+", "_", layer.layer).strip("_")[:40] or "layer"
        base = base if base[0].isalpha() else f"layer_{base}"
        taken = {name.casefold() for name in names}
        tries = (base, *(f"{base}_{number}" for number in range(2, len(layers) + 2)))
        names.append(next(name for name in tries if name.casefold() not in taken))
    return names


def _quoted(text: str) -> str:
    """Return a text as YAML reads it back."""
    return json.dumps(text, ensure_ascii=False)
