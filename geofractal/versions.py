"""Versions of everything a result depends on, and the hash that stands for our own code."""

from __future__ import annotations

import hashlib
import platform
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

_LIBRARIES = (
    "geofractal",
    "numba",
    "numpy",
    "pyarrow",
    "pyogrio",
    "pyproj",
    "rasterio",
    "scipy",
    "shapely",
)


def show_versions() -> dict[str, str]:
    """Return the versions of Python, the libraries and the native code beneath them, by name."""
    import pyogrio
    import pyproj
    import shapely

    found = {"python": platform.python_version(), "platform": platform.platform()}
    found |= {name: _installed(name) for name in _LIBRARIES}
    return found | {
        "gdal (vectors)": pyogrio.__gdal_version_string__,
        "geos": shapely.geos_version_string,
        "proj": pyproj.proj_version_str,
    }


def _installed(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:
        return "not installed"


@cache
def code_digest() -> str:
    """Return a hash of the package's sources, part of every content key: other code, other key."""
    digest = hashlib.blake2b(digest_size=16)
    root = Path(__file__).parent
    for path in sorted(root.rglob("*.py")):
        digest.update(path.relative_to(root).as_posix().encode())
        digest.update(path.read_bytes())
    for name in _LIBRARIES[1:]:
        digest.update(f"{name} {_installed(name)}".encode())
    return digest.hexdigest()
