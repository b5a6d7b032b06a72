"""Hand out the pieces that no run of the last row belongs to, and renumber the others."""

from __future__ import annotations

import numpy as np

from geofractal.kernels.jit import kernel
from geofractal.kernels.patch_tables import (
    LABEL,
    LAST_ROW,
    LEFT,
    N_LABELS,
    N_LINKS,
    N_RINGS,
    N_RUNS,
    RIGHT,
    RING_LABEL,
    SUMS_FROM,
    Ints,
    join,
)


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
