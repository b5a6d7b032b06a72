"""Time and peak memory of copying a layer of river reaches with four new columns.

Run ``python tests/benchmarks/writer.py [rows]``; a million unless stated.
"""

from __future__ import annotations

import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyogrio.raw
import shapely

from geofractal.measure import Column
from geofractal.reader.vector import layer_info
from geofractal.writer import SUFFIXES, write_layer

COLUMNS = (
    Column("divider_dim", "div_dim", "number", "", ""),
    Column("divider_r2", "div_r2", "number", "", ""),
    Column("divider_rungs", "div_rungs", "count", "", ""),
    Column("divider_note", "div_note", "text", "", ""),
)
PAIRS = [
    ("geopackage", "geopackage"),
    ("geopackage", "shapefile"),
    ("geopackage", "flatgeobuf"),
    ("geopackage", "geoparquet"),
    ("flatgeobuf", "geopackage"),
    ("geoparquet", "geoparquet"),
]


class Numbers:
    """Results made from row numbers alone, so that they take no memory."""

    def __init__(self, n_rows: int) -> None:
        self.n_rows = n_rows

    def read(self, start: int, stop: int) -> pa.RecordBatch:
        rows = np.arange(start, stop)
        note = pa.array(["ruler below the detail" if row % 50 == 0 else None for row in rows], pa.string())
        arrays = [pa.array(1 + rows / 1e7), pa.array(rows / 1e7), pa.array(rows % 30), note]
        return pa.RecordBatch.from_arrays(arrays, names=[column.name for column in COLUMNS])

    def fids(self, start: int, stop: int) -> np.ndarray:
        return np.arange(start + 1, stop + 1)


class Nothing(Numbers):
    """No results: makes the sources of other formats."""

    def read(self, start: int, stop: int) -> pa.RecordBatch:
        return super().read(start, stop).select([])


def make_reaches(path: Path, rows: int) -> None:
    wkb = pa.field("geom", pa.binary(), metadata={"ARROW:extension:name": "geoarrow.wkb"})
    schema = pa.schema([("river", pa.string()), ("width", pa.float64()), wkb])

    def batches():
        rng = np.random.default_rng(1)
        for start in range(0, rows, 5_000):
            count = min(5_000, rows - start)
            steps = np.cumsum(rng.normal(size=(count, 30, 2)), axis=1) * 0.001
            lines = shapely.to_wkb(shapely.linestrings(steps + rng.uniform(0, 50, size=(count, 1, 2))))
            names = [f"river {i % 1000}" for i in range(count)]
            yield pa.RecordBatch.from_arrays(
                [pa.array(names), pa.array(rng.random(count)), pa.array(lines, pa.binary())], schema=schema
            )

    pyogrio.raw.write_arrow(
        pa.RecordBatchReader.from_batches(schema, batches()),
        path,
        driver="GPKG",
        layer="reaches",
        geometry_name="geom",
        geometry_type="LineString",
        crs="EPSG:4326",
    )


def one(source: Path, target: Path, layout: str) -> None:
    info = layer_info(source)
    cpu, wall = time.process_time(), time.perf_counter()
    write_layer(info, Numbers(info.features), COLUMNS, target, layout)
    cpu, wall = time.process_time() - cpu, time.perf_counter() - wall
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3
    size = target.stat().st_size / 1e6
    costs = f"{wall:8.1f} s{cpu:8.1f} s CPU{peak:8.0f} MB peak{size:8.0f} MB file"
    print(f"{info.driver:>12} -> {layout:<12}{costs}")


def make_sources(folder: Path, rows: int) -> None:
    make_reaches(folder / "reaches.gpkg", rows)
    info = layer_info(folder / "reaches.gpkg")
    for layout in ("flatgeobuf", "geoparquet"):
        write_layer(info, Nothing(rows), (), folder / f"reaches{SUFFIXES[layout]}", layout)


def main(rows: int) -> None:
    """Run each task in a process of its own, since a child's peak begins with its parent's."""
    with tempfile.TemporaryDirectory() as folder:
        subprocess.run([sys.executable, __file__, folder, str(rows)], check=True)
        print(f"{rows} reaches of 30 vertices", flush=True)
        for source, layout in PAIRS:
            paths = [f"{folder}/reaches{SUFFIXES[source]}", f"{folder}/copy{SUFFIXES[layout]}"]
            subprocess.run([sys.executable, __file__, *paths, layout], check=True)


if __name__ == "__main__":
    match sys.argv[1:]:
        case [source, target, layout]:
            one(Path(source), Path(target), layout)
        case [folder, rows]:
            make_sources(Path(folder), int(rows))
        case [rows]:
            main(int(rows))
        case _:
            main(1_000_000)
