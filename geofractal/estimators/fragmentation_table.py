"""The table of fragmentation: rows from totals, in the order of zones, covers and quantities."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from geofractal.estimators.fragmentation_quantities import (
    ACROSS,
    ALL_EDGES,
    CHANGES,
    CUT,
    quantities_of,
)
from geofractal.landcover.barriers import BARRIER
from geofractal.landcover.covers import Pack, asked_packs
from geofractal.landcover.patch_totals import Totals
from geofractal.measure import ALL_COVERS, FIGURE_COLUMNS, WHOLE_MAP

if TYPE_CHECKING:
    import pandas as pd

    from geofractal.estimators.fragmentation import FragmentationOptions

NO_DATA = "no data in this zone"
ABSENT = "no patch of this class"


def told_left_out(what: str, counts: Mapping[str, int]) -> str:
    """Return how many geometries were left out and why; empty where none was."""
    reasons = ", ".join(f"{reason} ({count})" for reason, count in counts.items())
    return f"{what} left out: {reasons}" if reasons else ""


def told_barriers(barriers: Any) -> str:
    """Return how many barriers, None where there are none, were left out and why."""
    return told_left_out("barriers", {} if barriers is None else barriers.left_out)


@dataclass(frozen=True)
class Reporting:
    """What the rows of the table are about.

    Attributes
    ----------
    classes : of the map; may grow while it is read for the first time
    groups, covers : groups of classes, and what is asked for; all of it where empty
    cell_m : side of a cell, NaN where there are none
    area_unit_m2, length_unit_m : units of totals
    zones : names of the zones
    problems : why a zone cannot be measured, empty where it can
    overlaps : numbers of the zones that share an area with each
    outside_m2 : area of each zone off the map
    barred : whether the map has cells that barriers took, of the class `BARRIER`
    said : of each unit, what is to be said beside its area; the whole map is the last
    """

    classes: Sequence[str]
    groups: Mapping[str, tuple[str, ...]]
    covers: tuple[str, ...]
    cell_m: float
    area_unit_m2: float
    length_unit_m: float
    zones: tuple[str, ...] = ()
    problems: tuple[str, ...] = ()
    overlaps: Sequence[tuple[int, ...]] = ()
    outside_m2: Sequence[float] | NDArray[np.float64] = ()
    barred: bool = False
    said: Sequence[str] = ()

    def packs(self) -> tuple[Pack, ...]:
        """Return what is measured together: classes, then groups, as far as asked for."""
        return asked_packs(self.covers, self.groups, (BARRIER,) if self.barred else ())

    def wanted(self, pack: Pack) -> list[tuple[int, str]]:
        """Return number and name of the covers of a pack that are asked for."""
        names = pack.covers(self.classes)
        found = [
            (k, name)
            for k, name in enumerate(names)
            if (name in self.covers if self.covers else not (self.barred and name == BARRIER))
        ]
        if not pack.names:
            missing = [name for name in self.covers if name not in names and name not in self.groups]
            found += [(len(names) + i, name) for i, name in enumerate(missing)]
        return found


class UnitTotals(Protocol):
    """Totals of patches by unit and cover of a pack; the unit after the last zone is the whole map."""

    def of(self, unit: int, kind: int) -> Totals:
        """Return the totals of a unit and cover."""

    def covered(self, unit: int) -> int:
        """Return the area of a unit with data."""

    def uncovered(self, unit: int) -> int:
        """Return the area of a unit without data, but for what lies off the map."""

    def twice_edge(self, unit: int, kind: int) -> int:
        """Return twice the length of class-change edges of a cover."""

    def twice_all_edges(self, unit: int) -> int:
        """Return twice the length of edges between any two covers."""


class Figures:
    """Collects the rows of the table; zones that cannot be measured get one that says why."""

    def __init__(self, about: Reporting, options: FragmentationOptions) -> None:
        self.about = about
        self._units, self._problems = (*about.zones, WHOLE_MAP), (*about.problems, "")
        self._quantities = {one.name: (i, one.unit) for i, one in enumerate(quantities_of(options))}
        self._covers: dict[str, int] = {}
        self._rows: list[tuple[tuple[int, int, int, str], tuple[Any, ...]]] = []
        self._km2, self._km = about.area_unit_m2 / 1e6, about.length_unit_m / 1e3
        for unit, problem in enumerate(self._problems):
            if problem:
                self.add(unit, ALL_COVERS, "area", math.nan, note=problem)

    def measured(self) -> list[int]:
        """Return the units that can be measured."""
        return [unit for unit, problem in enumerate(self._problems) if not problem]

    def add(
        self,
        unit: int,
        cover: str,
        quantity: str,
        estimate: float,
        *,
        rule: str = "",
        low: float = math.nan,
        high: float = math.nan,
        note: str | None = None,
        cell: float | None = None,
    ) -> None:
        """Add a row; a figure that is not finite is null."""
        place, sign = self._quantities[quantity]
        values = (float(value) if math.isfinite(value) else math.nan for value in (estimate, low, high))
        order = (unit, self._covers.setdefault(cover, len(self._covers)), place, rule)
        cell = self.about.cell_m if cell is None else cell
        self._rows.append((order, (self._units[unit], cover, quantity, rule, cell, *values, sign, note)))

    def table(self) -> pd.DataFrame:
        """Return the table: by zone, the whole map last, then by cover and quantity."""
        import pandas as pd

        rows = [row for _, row in sorted(self._rows, key=lambda item: item[0])]
        table = pd.DataFrame(rows, columns=list(FIGURE_COLUMNS))
        texts = ("reporting_unit", "cover", "quantity", "border_rule", "unit", "note")
        return table.astype(dict.fromkeys(texts, object))

    def add_totals(self, pack: Pack, totals: UnitTotals) -> None:
        """Add all that comes of the totals of patches; those of all covers with the first pack."""
        first = not any(row[2] == "area_not_covered" for _, row in self._rows)
        for unit in self.measured():
            covered = totals.covered(unit)
            if first:
                self._add_all(unit, pack, totals, covered)
            for kind, name in self.about.wanted(pack):
                one = totals.of(unit, kind)
                self._add_amount(unit, name, one, covered)
                self._add_edge(unit, name, CHANGES, totals.twice_edge(unit, kind) / 2, covered)
                self._add_edge(unit, name, ALL_EDGES, one.outer_edge, covered)
                self._add_mesh(unit, name, one, covered)

    def _add_all(self, unit: int, pack: Pack, totals: UnitTotals, covered: int) -> None:
        """Add area with and without data, and edges between any classes where these are told apart."""
        is_zone = unit < len(self.about.zones)
        others = self.about.overlaps[unit] if is_zone else ()
        shared = "overlaps " + ", ".join(self._units[other] for other in others) if others else ""
        note = "; ".join(filter(None, (shared, *self.about.said[unit : unit + 1])))
        self.add(unit, ALL_COVERS, "area", covered * self._km2, note=note or None)
        beyond = self.about.outside_m2[unit] / 1e6 if is_zone else 0.0
        self.add(unit, ALL_COVERS, "area_not_covered", totals.uncovered(unit) * self._km2 + beyond)
        if self.about.barred:
            taken = totals.of(unit, pack.covers(self.about.classes).index(BARRIER)).area
            self.add(unit, BARRIER, "area", taken * self._km2)
            self._ratio(unit, BARRIER, "share", 100 * taken, covered)
        if not pack.names:
            self._add_edge(unit, ALL_COVERS, CHANGES, totals.twice_all_edges(unit) / 2, covered)

    def _add_amount(self, unit: int, name: str, one: Totals, covered: int) -> None:
        area = one.area * self._km2
        self.add(unit, name, "area", area)
        self._ratio(unit, name, "share", 100 * one.area, covered)
        self.add(unit, name, "patches", one.patches, rule=CUT)
        self._ratio(unit, name, "patch_density", one.patches, covered * self._km2, rule=CUT)
        for quantity, value in (
            ("mean_patch", one.patch_area / one.patches if one.patches else math.nan),
            ("median_patch", one.median),
            ("weighted_mean_patch", one.squares / one.patch_area if one.patches else math.nan),
            ("largest_patch", one.largest if one.patches else math.nan),
        ):
            note = None if one.patches else ABSENT
            self.add(unit, name, quantity, value * self._km2, rule=CUT, note=note)

    def _add_edge(self, unit: int, name: str, rule: str, length: float, covered: int) -> None:
        self.add(unit, name, "edge_length", length * self._km, rule=rule)
        self._ratio(unit, name, "edge_density", length * self._km, covered * self._km2, rule=rule)

    def _add_mesh(self, unit: int, name: str, one: Totals, covered: int) -> None:
        coherence = one.squares / covered**2 if covered else math.nan
        division = (covered**2 - one.squares) / covered**2 if covered else math.nan
        splitting = covered**2 / one.squares if one.squares else math.nan
        empty = NO_DATA if not covered else None
        absent = empty or (None if one.patches else ABSENT)
        self.add(unit, name, "coherence", coherence, rule=CUT, note=empty)
        self.add(unit, name, "division", division, rule=CUT, note=empty)
        self.add(unit, name, "splitting", splitting, rule=CUT, note=absent)
        bound = None
        if one.open_patches:
            bound = f"lower bound: {one.open_patches} of its patches reach the edge of the data"
        for rule, total, note in ((CUT, one.squares, None), (ACROSS, one.across, bound)):
            mesh = total / covered * self._km2 if covered else math.nan
            density = 1000 / mesh if mesh > 0 else math.nan
            self.add(unit, name, "effective_mesh_size", mesh, rule=rule, note=empty or note)
            reason = note.replace("lower", "upper") if note else absent
            self.add(unit, name, "effective_mesh_density", density, rule=rule, note=reason)

    def _ratio(
        self, unit: int, name: str, quantity: str, part: float, whole: float, *, rule: str = ""
    ) -> None:
        """Add a ratio, null where there is no data."""
        note = None if whole else NO_DATA
        self.add(unit, name, quantity, part / whole if whole else math.nan, rule=rule, note=note)
