"""Print the speed and memory of fragmentation by zone, one reading and figures of cells apart.

    python tests/benchmarks/fragmentation.py --side 32768
    python tests/benchmarks/fragmentation.py --polygons 200000

The map is that of ``raster.py``: 8 classes, mean run length 6 cells, half a million patches in 100 million
cells. Each line is a process of its own.
"""

from __future__ import annotations

import argparse
import multiprocessing
import tempfile
import time
from pathlib import Path

import numpy as np
import shapely
from raster import CELL_M, peak_mb, write_map

LEFT, TOP = 300_000, 5_600_000
CASES = {
    "whole map": {},
    "100 zones": {"zones": 100},
    "100 zones in two sets": {"zones": 100, "shift": 0.5},
    "one class": {"covers": ["1"]},
    "+ interior area at 100 m": {"covers": ["1"], "interior_depths_m": [100.0]},
    "+ lacunarity in boxes of 100 and 500 m": {"covers": ["1"], "lacunarity_boxes_m": [100.0, 500.0]},
    "+ box dimensions": {"covers": ["1"], "box_dimension": True},
    "+ all three": {
        "covers": ["1"],
        "interior_depths_m": [100.0],
        "lacunarity_boxes_m": [100.0, 500.0],
        "box_dimension": True,
    },
    "+ edge density at 40 m": {"covers": ["1"], "edge_cell_sizes_m": [40.0]},
}
POLYGON_CASES = {
    "polygons, whole map": {},
    "polygons, 100 zones": {"zones": 100},
    "+ interior area at 20 m": {"zones": 100, "interior_depths_m": [20.0]},
    "+ distances and connected area": {"zones": 100, "distances": True, "dispersal_m": 100.0},
}


def wavy_zones(side: int, number: int, shift: float) -> list[shapely.Polygon]:
    """Return zones with wavy borders that tile a map, and where `shift` is set as many again that overlap."""
    lines = int(np.sqrt(number))
    step = side * CELL_M / lines
    zones = []
    for offset in [0.0, *([shift] if shift else [])]:
        for i, j in np.ndindex(lines, lines):
            left, bottom = (j + offset) * step, (i + offset) * step
            box = shapely.segmentize(shapely.box(left, bottom, left + step, bottom + step), step / 100)
            zones.append(shapely.transform(box, _wave))
    corner = np.array([LEFT, TOP - side * CELL_M])
    return [shapely.transform(zone, lambda xy: xy + corner) for zone in zones]


def _wave(xy: np.ndarray) -> np.ndarray:
    return xy + 300 * np.sin(xy[:, ::-1] / (700, 900))


def work(path: str, side: int, case: dict, results: multiprocessing.Queue) -> None:
    """Measure one case after a warm-up on a small map."""
    from geofractal.cover_api import fragmentation
    from geofractal.reader.raster import RasterOptions

    given = {name: value for name, value in case.items() if name not in {"zones", "shift"}}
    small = Path(path).with_name("warm.tif")
    for source, cells in ((small, 512), (Path(path), side)):
        if "zones" in case:
            given["zones"] = wavy_zones(cells, case["zones"], case.get("shift", 0.0))
        start, mine = time.perf_counter(), time.thread_time()
        rows = len(fragmentation(source, reading=RasterOptions(grid="source"), **given))
        took, caller = time.perf_counter() - start, time.thread_time() - mine
    results.put((took, caller, peak_mb(), rows))


def net(number: int, pieces: int) -> tuple[np.ndarray, int]:
    """Return about so many polygons of 4 sides that neighbours share, wavy with some pieces each."""
    side, rng = int(np.sqrt(number)), np.random.default_rng(1)
    steps = 200 * np.arange(side + 1.0)
    corners = np.stack(np.meshgrid(steps, steps), axis=-1)
    corners += rng.uniform(-40, 40, corners.shape)

    def sides(begin: np.ndarray, end: np.ndarray) -> np.ndarray:
        share = np.linspace(0, 1, pieces + 1)[:, None]
        along = begin[:, :, None] + share * (end - begin)[:, :, None]
        along[:, :, 1:-1] += rng.uniform(-4, 4, along[:, :, 1:-1].shape)
        return along

    level, upright = sides(corners[:, :-1], corners[:, 1:]), sides(corners[:-1], corners[1:])
    parts = [level[:-1], upright[:, 1:], level[1:, :, ::-1], upright[:, :-1, ::-1]]
    rings = np.concatenate(parts, axis=2).reshape(side * side, -1, 2)
    rings += np.array([LEFT, TOP - 200 * side])
    return shapely.remove_repeated_points(shapely.polygons(rings)), side


def work_polygons(number: int, case: dict, results: multiprocessing.Queue) -> None:
    """Measure one case of polygons after a warm-up on few."""
    import geopandas

    from geofractal.cover_api import fragmentation

    given = {name: value for name, value in case.items() if name != "zones"}
    for count in (400, number):
        polygons, side = net(count, 8)
        kinds = np.random.default_rng(2).integers(0, 8, len(polygons)).astype(str)
        frame = geopandas.GeoDataFrame({"kind": kinds}, geometry=polygons, crs=32632)
        if "zones" in case:
            given["zones"] = wavy_zones(round(200 * side / CELL_M), case["zones"], 0.0)
        held, start = peak_mb(), time.perf_counter()
        rows = len(fragmentation(frame, cover="kind", **given))
        took = time.perf_counter() - start
    results.put((took, held, peak_mb(), rows))


def main_polygons(number: int) -> None:
    """Print what a layer of polygons of 32 vertices takes."""
    spawn = multiprocessing.get_context("spawn")
    print(f"{'':44}{'seconds':>9}{'held MB':>9}{'peak MB':>9}{'rows':>8}")
    for title, case in POLYGON_CASES.items():
        results = spawn.Queue()
        one = spawn.Process(target=work_polygons, args=(number, case, results))
        one.start()
        took, held, peak, rows = results.get()
        one.join()
        print(f"{title:44}{took:9.1f}{held:9.0f}{peak:9.0f}{rows:8}", flush=True)


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--side", type=int, default=8192, help="cells a side; 32768 is 1.07 gigapixels")
    parser.add_argument("--folder", type=Path, help="where the map is kept; a temporary folder unless given")
    parser.add_argument("--polygons", type=int, help="measure so many polygons, and no raster")
    asked = parser.parse_args()
    if asked.polygons:
        main_polygons(asked.polygons)
        return
    spawn = multiprocessing.get_context("spawn")
    with tempfile.TemporaryDirectory() as temporary:
        folder = asked.folder or Path(temporary)
        for name, side in (("warm.tif", 512), (f"land-{asked.side}.tif", asked.side)):
            if not (folder / name).exists():
                write_map(folder / name, side, "land")
        print(f"{'':44}{'seconds':>9}{'M/s':>8}{'caller':>9}{'peak MB':>9}{'rows':>8}")
        for title, case in CASES.items():
            results = spawn.Queue()
            one = spawn.Process(
                target=work, args=(str(folder / f"land-{asked.side}.tif"), asked.side, case, results)
            )
            one.start()
            took, caller, peak, rows = results.get()
            one.join()
            print(f"{title:44}{took:9.1f}{asked.side**2 / took / 1e6:8.1f}{caller:9.1f}{peak:9.0f}{rows:8}")


if __name__ == "__main__":
    main()
