"""Polygons of patches cover exactly the cells of their patches."""

from itertools import pairwise

import numpy as np
import pytest
import rasterio.features
import shapely
from affine import Affine
from class_maps import components, strips
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from geofractal.kernels import outlines as kernels
from geofractal.kernels import patches
from geofractal.landcover import labelling, outlines
from geofractal.landcover.labelling import label_patches
from geofractal.landcover.outlines import patch_polygons
from geofractal.patches import raster_patches

UNIT = (1.0, 0.0, 0.0, 0.0, 1.0, 0.0)
small_maps = arrays.arrays(
    np.int16, arrays.array_shapes(min_dims=2, max_dims=2, max_side=9), elements=st.integers(-1, 2)
)


def polygons(codes, rows, neighbours):
    found = []
    for part in label_patches(strips(codes, rows), neighbours=neighbours, runs=True):
        found += list(patch_polygons(part.runs, len(part.patches), UNIT))
    return found


@given(small_maps, st.integers(1, 9), st.sampled_from([4, 8]))
def test_polygons_cover_their_cells(codes, rows, neighbours):
    numbers = components(codes, neighbours)
    found = polygons(codes, rows, neighbours)
    assert len(found) == numbers.max() + 1
    centres = np.indices(codes.shape) + 0.5
    covered = np.full(codes.shape, -1)
    for number, polygon in enumerate(found):
        assert polygon.is_valid, shapely.is_valid_reason(polygon)
        inside = shapely.contains_xy(polygon, centres[1], centres[0])
        assert inside.sum() == polygon.area
        assert len(set(numbers[inside])) == 1
        covered[inside] = number
    assert np.array_equal(covered >= 0, codes >= 0)


@pytest.mark.parametrize("seed", range(4))
def test_parts_that_lie_in_holes_of_other_parts_keep_their_own_holes(seed):
    codes = (np.random.default_rng(seed).random((40, 45)) < 0.5).astype(np.int16)
    numbers = components(codes, 8)
    found = polygons(codes, 7, 8)
    holed = [sum(len(part.interiors) > 0 for part in one.geoms) for one in found if hasattr(one, "geoms")]
    assert max(holed) > 1
    for one in found:
        row, column = np.argwhere(shapely.contains_xy(one, *(np.indices(codes.shape)[::-1] + 0.5)))[0]
        rows, columns = np.nonzero(numbers == numbers[row, column])
        assert one.is_valid
        assert one.equals(shapely.union_all(shapely.box(columns, rows, columns + 1, rows + 1)))


@given(small_maps)
def test_polygons_equal_gdals(codes):
    """Cells of 4 neighbours: one polygon a patch, as GDAL traces them on the whole map."""
    shapes = rasterio.features.shapes(codes, mask=codes >= 0, connectivity=4, transform=Affine.identity())
    expected = sorted(shapely.normalize(shapely.geometry.shape(shape)).wkt for shape, _ in shapes)
    found = [shapely.normalize(polygon) for polygon in polygons(codes, 2, 4)]
    assert sorted(shapely.remove_repeated_points(one).wkt for one in found) == expected


@given(small_maps)
def test_compiled_kernels_equal_their_interpreted_twins(codes):
    runs = np.concatenate([part.runs for part in label_patches(strips(codes, 3), runs=True)])
    compiled = kernels.row_edges(runs)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(kernels, "boundary", kernels.boundary.py_func)
        patch.setattr(patches, "keep_run", patches.keep_run.py_func)
        patch.setattr(labelling, "label_rows", patches.label_rows.py_func)
        twins = [part.runs for part in label_patches(strips(codes, 3), runs=True)]
        assert np.array_equal(np.concatenate(twins), runs)
        assert np.array_equal(kernels.row_edges.py_func(runs), compiled)
    following = np.random.default_rng(0).permutation(9)
    for one, other in zip(kernels.rings_of(following), kernels.rings_of.py_func(following), strict=True):
        assert np.array_equal(one, other)
    assert np.array_equal(kernels.pieces_of_runs.py_func(runs), kernels.pieces_of_runs(runs))
    begins, before = np.array([0, 6, 12]), np.array([-1, -1, -1, -1, 1, 0, -1, -1, 7, -1, -1, 6])
    for one, other in zip(
        kernels.cut_at_repeats(begins, before), kernels.cut_at_repeats.py_func(begins, before), strict=True
    ):
        assert np.array_equal(one, other)


def test_full_tables_change_nothing(monkeypatch):
    """One patch that spans the map keeps all of its runs until the end."""
    codes = np.zeros((40, 30), np.int16)
    codes[1::2, ::2] = 1
    calm = polygons(codes, 40, 8)
    monkeypatch.setattr(labelling, "LABELS", 40)
    for one, other in zip(calm, polygons(codes, 7, 8), strict=True):
        assert one.equals(other)


def test_patches_traced_in_lots_are_the_same(monkeypatch):
    codes = np.random.default_rng(2).integers(-1, 3, (30, 20)).astype(np.int16)
    together = polygons(codes, 30, 8)
    monkeypatch.setattr(outlines, "LOT_RUNS", 4)
    assert [one.wkt for one in polygons(codes, 30, 8)] == [one.wkt for one in together]


def test_a_walk_that_touches_itself_is_cut():
    """An eight: its sixth corner is its second; what lies between is a ring, and what is left another."""
    order, begins = kernels.cut_at_repeats(np.array([0, 8]), np.array([-1] * 6 + [2, -1]))
    assert [order[first:stop].tolist() for first, stop in pairwise(begins)] == [[2, 3, 4, 5], [0, 1, 2, 7]]


def test_a_table_with_polygons():
    codes = np.array([[1, 1, 2], [2, 1, 2], [2, 2, 1]], np.uint8)
    transform = (10.0, 0.0, 500_000.0, 0.0, -10.0, 5_000_000.0)
    found = raster_patches((codes, transform, "EPSG:32632"), geometry=True)
    assert found.crs.to_epsg() == 32632
    assert found.geometry.area.tolist() == [400, 500]
    assert found.geometry.geom_type.tolist() == ["MultiPolygon", "MultiPolygon"]
    assert (
        found.drop(columns="geometry").columns.tolist()
        == raster_patches((codes, transform, "EPSG:32632")).columns.tolist()
    )


def test_zones_and_runs_do_not_mix():
    codes = np.zeros((2, 2))
    with pytest.raises(ValueError, match="leave zones out"):
        list(label_patches(strips(codes, zones=codes), runs=True))
