"""Class maps from files and arrays, read in strips whatever their size.

A thread of its own reads and decodes the next strips while the caller works on one. Memory holds a few
strips and GDAL's block cache, which is set here since its default is a share of the machine.
"""

from __future__ import annotations

import math
import os
import queue
import threading
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError, LayerError, SourceError
from geofractal.landcover.grid import Affine, Grid, is_engineering
from geofractal.landcover.strips import Strip
from geofractal.reader.raster_classes import Legend, Members, Remapper, make_legend, own_names
from geofractal.reader.raster_plane import choose_grid

if TYPE_CHECKING:
    from pyproj import CRS

STRIP_CELLS = 4_000_000
CACHE_MB = 64
AHEAD = 2  # strips that wait for the caller

Path = str | os.PathLike[str]


@dataclass(frozen=True)
class ClassMap:
    """A class map in memory: what a file holds, as an array.

    Attributes
    ----------
    codes : (rows, columns) class codes of any integer or boolean type
    transform : affine of the upper left corner: (a, b, c, d, e, f) with x = a col + b row + c
    crs : anything that pyproj takes for a CRS
    nodata : code of cells without data, None where all have some
    """

    codes: NDArray[Any]
    transform: Affine
    crs: Any
    nodata: float | None = None


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
    distortion_budget : largest relative error of lengths
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
    distortion_budget: float = 0.005
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
        return _read_ahead(self._read)

    def _read(self) -> Iterator[Strip]:
        grid = self.grid
        with _open(self.source) as dataset, _on_grid(dataset, self.options.band, self) as band:
            remap = Remapper(self.legend, np.dtype(band.dtype))
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
    with _open(source) as dataset:
        _check_band(dataset, options)
        grid = Grid(dataset.height, dataset.width, tuple(dataset.transform)[:6], _crs(dataset, options))
        named = own_names(dataset, options.band)
        nodata = dataset.nodatavals[options.band - 1]
        codes = () if nodata is None or not math.isfinite(nodata) else (int(nodata),)
        legend = make_legend(options.classes, options.rest, (*codes, *options.nodata), named)
        chosen = choose_grid(grid, options.grid, options.distortion_budget, options.cell_size_m)
        block_rows = dataset.block_shapes[options.band - 1][0] if chosen is grid else 1
    rows = options.strip_rows or strip_rows(chosen.columns, block_rows)
    return Raster(source, options, chosen, grid, legend, max(1, min(rows, chosen.rows)))


def strip_rows(columns: int, block_rows: int) -> int:
    """Return rows for one strip: whole blocks of the file where they are low enough."""
    rows = max(1, STRIP_CELLS // columns)
    return rows if block_rows > 4 * rows else max(1, rows // block_rows) * block_rows


def _check_band(dataset: Any, options: RasterOptions) -> None:
    if not 1 <= options.band <= dataset.count:
        raise LayerError(f"{dataset.name} has {dataset.count} bands; there is no band {options.band}.")
    dtype = np.dtype(dataset.dtypes[options.band - 1])
    if dtype.kind == "c":
        raise LayerError(f"{dataset.name} holds complex numbers, not class codes.")
    if dtype.kind == "f" and not options.whole_numbers:
        raise LayerError(
            f"{dataset.name} holds {dtype.name} numbers, not class codes. If they are whole numbers that "
            "stand for classes, set whole-numbers: true."
        )
    if dataset.gcps[0] and dataset.transform.is_identity:
        raise LayerError(f"{dataset.name} has control points in place of a transform; warp it first.")
    if dataset.transform.determinant == 0:
        raise LayerError(f"{dataset.name} has a transform without area: {tuple(dataset.transform)[:6]}.")


def _crs(dataset: Any, options: RasterOptions) -> CRS:
    """Return the horizontal CRS: the file's, or the stated one where the file has none."""
    import pyproj

    own = dataset.crs
    if not own and options.crs is None:
        raise LayerError(
            f"{dataset.name} states no CRS; give it with the key crs, for example crs: EPSG:25832."
        )
    try:
        stated = None if options.crs is None else pyproj.CRS.from_user_input(options.crs)
    except pyproj.exceptions.CRSError as error:
        raise ConfigError(f"crs is {options.crs!r}, which is no CRS: {error}") from error
    crs = pyproj.CRS.from_wkt(own.to_wkt(version="WKT2_2019")) if own else stated
    assert crs is not None
    if own and stated is not None and not crs.equals(stated, ignore_axis_order=True):
        raise ConfigError(
            f"{dataset.name} states the CRS {crs.name!r} and the key crs {stated.name!r}; "
            "drop the key, or mend the file."
        )
    if crs.is_compound:
        crs = crs.sub_crs_list[0]
    if not (crs.is_geographic or crs.is_projected or is_engineering(crs)):
        raise LayerError(
            f"{dataset.name} has the CRS {crs.name!r}: neither longitude and latitude nor a plane."
        )
    return crs


@contextmanager
def _open(source: Path | ClassMap) -> Iterator[Any]:
    """Open a file or an array as a GDAL dataset, in the calling thread alone and with a fixed cache."""
    import rasterio
    from rasterio.errors import RasterioError

    with rasterio.Env(GDAL_CACHEMAX=CACHE_MB, GDAL_NUM_THREADS="1"), ExitStack() as stack:
        if isinstance(source, ClassMap):
            yield stack.enter_context(_in_memory(source))
            return
        try:
            dataset = rasterio.open(os.fspath(source))
        except RasterioError as error:
            raise SourceError(f"{os.fspath(source)} cannot be opened as a raster: {error}") from error
        yield stack.enter_context(dataset)


@contextmanager
def _in_memory(source: ClassMap) -> Iterator[Any]:
    """Offer an array as a dataset in memory."""
    import pyproj
    from affine import Affine as Transform
    from rasterio.io import MemoryFile

    codes = source.codes
    if codes.ndim != 2 or not codes.size:
        raise LayerError(
            f"A class map is a table of rows and columns; this array has the shape {codes.shape}."
        )
    dtype = "uint8" if codes.dtype == bool else codes.dtype.name
    wkt = None if source.crs is None else pyproj.CRS.from_user_input(source.crs).to_wkt()
    with MemoryFile() as memory:
        profile = {
            "driver": "GTiff",
            "count": 1,
            "dtype": dtype,
            "height": codes.shape[0],
            "width": codes.shape[1],
        }
        with memory.open(
            **profile,
            crs=wkt,
            transform=Transform(*source.transform),
            nodata=source.nodata,
            bigtiff="if_safer",
        ) as writer:
            writer.write(codes.astype(dtype, copy=False), 1)
        with memory.open() as reader:
            yield reader


@dataclass(frozen=True)
class _Band:
    """One band of an open dataset, with its mask where codes alone do not tell what is covered."""

    dataset: Any
    band: int
    mask: Callable[..., NDArray[Any]] | None
    name: str

    @property
    def dtype(self) -> str:
        return str(self.dataset.dtypes[self.band - 1])

    def read(self, first: int, rows: int) -> tuple[NDArray[Any], NDArray[Any] | None]:
        from rasterio.errors import RasterioError
        from rasterio.windows import Window

        window = Window(0, first, self.dataset.width, rows)
        try:
            values = self.dataset.read(self.band, window=window)
            return values, None if self.mask is None else self.mask(self.band, window=window)
        except RasterioError as error:
            raise SourceError(
                f"{self.name} cannot be read in rows {first} to {first + rows - 1}, columns 0 to "
                f"{self.dataset.width - 1}: {error}. The file may be truncated; fetch or write it anew."
            ) from error


@contextmanager
def _on_grid(dataset: Any, band: int, raster: Raster) -> Iterator[_Band]:
    """Offer a band on the grid to measure on, warped to the nearest cell where that is another."""
    from rasterio.enums import MaskFlags

    flags, nodata = dataset.mask_flag_enums[band - 1], dataset.nodatavals[band - 1]
    by_code = nodata is not None and math.isfinite(nodata)
    if raster.grid is raster.source_grid:
        masked = MaskFlags.per_dataset in flags or MaskFlags.alpha in flags or not (by_code or nodata is None)
        yield _Band(dataset, band, dataset.read_masks if masked else None, dataset.name)
        return
    alpha = nodata is None and MaskFlags.alpha not in flags
    with _warped(dataset, raster, alpha=alpha) as warped:
        yield _Band(warped, band, None if by_code else warped.read_masks, dataset.name)


def _warped(dataset: Any, raster: Raster, *, alpha: bool) -> Any:
    from affine import Affine as Transform
    from rasterio.enums import Resampling
    from rasterio.vrt import WarpedVRT

    grid = raster.grid
    return WarpedVRT(
        dataset,
        src_crs=raster.source_grid.crs.to_wkt(),
        crs=grid.crs.to_wkt(),
        transform=Transform(*grid.transform),
        width=grid.columns,
        height=grid.rows,
        resampling=Resampling.nearest,
        add_alpha=alpha,
        warp_mem_limit=CACHE_MB,
    )


def _read_ahead(read: Callable[[], Iterator[Strip]]) -> Iterator[Strip]:
    """Run `read` in a thread and yield what it yields; an error there is raised here."""
    waiting: queue.Queue[Strip | BaseException | None] = queue.Queue(AHEAD)
    stopped = threading.Event()

    def offer(item: Strip | BaseException | None) -> None:
        while not stopped.is_set():
            try:
                waiting.put(item, timeout=0.1)
            except queue.Full:
                continue
            return

    def work() -> None:
        try:
            for strip in read():
                offer(strip)
                if stopped.is_set():
                    return
            offer(None)
        except BaseException as error:  # noqa: BLE001 - raised again in the caller's thread
            offer(error)

    reader = threading.Thread(target=work, name="raster-reader", daemon=True)
    reader.start()
    try:
        while (item := waiting.get()) is not None:
            if isinstance(item, BaseException):
                raise item
            yield item
    finally:
        stopped.set()
        reader.join()
