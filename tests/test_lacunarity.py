"""Lacunarity of gliding boxes: exact examples, independent cells, brute force."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.lib.stride_tricks import sliding_window_view
from test_fragmentation import cells, figure, measured

from geofractal.kernels import lacunarity
from geofractal.synthetic.cells import carpet


def curve(on, sizes, **given):
    """Return lacunarity of the True cells in boxes of some sides."""
    boxes = [1000.0 * size for size in sizes]
    found = measured(np.where(on, 1, 2), lacunarity_boxes_m=boxes, covers=["1"], **given)
    return [figure(found, f"lacunarity_at_{size}000m_boxes") for size in sizes]


class TestExact:
    """Fractions follow from counting boxes by hand (E[M^2] / E[M]^2, Allain & Cloitre 1991)."""

    @pytest.mark.parametrize(
        ("on", "expected"),
        [
            (np.indices((8, 8))[1] < 4, {1: 2, 2: 13 / 7, 3: 46 / 27, 4: 3 / 2, 8: 1}),
            (np.indices((8, 8)).sum(axis=0) % 2 == 0, {1: 2, 2: 1, 3: 82 / 81, 4: 1}),
            (np.arange(25).reshape(5, 5) == 12, {1: 25, 2: 4, 3: 1}),
            (carpet(level=2).cells, {1: 81 / 64, 2: 2448 / 2209, 3: 6909 / 6400}),
        ],
        ids=["half", "checkerboard", "one cell", "carpet"],
    )
    def test_maps(self, on, expected):
        assert curve(on, list(expected)) == pytest.approx(list(expected.values()))

    def test_a_row(self):
        """10110001 for r = 1..4: 2, 14/9, 21/16, 95/81, repeated so that boxes are square."""
        expected = {1: 2, 2: 14 / 9, 3: 21 / 16, 4: 95 / 81}
        on = np.repeat([[1, 0, 1, 1, 0, 0, 0, 1]], 4, axis=0)
        assert curve(on == 1, list(expected)) == pytest.approx(list(expected.values()))

    def test_a_class_that_fills_or_is_absent(self):
        assert curve(np.ones((4, 4), bool), [1, 2]) == [1, 1]
        found = measured(np.full((3, 3), 2), lacunarity_boxes_m=[1000.0], covers=["1"])
        assert math.isnan(figure(found, "lacunarity_at_1000m_boxes"))
        assert figure(found, "lacunarity_at_1000m_boxes", column="note") == "the class is absent"

    def test_independent_cells(self):
        """1 + (1 - p) / (p r^2), Plotnick et al. 1993 (form 1 + CV^2)."""
        p = 0.3
        on = np.random.default_rng(6).random((400, 400)) < p
        found = curve(on, [1, 2, 4])
        assert found == pytest.approx([1 + (1 - p) / (p * r**2) for r in (1, 2, 4)], rel=0.01)

    def test_boxes_larger_than_the_map_or_than_can_be_summed(self):
        found = measured(np.ones((3, 3)), lacunarity_boxes_m=[4000.0, 3e6])
        assert figure(found, "lacunarity_boxes_at_4000m_boxes") == 0
        assert "no box lies wholly inside" in figure(found, "lacunarity_at_4000m_boxes", column="note")
        assert "more than 2000 cells" in figure(found, "lacunarity_at_3000000m_boxes", column="note")

    def test_zones_hold_their_own_boxes(self):
        on = np.indices((4, 6))[1] % 2 == 0
        zones = [cells(0, 0, 3, 4), cells(3, 0, 6, 4)]
        found = measured(np.where(on, 1, 2), lacunarity_boxes_m=[2000.0], zones=zones)
        assert figure(found, "lacunarity_boxes_at_2000m_boxes", unit=1) == 3 * 2
        assert figure(found, "lacunarity_boxes_at_2000m_boxes") == 3 * 5


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 12), st.integers(1, 5))
def test_against_all_boxes(seed, rows, size):
    """With cells not covered, and a lobed zone: every box by itself."""
    rng = np.random.default_rng(seed)
    codes = rng.integers(1, 3, (11, 12)) * (rng.random((11, 12)) < 0.97)
    zone = shapely.Point(rng.uniform(3, 9, 2)).buffer(rng.uniform(2, 8), 3)
    placed = shapely.transform(zone, lambda xy: xy * (1000, -1000))
    found = measured(codes, rows=rows, lacunarity_boxes_m=[1000.0 * size], zones=[placed], covers=["1"])
    r, c = np.indices(codes.shape) + 0.5
    inside = shapely.contains_xy(zone, c, r)
    for unit, area in (("1", inside), ("whole map", np.ones_like(inside))):
        if not area.any():
            continue
        covered = sliding_window_view((codes > 0) & area, (size, size)).all(axis=(2, 3))
        mass = sliding_window_view(codes == 1, (size, size)).sum(axis=(2, 3))[covered]
        assert figure(found, f"lacunarity_boxes_at_{size}000m_boxes", unit=unit) == len(mass)
        value = figure(found, f"lacunarity_at_{size}000m_boxes", unit=unit)
        if mass.sum():
            assert value == pytest.approx((mass**2).mean() / mass.mean() ** 2)
        else:
            assert math.isnan(value)


@given(st.integers(0, 10**6), st.booleans())
def test_compiled_kernels_equal_their_interpreted_twins(seed, whole):
    rng = np.random.default_rng(seed)
    codes = rng.integers(-1, 2, (7, 8)).astype(np.int16)
    codes[rng.random(codes.shape) < 0.6] = 0
    zones = rng.integers(-1, 2, (7, 8)).astype(np.int32)
    state = [(np.zeros(8, np.int32), np.zeros(8, np.int32), np.zeros((3, 4), np.int64)) for _ in range(2)]
    cover = np.array([True, False, False])
    lacunarity.glide(codes, zones, 0, cover, 2, 2, whole, *state[0])
    with pytest.MonkeyPatch.context() as patch:
        for name in ("even_run", "flush"):
            patch.setattr(lacunarity, name, getattr(lacunarity, name).py_func)
        lacunarity.glide.py_func(codes, zones, 0, cover, 2, 2, whole, *state[1])
    for one, other in zip(*state, strict=True):
        assert (one == other).all()


def test_sums_of_squares_outgrow_64_bits():
    sums = np.zeros((1, 4), np.int64)
    for _ in range(40):
        lacunarity.flush(sums, 0, 1, 1, 2**62)
    assert (int(sums[0, lacunarity.CARRY]) << lacunarity.CARRY_BITS) + int(
        sums[0, lacunarity.SQUARES]
    ) == 40 * 2**62
