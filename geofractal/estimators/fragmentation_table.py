"""The table of fragmentation: rows from totals, in the order of zones, covers and quantities."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from geofractal.estimators.fragmentation_quantities import (
    ACROSS,
    ALL_COVERS,
    ALL_EDGES,
    CHANGES,
    CUT,
    quantities_of,
)
from geofractal.measure import FIGURE_COLUMNS, WHOLE_MAP, CoverMap

if TYPE_CHECKING:
    import pandas as pd

    from geofractal.estimators.fragmentation import FragmentationOptions, MapTotals
    from geofractal.landcover.covers import Pack
    from geofractal.landcover.patch_totals import Totals

NO_DATA = "no data in this zone"
ABSENT = "no patch of this class"


class Figures:
    """Collects the rows of the table.

    Parameters
    ----------
    cover : the map; zones that cannot be measured get one row that says why
    options : decide which quantities there are
    """

    def __init__(self, cover: CoverMap, options: FragmentationOptions) -> None:
        self.units: tuple[str, ...] = (*(cover.zones.names if cover.zones else ()), WHOLE_MAP)
        self.problems: tuple[str, ...] = (*(cover.zones.problems if cover.zones else ()), "")
        self._map = cover
        self._quantities = {
            quantity.name: (i, quantity.unit) for i, quantity in enumerate(quantities_of(options))
        }
        self._covers: dict[str, int] = {}
        self._rows: list[tuple[tuple[int, int, int, str], tuple[Any, ...]]] = []
        width, height = cover.raster.grid.typical_cell
        self._cell = math.sqrt(width * height)
        self._km2 = cover.raster.grid.area_unit_m2 / 1e6
        for unit, problem in enumerate(self.problems):
            if problem:
                self.add(unit, ALL_COVERS, "area", math.nan, note=problem)

    def measured(self) -> list[int]:
        """Return the units that can be measured."""
        return [unit for unit, problem in enumerate(self.problems) if not problem]

    def wanted(self, pack: Pack) -> list[tuple[int, str]]:
        """Return number and name of the covers of a pack that are asked for."""
        asked = self._map.covers
        names = pack.covers(self._map.raster.legend.names)
        found = [(k, name) for k, name in enumerate(names) if not asked or name in asked]
        if not pack.names:
            groups = self._map.groups
            missing = [name for name in asked if name not in names and name not in groups]
            found += [(len(names) + i, name) for i, name in enumerate(missing)]
        return found

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
        cell = self._cell if cell is None else cell
        self._rows.append((order, (self.units[unit], cover, quantity, rule, cell, *values, sign, note)))

    def table(self) -> pd.DataFrame:
        """Return the table: by zone, the whole map last, then by cover and quantity."""
        import pandas as pd

        rows = [row for _, row in sorted(self._rows, key=lambda item: item[0])]
        table = pd.DataFrame(rows, columns=list(FIGURE_COLUMNS))
        texts = ("reporting_unit", "cover", "quantity", "border_rule", "unit", "note")
        return table.astype(dict.fromkeys(texts, object))

    def add_patches(self, pack: Pack, totals: MapTotals) -> None:
        """Add all that comes of the totals of patches."""
        for unit in self.measured():
            covered = totals.covered(unit)
            self._add_all(unit, pack, totals, covered)
            for kind, name in self.wanted(pack):
                one = totals.of(unit, kind)
                self._add_amount(unit, name, one, covered)
                self._add_edges(unit, name, totals.edge(unit, kind), self._outer(totals, [one]), covered)
                self._add_mesh(unit, name, one, covered)

    def _outer(self, totals: MapTotals, of: Sequence[Totals]) -> float:
        return sum(one.outer_edge for one in of) * totals.grid.length_unit_m

    def _add_all(self, unit: int, pack: Pack, totals: MapTotals, covered: int) -> None:
        """Add area with and without data and all edges, once for the map."""
        if pack.names and ALL_COVERS in self._covers and not any(self.problems):
            return
        if pack.names and any(order[0] == unit and row[2] == "area_not_covered" for order, row in self._rows):
            return
        zones = self._map.zones
        beyond = zones.outside_m2[unit] / 1e6 if unit < totals.whole else 0.0
        note = None
        if unit < totals.whole and zones.overlaps[unit]:
            note = "overlaps " + ", ".join(self.units[other] for other in zones.overlaps[unit])
        self.add(unit, ALL_COVERS, "area", covered * self._km2, note=note)
        missing = (int(totals.all_area[unit]) - covered) * self._km2 + beyond
        self.add(unit, ALL_COVERS, "area_not_covered", missing)
        if pack.names:
            return
        kinds = range(totals.patches.classes)
        inner = sum(totals.edge(unit, kind) for kind in kinds) / 2
        outer = self._outer(totals, [totals.of(unit, kind) for kind in kinds])
        self._add_edges(unit, ALL_COVERS, inner, outer - inner, covered)

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

    def _add_edges(self, unit: int, name: str, inner: float, outer: float, covered: int) -> None:
        for rule, metres in ((CHANGES, inner), (ALL_EDGES, outer)):
            self.add(unit, name, "edge_length", metres / 1e3, rule=rule)
            self._ratio(unit, name, "edge_density", metres / 1e3, covered * self._km2, rule=rule)

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
