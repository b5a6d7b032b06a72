"""Areas and perimeters of patches in metres, by a stated convention."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError
from geofractal.landcover.grid import Grid
from geofractal.landcover.labelling import UNKNOWN, PatchTable

Floats = NDArray[np.float64]
Outline = Literal["cell-edges", "outer-cell-edges", "smoothed"]
OUTLINES: tuple[Outline, ...] = ("cell-edges", "outer-cell-edges", "smoothed")


@dataclass(frozen=True, slots=True)
class Perimeter:
    """What counts as a patch's perimeter.

    The right dimension depends on it. For whole critical percolation clusters the area-perimeter
    dimension is exactly 2 with all cell edges against the cluster's area, 168/91 with the outer ones, and
    7/4 with the outer ones against the filled area (clusters of 4 neighbours).

    Attributes
    ----------
    outline : ``cell-edges`` (all, holes included), ``outer-cell-edges`` (without holes), or ``smoothed``:
        the length of the outline that the cells were drawn from. A staircase of cell edges is 4/pi times as
        long as the curve under it, on average over directions, at any cell size; corners tell how much of
        it is staircase (Koplowitz & Bruckstein 1989, IEEE Trans. PAMI 11:611-622, from memory). On square
        cells the smoothed length of a straight edge is at most 5.2 % too short (along rows and columns)
        and 2.7 % too long; that of a disc is right.
    map_edge : whether edges to the map's edge and to cells not covered count
    """

    outline: Outline = "cell-edges"
    map_edge: bool = True

    def __post_init__(self) -> None:
        if self.outline not in OUTLINES:
            raise ConfigError(f"perimeter is {self.outline!r}; allowed are {', '.join(OUTLINES)}.")
        if self.outline == "outer-cell-edges" and not self.map_edge:
            raise ConfigError(
                "The map's edge cannot be left out of outer cell edges; leave out the patches "
                "that touch it instead."
            )

    @property
    def follows_outlines(self) -> bool:
        """Return whether the labeller must follow outlines for it."""
        return self.outline == "outer-cell-edges"

    def metres(self, patches: PatchTable, grid: Grid) -> Floats:
        """Return the perimeters in metres; NaN across zone borders unless all cell edges count."""
        edge = patches["outer_edge"] if self.follows_outlines else patches["edge"]
        length = edge * grid.length_unit_m
        if not self.map_edge:
            length = length - patches["border_edge"] * grid.length_unit_m
        if self.outline == "smoothed":
            saved = patches["corners"] * grid.length_unit_m
            length = outline_scale(*cell_shape(patches, grid)) * np.maximum(length - saved, 0)
        if self.outline != "cell-edges":
            length = np.where(patches["corners"] == UNKNOWN, np.nan, length)
        return np.asarray(length, np.float64)


def area_m2(patches: PatchTable, grid: Grid) -> Floats:
    """Return the ellipsoidal areas in square metres."""
    return np.asarray(patches["area"] * grid.area_unit_m2, np.float64)


def cell_shape(patches: PatchTable, grid: Grid) -> tuple[Floats, Floats]:
    """Return true width and height of a cell in the middle row of each patch."""
    rows = (patches["first_row"] + patches["last_row"]) // 2
    if not len(rows):
        return np.ones(0), np.ones(0)
    wanted, place = np.unique(rows, return_inverse=True)
    across, down = grid.cell_vectors(wanted + 0.5, np.full(len(wanted), grid.columns / 2))
    width, height = np.hypot(*across.T)[place], np.hypot(*down.T)[place]
    typical_width, typical_height = grid.typical_cell
    known = np.isfinite(width) & np.isfinite(height)
    return np.where(known, width, typical_width), np.where(known, height, typical_height)


def outline_scale(width: Floats, height: Floats) -> Floats:
    """Return the factor that makes smoothed lengths right on average over all directions.

    A straight edge at angle t from the rows has w-edges cos t / w, h-edges sin t / h, and two corners for
    each edge of the rarer kind; each corner takes (w + h - d) / 2 off, d the diagonal. With t = atan(h / w),
    the mean over a quarter turn is 2 / pi times the bracket below; for w = h the factor is
    pi (1 + sqrt 2) / 8 = 0.948.
    """
    diagonal = np.hypot(width, height)
    sine, cosine = height / diagonal, width / diagonal
    mean = (
        sine + (1 - cosine) * (diagonal - width) / height + cosine + (1 - sine) * (diagonal - height) / width
    )
    return np.asarray(math.pi / 2 / mean)
