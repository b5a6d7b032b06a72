"""Layers of patches: drawn table after table once a measure's figures are known, kept, then written."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from itertools import chain
from pathlib import Path
from typing import TYPE_CHECKING

import pyarrow as pa
import pyarrow.parquet as pq

from geofractal.batch.cover_plan import CoverPlan, CoverWork
from geofractal.measure import CoverMap
from geofractal.progress import Progress
from geofractal.registry import load_cover_measure
from geofractal.writer.tables import GEOMETRY, write_patch_layer

if TYPE_CHECKING:
    import pandas as pd

INNER = ("first_row", "first_column", "last_row", "left_column", "right_column")
"""Columns of patches that speak of the grid and stay out of the layer of patches."""

PATCHES_PER_BATCH = 5_000


def draw_patches(cover: CoverMap, work: CoverWork, figures: pa.Table, drawn: Path) -> Iterator[int]:
    """Write the patches of a measure with their columns and polygons, yielding the number of each table.

    Parameters
    ----------
    cover : the map, as the measure got it
    figures : what the measure found
    drawn : a Parquet file; whole once all is yielded
    """
    tables = _tables(cover, work, figures.to_pandas())
    first = next(tables)
    with pq.ParquetWriter(drawn, first.schema) as writer:
        for table in chain([first], tables):
            writer.write_table(table)
            yield table.num_rows


def _tables(cover: CoverMap, work: CoverWork, figures: pd.DataFrame) -> Iterator[pa.Table]:
    """Yield patches as Arrow, the polygon last, as WKB."""
    import shapely

    measure, options = load_cover_measure(work.request.measure), work.request.options
    rule = measure.patch_rule(options)
    assert rule is not None
    for frame in cover.polygons(rule):
        told = measure.patch_columns(frame, figures, options)
        columns = {name: pa.array(told[name]) for name in told if name not in (*INNER, "cover", GEOMETRY)}
        names = pa.array(told["cover"].astype(str), pa.string())
        wkb = pa.array(shapely.to_wkb(told[GEOMETRY].to_numpy(object)), pa.binary())
        yield pa.table({"cover": names, **columns, GEOMETRY: wkb})


def write_patches(plan: CoverPlan, drawn: Path, targets: Iterable[Path], progress: Progress) -> None:
    """Write drawn patches in each format, batch by batch.

    Raises
    ------
    OutputError
        a file cannot be written
    """
    from pyproj import CRS

    if plan.raster is None:
        assert plan.polygons is not None
        crs = CRS.from_user_input(plan.polygons.info.crs)
    else:
        crs = plan.raster.grid.crs
    for target in targets:
        with pq.ParquetFile(drawn, pre_buffer=False) as file:  # else all of it is held
            names, rows = file.schema_arrow.names, file.metadata.num_rows
            with progress.stage(plan.name, f"write {target.name}", rows, "patches") as stage:
                batches = file.iter_batches(PATCHES_PER_BATCH)
                write_patch_layer(batches, file.schema_arrow, names, crs, target, stage.advance)
