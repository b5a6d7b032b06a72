"""Totals of patches by reporting unit and class: whole numbers, exact whatever their order.

Memory grows with units and classes, and with the number of different patch areas up to a bound.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from geofractal.kernels.patch_sums import DIGIT, LIMBS, add_products, add_sums, fill_buckets, raise_largest
from geofractal.landcover.grid import Ints
from geofractal.landcover.labelling import PatchTable

MOST_SIZES = 1_000_000
"""Different areas that are kept as they are; above it, medians are right to 0.013 % only."""

SIZE_BITS = 12
WAITING = 500_000

SUMS = ("area", "edge", "border_edge", "zone_edge", "barrier_edge")


class PatchTotals:
    """Totals of the patches of units and classes.

    Parameters
    ----------
    units : number of reporting units
    smallest : smallest area of a patch, in the grid's unit, that counts as one. Areas and edges of classes
        are summed over all of them.
    """

    def __init__(self, units: int, smallest: int) -> None:
        self.units, self.smallest = units, smallest
        self.sums = _Table(units, len(SUMS))
        self.counted = _Table(units, 3)
        self.squares = _Table(units, LIMBS)
        self.across = _Table(units, LIMBS)
        self.largest = _Table(units, 1)
        self.sizes = SizeCounts()
        self._found: dict[tuple[int, int], Totals] = {}

    def add(self, unit: Ints, patches: PatchTable) -> None:
        """Add patches, each to its unit; negative units are left out."""
        if not len(patches):
            return
        kind, area = patches["class"], patches["area"]
        values = np.stack([patches[name] for name in SUMS], axis=1)
        add_sums(self.sums.rows(unit, kind), values, self.sums.values)
        big = (unit >= 0) & (area >= self.smallest)
        unit, kind, area = unit[big], kind[big], area[big]
        group = self.counted.rows(unit, kind)
        values = np.stack([np.ones(len(area), np.int64), area, np.zeros(len(area), np.int64)], axis=1)
        add_sums(group, values, self.counted.values)
        add_products(self.squares.rows(unit, kind), area, area, self.squares.values)
        raise_largest(self.largest.rows(unit, kind), area, self.largest.values[:, 0])
        self.sizes.add(unit, kind, area)

    def add_across(self, unit: Ints, parts: PatchTable, whole: PatchTable) -> None:
        """Add parts of patches by unit, with the whole patch of each."""
        big = (unit >= 0) & (whole["area"] >= self.smallest)
        unit, kind = unit[big], parts["class"][big]
        inside, complete = parts["area"][big], whole["area"][big]
        add_products(self.across.rows(unit, kind), inside, complete, self.across.values)
        values = np.zeros((len(inside), 3), np.int64)
        values[:, 2] = whole["border_edge"][big] > 0
        add_sums(self.counted.rows(unit, kind), values, self.counted.values)

    @property
    def classes(self) -> int:
        """Return the number of classes met."""
        return self.sums.classes

    def of(self, unit: int, kind: int) -> Totals:
        """Return the totals of one unit and class; ask once all patches were added."""
        if (unit, kind) not in self._found:
            self._found[unit, kind] = self._totals(unit, kind)
        return self._found[unit, kind]

    def _totals(self, unit: int, kind: int) -> Totals:
        sums = dict(zip(SUMS, self.sums.get(unit, kind), strict=True))
        count, area, open_patches = self.counted.get(unit, kind)
        return Totals(
            area=sums["area"],
            inner_edge=sums["edge"] - sums["border_edge"] - sums["zone_edge"] - sums["barrier_edge"],
            outer_edge=sums["edge"],
            patches=count,
            patch_area=area,
            squares=_number(self.squares.get(unit, kind)),
            across=_number(self.across.get(unit, kind)),
            largest=self.largest.get(unit, kind)[0],
            median=self.sizes.median(unit, kind),
            open_patches=open_patches,
        )


@dataclass(frozen=True, slots=True)
class Totals:
    """Totals of one unit and class, in the grid's units.

    Attributes
    ----------
    area : of all its cells
    inner_edge : class-change edges of its cells; outer_edge : also those to map edge, zones and barriers
    patches : number of patches that are large enough; patch_area : their area
    squares : sum of the squares of their areas
    across : sum of the area inside times the area of the whole patch
    largest, median : area of a patch
    open_patches : whole patches with a part in the unit that reach the edge of the data
    """

    area: int
    inner_edge: int
    outer_edge: int
    patches: int
    patch_area: int
    squares: int
    across: int
    largest: int
    median: float
    open_patches: int


def _number(digits: list[int]) -> int:
    return sum(digit << (DIGIT * place) for place, digit in enumerate(digits))


@dataclass
class _Table:
    """A table with one row a unit and class, which grows with the classes."""

    units: int
    width: int
    classes: int = 0
    values: Ints = field(init=False)

    def __post_init__(self) -> None:
        self.values = np.zeros((0, self.width), np.int64)

    def rows(self, unit: Ints, kind: Ints) -> Ints:
        """Return the row of each unit and class, -1 in no unit; make room for classes not met before."""
        missing = int(kind.max(initial=-1)) + 1 - self.classes
        if missing > 0:
            more = np.zeros((missing * self.units, self.width), np.int64)
            self.values, self.classes = np.concatenate([self.values, more]), self.classes + missing
        row: Ints = np.where(unit >= 0, kind * self.units + unit, -1)
        return row

    def get(self, unit: int, kind: int) -> list[int]:
        """Return the row of a unit and class."""
        if kind >= self.classes:
            return [0] * self.width
        return [int(value) for value in self.values[kind * self.units + unit]]


class SizeCounts:
    """How many patches of each area there are, by unit and class, for medians."""

    def __init__(self) -> None:
        self._group, self._area, self._counts = (np.empty(0, np.int64) for _ in range(3))
        self._waiting: list[tuple[Ints, Ints]] = []
        self._n_waiting = 0
        self._rounded = False

    def add(self, unit: Ints, kind: Ints, area: Ints) -> None:
        """Add patches."""
        self._waiting.append((unit * _FAR + kind, area))
        self._n_waiting += len(area)
        if self._n_waiting > WAITING:
            self._settle()

    def _settle(self) -> None:
        if not self._n_waiting:
            return
        group = np.concatenate([group for group, _ in self._waiting])
        area = np.concatenate([area for _, area in self._waiting])
        self._waiting, self._n_waiting = [], 0
        names, number = np.unique(group, return_inverse=True)
        bucketed, offsets = np.empty_like(area), np.zeros(len(names) + 1, np.int64)
        fill_buckets(number, area, bucketed, offsets)
        for first, stop in pairwise(offsets):
            bucketed[first:stop].sort()
        self._merge(np.repeat(names, np.diff(offsets)), bucketed)
        if len(self._counts) > MOST_SIZES and not self._rounded:
            self._rounded = True
            self._merge(self._group[:0], self._area[:0])

    def _merge(self, group: Ints, area: Ints) -> None:
        """Take in areas that are in order by group: keep different ones, and how often each occurs."""
        group, area, counts = _counted(group, area, np.ones(len(area), np.int64))
        group, area = np.concatenate([self._group, group]), np.concatenate([self._area, area])
        counts = np.concatenate([self._counts, counts])
        if self._rounded:
            area = _round_bits(area)
        order = np.lexsort((area, group))
        self._group, self._area, self._counts = _counted(group[order], area[order], counts[order])

    def median(self, unit: int, kind: int) -> float:
        """Return the median area of a unit and class, NaN where it has no patch."""
        self._settle()
        low, high = (
            int(np.searchsorted(self._group, unit * _FAR + kind, side)) for side in ("left", "right")
        )
        if low == high:
            return float("nan")
        areas, running = self._area[low:high], np.cumsum(self._counts[low:high])
        middle = [(running[-1] - 1) // 2, running[-1] // 2]
        first, second = (float(areas[np.searchsorted(running, place, "right")]) for place in middle)
        return first + (second - first) / 2


_FAR = 1 << 32


def _counted(group: Ints, area: Ints, counts: Ints) -> tuple[Ints, Ints, Ints]:
    """Return the different ones of areas that are in order by group, and how often each occurs."""
    if not len(area):
        return group, area, counts
    starts = np.flatnonzero(np.r_[True, (np.diff(group) != 0) | (np.diff(area) != 0)])
    return group[starts], area[starts], np.add.reduceat(counts, starts)


def _round_bits(area: Ints) -> Ints:
    """Return areas in the middle of their bins, whose width is 2^-12 of the area."""
    _, exponent = np.frexp(area.astype(np.float64))
    step = np.maximum(exponent - SIZE_BITS - 1, 0).astype(np.int64)
    half = np.where(step > 0, np.left_shift(1, np.maximum(step - 1, 0)), 0)
    rounded: Ints = np.left_shift(np.right_shift(area, step), step) + half
    return rounded
