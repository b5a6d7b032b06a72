"""For authors of measures: small specimens, and checks that a measure keeps the contract on them."""

from __future__ import annotations

import copy
import pickle
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from geofractal.measure import (
    FIGURE_COLUMNS,
    PLANES,
    Column,
    CoverMap,
    CoverMeasure,
    LadderMeasure,
    Lines,
    Measure,
    Options,
    Quantity,
    Values,
)
from geofractal.registry import check_measure_class, columns_of, quantities_of

if TYPE_CHECKING:
    import pandas as pd

_DTYPES = {"number": np.float64, "count": np.int64, "text": object, "flag": np.int8}


def lines_of(features: Sequence[Sequence[ArrayLike]]) -> Lines:
    """Return features on a plane in metres.

    Parameters
    ----------
    features : for each feature its parts, for each part (k, 2) vertices, k at least 2; a part whose
        first and last vertex are one is a ring
    """
    parts = [np.asarray(part, np.float64) for feature in features for part in feature]
    n = len(features)
    return Lines(
        rows=np.arange(n, dtype=np.int64),
        xy=np.concatenate([np.empty((0, 2)), *parts]),
        part_offsets=_offsets([len(part) for part in parts]),
        feature_offsets=_offsets([len(feature) for feature in features]),
        closed=np.array([len(part) > 2 and bool((part[0] == part[-1]).all()) for part in parts], np.bool_),
        source_vertex=np.ones(sum(map(len, parts)), np.bool_),
        plane=np.zeros(n, np.uint8),
        distortion=np.full(n, 1e-6),
        radius=np.full(n, np.inf),
    )


def specimens() -> dict[str, Lines]:
    """Return chunks that a measure meets: ordinary features, odd ones, none at all, and two on the globe."""
    return {
        "ordinary": lines_of(_ordinary()),
        "degenerate": lines_of([*_degenerate(), *_ordinary()]),
        "empty": lines_of([]),
        "three dimensions": _on_the_globe(),
    }


def take(lines: Lines, order: Sequence[int]) -> Lines:
    """Return the features of those numbers, in that order."""
    parts = [part for i in order for part in range(lines.feature_offsets[i], lines.feature_offsets[i + 1])]
    spans = [slice(lines.part_offsets[part], lines.part_offsets[part + 1]) for part in parts]
    vertices = np.concatenate([np.empty(0, np.int64), *(np.arange(s.start, s.stop) for s in spans)])
    chosen = np.asarray(order, np.int64)
    return Lines(
        rows=lines.rows[chosen],
        xy=np.ascontiguousarray(lines.xy[vertices]),
        part_offsets=_offsets([span.stop - span.start for span in spans]),
        feature_offsets=_offsets(np.diff(lines.feature_offsets)[chosen]),
        closed=lines.closed[np.asarray(parts, np.int64)],
        source_vertex=lines.source_vertex[vertices],
        plane=lines.plane[chosen],
        distortion=lines.distortion[chosen],
        radius=lines.radius[chosen],
    )


def check_measure(measure_class: type[Measure[Any]], options: Options | None = None) -> None:
    """Check that a measure keeps the contract on the specimens.

    Checked are: its class and columns, that it pickles, that it is pure and leaves its input alone, that
    a feature's values depend neither on its neighbours nor on their order, that each value is an array
    of the type its column says, that what deserves no figure is null and has a note, and that a ladder
    table keeps all of this, too.

    Parameters
    ----------
    measure_class : the class that the entry point names
    options : its options; the defaults where left out

    Raises
    ------
    MeasureError
        where the class or its columns break the contract
    AssertionError
        where a result does; the message names the specimen and the column
    """
    check_measure_class(measure_class)
    measure = measure_class()
    options = measure_class.options() if options is None else options
    columns = columns_of(measure, options)
    twin, twin_options = pickle.loads(pickle.dumps((measure, options)))  # noqa: S301 - our own bytes
    for name, lines in specimens().items():
        before = copy.deepcopy(lines)
        values = measure.measure(lines, options)
        _check_arrays(name, values, columns, len(lines))
        _check_nulls(name, values, columns, measure.note_column().name)
        _check_same(f"{name}, its input", _arrays_of(before), _arrays_of(lines))
        _check_same(f"{name}, measured again", values, measure.measure(lines, options))
        _check_same(f"{name}, pickled", values, twin.measure(lines, twin_options))
        _check_independence(name, measure, options, lines, values)
        if isinstance(measure, LadderMeasure):
            _check_ladder(name, measure, options, lines, values)
    _check_no_length(measure, options, columns[0])


def cover_specimens(*, strip_rows: int | None = None) -> dict[str, CoverMap]:
    """Return class maps that a measure meets: ordinary ones with zones, one cell, one class, no data at all.

    Parameters
    ----------
    strip_rows : rows of each strip; must never change a result
    """
    import shapely

    from geofractal.cover_map import RasterCover
    from geofractal.landcover.zones import place_zones
    from geofractal.reader.raster import RasterOptions, open_raster
    from geofractal.reader.raster_source import ClassMap

    rng = np.random.default_rng(7)
    coarse = rng.integers(1, 4, (12, 16)).repeat(5, axis=0).repeat(5, axis=1)
    ordinary = np.where(rng.random(coarse.shape) < 0.1, rng.integers(0, 4, coarse.shape), coarse)
    maps = {
        "ordinary": ordinary,
        "one cell": np.ones((1, 1)),
        "one class": np.ones((6, 7)),
        "no data": np.zeros((5, 4)),
        "all different": np.arange(1, 31).reshape(5, 6),
    }
    covers: dict[str, CoverMap] = {}
    for name, codes in maps.items():
        source = ClassMap(codes.astype(np.uint8), (25, 0, 499_000, 0, -25, 6_000_000), "EPSG:32631", nodata=0)
        raster = open_raster(source, RasterOptions(strip_rows=strip_rows))
        covers[name] = RasterCover(raster)
        if name == "ordinary":
            boxes = [(0, 30, 70, 60), (30, 10, 55, 50), (500, 500, 501, 501)]  # the last is off the map
            squares = [shapely.affinity.translate(shapely.box(*b), 19_960, 239_940) for b in boxes]
            polygons = [shapely.transform(square, lambda xy: xy * 25) for square in squares]
            zones = place_zones(raster.grid, polygons, ["one", "two", "off"], raster.grid.crs)
            groups: dict[str, tuple[str, ...]] = {"pair": ("1", "2")}
            covers["zones and a group"] = RasterCover(raster, zones, None, groups, ("pair", "3", "9"))
    return covers


def check_cover_measure(measure_class: type[CoverMeasure[Any]], options: Options | None = None) -> None:
    """Check that a measure of class maps keeps the contract on the specimens.

    Checked are: its class and quantities, that it pickles, that it is pure, that the height of strips does
    not change a result, that the table has its columns and only the quantities, units and border rules
    that were announced, that an estimate lies in its interval, that a figure that is missing has a note, and
    that columns of the layer of patches, where there is one, do not depend on which patches come together.

    Parameters and errors as of `check_measure`.
    """
    check_measure_class(measure_class)
    measure = measure_class()
    options = measure_class.options() if options is None else options
    quantities = {quantity.name: quantity for quantity in quantities_of(measure, options)}
    twin, twin_options = pickle.loads(pickle.dumps((measure, options)))  # noqa: S301 - our own bytes
    in_strips = cover_specimens(strip_rows=3)
    for name, cover in cover_specimens().items():
        figures = measure.measure(cover, options).figures
        _check_figures(name, figures, quantities)
        for how, again in {
            "measured again": measure.measure(cover, options),
            "pickled": twin.measure(cover, twin_options),
            "in strips of other height": measure.measure(in_strips[name], options),
        }.items():
            if not figures.equals(again.figures):
                raise AssertionError(f"{name}, {how}: the figures differ")
        _check_patch_columns(name, measure, options, cover, figures)


def _check_patch_columns(
    name: str, measure: CoverMeasure[Any], options: Options, cover: CoverMap, figures: pd.DataFrame
) -> None:
    rule = measure.patch_rule(options)
    for patches in () if rule is None else cover.polygons(rule):
        whole = measure.patch_columns(patches, figures, options)
        for row in range(len(patches)):
            alone = measure.patch_columns(patches.iloc[[row]].reset_index(drop=True), figures, options)
            for column in whole:
                at = f"{name}, patch {row}: {column}"
                if column in patches and alone[column][0] != patches[column].iloc[row]:
                    raise AssertionError(f"{at} is no longer that of the patch")
                if column not in patches and alone[column].dtype.kind not in "fib":
                    raise AssertionError(f"{at} holds no numbers")
                if not alone[column].equals(whole[column].iloc[[row]].reset_index(drop=True)):
                    raise AssertionError(f"{at} depends on the patches beside it")


def _check_figures(name: str, figures: pd.DataFrame, quantities: dict[str, Quantity]) -> None:
    if tuple(figures) != FIGURE_COLUMNS:
        raise AssertionError(f"{name}: the columns are {list(figures)}, not {list(FIGURE_COLUMNS)}")
    for row in figures.itertuples(index=False):
        where = f"{name}: {row.quantity} of {row.cover} in {row.reporting_unit}"
        quantity = quantities.get(str(row.quantity))
        if quantity is None:
            raise AssertionError(f"{where}: no such quantity was announced")
        if row.unit != quantity.unit or (row.border_rule or "") not in (quantity.border_rules or ("",)):
            raise AssertionError(f"{where}: unit {row.unit!r} or rule {row.border_rule!r} was not announced")
        missing = not np.isfinite(row.estimate)
        if (missing or quantity.kind == "text") and not isinstance(row.note, str):
            raise AssertionError(f"{where}: it is null and its note does not say why")
        if not missing and (row.low > row.estimate or row.high < row.estimate):
            raise AssertionError(f"{where}: {row.estimate} lies outside [{row.low}, {row.high}]")


def _check_arrays(name: str, values: Values, columns: Sequence[Column], n: int) -> None:
    expected = [column.name for column in columns]
    if sorted(values) != sorted(expected):
        raise AssertionError(f"{name}: values for {sorted(values)}, but the columns are {sorted(expected)}")
    for column in columns:
        array = values[column.name]
        if array.shape != (n,):
            raise AssertionError(f"{name}: {column.name} has shape {array.shape}, not ({n},)")
        if array.dtype != _DTYPES[column.kind]:
            wanted = np.dtype(_DTYPES[column.kind])
            raise AssertionError(
                f"{name}: {column.name} is a {column.kind} of type {array.dtype}, not {wanted}"
            )
        if column.kind == "number" and np.isinf(array.astype(np.float64)).any():
            raise AssertionError(f"{name}: {column.name} is infinite somewhere; null is NaN")
        if column.kind == "text" and not all(text is None or isinstance(text, str) for text in array):
            raise AssertionError(f"{name}: {column.name} holds something other than text and None")


def _check_nulls(name: str, values: Values, columns: Sequence[Column], note: str) -> None:
    missing = _is_null(values[columns[0].name], columns[0])
    for feature in np.flatnonzero(missing):
        if not values[note][feature]:
            said = f"{columns[0].name} is null and {note} does not say why"
            raise AssertionError(f"{name}: feature {feature}: {said}")


def _check_independence(
    name: str, measure: Measure[Any], options: Options, lines: Lines, values: Values
) -> None:
    backwards = list(range(len(lines)))[::-1]
    turned = measure.measure(take(lines, backwards), options)
    _check_same(f"{name}, in reverse order", {key: array[backwards] for key, array in values.items()}, turned)
    for feature in range(len(lines)):
        alone = measure.measure(take(lines, [feature]), options)
        _check_same(f"{name}, feature {feature} alone", {k: v[[feature]] for k, v in values.items()}, alone)


def _check_ladder(
    name: str, measure: LadderMeasure[Any], options: Options, lines: Lines, values: Values
) -> None:
    found, rungs = measure.measure_with_ladder(lines, options)
    _check_same(f"{name}, with its ladder", values, found)
    name = f"{name}, ladder table"
    features = rungs.features
    if len(features) and (
        np.diff(features).min(initial=0) < 0 or not 0 <= features[0] <= features[-1] < len(lines)
    ):
        raise AssertionError(f"{name}: features {features.tolist()} are not rising numbers of the chunk's")
    _check_arrays(name, rungs.figures, measure.ladder_columns, len(features))
    _check_same(
        f"{name}, measured again", rungs.figures, measure.measure_with_ladder(lines, options)[1].figures
    )
    for feature in range(len(lines)):
        alone = measure.measure_with_ladder(take(lines, [feature]), options)[1].figures
        of_it = {key: array[features == feature] for key, array in rungs.figures.items()}
        _check_same(f"{name}, feature {feature} alone", of_it, alone)


def _check_no_length(measure: Measure[Any], options: Options, first: Column) -> None:
    point = lines_of([[[(5.0, 5.0), (5.0, 5.0)]]])
    if not _is_null(measure.measure(point, options)[first.name], first).all():
        raise AssertionError(f"a line without length: {first.name} is not null")


def _check_same(where: str, expected: dict[str, Any], found: dict[str, Any]) -> None:
    for key, array in expected.items():
        if not _same(array, found[key]):
            raise AssertionError(f"{where}: {key} differs: {array!r} and {found[key]!r}")


def _same(one: NDArray[Any], other: NDArray[Any]) -> bool:
    equal_nan = one.dtype.kind == "f"
    return one.dtype == other.dtype and np.array_equal(one, other, equal_nan=equal_nan)


def _is_null(array: NDArray[Any], column: Column) -> NDArray[np.bool_]:
    if column.kind == "number":
        nulls = np.isnan(array)
    elif column.kind == "text":
        nulls = np.array([text is None for text in array], np.bool_)
    else:
        nulls = array < 0
    return np.asarray(nulls, np.bool_)


def _arrays_of(lines: Lines) -> dict[str, Any]:
    return {name: getattr(lines, name) for name in Lines.__dataclass_fields__}


def _offsets(counts: ArrayLike) -> NDArray[np.int64]:
    return np.concatenate([[0], np.cumsum(np.asarray(counts, np.int64))]).astype(np.int64)


def _ordinary() -> list[list[ArrayLike]]:
    """Return a straight line, a winding one, a ring, and one of two parts."""
    along = np.linspace(0.0, 10_000.0, 401)
    winding = np.column_stack([along, 400.0 * np.sin(along / 300.0) + 60.0 * np.sin(along / 40.0)])
    turn = np.linspace(0.0, 2.0 * np.pi, 301)
    ring = np.column_stack([np.cos(turn), np.sin(turn)]) * (2_000.0 + 150.0 * np.sin(9.0 * turn))[:, None]
    ring[-1] = ring[0]
    return [[[(0.0, 0.0), (1000.0, 0.0), (3000.0, 0.0)]], [winding], [ring], [winding[:200], winding[210:]]]


def _degenerate() -> list[list[ArrayLike]]:
    """Return lines of no length, a repeated vertex, the shortest line, a spike, and a ring of no area."""
    return [
        [[(0.0, 0.0), (0.0, 0.0)]],
        [[(7.0, 7.0)] * 5],
        [[(0.0, 0.0), (0.0, 0.0), (1.0, 0.0), (1.0, 0.0)]],
        [[(0.0, 0.0), (1e-9, 0.0)]],
        [[(0.0, 0.0), (100.0, 0.0), (0.0, 0.0)]],
        [[(0.0, 0.0), (0.0, 0.0)], [(0.0, 0.0), (500.0, 300.0)]],
    ]


def _on_the_globe() -> Lines:
    """Return an arc of a great circle and a wavy line beside it, on a sphere, as geocentric metres."""
    earth = 6_371_000.0
    longitude = np.radians(np.linspace(0.0, 40.0, 500))
    plane = lines_of([[np.zeros((500, 2))], [np.zeros((500, 2))]])
    xyz = []
    for latitude in (np.zeros(500), np.radians(2.0 * np.sin(40.0 * longitude))):
        x, y = np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude)
        xyz.append(earth * np.column_stack([x, y, np.sin(latitude)]))
    globe = {
        "xy": np.concatenate(xyz),
        "plane": np.full(2, PLANES.index("three-dimensions"), np.uint8),
        "radius": np.full(2, earth),
    }
    return Lines(**{**_arrays_of(plane), **globe, "closed": np.zeros(2, np.bool_), "distortion": np.zeros(2)})
