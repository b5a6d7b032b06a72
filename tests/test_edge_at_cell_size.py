"""Edge density at a stated cell size: the mean of coarser maps, and alike from sources of different cells."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from test_fragmentation import PLANE, cells, figure, measured

from geofractal.cover_api import fragmentation
from geofractal.kernels import cell_edges, lag_edges, patch_sums
from geofractal.reader.raster import RasterOptions


def changes(codes, cover):
    """Return the number of edges between a class and others on a map of unit cells."""
    on = codes == cover
    return (on[1:] != on[:-1]).sum() + (on[:, 1:] != on[:, :-1]).sum()


def coarse(codes, size, cell=10.0, **given):
    """Return estimate, low and high of class 1 at a cell size in metres, from a map of some cell size."""
    found = fragmentation(
        (np.asarray(codes, np.uint8), (cell, 0, 0, 0, -cell, 0), PLANE),
        edge_cell_sizes_m=[size],
        covers=["1"],
        **given,
    )
    return [
        figure(found, f"edge_density_at_{size:g}m_cells", column=name) for name in ("estimate", "low", "high")
    ]


class TestByHand:
    @pytest.mark.parametrize("k", [2, 3, 4])
    def test_a_straight_edge_keeps_its_length(self, k):
        """k of the n - k pairs of each row see it: 1 edge in k, made up for k - 1 that are cut off."""
        n = 300
        codes = np.where(np.indices((12, n))[1] < 150, 1, 2)
        edges = k / (n - k) * (n - 1) / k
        assert coarse(codes, 10 * k)[0] == pytest.approx(edges * 120 / (120 * 3000) * 1000)
        assert edges == pytest.approx(1, rel=0.02)

    def test_between_whole_numbers_of_cells_on_logarithmic_axes(self):
        codes = np.random.default_rng(2).integers(1, 3, (40, 40))
        two, three = coarse(codes, 20)[0], coarse(codes, 30)[0]
        share = math.log(25 / 20) / math.log(30 / 20)
        assert coarse(codes, 25)[0] == pytest.approx(two ** (1 - share) * three**share, rel=0.01)

    def test_a_checkerboard_has_none_at_two_cells(self):
        codes = np.indices((12, 12)).sum(axis=0) % 2 + 1
        assert coarse(codes, 20) == pytest.approx([0, 0, 3 * 20 / 14400 * 1000])
        edges = 2 * 12 * 11 / 3
        assert coarse(codes, 30)[0] == pytest.approx(edges * 10 / 14400 * 1000)

    def test_cells_that_differ_in_size_are_told(self):
        """Degree cells are half as wide at 60 N as at the equator."""
        codes = np.indices((60, 4)).sum(axis=0) % 2 + 1
        found = fragmentation(
            (codes.astype(np.uint8), (1, 0, 0, 0, -1, 60), 4326),
            reading=RasterOptions(grid="source"),
            edge_cell_sizes_m=[300_000.0],
        )
        note = figure(found, "edge_density_at_300000m_cells", column="note")
        assert note == "cells differ in size over the map; metres are those of typical cells"

    def test_a_map_smaller_than_the_cell_size(self):
        assert np.isnan(coarse([[1, 2]], 50)).all()

    def test_a_class_without_any_edge(self):
        assert coarse(np.ones((5, 5)), 20) == [0, 0, 0]

    @pytest.mark.parametrize("size", [10, 5])
    def test_finer_than_the_map_is_refused(self, size):
        found = measured([[1, 2]], edge_cell_sizes_m=[100.0 * size])
        name = f"edge_density_at_{100 * size}m_cells"
        assert math.isnan(figure(found, name))
        assert figure(found, name, column="note") == "not coarser than the map's own cells"
        assert figure(found, name, column="cell_size_m") == 100 * size

    def test_halves_of_pairs_across_zones(self):
        """Pairs two apart: (1, 1), (1, 2), (1, 2) of columns 0-2, 1-3, 2-4, half in each of their zones."""
        codes = [[1, 1, 1, 2, 2]]
        found = measured(codes, edge_cell_sizes_m=[2000.0], zones=[cells(0, 0, 3, 1), cells(3, 0, 5, 1)])
        whole = 2 / 3 * 4 * (1 / 2)
        left = (0 + 0.5 + 0.5) / (1 + 0.5 + 0.5) * 2.5 * (1 / 2)
        assert figure(found, "edge_density_at_2000m_cells") * 5 == pytest.approx(whole)
        assert figure(found, "edge_density_at_2000m_cells", unit=1) * 3 == pytest.approx(left)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 12), st.integers(2, 4))
def test_it_is_the_mean_of_all_coarser_maps(seed, rows, k):
    """On a map that repeats, the edges of all k^2 coarser maps, times k, are the estimate."""
    rng = np.random.default_rng(seed)
    tile = rng.integers(1, 4, (12, 12))
    codes = np.tile(tile, (3, 3))
    lengths = [changes(codes[i::k, j::k], 1) * k for i in range(k) for j in range(k)]
    n = 36
    pairs, kept = n * (n - k), n * (n - 1)  # the estimate makes up for pairs that the map's edge cuts off
    expected = np.mean(lengths) * kept / pairs * (n // k) / (n / k) / n**2 * 100
    value = coarse(codes, 10.0 * k, reading=RasterOptions(strip_rows=rows))[0]
    assert value == pytest.approx(expected, rel=1e-9)


def relief(seed, roughness, side=512):
    """Return a Gaussian relief cut at three levels; its contours have dimension about 2 - roughness."""
    rng = np.random.default_rng(seed)
    across, down = np.meshgrid(np.fft.fftfreq(side), np.fft.fftfreq(side))
    wave = np.hypot(across, down)
    wave[0, 0] = 1
    heights = np.fft.ifft2(np.fft.fft2(rng.normal(size=(side, side))) * wave ** -(roughness + 1)).real
    return np.digitize(heights, np.quantile(heights, [0.3, 0.5, 0.8])).astype(np.uint8)


def keep_one(codes, k):
    return codes[k // 2 :: k, k // 2 :: k]


def keep_most(codes, k):
    blocks = codes.reshape(codes.shape[0] // k, k, codes.shape[1] // k, k)
    return np.argmax([(blocks == code).sum(axis=(1, 3)) for code in range(codes.max() + 1)], axis=0)


@pytest.mark.parametrize("aggregate", [keep_one, keep_most])
@pytest.mark.parametrize("roughness", [0.3, 0.5, 0.8])
@pytest.mark.parametrize("size", [50, 80, 120])
def test_three_cell_sizes_agree_within_their_intervals(aggregate, roughness, size):
    """One map at 10, 20 and 40 m: the finest one's figure lies within the intervals of the coarser ones."""
    codes = relief(11, roughness)
    maps = {10: codes, 20: aggregate(codes, 2), 40: aggregate(codes, 4)}
    found = [coarse(one, size, cell, reading=RasterOptions()) for cell, one in maps.items()]
    for _, low, high in found[1:]:
        assert low <= found[0][0] <= high
    raw = [changes(one, 1) / one.size / cell * 1000 for cell, one in maps.items()]
    assert raw[0] > 1.1 * raw[2]


@given(st.integers(0, 10**6))
def test_compiled_kernels_equal_their_interpreted_twins(seed):
    rng = np.random.default_rng(seed)
    codes = rng.integers(-1, 3, (6, 7)).astype(np.int16)
    zones = rng.integers(-1, 2, (6, 7)).astype(np.int32)
    height, width = rng.integers(1, 9, (1, 1)), rng.integers(1, 9, (1, 8)).cumsum(axis=1)
    line, edge_line = np.zeros(6, np.int64), np.zeros(7, np.int64)
    group, values = rng.integers(-1, 3, 9), rng.integers(0, 2**61, (9, 2))

    def results(of):
        shared, across, down = (
            np.zeros((3, 3), np.int64),
            np.zeros((4, 4), np.int64),
            np.zeros((4, 4), np.int64),
        )
        of(cell_edges, "share_edges")(
            codes[1:], zones[1:], codes[0], zones[0], height, width, line, edge_line, shared
        )
        of(lag_edges, "pairs_across")(codes, zones, 2, height, line, across)
        of(lag_edges, "pairs_down")(codes, zones, 2, 3, width, edge_line, down)
        limbs, sums, largest = (
            np.zeros((3, patch_sums.LIMBS), np.int64),
            np.zeros((3, 2), np.int64),
            np.zeros(3, np.int64),
        )
        inside = group >= 0
        of(patch_sums, "add_products")(
            group[inside], values[inside, 0].copy(), values[inside, 1].copy(), limbs
        )
        of(patch_sums, "add_sums")(group, values % 99, sums)
        of(patch_sums, "raise_largest")(group, values[:, 0].copy(), largest)
        bucketed, offsets = np.empty(9, np.int64), np.zeros(5, np.int64)
        of(patch_sums, "fill_buckets")(group + 1, values[:, 0].copy(), bucketed, offsets)
        return shared, across, down, limbs, sums, largest, bucketed, offsets

    compiled = results(getattr)
    with pytest.MonkeyPatch.context() as patch:
        for module, names in (
            (cell_edges, ("move", "span", "upright")),
            (lag_edges, ("add_pair", "span", "upright")),
        ):
            for name in names:
                patch.setattr(module, name, getattr(module, name).py_func)
        for one, other in zip(
            compiled, results(lambda module, name: getattr(module, name).py_func), strict=True
        ):
            assert (one == other).all()


@given(st.lists(st.tuples(st.integers(0, 2**62 - 1), st.integers(0, 2**62 - 1)), max_size=20))
def test_products_are_exact(pairs):
    one, other = np.array(pairs, np.int64).reshape(-1, 2).T.copy()
    limbs = np.zeros((1, patch_sums.LIMBS), np.int64)
    patch_sums.add_products(np.zeros(len(one), np.int64), one, other, limbs)
    total = sum(int(digit) << (patch_sums.DIGIT * place) for place, digit in enumerate(limbs[0]))
    assert total == sum(a * b for a, b in pairs)
