"""A class map opened for a measure: its strips, zones and barriers, its patches by class and group."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, fields, replace
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from geofractal.errors import ConfigError
from geofractal.held_patches import HeldPatches
from geofractal.landcover.ahead import run_ahead
from geofractal.landcover.barriers import BARRIER, Barriers
from geofractal.landcover.covers import Pack, asked_packs
from geofractal.landcover.labelling import Finished, label_patches
from geofractal.landcover.outlines import patch_polygons
from geofractal.landcover.patch_sieve import Sieve
from geofractal.landcover.perimeter import Perimeter
from geofractal.landcover.strips import Strip
from geofractal.landcover.zones import ZonePainter, Zones, zone_sets
from geofractal.measure import Bools, CoverPatches, Ints, Outline, PatchRule
from geofractal.patches import patch_frame
from geofractal.reader.raster import Raster
from geofractal.reader.raster_classes import Legend

if TYPE_CHECKING:
    import pandas as pd

REST = "\0"
"""Name of what is of no cover of a pack; no group can have it."""

OWN_BARRIER = (
    f"{BARRIER!r} is what cells are called that barriers with a width take; a class or group of this name "
    "needs another one."
)


@dataclass(frozen=True)
class BarredRaster(Raster):
    """A raster on which the cells that barriers take are a class of their own, `BARRIER`."""

    plain: Raster
    barriers: Barriers

    def strips(self) -> Iterator[Strip]:
        """Yield the raster's strips with the cells of barriers."""
        return self.barriers.take(self.plain.strips(), self.legend.names.index(BARRIER))


def _barred(raster: Raster, barriers: Barriers) -> BarredRaster:
    """Return a raster with the cells of barriers, under a legend of its own."""
    known = raster.legend
    legend = replace(known, names=[*known.names, BARRIER], codes=dict(known.codes))
    plain = replace(raster, legend=legend)
    held = {one.name: getattr(plain, one.name) for one in fields(Raster)}
    return BarredRaster(**held, plain=plain, barriers=barriers)


@dataclass(frozen=True)
class RasterCover:
    """A raster as measures get it: see `geofractal.measure.CoverMap`.

    Raises
    ------
    ConfigError
        barriers take cells, and a class or a group has the name that these get
    """

    raster: Raster
    zones: Zones | None = None
    barriers: Barriers | None = None
    groups: dict[str, tuple[str, ...]] = field(default_factory=dict)
    covers: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.barred or isinstance(self.raster, BarredRaster):
            return
        assert self.barriers is not None
        legend = self.raster.legend
        if BARRIER in {*legend.names, *legend.own_names.values(), *self.groups}:
            raise ConfigError(OWN_BARRIER)
        object.__setattr__(self, "raster", _barred(self.raster, self.barriers))

    @property
    def barred(self) -> bool:
        """Whether barriers take cells, which are of no cover that is asked for."""
        return self.barriers is not None and self.barriers.wide

    @property
    def names(self) -> list[str]:
        """Return the classes and groups asked for; the classes are complete once the map was read."""
        every = dict.fromkeys([*self.raster.legend.names, *self.groups])
        return list(self.covers or (name for name in every if not (self.barred and name == BARRIER)))

    def patches(
        self,
        *,
        neighbours: int = 8,
        perimeter: Outline = "cell-edges",
        map_edge: bool = True,
        columns: Sequence[str] | None = None,
        smallest_cells: int = 1,
        smallest_area_m2: float = 0.0,
    ) -> Iterator[CoverPatches]:
        """Yield the patches of the covers asked for, once for each set of zones that share no cell."""
        convention = Perimeter(perimeter, map_edge)
        for members in zone_sets(self.zones):
            held = HeldPatches(columns)
            for pack in asked_packs(self.covers, self.groups):
                sieve = Sieve(self.raster.grid, smallest_cells, smallest_area_m2)
                self._gather(held, pack, members, convention, neighbours, sieve)
            yield held.result(self.names, members)

    def _gather(
        self,
        held: HeldPatches,
        pack: Pack,
        members: tuple[int, ...],
        convention: Perimeter,
        neighbours: int,
        sieve: Sieve,
    ) -> None:
        """Read the map once, and hold the patches of a pack's covers that are asked for."""
        raster, strips = self._named(pack), self._strips(pack, members)
        outlines = convention.follows_outlines
        for found in label_patches(
            run_ahead(partial(iter, strips)), neighbours=neighbours, outlines=outlines
        ):
            large = sieve(found.patches)
            asked = self._asked(pack, raster, large["class"])
            patches = large if asked.all() else large.take(asked)
            held.add(patch_frame(patches, raster, convention, zoned=bool(members)))
        for (zone, kind), count in sieve.counts.items():
            if self._asks(pack, cover := raster.legend.names[kind]):
                held.count(zone, cover, count)

    def _asked(self, pack: Pack, raster: Raster, classes: Ints) -> Bools:
        """Tell of which of these classes, or covers of a pack, patches are asked for."""
        asked = np.array([self._asks(pack, name) for name in raster.legend.names], np.bool_)
        return np.asarray(asked[classes], np.bool_)

    def _asks(self, pack: Pack, cover: str) -> bool:
        """Return whether a class, or a cover of a pack of groups, is asked for."""
        if self.barred and cover == BARRIER:
            return False
        wanted = pack.names or tuple(name for name in self.covers if name not in self.groups)
        return not wanted or cover in wanted

    def _strips(self, pack: Pack, members: tuple[int, ...]) -> Iterator[Strip]:
        """Yield strips: covers in place of classes, with barriers and the zones of one set."""
        strips = pack.remap(self.raster.strips(), self.raster.legend.names)
        if self.barriers is not None:
            strips = self.barriers(strips)
        if members:
            assert self.zones is not None
            strips = ZonePainter(self.zones, members, np.zeros(len(self.zones), np.int64))(strips)
        return strips

    def polygons(self, rule: PatchRule) -> Iterator[pd.DataFrame]:
        """Yield the patches of the covers asked for with their polygons, while the map is read.

        Classes come first, then groups, read again for each pack that shares no class; within a reading
        patches follow each other by their last row, then by their first cell. Memory holds the runs of the
        patches that the present row has not finished.
        """
        convention = Perimeter(rule.perimeter, rule.map_edge)
        for pack in asked_packs(self.covers, self.groups):
            raster, strips = self._named(pack), self._strips(pack, ())
            asked = partial(self._asked, pack, raster)
            for found in label_patches(
                run_ahead(partial(iter, strips)),
                neighbours=rule.neighbours,
                outlines=convention.follows_outlines,
                runs=True,
                runs_of=asked,
            ):
                yield _drawn(found, np.flatnonzero(asked(found.patches["class"])), raster, convention)

    def _named(self, pack: Pack) -> Raster:
        """Return the raster under the names of a pack's covers."""
        return replace(self.raster, legend=Legend([*pack.names, REST], {})) if pack.names else self.raster


def _drawn(found: Finished, wanted: Ints, raster: Raster, convention: Perimeter) -> pd.DataFrame:
    """Return the wanted patches, the only ones with runs, as a table with their polygons."""
    assert found.runs is not None
    runs = found.runs.copy()
    runs[:, 0] = np.searchsorted(wanted, runs[:, 0])
    frame = patch_frame(found.patches.take(wanted), raster, convention)
    frame["geometry"] = patch_polygons(runs, len(frame), raster.grid.transform)
    return frame
