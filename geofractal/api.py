"""The Python API: the batch's own code on geometries at hand, frames in and frames out."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from functools import partial
from typing import TYPE_CHECKING, Any, Literal, NamedTuple

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray
from pydantic import ValidationError

from geofractal.batch.parts import LayerWork, RowsPart, measure_part
from geofractal.batch.run import run_batch
from geofractal.batch.spool import FID, ROW
from geofractal.config.load import load_config
from geofractal.config.models import MeasureRequest, Prepare
from geofractal.errors import ConfigError
from geofractal.reader.planes import Projector
from geofractal.registry import load_measure

if TYPE_CHECKING:
    from typing import TypeAlias

    import geopandas as gpd
    import pandas as pd
    import shapely

    Geometries: TypeAlias = gpd.GeoDataFrame | gpd.GeoSeries | Sequence[shapely.Geometry | None]
    Edges: TypeAlias = Literal["straight", "geodesic"]

_ROWS_PER_PART = 5_000


def run(path: str | os.PathLike[str]) -> dict[str, Any]:
    """Run the batch that a YAML file describes and return its run record.

    Parameters
    ----------
    path : the batch file; paths in it are seen from its folder

    Raises
    ------
    ConfigError
        with everything that is wrong with the file; nothing has been measured
    GeofractalError
        as `geofractal.batch.run.run_batch`
    """
    return run_batch(load_config(path))


def divider_dimension(
    geometries: Geometries,
    *,
    crs: Any = None,
    lengths_at_m: Sequence[float] = (),
    ruler_min_m: float | None = None,
    ruler_max_m: float | None = None,
    rungs: int | None = None,
    starts: int | None = None,
    extrapolate: bool = False,
    boundaries: Literal["all", "outer"] = "all",
    repair: bool = False,
    edges: Edges = "straight",
    budget_percent: float = 0.5,
    three_dimensions: bool = True,
) -> pd.DataFrame:
    """Measure the divider dimension of lines, or of the boundaries of polygons.

    Parameters
    ----------
    geometries : GeoDataFrame, GeoSeries, or a sequence of shapely geometries (None where one is missing)
    crs : of a plain sequence, in any form that pyproj takes; a frame brings its own
    lengths_at_m : rulers in metres at which the walked length is returned, in km
    ruler_min_m, ruler_max_m, rungs, starts : the ladder and its walks, chosen from the data where left out
    extrapolate : whether the fit also predicts lengths at rulers outside the ladder, which the note flags
    boundaries : every ring of a polygon, or only its outer one
    repair : measure an invalid polygon's repaired boundary rather than refuse it
    edges : straight in the source's CRS, as maps draw them, or geodesic
    budget_percent : worst distance error allowed of the plane that a feature is measured on
    three_dimensions : whether features over budget may be measured on the ellipsoid itself

    Returns
    -------
    pandas.DataFrame
        one row per input, in order and with its index; columns as ``geofractal measures`` lists them.
        A geometry that is missing, empty, too small or of another kind has nulls and a
        ``divider_note`` that says why.

    Raises
    ------
    ConfigError
        an option is wrong, or there is no CRS
    LayerError
        the CRS cannot carry lines

    Examples
    --------
    >>> import shapely
    >>> straight = shapely.LineString([(x, 0) for x in range(1001)])
    >>> found = divider_dimension([straight, None], crs="EPSG:32631")
    >>> found["divider_note"][1]
    'missing geometry'
    """
    options = {
        "lengths_at_m": tuple(map(float, lengths_at_m)),
        "ruler_min_m": ruler_min_m,
        "ruler_max_m": ruler_max_m,
        "rungs": rungs,
        "starts": starts,
        "extrapolate": extrapolate,
    }
    prepare, plane = _prepared(boundaries, repair), _plane(edges, budget_percent, three_dimensions)
    return _measured(_asked("divider-dimension", options, geometries, crs, prepare, plane))


def box_dimension(
    geometries: Geometries,
    *,
    crs: Any = None,
    size_min_m: float | None = None,
    size_max_m: float | None = None,
    rungs: int | None = None,
    grids: int | None = None,
    boundaries: Literal["all", "outer"] = "all",
    repair: bool = False,
    edges: Edges = "straight",
    budget_percent: float = 0.5,
    three_dimensions: bool = True,
) -> pd.DataFrame:
    """Measure the box, information and correlation dimension of lines, networks or polygon boundaries.

    Parameters
    ----------
    geometries, crs, boundaries, repair, edges, budget_percent, three_dimensions : as in `divider_dimension`;
        all parts of a geometry count as one set, such as the reaches of a network
    size_min_m, size_max_m, rungs : the ladder of box sizes, chosen from the data where left out
    grids : shifted grids of which the one with the fewest boxes counts; all where left out

    Returns
    -------
    pandas.DataFrame
        one row per input, in order and with its index; columns as ``geofractal measures`` lists them

    Raises
    ------
    ConfigError, LayerError
        as `divider_dimension`

    Examples
    --------
    >>> import shapely
    >>> straight = shapely.LineString([(x, 0) for x in range(1001)])
    >>> box_dimension([straight, None], crs="EPSG:32631")["box_verdict"][0]
    'smooth'
    """
    options = _box_options(size_min_m, size_max_m, rungs, grids)
    prepare, plane = _prepared(boundaries, repair), _plane(edges, budget_percent, three_dimensions)
    return _measured(_asked("box-dimension", options, geometries, crs, prepare, plane))


def divider_ladder(
    geometries: Geometries,
    *,
    crs: Any = None,
    ruler_min_m: float | None = None,
    ruler_max_m: float | None = None,
    rungs: int | None = None,
    starts: int | None = None,
    boundaries: Literal["all", "outer"] = "all",
    repair: bool = False,
    edges: Edges = "straight",
    budget_percent: float = 0.5,
    three_dimensions: bool = True,
) -> pd.DataFrame:
    """Return what the divider finds at every ruler of each line's ladder: the table behind its dimension.

    Parameters
    ----------
    geometries, crs, ruler_min_m, ... : as in `divider_dimension`

    Returns
    -------
    pandas.DataFrame
        one row per input and ruler, with the input's index: ``ruler_m``, ``length_km`` with
        ``length_spread_km``, ``steps`` (whole ones, mean of the walks), ``used`` (whether the dimension
        rests on it), ``local_dim`` (over the ruler and two on either side) with ``local_dim_spread``, and
        ``length_fit_km``, as ``geofractal measures`` tells. Inputs that cannot be walked have no rows.

    Raises
    ------
    ConfigError, LayerError
        as `divider_dimension`
    """
    options = {
        "ruler_min_m": ruler_min_m,
        "ruler_max_m": ruler_max_m,
        "rungs": rungs,
        "starts": starts,
        "ladder_table": True,
    }
    prepare, plane = _prepared(boundaries, repair), _plane(edges, budget_percent, three_dimensions)
    return _ladder(_asked("divider-dimension", options, geometries, crs, prepare, plane))


def box_ladder(
    geometries: Geometries,
    *,
    crs: Any = None,
    size_min_m: float | None = None,
    size_max_m: float | None = None,
    rungs: int | None = None,
    grids: int | None = None,
    boundaries: Literal["all", "outer"] = "all",
    repair: bool = False,
    edges: Edges = "straight",
    budget_percent: float = 0.5,
    three_dimensions: bool = True,
) -> pd.DataFrame:
    """Return what is counted at every box size of each input's ladder: the table behind its box dimension.

    Parameters
    ----------
    geometries, crs, size_min_m, ... : as in `box_dimension`

    Returns
    -------
    pandas.DataFrame
        one row per input and box size, with the input's index: ``box_size_m``, ``boxes`` with
        ``boxes_spread``, ``used``, ``local_dim`` with ``local_dim_spread``, and ``boxes_fit``, as in
        `divider_ladder`. Inputs that cannot be counted have no rows.

    Raises
    ------
    ConfigError, LayerError
        as `divider_dimension`
    """
    options = _box_options(size_min_m, size_max_m, rungs, grids) | {"ladder_table": True}
    prepare, plane = _prepared(boundaries, repair), _plane(edges, budget_percent, three_dimensions)
    return _ladder(_asked("box-dimension", options, geometries, crs, prepare, plane))


def sinuosity(
    geometries: Geometries,
    *,
    ruler_m: float | None = None,
    crs: Any = None,
    edges: Edges = "straight",
    budget_percent: float = 0.5,
    three_dimensions: bool = True,
) -> pd.DataFrame:
    """Measure the sinuosity of lines at a stated ruler: walked length over end-to-end distance.

    Parameters
    ----------
    ruler_m : the ruler in metres; left out, the finest that each line's source supports
    geometries, crs, edges, budget_percent, three_dimensions : as in `divider_dimension`

    Returns
    -------
    pandas.DataFrame
        one row per input, in order and with its index; rings have nulls and a note

    Raises
    ------
    ConfigError, LayerError
        as `divider_dimension`
    """
    plane = _plane(edges, budget_percent, three_dimensions)
    return _measured(_asked("sinuosity", {"ruler_m": ruler_m}, geometries, crs, Prepare(), plane))


def _prepared(boundaries: Literal["all", "outer"], repair: bool) -> Prepare:  # noqa: FBT001 - one call
    return Prepare(boundaries=boundaries, repair=repair)


def _plane(edges: Edges, budget_percent: float, three_dimensions: bool) -> Callable[[str], Projector]:  # noqa: FBT001 - as above
    return partial(Projector, edges=edges, budget=budget_percent / 100, three_dimensions=three_dimensions)


def _box_options(
    size_min_m: float | None, size_max_m: float | None, rungs: int | None, grids: int | None
) -> dict[str, Any]:
    chosen = {"size_min_m": size_min_m, "size_max_m": size_max_m, "rungs": rungs}
    return chosen if grids is None else chosen | {"grids": grids}


class _Asked(NamedTuple):
    """Geometries, their index, and what they are measured with."""

    work: LayerWork
    values: NDArray[np.object_]
    index: Any


def _measured(asked: _Asked) -> pd.DataFrame:
    """Measure geometries as the batch measures a layer's rows."""
    results = [measure_part(asked.work, part).results for part in _parts(asked.values)]
    return pa.Table.from_batches(results).drop_columns([ROW, FID]).to_pandas().set_axis(asked.index)


def _ladder(asked: _Asked) -> pd.DataFrame:
    """Return the ladder table of geometries as the batch writes it for a layer's rows."""
    ladders = [measure_part(asked.work, part).ladders[0] for part in _parts(asked.values)]
    found = pa.Table.from_batches(ladders).to_pandas()
    return found.set_axis(asked.index[found.pop("row") - 1])


def _asked(
    word: str,
    options: dict[str, Any],
    geometries: Geometries,
    crs: Any,
    prepare: Prepare,
    plane: Callable[[str], Projector],
) -> _Asked:
    """Return geometries with the measure, its options checked."""
    try:
        chosen = load_measure(word).options(**options)
    except ValidationError as error:
        raise ConfigError(f"{word}: {error}") from None
    request = MeasureRequest(measure=word, of="geometries", options=chosen)
    values, index, wkt = _taken(geometries, crs)
    return _Asked(LayerWork((request,), plane(wkt), prepare), values, index)


def _taken(geometries: Geometries, crs: Any) -> tuple[NDArray[np.object_], Any, str]:
    """Return geometries as an array, their index, and their CRS as WKT."""
    import geopandas as gpd
    import pandas as pd
    import pyproj

    if isinstance(geometries, (gpd.GeoDataFrame, gpd.GeoSeries)):
        values, index, own = geometries.geometry.to_numpy(), geometries.index, geometries.crs
    else:
        values, index, own = np.array([*geometries, None])[:-1], pd.RangeIndex(len(geometries)), None
    given = None if crs is None else pyproj.CRS.from_user_input(crs)
    if own and given and own != given:
        raise ConfigError(f"crs says {given.name!r}, the frame {own.name!r}; leave crs out or use to_crs")
    stated = own or given
    if stated is None:
        raise ConfigError("the geometries have no CRS; state it, such as crs='EPSG:2193'")
    return values, index, stated.to_wkt()


def _parts(values: NDArray[np.object_]) -> Iterator[RowsPart]:
    """Yield parts of the geometries: at least one, so that an empty input has its columns, too."""
    import shapely

    for start in range(0, max(len(values), 1), _ROWS_PER_PART):
        taken = values[start : start + _ROWS_PER_PART]
        wkb = pa.array(shapely.to_wkb(taken), pa.large_binary())
        yield RowsPart(np.arange(start, start + len(taken)), wkb)
