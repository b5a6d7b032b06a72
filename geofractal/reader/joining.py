"""Parts of a feature that meet end to end made one path, and groups held to a single path."""

from __future__ import annotations

from typing import Literal

import numpy as np

from geofractal.kernels import join as kernels
from geofractal.measure import Bools, Floats, Ints, Lines


def join_parts(
    lines: Lines,
    *,
    tolerance_m: float,
    one_path: bool = False,
    branches: Literal["refuse", "main-path"] = "refuse",
) -> tuple[Lines, dict[int, str], Floats]:
    """Join the parts of each feature that meet end to end, turned round where they must be.

    Where three or more ends meet, none is joined. A part that is there twice counts once. A gap
    within the tolerance becomes an edge, and a path whose ends meet becomes closed. The result does
    not depend on the order in which a feature's parts come, nor on their directions, to the bit.

    Parameters
    ----------
    lines : on a plane or in three dimensions
    tolerance_m : ends this near meet, nearest first; vertices shared in the source always do
    one_path : each feature is a group that must form one path
    branches : refuse a group that does not, or keep the longest of the shortest paths between its
        ends (exact for trees)

    Returns
    -------
    lines : the features kept, in order
    problems : row (of `Lines.rows`) of each feature refused, and why
    left_out_m : (n,) length that each feature kept has lost to its main path
    """
    sorted_parts, flip, lengths = _canonical_order(lines)
    ends = _ends(lines, sorted_parts, flip)
    keep = _first_copies(lines, sorted_parts, flip, lengths, ends)
    node = _nodes(ends, lines.feature_offsets, tolerance_m)
    left_out = np.zeros(len(lines))
    refused: dict[int, str] = {}
    if one_path:
        pieces, branchings = np.zeros((2, len(lines)), np.int64)
        kernels.count_pieces(node, keep, lines.feature_offsets, pieces, branchings)
        for i in np.flatnonzero((pieces > 1) | (branchings > 0)):
            run = slice(lines.feature_offsets[i], lines.feature_offsets[i + 1])
            if branches == "refuse":
                refused[int(lines.rows[i])] = _no_path(int(pieces[i]), int(branchings[i]))
                keep[run] = False
            else:
                there = keep[run].copy()
                keep[run] = _main_path(
                    node[2 * run.start : 2 * run.stop] - 2 * run.start, there, lengths[run]
                )
                left_out[i] = lengths[run][there & ~keep[run]].sum()
    kept = np.logical_or.reduceat(keep, lines.feature_offsets[:-1]) if len(lines) else np.zeros(0, np.bool_)
    joined = _assembled(lines, sorted_parts, flip, node, keep, kept, tolerance_m)
    return joined, refused, left_out[kept]


def _canonical_order(lines: Lines) -> tuple[Ints, Bools, Floats]:
    """Return each feature's parts sorted by their vertices, which of them are turned round, their lengths."""
    parts = len(lines.part_offsets) - 1
    lengths, flip = np.empty(parts), np.empty(parts, np.bool_)
    kernels.canonical(lines.xy, lines.part_offsets, lengths, flip)
    feature = np.repeat(np.arange(len(lines)), np.diff(lines.feature_offsets))
    ends = _ends(lines, np.arange(parts), flip).reshape(parts, 2 * lines.xy.shape[1])
    order = np.lexsort((*_second_vertex(lines, np.arange(parts), flip).T, lengths, *ends.T, feature))
    return order, flip[order], lengths[order]


def _ends(lines: Lines, parts: Ints, flip: Bools) -> Floats:
    """Return first and last vertex of each part as it is read, (2p, d)."""
    first, last = lines.part_offsets[parts], lines.part_offsets[parts + 1] - 1
    places = np.stack([np.where(flip, last, first), np.where(flip, first, last)], axis=1)
    return np.ascontiguousarray(lines.xy[places.ravel()])


def _second_vertex(lines: Lines, parts: Ints, flip: Bools) -> Floats:
    return lines.xy[np.where(flip, lines.part_offsets[parts + 1] - 2, lines.part_offsets[parts] + 1)]


def _first_copies(lines: Lines, parts: Ints, flip: Bools, lengths: Floats, ends: Floats) -> Bools:
    """Return False for a part that equals the one before it in the same feature."""
    counts = np.diff(lines.part_offsets)[parts]
    keys = np.column_stack(
        [ends.reshape(len(parts), 2 * lines.xy.shape[1]), lengths, counts, _second_vertex(lines, parts, flip)]
    )
    keep = np.ones(len(parts), np.bool_)
    keep[1:] = (keys[1:] != keys[:-1]).any(axis=1)
    keep[lines.feature_offsets[:-1]] = True
    return keep


def _nodes(ends: Floats, feature_offsets: Ints, tolerance_m: float) -> Ints:
    """Return the node of each end: ends that touch, then loose ends and what is nearest within tolerance."""
    feature = np.repeat(np.arange(len(feature_offsets) - 1), 2 * np.diff(feature_offsets))
    order = np.lexsort((ends[:, 0], feature))
    node = np.arange(len(ends))
    loose = np.ones(len(ends), np.bool_)
    kernels.unite_all(node, kernels.near_pairs(ends, order, feature, loose, kernels.TOUCH_M))
    if tolerance_m > kernels.TOUCH_M:
        loose = np.bincount(node, minlength=len(node))[node] == 1
        pairs = kernels.near_pairs(ends, order, feature, loose, tolerance_m)
        apart = np.square(ends[pairs[:, 0]] - ends[pairs[:, 1]]).sum(axis=1)
        pairs = pairs[np.argsort(apart, kind="stable")]
        kernels.unite_loose(node, pairs, feature, feature_offsets)
    return node


def _no_path(pieces: int, branchings: int) -> str:
    found = [f"{pieces} pieces"] if pieces > 1 else []
    found += [f"{branchings} branching point{'s' if branchings > 1 else ''}"] if branchings else []
    return (
        f"the group's lines do not form one path: {' and '.join(found)}; "
        "join-within-m closes gaps and branches: main-path keeps the longest path, both under prepare"
    )


def _main_path(node: Ints, keep: Bools, lengths: Floats) -> Bools:
    """Return which parts of a group lie on its main path: the longest over all its pieces."""
    from scipy.sparse import coo_array  # loaded here: few groups branch
    from scipy.sparse.csgraph import connected_components

    tails, heads = node[0::2], node[1::2]
    graph = coo_array((keep.astype(float), (tails, heads)), shape=(len(node), len(node)))
    _, piece = connected_components(graph, directed=False)
    best, best_length = np.zeros_like(keep), -1.0
    for label in np.unique(piece[tails[keep]]):
        inside = keep & (piece[tails] == label)
        path = _longest_path(tails, heads, inside, lengths)
        if lengths[path].sum() > best_length:
            best, best_length = path, lengths[path].sum()
    return best


def _longest_path(tails: Ints, heads: Ints, inside: Bools, lengths: Floats) -> Bools:
    """Return the parts on the longest of the shortest paths between the ends of one connected piece."""
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import dijkstra

    degree = np.bincount(np.concatenate([tails[inside], heads[inside]]), minlength=2 * len(tails))
    if degree.max() <= 2:
        return inside
    nodes = np.flatnonzero(degree)
    shortest = _shortest_links(np.searchsorted(nodes, tails), np.searchsorted(nodes, heads), inside, lengths)
    path = np.zeros_like(inside)
    if not shortest:  # loops from one point
        path[np.argmax(np.where(inside, lengths, -1.0))] = True
        return path
    links = np.array(list(shortest))
    graph = csr_array((lengths[list(shortest.values())], links.T), shape=(len(nodes), len(nodes)))
    ends = np.flatnonzero(degree[nodes] == 1)
    sources = ends if len(ends) else np.arange(len(nodes))
    if len(shortest) == len(nodes) - 1:  # a tree: the farthest end from any is an end of the longest path
        reached = dijkstra(graph, directed=False, indices=sources[0])
        sources = sources[[np.argmax(reached[sources])]]
    targets = ends if len(ends) else np.arange(len(nodes))
    farthest, chosen = -1.0, list[int]()
    for source in sources.tolist():
        reached, before = dijkstra(graph, directed=False, indices=source, return_predecessors=True)
        at = int(targets[np.argmax(reached[targets])])
        if reached[at] > farthest:
            farthest, chosen = reached[at], []
            while at != source:
                chosen.append(shortest[min(before[at], at), max(before[at], at)])
                at = int(before[at])
    path[chosen] = True
    return path


def _shortest_links(tails: Ints, heads: Ints, inside: Bools, lengths: Floats) -> dict[tuple[int, int], int]:
    """Return the shortest part between each two nodes that a part links."""
    shortest: dict[tuple[int, int], int] = {}
    for part in np.flatnonzero(inside).tolist():
        link = min(int(tails[part]), int(heads[part])), max(int(tails[part]), int(heads[part]))
        if link[0] != link[1] and (link not in shortest or lengths[part] < lengths[shortest[link]]):
            shortest[link] = part
    return shortest


def _assembled(
    lines: Lines, sorted_parts: Ints, flip: Bools, node: Ints, keep: Bools, kept: Bools, tolerance_m: float
) -> Lines:
    """Return the features kept, their parts strung together."""
    order, entered = np.empty(keep.sum(), np.int64), np.empty(keep.sum(), np.int64)
    chain_offsets, chains_of = kernels.chain(node, keep, lines.feature_offsets, order, entered)
    left = entered[chain_offsets[1:] - 1] ^ 1
    rings = node[entered[chain_offsets[:-1]]] == node[left]
    xy, source_vertex, part_offsets, closed = kernels.assemble(
        lines.xy,
        lines.source_vertex,
        lines.part_offsets,
        sorted_parts[order],
        flip[order] ^ (entered % 2 == 1),
        chain_offsets,
        rings,
        tolerance_m,
    )
    return Lines(
        rows=lines.rows[kept],
        xy=xy,
        part_offsets=part_offsets,
        feature_offsets=np.concatenate([[0], chains_of[1:][kept]]),
        closed=closed,
        source_vertex=source_vertex,
        plane=lines.plane[kept],
        distortion=lines.distortion[kept],
        radius=lines.radius[kept],
    )
