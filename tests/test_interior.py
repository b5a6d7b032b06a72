"""Interior area: exact distances from cell centres to the edges of other classes."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage
from test_fragmentation import PLANE, cells, figure, measured

from geofractal.cover_api import fragmentation
from geofractal.kernels import interior
from geofractal.reader.raster import RasterOptions


def inside(found, depth, cover="1", unit="whole map"):
    return figure(found, f"interior_area_at_{depth}m_depth", cover, unit)


class TestByHand:
    BLOCK = np.pad(np.ones((5, 5), int), 2, constant_values=2)

    @pytest.mark.parametrize(
        ("depth", "cells_left"),
        [(400, 25), (500, 3 * 3), (1499, 3 * 3), (1500, 1), (2499, 1), (2500, 0)],
    )
    def test_a_block_loses_a_rim_at_every_half_cell(self, depth, cells_left):
        """Centres lie half a cell inside, then one and a half; what is at the depth is not interior."""
        assert inside(measured(self.BLOCK, interior_depths_m=[depth]), depth) == pytest.approx(cells_left)

    def test_a_corner_is_as_far_as_its_diagonal(self):
        """One cell of another class at a corner: the next cells lie 1/2 and sqrt(1/2) from it."""
        codes = np.ones((3, 3), int)
        codes[0, 0] = 2
        found = measured(codes, interior_depths_m=[600, 710])
        assert inside(found, 600) == pytest.approx(8 - 2)
        assert inside(found, 710) == pytest.approx(8 - 3)
        assert 600 < 1000 * math.sqrt(1 / 2) < 710

    @pytest.mark.parametrize(("bounds", "cells_left"), [(True, 1), (False, 9)])
    def test_the_maps_edge_counts_where_asked(self, bounds, cells_left):
        found = measured(np.ones((3, 3)), interior_depths_m=[600], map_edge_bounds_interior=bounds)
        assert inside(found, 600) == pytest.approx(cells_left)
        share = figure(found, "interior_share_at_600m_depth")
        assert share == pytest.approx(100 * cells_left / 9)

    @pytest.mark.parametrize(("bounds", "cells_left"), [(True, 0), (False, 8)])
    def test_so_do_cells_without_data(self, bounds, cells_left):
        codes = np.ones((3, 3), int)
        codes[1, 1] = 0
        found = measured(codes, interior_depths_m=[710], map_edge_bounds_interior=bounds)
        assert inside(found, 710) == pytest.approx(cells_left)

    def test_another_class_is_seen_past_cells_without_data(self):
        found = measured([[1, 1, 0, 2]], interior_depths_m=[1500])
        assert inside(found, 1500) == pytest.approx(1)

    def test_the_depth_may_differ_by_neighbour(self):
        codes = [[2, 1, 1, 1, 1, 1, 1, 3]]
        found = measured(codes, interior_depths_m=[600], depth_by_neighbour_m={"3": 2600.0})
        assert inside(found, 600) == pytest.approx(6 - 1 - 3)

    def test_groups_are_bounded_by_what_is_not_in_them(self):
        codes = [[1, 1, 2, 2, 3]]
        found = measured(codes, interior_depths_m=[600], groups={"wet": ["1", "2"]})
        assert inside(found, 600, "wet") == pytest.approx(3)
        found = measured(
            codes, interior_depths_m=[600], groups={"wet": ["1", "2"]}, depth_by_neighbour_m={"3": 1600.0}
        )
        assert inside(found, 600, "wet") == pytest.approx(2)

    def test_zone_borders_bound_nothing(self):
        zones = [cells(0, 0, 4, 9), cells(4, 0, 9, 9)]
        found = measured(self.BLOCK, interior_depths_m=[500], zones=zones)
        assert inside(found, 500, unit=1) == pytest.approx(1 * 3)
        assert inside(found, 500, unit=2) == pytest.approx(2 * 3)


def interior_by_brute_force(codes, cover, depth, width, height, *, bounds, far=None):
    """Return which cells of a class are farther than a depth from every cell of another one."""
    padded = np.pad(codes, 1, constant_values=-1)
    result = np.zeros(codes.shape, bool)
    others = np.argwhere((padded != cover) & ((padded >= 0) | bounds)) - 1
    for r, c in np.argwhere(codes == cover):
        across = np.maximum(np.abs(others[:, 1] - c) - 0.5, 0) * width
        down = np.maximum(np.abs(others[:, 0] - r) - 0.5, 0) * height
        limit = depth if far is None else far[padded[others[:, 0] + 1, others[:, 1] + 1]]
        result[r, c] = (np.hypot(across, down) > limit + 1e-6).all()
    return result


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 10**6), st.integers(1, 9), st.sampled_from([700.0, 1500.0, 2200.0, 3600.0]), st.booleans()
)
def test_against_brute_force(seed, rows, depth, bounds):
    rng = np.random.default_rng(seed)
    codes = ndimage.zoom(rng.integers(1, 4, (3, 4)), 3, order=0)
    codes[rng.random(codes.shape) < 0.05] = rng.integers(0, 4)
    cell = (1000.0, 0.0, 0.0, 0.0, -700.0, 0.0)
    found = fragmentation(
        (codes.astype(np.uint8), cell, PLANE),
        reading=RasterOptions(nodata=(0,), strip_rows=rows),
        interior_depths_m=[depth],
        map_edge_bounds_interior=bounds,
        covers=["1", "2"],
    )
    indexed = np.where(codes == 0, -1, codes)
    for cover in (1, 2):
        expected = interior_by_brute_force(indexed, cover, depth, 1000, 700, bounds=bounds).sum() * 0.7
        assert figure(found, f"interior_area_at_{depth:g}m_depth", str(cover)) == pytest.approx(expected)


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 9))
def test_depths_by_neighbour_against_brute_force(seed, rows):
    rng = np.random.default_rng(seed)
    codes = ndimage.zoom(rng.integers(1, 4, (3, 3)), 3, order=0)
    found = measured(
        codes, rows=rows, interior_depths_m=[600.0], depth_by_neighbour_m={"2": 1600.0, "3": 2600.0}
    )
    far = np.array([600.0, 600.0, 1600.0, 2600.0])
    for cover in np.unique(codes):
        expected = interior_by_brute_force(codes, cover, 0, 1000, 1000, bounds=False, far=far).sum()
        assert inside(found, 600, str(cover)) == pytest.approx(expected)


def test_distances_agree_with_scipy_on_a_large_map():
    """scipy's distance transform between centres, on cells split into 9 so that edges become centres."""
    rng = np.random.default_rng(3)
    codes = (ndimage.gaussian_filter(rng.normal(size=(60, 60)), 4) > 0).astype(int) + 1
    split = np.kron(codes, np.ones((9, 9), int))
    # a centre and the nearest centre of a ninth of another class are half a ninth farther apart than its edge
    distance = ndimage.distance_transform_edt(split == 1)[4::9, 4::9] / 9 * 1000
    found = measured(codes, interior_depths_m=[2000])
    low, high = (distance > 2000 + slack for slack in (1000 / 9, -1e-6))
    assert low.sum() <= inside(found, 2000) <= high.sum()


@given(st.integers(0, 10**6))
def test_compiled_kernels_equal_their_interpreted_twins(seed):
    rng = np.random.default_rng(seed)
    codes = rng.integers(0, 2, (9, 8)).astype(np.int16)
    one, other = np.empty((2, 5, 8), np.int32)
    interior.change_distances(codes, 2, 7, 4, one)
    interior.change_distances.py_func(codes, 2, 7, 4, other)
    assert (one == other).all()
    reach, twin = np.empty((2, 1, 5), np.int32)
    interior.reach_by_rows(2.2, 1.0, 0.9, reach[0])
    interior.reach_by_rows.py_func(2.2, 1.0, 0.9, twin[0])
    assert (reach == twin).all()
    near, twin_near = np.zeros((2, 5, 8), bool)
    line = np.zeros(5, np.int64)
    interior.mark_near(codes[2:7], one, reach, line, bool(seed % 2), near)
    interior.mark_near.py_func(codes[2:7], one, reach, line, bool(seed % 2), twin_near)
    assert (near == twin_near).all()
    zones = rng.integers(-1, 2, (5, 8)).astype(np.int32)
    sums, twin_sums = np.zeros((2, 3, 2), np.int64)
    area = np.full((1, 1), 7)
    interior.add_far(near, codes[2:7], zones, area, line, sums)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(interior, "span", interior.span.py_func)
        interior.add_far.py_func(near, codes[2:7], zones, area, line, twin_sums)
    assert (sums == twin_sums).all()
