"""Class maps from files and arrays, read in strips whatever their size.

A thread of its own reads and decodes the next strips while the caller works on one. Memory holds a few
strips and GDAL's block cache, which is set here since its default is a share of the machine.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Any

from geofractal.landcover.ahead import run_ahead
from geofractal.landcover.grid import Grid
from geofractal.landcover.strips import Strip
from geofractal.reader.raster_classes import Legend, Members, Remapper, make_legend, own_names
from geofractal.reader.raster_plane import choose_grid
from geofractal.reader.raster_source import (
    Band,
    ClassMap,
    Path,
    check_band,
    horizontal_crs,
    name_of,
    nodata_code,
    open_band,
    open_source,
    place_of,
    sound,
)

STRIP_CELLS = 8_000_000
WARPED_BLOCK = 128  # rows of a block of GDAL's warped rasters; other strips would warp some blocks twice
AHEAD = 1  # strips that wait for the caller, beside the one being read


@dataclass(frozen=True)
class RasterOptions:
    """How a class map is to be read.

    Attributes
    ----------
    band : counted from 1
    crs : CRS of a raster that states none
    classes : class name -> its codes, or names the raster gives to them; None takes codes as they come
    rest : class for all codes not named; None makes such a code an error
    nodata : further codes of cells without data
    whole_numbers : whether a raster of floats may be taken as whole numbers
    grid : ``auto``, ``source`` or ``warp``; see `geofractal.reader.raster_plane.choose_grid`
    budget_percent : largest error of lengths that the grid may bring in
    cell_size_m : cell size of a warped grid; the source's unless stated
    strip_rows : rows read at once; never changes a result
    """

    band: int = 1
    crs: Any = None
    classes: Mapping[str, Members] | Iterable[tuple[str, Members]] | None = None
    rest: str | None = None
    nodata: tuple[int, ...] = ()
    whole_numbers: bool = False
    grid: str = "auto"
    budget_percent: float = 0.5
    cell_size_m: float | None = None
    strip_rows: int | None = None


@dataclass(frozen=True)
class Raster:
    """A class map ready to be read.

    Attributes
    ----------
    grid : the grid it is measured on
    source_grid : the grid it is kept on
    legend : its classes; complete once all strips were read
    """

    source: Path | ClassMap
    options: RasterOptions
    grid: Grid
    source_grid: Grid
    legend: Legend
    strip_rows: int

    def strips(self) -> Iterator[Strip]:
        """Yield the raster's strips from the top, without gaps, read by a thread of their own."""
        return run_ahead(self._read, AHEAD)

    def _band(self) -> AbstractContextManager[Band]:
        warped_to = None if self.grid is self.source_grid else self.grid
        return open_band(self.source, self.options.band, self.source_grid, warped_to)

    def _read(self) -> Iterator[Strip]:
        grid = self.grid
        with self._band() as band:
            remap = Remapper(self.legend, band.dtype)
            for first in range(0, grid.rows, self.strip_rows):
                rows = min(self.strip_rows, grid.rows - first)
                values, covered = band.read(first, rows)
                codes = remap(values, first, covered)
                yield Strip(first, codes, grid.sizes(first, rows), first + rows == grid.rows)


def open_raster(source: Path | ClassMap, options: RasterOptions | None = None) -> Raster:
    """Return a class map whose header, classes and grid have been checked; no cell is read yet.

    Parameters
    ----------
    source : a path that GDAL reads (GeoTIFF, COG, VRT, ...), or an array with transform and CRS
    options : how to read it

    Raises
    ------
    SourceError
        The file cannot be opened, or no grid keeps the distortion budget.
    LayerError
        No CRS, no such band, floats not allowed for, control points in place of a transform.
    ConfigError
        Options that contradict each other or the raster's classes.
    """
    options = options or RasterOptions()
    name = name_of(source)
    with open_source(source) as dataset:
        check_band(dataset, options.band, name, whole_numbers=options.whole_numbers)
        transform, own_crs = place_of(source, dataset)
        crs = horizontal_crs(own_crs, options.crs, name)
        grid = Grid(dataset.height, dataset.width, sound(transform, name), crs)
        named = own_names(dataset, options.band)
        nodata = nodata_code(dataset.nodatavals[options.band - 1])
        codes = options.nodata if nodata is None else (nodata, *options.nodata)
        legend = make_legend(options.classes, options.rest, codes, named)
        chosen = choose_grid(grid, options.grid, options.budget_percent / 100, options.cell_size_m)
        block_rows = dataset.block_shapes[options.band - 1][0] if chosen is grid else WARPED_BLOCK
    rows = options.strip_rows or strip_rows(chosen.columns, block_rows)
    return Raster(source, options, chosen, grid, legend, max(1, min(rows, chosen.rows)))


def strip_rows(columns: int, block_rows: int) -> int:
    """Return rows for one strip: whole blocks of the file, or an even part of one, which GDAL caches."""
    rows = max(1, STRIP_CELLS // columns)
    if 2 * rows > block_rows:
        return round(rows / block_rows) * block_rows
    return math.ceil(block_rows / math.ceil(block_rows / rows))
