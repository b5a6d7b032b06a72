"""Distances between patches and equivalent connected area: exact examples, brute force by scipy."""

import math

import numpy as np
import pytest
import shapely
from class_maps import components
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.sparse.csgraph import dijkstra
from test_fragmentation import cells, figure, measured

from geofractal.kernels import patch_gaps
from geofractal.landcover import patch_runs
from geofractal.landcover.connectivity import connected_area


def costs(*links, n):
    """Return -ln p of symmetric links (i, j, p), no link between others."""
    table = np.full((n, n), np.inf)
    np.fill_diagonal(table, 0)
    for i, j, p in links:
        table[i, j] = table[j, i] = -math.log(p) if p else np.inf
    return table


class TestEquivalentConnectedArea:
    """Saura & Pascual-Hortal 2007: maximum product probability paths; the examples follow by hand."""

    @pytest.mark.parametrize(("p", "area"), [(0, 5), (0.5, math.sqrt(37)), (1, 7)])
    def test_two_patches(self, p, area):
        assert connected_area(np.array([3.0, 4.0]), costs((0, 1, p), n=2)).area == pytest.approx(area)

    def test_a_chain_and_what_its_middle_is_worth(self):
        """Areas 5, 2, 4; p12 = .8, p23 = .6, p13 = .3, so that p*13 = .48 over the stepping stone."""
        areas = np.array([5.0, 2.0, 4.0])
        found = connected_area(areas, costs((0, 1, 0.8), (1, 2, 0.6), (0, 2, 0.3), n=3))
        own, direct = 25 + 4 + 16, 2 * (10 * 0.8 + 8 * 0.6 + 20 * 0.3)
        stepping = 2 * 20 * (0.8 * 0.6 - 0.3)
        total = own + direct + stepping
        assert total == pytest.approx(89.8)
        assert found.area == pytest.approx(math.sqrt(total))
        shares = (found.own, found.direct, found.stepping)
        assert shares == pytest.approx((own / total, direct / total, stepping / total))
        without = connected_area(areas[[0, 2]], costs((0, 1, 0.3), n=2))
        lost = (found.area**2 - without.area**2) / found.area**2
        of_own, of_links = 4 / total, 2 * (8 + 4.8) / total
        assert lost == pytest.approx(of_own + of_links + stepping / total)
        assert lost == pytest.approx(0.40980, abs=5e-6)

    def test_none_and_one(self):
        assert connected_area(np.empty(0), np.empty((0, 0))).area == 0
        assert connected_area(np.array([9.0]), np.zeros((1, 1))).area == 9

    def test_links_left_out_are_in_the_interval(self):
        found = connected_area(np.array([3.0, 4.0]), costs((0, 1, 0), n=2), faintest=1e-2)
        assert found.area == 5
        assert found.high == pytest.approx(math.sqrt(25 + 2 * 12 * 1e-2))

    @given(st.integers(0, 10**6), st.integers(1, 8))
    def test_against_dijkstra(self, seed, n):
        rng = np.random.default_rng(seed)
        areas, p = rng.uniform(1, 9, n), np.triu(rng.uniform(0.01, 0.99, (n, n)), 1)
        table = costs(*[(i, j, p[i, j]) for i in range(n) for j in range(i + 1, n)], n=n)
        paths = dijkstra(table)
        expected = math.sqrt((np.outer(areas, areas) * np.exp(-paths)).sum())
        assert connected_area(areas, table).area == pytest.approx(expected)


class TestDistances:
    def test_from_cell_edge_to_cell_edge(self):
        codes = np.full((5, 8), 2)
        codes[0, 0], codes[3, 4:6], codes[0, 7] = 1, 1, 1
        found = measured(codes, distances=True)
        first, second = math.hypot(3, 2), math.hypot(1, 2)
        assert figure(found, "mean_nearest_distance") == pytest.approx(1000 * (first + 2 * second) / 3)
        assert figure(found, "median_nearest_distance") == pytest.approx(1000 * second)

    def test_across_zone_borders(self):
        found = measured([[1, 2, 2, 1]], distances=True, zones=[cells(0, 0, 2, 1), cells(1, 0, 3, 1)])
        assert figure(found, "mean_nearest_distance", unit=1) == pytest.approx(2000)
        assert figure(found, "mean_nearest_distance", unit=2, column="note") == "no patch of this class"

    def test_patches_that_meet_in_a_corner_touch(self):
        assert figure(measured([[1, 2], [2, 1]], distances=True, neighbours=4), "mean_nearest_distance") == 0

    def test_a_lone_patch_has_none(self):
        found = measured([[1, 2]], distances=True)
        assert math.isnan(figure(found, "mean_nearest_distance"))
        assert figure(found, "mean_nearest_distance", column="note") == "a lone patch has no other one"

    def test_small_patches_are_nobodys_neighbours(self):
        found = measured([[1, 1, 2, 1, 2, 1, 1]], distances=True, smallest_patch_m2=2e6)
        assert figure(found, "mean_nearest_distance") == pytest.approx(3000)

    def test_more_patches_than_allowed(self):
        found = measured([[1, 2, 1, 2, 1]], distances=True, dispersal_m=1000.0, most_patches=2)
        for quantity in ("mean_nearest_distance", "equivalent_connected_area"):
            assert math.isnan(figure(found, quantity))
            assert figure(found, quantity, column="note") == "3 patches, more than most-patches (2)"

    def test_a_zone_below_the_limit_has_them(self):
        zones = [cells(0, 0, 2, 1)]
        found = measured([[1, 2, 1, 2, 1]], distances=True, most_patches=2, zones=zones)
        assert figure(found, "mean_nearest_distance", unit=1) == pytest.approx(1000)
        assert math.isnan(figure(found, "mean_nearest_distance"))

    def test_a_class_of_too_many_runs(self, monkeypatch):
        monkeypatch.setattr(patch_runs, "MOST_RUNS", 4)
        codes = [[1, 2, 3, 2], [1, 2, 2, 2], [1, 2, 2, 2]]
        for rows in (1, 3):
            found = measured(codes, rows=rows, distances=True, covers=["1", "3"])
            assert "too many cells" in figure(found, "mean_nearest_distance", column="note")
            assert "lone patch" in figure(found, "mean_nearest_distance", "3", column="note")


class TestConnectedPatches:
    def test_two_cells_at_the_median_distance(self):
        """3 and 4 cells, p = 1/2 at 2 km: sqrt(37)."""
        found = measured([[1, 1, 1, 2, 2, 1, 1, 1, 1]], dispersal_m=2000.0)
        assert figure(found, "equivalent_connected_area") == pytest.approx(math.sqrt(37))
        assert figure(found, "own_area_share") == pytest.approx(100 * 25 / 37)
        assert figure(found, "direct_link_share") == pytest.approx(100 * 12 / 37)
        assert figure(found, "stepping_stone_share") == pytest.approx(0, abs=1e-9)

    def test_paths_leave_the_zone(self):
        """A patch outside shortens the way between two halves inside: 1 + 1 cells of gap instead of 3."""
        codes = np.array([[1, 2, 2, 2, 1], [2, 2, 1, 2, 2]])
        found = measured(codes, dispersal_m=1000.0, zones=[cells(0, 0, 5, 1)])
        gap = 1000 * math.hypot(1, 0)
        expected = 1 + 1 + 2 * 0.5 ** (2 * gap / 1000)
        assert figure(found, "equivalent_connected_area", unit=1) == pytest.approx(math.sqrt(expected))

    def test_only_what_is_inside_counts(self):
        found = measured([[1, 1, 1, 1]], dispersal_m=1000.0, zones=[cells(0, 0, 3, 1)])
        assert figure(found, "equivalent_connected_area", unit=1) == pytest.approx(3)
        assert figure(found, "equivalent_connected_area") == pytest.approx(4)


def brute_gaps(number):
    """Return the gap between every two components of cells of one kilometre."""
    n = number.max() + 1
    gaps = np.zeros((n, n))
    for i in range(n):
        for j in range(i):
            one, other = np.argwhere(number == i), np.argwhere(number == j)
            steps = np.maximum(np.abs(one[:, None] - other[None]) - 1, 0)
            gaps[i, j] = gaps[j, i] = 1000 * np.hypot(steps[..., 0], steps[..., 1]).min()
    return gaps


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 10), st.sampled_from([4, 8]))
def test_maps_against_brute_force(seed, rows, neighbours):
    rng = np.random.default_rng(seed)
    codes = np.where(rng.random((10, 12)) < rng.uniform(0.05, 0.5), 1, 2)
    zone = shapely.Point(rng.uniform(0, 10, 2)).buffer(rng.uniform(2, 6), 3)
    placed = shapely.transform(zone, lambda xy: xy * (1000, -1000))
    found = measured(
        codes,
        rows=rows,
        neighbours=neighbours,
        distances=True,
        dispersal_m=1500.0,
        zones=[placed],
        covers=["1"],
    )
    number = components(np.where(codes == 1, 1, -1), neighbours)
    if number.max() < 0:
        return
    gaps = brute_gaps(number)
    paths = dijkstra(np.where(gaps > 0, gaps, 1e-6) * (1 - np.eye(len(gaps))))
    r, c = np.indices(codes.shape) + 0.5
    inside = shapely.contains_xy(zone, c, r)
    for unit, area in (("1", inside), ("whole map", np.ones_like(inside))):
        part = np.bincount(number[area & (codes == 1)], minlength=len(gaps)).astype(float)
        if not part.any():
            continue
        expected = np.sqrt((np.outer(part, part) * 0.5 ** (paths / 1500)).sum())
        assert figure(found, "equivalent_connected_area", unit=unit) == pytest.approx(expected, rel=1e-6)
        if len(gaps) > 1:
            nearest = (gaps + np.diag([np.inf] * len(gaps))).min(axis=1)[part > 0]
            assert figure(found, "mean_nearest_distance", unit=unit) == pytest.approx(nearest.mean())
            assert figure(found, "median_nearest_distance", unit=unit) == pytest.approx(np.median(nearest))


@given(st.integers(0, 10**6))
def test_compiled_kernels_equal_their_interpreted_twins(seed):
    rng = np.random.default_rng(seed)
    runs, offsets, boxes = [], [0], []
    for _ in range(4):
        rows = np.sort(rng.integers(0, 6, 3))
        start = rng.integers(0, 8, 3)
        own = np.stack([rows, start, start + rng.integers(1, 4, 3)], axis=1)
        own = own[np.lexsort((own[:, 1], own[:, 0]))]
        runs.append(own)
        offsets.append(offsets[-1] + 3)
        boxes.append((own[0, 0], own[-1, 0], own[:, 1].min(), own[:, 2].max() - 1))
    runs, offsets, boxes = np.concatenate(runs), np.array(offsets), np.array(boxes)
    top, width = np.arange(7.0), np.linspace(1, 1.2, 6)
    areas = np.array([(r, z, 2 * z, 2 * z + 4) for r in range(6) for z in range(3)])
    order = np.argsort(runs[:, 0], kind="stable")
    sorted_runs, patch = np.ascontiguousarray(runs[order]), np.repeat(np.arange(4), 3)[order]
    size, line = np.full((1, 1), 5), np.zeros(6, np.int64)

    def results(kernels):
        nearest, gaps = np.empty(4), np.empty((4, 4))
        kernels["nearest_gaps"](np.arange(4), runs, offsets, boxes, top, width, nearest)
        kernels["all_gaps"](np.arange(4), runs, offsets, boxes, top, width, 3.0, gaps)
        paths = gaps.copy()
        kernels["cheapest_paths"](paths)
        found = np.empty((kernels["count_overlaps"](sorted_runs, areas), 3), np.int64)
        kernels["find_overlaps"](sorted_runs, patch, areas, 0, size, line, found)
        return nearest, gaps, paths, found

    names = (
        "nearest_gaps",
        "all_gaps",
        "cheapest_paths",
        "count_overlaps",
        "find_overlaps",
        "gap",
        "box_gap",
        "span",
    )
    compiled = results({name: getattr(patch_gaps, name) for name in names})
    with pytest.MonkeyPatch.context() as twin:
        plain = {name: getattr(patch_gaps, name).py_func for name in names}
        for name in ("gap", "box_gap", "span"):
            twin.setattr(patch_gaps, name, plain[name])
        for one, other in zip(compiled, results(plain), strict=True):
            assert np.allclose(one, other, rtol=1e-12)
