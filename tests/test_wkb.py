"""WKB to lines: against shapely (independent code), on hand-made bytes, and on bytes that lie."""

from __future__ import annotations

import math
import struct

import numpy as np
import pyarrow as pa
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import LineString, MultiLineString, MultiPolygon, Point, Polygon

from geofractal.kernels import wkb as kernels
from geofractal.reader.geometry import PROBLEMS, SourceLines, read_lines

BOW_TIE = Polygon([(0, 0), (2, 2), (2, 0), (0, 2)])
HOLED = Polygon([(0, 0), (9, 0), (9, 9), (0, 9)], [[(1, 1), (2, 1), (2, 2)]])


def arrow(geometries, type_=None, **how):
    return pa.array(shapely.to_wkb(geometries, **how), type_ or pa.binary())


def parts_of(lines: SourceLines) -> list[list[np.ndarray]]:
    features = zip(lines.feature_offsets[:-1], lines.feature_offsets[1:], strict=True)
    return [
        [lines.xy[lines.part_offsets[j] : lines.part_offsets[j + 1]] for j in range(a, b)]
        for a, b in features
    ]


def parts_by_shapely(geometry) -> list[np.ndarray]:
    pieces = shapely.get_parts(geometry)
    rings = shapely.get_rings(pieces) if geometry.geom_type.endswith("Polygon") else pieces
    return [shapely.get_coordinates(ring) for ring in rings]


def reasons(array, **options) -> list[str]:
    return [PROBLEMS[code] for code in read_lines(array, **options).problems]


coordinates = st.tuples(st.integers(-9, 9), st.integers(-9, 9))
line = st.lists(coordinates, min_size=2, max_size=6).map(LineString)
ring = st.tuples(coordinates, st.integers(3, 7), st.integers(1, 4)).map(
    lambda a: [
        (a[0][0] + a[2] * math.cos(2 * math.pi * i / a[1]), a[0][1] + a[2] * math.sin(2 * math.pi * i / a[1]))
        for i in range(a[1])
    ]
)
geometry = st.one_of(
    st.none(),
    line,
    st.lists(line, max_size=3).map(MultiLineString),
    ring.map(Polygon),
    st.just(HOLED),
    st.tuples(ring, st.just(HOLED)).map(
        lambda a: MultiPolygon([Polygon(shapely.affinity.translate(Polygon(a[0]), 99)), a[1]])
    ),
    coordinates.map(Point),
    st.just(LineString()),
    st.just(Polygon()),
)
"""Any row of a layer: lines, valid polygons, points, empties and nulls."""


@settings(max_examples=120, deadline=None)
@given(
    rows=st.lists(geometry, min_size=1, max_size=8),
    flavor=st.sampled_from(["iso", "extended"]),
    order=st.sampled_from([0, 1]),
    dimension=st.sampled_from([2, 3]),
    type_=st.sampled_from([pa.binary(), pa.large_binary()]),
    cut=st.integers(0, 3),
)
def test_reads_what_shapely_reads(rows, flavor, order, dimension, type_, cut):
    flat = [None if g is None else shapely.force_3d(g, 5.0) if dimension == 3 else g for g in rows]
    array = arrow(
        flat,
        type_,
        flavor=flavor,
        byte_order=order,
        output_dimension=dimension,
        include_srid=flavor == "extended",
    ).slice(cut)
    lines = read_lines(array, drop_repeated=False)
    expected = {}
    for i, g in enumerate(rows[cut:]):
        if g is not None and "Point" not in g.geom_type:
            moving = [p for p in parts_by_shapely(g) if len(p) and (p != p[0]).any()]
            if moving:
                expected[i] = moving
    assert lines.rows.tolist() == list(expected)
    for found, wanted in zip(parts_of(lines), expected.values(), strict=True):
        assert [p.tolist() for p in found] == [p.tolist() for p in wanted]
    ends = [np.array_equal(p[0], p[-1]) for feature in expected.values() for p in feature]
    assert lines.closed.tolist() == ends


@pytest.mark.filterwarnings("ignore:invalid value encountered in from_wkt")
@pytest.mark.parametrize(
    ("text", "reason"),
    [
        (None, "missing geometry"),
        ("LINESTRING EMPTY", "empty geometry"),
        ("MULTILINESTRING EMPTY", "empty geometry"),
        ("MULTIPOLYGON EMPTY", "empty geometry"),
        ("POLYGON EMPTY", "empty geometry"),
        ("POINT (1 1)", "points where lines are wanted"),
        ("MULTIPOINT (1 1, 2 2)", "points where lines are wanted"),
        ("LINESTRING (3 3, 3 3, 3 3)", "zero length"),
        ("MULTILINESTRING ((3 3, 3 3), (4 4, 4 4))", "zero length"),
        ("GEOMETRYCOLLECTION (LINESTRING (0 0, 1 1))", "geometry collection"),
        ("LINESTRING (0 0, NaN 1)", "coordinates that are not numbers"),
        ("LINESTRING (0 0, 1 Infinity)", "coordinates that are not numbers"),
        ("POLYGON ((0 0, 2 2, 2 0, 0 2, 0 0))", "invalid polygon"),
        ("POLYGON ((0 0, 1 1, 2 2, 0 0))", "invalid polygon"),
        ("LINESTRING (0 0, 2 2, 2 0, 0 2)", ""),
    ],
)
def test_says_why_a_row_is_left_out(text, reason):
    (found,) = reasons(arrow([shapely.from_wkt(text)]))
    assert found.startswith(reason)
    assert bool(found) == bool(reason)


def test_one_vertex_is_told_from_zero_length():
    one = struct.pack("<BII2d", 1, 2, 1, 4.0, 5.0)
    assert reasons(pa.array([one])) == ["one vertex only"]


@pytest.mark.parametrize("kind", [*range(8, 13), 13, 14, 15, 16, 17])
@pytest.mark.parametrize("dimensions", [0, 1000, 2000, 3000])
def test_curves_are_refused(kind, dimensions):
    head = struct.pack("<BII", 1, kind + dimensions, 0)
    assert reasons(pa.array([head]))[0].startswith("curved geometry")


@pytest.mark.parametrize("code", [2, 1002, 2002, 3002, 0x80000002, 0x40000002, 0xC0000002])
def test_skips_heights_and_measures(code):
    numbers = 4 if code in {3002, 0xC0000002} else 2 if code == 2 else 3
    values = [7.0, 8.0, math.nan, math.nan][:numbers] + [9.0, 10.0, math.nan, math.nan][:numbers]
    lines = read_lines(pa.array([struct.pack(f"<BII{2 * numbers}d", 1, code, 2, *values)]))
    assert lines.xy.tolist() == [[7.0, 8.0], [9.0, 10.0]]


def test_parts_of_a_multi_line_may_differ_in_byte_order():
    little = struct.pack("<BII4d", 1, 2, 2, 0, 1, 2, 3)
    big = struct.pack(">BII4d", 0, 2, 2, 4, 5, 6, 7)
    lines = read_lines(pa.array([struct.pack(">BII", 0, 5, 2) + little + big]))
    assert [p.tolist() for p in parts_of(lines)[0]] == [[[0, 1], [2, 3]], [[4, 5], [6, 7]]]


@settings(max_examples=150, deadline=None)
@given(
    st.sampled_from([LineString([(0, 0), (1, 1)]), HOLED, MultiLineString([[(0, 0), (1, 1)]] * 2)]), st.data()
)
def test_bytes_cut_off_or_changed_are_damaged_or_read_within_bounds(shape, data):
    """Neighbouring rows hold NaN, so that a read beyond a row's own bytes would show."""
    whole = shapely.to_wkb(shape)
    head = bytearray(whole[: data.draw(st.integers(0, len(whole)))])
    for _ in range(data.draw(st.integers(0, 2))):
        if head:
            head[data.draw(st.integers(0, min(len(head), 16) - 1))] = data.draw(st.integers(0, 255))
    poison = b"\xff" * 64
    lines = read_lines(pa.array([poison, bytes(head), poison]))
    assert lines.problems[0] == lines.problems[2] == kernels.BROKEN
    assert np.isfinite(lines.xy).all()
    if bytes(head) == whole[: len(head)] and len(head) < len(whole):
        assert lines.problems[1] == kernels.BROKEN


def test_a_count_of_four_thousand_million_is_damage_not_a_crash():
    for code in (2, 3, 5, 6):
        assert reasons(pa.array([struct.pack("<BII", 1, code, 0xFFFFFFFF) + bytes(40)])) == [
            "damaged geometry"
        ]


def test_outer_boundaries_leave_holes_out():
    array = arrow([HOLED])
    assert [len(p) for p in parts_of(read_lines(array))[0]] == [5, 4]
    assert [len(p) for p in parts_of(read_lines(array, boundaries="outer"))[0]] == [5]


def test_repeated_vertices_are_dropped_or_kept():
    array = arrow([LineString([(0, 0), (0, 0), (1, 1), (1, 1), (1, 1), (0, 0)])])
    assert read_lines(array).xy.tolist() == [[0, 0], [1, 1], [0, 0]]
    assert len(read_lines(array, drop_repeated=False).xy) == 6


def test_a_part_in_one_place_is_dropped_and_the_rest_stays():
    array = arrow([MultiLineString([[(5, 5), (5, 5)], [(0, 0), (1, 0)]])])
    assert [p.tolist() for p in parts_of(read_lines(array))[0]] == [[[0, 0], [1, 0]]]


def test_repair_measures_the_two_triangles_of_a_bow_tie():
    array = arrow([HOLED, BOW_TIE, None], pa.large_binary())
    assert read_lines(array).rows.tolist() == [0]
    lines = read_lines(array, repair=True)
    assert lines.rows.tolist() == [0, 1]
    triangles = parts_of(lines)[1]
    assert sorted(shapely.Polygon(t).area for t in triangles) == [1.0, 1.0]
    assert lines.closed.all()


def test_repair_closes_an_open_ring_and_names_one_without_area():
    open_ring = struct.pack("<BIII8d", 1, 3, 1, 4, 0, 0, 1, 0, 1, 1, 0, 1)
    flat = shapely.to_wkb(shapely.from_wkt("POLYGON ((0 0, 1 1, 2 2, 0 0))"))
    array = pa.array([open_ring, flat])
    assert all(r.startswith("invalid polygon") for r in reasons(array))
    assert reasons(array, repair=True) == ["", "polygon without area"]
    assert shapely.Polygon(parts_of(read_lines(array, repair=True))[0][0]).area == 1.0


def test_no_rows():
    lines = read_lines(pa.array([], pa.binary()))
    assert (len(lines), lines.xy.shape, lines.part_offsets.tolist(), lines.problems.tolist()) == (
        0,
        (0, 2),
        [0],
        [],
    )


@settings(max_examples=60, deadline=None)
@given(
    rows=st.lists(geometry, min_size=1, max_size=5),
    order=st.sampled_from([0, 1]),
    outer=st.booleans(),
    drop=st.booleans(),
)
def test_compiled_kernels_equal_their_interpreted_twins(rows, order, outer, drop):
    array = arrow(rows, byte_order=order)
    data = np.frombuffer(array.buffers()[2] or b"", np.uint8)
    offsets = np.frombuffer(array.buffers()[1], np.int32)[: len(rows) + 1].astype(np.int64)
    present = np.array([row is not None for row in rows])
    found = np.zeros((2, len(rows), 4), np.int64)
    kernels.scan_rows(data, offsets, present, outer, found[0])
    kernels.scan_rows.py_func(data, offsets, present, outer, found[1])
    assert (found[0] == found[1]).all()
    for i, row in enumerate(rows):
        if row is not None:
            table = np.zeros((9, 4), np.int64), np.zeros((9, 4), np.int64)
            assert kernels._walk(data, offsets[i], offsets[i + 1], outer, table[0]) == kernels._walk.py_func(
                data, offsets[i], offsets[i + 1], outer, table[1]
            )
            assert (table[0] == table[1]).all()
    outputs = [
        read_with(reader, data, offsets, f, outer, drop)
        for reader, f in zip((kernels.read_rows, kernels.read_rows.py_func), found, strict=True)
    ]
    for a, b in zip(*outputs, strict=True):
        assert np.array_equal(a, b)


def read_with(reader, data, offsets, found, outer, drop):
    parts, vertices = found[found[:, 0] == 0, 2:].sum(axis=0)
    out = (
        np.zeros((vertices, 2)),
        np.zeros(parts + 1, np.int64),
        np.zeros(len(found) + 1, np.int64),
        np.zeros(parts, bool),
    )
    counts = reader(data, offsets, found, outer, drop, *out)
    return (*out, np.array(counts), found)


def test_small_kernels_equal_their_interpreted_twins():
    data = np.frombuffer(
        struct.pack("<BII4d", 1, 0xA0000002, 2, 1.0, math.inf, 3.0, 4.0) + struct.pack(">2d", 5.0, 6.0),
        np.uint8,
    )
    for little in (0, 1):
        assert kernels._uint32(data, 1, little) == kernels._uint32.py_func(data, 1, little)
    for at in range(len(data) - 6):
        assert kernels._header(data, at, len(data)) == kernels._header.py_func(data, at, len(data))
    for at, little in ((9, 1), (25, 1), (41, 0)):
        assert kernels._all_numbers(data, at, 1, 16, little) == kernels._all_numbers.py_func(
            data, at, 1, 16, little
        )
    for part in ((25, 1, 16, 1), (25, 1, 24, 1), (41, 1, 16, 0)):
        out = np.zeros(16, np.uint8), np.zeros(16, np.uint8)
        kernels._copy(data, np.array(part), out[0], 0)
        kernels._copy.py_func(data, np.array(part), out[1], 0)
        assert (out[0] == out[1]).all()
    for drop in (False, True):
        xy = np.array([[0.0, 0], [0, 0], [1, 1], [1, 1], [0, 0]])
        twin = xy.copy()
        assert kernels._settle(xy, 0, 5, drop) == kernels._settle.py_func(twin, 0, 5, drop)
        assert (xy == twin).all()
