"""Print the speed and memory of whole batches of a class map: measures of patches and what needs one reading.

    python tests/benchmarks/cover_batch.py --side 32768           # 1.07 gigapixels
    python tests/benchmarks/cover_batch.py --side 32768 --grid warp
    python tests/benchmarks/cover_batch.py --side 16384 --patches   # their layer is written, too

The map is that of ``raster.py``, the zones are 100 with wavy borders. Each line is a process of its own that
runs the batch from its YAML file to its tables after a warm-up on a small map.
"""

from __future__ import annotations

import argparse
import multiprocessing
import tempfile
import time
from pathlib import Path
from typing import Any

from fragmentation import wavy_zones
from raster import CRS, peak_mb, write_map

ZONES = 100
LAYERED = "area-perimeter-dimension"
CASES: dict[str, tuple[dict[str, Any], ...]] = {
    "fragmentation": ({"measure": "fragmentation"},),
    "area-perimeter dimension": ({"measure": "area-perimeter-dimension"},),
    "the same, outer edges": ({"measure": "area-perimeter-dimension", "perimeter": "outer-cell-edges"},),
    "number-area exponent": ({"measure": "number-area-exponent"},),
}


def write_batch(folder: Path, side: int, measures: tuple[dict[str, Any], ...], grid: str, zones: int) -> Path:
    """Write a map, its zones and a batch file that measures it; return the batch file."""
    import json

    import geopandas as gpd

    folder.mkdir(exist_ok=True)
    raster, basins = folder / f"land-{side}.tif", folder / f"zones-{side}.gpkg"
    if not raster.exists():
        write_map(raster, side, "land")
    if not basins.exists():
        frame = gpd.GeoDataFrame(
            {"name": [f"basin {i}" for i in range(ZONES)]}, geometry=wavy_zones(side, ZONES, 0), crs=CRS
        )
        frame.to_file(basins)
    layers = {"land": {"source": str(raster), "grid": grid}, "basins": {"source": str(basins), "id": "name"}}
    asked = [{**one, "of": "land", **({"zones": "basins"} if zones else {})} for one in measures]
    batch = folder / f"batch-{side}.yaml"
    outputs = {"folder": str(folder / f"out-{side}"), "tables": ["parquet"]}
    batch.write_text(
        json.dumps({"batch": "benchmark", "layers": layers, "measures": asked, "outputs": outputs})
    )
    return batch


def layered() -> dict[str, tuple[dict[str, Any], ...]]:
    """Return the cases that have a layer of patches, with it."""
    return {
        title: tuple({**one, "patches": True} for one in measures)
        for title, measures in CASES.items()
        if all(one["measure"] == LAYERED for one in measures)
    }


def work(batches: tuple[Path, Path], results: multiprocessing.Queue) -> None:
    """Run a small batch, then the one that is timed."""
    from geofractal.batch.run import run_batch
    from geofractal.config import load_config

    small, large = map(load_config, batches)
    run_batch(small)
    start = time.perf_counter()
    record = run_batch(large)
    rows = sum(one["rows"] for one in record["layers"]["land"]["measures"])
    results.put((time.perf_counter() - start, rows, peak_mb()))


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--side", type=int, default=8192, help="cells a side; 32768 is 1.07 gigapixels")
    parser.add_argument("--folder", type=Path, help="where maps are kept; a temporary folder unless given")
    parser.add_argument("--grid", default="source", choices=("source", "warp"))
    parser.add_argument("--cases", default="", help="only those whose names hold this")
    parser.add_argument("--patches", action="store_true", help="write layers of patches, too")
    parser.add_argument("--zones", type=int, default=1, choices=(0, 1), help="0 measures the whole map alone")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = asked.folder or Path(temporary)
        print(f"{'':32}{'seconds':>10}{'M cells/s':>11}{'rows':>9}{'peak MB':>9}")
        for title, measures in (layered() if asked.patches else CASES).items():
            if asked.cases not in title:
                continue
            batches = tuple(
                write_batch(folder, side, measures, asked.grid, asked.zones) for side in (512, asked.side)
            )
            context = multiprocessing.get_context("spawn")
            results = context.Queue()
            process = context.Process(target=work, args=(batches, results))
            process.start()
            seconds, rows, peak = results.get()
            process.join()
            speed = asked.side**2 / seconds / 1e6
            print(f"{title:32}{seconds:10.1f}{speed:11.1f}{rows:9}{peak:9.0f}", flush=True)


if __name__ == "__main__":
    main()
