"""Patches from strips equal patches of the whole map, found by scipy and by flooding cell by cell."""

import numpy as np
import pytest
from class_maps import components, label, lines_by_hand, plane_grid, strips
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from scipy import ndimage

from geofractal.errors import ConfigError
from geofractal.kernels import patch_retire, patch_rings, patch_tables, patches
from geofractal.kernels.patch_tables import LINES
from geofractal.landcover import labelling
from geofractal.landcover.labelling import SEVERAL_ZONES, label_patches

SIDES = {4: ndimage.generate_binary_structure(2, 1), 8: np.ones((3, 3), int)}
BY_HAND = [
    *("class", "zone", "first_row", "first_column", "last_row", "left_column", "right_column", "cells"),
    *("edge", "border_edge", "zone_edge", "barrier_edge"),
]
COLUMNS = [LINES.index(name) for name in BY_HAND]

small_maps = arrays.arrays(
    np.int16, arrays.array_shapes(min_dims=2, max_dims=2, max_side=9), elements=st.integers(-1, 2)
)


def column(table, name):
    return table[:, LINES.index(name)]


def in_units(table, codes, names):
    """Return columns as plain numbers on a plane of unit cells."""
    grid = plane_grid(codes)
    unit = {"area": grid.area_unit_m2, "filled_area": grid.area_unit_m2}
    lengths = ("edge", "border_edge", "outer_edge", "corners")
    unit |= dict.fromkeys(lengths, grid.length_unit_m)
    return [
        tuple(row) for row in np.stack([column(table, n) * unit.get(n, 1) for n in names], axis=1).round(6)
    ]


class TestByHand:
    """Maps of three by three cells of 1 m, every figure countable on paper."""

    RING = np.array([[0, 0, 0], [0, 1, 0], [0, 0, 0]])
    DIAGONAL = np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]])

    def test_a_ring_has_an_inner_and_an_outer_edge(self):
        patches, _, _ = label(self.RING, outlines=True)
        names = ["class", "cells", "area", "edge", "border_edge", "outer_edge", "filled_area", "holes"]
        ring = (0, 9 - 1, 9 - 1, 4 * 3 + 4 * 1, 4 * 3, 4 * 3, 9, 1)
        core = (1, 1, 1, 4, 0, 4, 1, 0)
        assert sorted(in_units(patches, self.RING, names)) == [ring, core]

    @pytest.mark.parametrize(("neighbours", "expected"), [(4, [1, 1, 1, 3, 3]), (8, [3, 6])])
    def test_a_diagonal_hangs_together_by_corners_only(self, neighbours, expected):
        patches, _, _ = label(self.DIAGONAL, neighbours=neighbours)
        assert sorted(column(patches, "cells")) == expected

    def test_one_cell(self):
        patches, _, _ = label(np.zeros((1, 1)))
        assert in_units(patches, np.zeros((1, 1)), ["cells", "area", "edge", "border_edge"]) == [(1, 1, 4, 4)]

    def test_nothing_covered(self):
        patches, pieces, parts = label(np.full((3, 4), -1))
        assert len(patches) == len(pieces) == len(parts) == 0

    def test_no_strips_no_patches(self):
        assert list(label_patches([])) == []

    def test_all_cells_different(self):
        codes = np.arange(9).reshape(3, 3)
        patches, _, _ = label(codes)
        assert [tuple(row) for row in patches[:, :4]] == [(k, 0, k // 3, k % 3) for k in range(9)]

    def test_corners_of_a_square_and_a_staircase(self):
        """One corner saves (w + h - d) / 2 with d the cell's diagonal: 4 corners, and 4 + 2 per step."""
        stairs = np.array([[0, 1, 1], [0, 0, 1], [0, 0, 0]])
        saved = (2 - np.sqrt(2)) / 2
        patches, _, _ = label(np.zeros((3, 3)))
        assert in_units(patches, stairs, ["corners"]) == [(round(4 * saved, 6),)]
        patches, _, _ = label(stairs)
        assert in_units(patches, stairs, ["corners"])[1] == (round((4 + 2 * 2) * saved, 6),)

    def test_a_zone_border_cuts_pieces_but_not_patches(self):
        codes, zones = np.zeros((2, 4)), np.array([[7, 7, 9, 9], [7, 7, 9, 9]])
        patches, pieces, parts = label(codes, zones=zones)
        assert column(patches, "zone").tolist() == [SEVERAL_ZONES]
        assert in_units(patches, codes, ["cells", "edge"]) == [(8, 2 * (2 + 4))]
        assert in_units(pieces, codes, ["zone", "cells", "edge"]) == [(7, 4, 8), (9, 4, 8)]
        assert in_units(parts, codes, ["zone", "cells"]) == [(7, 4), (9, 4)]

    def test_a_zone_that_splits_a_patch_has_two_pieces_and_one_part(self):
        codes = np.array([[0, 0, 0], [0, 1, 0]])
        zones = np.array([[5, 5, 5], [6, 6, 6]])
        _, pieces, parts = label(codes, zones=zones)
        assert column(pieces, "cells").tolist() == [3, 1, 1, 1]
        assert [tuple(line) for line in parts[:, [0, 1, LINES.index("cells")]]] == [
            (0, 5, 3),
            (0, 6, 2),
            (1, 6, 1),
        ]


class TestAgainstWholeMaps:
    @given(small_maps, st.integers(1, 9), st.sampled_from([4, 8]))
    def test_cells_boxes_and_edges_by_flooding(self, codes, rows, neighbours):
        patches, _, _ = label(codes, rows, neighbours=neighbours)
        unit = round(1 / plane_grid(codes).length_unit_m)
        expected = lines_by_hand(codes, components(codes, neighbours), unit=unit)
        assert sorted(map(tuple, patches[:, COLUMNS].tolist())) == expected

    @given(small_maps, st.integers(1, 9), st.sampled_from([4, 8]))
    def test_filled_areas_and_holes_by_scipy(self, codes, rows, neighbours):
        patches, _, _ = label(codes, rows, neighbours=neighbours, outlines=True)
        found = in_units(patches, codes, ["class", "cells", "filled_area", "holes"])
        expected = []
        for k in range(3):
            numbers, count = ndimage.label(codes == k, SIDES[neighbours])
            for i in range(1, count + 1):
                outside = np.pad(numbers != i, 1, constant_values=True)
                gaps, n_gaps = ndimage.label(outside, SIDES[12 - neighbours])
                filled = (gaps[1:-1, 1:-1] != gaps[0, 0]).sum()
                expected.append((k, (numbers == i).sum(), filled, n_gaps - 1))
        assert sorted(found) == sorted(expected)

    @given(small_maps, st.sampled_from([4, 8]))
    def test_the_outer_edge_is_the_edge_of_the_filled_patch(self, codes, neighbours):
        patches, _, _ = label(codes, 2, neighbours=neighbours, outlines=True)
        found = in_units(patches, codes, ["cells", "outer_edge"])
        numbers, expected = components(codes, neighbours), []
        for k in range(numbers.max() + 1):
            filled = ndimage.binary_fill_holes(numbers == k, SIDES[12 - neighbours])
            table = np.pad(filled, 1).astype(int)
            edge = np.abs(np.diff(table, axis=0)).sum() + np.abs(np.diff(table, axis=1)).sum()
            expected.append(((numbers == k).sum(), edge))
        assert sorted(found) == sorted(expected)

    @given(st.data(), small_maps, st.integers(1, 9), st.sampled_from([4, 8]))
    def test_zones_and_barriers_by_flooding(self, data, codes, rows, neighbours):
        zones = data.draw(arrays.arrays(np.int32, codes.shape, elements=st.integers(-1, 1)))
        cuts = data.draw(arrays.arrays(np.uint8, codes.shape, elements=st.integers(0, 15)))
        patches, pieces, parts = label(codes, rows, neighbours=neighbours, zones=zones, cuts=cuts)
        unit = round(1 / plane_grid(codes).length_unit_m)
        cut = components(codes, neighbours, zones=zones, cuts=cuts)
        assert sorted(map(tuple, pieces[:, COLUMNS].tolist())) == lines_by_hand(
            codes, cut, zones=zones, cuts=cuts, unit=unit
        )
        whole = components(codes, neighbours, cuts=cuts)
        expected = [(*line[:1], *line[2:]) for line in lines_by_hand(codes, whole, cuts=cuts, unit=unit)]
        without_zone = [i for i, name in zip(COLUMNS, BY_HAND, strict=True) if name != "zone"]
        assert sorted(map(tuple, patches[:, without_zone].tolist())) == sorted(expected)
        inside = [
            (codes[whole == k][0], zone, ((whole == k) & (zones == zone)).sum())
            for k in range(whole.max() + 1)
            for zone in np.unique(zones[whole == k])
        ]
        in_zone = parts[:, [LINES.index(name) for name in ("class", "zone", "cells")]]
        assert sorted(map(tuple, in_zone.tolist())) == sorted(inside)

    @given(small_maps, st.integers(1, 9), st.integers(1, 9), st.booleans())
    def test_strip_height_changes_nothing_not_even_the_order(self, codes, one, other, outlines):
        zones = np.indices(codes.shape).sum(axis=0) // 4
        for first, second in zip(
            label(codes, one, outlines=outlines, zones=zones),
            label(codes, other, outlines=outlines, zones=zones),
            strict=True,
        ):
            assert np.array_equal(first, second)

    @pytest.mark.parametrize("zoned", [False, True])
    def test_full_tables_change_nothing(self, monkeypatch, zoned):
        """Noise fills small tables again and again: they retire in mid strip, and grow."""
        rng = np.random.default_rng(5)
        codes = rng.integers(-1, 2, (60, 40)).astype(np.int16)
        zones = rng.integers(0, 2, codes.shape) if zoned else None
        calm = label(codes, outlines=True, zones=zones)
        monkeypatch.setattr(labelling, "LABELS", 48)
        for first, second in zip(calm, label(codes, 7, outlines=True, zones=zones), strict=True):
            assert np.array_equal(first, second)

    def test_order_is_by_last_row_then_by_first_cell(self):
        codes = np.array([[0, 1, 0, 1], [0, 2, 2, 1], [3, 3, 3, 3]])
        patches, _, _ = label(codes, neighbours=4)
        cells = [tuple(row) for row in patches[:, [4, 2, 3]]]
        assert cells == sorted(cells)

    def test_other_neighbours_are_refused(self):
        with pytest.raises(ConfigError, match="neighbours is 6; allowed are 4 and 8"):
            list(label_patches([], neighbours=6))

    def test_zones_in_some_strips_only_are_refused(self):
        codes = np.zeros((2, 2))
        mixed = [*strips(codes, zones=codes), *strips(codes)]
        with pytest.raises(ValueError, match="for all strips of a map or for none"):
            list(label_patches(mixed))


KERNELS = {
    patch_tables: ("find", "join", "span", "upright"),
    patch_rings: ("find", "join", "join_rings", "new_ring", "ring_end", "settle_rings", "span", "upright"),
    patch_retire: ("group_pieces", "join", "retire", "settle"),
    patches: ("barred_length", "find", "find_runs", "join_rings", "label_rows", "linked", "span", "upright"),
    labelling: ("group_pieces", "label_rows", "retire", "settle", "settle_rings"),
}


@given(small_maps, st.sampled_from([4, 8]))
def test_compiled_kernels_equal_their_interpreted_twins(codes, neighbours):
    cuts = (np.indices(codes.shape).sum(axis=0) % 5).astype(np.uint8)
    given_to_both = {"neighbours": neighbours, "outlines": True, "zones": codes % 2, "cuts": cuts}
    compiled = label(codes, 3, **given_to_both)
    with pytest.MonkeyPatch.context() as patch:
        for module, names in KERNELS.items():
            for name in names:
                patch.setattr(module, name, getattr(module, name).py_func)
        with np.errstate(over="ignore"):
            twins = label(codes, 3, **given_to_both)
    for one, other in zip(compiled, twins, strict=True):
        assert np.array_equal(one, other)


class TestExactIdentities:
    """Independent cells, each of the class with probability p, on an m x n map with free edges."""

    @pytest.mark.parametrize("seed", range(4))
    def test_patches_less_holes_is_the_euler_number(self, seed):
        """(4-neighbour patches) - (their 8-neighbour holes) = cells - links + full 2 x 2 blocks."""
        codes = np.random.default_rng(seed).integers(0, 2, (40, 50)) - 1
        patches, _, _ = label(codes, 9, neighbours=4, outlines=True)
        on = codes == 0
        links = (on[1:] & on[:-1]).sum() + (on[:, 1:] & on[:, :-1]).sum()
        blocks = (on[1:, 1:] & on[1:, :-1] & on[:-1, 1:] & on[:-1, :-1]).sum()
        assert len(patches) - column(patches, "holes").sum() == on.sum() - links + blocks

    @pytest.mark.parametrize(
        ("neighbours", "side", "total"), [(4, 2, 17), (8, 2, 15), (4, 3, 897), (8, 3, 656)]
    )
    def test_mean_patch_count_at_one_half(self, neighbours, side, total):
        """Over all maps: 17/16 and 15/16 on 2 x 2, 897/512 and 656/512 on 3 x 3, both classes alike."""
        cells = side * side
        maps = (np.arange(2**cells)[:, None] >> np.arange(cells)) & 1
        count = sum(
            np.count_nonzero(column(label(one.reshape(side, side), neighbours=neighbours)[0], "class") == 1)
            for one in maps
        )
        assert count == total

    def test_class_change_edges(self):
        """Expected 2 p (1 - p) E with E = m (n - 1) + n (m - 1) inner edges, each seen from two sides."""
        m, n, p = 300, 400, 0.3
        codes = (np.random.default_rng(8).random((m, n)) < p).astype(int)
        patches, _, _ = label(codes, 64)
        inner = sum(edge - border for edge, border in in_units(patches, codes, ["edge", "border_edge"]))
        inner_edges = m * (n - 1) + n * (m - 1)
        changed = np.count_nonzero(np.diff(codes, axis=0)) + np.count_nonzero(np.diff(codes, axis=1))
        assert inner == 2 * changed
        assert inner / 2 == pytest.approx(2 * p * (1 - p) * inner_edges, rel=0.01)
