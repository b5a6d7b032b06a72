"""Outlines of patches from the runs of their cells."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import find, join

Ints = NDArray[np.int64]

PATCH, ROW, FROM, TO, LEAVES_DOWN, COMES_FROM_ABOVE = range(6)
"""Columns of an edge along a row boundary, walked with the patch on the right hand (rows count downwards)."""


@kernel
def row_edges(runs: Ints) -> Ints:
    """Return the edges of patches along row boundaries, and where their outline comes from and goes to.

    Cells that meet at a corner only are walked round one by one, so that no two parts of an outline cross.

    Parameters
    ----------
    runs : (n, 4) patch, row, first column, column after the last; by patch, then in scan order

    Returns
    -------
    (m, 6) patch, row, first and last column in the order walked, whether the outline goes on downwards,
    whether it came from above
    """
    edges, n, m, upper = np.empty((4 * len(runs), 6), np.int64), len(runs), 0, 0
    begin = 0
    while begin < n:
        patch, row = runs[begin, 0], runs[begin, 1]
        if begin == 0 or runs[begin - 1, 0] != patch:
            upper = begin  # nothing above the first row
        end = begin
        while end < n and runs[end, 0] == patch and runs[end, 1] == row:
            end += 1
        m = boundary(runs, upper, begin, begin, end, row, patch, edges, m)
        follows = end < n and runs[end, 0] == patch and runs[end, 1] == row + 1
        if not follows:
            m = boundary(runs, begin, end, end, end, row + 1, patch, edges, m)
            upper = end
        else:
            upper = begin
        begin = end
    return edges[:m]


@kernel
def boundary(
    runs: Ints,
    upper: int,
    upper_end: int,
    lower: int,
    lower_end: int,
    row: int,
    patch: int,
    edges: Ints,
    m: int,
) -> int:
    """Write the edges between the runs above and below a row boundary; return how many there are now."""
    above, below, opened = 0, 0, 0
    while upper < upper_end or lower < lower_end:
        at = -1
        if upper < upper_end:
            at = runs[upper, 3] if above else runs[upper, 2]
        if lower < lower_end:
            other = runs[lower, 3] if below else runs[lower, 2]
            at = other if at < 0 else min(at, other)
        new_above, new_below = above, below
        while upper < upper_end and runs[upper, 3 if new_above else 2] == at:
            upper += new_above
            new_above = 1 - new_above
        while lower < lower_end and runs[lower, 3 if new_below else 2] == at:
            lower += new_below
            new_below = 1 - new_below
        kind, new_kind = below - above, new_below - new_above
        if kind != new_kind:
            if kind > 0:
                edges[m, TO], edges[m, LEAVES_DOWN] = at, 1 - new_below
            elif kind < 0:
                edges[m, FROM], edges[m, COMES_FROM_ABOVE] = at, 1 - new_above
            m += opened
            opened = 0
            if new_kind != 0:
                edges[m, PATCH], edges[m, ROW] = patch, row
                opened = 1
            if new_kind > 0:
                edges[m, FROM], edges[m, COMES_FROM_ABOVE] = at, below
            elif new_kind < 0:
                edges[m, TO], edges[m, LEAVES_DOWN] = at, above
        above, below = new_above, new_below
    return m


@kernel
def rings_of(following: Ints) -> tuple[Ints, Ints]:
    """Return edges in the order of their closed rings, and where each ring begins (with the end appended).

    Parameters
    ----------
    following : (m,) the edge after each edge; a permutation
    """
    m = len(following)
    order, begins, seen = np.empty(m, np.int64), np.empty(m + 1, np.int64), np.zeros(m, np.bool_)
    n = rings = 0
    for first in range(m):
        edge = first
        if not seen[edge]:
            begins[rings] = n
            rings += 1
        while not seen[edge]:
            seen[edge] = True
            order[n] = edge
            n += 1
            edge = following[edge]
    begins[rings] = m
    return order, begins[: rings + 1]


@kernel
def cut_at_repeats(begins: Ints, before: Ints) -> tuple[Ints, Ints]:
    """Cut closed walks into rings that touch no corner twice.

    Parameters
    ----------
    begins : (w + 1,) where each walk begins, with the end
    before : (m,) the corner at which the walk touched the same point before, -1 where it did not

    Returns
    -------
    The corners in the order of rings, and where each ring begins (with the end appended).
    """
    m, n, rings = len(before), 0, 0
    order, found = np.empty(m, np.int64), np.empty(m + 1, np.int64)
    path, place = np.empty(m, np.int64), np.full(m, -1, np.int64)  # walked and not cut off; where in it
    for walk in range(len(begins) - 1):
        depth = 0
        for corner in range(begins[walk], begins[walk + 1]):
            start = place[before[corner]] if before[corner] >= 0 else -1
            if start < 0:
                place[corner], path[depth] = depth, corner
                depth += 1
                continue
            found[rings] = n
            rings += 1
            for k in range(start, depth):
                order[n] = path[k]
                n += 1
                if k > start:
                    place[path[k]] = -1
            depth = start + 1
        found[rings] = n
        rings += 1
        order[n : n + depth] = path[:depth]
        n += depth
    found[rings] = n
    return order, found[: rings + 1]


@kernel
def pieces_of_runs(runs: Ints) -> Ints:
    """Return a number for each run, equal for those of a patch that hang together by sides of cells.

    Parameters
    ----------
    runs : as of `row_edges`
    """
    parent, above = np.arange(len(runs)), 0
    for run in range(len(runs)):
        patch, row, first, stop = runs[run, 0], runs[run, 1], runs[run, 2], runs[run, 3]
        while above < run and (
            runs[above, 0] != patch
            or runs[above, 1] < row - 1
            or (runs[above, 1] == row - 1 and runs[above, 3] <= first)
        ):
            above += 1
        at = above
        while at < run and runs[at, 1] == row - 1 and runs[at, 2] < stop:
            join(parent, at, run)
            at += 1
    for run in range(len(runs)):
        parent[run] = find(parent, run)
    return parent
