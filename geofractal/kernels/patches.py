"""Label a class map row by row: runs of equal cells, joined from row to row, summed as they are met.

`label_rows` goes on until a table is full; `geofractal.kernels.patch_retire.retire` then makes room.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_rings import join_rings
from geofractal.kernels.patch_tables import (
    AREA,
    BARRIER,
    BORDER,
    CELLS,
    CLASS,
    CORNERS,
    CUT_DOWN,
    CUT_DOWN_LEFT,
    CUT_DOWN_RIGHT,
    CUT_RIGHT,
    EDGE,
    FIRST_COLUMN,
    FIRST_ROW,
    KIND,
    LABEL,
    LAST_ROW,
    LEFT,
    N_KEPT,
    N_LABELS,
    N_LINKS,
    N_RINGS,
    N_RUNS,
    PLACE,
    RIGHT,
    START,
    STOP,
    ZONE,
    ZONE_EDGE,
    Ints,
    find,
    span,
    upright,
)


@kernel
def find_runs(
    codes: NDArray[np.int16], zones: NDArray[np.int32], cuts: NDArray[np.uint8], row: int, runs: Ints
) -> int:
    """Write the runs of a row: equal class and zone, no link cut; return how many there are."""
    columns, zoned, barred = codes.shape[1], zones.size > 0, cuts.size > 0
    n, start = 0, 0
    while start < columns:
        kind, place = codes[row, start], zones[row, start] if zoned else 0
        stop = start + 1
        if not zoned and not barred:
            while stop < columns and codes[row, stop] == kind:
                stop += 1
        else:
            while (
                stop < columns
                and codes[row, stop] == kind
                and (not zoned or zones[row, stop] == place)
                and (not barred or not cuts[row, stop - 1] & CUT_RIGHT)
            ):
                stop += 1
        runs[START, n], runs[STOP, n], runs[KIND, n], runs[PLACE, n] = start, stop, kind, place
        n += 1
        start = stop
    return n


@kernel
def linked(cuts: NDArray[np.uint8], up_start: int, up_stop: int, start: int, stop: int, reach: int) -> bool:
    """Return whether some link from the cells of an upper run to those of a lower one is left."""
    for c in range(max(up_start, start), min(up_stop, stop)):
        if not cuts[c] & CUT_DOWN:
            return True
    if reach > 0:
        for c in range(max(up_start, start - 1), min(up_stop, stop - 1)):
            if not cuts[c] & CUT_DOWN_RIGHT:
                return True
        for c in range(max(up_start, start + 1), min(up_stop, stop + 1)):
            if not cuts[c] & CUT_DOWN_LEFT:
                return True
    return False


@kernel
def barred_length(cuts: NDArray[np.uint8], width: Ints, line: int, start: int, stop: int) -> int:
    """Return the length of the edges start..stop-1 that a barrier lies on."""
    total = 0
    for c in range(start, stop):
        if cuts[c] & CUT_DOWN:
            total += span(width, line, c, c + 1)
    return total


@kernel
def keep_run(kept: NDArray[np.int32], state: Ints, row: int, start: int, stop: int, label: int) -> None:
    """Write a run down for the polygon of its patch."""
    n = state[N_KEPT]
    kept[n, 0], kept[n, 1], kept[n, 2], kept[n, 3] = row, start, stop, label
    state[N_KEPT] = n + 1


@kernel
def label_rows(
    codes: NDArray[np.int16],
    zones: NDArray[np.int32],
    cuts: NDArray[np.uint8],
    cuts_before: NDArray[np.uint8],
    row: int,
    first_row: int,
    area: Ints,
    height: Ints,
    width: Ints,
    corner: Ints,
    area_line: Ints,
    edge_line: Ints,
    reach: int,
    labels: Ints,
    parent: Ints,
    links: Ints,
    rings: Ints,
    ring_parent: Ints,
    upper: Ints,
    lower: Ints,
    pairs: Ints,
    kept: NDArray[np.int32],
    state: Ints,
) -> int:
    """Label rows `row` and following of a strip; return the row at which a table is full, or their number.

    Parameters
    ----------
    codes, zones, cuts : the strip; the last two may be empty
    cuts_before : cuts of the row above the strip; empty without barriers
    corner : by line of edges, what one corner shortens a smoothed outline
    reach : 1 where cells that meet at a corner are neighbours, else 0
    rings, ring_parent : empty where outlines are not followed
    kept : (n, 4) row, start, stop and label of every covered run; empty where they are not wanted
    upper, lower : runs of the last row, and room for the next; exchanged row by row, the last one in `upper`
    """
    zoned, barred, with_rings, columns = zones.size > 0, cuts.size > 0, len(rings) > 0, codes.shape[1]
    n_upper, n_labels, n_links = state[N_RUNS], state[N_LABELS], state[N_LINKS]
    begin, with_runs = row, len(kept) > 0
    while row < codes.shape[0]:
        n_lower = find_runs(codes, zones, cuts, row, lower)
        if (
            n_labels + n_lower > labels.shape[0]
            or n_links + n_upper + 2 * n_lower > links.shape[0]
            or (with_rings and state[N_RINGS] + 2 * n_lower > rings.shape[0])
            or (with_runs and state[N_KEPT] + n_lower > len(kept))
        ):
            break
        line, above, below = area_line[row], edge_line[row], edge_line[row + 1]
        cuts_above = cuts[row - 1] if row > 0 and barred else cuts_before
        first, n_pairs = 0, 0
        for j in range(n_lower):
            start, stop, kind, place = lower[START, j], lower[STOP, j], lower[KIND, j], lower[PLACE, j]
            while upper[STOP, first] + reach <= start:
                first += 1
            label, edge, border, zone_edge, barrier, equal = -1, 0, 0, 0, 0, 0
            first_link = n_links
            i = first
            while i < n_upper and upper[START, i] < stop + reach:
                low, high = max(start, upper[START, i]), min(stop, upper[STOP, i])
                if upper[KIND, i] != kind:
                    if high > low:
                        if upper[KIND, i] < 0:
                            border += span(width, above, low, high)
                        elif kind < 0:
                            labels[upper[LABEL, i], BORDER] += span(width, above, low, high)
                elif kind >= 0:
                    met = span(width, above, low, high) if high > low else 0
                    is_open = True
                    if barred:
                        is_open = linked(cuts_above, upper[START, i], upper[STOP, i], start, stop, reach)
                        closed = barred_length(cuts_above, width, above, low, high)
                        labels[upper[LABEL, i], BARRIER] += closed
                        barrier += closed
                        met -= closed
                    if zoned and upper[PLACE, i] != place:
                        labels[upper[LABEL, i], ZONE_EDGE] += met
                        zone_edge += met
                        if is_open:
                            links[n_links, 0] = upper[LABEL, i]
                            n_links += 1
                    else:
                        edge -= 2 * met
                        if is_open:
                            root = find(parent, upper[LABEL, i])
                            if label < 0 or label == root:
                                label = root
                            else:
                                low_root, high_root = min(label, root), max(label, root)
                                parent[high_root] = low_root
                                label = low_root
                            if high > low:
                                equal += int(upper[START, i] == start) + int(upper[STOP, i] == stop)
                            if with_rings:
                                pairs[n_pairs, 0], pairs[n_pairs, 1] = i, j
                                n_pairs += 1
                i += 1
            lower[LABEL, j] = -1
            if kind >= 0:
                if label < 0:
                    label = n_labels
                    n_labels += 1
                    parent[label] = label
                    for k in range(labels.shape[1]):
                        labels[label, k] = 0
                    labels[label, CLASS], labels[label, ZONE] = kind, place
                    labels[label, FIRST_ROW], labels[label, FIRST_COLUMN] = first_row + row, start
                    labels[label, LEFT], labels[label, RIGHT] = start, stop - 1
                for k in range(first_link, n_links):
                    links[k, 1] = label
                lower[LABEL, j] = label
                left_side, right_side = upright(height, line, start), upright(height, line, stop)
                edge += (
                    left_side + right_side + span(width, above, start, stop) + span(width, below, start, stop)
                )
                if stop == columns:
                    border += right_side
                if j == 0 or lower[KIND, j - 1] < 0:
                    border += left_side
                elif lower[KIND, j - 1] == kind:
                    beside = lower[LABEL, j - 1]
                    if barred and cuts[row, start - 1] & CUT_RIGHT:
                        labels[beside, BARRIER] += left_side
                        barrier += left_side
                    else:
                        labels[beside, ZONE_EDGE] += left_side
                        zone_edge += left_side
                        links[n_links, 0], links[n_links, 1] = beside, label
                        n_links += 1
                labels[label, LAST_ROW] = first_row + row
                labels[label, LEFT] = min(labels[label, LEFT], start)
                labels[label, RIGHT] = max(labels[label, RIGHT], stop - 1)
                labels[label, CELLS] += stop - start
                labels[label, AREA] += span(area, line, start, stop)
                labels[label, EDGE] += edge
                labels[label, BORDER] += border
                labels[label, CORNERS] += 2 * (corner[above] + corner[below] - equal * corner[above])
                if with_runs:
                    keep_run(kept, state, first_row + row, start, stop, label)
                if zoned:
                    labels[label, ZONE_EDGE] += zone_edge
                if barred:
                    labels[label, BARRIER] += barrier
            elif j > 0 and lower[LABEL, j - 1] >= 0:
                labels[lower[LABEL, j - 1], BORDER] += upright(height, line, start)
        if with_rings:
            join_rings(
                upper, n_upper, lower, n_lower, pairs, n_pairs, width, above, area, height, line,
                rings, ring_parent, state,
            )  # fmt: skip
        upper, lower = lower, upper
        n_upper = n_lower
        row += 1
    if (row - begin) % 2 == 1:
        lower[:, :n_upper] = upper[:, :n_upper]
    state[N_RUNS], state[N_LABELS], state[N_LINKS] = n_upper, n_labels, n_links
    return row
