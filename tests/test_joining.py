"""Joining parts end to end: against shapely's line merging (independent), by hand, and in any order."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from geofractal.kernels import join as kernels
from geofractal.measure import Lines
from geofractal.reader.joining import join_parts


def lines_of(*features, d: int = 2) -> Lines:
    """Features as lists of parts, parts as lists of vertices."""
    parts = [np.array(part, float) for feature in features for part in feature]
    n = len(features)
    return Lines(
        rows=np.arange(100, 100 + n),
        xy=np.concatenate(parts) if parts else np.empty((0, d)),
        part_offsets=np.cumsum([0, *map(len, parts)]),
        feature_offsets=np.cumsum([0, *map(len, features)]),
        closed=np.array([np.array_equal(p[0], p[-1]) for p in parts], bool),
        source_vertex=np.ones(sum(map(len, parts)), bool),
        plane=np.zeros(n, np.uint8),
        distortion=np.linspace(0, 1, n),
        radius=np.full(n, np.inf),
    )


def parts_of(lines: Lines) -> list[list[list[list[float]]]]:
    starts = itertools.pairwise(lines.part_offsets.tolist())
    parts = [lines.xy[a:b].tolist() for a, b in starts]
    return [parts[a:b] for a, b in itertools.pairwise(lines.feature_offsets.tolist())]


def one(*parts, tolerance=0.0, **how):
    lines, problems, left_out = join_parts(lines_of(parts), tolerance_m=tolerance, **how)
    return (parts_of(lines)[0] if len(lines) else None), problems, left_out.tolist()


def test_reaches_in_mixed_directions_become_one_path():
    parts, problems, left_out = one([[1, 0], [2, 1]], [[1, 0], [0, 0]], [[3, 1], [2, 1]], one_path=True)
    assert (parts, problems, left_out) == ([[[0, 0], [1, 0], [2, 1], [3, 1]]], {}, [0.0])


def test_parts_that_do_not_meet_stay_several():
    parts, problems, _ = one([[0, 0], [1, 0]], [[5, 5], [6, 6]])
    assert (len(parts), problems) == (2, {})


@pytest.mark.parametrize(
    ("parts", "message"),
    [
        ([[[0, 0], [1, 0]], [[5, 5], [6, 6]], [[7, 7], [8, 8]]], "do not form one path: 3 pieces;"),
        ([[[0, 0], [1, 0]], [[1, 0], [2, 1]], [[1, 0], [2, -1]]], "do not form one path: 1 branching point;"),
        (
            [[[0, 0], [1, 0]], [[0, 0], [2, 1]], [[0, 0], [2, -1]], [[9, 9], [8, 8]]],
            "2 pieces and 1 branching point;",
        ),
    ],
)
def test_a_group_that_is_no_path_is_refused(parts, message):
    kept, problems, _ = one(*parts, one_path=True)
    assert kept is None
    assert message in problems[100]


def test_a_gap_is_closed_only_within_the_tolerance():
    reaches = [[[0, 0], [10, 0]], [[10, 3], [20, 3]]]
    assert len(one(*reaches, tolerance=2.9)[0]) == 2
    assert one(*reaches, tolerance=3.1)[0] == [[[0, 0], [10, 0], [10, 3], [20, 3]]]


def test_a_reach_shorter_than_the_tolerance_stays_between_its_neighbours():
    reaches = [[[0, 0], [100, 0]], [[105, 0], [113, 0]], [[118, 0], [200, 0]]]
    parts, problems, _ = one(*reaches, tolerance=20.0, one_path=True)
    assert problems == {}
    assert [x for x, _ in parts[0]] == [0, 100, 105, 113, 118, 200]


def test_short_reaches_that_touch_are_not_joined_across():
    reaches = [[[0, 0], [100, 0]], [[105, 0], [108, 0]], [[108, 0], [111, 0]], [[111, 0], [200, 0]]]
    parts, problems, _ = one(*reaches, tolerance=20.0, one_path=True)
    assert problems == {}
    assert [x for x, _ in parts[0]] == [0, 100, 105, 108, 111, 200]


def test_a_confluence_with_gaps_is_a_branching_point():
    reaches = [[[-9, 0], [-1, 0]], [[9, 0], [1, 0]], [[0, 9], [0, 2]]]
    assert "1 branching point" in one(*reaches, tolerance=3.0, one_path=True)[1][100]


def test_parts_whose_ends_meet_become_a_ring():
    half_and_half = [[0, 0], [1, 1], [2, 0]], [[0, 0], [1, -1], [2, 0]]
    lines, _, _ = join_parts(lines_of(half_and_half), tolerance_m=0.0, one_path=True)
    assert lines.closed.tolist() == [True]
    assert parts_of(lines)[0][0] in (
        [[0, 0], [1, 1], [2, 0], [1, -1], [0, 0]],
        [[0, 0], [1, -1], [2, 0], [1, 1], [0, 0]],
    )


def test_an_open_ring_is_closed_where_its_gap_is_within_the_tolerance():
    shore = [[0, 1], [0, 10], [10, 10], [10, 0], [1, 0]]
    closed, _, _ = join_parts(lines_of([shore]), tolerance_m=1.5)
    assert closed.closed.tolist() == [True]
    assert parts_of(closed)[0][0] in ([*shore, shore[0]], [*shore[::-1], shore[-1]])
    assert join_parts(lines_of([shore]), tolerance_m=1.4)[0].closed.tolist() == [False]


def test_a_line_not_much_longer_than_the_tolerance_is_no_ring():
    assert join_parts(lines_of([[[0, 0], [1, 1], [2, 0]]]), tolerance_m=5.0)[0].closed.tolist() == [False]


def test_a_ring_stays_a_ring_beside_other_parts():
    ring = [[5, 5], [6, 5], [6, 6], [5, 5]]
    lines, _, _ = join_parts(lines_of([ring, [[0, 0], [1, 0]]]), tolerance_m=0.0)
    assert sorted(lines.closed.tolist()) == [False, True]


def test_a_reach_that_is_there_twice_counts_once():
    reach = [[0, 0], [1, 0], [2, 1]]
    parts, problems, _ = one(reach, reach[::-1], [[2, 1], [3, 3]], one_path=True)
    assert (parts, problems) == ([[*reach, [3, 3]]], {})


def test_main_path_keeps_the_longest_and_says_what_it_left():
    stem = [[[0, 0], [10, 0]], [[10, 0], [20, 0]]]
    side = [[10, 0], [10, 3]]
    parts, problems, left_out = one(*stem, side, [[50, 50], [50, 54]], one_path=True, branches="main-path")
    assert (parts, problems, left_out) == ([[[0, 0], [10, 0], [20, 0]]], {}, [3.0 + 4.0])


def test_main_path_of_loops_from_one_point_is_the_longest_loop():
    small, large = [[0, 0], [1, 0], [1, 1], [0, 0]], [[0, 0], [-5, 0], [-5, -5], [0, 0]]
    parts, _, left_out = one(small, large, one_path=True, branches="main-path")
    assert sorted(parts[0][:-1]) == sorted(large[:-1])
    assert left_out == [pytest.approx(2 + 2**0.5)]


def test_main_path_goes_the_shorter_way_round_an_island():
    """A channel that parts and rejoins: the shortest path between the ends takes the straight arm."""
    around = [[10, 0], [15, 8], [20, 0]]
    parts, _, _ = one(
        [[0, 0], [10, 0]], [[10, 0], [20, 0]], around, [[20, 0], [30, 0]], one_path=True, branches="main-path"
    )
    assert parts == [[[0, 0], [10, 0], [20, 0], [30, 0]]]


def test_features_keep_their_own_columns_when_others_are_refused():
    bad = [[[0, 0], [1, 0]], [[5, 5], [6, 6]]]
    lines, problems, left_out = join_parts(
        lines_of(bad, [[[0, 0], [1, 0]]], bad, [[[0, 0], [2, 0]]]), tolerance_m=0.0, one_path=True
    )
    assert (lines.rows.tolist(), list(problems), len(left_out)) == ([101, 103], [100, 102], 2)
    assert lines.distortion.tolist() == pytest.approx([1 / 3, 1])
    assert lines.feature_offsets.tolist() == [0, 1, 2]


def test_added_vertices_stay_marked():
    lines = lines_of([[[0, 0], [1, 0], [2, 0]], [[2, 0], [3, 0], [4, 0]]])
    lines.source_vertex[[1, 4]] = False
    joined, _, _ = join_parts(lines, tolerance_m=0.0)
    assert joined.source_vertex.tolist() == [True, False, True, False, True]


def test_three_dimensions():
    joined, _, _ = join_parts(
        lines_of([[[0, 0, 0], [0, 0, 9]], [[5, 0, 9], [0, 0, 9]]], d=3), tolerance_m=0.0
    )
    assert parts_of(joined) == [[[[0, 0, 0], [0, 0, 9], [5, 0, 9]]]]


def test_no_features():
    joined, problems, left_out = join_parts(lines_of(), tolerance_m=1.0, one_path=True)
    assert (len(joined), problems, len(left_out), joined.feature_offsets.tolist()) == (0, {}, 0, [0])


corner = st.tuples(st.integers(0, 3), st.integers(0, 3)).map(lambda c: (float(c[0]), float(c[1])))


@st.composite
def networks(draw):
    """Reaches between corners of a small grid, each with a middle vertex that no other reach has."""
    reaches = draw(st.lists(st.tuples(corner, corner), min_size=1, max_size=9))
    return [
        [list(a), [(a[0] + b[0]) / 2 + 0.01 * (i + 1), (a[1] + b[1]) / 2 + 0.3 + 0.007 * i], list(b)]
        for i, (a, b) in enumerate(reaches)
    ]


def cut_open(path) -> set:
    """A path as the set of its edges: the same whatever its direction or, of a ring, its start."""
    return {frozenset((tuple(a), tuple(b))) for a, b in itertools.pairwise(path)}


@settings(max_examples=200, deadline=None)
@given(networks())
def test_joins_what_shapely_merges(reaches):
    merged = shapely.line_merge(shapely.MultiLineString(reaches))
    expected = [cut_open(shapely.get_coordinates(part).tolist()) for part in shapely.get_parts(merged)]
    found = [cut_open(part) for part in one(*reaches)[0]]
    assert sorted(map(sorted_edges, found)) == sorted(map(sorted_edges, expected))


def sorted_edges(edges) -> list:
    return sorted(tuple(sorted(edge)) for edge in edges)


@settings(max_examples=150, deadline=None)
@given(
    networks(),
    st.randoms(use_true_random=False),
    st.sampled_from([0.0, 0.4, 1.1]),
    st.sampled_from([None, "refuse", "main-path"]),
)
def test_order_and_direction_of_reaches_change_no_bit(reaches, random, tolerance, branches):
    how = {"one_path": branches is not None, "branches": branches or "refuse"}
    shuffled = [reach[:: random.choice([1, -1])] for reach in random.sample(reaches, len(reaches))]
    results = [join_parts(lines_of(given), tolerance_m=tolerance, **how) for given in (reaches, shuffled)]
    (a, problems_a, left_a), (b, problems_b, left_b) = results
    assert problems_a == problems_b
    assert left_a.tobytes() == left_b.tobytes()
    assert a.xy.tobytes() == b.xy.tobytes()
    assert (a.part_offsets.tolist(), a.closed.tolist()) == (b.part_offsets.tolist(), b.closed.tolist())


@settings(max_examples=100, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 50), st.integers(1, 9)), min_size=1, max_size=12))
def test_main_path_of_a_tree_is_its_longest_path(twigs):
    """Every path of the tree is walked (brute force)."""
    points = [np.zeros(2)]
    reaches = []
    for i, (parent, length) in enumerate(twigs):
        start = points[parent % len(points)]
        points.append(start + length * np.array([np.cos(2.4 * i + 0.1), np.sin(2.4 * i + 0.1)]))
        reaches.append([start.tolist(), points[-1].tolist()])
    links = [(parent % (i + 1), i + 1, length) for i, (parent, length) in enumerate(twigs)]

    def farthest(at, came):
        onward = [(b if a == at else a, n) for a, b, n in links if at in (a, b)]
        return max([n + farthest(to, at) for to, n in onward if to != came], default=0)

    longest = max(farthest(at, None) for at in range(len(points)))
    parts, _, left_out = one(*reaches, one_path=True, branches="main-path")
    assert len(parts) == 1
    assert sum(np.hypot(*np.diff(parts[0], axis=0).T)) == pytest.approx(longest)
    assert left_out[0] == pytest.approx(sum(n for _, _, n in links) - longest)


@settings(max_examples=60, deadline=None)
@given(st.lists(networks(), min_size=1, max_size=3), st.sampled_from([0.0, 0.4, 1.1]))
def test_compiled_kernels_equal_their_interpreted_twins(features, tolerance):
    lines = lines_of(*features)
    parts = len(lines.part_offsets) - 1

    def run(of):
        lengths, flip = np.empty(parts), np.empty(parts, bool)
        of(kernels.canonical)(lines.xy, lines.part_offsets, lengths, flip)
        ends = np.ascontiguousarray(
            lines.xy[np.column_stack([lines.part_offsets[:-1], lines.part_offsets[1:] - 1]).ravel()]
        )
        feature = np.repeat(np.arange(len(lines)), 2 * np.diff(lines.feature_offsets))
        order, node = np.lexsort((ends[:, 0], feature)), np.arange(2 * parts)
        touching = of(kernels.near_pairs)(ends, order, feature, np.ones(2 * parts, bool), kernels.TOUCH_M)
        of(kernels.unite_all)(node, touching)
        near = of(kernels.near_pairs)(ends, order, feature, feature % 2 == 0, tolerance)
        of(kernels.unite_loose)(node, near, feature, lines.feature_offsets)
        keep = np.arange(parts) % 4 != 3
        pieces, branchings = np.zeros((2, len(lines)), np.int64)
        of(kernels.count_pieces)(node, keep, lines.feature_offsets, pieces, branchings)
        order, entered = np.zeros(keep.sum(), np.int64), np.zeros(keep.sum(), np.int64)
        chain_offsets, chains_of = of(kernels.chain)(node, keep, lines.feature_offsets, order, entered)
        rings = node[entered[chain_offsets[:-1]]] == node[entered[chain_offsets[1:] - 1] ^ 1]
        made = of(kernels.assemble)(
            lines.xy,
            lines.source_vertex,
            lines.part_offsets,
            order,
            entered % 2 == 1,
            chain_offsets,
            rings,
            tolerance,
        )
        return [
            lengths,
            flip,
            touching,
            near,
            node,
            pieces,
            branchings,
            order,
            entered,
            chain_offsets,
            chains_of,
            *made,
        ]

    for a, b in zip(run(lambda k: k), run(lambda k: k.py_func), strict=True):
        assert np.array_equal(a, b)


def test_small_kernels_equal_their_interpreted_twins():
    ends = np.array([[0.0, 0], [3, 4]])
    assert kernels._distance(*ends) == kernels._distance.py_func(*ends) == 5.0
    parents = np.array([[0, 0, 1, 2], [0, 0, 1, 2]])
    assert kernels._root(parents[0], 3) == kernels._root.py_func(parents[1], 3) == 0
    kernels._unite(parents[0], 3, 1)
    kernels._unite.py_func(parents[1], 3, 1)
    kernels.settle(parents[0])
    kernels.settle.py_func(parents[1])
    assert (parents[0] == parents[1]).all()
