"""The divider walk: L(r) = r n + d, the next point being the first along the line at distance r."""

import math
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geofractal.kernels import line_path
from geofractal.kernels import walk as kernels
from geofractal.kernels.walk import walk_ladders

EARTH = 6_371_000.0


NO_LIMIT = 2**62


@dataclass
class Walked:
    length: np.ndarray
    spread: np.ndarray
    steps: np.ndarray
    left_out: np.ndarray
    tallies: np.ndarray


def walked(table):
    return Walked(*table[:, :4].T, table[:, 4:])


def walk(parts, rulers, *, starts=1, enough=NO_LIMIT, closed=False, radius=math.inf):
    """Walk one feature made of `parts` with each ruler."""
    xy = np.ascontiguousarray(np.concatenate(parts), dtype=float)
    offsets = np.concatenate(([0], np.cumsum([len(p) for p in parts])))
    rulers = np.atleast_1d(np.asarray(rulers, dtype=float))
    return walked(
        walk_ladders(
            xy,
            offsets,
            np.array([0, len(parts)]),
            np.full(len(parts), closed),
            np.array([radius]),
            np.array([0, len(rulers)]),
            rulers,
            starts,
            enough,
            True,
            4,
        )
    )


def koch(level):
    points = np.array([0, 1], complex)
    for _ in range(level):
        a, third = points[:-1], np.diff(points) / 3
        tip = a + third + third * np.exp(1j * np.pi / 3)
        points = np.append(np.column_stack([a, a + third, tip, a + 2 * third]).ravel(), 1)
    return np.column_stack([points.real, points.imag])


def plain_walk(line, ruler):
    """Walk a line the obvious way: look at every segment in turn for its point at distance `ruler`."""
    here, steps, segment, along = line[0], 0, 0, 0.0
    while segment < len(line) - 1:
        a, b = line[segment], line[segment + 1]
        # |a + t (b - a) - here| = ruler, the larger root
        e, w = b - a, a - here
        A, B, C = e @ e, w @ e, w @ w - ruler**2
        root = B * B - A * C
        t = (-B + math.sqrt(root)) / A if A > 0 and root >= 0 else math.inf
        if along < t <= 1:
            here, steps, along = a + t * e, steps + 1, t
        else:
            segment, along = segment + 1, 0.0
    return steps, math.dist(here, line[-1])


def plain_length(line, ruler):
    steps, rest = plain_walk(line, ruler)
    return steps * ruler + rest


def random_line(seed, count, size):
    rng = np.random.default_rng(seed)
    return np.cumsum(rng.normal(size=(count, size)), axis=0)


def ring_from(ring, share):
    """Return the ring as an open path that starts and ends at `share` of its length."""
    lengths = np.concatenate(([0], np.cumsum(np.linalg.norm(np.diff(ring, axis=0), axis=1))))
    s = share * lengths[-1]
    i = np.searchsorted(lengths, s, side="right") - 1
    point = ring[i] + (s - lengths[i]) / (lengths[i + 1] - lengths[i]) * (ring[i + 1] - ring[i])
    return np.concatenate(([point], ring[i + 1 : -1], ring[: i + 1], [point]))


@pytest.mark.parametrize("level", range(1, 8))
def test_a_koch_curve_takes_four_steps_for_every_third_of_the_ruler(level):
    found = walk([koch(7)], 3.0**-level)
    assert found.steps[0] == 4**level
    assert found.length[0] == pytest.approx((4 / 3) ** level, rel=1e-12)


@pytest.mark.parametrize("starts", [2, 4, 16])
def test_inner_starts_at_vertices_of_a_koch_curve_count_the_same(starts):
    assert walk([koch(7)], 3.0**-4, starts=starts).steps[0] == 4**4


@pytest.mark.parametrize("ruler", [0.37, 1.0, 17.3, 999.0])
def test_a_straight_line_is_as_long_as_it_is(ruler):
    line = np.linspace(0, 1, 457)[:, None] ** 2 * [600.0, 800.0]
    assert walk([line], ruler, starts=4).length[0] == pytest.approx(1000, rel=1e-12)


def test_a_ruler_that_fits_whole_leaves_no_rest():
    found = walk([np.array([[0.0, 0.0], [0.7, 0.0]])], 0.1)
    assert found.steps[0] == 7
    assert found.length[0] == pytest.approx(0.7, rel=1e-15)


@given(
    seed=st.integers(0, 10**6),
    count=st.integers(2, 400),
    size=st.sampled_from([2, 3]),
    ruler=st.floats(0.05, 30),
)
@settings(deadline=None, max_examples=150)
def test_both_ways_along_a_random_line_agree_with_the_plain_walk(seed, count, size, ruler):
    line = random_line(seed, count, size)
    there, back = plain_walk(line, ruler), plain_walk(line[::-1], ruler)
    found = walk([line], ruler)
    if min(there[0], back[0]) == 0:
        assert math.isnan(found.length[0])
        assert found.left_out[0] == pytest.approx(np.linalg.norm(np.diff(line, axis=0), axis=1).sum())
    else:
        lengths = [n * ruler + d for n, d in (there, back)]
        assert found.steps[0] == (there[0] + back[0]) / 2
        assert found.length[0] == pytest.approx(sum(lengths) / 2, rel=1e-9)
        assert found.spread[0] == pytest.approx(np.std(lengths, ddof=1), abs=1e-9 * ruler)
        assert found.left_out[0] == 0


@pytest.mark.parametrize("ruler", [0.5, 3.0, 20.0, 60.0])
@pytest.mark.parametrize("size", [2, 3])
def test_long_lines_that_are_walked_by_boxes_agree_with_the_plain_walk(size, ruler):
    line = random_line(5, 20_000, size)
    expected = (plain_length(line, ruler) + plain_length(line[::-1], ruler)) / 2
    assert walk([line], ruler).length[0] == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("size", [2, 3])
def test_inner_starts_walk_to_both_ends(size):
    line, ruler = random_line(3, 60, size), 2.5
    whole = [plain_length(line, ruler), plain_length(line[::-1], ruler)]
    lengths = np.concatenate(([0], np.cumsum(np.linalg.norm(np.diff(line, axis=0), axis=1))))
    for share in (0.25, 0.5, 0.75):
        i = np.argmin(np.abs(lengths - share * lengths[-1]))
        whole.append(plain_length(line[i:], ruler) + plain_length(line[i::-1], ruler))
    found = walk([line], ruler, starts=4)
    assert found.length[0] == pytest.approx(np.mean(whole), rel=1e-9)
    assert found.spread[0] == pytest.approx(np.std(whole, ddof=1), rel=1e-9)


def noisy_ring(seed, count=200):
    rng = np.random.default_rng(seed)
    angle = np.linspace(0, 2 * np.pi, count, endpoint=False)
    reach = 10 + rng.normal(size=count)
    ring = np.column_stack([reach * np.cos(angle), reach * np.sin(angle)])
    return np.vstack([ring, ring[:1]])


def from_outermost(ring):
    """Return the ring from its vertex farthest from the centre of its outline."""
    steps = np.linalg.norm(np.diff(ring, axis=0), axis=1)
    middle = (steps[:, None] * (ring[1:] + ring[:-1]) / 2).sum(axis=0) / steps.sum()
    outermost = np.argmax(np.linalg.norm(ring[:-1] - middle, axis=1))
    return np.vstack([ring[outermost:-1], ring[: outermost + 1]])


@given(
    seed=st.integers(0, 10**6),
    count=st.integers(3, 300),
    size=st.sampled_from([2, 3]),
    ruler=st.floats(0.05, 20),
    starts=st.sampled_from([1, 4, 16]),
)
@settings(deadline=None, max_examples=100)
def test_a_ring_is_walked_both_ways_from_evenly_spaced_starts(seed, count, size, ruler, starts):
    line = random_line(seed, count, size)
    ring = from_outermost(np.vstack([line, line[:1]]))
    paths = [ring_from(ring, k / starts) for k in range(starts)]
    walks = [plain_walk(path, ruler) for way in (1, -1) for path in (p[::way] for p in paths)]
    found = walk([np.vstack([line, line[:1]])], ruler, starts=starts, closed=True)
    if min(steps for steps, _ in walks) == 0:
        assert math.isnan(found.length[0])
    else:
        lengths = [steps * ruler + rest for steps, rest in walks]
        assert found.length[0] == pytest.approx(np.mean(lengths), rel=1e-9)
        assert found.spread[0] == pytest.approx(np.std(lengths, ddof=1), abs=1e-7)


@pytest.mark.parametrize("shift", [1, 50, 123])
def test_a_ring_may_be_stored_from_any_vertex_and_either_way_round(shift):
    ring = noisy_ring(2)
    turned = np.vstack([ring[shift:-1], ring[: shift + 1]])
    expected = walk([ring], 2.0, starts=16, closed=True).length[0]
    assert walk([turned], 2.0, starts=16, closed=True).length[0] == pytest.approx(expected, rel=1e-9)
    assert walk([turned[::-1]], 2.0, starts=16, closed=True).length[0] == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(("enough", "starts"), [(0, 1), (90, 4), (NO_LIMIT, 16)])
def test_further_starts_are_taken_until_there_are_steps_enough(enough, starts):
    ring = noisy_ring(3)
    found = walk([ring], 3.0, starts=16, enough=enough, closed=True)
    assert 90 / 4 < found.steps[0] < 90 / 2
    assert found.length[0] == walk([ring], 3.0, starts=starts, closed=True).length[0]


def test_a_ring_that_some_start_never_leaves_has_no_length():
    # 10 x 1 rectangle: from a short side's middle the far corners are sqrt(100.25) away, from a long
    # side's middle sqrt(25 + 1) at most
    ring = np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 1.0], [0.0, 1.0], [0.0, 0.0]])
    assert math.isnan(walk([ring], 6.0, starts=16, closed=True).length[0])
    assert walk([ring], 4.0, starts=16, closed=True).length[0] > 0


@pytest.mark.parametrize("starts", [1, 8])
def test_reversal_changes_not_one_bit(starts):
    line = random_line(11, 500, 2)
    rulers = np.geomspace(0.5, 20, 12)
    there, back = walk([line], rulers, starts=starts), walk([line[::-1]], rulers, starts=starts)
    assert np.array_equal(there.length, back.length)
    assert np.array_equal(there.spread, back.spread)


@given(
    turn=st.floats(0, 2 * math.pi),
    unit=st.sampled_from([1e-3, 0.3048, 1000.0]),
    shift=st.tuples(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6)),
)
@settings(deadline=None, max_examples=30)
def test_shift_rotation_and_unit_change_nothing_beyond_rounding(turn, unit, shift):
    line = random_line(4, 300, 2) * 1000
    spun = line @ [[math.cos(turn), math.sin(turn)], [-math.sin(turn), math.cos(turn)]]
    rulers = np.array([700.0, 3000.0, 11000.0])
    expected = walk([line], rulers, starts=4)
    moved = walk([(spun + shift) * unit], rulers * unit, starts=4)
    assert moved.length / unit == pytest.approx(expected.length, rel=1e-6)
    assert np.array_equal(moved.steps, expected.steps)


def test_parts_add_up_where_they_are_long_enough():
    long, short = random_line(1, 200, 2), random_line(2, 10, 2) * 0.1
    found = walk([long, short], [0.05, 5.0])
    alone = walk([long], [0.05, 5.0])
    tail = walk([short], [0.05, 5.0])
    assert found.length == pytest.approx([alone.length[0] + tail.length[0], alone.length[1]])
    assert found.spread[0] == pytest.approx(math.hypot(alone.spread[0], tail.spread[0]))
    assert found.left_out[1] == pytest.approx(np.linalg.norm(np.diff(short, axis=0), axis=1).sum())


@pytest.mark.parametrize("closed", [False, True])
def test_a_part_without_length_is_ignored(closed):
    dot = np.ones((4, 2))
    assert math.isnan(walk([dot], 1.0, closed=closed).length[0])
    assert walk([dot, koch(3)], 1 / 3).steps[0] == 4


def test_three_dimensions_measure_arcs_of_a_great_circle():
    # a quarter of the equator and a meridian: R pi / 2, whatever the ruler
    angle = np.linspace(0, np.pi / 2, 2000)
    equator = EARTH * np.column_stack([np.cos(angle), np.sin(angle), 0 * angle])
    found = walk([equator], [1000.0, 50_000.0, 1_000_000.0], radius=EARTH)
    # vertices 5 km apart: straight edges cut the arc by (5 / 6371)^2 / 24 = 2.6e-8 at most
    assert found.length == pytest.approx(np.full(3, EARTH * np.pi / 2), rel=1e-7)


def test_a_ruler_past_the_antipode_has_no_length():
    angle = np.linspace(0, np.pi, 200)
    half = EARTH * np.column_stack([np.cos(angle), np.sin(angle), 0 * angle])
    assert math.isnan(walk([half], 3.2 * EARTH, radius=EARTH).length[0])


@pytest.mark.parametrize("ruler", [1e-300, 1e-8, math.inf, math.nan])
@pytest.mark.parametrize("closed", [False, True])
def test_rulers_that_no_coordinate_resolves_have_no_length(ruler, closed):
    ring = noisy_ring(1) * 1000
    assert math.isnan(walk([ring], ruler, closed=closed).length[0])


def test_a_ruler_far_below_the_segments_walks_along_them():
    ring = noisy_ring(1) * 1000
    edge = np.linalg.norm(np.diff(ring, axis=0), axis=1).sum()
    assert walk([ring], 1e-3).length[0] == pytest.approx(edge, rel=1e-6)


def test_each_feature_has_its_own_ladder():
    lines = [koch(4), 2 * koch(4), random_line(1, 50, 2)]
    xy = np.concatenate(lines)
    offsets = np.concatenate(([0], np.cumsum([len(line) for line in lines])))
    rulers = np.array([1 / 3, 1 / 9, 2 / 3, 1.0])
    length = walk_ladders(
        xy,
        offsets,
        np.arange(4),
        np.zeros(3, bool),
        np.full(3, math.inf),
        np.array([0, 2, 3, 4]),
        rulers,
        1,
        0,
        False,
        0,
    )[:, 0]
    last = (plain_length(lines[2], 1.0) + plain_length(lines[2][::-1], 1.0)) / 2
    assert length == pytest.approx([4 / 3, 16 / 9, 8 / 3, last])


@pytest.fixture
def interpreted(monkeypatch):
    """Replace every kernel of the modules by its interpreted twin."""
    for module in (line_path, kernels):
        for name, function in list(vars(module).items()):
            if hasattr(function, "py_func"):
                monkeypatch.setattr(module, name, function.py_func)
    return kernels.walk_ladders


def test_compiled_and_interpreted_kernels_agree(interpreted):
    rng = np.random.default_rng(0)
    for seed in range(12):
        size, closed = 2 + seed % 2, seed % 3 == 0
        parts = [random_line(seed + k, int(rng.integers(3, 90)), size) for k in range(1 + seed % 2)]
        if closed:
            parts = [np.vstack([part, part[:1]]) for part in parts]
        offsets = np.concatenate(([0], np.cumsum([len(part) for part in parts])))
        arguments = (
            np.concatenate(parts),
            offsets,
            np.array([0, len(parts)]),
            np.full(len(parts), closed),
            np.array([math.inf if size == 2 else 100.0]),
            np.array([0, 5]),
            np.geomspace(0.4, 8, 5),
            4,
            30,
            True,
            4,
        )
        assert walk_ladders(*arguments) == pytest.approx(interpreted(*arguments), rel=1e-12, nan_ok=True)


def test_steps_are_told_apart_by_stretch_whichever_way_they_are_walked():
    """Koch curve: each of its four quarters holds a quarter of the 4^k steps of rulers 3^-k."""
    for line in (koch(6), koch(6)[::-1]):
        walked = walk([line], [3.0**-k for k in (2, 3, 4)])
        assert walked.tallies == pytest.approx(np.outer(walked.steps / 4, np.ones(4)), abs=1)


def test_stretches_go_through_all_parts_of_a_feature():
    parts = [np.column_stack([np.linspace(0, 6, 61), np.full(61, y)]) for y in (0.0, 10.0)]
    assert walk(parts, 1.0).tallies[0] == pytest.approx([3, 3, 3, 3], abs=0.5)
