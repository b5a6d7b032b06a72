"""Label a class map row by row: runs of equal cells, joined from row to row, summed as they are met.

A *piece* is a set of linked cells of one class and one zone. Every piece owns a line of whole-number sums
(`LINES`); pieces found to be one are joined in a forest whose roots are the smallest labels, hence those of
the first cell in scan order. `label_rows` goes on until the table of labels is full; `retire` then hands
out the pieces that no run of the last row belongs to and renumbers the others.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Ints = NDArray[np.int64]

LINES = (
    "class",
    "zone",
    "first_row",
    "first_column",
    "last_row",
    "left_column",
    "right_column",
    "cells",
    "area",
    "edge",
    "border_edge",
    "zone_edge",
    "barrier_edge",
    "corners",
    "outer_edge",
    "filled_area",
    "holes",
)
CLASS, ZONE, FIRST_ROW, FIRST_COLUMN, LAST_ROW, LEFT, RIGHT = range(7)
CELLS, AREA, EDGE, BORDER, ZONE_EDGE, BARRIER, CORNERS, OUTER, FILLED, HOLES = range(7, 17)
SUMS_FROM = CELLS

START, STOP, KIND, PLACE, LABEL, LEFT_RING, RIGHT_RING, PAIRS, LAST_BELOW = range(9)
RUN = 9
"""Columns of a run: first cell, cell after the last, class, zone, label, rings of its two ends, pairs with
runs below that are still to come, and the last run below it so far."""

N_LABELS, N_RUNS, N_LINKS, N_RINGS, N_KEPT = range(5)
"""Places of the state: labels and rings in use, runs of the last row, links between zones, runs kept."""

RING_LENGTH, RING_AREA, RING_LABEL = range(3)

CUT_RIGHT, CUT_DOWN, CUT_DOWN_RIGHT, CUT_DOWN_LEFT = 1, 2, 4, 8


@kernel
def find(parent: Ints, i: int) -> int:
    """Return the root of `i`, halving the path on the way."""
    while parent[i] != i:
        parent[i] = parent[parent[i]]
        i = parent[i]
    return i


@kernel
def join(parent: Ints, i: int, j: int) -> int:
    """Make two trees one; the smaller root stays."""
    a, b = find(parent, i), find(parent, j)
    low, high = min(a, b), max(a, b)
    parent[high] = low
    return low


@kernel
def span(sizes: Ints, line: int, start: int, stop: int) -> int:
    """Return the size of the cells start..stop-1 of a line of sizes, constant or running sums."""
    if sizes.shape[1] == 1:
        return int(sizes[line, 0] * (stop - start))
    return int(sizes[line, stop] - sizes[line, start])


@kernel
def upright(height: Ints, line: int, column: int) -> int:
    """Return the length of the vertical cell edge at a column."""
    return int(height[line, 0] if height.shape[1] == 1 else height[line, column])


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
def ring_end(rings: Ints, ring: int, sign: int, column: int, row_line: int, area: Ints, height: Ints) -> None:
    """Add the vertical end of a run to a ring: its length, and the signed area to its left."""
    rings[ring, RING_LENGTH] += upright(height, row_line, column)
    rings[ring, RING_AREA] += sign * span(area, row_line, 0, column)


@kernel
def join_rings(
    upper: Ints,
    n_upper: int,
    lower: Ints,
    n_lower: int,
    pairs: Ints,
    n_pairs: int,
    width: Ints,
    edge_line: int,
    area: Ints,
    height: Ints,
    row_line: int,
    rings: Ints,
    ring_parent: Ints,
    state: Ints,
) -> None:
    """Continue the closed outlines of all pieces from one row of runs to the next.

    Linked pairs of upper and lower runs come in the order of the lower ones. Two pairs that share a run
    enclose a gap, which closes or opens there; the outer ends of a chain of pairs continue downwards.
    """
    for j in range(n_lower):
        lower[LEFT_RING, j] = -1
    for i in range(n_upper):
        upper[PAIRS, i], upper[LAST_BELOW, i] = 0, -1
    for t in range(n_pairs):
        upper[PAIRS, pairs[t, 0]] += 1
    for i in range(n_upper):
        if upper[LABEL, i] >= 0 and upper[PAIRS, i] == 0:
            ring = join(ring_parent, upper[LEFT_RING, i], upper[RIGHT_RING, i])
            rings[ring, RING_LENGTH] += span(width, edge_line, upper[START, i], upper[STOP, i])
    for t in range(n_pairs):
        i, j = pairs[t, 0], pairs[t, 1]
        if t > 0 and pairs[t - 1, 1] == j:
            i0 = pairs[t - 1, 0]
            ring = join(ring_parent, upper[RIGHT_RING, i0], upper[LEFT_RING, i])
            here, there = upper[STOP, i0], upper[START, i]
        elif upper[LAST_BELOW, i] >= 0:
            j0 = upper[LAST_BELOW, i]
            ring = new_ring(rings, ring_parent, state, lower[LABEL, j])
            lower[RIGHT_RING, j0] = lower[LEFT_RING, j] = ring
            here, there = lower[STOP, j0], lower[START, j]
        else:
            ring = find(ring_parent, upper[LEFT_RING, i])
            lower[LEFT_RING, j] = ring
            here, there = upper[START, i], lower[START, j]
        rings[ring, RING_LENGTH] += span(width, edge_line, min(here, there), max(here, there))
        upper[PAIRS, i] -= 1
        upper[LAST_BELOW, i] = j
        if upper[PAIRS, i] == 0 and (t + 1 == n_pairs or pairs[t + 1, 1] != j):
            ring = find(ring_parent, upper[RIGHT_RING, i])
            lower[RIGHT_RING, j] = ring
            here, there = upper[STOP, i], lower[STOP, j]
            rings[ring, RING_LENGTH] += span(width, edge_line, min(here, there), max(here, there))
    for j in range(n_lower):
        if lower[LABEL, j] < 0:
            continue
        if lower[LEFT_RING, j] < 0:
            ring = new_ring(rings, ring_parent, state, lower[LABEL, j])
            lower[LEFT_RING, j] = lower[RIGHT_RING, j] = ring
            rings[ring, RING_LENGTH] += span(width, edge_line, lower[START, j], lower[STOP, j])
        ring_end(rings, lower[LEFT_RING, j], -1, lower[START, j], row_line, area, height)
        ring_end(rings, lower[RIGHT_RING, j], 1, lower[STOP, j], row_line, area, height)


@kernel
def new_ring(rings: Ints, ring_parent: Ints, state: Ints, label: int) -> int:
    """Begin a ring of a piece."""
    ring = int(state[N_RINGS])
    state[N_RINGS] = ring + 1
    ring_parent[ring] = ring
    rings[ring, RING_LENGTH] = rings[ring, RING_AREA] = 0
    rings[ring, RING_LABEL] = label
    return ring


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


@kernel
def settle(labels: Ints, parent: Ints, n: int) -> None:
    """Point every label at its root and add its sums there."""
    for i in range(n):
        root = parent[parent[i]]
        parent[i] = root
        if root != i:
            labels[root, LAST_ROW] = max(labels[root, LAST_ROW], labels[i, LAST_ROW])
            labels[root, LEFT] = min(labels[root, LEFT], labels[i, LEFT])
            labels[root, RIGHT] = max(labels[root, RIGHT], labels[i, RIGHT])
            for k in range(SUMS_FROM, labels.shape[1]):
                labels[root, k] += labels[i, k]


@kernel
def settle_rings(rings: Ints, ring_parent: Ints, labels: Ints, parent: Ints, runs: Ints, state: Ints) -> None:
    """Give finished rings to their pieces: the one that runs round it, and holes; keep the others."""
    n = state[N_RINGS]
    number = np.full(n, -1, np.int64)
    for j in range(state[N_RUNS]):
        if runs[LABEL, j] >= 0:
            for end in (LEFT_RING, RIGHT_RING):
                runs[end, j] = find(ring_parent, runs[end, j])
                number[runs[end, j]] = 0
    kept = 0
    for i in range(n):
        root = ring_parent[ring_parent[i]]
        ring_parent[i] = root
        if root != i:
            rings[root, RING_LENGTH] += rings[i, RING_LENGTH]
            rings[root, RING_AREA] += rings[i, RING_AREA]
    for i in range(n):
        if ring_parent[i] != i:
            continue
        label = parent[rings[i, RING_LABEL]]
        if number[i] == 0:
            number[i] = kept
            rings[kept, RING_LENGTH], rings[kept, RING_AREA] = rings[i, RING_LENGTH], rings[i, RING_AREA]
            rings[kept, RING_LABEL] = label
            kept += 1
        elif rings[i, RING_AREA] > 0:
            labels[label, OUTER] += rings[i, RING_LENGTH]
            labels[label, FILLED] += rings[i, RING_AREA]
        else:
            labels[label, HOLES] += 1
    for i in range(kept):
        ring_parent[i] = i
    for j in range(state[N_RUNS]):
        if runs[LABEL, j] >= 0:
            runs[LEFT_RING, j], runs[RIGHT_RING, j] = number[runs[LEFT_RING, j]], number[runs[RIGHT_RING, j]]
    state[N_RINGS] = kept


@kernel
def group_pieces(parent: Ints, n: int, group: Ints, n_live: int, links: Ints, n_links: int) -> None:
    """Find which pieces make one patch across zones; fill `group` with its smallest label, by label.

    `group[:n_live]` gives the group of each piece that was alive before, numbered by any of its labels.
    """
    for i in range(n_live, n):
        group[i] = i
    for i in range(n):
        join(group, i, parent[i])
    for k in range(n_links):
        join(group, links[k, 0], links[k, 1])
    for i in range(n):
        group[i] = group[group[i]]


@kernel
def retire(labels: Ints, parent: Ints, runs: Ints, rings: Ints, state: Ints) -> tuple[Ints, Ints, Ints]:
    """Take out the settled pieces that no run of the last row belongs to; renumber the others in order.

    Returns
    -------
    the lines of those taken out, the labels they had, and the labels that those who stay had
    """
    n = state[N_LABELS]
    number = np.full(n, -1, np.int64)
    for j in range(state[N_RUNS]):
        if runs[LABEL, j] >= 0:
            number[parent[runs[LABEL, j]]] = 0
    stay, go = 0, 0
    for i in range(n):
        if parent[i] == i:
            if number[i] == 0:
                stay += 1
            else:
                go += 1
    done, done_labels = np.empty((go, labels.shape[1]), np.int64), np.empty(go, np.int64)
    kept = np.empty(stay, np.int64)
    stay, go = 0, 0
    for i in range(n):
        if parent[i] != i:
            continue
        if number[i] == 0:
            number[i] = stay
            kept[stay] = i
            labels[stay] = labels[i]
            stay += 1
        else:
            done[go] = labels[i]
            done_labels[go] = i
            go += 1
    for j in range(state[N_RUNS]):
        if runs[LABEL, j] >= 0:
            runs[LABEL, j] = number[parent[runs[LABEL, j]]]
    for k in range(state[N_RINGS]):
        rings[k, RING_LABEL] = number[rings[k, RING_LABEL]]
    for i in range(stay):
        parent[i] = i
    state[N_LABELS], state[N_LINKS] = stay, 0
    return done, done_labels, kept
