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

N_LABELS, N_RUNS, N_LINKS, N_RINGS = range(4)
"""Places of the state: labels and rings in use, runs of the last row, links between zones."""

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
        return sizes[line, 0] * (stop - start)
    return sizes[line, stop] - sizes[line, start]


@kernel
def upright(height: Ints, line: int, column: int) -> int:
    """Return the length of the vertical cell edge at a column."""
    return height[line, 0] if height.shape[1] == 1 else height[line, column]


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
        runs[n, START], runs[n, STOP], runs[n, KIND], runs[n, PLACE] = start, stop, kind, place
        n += 1
        start = stop
    return n


@kernel
def linked(cuts: NDArray[np.uint8], up_start: int, up_stop: int, start: int, stop: int, eight: bool) -> bool:
    """Return whether some link from the cells of an upper run to those of a lower one is left."""
    for c in range(max(up_start, start), min(up_stop, stop)):
        if not cuts[c] & CUT_DOWN:
            return True
    if eight:
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
def new_label(labels: Ints, parent: Ints, state: Ints, run: Ints, row: int) -> int:
    """Begin a piece at a run that continues nothing above it."""
    label = state[N_LABELS]
    state[N_LABELS] = label + 1
    parent[label] = label
    labels[label, :] = 0
    labels[label, CLASS], labels[label, ZONE] = run[KIND], run[PLACE]
    labels[label, FIRST_ROW], labels[label, FIRST_COLUMN] = row, run[START]
    labels[label, LEFT], labels[label, RIGHT] = run[START], run[STOP] - 1
    return label


@kernel
def meet_beside(
    left: Ints, right: Ints, cut: bool, size: int, labels: Ints, links: Ints, state: Ints
) -> None:
    """Account for the vertical edge between two neighbouring runs of a row."""
    if left[LABEL] < 0:
        labels[right[LABEL], BORDER] += size
    elif right[LABEL] < 0:
        labels[left[LABEL], BORDER] += size
    elif left[KIND] == right[KIND]:
        column = BARRIER if cut else ZONE_EDGE
        labels[left[LABEL], column] += size
        labels[right[LABEL], column] += size
        if not cut:
            links[state[N_LINKS], 0], links[state[N_LINKS], 1] = left[LABEL], right[LABEL]
            state[N_LINKS] += 1


@kernel
def join_above(
    run: Ints,
    upper: Ints,
    first: int,
    n_upper: int,
    row: int,
    cuts_above: NDArray[np.uint8],
    width: Ints,
    line: int,
    corner: int,
    eight: bool,
    labels: Ints,
    parent: Ints,
    links: Ints,
    pairs: Ints,
    n_pairs: int,
    number: int,
    state: Ints,
) -> int:
    """Give a run its label from the runs that touch it from above; return the number of pairs so far."""
    start, stop, kind, place = run[START], run[STOP], run[KIND], run[PLACE]
    reach, barred = 1 if eight else 0, cuts_above.size > 0
    label, shared, border, barrier, zone_edge, equal = -1, 0, 0, 0, 0, 0
    first_link = state[N_LINKS]
    i = first
    while i < n_upper and upper[i, START] < stop + reach:
        low, high = max(start, upper[i, START]), min(stop, upper[i, STOP])
        if upper[i, KIND] == kind:
            open_link = kind >= 0 and (
                not barred or linked(cuts_above, upper[i, START], upper[i, STOP], start, stop, eight)
            )
            met = span(width, line, low, high) if high > low else 0
            if kind >= 0 and barred and high > low:
                closed = barred_length(cuts_above, width, line, low, high)
                barrier += closed
                labels[upper[i, LABEL], BARRIER] += closed
                met -= closed
            if kind >= 0 and upper[i, PLACE] != place:
                zone_edge += met
                labels[upper[i, LABEL], ZONE_EDGE] += met
                if open_link:
                    links[state[N_LINKS], 0], links[state[N_LINKS], 1] = upper[i, LABEL], -1
                    state[N_LINKS] += 1
            elif kind >= 0:
                shared += 2 * met
                if open_link:
                    root = find(parent, upper[i, LABEL])
                    label = root if label < 0 or label == root else join(parent, label, root)
                    if high > low:
                        equal += (upper[i, START] == start) + (upper[i, STOP] == stop)
                    pairs[n_pairs, 0], pairs[n_pairs, 1] = i, number
                    n_pairs += 1
        elif high > low:
            if upper[i, KIND] < 0:
                border += span(width, line, low, high)
            elif kind < 0:
                labels[upper[i, LABEL], BORDER] += span(width, line, low, high)
        i += 1
    if kind < 0:
        run[LABEL] = -1
        return n_pairs
    if label < 0:
        label = new_label(labels, parent, state, run, row)
    run[LABEL] = label
    for k in range(first_link, state[N_LINKS]):
        links[k, 1] = label
    labels[label, EDGE] -= shared
    labels[label, BORDER] += border
    labels[label, BARRIER] += barrier
    labels[label, ZONE_EDGE] += zone_edge
    labels[label, CORNERS] -= 2 * equal * corner
    return n_pairs


@kernel
def add_run(
    run: Ints,
    row: int,
    area: Ints,
    height: Ints,
    width: Ints,
    line: int,
    above: int,
    below: int,
    corners: int,
    labels: Ints,
) -> None:
    """Add a run's cells and its whole outline to its piece; what it shares with others is taken off there."""
    label, start, stop = run[LABEL], run[START], run[STOP]
    labels[label, LAST_ROW] = row
    labels[label, LEFT] = min(labels[label, LEFT], start)
    labels[label, RIGHT] = max(labels[label, RIGHT], stop - 1)
    labels[label, CELLS] += stop - start
    labels[label, AREA] += span(area, line, start, stop)
    sides = upright(height, line, start) + upright(height, line, stop)
    labels[label, EDGE] += sides + span(width, above, start, stop) + span(width, below, start, stop)
    labels[label, CORNERS] += corners


@kernel
def ring_end(
    rings: Ints, ring: int, sign: int, column: int, row_line: int, area: Ints, height: Ints
) -> None:
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
        lower[j, LEFT_RING] = -1
    for i in range(n_upper):
        upper[i, PAIRS], upper[i, LAST_BELOW] = 0, -1
    for t in range(n_pairs):
        upper[pairs[t, 0], PAIRS] += 1
    for i in range(n_upper):
        if upper[i, LABEL] >= 0 and upper[i, PAIRS] == 0:
            ring = join(ring_parent, upper[i, LEFT_RING], upper[i, RIGHT_RING])
            rings[ring, RING_LENGTH] += span(width, edge_line, upper[i, START], upper[i, STOP])
    for t in range(n_pairs):
        i, j = pairs[t, 0], pairs[t, 1]
        if t > 0 and pairs[t - 1, 1] == j:
            i0 = pairs[t - 1, 0]
            ring = join(ring_parent, upper[i0, RIGHT_RING], upper[i, LEFT_RING])
            here, there = upper[i0, STOP], upper[i, START]
        elif upper[i, LAST_BELOW] >= 0:
            j0 = upper[i, LAST_BELOW]
            ring = new_ring(rings, ring_parent, state, lower[j, LABEL])
            lower[j0, RIGHT_RING] = lower[j, LEFT_RING] = ring
            here, there = lower[j0, STOP], lower[j, START]
        else:
            ring = find(ring_parent, upper[i, LEFT_RING])
            lower[j, LEFT_RING] = ring
            here, there = upper[i, START], lower[j, START]
        rings[ring, RING_LENGTH] += span(width, edge_line, min(here, there), max(here, there))
        upper[i, PAIRS] -= 1
        upper[i, LAST_BELOW] = j
        if upper[i, PAIRS] == 0 and (t + 1 == n_pairs or pairs[t + 1, 1] != j):
            ring = find(ring_parent, upper[i, RIGHT_RING])
            lower[j, RIGHT_RING] = ring
            here, there = upper[i, STOP], lower[j, STOP]
            rings[ring, RING_LENGTH] += span(width, edge_line, min(here, there), max(here, there))
    for j in range(n_lower):
        if lower[j, LABEL] < 0:
            continue
        if lower[j, LEFT_RING] < 0:
            ring = new_ring(rings, ring_parent, state, lower[j, LABEL])
            lower[j, LEFT_RING] = lower[j, RIGHT_RING] = ring
            rings[ring, RING_LENGTH] += span(width, edge_line, lower[j, START], lower[j, STOP])
        ring_end(rings, lower[j, LEFT_RING], -1, lower[j, START], row_line, area, height)
        ring_end(rings, lower[j, RIGHT_RING], 1, lower[j, STOP], row_line, area, height)


@kernel
def new_ring(rings: Ints, ring_parent: Ints, state: Ints, label: int) -> int:
    """Begin a ring of a piece."""
    ring = state[N_RINGS]
    state[N_RINGS] = ring + 1
    ring_parent[ring] = ring
    rings[ring, RING_LENGTH] = rings[ring, RING_AREA] = 0
    rings[ring, RING_LABEL] = label
    return ring


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
    eight: bool,
    with_rings: bool,
    labels: Ints,
    parent: Ints,
    links: Ints,
    rings: Ints,
    ring_parent: Ints,
    upper: Ints,
    lower: Ints,
    pairs: Ints,
    state: Ints,
) -> int:
    """Label rows `row` and following of a strip; return the row at which a table is full, or their number.

    Parameters
    ----------
    codes, zones, cuts : the strip; the last two may be empty
    cuts_before : cuts of the row above the strip; empty without barriers
    corner : by line of edges, what one corner shortens a smoothed outline
    upper, lower : runs of the last row, and room for the next; exchanged row by row, the last one in `upper`
    """
    reach = 1 if eight else 0
    while row < codes.shape[0]:
        n_lower, n_upper = find_runs(codes, zones, cuts, row, lower), state[N_RUNS]
        if (
            state[N_LABELS] + n_lower > labels.shape[0]
            or state[N_LINKS] + n_upper + 2 * n_lower > links.shape[0]
            or (with_rings and state[N_RINGS] + 2 * n_lower > rings.shape[0])
        ):
            return row
        line, above, below = area_line[row], edge_line[row], edge_line[row + 1]
        corners = 2 * (corner[above] + corner[below])
        cuts_above = cuts[row - 1] if row > 0 and cuts.size > 0 else cuts_before
        first, n_pairs = 0, 0
        for j in range(n_lower):
            run = lower[j]
            while upper[first, STOP] + reach <= run[START]:
                first += 1
            n_pairs = join_above(
                run, upper, first, n_upper, first_row + row, cuts_above, width, above, corner[above], eight,
                labels, parent, links, pairs, n_pairs, j, state,
            )  # fmt: skip
            if run[LABEL] >= 0:
                add_run(run, first_row + row, area, height, width, line, above, below, corners, labels)
            if j > 0 and (run[LABEL] >= 0 or lower[j - 1, LABEL] >= 0):
                cut = cuts.size > 0 and cuts[row, run[START] - 1] & CUT_RIGHT > 0
                size = upright(height, line, run[START])
                meet_beside(lower[j - 1], run, cut, size, labels, links, state)
        if lower[0, LABEL] >= 0:
            labels[lower[0, LABEL], BORDER] += upright(height, line, 0)
        if lower[n_lower - 1, LABEL] >= 0:
            labels[lower[n_lower - 1, LABEL], BORDER] += upright(height, line, codes.shape[1])
        if with_rings:
            join_rings(
                upper, n_upper, lower, n_lower, pairs, n_pairs, width, above, area, height, line,
                rings, ring_parent, state,
            )  # fmt: skip
        for j in range(n_lower):
            upper[j] = lower[j]
        state[N_RUNS] = n_lower
        row += 1
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
def settle_rings(
    rings: Ints, ring_parent: Ints, labels: Ints, parent: Ints, runs: Ints, state: Ints
) -> None:
    """Give finished rings to their pieces: the one that runs round it, and holes; keep the others."""
    n = state[N_RINGS]
    number = np.full(n, -1, np.int64)
    for j in range(state[N_RUNS]):
        if runs[j, LABEL] >= 0:
            for end in (LEFT_RING, RIGHT_RING):
                runs[j, end] = find(ring_parent, runs[j, end])
                number[runs[j, end]] = 0
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
        if runs[j, LABEL] >= 0:
            runs[j, LEFT_RING], runs[j, RIGHT_RING] = number[runs[j, LEFT_RING]], number[runs[j, RIGHT_RING]]
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
def retire(
    labels: Ints, parent: Ints, runs: Ints, rings: Ints, state: Ints
) -> tuple[Ints, Ints, Ints]:
    """Take out the settled pieces that no run of the last row belongs to; renumber the others in order.

    Returns
    -------
    the lines of those taken out, the labels they had, and the labels that those who stay had
    """
    n = state[N_LABELS]
    number = np.full(n, -1, np.int64)
    for j in range(state[N_RUNS]):
        if runs[j, LABEL] >= 0:
            number[parent[runs[j, LABEL]]] = 0
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
        if runs[j, LABEL] >= 0:
            runs[j, LABEL] = number[parent[runs[j, LABEL]]]
    for k in range(state[N_RINGS]):
        rings[k, RING_LABEL] = number[rings[k, RING_LABEL]]
    for i in range(stay):
        parent[i] = i
    state[N_LABELS], state[N_LINKS] = stay, 0
    return done, done_labels, kept
