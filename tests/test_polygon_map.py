"""Faces and edges of polygons that overlap, fail to meet, touch at a corner or are cut by lines."""

import warnings

import geopandas
import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import CRS, Geod
from test_fragmentation import ALL_EDGES, CHANGES, CUT, PLANE, figure

from geofractal.api import box_dimension
from geofractal.cover_api import fragmentation
from geofractal.errors import ConfigError, GeofractalWarning
from geofractal.landcover.planar import lay_over
from geofractal.landcover.polygon_map import polygon_map
from geofractal.reader.ground import GroundPlane
from geofractal.synthetic.koch import koch

METRES = CRS.from_wkt(PLANE)
KILOMETRES = "+proj=utm +zone=33 +datum=WGS84 +units=km"
BOUNDS, OPEN = "map edge bounds", "map edge is open"


def layer(*polygons, crs=PLANE):
    """Return polygons given as class and geometry."""
    return geopandas.GeoDataFrame(
        {"kind": [kind for kind, _ in polygons]}, geometry=[g for _, g in polygons], crs=crs
    )


def measured(*polygons, crs=PLANE, **asked):
    return fragmentation(layer(*polygons, crs=crs), cover="kind", **asked)


def km(left, bottom, right, top):
    return shapely.box(1000 * left, 1000 * bottom, 1000 * right, 1000 * top)


class TestFaces:
    def test_shared_boundaries_are_one_edge_wherever_rings_begin(self):
        one, other = shapely.box(0, 0, 1, 1), shapely.Polygon([(2, 1), (1, 1), (1, 0), (2, 0)])
        found = lay_over(shapely.get_rings(np.array([one, other, one])), np.empty(0, object), 1e-9)
        assert len(found.faces) == 2
        assert len(found.edges) == 3
        shared = found.edges[(found.sides < 2).all(axis=1)]
        assert shapely.length(shared).tolist() == [1]

    def test_a_line_that_ends_within_a_face_has_it_on_both_sides(self):
        rings = shapely.get_rings(np.array([shapely.box(0, 0, 4, 4)]))
        found = lay_over(rings, np.array([shapely.LineString([(2, 2), (2, 9)])], object), 1e-9)
        within = [
            tuple(side) for side, edge in zip(found.sides, found.edges, strict=True) if edge.bounds[1] == 2
        ]
        assert within == [(0, 0)]
        assert (found.sides[shapely.bounds(found.edges)[:, 3] == 9] == 1).all()

    @settings(max_examples=30, deadline=None)
    @given(st.integers(0, 10**6))
    def test_sides_are_on_the_left_and_on_the_right(self, seed):
        rng = np.random.default_rng(seed)
        low, size = rng.integers(0, 9, (5, 2)), rng.integers(1, 6, (5, 2))
        boxes = shapely.box(*low.T, *(low + size).T)
        found = lay_over(shapely.get_rings(boxes), np.empty(0, object), 1e-9)
        assert shapely.area(found.faces).sum() == pytest.approx(shapely.union_all(boxes).area)
        for edge, sides in zip(found.edges, found.sides, strict=True):
            (x0, y0), (x1, y1) = edge.coords[:2]
            middle, normal = np.array([x0 + x1, y0 + y1]) / 2, np.array([y0 - y1, x1 - x0]) * 1e-3
            for place, face in zip((middle + normal, middle - normal), sides, strict=True):
                holds = np.flatnonzero(shapely.contains_xy(found.faces, *place))
                assert holds.tolist() == ([face] if face < len(found.faces) else [])

    def test_no_polygons_at_all(self):
        found = polygon_map(np.empty(0, object), [], METRES)
        assert len(found.planar.faces) == 0
        assert found.whole.faces.tolist() == []


class TestEdges:
    def test_boundary_to_nothing_mapped_is_the_maps_border(self):
        """Two squares of 1 km that share a side: 1 km of change, 4 km about each."""
        found = measured(("a", km(0, 0, 1, 1)), ("b", km(1, 0, 2, 1)))
        assert figure(found, "edge_length", "a", rule=CHANGES) == pytest.approx(1)
        assert figure(found, "edge_length", "all covers", rule=CHANGES) == pytest.approx(1)
        assert figure(found, "edge_length", "a", rule=ALL_EDGES) == pytest.approx(4)
        assert figure(found, "edge_density", "a", rule=CHANGES) == pytest.approx(1 / 2)

    def test_holes_filled_by_another_class_and_empty_ones(self):
        """A 3 km square with two holes of 0.5 km, one of which class b fills."""
        full, empty = km(0.5, 0.5, 1, 1), km(2, 2, 2.5, 2.5)
        found = measured(("a", km(0, 0, 3, 3) - full - empty), ("b", full))
        assert figure(found, "edge_length", "a", rule=CHANGES) == pytest.approx(4 * 0.5)
        assert figure(found, "edge_length", "a", rule=ALL_EDGES) == pytest.approx(4 * 3 + 2 * 4 * 0.5)
        assert figure(found, "area", "all covers") == pytest.approx(9 - 0.25)

    def test_polygons_of_a_class_that_touch_or_overlap_have_no_edge_between_them(self):
        found = measured(("a", km(0, 0, 2, 1)), ("a", km(1, 0, 3, 1)), ("a", km(3, 0, 4, 1)))
        assert figure(found, "patches", "a") == 1
        assert figure(found, "area", "a") == pytest.approx(4)
        assert figure(found, "edge_length", "a", rule=ALL_EDGES) == pytest.approx(2 * 4 + 2)

    def test_where_classes_overlap_each_has_the_area_and_that_is_said(self):
        found = measured(("a", km(0, 0, 2, 1)), ("b", km(1, 0, 3, 1)))
        assert figure(found, "area", "a") == pytest.approx(2)
        assert figure(found, "area", "b") == pytest.approx(2)
        assert figure(found, "area", "all covers") == pytest.approx(3)
        assert "overlap on 1 km2" in figure(found, "area", "all covers", column="note")
        # a ends within b, and b within a: a km each
        assert figure(found, "edge_length", "all covers", rule=CHANGES) == pytest.approx(2)

    def test_an_edge_on_a_zone_border_is_half_either_zones(self):
        found = measured(("a", km(0, 0, 1, 1)), ("b", km(1, 0, 2, 1)), zones=[km(0, 0, 1, 1), km(1, 0, 2, 1)])
        for zone in (1, 2):
            assert figure(found, "edge_length", "a", unit=zone, rule=CHANGES) == pytest.approx(0.5)
            assert figure(found, "edge_length", "all covers", unit=zone, rule=CHANGES) == pytest.approx(0.5)

    @pytest.mark.parametrize("gap", [0.0, 1e-9, -1e-9, 4e-4, -4e-4])
    def test_outlines_that_fail_to_meet_by_a_hair_meet(self, gap):
        """The neighbours' corner is a vertex of theirs alone, a hair off the long side."""
        low = shapely.Polygon([(0, 0), (2000, 0), (2000, 1000), (0, 1000)])
        left = shapely.Polygon([(0, 1000), (977, 1000 + gap), (977, 2000), (0, 2000)])
        right = shapely.Polygon([(977, 1000 + gap), (2000, 1000), (2000, 2000), (977, 2000)])
        found = measured(("a", low), ("b", left), ("a", right), neighbours=4)
        assert figure(found, "edge_length", "a", rule=CHANGES) == pytest.approx(0.977 + 1, abs=1e-5)
        assert figure(found, "patches", "a") == 1
        assert figure(found, "area", "all covers") == pytest.approx(4, rel=1e-6)

    def test_a_sliver_that_is_wide_enough_is_a_gap(self):
        found = measured(("a", km(0, 0, 1, 1)), ("b", km(1.0001, 0, 2, 1)))
        assert figure(found, "edge_length", "a", rule=CHANGES) == 0

    @pytest.mark.parametrize(("neighbours", "patches"), [(4, 2), (8, 1)])
    def test_polygons_that_touch_at_a_corner(self, neighbours, patches):
        found = measured(("a", km(0, 0, 1, 1)), ("a", km(1, 1, 2, 2)), neighbours=neighbours)
        assert figure(found, "patches", "a") == patches


class TestBarriers:
    def test_a_road_parts_a_wood_and_both_its_sides_are_edges(self):
        road = shapely.LineString([(-500, 500), (4500, 500)])
        found = measured(("wood", km(0, 0, 4, 1)), barriers=[road], distances=True)
        assert figure(found, "patches", "wood") == 2
        assert figure(found, "area", "wood") == pytest.approx(4)
        assert figure(found, "edge_length", "wood", rule=ALL_EDGES) == pytest.approx(2 * (4 + 1) + 2 * 4)
        assert figure(found, "mean_nearest_distance", "wood") == 0

    def test_a_road_that_ends_within_a_wood_does_not_part_it(self):
        road = shapely.LineString([(1000, 500), (4500, 500)])
        found = measured(("wood", km(0, 0, 4, 1)), barriers=[road])
        assert figure(found, "patches", "wood") == 1
        assert figure(found, "edge_length", "wood", rule=ALL_EDGES) == pytest.approx(2 * (4 + 1) + 2 * 3)

    @pytest.mark.parametrize("neighbours", [4, 8])
    def test_a_road_that_ends_at_the_woods_own_edge_parts_it(self, neighbours):
        road = shapely.LineString([(0, 500), (4000, 500)])
        found = measured(("wood", km(0, 0, 4, 1)), barriers=[road], neighbours=neighbours)
        assert figure(found, "patches", "wood") == 2

    @pytest.mark.parametrize(("road", "largest"), [([(0, 2), (2, 0)], 4), ([(0, 0), (3, 3)], 1 / 2 + 4 / 2)])
    def test_a_road_through_a_common_corner(self, road, largest):
        """Across, it parts two woods; along, it cuts both, and the halves on a side of it meet."""
        line = shapely.LineString(np.array(road) * 1000)
        found = measured(("wood", km(0, 0, 1, 1)), ("wood", km(1, 1, 3, 3)), barriers=[line], neighbours=8)
        assert figure(found, "patches", "wood") == 2
        assert figure(found, "largest_patch", "wood") == pytest.approx(largest)


class TestWhatIsLeftOut:
    def test_polygons_and_barriers_left_out_are_told_beside_the_area_of_the_map(self):
        bow_tie = shapely.Polygon([(0, 0), (1, 1), (1, 0), (0, 1)])
        point = shapely.LineString([(5, 5), (5, 5)])
        asked = {"zones": [km(0, 0, 1, 1)], "barriers": [point]}
        rows = [("a", km(0, 0, 1, 1)), ("a", bow_tie), (None, km(1, 0, 2, 1)), ("a", None)]
        found = measured(*rows, **asked)
        notes = found[(found["quantity"] == "area") & (found["cover"] == "all covers")]["note"].tolist()
        said = "polygons left out: invalid: Self-intersection (1), no class (1), missing geometry (1)"
        assert isinstance(notes[0], float)  # NaN: the zone has all of its polygons
        assert notes[1].endswith(f"; {said}; barriers left out: zero length (1)")

    @pytest.mark.parametrize("crs", [32632, 4326, PLANE])
    def test_no_polygon_at_all(self, crs):
        found = measured(("a", None), crs=crs)
        assert found["estimate"].fillna(0).eq(0).all()
        assert "missing geometry (1)" in found["note"][0]

    def test_whole_numbers_name_classes_whatever_the_columns_type(self):
        """A column of whole numbers holds decimals once a value is missing."""
        rows = layer(("a", km(0, 0, 1, 1)), ("b", km(1, 0, 2, 1)), ("c", km(2, 0, 3, 1)))
        found = fragmentation(rows, cover=[1.0, np.nan, 2.5])
        assert set(found["cover"]) == {"all covers", "1", "2.5"}


class TestBarriersWithAWidth:
    def test_the_strip_is_no_wood_but_stays_in_the_area(self):
        """A road of 200 m across a wood of 4 by 4 km, and what is 500 m from its sides."""
        road = shapely.LineString([(-1000, 2000), (5000, 2000)])
        asked = {"barriers": [road], "barrier_width_m": 200.0, "interior_depths_m": [500.0]}
        found = measured(("wood", km(0, 0, 4, 4)), **asked)
        assert figure(found, "area", "wood") == pytest.approx(4 * (4 - 0.2))
        assert figure(found, "area", "barrier") == pytest.approx(4 * 0.2)
        assert figure(found, "share", "barrier") == pytest.approx(100 * 0.2 / 4)
        assert figure(found, "area", "all covers") == pytest.approx(16)
        assert figure(found, "edge_length", "wood", rule=CHANGES) == pytest.approx(2 * 4)
        mesh = figure(found, "effective_mesh_size", "wood", rule=CUT)
        assert mesh == pytest.approx(2 * (4 * 1.9) ** 2 / 16)
        assert figure(found, "interior_area_at_500m_depth", "wood") == pytest.approx(4 * (4 - 0.2 - 2 * 0.5))
        assert "patches" not in set(found[found["cover"] == "barrier"]["quantity"])

    def test_depths_may_be_stated_from_barriers(self):
        road = shapely.LineString([(-1000, 2000), (5000, 2000)])
        asked = {"barriers": [road], "barrier_width_m": 200.0, "interior_depths_m": [500.0]}
        found = measured(("wood", km(0, 0, 4, 4)), depth_by_neighbour_m={"barrier": 1000.0}, **asked)
        assert figure(found, "interior_area_at_500m_depth", "wood") == pytest.approx(4 * (4 - 0.2 - 2))

    @pytest.mark.parametrize("crs", [4326, 32632, 3035, KILOMETRES])
    def test_widths_are_true_on_the_ground(self, crs):
        """A road of 100 m and 20 km, and its round ends."""
        geod = Geod(ellps="WGS84")
        lon, lat, _ = geod.fwd(12.0, 60.0, 40.0, 20_000.0)
        road = geopandas.GeoSeries([shapely.LineString([(12, 60), (lon, lat)])], crs=4326)
        wood = geopandas.GeoSeries([shapely.box(11, 59, 13, 61)], crs=4326).segmentize(0.01).to_crs(crs)
        found = measured(("wood", wood[0]), crs=crs, barriers=road.segmentize(0.001), barrier_width_m=100.0)
        taken = 20 * 0.1 + np.pi * 0.05**2
        assert figure(found, "area", "barrier") == pytest.approx(taken, rel=2e-4)

    def test_a_class_of_that_name(self):
        road = shapely.LineString([(0, 0), (1, 1)])
        with pytest.raises(ConfigError, match="'barrier' is what cells are called"):
            measured(("barrier", km(0, 0, 1, 1)), barriers=[road], barrier_width_m=2.0)


class TestInterior:
    def test_depth_counts_from_other_classes_and_from_the_maps_edge_if_asked(self):
        """A 4 km square in one of 10 km: what is 1 km from its edge is 2 km wide; of the rest a frame."""
        inner, rest = km(3, 3, 7, 7), km(0, 0, 10, 10) - km(3, 3, 7, 7)
        found = measured(("a", inner), ("b", rest), interior_depths_m=[1000.0])
        assert figure(found, "interior_area_at_1000m_depth", "a", rule=OPEN) == pytest.approx(2**2)
        assert figure(found, "interior_share_at_1000m_depth", "a") == pytest.approx(100 * 2**2 / 4**2)
        rounded = 100 - (4**2 + 4 * 4 + np.pi)  # less the square and what is within 1 km about it
        assert figure(found, "interior_area_at_1000m_depth", "b") == pytest.approx(rounded, rel=1e-3)
        closed = measured(
            ("a", inner), ("b", rest), interior_depths_m=[1000.0], map_edge_bounds_interior=True
        )
        rounded -= 10**2 - 8**2
        assert figure(closed, "interior_area_at_1000m_depth", "b", rule=BOUNDS) == pytest.approx(
            rounded, rel=1e-3
        )

    def test_depths_by_neighbour(self):
        """A strip of 10 km between a road, kept 3 km from, and a field, kept 1 km from."""
        strips = [("road", km(0, 0, 10, 1)), ("wood", km(0, 1, 10, 11)), ("field", km(0, 11, 10, 12))]
        found = measured(*strips, interior_depths_m=[1000.0], depth_by_neighbour_m={"road": 3000.0})
        assert figure(found, "interior_area_at_1000m_depth", "wood") == pytest.approx(10 * (10 - 3 - 1))

    def test_a_group_has_no_edge_within_and_zones_cut_what_is_left(self):
        parts = [("a", km(0, 0, 5, 4)), ("b", km(5, 0, 10, 4)), ("c", km(0, 4, 10, 5))]
        asked = {"groups": {"both": ["a", "b"]}, "zones": [km(0, 0, 2, 9)], "interior_depths_m": [1000.0]}
        found = measured(*parts, **asked)
        assert figure(found, "interior_area_at_1000m_depth", "both") == pytest.approx(10 * 3)
        assert figure(found, "interior_area_at_1000m_depth", "both", unit=1) == pytest.approx(2 * 3)
        assert figure(found, "interior_area_at_1000m_depth", "a") == pytest.approx(4 * 3)

    @settings(max_examples=25, deadline=None)
    @given(st.integers(0, 10**6), st.booleans())
    def test_random_maps_against_what_is_left_of_whole_classes(self, seed, alike):
        """A class less what is within each neighbour's depth of that neighbour, all taken whole."""
        rng = np.random.default_rng(seed)
        codes = rng.choice(list("abc "), (5, 5), p=[0.4, 0.3, 0.2, 0.1])
        codes[0, 0] = "a"
        squares = [(code, km(x, y, x + 1, y + 1)) for (x, y), code in np.ndenumerate(codes) if code != " "]
        depth = {"b": 300.0, "c": 300.0} if alike else {"b": 300.0, "c": 1400.0}
        left = shapely.union_all([square for code, square in squares if code == "a"])
        for name, metres in depth.items():
            others = shapely.union_all([square for code, square in squares if code == name])
            left = left - shapely.buffer(others, metres, quad_segs=16)
        far = {} if alike else {"depth_by_neighbour_m": {"c": 1400.0}}
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", GeofractalWarning)  # a map may lack c
            found = measured(*squares, zones=[km(0, 0, 2, 5)], interior_depths_m=[300.0], **far)
        name = "interior_area_at_300m_depth"
        assert figure(found, name, "a") == pytest.approx(left.area / 1e6, rel=1e-6, abs=1e-9)
        within = (left & km(0, 0, 2, 5)).area / 1e6
        assert figure(found, name, "a", unit=1) == pytest.approx(within, rel=1e-6, abs=1e-9)

    def test_a_class_beyond_a_gap_bounds_too(self):
        found = measured(("a", km(0, 0, 4, 4)), ("b", km(5, 0, 6, 4)), interior_depths_m=[2000.0])
        assert figure(found, "interior_area_at_2000m_depth", "a") == pytest.approx(4 * 3)

    def test_an_absent_class_has_no_share(self):
        with pytest.warns(GeofractalWarning, match="no polygon is of class 'b'; there are a"):
            found = measured(("a", km(0, 0, 4, 4)), covers=["b"], interior_depths_m=[9.0])
        assert figure(found, "interior_share_at_9m_depth", "b", column="note") == "the class is absent"


class TestWhatNeedsCells:
    def test_it_is_null_and_says_why(self):
        asked = {"edge_cell_sizes_m": [50.0], "lacunarity_boxes_m": [100.0], "box_dimension": True}
        found = measured(("a", km(0, 0, 1, 1)), **asked)
        for name in (
            "edge_density_at_50m_cells",
            "lacunarity_at_100m_boxes",
            "lacunarity_boxes_at_100m_boxes",
            "box_dim",
        ):
            assert np.isnan(figure(found, name, "a"))
            assert "needs cells: rasterise" in figure(found, name, "a", column="note")


class TestBoxDimensionOfEdges:
    def test_it_is_that_of_the_boundary_as_a_line(self):
        """A Koch snowflake in a square: the box dimension of its outline as a line is what the edge has."""
        flake = shapely.Polygon(koch(level=6, island=True).xy * 9000)
        square = shapely.buffer(shapely.box(*flake.bounds), 9000, join_style="mitre")
        found = measured(("lake", flake), ("land", square - flake), box_dimension=True)
        alone = box_dimension([flake.exterior], crs=PLANE)
        for cover in ("lake", "land"):
            estimate = figure(found, "edge_box_dim", cover)
            assert estimate == pytest.approx(float(alone["box_dim"].iloc[0]), abs=0.02)
            assert figure(found, "edge_box_dim", cover, column="low") < np.log(4) / np.log(3)
            assert figure(found, "edge_box_dim", cover, column="high") > np.log(4) / np.log(3)
        assert "of boundaries as lines" in figure(found, "edge_box_dim", "lake", column="note")

    def test_a_class_without_an_edge_has_none_and_says_so(self):
        found = measured(("a", km(0, 0, 1, 1)), box_dimension=True)
        assert figure(found, "edge_box_dim", "a", column="note") == "no edge to another class"


class TestOnTheGlobe:
    WEST, SOUTH = 10.0, 60.0

    def degrees(self, left, bottom, right, top):
        return shapely.box(self.WEST + left, self.SOUTH + bottom, self.WEST + right, self.SOUTH + top)

    def test_lengths_and_distances_are_true(self):
        """Along a meridian, whose length between parallels geodesics give."""
        geod = Geod(ellps="WGS84")

        def along(south, north):
            return geod.inv(self.WEST, self.SOUTH + south, self.WEST, self.SOUTH + north)[2]

        squares = [("a", self.degrees(0, 0, 0.2, 0.1)), ("a", self.degrees(0, 0.3, 0.2, 0.4))]
        found = measured(*squares, ("b", self.degrees(0.2, 0, 0.4, 0.1)), crs=4326, distances=True)
        assert figure(found, "mean_nearest_distance", "a") == pytest.approx(along(0.1, 0.3), rel=1e-4)
        assert figure(found, "edge_length", "a", rule=CHANGES) == pytest.approx(along(0, 0.1) / 1e3, rel=1e-6)

    def test_zones_and_barriers_in_another_crs(self):
        square = self.degrees(0, 0, 0.2, 0.1)
        zone = geopandas.GeoSeries([self.degrees(-0.1, -0.1, 0.1, 0.2)], crs=4326).to_crs(3035)
        road = geopandas.GeoSeries(
            [shapely.LineString([(self.WEST - 1, self.SOUTH + 0.05), (self.WEST + 1, self.SOUTH + 0.05)])],
            crs=4326,
        )
        dense = road.segmentize(0.001).to_crs(3035)
        found = measured(("a", square), crs=4326, zones=zone.segmentize(100), barriers=dense)
        assert figure(found, "patches", "a") == 2
        assert figure(found, "patches", "a", unit=1) == 2
        assert figure(found, "share", "a", unit=1) == pytest.approx(100)
        assert figure(found, "area", "a", unit=1) == pytest.approx(figure(found, "area", "a") / 2, rel=1e-3)

    def test_a_layer_too_large_for_one_plane_has_no_distances_and_says_why(self):
        far = [shapely.box(-60, -50, -50, 10), shapely.box(60, 0, 70, 60), shapely.box(0, 0, 1, 1)]
        asked = {"distances": True, "interior_depths_m": [1000.0]}
        found = measured(*zip(("a", "a", "b"), far, strict=True), crs=4326, **asked)
        for name in ("mean_nearest_distance", "interior_area_at_1000m_depth"):
            assert np.isnan(figure(found, name, "a"))
            assert "on its best plane (budget: 0.5 %)" in figure(found, name, "a", column="note")
        assert figure(found, "patches", "a") == 2

    def test_planes_of_true_distance(self):
        """On either plane: a kilometre of every meridian and parallel of a country is a kilometre."""
        for bounds in ((5.0, 47.0, 15.0, 55.0), (9.0, 59.0, 11.0, 61.0)):
            ground = GroundPlane(CRS.from_epsg(4326), bounds)
            assert ground.name in {"conic", "azimuthal"}
            geod = Geod(ellps="WGS84")
            for azimuth in (0.0, 90.0, 45.0):
                lon, lat, _ = geod.fwd(bounds[0], bounds[1], azimuth, 1000.0)
                line = np.array([shapely.LineString([bounds[:2], (lon, lat)])], object)
                assert shapely.length(ground.lay(line))[0] == pytest.approx(
                    1000, rel=ground.distortion + 1e-6
                )


def test_zones_of_one_name():
    with pytest.raises(ConfigError, match="Zones need names of their own; x is given more than once"):
        measured(("a", km(0, 0, 1, 1)), zones=[km(0, 0, 1, 1)] * 2, zone_names=["x", "x"])


def test_zones_that_touch_or_overlap_by_rounding_do_not_overlap():
    one, other = km(0, 0, 1, 1), km(1 - 1e-13, 0, 2, 1)
    found = measured(("a", km(0, 0, 2, 1)), zones=[one, other, km(0.5, 0, 1.5, 1)])
    notes = [figure(found, "area", "all covers", unit=zone, column="note") for zone in (1, 2, 3)]
    assert notes == ["overlaps 3", "overlaps 3", "overlaps 1, 2"]
