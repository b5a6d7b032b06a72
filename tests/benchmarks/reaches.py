"""River reaches by the million, GeoPackage to GeoPackage: rate, memory, and the plain script beside it.

Run ``python tests/benchmarks/reaches.py``. ``--features`` and ``--rungs`` take several numbers; 0 rungs
stand for the default ladder and starts. ``--groups`` measures rivers of 20 reaches each, ``--ladder-table``
writes the table of all rungs, too, and ``--plain`` says on how many features the plain script is timed. A
small run first compiles the kernels. It prints one table and asserts nothing about time; that every row is
accounted for is checked.
"""

import argparse
import json
import resource
import sqlite3
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyogrio.raw
import shapely

BATCH_ROWS = 20_000
MEAN_VERTICES = 30
BAD, MULTI, LONG = 0.02, 0.05, 0.01
LONG_VERTICES = 300
REACHES = 20
DRIFT = (9.0, 0.0)
LADDER = {"ruler-min-m": 50, "ruler-max-m": 160}  # stated, since by itself a reach this short gets no ladder
HEAD = (
    f"{'what':34} {'features':>10} {'rungs':>5} {'s':>7} {'features/s':>11} {'peak MB':>8} "
    f"{'answered':>10} {'told':>8}"
)


def reaches(features, seed=7):
    """Yield batches of reaches: 2 % bad rows, 5 % of several parts, 1 % very long, in UTM metres."""
    for first in range(0, features, BATCH_ROWS):
        n = min(BATCH_ROWS, features - first)
        rng = np.random.default_rng([seed, first])
        kind = rng.choice(4, size=n, p=[1 - BAD - MULTI - LONG, BAD, MULTI, LONG])
        counts = np.where(kind == 3, LONG_VERTICES, rng.poisson(MEAN_VERTICES - 3, n).clip(8))
        steps = rng.normal(DRIFT, 12.0, size=(counts.sum(), 2))
        owner = np.repeat(np.arange(n), counts)
        xy = np.cumsum(steps, axis=0)
        starts = np.cumsum(counts) - counts
        xy -= xy[starts][owner]
        xy += rng.uniform([3e5, 6.0e6], [7e5, 6.4e6], size=(n, 2))[owner]
        lines = shapely.linestrings(xy, indices=owner)
        multi = kind == 2
        lines[multi] = [
            shapely.MultiLineString([shapely.get_coordinates(line)[:7], shapely.get_coordinates(line)[7:]])
            if len(line.coords) > 9
            else line
            for line in lines[multi]
        ]
        bad = np.flatnonzero(kind == 1)
        for place, row in enumerate(bad):
            lines[row] = (
                None,
                shapely.LineString(),
                shapely.Point(5e5, 6e6),
                shapely.LineString([(1, 1), (1, 1)]),
            )[place % 4]
        yield table(np.arange(first, first + n), lines)


def rivers(features, seed=7):
    """Yield batches of reaches of which twenty, end to end, make a river of about 600 vertices."""
    per_reach = MEAN_VERTICES + 1
    for first in range(0, features, BATCH_ROWS):
        n = min(BATCH_ROWS, features - first)
        rng = np.random.default_rng([seed, first])
        steps = rng.normal(DRIFT, 12.0, size=(-(-n // REACHES), REACHES * (per_reach - 1) + 1, 2))
        xy = np.cumsum(steps, axis=1) + rng.uniform([3e5, 6.0e6], [7e5, 6.4e6], size=(len(steps), 1, 2))
        cuts = np.arange(REACHES)[:, None] * (per_reach - 1) + np.arange(per_reach)
        lines = shapely.linestrings(xy[:, cuts].reshape(-1, per_reach, 2)[:n])
        yield table(np.arange(first, first + n), lines)


def table(rows, lines):
    return pa.record_batch(
        {
            "name": pa.array([f"reach {i}" for i in rows]),
            "river": pa.array(rows // REACHES),
            "order": pa.array(rows % 7, pa.int32()),
            "wkb": pa.array(shapely.to_wkb(lines), pa.binary()),
        }
    )


def write_source(path, features, draw=reaches):
    first = next(draw(1))
    reader = pa.RecordBatchReader.from_batches(first.schema, draw(features))
    pyogrio.raw.write_arrow(
        reader,
        path,
        layer="reaches",
        geometry_name="wkb",
        geometry_type="Unknown",
        crs="EPSG:32631",
        driver="GPKG",
    )


def measured(folder, source, options, workers, group):
    """Run the batch in a process of its own and return its seconds, peak MB and record."""
    out = folder / "out"
    batch = folder / "batch.yaml"
    layer = {"source": str(source), **({"group-by": "river"} if group else {})}
    said = {
        "batch": "reaches",
        "layers": {"reaches": layer},
        "measures": [{"measure": "divider-dimension", "of": "reaches", **options}],
        "outputs": {"folder": str(out), "formats": ["geopackage"]},
        "run": {"workers": workers},
    }
    batch.write_text(json.dumps(said))
    begun = time.perf_counter()
    subprocess.run([sys.executable, "-m", "geofractal.cli", "run", str(batch), "--quiet"], check=True)
    seconds = time.perf_counter() - begun
    record = json.loads((out / "run_record.json").read_text())
    return seconds, record["peak_memory_mb"], record, out / source.name


def account(copy, features):
    """Return how many rows are answered and how many say why not; together they must be all."""
    with sqlite3.connect(copy) as database:
        count, answered, told = database.execute(
            "SELECT count(*), count(divider_dim), "
            "sum(divider_dim IS NULL AND divider_note IS NOT NULL) FROM reaches"
        ).fetchone()
    if count != features or answered + told != features:
        raise SystemExit(f"{count} rows came out of {features}: {answered} answered, {told} told")
    return answered, told


def plain_script(source, features, rungs):
    """Return the seconds a feature of what a user would write: a frame in memory and a loop over features."""
    import geopandas as gpd

    begun = time.perf_counter()
    frame = gpd.read_file(source, rows=features)
    dims = []
    for line in frame.geometry:
        dims.append(np.nan)
        if line is None or line.is_empty or line.geom_type != "LineString" or line.length == 0:
            continue
        xy = shapely.get_coordinates(line)
        least = 3 * np.median(np.hypot(*np.diff(xy, axis=0).T))
        rulers = np.geomspace(least, np.hypot(*np.ptp(xy, axis=0)) / 3, rungs)
        if rulers[-1] <= rulers[0]:
            continue
        lengths = [np.mean([plain_walk(xy, r), plain_walk(xy[::-1], r)]) for r in rulers]
        dims[-1] = 1 - np.polyfit(np.log(rulers), np.log(lengths), 1)[0]
    frame["divider_dim"] = dims
    with tempfile.TemporaryDirectory() as folder:
        frame.to_file(Path(folder) / "plain.gpkg")
    return (time.perf_counter() - begun) / features


def plain_walk(xy, ruler):
    """Divider walk in numpy: the first crossing of the circle, found anew at each step."""
    at, here, steps = 0, xy[0], 0
    while True:
        outside = np.flatnonzero(np.hypot(*(xy[at + 1 :] - here).T) >= ruler)
        if not len(outside):
            return steps * ruler + np.hypot(*(xy[-1] - here))
        end = at + 1 + outside[0]
        start = xy[end - 1] if end - 1 > at else here
        along, from_here = xy[end] - start, start - here
        a, b, c = along @ along, from_here @ along, from_here @ from_here - ruler**2
        here = start + (-b + np.sqrt(max(b * b - a * c, 0))) / a * along
        at, steps = end - 1, steps + 1


def main():
    arguments = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    arguments.add_argument("--features", type=int, nargs="+", default=[1_000_000])
    arguments.add_argument("--rungs", type=int, nargs="+", default=[12, 24])
    arguments.add_argument("--workers", type=int, default=2)
    arguments.add_argument("--plain", type=int, default=5_000)
    arguments.add_argument("--groups", action="store_true", help="measure rivers of 20 reaches each")
    arguments.add_argument("--ladder-table", action="store_true", help="write the table of all rungs, too")
    chosen = arguments.parse_args()
    table = {"ladder-table": True} if chosen.ladder_table else {}
    print(HEAD)
    for features in chosen.features:
        with tempfile.TemporaryDirectory() as name:
            folder = Path(name)
            source = folder / "reaches.gpkg"
            draw = rivers if chosen.groups else reaches
            write_source(source, 1_000, draw)
            measured(folder, source, table, chosen.workers, chosen.groups)
            write_source(source, features, draw)
            for rungs in chosen.rungs:
                options = {"rungs": rungs, "starts": 1, **LADDER} if rungs else {}
                options |= table
                seconds, peak, _, copy = measured(folder, source, options, chosen.workers, chosen.groups)
                answered, told = account(copy, features)
                what = f"batch, {chosen.workers} workers" + (", rivers" if chosen.groups else "")
                print(
                    f"{what:34} {features:10,} {rungs:5} {seconds:7.1f} {features / seconds:11,.0f} "
                    f"{peak:8,.0f} {answered:10,} {told:8,}",
                    flush=True,
                )
            if chosen.plain:
                each = plain_script(source, chosen.plain, chosen.rungs[0] or 12)
                peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3
                print(
                    f"{'plain script, first features':34} {chosen.plain:10,} {chosen.rungs[0]:5} "
                    f"{each * chosen.plain:7.1f} {1 / each:11,.0f} {peak:8,.0f}"
                )


if __name__ == "__main__":
    main()
