"""What a raster holds that could be a class map, from its header alone."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from geofractal.errors import ConfigError, LayerError, SourceError
from geofractal.reader.raster import RasterOptions, open_raster
from geofractal.reader.raster_plane import equal_distance_grid


@dataclass(frozen=True)
class RasterReport:
    """What one raster holds.

    Attributes
    ----------
    path : where it is
    crs : name of its CRS
    rows, columns : its shape
    cell_width_m, cell_height_m : median true size of its cells
    distortion_percent : worst error of lengths on its own grid
    warped_distortion_percent : the same on the best equal-distance plane; None where there is none
    classes : code and name of each class that the raster itself names
    nodata : codes of cells without data
    """

    path: Path
    crs: str
    rows: int
    columns: int
    cell_width_m: float
    cell_height_m: float
    distortion_percent: float
    warped_distortion_percent: float | None
    classes: dict[int, str]
    nodata: tuple[int, ...]

    def lines(self) -> Iterator[str]:
        """Yield all of it as text."""
        yield f"{self.path}: raster, {self.rows:,} rows and {self.columns:,} columns"
        yield f"  CRS: {self.crs}"
        yield f"  cells of {self.cell_width_m:.4g} by {self.cell_height_m:.4g} m"
        warped = self.warped_distortion_percent
        told = "" if warped is None else f", {warped:.2g} % on an equal-distance plane"
        yield f"  lengths are off by {self.distortion_percent:.2g} % at most on its own grid{told}"
        named = ", ".join(f"{code} {name}" for code, name in self.classes.items())
        yield f"  classes that it names: {named or 'none'}"
        yield f"  codes without data: {', '.join(map(str, self.nodata)) or 'none'}"


def inspect_raster(path: Path) -> RasterReport:
    """Return what a raster holds; no cell of it is read.

    Raises
    ------
    SourceError, LayerError
        It cannot be read as a class map: damaged, no CRS, floats, no fixed place.
    """
    raster = open_raster(path, RasterOptions(grid="source"))
    grid, legend = raster.grid, raster.legend
    width, height = grid.typical_cell
    try:
        warped = equal_distance_grid(grid)
    except (ConfigError, LayerError, SourceError):  # a plane without an Earth cannot be warped
        warped = None
    return RasterReport(
        path=path,
        crs=grid.crs.name,
        rows=grid.rows,
        columns=grid.columns,
        cell_width_m=width,
        cell_height_m=height,
        distortion_percent=100.0 * grid.distortion,
        warped_distortion_percent=None if warped is None else 100.0 * warped.distortion,
        classes={code: name for code, name in legend.own_names.items() if code not in legend.codes},
        nodata=tuple(sorted(legend.codes)),
    )
