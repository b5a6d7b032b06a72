"""Patches of class maps and of polygon layers as tables: the Python API of land-cover shapes."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError, LayerError
from geofractal.landcover.labelling import PatchTable, label_patches
from geofractal.landcover.perimeter import Outline, Perimeter, area_m2
from geofractal.landcover.strips import Strip
from geofractal.reader.raster import Raster, RasterOptions, open_raster
from geofractal.reader.raster_source import ClassMap, Path

if TYPE_CHECKING:
    import pandas as pd

    from geofractal.landcover.polygons import PolygonPatches

RasterLike = Path | ClassMap | tuple[NDArray[Any], Any, Any]
"""A path that GDAL reads, a `ClassMap`, or (codes, transform, crs)."""


def raster_patches(
    raster: RasterLike,
    *,
    neighbours: int = 8,
    perimeter: Outline = "cell-edges",
    map_edge: bool = True,
    zones: NDArray[Any] | None = None,
    geometry: bool = False,
    options: RasterOptions | None = None,
    **reading: Any,
) -> pd.DataFrame:
    """Return the patches of a class map: connected cells of one class, one row a patch.

    A map of the whole globe ends at its sides: patches are not joined across them.

    Parameters
    ----------
    raster : a path, or codes with transform and CRS
    neighbours : 4 (cells that share an edge are one patch) or 8 (or a corner)
    perimeter : ``cell-edges`` (holes included), ``outer-cell-edges`` or ``smoothed``; see
        `geofractal.landcover.perimeter.Perimeter`
    map_edge : whether the map's edge and that of cells not covered count in the perimeter
    zones : (rows, columns) zone numbers on the grid measured on, -1 in none; patches go across zones
    geometry : whether to give a GeoDataFrame with the polygons of the patches, along cell edges, in the CRS
        of the grid measured on; not together with zones
    options, **reading : how to read it; the names are those of `geofractal.reader.raster.RasterOptions`

    Returns
    -------
    DataFrame
        ``cover`` (class name), ``cells``, ``area_m2`` (ellipsoidal), ``perimeter_m``, ``touches_edge``
        (shares an edge with the map's edge or a cell without data), ``zone`` where zones were given (-1
        in none, -2 in several), the bounding box ``first_row``, ``last_row``, ``left_column``,
        ``right_column`` (inclusive) and ``first_column``, the column of the first cell. With outer cell
        edges also ``filled_area_m2`` and ``holes``. In the order of first cells, row by row.
        ``attrs`` says where it was measured: ``grid``, ``distortion``, ``cell_width_m``,
        ``cell_height_m``, ``crs``.

    Raises
    ------
    SourceError, LayerError, ConfigError
        as `geofractal.reader.raster.open_raster`

    Examples
    --------
    A map without any covered cell gives a table without rows.

    >>> codes = np.array([[1, 1, 2], [2, 1, 2], [2, 2, 1]])
    >>> raster_patches((codes, (10, 0, 0, 0, -10, 0), 'LOCAL_CS["plane",UNIT["metre",1]]')).cells.tolist()
    [4, 5]
    """
    convention = Perimeter(perimeter, map_edge)
    opened = open_class_map(raster, options, reading)
    if zones is not None and geometry:
        raise ConfigError("geometry and zones exclude each other: patches go across zones.")
    strips = opened.strips() if zones is None else with_zones(opened, zones)
    frames = patch_frames(opened, strips, convention, neighbours, zoned=zones is not None, geometry=geometry)
    return _joined(list(frames), opened)


def patch_frames(
    raster: Raster,
    strips: Iterable[Strip],
    convention: Perimeter,
    neighbours: int = 8,
    *,
    zoned: bool = False,
    geometry: bool = False,
) -> Iterator[pd.DataFrame]:
    """Yield patches as tables while the map is read, by last row, then by first cell."""
    from geofractal.landcover.outlines import patch_polygons

    outlines = convention.follows_outlines
    for found in label_patches(strips, neighbours=neighbours, outlines=outlines, runs=geometry):
        frame = patch_frame(found.patches, raster, convention, zoned=zoned)
        if found.runs is not None:
            frame["geometry"] = patch_polygons(found.runs, len(frame), raster.grid.transform)
        yield frame


def open_class_map(raster: RasterLike, options: RasterOptions | None, reading: Mapping[str, Any]) -> Raster:
    """Return a raster opened with options and single ones on top of them."""
    known = RasterOptions.__dataclass_fields__
    for key in reading:
        if key not in known:
            raise ConfigError(
                f"There is no option {key!r} for reading a raster; there are {', '.join(known)}."
            )
    source = ClassMap(*raster) if isinstance(raster, tuple) else raster
    return open_raster(source, replace(options or RasterOptions(), **reading))


def with_zones(raster: Raster, zones: NDArray[Any]) -> Iterator[Strip]:
    """Yield the strips of a raster with the zones of its cells."""
    shape = (raster.grid.rows, raster.grid.columns)
    if zones.shape != shape:
        raise ConfigError(f"zones has the shape {zones.shape}; the grid measured on has {shape}.")
    for strip in raster.strips():
        part = zones[strip.first_row : strip.first_row + strip.rows]
        yield replace(strip, zones=np.ascontiguousarray(part, dtype=np.int32))


def patch_frame(
    patches: PatchTable, raster: Raster, convention: Perimeter, *, zoned: bool = False
) -> pd.DataFrame:
    """Return patches as a table in metres, in the order they came."""
    import pandas as pd

    columns: dict[str, Any] = {"cover": _names(raster, patches["class"])}
    if zoned:
        columns["zone"] = patches["zone"]
    columns |= {
        "cells": patches["cells"],
        "area_m2": area_m2(patches, raster.grid),
        "perimeter_m": convention.metres(patches, raster.grid),
        "touches_edge": patches["border_edge"] > 0,
    }
    if convention.follows_outlines:
        columns["filled_area_m2"] = patches["filled_area"] * raster.grid.area_unit_m2
        columns["holes"] = patches["holes"]
    for name in ("first_row", "first_column", "last_row", "left_column", "right_column"):
        columns[name] = patches[name]
    return pd.DataFrame(columns)


def _names(raster: Raster, classes: NDArray[np.int64]) -> Any:
    """Return class names as a categorical, whose categories are all classes met so far."""
    import pandas as pd

    return pd.Categorical.from_codes(classes, categories=pd.Index(raster.legend.names, dtype=str))


def _joined(frames: list[pd.DataFrame], raster: Raster) -> pd.DataFrame:
    import pandas as pd

    names = pd.Index(raster.legend.names, dtype=str)
    for frame in frames:
        frame["cover"] = frame["cover"].cat.set_categories(names)
    table = pd.concat(frames, ignore_index=True).sort_values(["first_row", "first_column"], ignore_index=True)
    width, height = raster.grid.typical_cell
    if "geometry" in table:
        import geopandas as gpd

        table = gpd.GeoDataFrame(table, geometry="geometry", crs=raster.grid.crs)
    table.attrs |= {
        "grid": raster.grid.plane,
        "distortion": raster.grid.distortion,
        "cell_width_m": width,
        "cell_height_m": height,
        "crs": raster.grid.crs.to_wkt(),
    }
    return table


def warping_effect(
    raster: RasterLike, *, neighbours: int = 8, options: RasterOptions | None = None, **reading: Any
) -> pd.DataFrame:
    """Return what warping a class map does to each class: measured on its own grid, and on the warped one.

    Returns
    -------
    DataFrame
        one row a class: ``cover``, then ``patches``, ``area_km2`` and ``perimeter_km`` (all cell edges),
        each with ``_source`` and ``_warped``, and ``_change`` = warped / source - 1. A class that one
        grid lacks has zeros there. Patches on the source's own grid have their true, ellipsoidal sizes.
    """

    def sums_on(grid: str) -> pd.DataFrame:
        size = _size_for(grid, options, reading)
        return _class_sums(open_class_map(raster, options, {**reading, "grid": grid, **size}), neighbours)

    with ThreadPoolExecutor(2) as pool:  # warping keeps one core busy, labelling another
        sums = [*pool.map(sums_on, ("source", "warp"))]
    joined = sums[0].add_suffix("_source").join(sums[1].add_suffix("_warped"), how="outer").fillna(0)
    for name in ("patches", "area_km2", "perimeter_km"):
        joined[f"{name}_change"] = joined[f"{name}_warped"] / joined[f"{name}_source"] - 1
        joined = joined.astype({f"{name}_source": sums[0][name].dtype, f"{name}_warped": sums[0][name].dtype})
    return joined.rename_axis("cover").reset_index()


def _size_for(grid: str, options: RasterOptions | None, reading: Mapping[str, Any]) -> dict[str, Any]:
    stated = reading.get("cell_size_m", None if options is None else options.cell_size_m)
    return {"cell_size_m": stated if grid == "warp" else None}


def _class_sums(raster: Raster, neighbours: int) -> pd.DataFrame:
    """Return patches, area and perimeter of each class, from sums of whole numbers."""
    import pandas as pd

    totals: dict[int, NDArray[np.int64]] = {}
    for found in label_patches(raster.strips(), neighbours=neighbours):
        table = found.patches
        for kind in np.unique(table["class"]):
            mine = table["class"] == kind
            sums = np.array([mine.sum(), table["area"][mine].sum(), table["edge"][mine].sum()])
            totals[int(kind)] = totals.get(int(kind), np.zeros(3, np.int64)) + sums
    names = [raster.legend.names[kind] for kind in sorted(totals)]
    counts = np.array([totals[kind] for kind in sorted(totals)]).reshape(-1, 3)
    return pd.DataFrame(
        {
            "patches": counts[:, 0],
            "area_km2": counts[:, 1] * raster.grid.area_unit_m2 / 1e6,
            "perimeter_km": counts[:, 2] * raster.grid.length_unit_m / 1e3,
        },
        index=pd.Index(names, dtype=str),
    )


def polygon_patches(
    geometries: Any,
    *,
    crs: Any = None,
    cover: str | Iterable[Any] | None = None,
    neighbours: int = 8,
    dissolve: bool = True,
    perimeter: Outline = "cell-edges",
    extent: Any = None,
) -> pd.DataFrame:
    """Return the patches of a polygon layer, in the columns of `raster_patches`.

    Parameters
    ----------
    geometries : GeoDataFrame, GeoSeries or sequence of shapely polygons (then `crs` is needed)
    crs : CRS of geometries that carry none
    cover : column of a GeoDataFrame, or one value a geometry, that names its class; None for one class
    neighbours : 8 joins parts that meet in a point to one patch, 4 does not
    dissolve : whether polygons of one class that overlap or share a boundary are one patch, so that shared
        boundaries do not count; False takes every part of every polygon as a patch
    perimeter : ``cell-edges`` (all of the outline) or ``outer-cell-edges`` (without holes)
    extent : polygon of the area mapped, in the same CRS; patches that reach its boundary touch the edge

    Returns
    -------
    DataFrame
        ``cover``, ``area_m2``, ``perimeter_m`` (of geodesics), ``touches_edge``, ``filled_area_m2``,
        ``holes``, ``geometry``. ``attrs["left_out"]`` counts geometries that could not be used, by reason.

    Raises
    ------
    LayerError
        where no CRS is known
    """
    import pyproj

    from geofractal.landcover.polygons import find_polygon_patches

    if perimeter not in {"cell-edges", "outer-cell-edges"}:
        raise ConfigError(
            f"perimeter is {perimeter!r}; of polygons, cell-edges and outer-cell-edges are allowed."
        )
    own = getattr(geometries, "crs", None)
    if own is None and crs is None:
        raise LayerError("The polygons carry no CRS; give it with crs=, for example crs='EPSG:25832'.")
    column = geometries[cover] if isinstance(cover, str) else cover
    shapes = np.empty(len(geometries), dtype=object)
    shapes[:] = list(getattr(geometries, "geometry", geometries))
    names = ["all"] * len(shapes) if column is None else list(column)
    found = find_polygon_patches(
        shapes, names, pyproj.CRS.from_user_input(own or crs), neighbours=neighbours, dissolve=dissolve
    )
    return polygon_table(found, perimeter, extent)


def polygon_table(found: PolygonPatches, perimeter: Outline, extent: Any) -> pd.DataFrame:
    """Return patches of polygons in the columns of `polygon_patches`."""
    import pandas as pd

    touches = [extent is not None and bool(extent.boundary.intersects(one)) for one in found.geometry]
    outer = perimeter == "outer-cell-edges"
    table = pd.DataFrame(
        {
            "cover": pd.Categorical(found.cover),
            "area_m2": found.area_m2,
            "perimeter_m": found.outer_perimeter_m if outer else found.perimeter_m,
            "touches_edge": np.array(touches, dtype=bool),
            "filled_area_m2": found.filled_area_m2,
            "holes": found.holes,
            "geometry": found.geometry,
        }
    )
    table.attrs["left_out"] = found.left_out
    return table
