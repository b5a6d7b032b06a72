"""Parts that meet end to end: where ends meet, which parts follow each other, and the joined paths.

Part ``i`` has the ends ``2 i`` (its first vertex) and ``2 i + 1`` (its last). Ends that meet share a
node, named by the lowest end in it.
"""

from __future__ import annotations

import numpy as np

from geofractal.kernels.jit import kernel
from geofractal.measure import Bools, Floats, Ints

TOUCH_M = 1e-6
"""Ends nearer than this are one point: a vertex shared in the source, projected twice."""


@kernel
def _distance(a: Floats, b: Floats) -> float:
    square = 0.0
    for c in range(len(a)):
        square += (a[c] - b[c]) ** 2
    return float(np.sqrt(square))


@kernel
def canonical(xy: Floats, part_offsets: Ints, lengths: Floats, flip: Bools) -> None:
    """Fill the length of each part, and whether it is to be read from its end.

    The direction depends on the vertices alone: from the lesser of both ends, or where they are one
    point, towards the lesser neighbour.
    """
    for p in range(len(lengths)):
        first, last = part_offsets[p], part_offsets[p + 1] - 1
        order = 0
        i, j = first, last
        while order == 0 and i < j:
            for c in range(xy.shape[1]):
                if order == 0 and xy[i, c] != xy[j, c]:
                    order = 1 if xy[j, c] < xy[i, c] else -1
            i += 1
            j -= 1
        flip[p] = order == 1
        total = 0.0
        for v in range(first, last):  # summed in one direction, so that rounding is the same for both
            at = first + last - 1 - v if flip[p] else v
            total += _distance(xy[at], xy[at + 1])
        lengths[p] = total


@kernel
def _root(parent: Ints, i: int) -> int:
    for _ in range(len(parent)):
        if parent[i] == i:
            return i
        parent[i] = parent[parent[i]]
        i = parent[i]
    return i


@kernel
def _unite(parent: Ints, a: int, b: int) -> None:
    a, b = _root(parent, a), _root(parent, b)
    parent[max(a, b)] = min(a, b)


@kernel
def near_pairs(ends: Floats, order: Ints, feature: Ints, loose: Bools, reach: float) -> Ints:
    """Return the pairs (n, 2) of ends of one feature that lie within reach, one of them loose.

    `order` sorts the ends by feature and first coordinate.
    """
    pairs = np.empty((0, 2), np.int64)
    for filling in (False, True):
        found = 0
        for a in range(len(order)):
            i = order[a]
            b = a + 1
            while (
                b < len(order) and feature[order[b]] == feature[i] and ends[order[b], 0] - ends[i, 0] <= reach
            ):
                j = order[b]
                if (loose[i] or loose[j]) and _distance(ends[i], ends[j]) <= reach:
                    if filling:
                        pairs[found, 0], pairs[found, 1] = i, j
                    found += 1
                b += 1
        if not filling:
            pairs = np.empty((found, 2), np.int64)
    return pairs


@kernel
def unite_all(node: Ints, pairs: Ints) -> None:
    """Unite the nodes of each pair of ends."""
    for i in range(len(pairs)):
        _unite(node, pairs[i, 0], pairs[i, 1])
    settle(node)


@kernel
def settle(node: Ints) -> None:
    """Give every end the lowest end of its node."""
    for e in range(len(node)):
        node[e] = _root(node, e)


@kernel
def unite_loose(node: Ints, pairs: Ints, feature: Ints, feature_offsets: Ints) -> None:
    """Unite the nodes of each pair in turn, if one of them is still a single end.

    Two nodes with only one part between them stay apart: that part would become a loop.
    """
    degree = np.zeros(len(node), np.int64)
    for e in range(len(node)):
        degree[node[e]] += 1
    for i in range(len(pairs)):
        a, b = _root(node, pairs[i, 0]), _root(node, pairs[i, 1])
        f = feature[a]
        if a != b and (degree[a] == 1 or degree[b] == 1):
            bridged = False
            for e in range(2 * feature_offsets[f], 2 * feature_offsets[f + 1]):
                bridged = bridged or (_root(node, e) == a and _root(node, e ^ 1) == b)
            if not bridged:
                degree[min(a, b)] = degree[a] + degree[b]
                _unite(node, a, b)
    settle(node)


@kernel
def count_pieces(node: Ints, keep: Bools, feature_offsets: Ints, pieces: Ints, branchings: Ints) -> None:
    """Fill each feature's number of connected pieces and of nodes where more than two ends meet."""
    parent = np.arange(len(node))
    degree = np.zeros(len(node), np.int64)
    for p in range(len(keep)):
        if keep[p]:
            degree[node[2 * p]] += 1
            degree[node[2 * p + 1]] += 1
            _unite(parent, node[2 * p], node[2 * p + 1])
    for f in range(len(feature_offsets) - 1):
        for e in range(2 * feature_offsets[f], 2 * feature_offsets[f + 1]):
            branchings[f] += degree[e] > 2
            pieces[f] += degree[e] > 0 and parent[e] == e


@kernel
def chain(node: Ints, keep: Bools, feature_offsets: Ints, order: Ints, entered: Ints) -> tuple[Ints, Ints]:
    """Put parts in a row where exactly two ends meet.

    Fills `order`, the parts kept, chain by chain, and `entered`, the end by which each is entered.
    Returns the offsets of the chains into `order` and of the features into the chains.
    """
    parts = len(keep)
    first, second = np.full(len(node), -1), np.full(len(node), -1)
    degree = np.zeros(len(node), np.int64)
    for e in range(2 * parts):
        if keep[e // 2]:
            degree[node[e]] += 1
            if degree[node[e]] == 1:
                first[node[e]] = e
            else:
                second[node[e]] = e
    chain_offsets, chains_of = np.zeros(parts + 1, np.int64), np.zeros(len(feature_offsets), np.int64)
    waiting = keep.copy()
    placed, chains = 0, 0
    for f in range(len(feature_offsets) - 1):
        a, b = 2 * feature_offsets[f], 2 * feature_offsets[f + 1]
        for rings in (False, True):
            for start in range(a, b):
                if waiting[start // 2] and (rings or degree[node[start]] != 2):
                    e = start
                    going = True
                    while going:
                        waiting[e // 2] = False
                        order[placed], entered[placed] = e // 2, e
                        placed += 1
                        out = e ^ 1
                        e = second[node[out]] if first[node[out]] == out else first[node[out]]
                        going = degree[node[out]] == 2 and waiting[e // 2]
                    chains += 1
                    chain_offsets[chains] = placed
        chains_of[f + 1] = chains
    return chain_offsets[: chains + 1], chains_of


@kernel
def assemble(
    xy: Floats,
    source_vertex: Bools,
    part_offsets: Ints,
    parts: Ints,
    backwards: Bools,
    chain_offsets: Ints,
    rings: Bools,
    tolerance: float,
) -> tuple[Floats, Bools, Ints, Bools]:
    """Return vertices, source flags, part offsets and closed flags of the joined paths.

    Path ``i`` runs through ``parts[chain_offsets[i]:chain_offsets[i + 1]]``, each read backwards where
    said. A vertex that two parts share stands once; a gap becomes an edge. A path is closed where it
    is a ring, or where it is more than four times as long as the tolerance and its ends are within it.
    """
    size = len(chain_offsets) - 1
    for i in range(len(parts)):
        size += part_offsets[parts[i] + 1] - part_offsets[parts[i]]
    out, flags = np.empty((size, xy.shape[1])), np.empty(size, np.bool_)
    offsets, closed = np.zeros(len(chain_offsets), np.int64), np.zeros(len(rings), np.bool_)
    at = 0
    for i in range(len(rings)):
        start = at
        length = 0.0
        for j in range(chain_offsets[i], chain_offsets[i + 1]):
            a, b = part_offsets[parts[j]], part_offsets[parts[j] + 1]
            for v in range(a, b):
                w = a + b - 1 - v if backwards[j] else v
                step = _distance(xy[w], out[at - 1]) if at > start else 0.0
                if v > a or at == start or step > TOUCH_M:
                    for c in range(xy.shape[1]):
                        out[at, c] = xy[w, c]
                    flags[at] = source_vertex[w]
                    length += step
                    at += 1
        gap = _distance(out[start], out[at - 1])
        closed[i] = at - start > 2 and (rings[i] or (gap <= tolerance and length > 4.0 * tolerance))
        if closed[i]:
            at -= gap <= TOUCH_M
            for c in range(xy.shape[1]):
                out[at, c] = out[start, c]
            flags[at] = flags[start]
            at += 1
        offsets[i + 1] = at
    return out[:at], flags[:at], offsets, closed
