"""Ladder tables: what a dimension rests on can be redrawn from them, and they never depend on the run."""

import pickle
from math import log

import geopandas as gpd
import numpy as np
import pandas as pd
import pyarrow.csv
import pyarrow.parquet
import pytest
import shapely
from batches import UTM, run, wiggle, write_batch, write_gpkg
from test_api import PLANE
from test_batch import _StopAfter, _StoppedError

import geofractal
from geofractal import synthetic
from geofractal.batch import parts
from geofractal.batch.check import check_batch
from geofractal.batch.plan import parts_of, plan_batch
from geofractal.config import load_config
from geofractal.errors import ConfigError, LayerError, MeasureError, OutputError
from geofractal.estimators.box import GRID_SHIFTS
from geofractal.estimators.divider import DividerDimension
from geofractal.measure import Column, LadderRows, Options
from geofractal.reader import layers as source_layers
from geofractal.registry import check_measure_class, load_measure
from geofractal.testing import check_measure

DIVIDER = {"measure": "divider-dimension", "of": "rivers", "ladder-table": True}
BOX = {**DIVIDER, "measure": "box-dimension"}
BOTH = {"folder": "out", "formats": ["geopackage"], "tables": ["csv", "parquet"]}
LINES = [wiggle(seed, vertices=200) for seed in range(4)]


def table(folder, name="rivers_divider_ladder"):
    return pyarrow.parquet.read_table(folder / "out" / f"{name}.parquet").to_pandas()


# What stands in them


def walked(xy, ruler):
    """Return whole steps and the last straight distance; a step ends where a circle is first met."""
    here, edge, steps = np.array(xy[0]), 0, 0
    while edge < len(xy) - 1:
        start = here
        for end in range(edge + 1, len(xy)):
            a, b = (xy[end - 1] if end - 1 > edge else start), xy[end]
            if np.hypot(*(b - start)) >= ruler * (1 - 1e-9):
                along, off = b - a, a - start
                p, q, s = along @ along, 2 * off @ along, off @ off - ruler**2
                share = (-q + np.sqrt(max(q * q - 4 * p * s, 0.0))) / (2 * p)
                here, edge, steps = a + min(share, 1.0) * along, end - 1, steps + 1
                break
        else:
            break
    return steps, float(np.hypot(*(xy[-1] - here)))


def test_lengths_steps_and_local_dimensions_are_those_of_an_independent_walk():
    """L(r) = r n + d, mean of both directions; the local dimension by numpy.polyfit over five rungs."""
    xy = shapely.get_coordinates(wiggle(6, vertices=120, start=(0.0, 0.0)))
    rulers = np.geomspace(40, 400, 11)
    found = geofractal.divider_ladder(
        [shapely.LineString(xy)], crs=PLANE, ruler_min_m=40, ruler_max_m=400, rungs=11, starts=1
    )
    walks = [[walked(way, ruler) for way in (xy, xy[::-1])] for ruler in rulers]
    lengths = np.array(
        [[steps * r + rest for steps, rest in both] for r, both in zip(rulers, walks, strict=True)]
    )
    assert found["ruler_m"].to_numpy() == pytest.approx(rulers)
    assert found["steps"].to_numpy() == pytest.approx([np.mean([n for n, _ in both]) for both in walks])
    assert found["length_km"].to_numpy() * 1000 == pytest.approx(lengths.mean(axis=1), rel=1e-9)
    spread = found["length_spread_km"].to_numpy() * 1000
    assert spread == pytest.approx(lengths.std(axis=1, ddof=1) / np.sqrt(2), rel=1e-6)
    for rung in range(2, 9):
        five = slice(rung - 2, rung + 3)
        slope = np.polyfit(np.log(rulers[five]), np.log(lengths.mean(axis=1)[five]), 1)[0]
        assert found["local_dim"].iloc[rung] == pytest.approx(1 - slope, abs=1e-9)


def test_boxes_are_those_of_an_independent_count():
    """Squares of the same grid, which begins below the line's bounds, that shapely finds a length in."""
    line = wiggle(3, vertices=80, start=(0.0, 0.0))
    found = geofractal.box_ladder([line], crs=PLANE, size_min_m=60, size_max_m=240, rungs=4, grids=1)
    corner = np.array(line.bounds[:2])
    far = np.array(line.bounds[2:])
    for size, boxes in zip(np.geomspace(60, 240, 4), found["boxes"], strict=True):
        origin = corner - GRID_SHIFTS[0, :2] * size
        across, up = np.ceil((far - origin) / size).astype(int)
        squares = [
            shapely.box(*(origin + np.array([i, j]) * size), *(origin + np.array([i + 1, j + 1]) * size))
            for i in range(across)
            for j in range(up)
        ]
        assert boxes == np.count_nonzero(shapely.length(shapely.intersection(squares, line)) > 0)
    assert found["boxes_spread"].isna().all()


def test_local_dimensions_of_a_koch_curve_are_exact_at_its_own_rulers():
    """Rulers of side x 3^-k take 4^k steps (von Koch 1904), so that every slope is 1 - ln 4 / ln 3."""
    xy = synthetic.koch(level=6).xy * 729
    found = geofractal.divider_ladder(
        [shapely.LineString(xy)], crs=PLANE, ruler_min_m=3, ruler_max_m=243, rungs=5, starts=1
    )
    assert found["ruler_m"].to_numpy() == pytest.approx(729 / 3.0 ** np.arange(5, 0, -1))
    assert found["steps"].to_numpy() == pytest.approx(4.0 ** np.arange(5, 0, -1))
    assert found["length_km"].to_numpy() == pytest.approx(0.729 * (4 / 3) ** np.arange(5, 0, -1))
    assert found["local_dim"].to_numpy() == pytest.approx(np.full(5, log(4) / log(3)), abs=1e-6)
    assert (found["local_dim_spread"] < 1e-6).all()


@pytest.mark.parametrize("word", ["divider", "box"])
def test_rungs_used_and_the_fit_are_those_of_the_dimension(word):
    """L(r) = content r^(1 - D) at the rungs used; N(s) = L(s) / s, and a straight line has D = 1."""
    straight = shapely.LineString(np.column_stack([np.arange(0, 40_000, 10.0), np.zeros(4000)]))
    lines = [wiggle(1, vertices=3000, start=(0.0, 0.0)), straight, shapely.LineString([(0, 0), (10, 0)])]
    if word == "divider":
        ladder, whole = (
            geofractal.divider_ladder(lines, crs=PLANE),
            geofractal.divider_dimension(lines, crs=PLANE),
        )
        size, low, high = "ruler_m", "divider_ruler_min_m", "divider_ruler_max_m"
    else:
        ladder, whole = geofractal.box_ladder(lines, crs=PLANE), geofractal.box_dimension(lines, crs=PLANE)
        size, low, high = "box_size_m", "box_size_min_m", "box_size_max_m"
    assert ladder.index.unique().tolist() == [0, 1]
    used = ladder[ladder["used"]]
    for row in (0, 1):
        rungs = used.loc[row]
        assert len(rungs) == whole[f"{word}_rungs"][row]
        assert [rungs[size].min(), rungs[size].max()] == pytest.approx([whole[low][row], whole[high][row]])
        dimension = whole[f"{word}_dim"][row]
        if word == "divider":
            lengths = whole["divider_content"][row] * rungs[size] ** (1 - dimension)
            assert rungs["length_fit_km"].to_numpy() * 1000 == pytest.approx(lengths.to_numpy())
        else:
            slope = np.polyfit(np.log(rungs[size]), np.log(rungs["boxes_fit"]), 1)[0]
            assert -slope == pytest.approx(dimension)
    fit = "length_fit_km" if word == "divider" else "boxes_fit"
    assert ladder[fit].notna().tolist() == ladder["used"].tolist()


# In a batch


def test_the_batch_writes_what_the_python_api_returns(tmp_path):
    """One row a feature and rung in the layer's order; what cannot be walked or is left out has none."""
    geometries = [
        LINES[0],
        None,
        shapely.Point(5e5, 6e6),
        LINES[1],
        LINES[2],
        shapely.LineString(LINES[3].coords[:2]),
    ]
    write_gpkg(tmp_path / "in.gpkg", geometries, code=[7, 8, 9, 10, 11, 12])
    layers = {"rivers": {"source": "in.gpkg", "id": "code", "where": "code <> 10"}}
    record = run(tmp_path, layers, [DIVIDER, BOX], BOTH)
    taken = gpd.GeoSeries([LINES[0], None, None, None, *geometries[4:]], crs=UTM)
    for name, expected in {
        "rivers_divider_ladder": geofractal.divider_ladder(taken),
        "rivers_box_ladder": geofractal.box_ladder(taken),
    }.items():
        found = table(tmp_path, name)
        assert found["row"].unique().tolist() == [1, 5]
        assert found["id"].tolist() == (found["row"] + 6).tolist()
        pd.testing.assert_frame_equal(
            found.drop(columns=["row", "id"]), expected.reset_index(drop=True), check_exact=True
        )
        text = pyarrow.csv.read_csv(tmp_path / "out" / f"{name}.csv").to_pandas()
        pd.testing.assert_frame_equal(text, found, check_exact=True)
    told = record["layers"]["rivers"]["ladder_tables"]
    assert [entry["measure"] for entry in told] == ["divider-dimension", "box-dimension"]
    assert [entry["rows"] for entry in told] == [
        len(table(tmp_path)),
        len(table(tmp_path, "rivers_box_ladder")),
    ]


def test_a_group_is_one_feature_named_by_its_value_and_first_row(tmp_path):
    halves = [shapely.LineString(LINES[0].coords[:100]), shapely.LineString(LINES[0].coords[99:])]
    write_gpkg(tmp_path / "in.gpkg", [LINES[1], halves[0], halves[1]], river=["b", "a", "a"])
    run(tmp_path, {"rivers": {"source": "in.gpkg", "id": "name", "group-by": "river"}}, [DIVIDER], BOTH)
    found = table(tmp_path)
    assert found[["row", "group"]].drop_duplicates().to_numpy().tolist() == [[2, "a"], [1, "b"]]
    alone = geofractal.divider_ladder([LINES[0], LINES[1]], crs=UTM)
    np.testing.assert_allclose(found["length_km"], alone["length_km"], rtol=1e-6)


@pytest.mark.parametrize(
    ("values", "expected"),
    [([3, 5], [3, 5]), ([1.5, 2.0], ["1.5", "2"]), (['a "b", c', "ø"], ['a "b", c', "ø"])],
)
def test_ids_keep_whole_numbers_and_text(tmp_path, values, expected):
    write_gpkg(tmp_path / "in.gpkg", LINES[:2], code=values)
    run(tmp_path, {"rivers": {"source": "in.gpkg", "id": "code"}}, [DIVIDER], BOTH)
    assert table(tmp_path)["id"].unique().tolist() == expected
    text = pd.read_csv(tmp_path / "out" / "rivers_divider_ladder.csv", dtype={"id": type(expected[0])})
    assert text["id"].unique().tolist() == expected


def test_an_id_that_is_neither_text_nor_number_is_told(tmp_path):
    frame = gpd.GeoDataFrame({"code": [[1, 2]]}, geometry=LINES[:1], crs=UTM)
    frame.to_parquet(tmp_path / "in.parquet")
    (layer,) = plan(tmp_path, {"source": "in.parquet", "id": "code"}).layers
    with pytest.raises(LayerError, match=r"column 'code' of type list<.*> cannot name rows in a table"):
        list(parts_of(layer, tmp_path))


def plan(folder, layer, measures=(DIVIDER,)):
    return plan_batch(load_config(write_batch(folder, {"rivers": layer}, list(measures), BOTH)))


def test_a_layer_without_a_ladder_has_a_table_without_rows(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", [None, shapely.LineString([(5e5, 6e6), (5.1e5, 6e6)])])
    run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER], BOTH)
    assert len(table(tmp_path)) == 0
    header = (tmp_path / "out" / "rivers_divider_ladder.csv").read_text("utf-8")
    assert header.strip().replace('"', "").split(",") == table(tmp_path).columns.tolist()
    assert table(tmp_path).columns[0] == "row"


def test_features_measured_on_different_planes_keep_the_layers_order(tmp_path):
    """One far beyond the budget of a plane is walked in three dimensions, in a chunk of its own."""
    far = shapely.LineString(shapely.Point(20, 20).buffer(18).exterior.segmentize(0.5).coords)
    near = [shapely.transform(line, lambda xy: (xy - (5e5, 6e6)) / 1e5 + (3, 50)) for line in LINES[:2]]
    write_gpkg(tmp_path / "in.gpkg", [far, near[0], far, near[1]], crs=4326)
    run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [DIVIDER], BOTH)
    found = table(tmp_path)
    assert found["row"].is_monotonic_increasing
    assert found["row"].unique().tolist() == [1, 2, 3, 4]
    first, third = (found[found["row"] == row].drop(columns="row").reset_index(drop=True) for row in (1, 3))
    pd.testing.assert_frame_equal(first, third)


def test_prefixes_part_two_tables_of_one_layer(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", LINES[:1])
    asked = [DIVIDER, {**DIVIDER, "prefix": "coarse", "ruler-min-m": 100}]
    run(tmp_path, {"rivers": {"source": "in.gpkg"}}, asked, BOTH)
    coarse = table(tmp_path, "rivers_coarse_divider_ladder")
    assert coarse["ruler_m"].min() == pytest.approx(100)
    assert table(tmp_path)["ruler_m"].min() < 100


def test_two_tables_of_one_name_are_refused(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", LINES[:1])
    layers = {"rivers": {"source": "in.gpkg"}, "rivers_new": {"source": "in.gpkg"}}
    asked = [{**DIVIDER, "prefix": "new"}, {**DIVIDER, "of": "rivers_new"}]
    with pytest.raises(
        OutputError, match="ladders of rivers and ladders of rivers_new would both be written"
    ):
        run(tmp_path, layers, asked, {"folder": "out", "formats": ["flatgeobuf"]})


def test_a_measure_without_a_ladder_does_not_know_the_option(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", LINES[:1])
    asked = [{"measure": "sinuosity", "of": "rivers", "ladder-table": True}]
    with pytest.raises(ConfigError, match="unknown key 'ladder-table'"):
        run(tmp_path, {"rivers": {"source": "in.gpkg"}}, asked)


def test_the_table_is_told_beforehand_and_in_the_dictionary(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", LINES[:1])
    file = write_batch(tmp_path, {"rivers": {"source": "in.gpkg", "id": "name"}}, [DIVIDER], BOTH)
    told = "\n".join(check_batch(load_config(file)).lines())
    assert f"one row a feature and rung: {tmp_path / 'out' / 'rivers_divider_ladder.csv'} and" in told
    run(tmp_path, {"rivers": {"source": "in.gpkg", "id": "name"}}, [DIVIDER], BOTH)
    words = (
        pd.read_csv(tmp_path / "out" / "data_dictionary.csv").set_index("layer").loc["rivers_divider_ladder"]
    )
    assert words["name"].tolist() == table(tmp_path).columns.tolist()
    for name, meaning in zip(words["name"], words["meaning"], strict=True):
        assert f"    {name}" in told
        assert meaning in told


def test_without_the_option_nothing_is_kept_or_written_for_it(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", LINES)
    (layer,) = plan(
        tmp_path, {"source": "in.gpkg", "id": "name"}, [{**DIVIDER, "ladder-table": False}]
    ).layers
    (part,) = parts_of(layer, tmp_path)
    assert part.ids is None
    assert parts.measure_part(layer.work, part).ladders == ()
    parts.measured_part(layer.work, part, tmp_path)
    assert not [*tmp_path.glob("*.ladder")]
    off = {"measure": "divider-dimension", "of": "rivers"}
    run(tmp_path, {"rivers": {"source": "in.gpkg"}}, [off])
    assert not [*(tmp_path / "out").glob("*ladder*")]


# Whatever the run


@pytest.fixture
def small_parts(monkeypatch):
    monkeypatch.setattr(source_layers, "_BATCH_ROWS", (3, 4))


def tables_of(folder):
    return {path.name: path.read_bytes() for path in (folder / "out").glob("*_ladder.*")}


GROUPED = {"source": "in.gpkg", "group-by": "river"}
PLAIN = {"source": "in.gpkg", "id": "name"}


def write_many(folder):
    many = [wiggle(seed, vertices=60) for seed in range(60)]
    write_gpkg(folder / "in.gpkg", many, river=[f"river {seed % 50}" for seed in range(60)])


@pytest.mark.usefixtures("small_parts")
@pytest.mark.parametrize("layer", [PLAIN, GROUPED], ids=["rows", "groups"])
def test_tables_do_not_depend_on_the_number_of_workers(tmp_path, layer):
    write_many(tmp_path)
    found = []
    for workers in (1, 2):
        run(tmp_path, {"rivers": layer}, [DIVIDER, BOX], BOTH, run={"workers": workers})
        found.append(tables_of(tmp_path))
    assert len(found[0]) == 4
    assert found[0] == found[1]
    assert table(tmp_path)["row"].nunique() > (40 if layer is PLAIN else 20)


@pytest.mark.usefixtures("small_parts")
@pytest.mark.parametrize("layer", [PLAIN, GROUPED], ids=["rows", "groups"])
def test_a_stopped_run_goes_on_to_the_tables_of_a_fresh_one(tmp_path, layer, monkeypatch):
    write_many(tmp_path)
    run(tmp_path, {"rivers": layer}, [DIVIDER], BOTH)
    fresh = tables_of(tmp_path)
    for path in (tmp_path / "out").glob("*_ladder.*"):
        path.unlink()
    with pytest.raises(_StoppedError):
        run(tmp_path, {"rivers": layer}, [DIVIDER], BOTH, progress=_StopAfter(20), run={"workers": 1})
    assert tables_of(tmp_path) == {}
    kept = [*(tmp_path / "out" / ".geofractal-parts").glob("*.ladder")]
    assert kept
    measured = []
    real = parts.measure_part
    monkeypatch.setattr(parts, "measure_part", lambda *given: measured.append(given) or real(*given))
    run(tmp_path, {"rivers": layer}, [DIVIDER], BOTH, run={"workers": 1})
    assert measured
    assert tables_of(tmp_path) == fresh


@pytest.mark.parametrize("left", [b"", b"not whole", "cut", None])
def test_a_kept_ladder_that_is_lost_or_spoilt_is_measured_anew(tmp_path, left):
    write_gpkg(tmp_path / "in.gpkg", LINES)
    (layer,) = plan(tmp_path, PLAIN).layers
    (part,) = parts_of(layer, tmp_path)
    parts.measured_part(layer.work, part, tmp_path)
    (kept,) = tmp_path.glob("*.ladder")
    whole = kept.read_bytes()
    if left is None:
        kept.unlink()
    else:
        kept.write_bytes(whole[:-400] if left == "cut" else left)
    parts.measured_part(layer.work, part, tmp_path)
    assert kept.read_bytes() == whole


def test_what_parts_are_measured_with_travels_to_processes(tmp_path):
    write_gpkg(tmp_path / "in.gpkg", LINES)
    (layer,) = plan(tmp_path, PLAIN).layers
    (part,) = parts_of(layer, tmp_path)
    twin, twin_part = pickle.loads(pickle.dumps((layer.work, part)))  # noqa: S301 - our own bytes
    assert (
        parts.measure_part(twin, twin_part).ladders[0].equals(parts.measure_part(layer.work, part).ladders[0])
    )


# The contract


class Laddered(DividerDimension):
    """The divider with something wrong with it."""

    def measure_with_ladder(self, lines, options):
        values, rows = super().measure_with_ladder(lines, options)
        return self.spoil(values, rows)

    def spoil(self, values, rows):
        return values, rows


laddered = Laddered


def spoilt(change):
    return type("Laddered", (laddered,), {"__module__": __name__, "spoil": lambda _, *found: change(*found)})


def test_the_kit_takes_the_shipped_ones():
    check_measure(Laddered)
    check_measure(type(load_measure("box-dimension")))


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (
            lambda v, r: ({**v, "divider_dim": v["divider_dim"] + 1}, r),
            "with its ladder: divider_dim differs",
        ),
        (lambda v, r: (v, LadderRows(r.features[::-1], r.figures)), "not rising numbers of the chunk's"),
        (lambda v, r: (v, LadderRows(r.features + 9, r.figures)), "not rising numbers of the chunk's"),
        (
            lambda v, r: (v, LadderRows(r.features, {**r.figures, "steps": r.features})),
            "steps is a number of type",
        ),
        (lambda v, r: (v, LadderRows(r.features, {"ruler_m": r.figures["ruler_m"]})), "but the columns are"),
        (
            lambda v, r: (
                v,
                LadderRows(r.features, {**r.figures, "steps": r.figures["steps"] * len(v["divider_dim"])}),
            ),
            "alone: steps differs",
        ),
    ],
)
def test_the_kit_finds_what_is_wrong_with_a_ladder_table(change, words, monkeypatch):
    broken = spoilt(change)
    monkeypatch.setitem(globals(), "Laddered", broken)  # so that it pickles
    with pytest.raises(AssertionError, match=words):
        check_measure(broken)


class Plain(Options):
    """Options that cannot ask for a ladder table."""


@pytest.mark.parametrize(
    ("attributes", "words"),
    [
        ({"options": Plain}, "it is a LadderMeasure, but its options are no LadderOptions"),
        ({"ladder_columns": ()}, "its ladder table has no columns"),
        (
            {"ladder_columns": (Column("row", "row", "count", "", "a row"),)},
            "'row' of the ladder table stands twice",
        ),
        (
            {"ladder_columns": (Column("size", "size", "number", "m", "a size"),)},
            "does not end with its unit, _m",
        ),
    ],
)
def test_a_ladder_table_is_checked_when_its_measure_is_loaded(attributes, words):
    with pytest.raises(MeasureError, match=words):
        check_measure_class(type("Broken", (Laddered,), attributes), "divider-dimension")


def test_options_that_ask_in_vain_are_refused():
    sinuosity = type(load_measure("sinuosity"))
    broken = type("Broken", (sinuosity,), {"options": DividerDimension.options})
    with pytest.raises(MeasureError, match="its options are LadderOptions, but it is no LadderMeasure"):
        check_measure_class(broken, "sinuosity")
