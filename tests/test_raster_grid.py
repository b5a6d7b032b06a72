"""True cell sizes of grids, and the choice between a raster's own grid and an equal-distance one."""

import math

import numpy as np
import pytest
from geographiclib.geodesic import Geodesic
from pyproj import CRS, Proj

from geofractal.errors import ConfigError, SourceError
from geofractal.landcover.grid import Grid
from geofractal.landcover.strips import NOT_COVERED
from geofractal.reader.raster import RasterOptions, open_raster
from geofractal.reader.raster_plane import choose_grid, equal_distance_grid
from geofractal.reader.raster_source import ClassMap

ELLIPSOID_AREA = 510_065_621_724_088.0  # m2, WGS 84: Karney's geodesic library tests
WORLD = Grid(180, 360, (1.0, 0.0, -180.0, 0.0, -1.0, 90.0), CRS("EPSG:4326"))


def grid(crs, transform, rows=300, columns=300):
    return Grid(rows, columns, transform, CRS(crs))


def cell(grid, row, column):
    """Return true width of the upper edge, height of the left edge and area of one cell in metres."""
    sizes = grid.sizes(row, 1)

    def of(table, line):
        return table[line, 0] if table.shape[1] == 1 else table[line, column + 1] - table[line, column]

    height = sizes.height[sizes.area_line[0], 0 if sizes.height.shape[1] == 1 else column]
    return (
        of(sizes.width, sizes.edge_line[0]) * grid.length_unit_m,
        height * grid.length_unit_m,
        of(sizes.area, sizes.area_line[0]) * grid.area_unit_m2,
    )


def geodesic_cell(grid, row, column):
    """Return the same by geographiclib, between the cell's corners undone by the CRS's own projection."""
    a, b, c, d, e, f = grid.transform
    corners = [(row, column), (row, column + 1), (row + 1, column + 1), (row + 1, column)]
    x, y = zip(*[(a * k + b * r + c, d * k + e * r + f) for r, k in corners], strict=True)
    lon, lat = (x, y) if grid.crs.is_geographic else Proj(grid.crs)(x, y, inverse=True)
    shape = grid.crs.ellipsoid
    geodesic = Geodesic(shape.semi_major_metre, 1 / shape.inverse_flattening)
    ring = geodesic.Polygon()
    for point in zip(lat, lon, strict=True):
        ring.AddPoint(*point)
    upper = geodesic.Inverse(lat[0], lon[0], lat[1], lon[1])["s12"]
    left = geodesic.Inverse(lat[0], lon[0], lat[3], lon[3])["s12"]
    return upper, left, abs(ring.Compute()[2])


class TestGeographic:
    def test_one_degree_cells(self):
        """Areas between parallels, km2: 12308.464, 8686.495, 2058.275 at 0, 45, 80 N (independent)."""
        areas = [cell(WORLD, 89 - south, 7)[2] / 1e6 for south in (0, 45, 80)]
        assert areas == pytest.approx([12308.464, 8686.495, 2058.275], abs=5e-4)

    def test_degree_lengths(self):
        """At 45 N: 78846.835 m of longitude, 111131.778 m of latitude (centred), common practice."""
        assert cell(WORLD, 45, 0)[0] == pytest.approx(78846.835, abs=1e-3)
        centred = Grid(1, 1, (1.0, 0.0, 0.0, 0.0, -1.0, 45.5), CRS("EPSG:4326"))
        assert cell(centred, 0, 0)[1] == pytest.approx(111131.778, abs=1e-3)

    def test_the_world_has_the_area_of_the_ellipsoid(self):
        sizes = WORLD.sizes(0, 180)
        total = int(sizes.area.sum()) * 360 * WORLD.area_unit_m2
        assert total == pytest.approx(ELLIPSOID_AREA, rel=1e-9)

    def test_meridians_add_up_to_the_quadrant(self):
        """10001965.7293 m from equator to pole (WGS 84, from memory)."""
        sizes = WORLD.sizes(0, 90)
        assert int(sizes.height.sum()) * WORLD.length_unit_m == pytest.approx(10_001_965.7293, abs=1e-3)

    def test_parallels_vanish_at_the_poles(self):
        assert WORLD.sizes(0, 1).width[0, 0] * WORLD.length_unit_m < 1e-3

    def test_rows_beyond_a_pole_have_no_area(self):
        beyond = Grid(3, 4, (1.0, 0.0, 0.0, 0.0, -1.0, 91.0), CRS("EPSG:4326"))
        assert beyond.sizes(0, 3).area[:, 0].tolist()[0] == 0

    def test_any_upright_geographic_grid_suits(self):
        assert WORLD.distortion == 0
        assert choose_grid(WORLD, "auto", 0.005, None) is WORLD

    def test_south_up_equals_north_up(self):
        upside_down = Grid(180, 360, (1.0, 0.0, -180.0, 0.0, 1.0, -90.0), CRS("EPSG:4326"))
        assert np.array_equal(upside_down.sizes(0, 180).area, WORLD.sizes(0, 180).area[::-1])

    def test_grads(self):
        """NTF (Paris) counts in grads: 100 to the quadrant."""
        paris = Grid(1, 1, (1.0, 0.0, 0.0, 0.0, -1.0, 50.0), CRS("EPSG:4807"))
        shape = paris.crs.ellipsoid
        geodesic = Geodesic(shape.semi_major_metre, 1 / shape.inverse_flattening)
        assert cell(paris, 0, 0)[1] == pytest.approx(geodesic.Inverse(45.0, 0, 44.1, 0)["s12"], abs=1e-3)


class TestProjected:
    CASES = (
        ("EPSG:32632", (30.0, 0.0, 250_000.0, 0.0, -30.0, 5_500_000.0)),
        ("EPSG:3035", (100.0, 0.0, 3_300_000.0, 0.0, -100.0, 3_000_000.0)),
        ("EPSG:2264", (100.0, 0.0, 1_500_000.0, 0.0, -100.0, 700_000.0)),  # US survey feet
        ("EPSG:3857", (30.0, 0.0, 1_000_000.0, 0.0, -30.0, 8_000_000.0)),
        ("EPSG:32632", (0.25, 0.0, 250_000.0, 0.0, -0.25, 5_500_000.0)),
        ("EPSG:3031", (1000.0, 0.0, -150_000.0, 0.0, -1000.0, 150_000.0)),  # a pole in its middle
        ("EPSG:32632", (21.0, 21.0, 250_000.0, 21.0, -21.0, 5_500_000.0)),  # turned by 45 degrees
    )

    @pytest.mark.parametrize(("crs", "transform"), CASES)
    @pytest.mark.parametrize("at", [(3, 5), (150, 149), (299, 299)])
    def test_cells_agree_with_geodesics(self, crs, transform, at):
        one = grid(crs, transform)
        # Sizes are constant over blocks of up to 16 rows, along which this projection's scale runs fastest.
        close = 2e-4 if crs == "EPSG:3857" else 2e-5
        assert cell(one, *at) == pytest.approx(geodesic_cell(one, *at), rel=close)

    def test_equal_area_grids_keep_their_areas(self):
        one = grid("EPSG:3035", (100.0, 0.0, 2_600_000.0, 0.0, -100.0, 5_000_000.0))
        assert cell(one, 10, 10)[2] == pytest.approx(100**2, rel=1e-9)

    @pytest.mark.parametrize("crs", ["EPSG:32632", "EPSG:3857", "EPSG:3031"])
    def test_conformal_grids_have_no_distortion(self, crs):
        assert grid(crs, (30.0, 0.0, 250_000.0, 0.0, -30.0, 5_000_000.0)).distortion < 1e-8

    def test_distortion_is_the_error_of_a_diagonal(self):
        """A cell sheared by 45 degrees: its short diagonal is 1 where the rectangle says sqrt 3."""
        one = grid("EPSG:32632", (30.0, 30.0, 500_000.0, 0.0, -30.0, 5_000_000.0))
        width, height = 1.0, math.sqrt(2)
        cosine = 1 / math.sqrt(2)
        same_sides = 2 - 2 * cosine  # squared diagonal of two unit sides at 45 degrees, against 2
        assert width < height
        assert one.distortion == pytest.approx(1 - math.sqrt(same_sides / 2), abs=1e-6)

    def test_sizes_do_not_depend_on_the_strip(self):
        one = grid("EPSG:3035", (100.0, 0.0, 2_600_000.0, 0.0, -100.0, 5_000_000.0), rows=70)
        whole = one.sizes(0, 70)
        for first in (1, 15, 16, 33, 69):
            part = one.sizes(first, 1)
            for line, table in (("area_line", "area"), ("edge_line", "width")):
                here = getattr(part, table)[getattr(part, line)[0]]
                there = getattr(whole, table)[getattr(whole, line)[first]]
                assert np.array_equal(here, there)

    def test_corners_outside_the_earth_do_not_hurt(self):
        """A sinusoidal world map: its corners are not on the globe."""
        one = grid("ESRI:54008", (200_000.0, 0.0, -20_000_000.0, 0.0, -200_000.0, 10_000_000.0), 100, 200)
        sizes = one.sizes(0, 100)
        assert (sizes.area[:, -1] > 0).all()

    def test_a_raster_off_the_earth_is_refused(self):
        one = grid("EPSG:3035", (100.0, 0.0, 9e7, 0.0, -100.0, 9e7))
        with pytest.raises(SourceError, match="outside the area where its CRS"):
            _ = one.distortion

    @pytest.mark.parametrize("unit_m", [1000.0, 1609.344, 0.001])
    def test_cells_are_as_large_in_any_unit(self, unit_m):
        def utm(unit_m):
            crs = f"+proj=utm +zone=32 +datum=WGS84 +to_meter={unit_m}"
            return grid(crs, tuple(part / unit_m for part in (30.0, 0.0, 5e5, 0.0, -30.0, 6e6)))

        assert cell(utm(unit_m), 7, 9) == pytest.approx(cell(utm(1.0), 7, 9), rel=1e-9)

    def test_a_local_plane_is_measured_as_it_is(self):
        feet = CRS.from_wkt('LOCAL_CS["site",UNIT["foot",0.3048]]')
        one = Grid(2, 2, (10.0, 0.0, 0.0, 0.0, -20.0, 0.0), feet)
        assert cell(one, 0, 0) == pytest.approx((3.048, 6.096, 3.048 * 6.096), rel=1e-8)


class TestUnits:
    def test_the_whole_map_fits_into_int64(self):
        for one in (WORLD, grid("EPSG:32632", (0.1, 0.0, 5e5, 0.0, -0.1, 5e6), 10**6, 10**6)):
            width, height, area = cell(one, 90, 3)
            cells = one.rows * one.columns
            assert cells * area / one.area_unit_m2 < 2**63
            assert cells * 2 * (width + height) / one.length_unit_m < 2**63

    def test_rounding_is_negligible(self):
        one = grid("EPSG:32632", (0.1, 0.0, 5e5, 0.0, -0.1, 5e6), 10**6, 10**6)
        width, _, area = cell(one, 90, 3)
        assert one.length_unit_m / width < 2e-5
        assert one.area_unit_m2 / area < 1e-5


class TestChoice:
    SINUSOIDAL = grid("ESRI:54008", (500.0, 0.0, 1_000_000.0, 0.0, -500.0, 5_500_000.0))
    CONTINENT = grid("EPSG:3035", (10_000.0, 0.0, 2_500_000.0, 0.0, -10_000.0, 5_500_000.0))

    def test_a_suitable_grid_is_kept(self):
        one = grid("EPSG:32632", (30.0, 0.0, 250_000.0, 0.0, -30.0, 5_500_000.0))
        assert choose_grid(one, "auto", 0.005, None) is one

    def test_a_sheared_grid_is_warped(self):
        chosen = choose_grid(self.SINUSOIDAL, "auto", 0.005, None)
        assert chosen.plane in {"azimuthal", "conic"}
        assert chosen.distortion < 0.005 < self.SINUSOIDAL.distortion

    def test_a_stated_cell_size_asks_for_a_plane(self):
        one = grid("EPSG:32632", (30.0, 0.0, 250_000.0, 0.0, -30.0, 5_500_000.0))
        chosen = choose_grid(one, "auto", 0.005, 90.0)
        assert chosen.transform[0] == 90
        assert chosen.plane != "source"

    def test_a_continent_keeps_no_plane_within_the_budget(self):
        with pytest.raises(
            SourceError, match=r"its own grid errs by [\d.]+%, an equal-distance plane: 1\.\d+% at best"
        ):
            choose_grid(self.CONTINENT, "auto", 0.005, None)

    def test_unless_its_own_grid_is_stated(self):
        assert choose_grid(self.CONTINENT, "source", 0.005, None) is self.CONTINENT

    def test_or_the_budget_is_raised(self):
        assert choose_grid(self.CONTINENT, "auto", 0.02, None).plane == "azimuthal"

    def test_a_globe_has_no_plane(self):
        assert equal_distance_grid(WORLD) is None
        with pytest.raises(SourceError, match="none exists for its extent"):
            choose_grid(WORLD, "warp", 0.005, None)

    def test_distortion_of_the_azimuthal_plane(self):
        """k - 1 = 1.0247e-3 at 500 km on the ellipsoid at 45 N, azimuth 60: s12 / m12."""
        side = 1_000_000 / math.sqrt(2)  # corners 500 km from the centre
        one = grid(
            "+proj=aeqd +lat_0=45 +lon_0=9 +ellps=WGS84", (side / 300, 0, -side / 2, 0, -side / 300, side / 2)
        )
        plane = equal_distance_grid(one)
        assert plane.plane in {"azimuthal", "conic"}
        assert plane.distortion <= 1.03e-3

    def test_the_plane_of_least_distortion_wins(self):
        """Along a parallel the cone is better, round a centre the azimuthal plane."""
        belt = Grid(20, 400, (0.1, 0.0, -20.0, 0.0, -0.1, 51.0), CRS("EPSG:4326"))
        assert equal_distance_grid(belt).plane == "conic"
        assert equal_distance_grid(self.CONTINENT).plane == "azimuthal"

    def test_unknown_grid(self):
        with pytest.raises(ConfigError, match="grid is 'native'; allowed are auto, source, warp"):
            choose_grid(WORLD, "native", 0.005, None)

    @pytest.mark.parametrize(("grid_word", "size"), [("source", 30.0), ("warp", 0.0)])
    def test_cell_sizes_that_make_no_sense(self, grid_word, size):
        with pytest.raises(ConfigError, match="cell-size-m is"):
            choose_grid(self.SINUSOIDAL, grid_word, 0.005, size)

    def test_a_local_plane_cannot_be_warped(self):
        local = Grid(
            2, 2, (10.0, 0.0, 0.0, 0.0, -20.0, 0.0), CRS.from_wkt('LOCAL_CS["site",UNIT["metre",1]]')
        )
        with pytest.raises(ConfigError, match="plane as it is and cannot be warped"):
            choose_grid(local, "warp", 0.005, None)


class TestWarping:
    """Warped cells hold the class of the source cell under their centre."""

    @pytest.mark.parametrize(
        ("crs", "transform"),
        [
            ("EPSG:32632", (30.0, 0.0, 250_000.0, 0.0, -30.0, 5_500_000.0)),
            ("EPSG:27700", (30.0, 0.0, 250_000.0, 0.0, -30.0, 500_000.0)),  # another datum: no shift wanted
            ("EPSG:4326", (0.001, 0.0, 9.0, 0.0, -0.001, 50.0)),
            ("EPSG:32632", (21.0, 21.0, 250_000.0, 21.0, -21.0, 5_500_000.0)),
        ],
    )
    def test_against_the_projections_themselves(self, crs, transform):
        codes = np.random.default_rng(3).integers(1, 200, (80, 90)).astype(np.uint8)
        raster = open_raster(ClassMap(codes, transform, crs), RasterOptions(grid="warp", strip_rows=17))
        warped = np.concatenate([strip.codes for strip in raster.strips()])
        names = np.array([int(name) for name in raster.legend.names] + [0])[warped]
        plane, own = raster.grid, raster.source_grid
        r, c = np.indices(warped.shape) + 0.5
        a, _, x0, _, e, y0 = plane.transform
        lon, lat = Proj(plane.crs)(x0 + a * c, y0 + e * r, inverse=True)
        x, y = (lon, lat) if own.crs.is_geographic else Proj(own.crs)(lon, lat)
        a, b, x0, d, e, y0 = own.transform
        column, row = np.linalg.solve([[a, b], [d, e]], np.stack([(x - x0).ravel(), (y - y0).ravel()]))
        inside = (row >= 0) & (row < 80) & (column >= 0) & (column < 90)
        expected = np.zeros(row.shape, int)
        expected[inside] = codes[row[inside].astype(int), column[inside].astype(int)]
        agree = (expected == names.ravel()).mean()
        assert agree > 0.95  # the warper interpolates positions within an eighth of a cell
        assert (warped != NOT_COVERED).sum() == pytest.approx(codes.size, rel=0.01)
