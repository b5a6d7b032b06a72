"""Shape figures across scales for shorelines, rivers, land cover and basins.

Everything named in ``__all__`` is loaded when it is first asked for, so that ``import geofractal`` is quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from geofractal.api import box_dimension, box_ladder, divider_dimension, divider_ladder, run, sinuosity
    from geofractal.cover_api import fragmentation
    from geofractal.estimators.area_perimeter import area_perimeter_dimension, area_perimeter_residual
    from geofractal.estimators.number_area import number_area_exponent
    from geofractal.patches import polygon_patches, raster_patches, warping_effect
    from geofractal.versions import show_versions

__all__ = [
    "area_perimeter_dimension",
    "area_perimeter_residual",
    "box_dimension",
    "box_ladder",
    "divider_dimension",
    "divider_ladder",
    "fragmentation",
    "number_area_exponent",
    "polygon_patches",
    "raster_patches",
    "run",
    "show_versions",
    "sinuosity",
    "warping_effect",
]

_HOMES = {
    "area_perimeter_dimension": "geofractal.estimators.area_perimeter",
    "area_perimeter_residual": "geofractal.estimators.area_perimeter",
    "box_dimension": "geofractal.api",
    "box_ladder": "geofractal.api",
    "divider_dimension": "geofractal.api",
    "divider_ladder": "geofractal.api",
    "fragmentation": "geofractal.cover_api",
    "number_area_exponent": "geofractal.estimators.number_area",
    "polygon_patches": "geofractal.patches",
    "raster_patches": "geofractal.patches",
    "run": "geofractal.api",
    "show_versions": "geofractal.versions",
    "sinuosity": "geofractal.api",
    "warping_effect": "geofractal.patches",
}


def __getattr__(name: str) -> Any:
    """Load a public name from its home."""
    if name not in _HOMES:
        raise AttributeError(f"module 'geofractal' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    """Return the public names."""
    return sorted(__all__)
