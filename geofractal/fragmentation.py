"""Fragmentation as a table: the Python API."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from pydantic import ValidationError

from geofractal.cover_map import RasterCover
from geofractal.errors import ConfigError
from geofractal.estimators.fragmentation import Fragmentation, FragmentationOptions
from geofractal.landcover.barriers import place_barriers
from geofractal.landcover.zones import place_zones
from geofractal.patches import open_class_map

if TYPE_CHECKING:
    import pandas as pd

    from geofractal.patches import RasterLike
    from geofractal.reader.raster import RasterOptions


def fragmentation(
    raster: RasterLike,
    *,
    zones: Any = None,
    zone_names: str | Sequence[Any] | None = None,
    barriers: Any = None,
    groups: Mapping[str, Sequence[str]] | None = None,
    covers: Sequence[str] = (),
    reading: RasterOptions | None = None,
    **options: Any,
) -> pd.DataFrame:
    """Return how classes and habitat groups are broken up, for each zone and for the whole map.

    Parameters
    ----------
    raster : a path, or codes with transform and CRS
    zones : GeoDataFrame or GeoSeries of polygons in any CRS, or a sequence of shapely polygons in the
        raster's own; cells belong to them by their centre. They may overlap
    zone_names : column of a GeoDataFrame, or one name a zone; numbers from 1 where left out
    barriers : lines, given as zones are: links between neighbouring cells whose centre line they cross are
        cut
    groups : name of a group -> its classes; each is measured as one class
    covers : classes and groups wanted; all of them where left out
    reading : how to read the raster
    **options : of `geofractal.estimators.fragmentation.FragmentationOptions`

    Returns
    -------
    DataFrame
        ``reporting_unit`` (zone, or ``whole map``), ``cover``, ``quantity``, ``border_rule``,
        ``cell_size_m``, ``estimate``, ``low``, ``high``, ``unit``, ``note``: why a figure is missing or
        limited. A zone that cannot be measured has one row, whose note says why.

    Raises
    ------
    ConfigError
        an option is wrong, or zones share a name
    SourceError, LayerError
        as `geofractal.raster_patches`, or there is no way from the zones' CRS to the raster's

    Examples
    --------
    Two patches of 8 cells on 16 make meshes of 8 cells.

    >>> codes = np.repeat([[1, 1, 2, 2]], 4, axis=0)
    >>> found = fragmentation((codes, (1000, 0, 0, 0, -1000, 0), 'LOCAL_CS["plane",UNIT["metre",1]]'))
    >>> found[found["quantity"] == "effective_mesh_size"]["estimate"].unique().tolist()
    [4.0]
    """
    opened = open_class_map(raster, reading, {})
    try:
        chosen = FragmentationOptions(**{key: _frozen(value) for key, value in options.items()})
    except ValidationError as error:
        raise ConfigError(f"fragmentation: {error}") from None
    placed = (
        None
        if zones is None
        else place_zones(
            opened.grid, _geometries(zones), _names(zones, zone_names), _crs(zones, opened.source_grid.crs)
        )
    )
    lines = (
        None
        if barriers is None
        else place_barriers(opened.grid, _geometries(barriers), _crs(barriers, opened.source_grid.crs))
    )
    taken = {name: tuple(members) for name, members in (groups or {}).items()}
    return Fragmentation().measure(RasterCover(opened, placed, lines, taken, tuple(covers)), chosen).figures


def _frozen(value: Any) -> Any:
    return tuple(value) if isinstance(value, list | np.ndarray) else value


def _geometries(layer: Any) -> list[Any]:
    return list(getattr(layer, "geometry", layer))


def _crs(layer: Any, default: Any) -> Any:
    """Return the CRS of a layer: its own; the raster's for a plain sequence; None where a frame has none."""
    import pyproj

    if not hasattr(layer, "geometry"):
        return default
    return None if layer.crs is None else pyproj.CRS.from_user_input(layer.crs)


def _names(layer: Any, names: str | Sequence[Any] | None) -> list[Any]:
    if names is None:
        return list(range(1, len(layer) + 1))
    found = list(layer[names] if isinstance(names, str) else names)
    if len(found) != len(layer):
        raise ConfigError(f"zone_names has {len(found)} names for {len(layer)} zones.")
    return found
