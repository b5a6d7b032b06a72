"""Distances between patches and the area that they make together."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from geofractal.estimators import fragmentation_quantities as words
from geofractal.landcover.connectivity import FAINTEST, Distances, connected_area, reach
from geofractal.landcover.patch_runs import MOST_RUNS, PatchRuns, gather_runs, row_metres

if TYPE_CHECKING:
    from geofractal.estimators.fragmentation import FragmentationOptions, MapTotals
    from geofractal.estimators.fragmentation_table import Figures
    from geofractal.landcover.covers import Pack
    from geofractal.landcover.grid import Ints
    from geofractal.measure import CoverMap


class Links(Protocol):
    """How far patches are from each other, such as `geofractal.landcover.connectivity.Distances`."""

    def nearest(self, wanted: Ints) -> NDArray[np.float64]:
        """Return the gap from each wanted patch to the nearest other one; infinite for a lone patch."""

    def within_reach(self, wanted: Ints, most: float) -> Ints:
        """Return the patches whose box is within `most` metres of the box of all wanted ones."""

    def costs(self, chosen: Ints, dispersal_m: float) -> NDArray[np.float64]:
        """Return -ln p between every two chosen patches, infinite beyond reach."""


LONE = "a lone patch has no other one"
ABSENT = "no patch of this class"
TOO_MUCH = f"the class has too many cells in its outlines to be held (more than {MOST_RUNS:,} runs in all)"


def link_figures(
    cover: CoverMap, pack: Pack, options: FragmentationOptions, totals: MapTotals, figures: Figures
) -> None:
    """Add distances and connected area of every unit and cover that has no more patches than allowed."""
    if not options.distances and options.dispersal_m is None:
        return
    from geofractal.estimators.fragmentation import map_strips

    wanted, grid = figures.about.wanted(pack), cover.raster.grid
    few = [
        kind
        for kind, _ in wanted
        if any(0 < totals.of(unit, kind).patches <= options.most_patches for unit in figures.measured())
    ]
    smallest = totals.patches.smallest
    held = (
        gather_runs(map_strips(cover, pack), few, neighbours=options.neighbours, smallest=smallest)
        if few
        else {}
    )
    top, width = row_metres(grid)
    for kind, name in wanted:
        found = held.get(kind)
        if found is None:
            for unit in figures.measured():
                patches = totals.of(unit, kind).patches
                reason = TOO_MUCH if 0 < patches <= options.most_patches else many(patches, options)
                add_null(figures, unit, name, options, reason if patches else ABSENT)
            continue
        links = Distances(found, top, width)
        for unit, inside in _parts(found, cover, totals).items():
            add_unit(figures, unit, name, options, links, inside, grid.area_unit_m2)


def _parts(found: PatchRuns, cover: CoverMap, totals: MapTotals) -> dict[int, tuple[Ints, Ints]]:
    """Return, by unit that can be measured, its patches and what of their area lies inside."""
    parts = {totals.whole: (np.arange(len(found.patches)), found.patches["area"])}
    if cover.zones is not None:
        every = found.inside(cover.zones, totals.grid)
        for unit, problem in enumerate(cover.zones.problems):
            if not problem:
                mine = every[every[:, 1] == unit]
                parts[unit] = (mine[:, 0], mine[:, 2])
    return parts


def many(patches: int, options: FragmentationOptions) -> str:
    """Say that a class has more patches than allowed."""
    return f"{patches} patches, more than most-patches ({options.most_patches})"


def add_null(figures: Figures, unit: int, name: str, options: FragmentationOptions, note: str) -> None:
    """Add the rows of distances and connected area without a figure."""
    for quantity in words.NEAREST if options.distances else ():
        figures.add(unit, name, quantity.name, math.nan, note=note)
    for quantity in words.CONNECTED if options.dispersal_m is not None else ():
        figures.add(unit, name, quantity.name, math.nan, note=note)


def add_unit(
    figures: Figures,
    unit: int,
    name: str,
    options: FragmentationOptions,
    links: Links,
    inside: tuple[Ints, Ints],
    area_unit_m2: float,
) -> None:
    """Add the rows of distances and connected area of a unit: its patches and what of each lies inside."""
    patches, areas = inside
    if len(patches) == 0 or len(patches) > options.most_patches:
        add_null(figures, unit, name, options, many(len(patches), options) if len(patches) else ABSENT)
        return
    if options.distances:
        nearest = links.nearest(patches)
        known = np.sort(nearest[np.isfinite(nearest)])
        note = None if len(known) else LONE
        mean = math.fsum(known) / len(known) if len(known) else math.nan
        median = float(np.median(known)) if len(known) else math.nan
        figures.add(unit, name, words.NEAREST[0].name, mean, note=note)
        figures.add(unit, name, words.NEAREST[1].name, median, note=note)
    if options.dispersal_m is not None:
        _add_connected(figures, unit, name, options, links, patches, areas * area_unit_m2 / 1e6)


def _add_connected(
    figures: Figures,
    unit: int,
    name: str,
    options: FragmentationOptions,
    links: Links,
    patches: Ints,
    areas: NDArray[np.floating[Any]],
) -> None:
    assert options.dispersal_m is not None
    chosen = links.within_reach(patches, reach(options.dispersal_m))
    names = [quantity.name for quantity in words.CONNECTED]
    if len(chosen) > options.most_patches:
        note = f"{many(len(chosen), options)}, with those outside that paths may use"
        for quantity in names:
            figures.add(unit, name, quantity, math.nan, note=note)
        return
    own = np.zeros(len(chosen))
    own[np.searchsorted(chosen, patches)] = areas
    found = connected_area(own, links.costs(chosen, options.dispersal_m), faintest=FAINTEST)
    figures.add(unit, name, names[0], found.area, low=found.area, high=found.high)
    for quantity, share in zip(names[1:], (found.own, found.direct, found.stepping), strict=True):
        figures.add(unit, name, quantity, 100 * share)
