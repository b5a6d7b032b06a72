"""Patches in groups, such as by zone and class: those that are large enough, and how many are not."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd


def patch_groups(
    patches: pd.DataFrame, by: Sequence[str], small: pd.Series[bool], smaller: pd.DataFrame | None
) -> Iterator[tuple[tuple[Any, ...], pd.DataFrame, int]]:
    """Yield each group's key, its patches that are large enough, and the number of those that are not.

    Most patches of a large map are small: they are counted, and only the rest is sorted into groups. Patches
    without a key are in no group.

    Parameters
    ----------
    patches : table with the columns `by`
    by : columns that make a group; none make one group
    small : which patches are only counted
    smaller : further ones that the table leaves out: columns `by`, and ``patches``, their number
    """
    number, levels = _numbered(patches, by, smaller)
    of, of_smaller = number[: len(patches)], number[len(patches) :]
    counts = np.bincount(of[small & (of >= 0)], minlength=number.max(initial=-1) + 1)
    if smaller is not None:
        np.add.at(counts, of_smaller, smaller["patches"].to_numpy())
    large = np.flatnonzero(~small & (of >= 0))
    of_large = of[large]
    rows = large[np.argsort(of_large, kind="stable")]
    stops = np.cumsum(np.bincount(of_large, minlength=len(counts)))
    for group in np.unique(number[number >= 0]):
        place = np.unravel_index(group, [len(values) for values in levels]) if levels else ()
        key = tuple(values[at] for values, at in zip(levels, place, strict=True))
        start = stops[group - 1] if group else 0
        yield key, patches.iloc[rows[start : stops[group]]], int(counts[group])


def _numbered(
    patches: pd.DataFrame, by: Sequence[str], smaller: pd.DataFrame | None
) -> tuple[NDArray[np.int32], list[Any]]:
    """Return the number of each patch's group, in the order of the keys, and the values of each key.

    A patch without a key has -1. Rows of `smaller` follow those of `patches`.
    """
    import pandas as pd

    number = np.zeros(len(patches) + (0 if smaller is None else len(smaller)), np.int32)
    levels = []
    for name in by:
        keys = patches[name] if smaller is None else pd.concat([patches[name], smaller[name]])
        codes, values = pd.factorize(keys, sort=True)
        number = np.where((codes < 0) | (number < 0), -1, number * len(values) + codes).astype(np.int32)
        levels.append(values)
    return number, levels
