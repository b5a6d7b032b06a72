"""A calibration for a user's own layer: curves of known dimension like the lines that it begins with."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from geofractal.calibration import Calibration, Settings, calibrate_like
from geofractal.errors import LayerError
from geofractal.reader.geometry import read_lines
from geofractal.reader.planes import Projector
from geofractal.reader.vector import layer_info, stream


def calibrate_layer(
    path: Path,
    settings: Settings,
    *,
    layer: str | None = None,
    crs: str | None = None,
    progress: Callable[[float], None] | None = None,
) -> Calibration:
    """Calibrate on curves like the lines of a layer's first part.

    Parameters
    ----------
    path, layer, crs : as in a batch file
    settings : its dimensions and vertices are replaced by the layer's own
    progress : called with the share that is done, 0 to 1

    Raises
    ------
    SourceError, LayerError
        as `geofractal.reader.vector.layer_info`, or there is no line to be like
    ConfigError
        no line has a dimension to imitate
    """
    info = layer_info(path, layer=layer, crs=crs)
    assert info.crs is not None  # layer_info refuses a layer without one
    for batch in stream(info):
        found = read_lines(batch.wkb)
        if len(found):
            chunks, _ = Projector(info.crs).lines(
                np.arange(len(found)), found.xy, found.part_offsets, found.feature_offsets, found.closed
            )
            if chunks:
                return calibrate_like(max(chunks, key=len), settings, progress=progress)
    raise LayerError(f"{path}: layer {info.layer!r} holds no line or polygon to calibrate for")
