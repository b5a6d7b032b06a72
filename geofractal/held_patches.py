"""Patches of a map gathered for a measure: the columns asked for, and counts of what is too small."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from geofractal.measure import CoverPatches

if TYPE_CHECKING:
    import pandas as pd

PLACE = ("zone", "first_row", "first_column")
HELD = ("cells", "area_m2", "perimeter_m", "touches_edge", "filled_area_m2", "holes", *PLACE)


class HeldPatches:
    """Gathers tables of patches column by column, which takes half the memory of joining them.

    Parameters
    ----------
    columns : wanted beside ``cover`` and ``zone``; None for all of them
    """

    def __init__(self, columns: Sequence[str] | None) -> None:
        self._wanted = HELD if columns is None else tuple(name for name in HELD if name in {"zone", *columns})
        self._columns: dict[str, list[Any]] = {}
        self._numbers: dict[str, int] = {}
        self._smaller: Counter[tuple[int, str]] = Counter()

    def add(self, frame: pd.DataFrame) -> None:
        """Add patches; the table may be thrown away then."""
        cover = frame["cover"].cat
        of = np.array(
            [self._numbers.setdefault(name, len(self._numbers)) for name in cover.categories], np.int16
        )
        self._columns.setdefault("cover", []).append(of[cover.codes])
        for name in (
            name for name in self._wanted if name in frame
        ):  # copies: a frame's columns share memory
            kind = np.int32 if name in PLACE else frame[name].dtype
            self._columns.setdefault(name, []).append(frame[name].to_numpy(kind, copy=True))

    def count(self, zone: int, cover: str, patches: int) -> None:
        """Add to the number of patches that are too small."""
        self._smaller[zone, cover] += patches

    def result(self, names: Sequence[str], zones: tuple[int, ...]) -> CoverPatches:
        """Return all that was added, with covers as categories of these names, and forget it."""
        import pandas as pd

        table = {name: np.concatenate(self._columns.pop(name)) for name in [*self._columns]}
        place = np.array([names.index(name) if name in names else -1 for name in self._numbers], np.int16)
        categories = pd.Index(names, dtype=str)
        cover = pd.Categorical.from_codes(place[table.pop("cover")], categories)
        smaller = {
            "zone": np.array([zone for zone, _ in self._smaller], np.int32),
            "cover": pd.Categorical([name for _, name in self._smaller], categories),
            "patches": np.array([*self._smaller.values()], np.int64),
        }
        if not zones:
            del smaller["zone"]
        return CoverPatches(pd.DataFrame({"cover": cover, **table}, copy=False), zones, pd.DataFrame(smaller))


def sifted(
    table: pd.DataFrame, zones: tuple[int, ...], columns: Sequence[str] | None, smallest_area_m2: float
) -> CoverPatches:
    """Return patches that are all at hand as a measure asked for them."""
    keys = ["zone", "cover"] if zones else ["cover"]
    small = table["area_m2"] < smallest_area_m2
    smaller = table[small].groupby(keys, observed=True).size().rename("patches").reset_index()
    wanted = [name for name in table if columns is None or name in {*keys, *columns}]
    return CoverPatches(table.loc[~small, wanted].reset_index(drop=True), zones, smaller)
