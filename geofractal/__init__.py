"""Shape figures across scales for shorelines, rivers, land cover and basins.

Everything named in ``__all__`` is loaded when it is first asked for, so that ``import geofractal`` is quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from geofractal.api import divider_dimension, run, sinuosity
    from geofractal.versions import show_versions

__all__ = ["divider_dimension", "run", "show_versions", "sinuosity"]

_HOMES = {
    "divider_dimension": "geofractal.api",
    "run": "geofractal.api",
    "show_versions": "geofractal.versions",
    "sinuosity": "geofractal.api",
}


def __getattr__(name: str) -> Any:
    """Load a public name from its home."""
    if name not in _HOMES:
        raise AttributeError(f"module 'geofractal' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    """Return the public names."""
    return sorted(__all__)
