"""Print the speed and memory of reading and labelling class maps, beside plain reading and a plain script.

    python tests/benchmarks/raster.py --side 32768
    python tests/benchmarks/raster.py --side 8192 --jitter 1.0      # shorter runs
    python tests/benchmarks/raster.py --side 32768 --mosaic 4       # 16.8 gigapixels of it, virtual

Maps are made once, seeded, in a temporary folder unless one is given. Each measurement is a process of its
own, so that its peak memory is its own.
"""

from __future__ import annotations

import argparse
import json
import re
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np

from geofractal.landcover.strips import Strip

TILE = 4096
CLASSES = 8
CRS = "EPSG:32632"
CELL_M = 10.0


def mosaic_of_classes(side: int, *, jitter: float, doublings: int, seed: int) -> np.ndarray:
    """Return a class map whose borders are rough at every scale: each doubling copies a parent cell or,
    with probability `jitter`, a neighbour of it."""
    rng = np.random.default_rng(seed)
    n = side >> doublings
    codes = rng.integers(1, CLASSES + 1, (n, n), dtype=np.uint8)
    for _ in range(doublings):
        n *= 2
        moves = rng.random((n, n)) < jitter
        rows = np.arange(n)[:, None] + rng.integers(-1, 2, (n, n)) * moves
        columns = np.arange(n) + rng.integers(-1, 2, (n, n)) * moves
        codes = codes[np.clip(rows, 0, n - 1) // 2, np.clip(columns, 0, n - 1) // 2]
    return codes


def write_map(path: Path, side: int, kind: str) -> None:
    """Write a tiled, compressed map of mirrored copies of four tiles, so that no seam shows."""
    import rasterio
    from affine import Affine
    from rasterio.windows import Window

    tile = min(TILE, side)
    tiles = [make_tile(kind, tile, seed) for seed in range(4)]
    profile = {"driver": "GTiff", "count": 1, "dtype": "uint8", "width": side, "height": side, "nodata": 0}
    layout = {"tiled": True, "blockxsize": 512, "blockysize": 512, "compress": "deflate", "bigtiff": "yes"}
    transform = Affine(CELL_M, 0, 300_000, 0, -CELL_M, 5_600_000)
    with rasterio.open(path, "w", **profile, **layout, crs=CRS, transform=transform) as out:
        for i in range(0, side, tile):
            for j in range(0, side, tile):
                down, across = (i // tile) % 2, (j // tile) % 2
                codes = tiles[0] if kind != "noise" else tiles[(i // tile + j // tile) % 4]
                codes = codes[:: 1 - 2 * down, :: 1 - 2 * across][: side - i, : side - j]
                out.write(codes, 1, window=Window(j, i, codes.shape[1], codes.shape[0]))


def make_tile(kind: str, side: int, seed: int) -> np.ndarray:
    """Return one tile: ``land`` (runs of about 6 cells), ``short`` (2.4), ``noise`` or ``comb``."""
    if kind == "noise":  # 4-neighbour site percolation threshold, Newman & Ziff 2000
        return (np.random.default_rng(seed).random((side, side)) < 0.592746).astype(np.uint8) + 1
    if kind == "comb":  # two patches that span the map
        codes = np.ones((side, side), np.uint8)
        codes[:, ::4] = 2
        codes[0] = codes[-1] = 2
        return codes
    jitter, doublings = {"land": (0.42, 4), "short": (1.0, 3)}[kind]
    return mosaic_of_classes(side, jitter=jitter, doublings=doublings, seed=seed)


def write_mosaic(path: Path, source: Path, side: int, times: int) -> None:
    """Write a virtual raster that repeats a map times x times."""
    pieces = "".join(
        f'<SimpleSource><SourceFilename relativeToVRT="1">{source.name}</SourceFilename>'
        f'<SourceBand>1</SourceBand><SourceProperties RasterXSize="{side}" RasterYSize="{side}" '
        f'DataType="Byte" BlockXSize="512" BlockYSize="512"/>'
        f'<SrcRect xOff="0" yOff="0" xSize="{side}" ySize="{side}"/>'
        f'<DstRect xOff="{j * side}" yOff="{i * side}" xSize="{side}" ySize="{side}"/></SimpleSource>'
        for i in range(times)
        for j in range(times)
    )
    path.write_text(
        f'<VRTDataset rasterXSize="{side * times}" rasterYSize="{side * times}"><SRS>{CRS}</SRS>'
        f"<GeoTransform>300000,1,0,5600000,0,-1</GeoTransform>"
        f'<VRTRasterBand dataType="Byte" band="1"><NoDataValue>0</NoDataValue>{pieces}</VRTRasterBand>'
        "</VRTDataset>"
    )


def work_read(path: str) -> dict[str, float]:
    """Read a map strip by strip as rasterio alone would."""
    import rasterio

    cells = 0
    with rasterio.Env(GDAL_CACHEMAX=64), rasterio.open(path) as dataset:
        for first in range(0, dataset.height, 512):
            rows = min(512, dataset.height - first)
            cells += dataset.read(1, window=((first, first + rows), (0, dataset.width))).size
    return {"cells": cells}


def work_strips(path: str, grid: str) -> dict[str, float]:
    """Read a map as strips of class indices with true cell sizes."""
    from geofractal.reader.raster import RasterOptions, open_raster

    return {"cells": sum(strip.codes.size for strip in open_raster(path, RasterOptions(grid=grid)).strips())}


def in_zones(strips: Iterator[Strip], rows: int, side: int) -> Iterator[Strip]:
    """Yield strips with side x side square zones."""
    for strip in strips:
        down = (strip.first_row + np.arange(strip.rows)) * side // rows
        across = np.arange(strip.codes.shape[1]) * side // strip.codes.shape[1]
        yield replace(strip, zones=(down * side).astype(np.int32)[:, None] + across.astype(np.int32))


def work_patches(
    path: str, *, grid: str, neighbours: int = 8, outlines: bool = False, zones: int = 0
) -> dict[str, float]:
    """Label a map and add up what its patches sum to."""
    from geofractal.landcover.labelling import label_patches
    from geofractal.reader.raster import RasterOptions, open_raster

    raster = open_raster(path, RasterOptions(grid=grid))
    patches = pieces = area = edge = largest = 0
    strips = in_zones(raster.strips(), raster.grid.rows, zones) if zones else raster.strips()
    for found in label_patches(strips, neighbours=neighbours, outlines=outlines):
        patches += len(found.patches)
        pieces += len(found.pieces)
        area += int(found.patches["area"].sum())
        edge += int(found.patches["edge"].sum())
        largest = max(largest, int(found.patches["cells"].max(initial=0)))
    return {
        "cells": raster.grid.rows * raster.grid.columns,
        "patches": patches,
        "pieces": pieces,
        "area_km2": area * raster.grid.area_unit_m2 / 1e6,
        "edge_km": edge * raster.grid.length_unit_m / 1e3,
        "largest": largest,
    }


def work_plain(path: str, rows: int) -> dict[str, float]:
    """Do what a plain script does: the whole map in memory, one labelling a class, areas by counting."""
    import rasterio
    from scipy import ndimage

    with rasterio.open(path) as dataset:
        codes = dataset.read(1, window=((0, rows), (0, dataset.width)))
    patches = 0
    for kind in range(1, CLASSES + 1):
        numbers, count = ndimage.label(codes == kind, np.ones((3, 3)))
        patches += count
        np.bincount(numbers.ravel())
    edges = np.count_nonzero(codes[1:] != codes[:-1]) + np.count_nonzero(codes[:, 1:] != codes[:, :-1])
    return {"cells": codes.size, "patches": patches, "edge_km": edges * CELL_M / 1e3}


def measured(name: str, **given: object) -> dict[str, float]:
    """Run one piece of work in a process of its own; return its figures, time and peak memory."""
    command = [sys.executable, __file__, "--work", name, "--given", json.dumps(given)]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    return json.loads(done.stdout.splitlines()[-1])


def run_work(name: str, given: dict[str, object]) -> None:
    """Do one piece of work after a warm-up on a small map, and print its figures."""
    work = globals()[f"work_{name}"]
    with tempfile.TemporaryDirectory() as folder:
        small = Path(folder) / "small.tif"
        write_map(small, 512, "land")
        work(**{**given, "path": str(small), **({"rows": 512} if "rows" in given else {})})
    start, busy, mine = time.perf_counter(), time.process_time(), time.thread_time()
    figures = work(**given)
    figures["seconds"] = time.perf_counter() - start
    figures["caller"] = time.thread_time() - mine
    figures["reader"] = time.process_time() - busy - figures["caller"]
    figures["peak_mb"] = peak_mb()
    print(json.dumps(figures))


def peak_mb() -> float:
    """Return the peak memory of this process; not that of the one it was forked from."""
    status = Path("/proc/self/status")
    if status.exists():
        return int(re.search(r"VmHWM:\s+(\d+)", status.read_text())[1]) / 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def row(title: str, figures: dict[str, float], reading: float | None = None) -> float:
    """Print one line of the table; return cells a second in millions."""
    speed = figures["cells"] / figures["seconds"] / 1e6
    against = f"{reading / speed:8.2f}" if reading else " " * 8
    rate = figures.get("patches", 0) / figures["cells"] * 100
    print(
        f"{title:44}{figures['cells'] / 1e6:10.0f}{figures['seconds']:9.1f}{speed:9.1f}{against}"
        f"{figures['caller']:8.1f}{figures['reader']:8.1f}{figures['peak_mb']:9.0f}{rate:10.2f}"
    )
    return speed


def run_length(path: Path) -> float:
    import rasterio

    with rasterio.open(path) as dataset:
        codes = dataset.read(1, window=((0, min(2048, dataset.height)), (0, min(8192, dataset.width))))
    return codes.size / (np.count_nonzero(codes[:, 1:] != codes[:, :-1]) + len(codes))


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--side", type=int, default=8192, help="cells a side; 32768 is 1.07 gigapixels")
    parser.add_argument("--mosaic", type=int, default=0, help="also a virtual map of this many copies a side")
    parser.add_argument("--folder", type=Path, help="where maps are kept; a temporary folder unless given")
    parser.add_argument("--work", help=argparse.SUPPRESS)
    parser.add_argument("--given", default="{}", help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.work:
        run_work(asked.work, json.loads(asked.given))
        return
    with tempfile.TemporaryDirectory() as temporary:
        table(asked.folder or Path(temporary), asked.side, asked.mosaic)


def table(folder: Path, side: int, times: int) -> None:
    """Make the maps that are missing and print the table."""
    paths = {kind: folder / f"{kind}-{side}.tif" for kind in ("land", "short", "noise", "comb")}
    for kind, path in paths.items():
        if not path.exists():
            write_map(path, side, kind)
    print(f"mean run length: land {run_length(paths['land']):.1f}, short {run_length(paths['short']):.1f}")
    head = ("million", "seconds", "M/s", "x read", "caller", "reader", "peak MB", "patches %")
    print(
        f"{'':44}{head[0]:>10}{head[1]:>9}{head[2]:>9}{head[3]:>8}{head[4]:>8}{head[5]:>8}{head[6]:>9}{head[7]:>10}"
    )
    print(f"{'':80}{'cpu s':>8}{'cpu s':>8}")
    land = str(paths["land"])
    reading = row("plain reading", measured("read", path=land))
    row("strips", measured("strips", path=land, grid="source"), reading)
    row("strips, warped", measured("strips", path=land, grid="warp"), reading)
    ours = row("patches", measured("patches", path=land, grid="source"), reading)
    row("patches, warped", measured("patches", path=land, grid="warp"), reading)
    row(
        "patches, across and cut at 100 zones",
        measured("patches", path=land, grid="source", zones=10),
        reading,
    )
    row("patches of 4 neighbours", measured("patches", path=land, grid="source", neighbours=4), reading)
    row("patches with outlines", measured("patches", path=land, grid="source", outlines=True), reading)
    for kind, title in (
        ("short", "short runs"),
        ("noise", "noise at the threshold"),
        ("comb", "two spanning patches"),
    ):
        row(f"patches, {title}", measured("patches", path=str(paths[kind]), grid="source"), reading)
    rows = max(512, min(side, 100_000_000 // side))
    plain = row("plain script (scipy, class by class)", measured("plain", path=land, rows=rows), reading)
    print(f"ratio to the plain script: {ours / plain:.1f}")
    if times:
        virtual = folder / f"mosaic-{side}-{times}.vrt"
        write_mosaic(virtual, paths["land"], side, times)
        row(
            f"patches, virtual mosaic of {times} x {times}",
            measured("patches", path=str(virtual), grid="source"),
            reading,
        )


if __name__ == "__main__":
    main()
