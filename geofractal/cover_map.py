"""A class map opened for a measure: its strips, zones and barriers, its patches by class and group."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, fields, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from geofractal.errors import ConfigError
from geofractal.landcover.barriers import BARRIER, Barriers
from geofractal.landcover.covers import Pack, pack_groups
from geofractal.landcover.perimeter import Perimeter
from geofractal.landcover.strips import NOT_COVERED, Strip
from geofractal.landcover.zones import ZonePainter, Zones
from geofractal.measure import CoverPatches, Outline
from geofractal.patches import patch_frames
from geofractal.reader.raster import Raster
from geofractal.reader.raster_classes import Legend

if TYPE_CHECKING:
    import pandas as pd

OTHER = "other"
OWN_BARRIER = (
    f"{BARRIER!r} is what cells are called that barriers with a width take; a class or group of this name "
    "needs another one."
)
PLACE = ("zone", "first_row", "first_column")
HELD = ("cells", "area_m2", "perimeter_m", "touches_edge", "filled_area_m2", "holes", *PLACE)


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
        self, *, neighbours: int = 8, perimeter: Outline = "cell-edges", map_edge: bool = True
    ) -> Iterator[CoverPatches]:
        """Yield the patches of the covers asked for, once for each set of zones that share no cell."""
        convention = Perimeter(perimeter, map_edge)
        for members in (self.zones.sets if self.zones else ()) or ((),):
            yield CoverPatches(self._table(members, convention, neighbours), members)

    def _table(self, members: tuple[int, ...], convention: Perimeter, neighbours: int) -> pd.DataFrame:
        import pandas as pd

        columns: dict[str, list[Any]] = {}
        numbers: dict[str, int] = {}
        for frame in self.frames(convention, neighbours, members=members):
            cover = frame["cover"].cat
            of = np.array([numbers.setdefault(name, len(numbers)) for name in cover.categories], np.int16)
            columns.setdefault("cover", []).append(of[cover.codes])
            for name in (name for name in HELD if name in frame):  # copies: a frame's columns share memory
                kind = np.int32 if name in PLACE else frame[name].dtype
                columns.setdefault(name, []).append(frame[name].to_numpy(kind, copy=True))
        table = {name: np.concatenate(columns.pop(name)) for name in [*columns]}
        names = self.names
        place = np.array([names.index(name) if name in names else -1 for name in numbers], np.int16)
        cover = pd.Categorical.from_codes(place[table.pop("cover")], pd.Index(names, dtype=str))
        return pd.DataFrame({"cover": cover, **table}, copy=False)

    def frames(
        self, convention: Perimeter, neighbours: int, *, members: tuple[int, ...] = ()
    ) -> Iterator[pd.DataFrame]:
        """Yield patches while the map is read, once for its classes and once for each pack of groups."""
        for pack in self._packs():
            strips = pack.remap(self.raster.strips(), self.raster.legend.names)
            if self.barriers is not None:
                strips = self.barriers(strips)
            if members:
                assert self.zones is not None
                strips = ZonePainter(self.zones, members, np.zeros(len(self.zones), np.int64))(strips)
            wanted = pack.names or tuple(cover for cover in self.covers if cover not in self.groups)
            for frame in patch_frames(self._named(pack), strips, convention, neighbours, zoned=bool(members)):
                if self.barred:
                    frame = frame[frame["cover"] != BARRIER]  # noqa: PLW2901 - what is left of it
                yield frame[frame["cover"].isin(wanted)] if wanted else frame

    def polygons(self, neighbours: int) -> Iterator[pd.DataFrame]:
        """Yield the patches of the covers asked for with their polygons; whatever else is left undrawn."""
        names = self.names
        for pack in pack_groups({name: self.groups.get(name, (name,)) for name in names}):
            strips = _only(pack, pack.remap(self.raster.strips(), self.raster.legend.names))
            if self.barriers is not None:
                strips = self.barriers(strips)
            yield from patch_frames(self._named(pack), strips, Perimeter(), neighbours, geometry=True)

    def _named(self, pack: Pack) -> Raster:
        """Return the raster under the names of a pack's covers."""
        return replace(self.raster, legend=Legend([*pack.names, OTHER], {})) if pack.names else self.raster

    def _packs(self) -> tuple[Pack, ...]:
        wanted = self.covers or tuple(self.groups)
        packs = pack_groups({name: self.groups[name] for name in wanted if name in self.groups})
        classes = not self.covers or any(name not in self.groups for name in self.covers)
        return (Pack(), *packs) if classes else packs


def _only(pack: Pack, strips: Iterator[Strip]) -> Iterator[Strip]:
    """Yield strips in which cells of no cover are not covered."""
    for strip in strips:
        other = strip.codes == len(pack.names)
        yield replace(strip, codes=np.where(other, np.int16(NOT_COVERED), strip.codes))
