"""Fragmentation as a table: the Python API."""

from __future__ import annotations

import warnings
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from pydantic import ValidationError

from geofractal.cover_map import RasterCover
from geofractal.errors import ConfigError, GeofractalWarning, LayerError
from geofractal.estimators.fragmentation import Fragmentation, FragmentationOptions
from geofractal.landcover.barriers import BARRIER, place_barriers
from geofractal.landcover.polygon_zones import place_polygon_barriers, place_polygon_zones
from geofractal.landcover.polygons import class_name
from geofractal.landcover.zones import place_zones
from geofractal.patches import open_class_map
from geofractal.polygon_cover import PolygonCover

if TYPE_CHECKING:
    import pandas as pd

    from geofractal.patches import RasterLike
    from geofractal.reader.raster import RasterOptions
    from geofractal.reader.raster_classes import Legend


def fragmentation(
    source: RasterLike | Any,
    *,
    zones: Any = None,
    zone_names: str | Sequence[Any] | None = None,
    barriers: Any = None,
    barrier_width_m: float | Sequence[float | None] | None = None,
    groups: Mapping[str, Sequence[str]] | None = None,
    covers: Sequence[str] = (),
    reading: RasterOptions | None = None,
    cover: str | Sequence[Any] | None = None,
    extent: Any = None,
    **options: Any,
) -> pd.DataFrame:
    """Return how classes and habitat groups are broken up, for each zone and for the whole map.

    Parameters
    ----------
    source : a raster, as a path or as codes with transform and CRS; or a GeoDataFrame or GeoSeries of
        polygons, which are held at once and whose figures come from their exact boundaries; those that
        need cells are null
    zones : GeoDataFrame or GeoSeries of polygons in any CRS, or a sequence of shapely polygons in the
        source's own; cells belong to them by their centre, polygons are cut. They may overlap
    zone_names : column of a GeoDataFrame, or one name a zone; numbers from 1 where left out
    barriers : lines, given as zones are: links between neighbouring cells whose centre line they cross are
        cut; polygons are parted by them
    barrier_width_m : width of the barriers, one for all or one for each (None or 0: no width). Polygons less
        the strip of that width, and cells whose centre lies within half of it, are of no class but stay in
        the area with data, as the cover ``barrier``; they bound other classes as another class does: edges
        to them are class changes, and interior depth counts from them. A barrier narrower than a cell takes
        a cell here and there, and cuts all the same
    groups : name of a group -> its classes; each is measured as one class
    covers : classes and groups wanted; all of them where left out
    reading : how to read a raster
    cover : of polygons, the column or the values that name the class of each; None for one class
    extent : of polygons, the area mapped: patches that reach its boundary touch the edge of the data
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
        as `geofractal.raster_patches`, or there is no way from the zones' CRS to the source's

    Examples
    --------
    Two patches of 8 cells on 16 make meshes of 8 x 8 / 16 cells each.

    >>> codes = np.repeat([[1, 1, 2, 2]], 4, axis=0)
    >>> found = fragmentation((codes, (1000, 0, 0, 0, -1000, 0), 'LOCAL_CS["plane",UNIT["metre",1]]'))
    >>> found[found["quantity"] == "effective_mesh_size"]["estimate"].unique().tolist()
    [4.0]
    """
    try:
        chosen = FragmentationOptions(**{key: _frozen(value) for key, value in options.items()})
    except ValidationError as error:
        raise ConfigError(f"fragmentation: {error}") from None
    if barriers is None and barrier_width_m is not None:
        raise ConfigError("barrier_width_m goes with barriers, the lines whose width it is.")
    names = () if zones is None else tuple(map(str, _names(zones, zone_names)))
    taken = {name: tuple(members) for name, members in (groups or {}).items()}
    if hasattr(source, "geometry"):
        layer = _polygon_layer(source, cover, zones, names, barriers, barrier_width_m)
        layer = replace(layer, extent=extent, groups=taken, covers=tuple(covers))
        depths = _bounding(chosen, barred=layer.barriers is not None and layer.barriers.wide)
        known = dict.fromkeys(name for name in layer.classes if name is not None)
        _refuse_twins(known, taken)
        for key, name in _strangers(known, taken, covers, depths):
            there = f"no polygon is of class {name!r}; there are {', '.join(known)}"
            warnings.warn(f"{key}: {there}", GeofractalWarning, stacklevel=2)
        return Fragmentation().measure(layer, chosen).figures
    opened = open_class_map(source, reading, {})
    own, grid = opened.source_grid.crs, opened.grid
    placed = None if zones is None else place_zones(grid, _geometries(zones), names, _crs(zones, own))
    lines = None
    if barriers is not None:
        lines = place_barriers(grid, _geometries(barriers), _crs(barriers, own), barrier_width_m)
    _check_names(opened.legend, taken, covers, _bounding(chosen, barred=lines is not None and lines.wide))
    return Fragmentation().measure(RasterCover(opened, placed, lines, taken, tuple(covers)), chosen).figures


def _check_names(
    legend: Legend, groups: Mapping[str, Sequence[str]], covers: Iterable[str], neighbours: Iterable[str]
) -> None:
    """Refuse names of classes that the raster cannot have, and groups named as classes."""
    known = list(legend.names if legend.closed else dict.fromkeys(legend.own_names.values()))
    free = not legend.closed and not known  # names are the codes that will be met
    for key, name in _strangers(known, groups, covers, neighbours):
        if not (free and name.lstrip("-").isdigit()):
            there = ", ".join(known) or "codes as text, such as '1'"
            raise ConfigError(f"{key}: the raster has no class {name!r}; there are {there}.")
    _refuse_twins(known, groups)


def _strangers(
    known: Collection[str],
    groups: Mapping[str, Sequence[str]],
    covers: Iterable[str],
    neighbours: Iterable[str],
) -> Iterator[tuple[str, str]]:
    """Yield names of classes that are not known, after the option that names them."""
    asked = {"groups": [name for members in groups.values() for name in members]}
    asked |= {
        "covers": [name for name in covers if name not in groups],
        "depth_by_neighbour_m": [*neighbours],
    }
    yield from ((key, name) for key, names in asked.items() for name in names if name not in known)


def _refuse_twins(known: Collection[str], groups: Iterable[str]) -> None:
    if both := sorted(set(groups).intersection(known)):
        raise ConfigError(f"groups: {both[0]!r} is the name of a class already; choose another one.")


def _bounding(options: FragmentationOptions, *, barred: bool) -> list[str]:
    """Return the classes that a depth is stated from; barriers that take cells are one."""
    return [name for name in options.depth_by_neighbour_m if not (barred and name == BARRIER)]


def _polygon_layer(
    source: Any,
    cover: str | Sequence[Any] | None,
    zones: Any,
    names: tuple[str, ...],
    barriers: Any,
    width: Any,
) -> PolygonCover:
    """Return polygons with their classes, and zones and barriers in their CRS."""
    import pandas as pd
    import pyproj

    if source.crs is None:
        raise LayerError("The polygons carry no CRS; give it with set_crs.")
    own = pyproj.CRS.from_user_input(source.crs)
    column = ["all"] * len(source) if cover is None else source[cover] if isinstance(cover, str) else cover
    polygons = np.array([*source.geometry, None], object)[:-1]
    placed = lines = None
    if zones is not None:
        placed = place_polygon_zones(_geometries(zones), names, _crs(zones, own), polygons, own)
    if barriers is not None:
        lines = place_polygon_barriers(_geometries(barriers), _crs(barriers, own), own, width)
    told = [None if pd.isna(value) else class_name(value) for value in column]
    classes = np.array([*told, None], object)[:-1]
    return PolygonCover(polygons, classes, own, zones=placed, barriers=lines)


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
