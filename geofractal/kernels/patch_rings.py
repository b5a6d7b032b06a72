"""Closed outlines of pieces, followed from row to row: one round each piece, the others round its holes."""

from __future__ import annotations

import numpy as np

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import (
    FILLED,
    HOLES,
    LABEL,
    LAST_BELOW,
    LEFT_RING,
    N_RINGS,
    N_RUNS,
    OUTER,
    PAIRS,
    RIGHT_RING,
    RING_AREA,
    RING_LABEL,
    RING_LENGTH,
    START,
    STOP,
    Ints,
    find,
    join,
    span,
    upright,
)


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
