"""Opening a class map with GDAL: what it holds, where it lies, and one band of it on the grid wanted."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError, LayerError, SourceError
from geofractal.landcover.grid import Affine, Grid, is_engineering

if TYPE_CHECKING:
    from pyproj import CRS

CACHE_MB = 64  # GDAL's own default is a share of the machine's memory

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


def name_of(source: Path | ClassMap) -> str:
    """Return what to call a source in messages."""
    return "The array" if isinstance(source, ClassMap) else os.fspath(source)


def check_band(dataset: Any, band: int, name: str, *, whole_numbers: bool) -> None:
    """Refuse a band that is not there, that holds no class codes, or whose cells have no fixed place."""
    if not 1 <= band <= dataset.count:
        raise LayerError(f"{name} has {dataset.count} bands; there is no band {band}.")
    dtype = np.dtype(dataset.dtypes[band - 1])
    if dtype.kind == "c":
        raise LayerError(f"{name} holds complex numbers, not class codes.")
    if dtype.kind == "f" and not whole_numbers:
        raise LayerError(
            f"{name} holds {dtype.name} numbers, not class codes. If they are whole numbers that "
            "stand for classes, set whole-numbers: true."
        )
    if dataset.gcps[0] and dataset.transform.is_identity:
        raise LayerError(f"{name} has control points in place of a transform; warp it first.")


def nodata_code(value: float | None) -> int | None:
    """Return the code of cells without data; None where there is none, or none that is whole."""
    usable = value is not None and math.isfinite(value) and value == int(value) and abs(value) < 2**62
    return int(value) if usable and value is not None else None


def place_of(source: Path | ClassMap, dataset: Any) -> tuple[Any, Any]:
    """Return transform and CRS as the source states them; None where it states no CRS."""
    if isinstance(source, ClassMap):
        return source.transform, source.crs
    return dataset.transform, dataset.crs.to_wkt(version="WKT2_2019") if dataset.crs else None


def sound(transform: Any, name: str) -> Affine:
    """Return a transform as six numbers, if its cells have an area."""
    a, b, c, d, e, f = (float(value) for value in tuple(transform)[:6])
    if not abs(a * e - b * d) > 0:
        raise LayerError(f"{name} has a transform whose cells have no area: {(a, b, c, d, e, f)}.")
    return a, b, c, d, e, f


def horizontal_crs(own: Any, given: Any, name: str) -> CRS:
    """Return the horizontal CRS: the raster's own, or the stated one where it has none."""
    import pyproj

    if own is None and given is None:
        raise LayerError(f"{name} states no CRS; give it with the key crs, for example crs: EPSG:25832.")
    try:
        stated = None if given is None else pyproj.CRS.from_user_input(given)
    except pyproj.exceptions.CRSError as error:
        raise ConfigError(f"crs is {given!r}, which is no CRS: {error}") from error
    crs = stated if own is None else pyproj.CRS.from_user_input(own)
    assert crs is not None
    if own is not None and stated is not None and not crs.equals(stated, ignore_axis_order=True):
        raise ConfigError(
            f"{name} states the CRS {crs.name!r} and the key crs {stated.name!r}; "
            "drop the key, or mend the file."
        )
    if crs.is_compound:
        crs = crs.sub_crs_list[0]
    if not (crs.is_geographic or crs.is_projected or is_engineering(crs)):
        raise LayerError(f"{name} has the CRS {crs.name!r}: neither longitude and latitude nor a plane.")
    return crs


@contextmanager
def open_source(source: Path | ClassMap) -> Iterator[Any]:
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
    """Offer an array's codes as a dataset; where they lie is not asked of it, see `place_of`."""
    from affine import Affine as Transform
    from rasterio.io import MemoryFile

    codes = source.codes
    if codes.ndim != 2 or not codes.size:
        raise LayerError(
            f"A class map is a table of rows and columns; this array has the shape {codes.shape}."
        )
    dtype = "uint8" if codes.dtype == bool else codes.dtype.name
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
            transform=Transform(2, 0, 1, 0, -2, 1),
            nodata=source.nodata,
            bigtiff="if_safer",
        ) as writer:
            writer.write(codes.astype(dtype, copy=False), 1)
        with memory.open() as reader:
            yield reader


@dataclass(frozen=True)
class Band:
    """One band of an open dataset, with its mask where codes alone do not tell what is covered."""

    dataset: Any
    band: int
    mask: Callable[..., NDArray[Any]] | None
    name: str

    @property
    def dtype(self) -> np.dtype[Any]:
        """Return the type of its codes."""
        dtype: np.dtype[Any] = np.dtype(self.dataset.dtypes[self.band - 1])
        return dtype

    def read(self, first: int, rows: int) -> tuple[NDArray[Any], NDArray[Any] | None]:
        """Return the codes of some rows, and their mask (0: not covered) where there is one."""
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
def open_band(source: Path | ClassMap, band: int, grid: Grid, warped_to: Grid | None) -> Iterator[Band]:
    """Offer a band on its own grid, or warped to the nearest cell of another."""
    from rasterio.enums import MaskFlags

    with open_source(source) as dataset:
        flags, nodata = dataset.mask_flag_enums[band - 1], dataset.nodatavals[band - 1]
        by_code = nodata_code(nodata) is not None
        if warped_to is None:
            masked = MaskFlags.per_dataset in flags or MaskFlags.alpha in flags
            masked |= nodata is not None and not by_code
            yield Band(dataset, band, dataset.read_masks if masked else None, name_of(source))
            return
        alpha = nodata is None and MaskFlags.alpha not in flags
        with _warped(dataset, grid, warped_to, alpha=alpha) as warped:
            yield Band(warped, band, None if by_code else warped.read_masks, name_of(source))


def _warped(dataset: Any, source: Grid, target: Grid, *, alpha: bool) -> Any:
    from affine import Affine as Transform
    from rasterio.enums import Resampling
    from rasterio.vrt import WarpedVRT

    return WarpedVRT(
        dataset,
        src_crs=source.crs.to_wkt(),
        src_transform=Transform(*source.transform),
        crs=target.crs.to_wkt(),
        transform=Transform(*target.transform),
        width=target.columns,
        height=target.rows,
        resampling=Resampling.nearest,
        add_alpha=alpha,
        warp_mem_limit=CACHE_MB,
    )
