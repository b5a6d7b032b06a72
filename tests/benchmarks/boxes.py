"""Print what box counting costs, and what it finds on curves of known dimension.

Run ``python tests/benchmarks/boxes.py [--curves N] [--sizes 2000,20000] [PART ...]``; parts: line, features,
cells, known. Times are of the thread's own processor, the least of several runs. The plain pass that others
are compared with is ``hypot(diff(x), diff(y)).sum()`` over the same line. No constant was set on the families
marked *.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from pathlib import Path
from time import thread_time

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[2]))

from geofractal import synthetic
from geofractal.calibration import FAMILIES, lines_of
from geofractal.estimators import box
from geofractal.estimators.box_cells import CellBoxCounter
from geofractal.scaling.crowding import lacking
from geofractal.scaling.judge import judge
from geofractal.scaling.ladder import Ladders, scales_of


def least(run: Callable[[], object], times: int = 5) -> float:
    seconds = []
    for _ in range(times):
        start = thread_time()
        run()
        seconds.append(thread_time() - start)
    return min(seconds)


def line() -> None:
    """20 sizes on one line of 4.2 million vertices."""
    print(
        f"{'line':28}{'vertices':>9}{'plain s':>9}{'1 grid':>8}{'times':>7}{'4 grids':>9}{'times':>7}"
        f"{'at most':>9}{'times':>7}"
    )
    for name, curve in (
        ("fractional trail, D 1.1", synthetic.fractional_trail(1.1, vertices=4_200_000, seed=1)),
        ("fractional trail, D 1.3", synthetic.fractional_trail(1.3, vertices=4_200_000, seed=1)),
        ("Koch curve", synthetic.koch(level=11)),
        ("random-sided Koch, D 1.5", synthetic.random_koch(1.5, level=11, seed=1)),
    ):
        lines = lines_of([curve])
        x, y = np.ascontiguousarray(lines.xy.T)
        plain = least(lambda x=x, y=y: np.hypot(np.diff(x), np.diff(y)).sum())
        ladders = box.box_ladders(lines, rungs=20)
        one = least(lambda n=lines, k=ladders: box.count(n, k, shifts=box.GRID_SHIFTS[:1]), 3)
        some = least(lambda n=lines, k=ladders: box.count(n, k), 3)
        enough, box.ENOUGH_BOXES = box.ENOUGH_BOXES, sys.maxsize
        every = least(lambda n=lines, k=ladders: box.count(n, k), 1)
        box.ENOUGH_BOXES = enough
        print(
            f"{name:28}{len(curve):9d}{plain:9.3f}{one:8.2f}{one / plain:7.1f}{some:9.2f}"
            f"{some / plain:7.1f}{every:9.2f}{every / plain:7.1f}",
            flush=True,
        )
    print("4 grids: as shipped, further grids stop where boxes are many; at most: all 4 at every size")


def features() -> None:
    """Many small features, with and without the judgement."""
    print(f"{'features':>9}{'vertices':>9}{'count s':>9}{'judge s':>9}{'features/s':>12}")
    for number, size in ((20_000, 30), (5_000, 600), (200, 20_000)):
        drawn = [synthetic.fractional_trail(1.15, vertices=size, seed=seed) for seed in range(200)]
        lines = lines_of((drawn * (number // 200 + 1))[:number])
        scales, ladders = scales_of(lines), box.box_ladders(lines)
        counts = box.count(lines, ladders)
        rungs = box.box_rungs(lines, scales, ladders, counts, counts.boxes)
        counting = least(lambda n=lines, k=ladders: box.count(n, k), 3)
        judging = least(lambda k=ladders, r=rungs: judge(k, r, estimator="box"), 3)
        whole = least(lambda n=lines: box.BoxDimension().measure(n, box.BoxOptions()), 3)
        print(f"{number:9d}{size:9d}{counting:9.2f}{judging:9.2f}{number / whole:12.0f}", flush=True)


def cells() -> None:
    """Rasters by strips of 512 rows."""
    print(f"{'side':>7}{'share':>7}{'sizes':>7}{'grids':>7}{'s':>7}{'M cells/s':>11}")
    rng = np.random.default_rng(0)
    for side, share in ((4_000, 0.05), (4_000, 0.4), (10_000, 0.4)):
        strip = rng.random((512, side)) < share

        def run(side: int = side, strip: np.ndarray = strip) -> CellBoxCounter:
            counter = CellBoxCounter(side, side)
            for start in range(0, side, 512):
                counter.add(strip[: side - start])
            return counter

        run()
        counts, seconds = run().counts(), least(run, 3)
        grids = np.isfinite(counts.grids).sum()
        print(
            f"{side:7d}{share:7.2f}{len(counts.sizes):7d}{grids:7d}{seconds:7.2f}"
            f"{side**2 / seconds / 1e6:11.0f}"
        )


def stretched(name: str, d: float, vertices: int, seed: int) -> synthetic.Curve:
    """Draw a curve of exactly so many vertices: a stretch of the next larger one that the family has."""
    draw = FAMILIES[name]
    larger = {"random-sided Koch": 4, "random middles": 2}.get(name, 1)
    curve = draw(d, vertices, seed)
    if larger > 1 and len(curve) < vertices:
        curve = draw(d, vertices * larger, seed)
    return curve.stretch(vertices, seed=seed) if larger > 1 else curve


def known(curves: int, sizes: list[int]) -> None:
    """Error, coverage and verdict on curves of exactly known dimension."""
    print(f"{'family':22}{'D':>6}{'vertices':>9}{'decades':>8}{'bias':>8}{'spread':>8}{'cover':>7}{'width':>7}"
          f"{'refused':>9}{'power-law':>10}{'curves':>7}")  # fmt: skip
    ruled = [
        ("Koch 1.1", synthetic.koch(1.1, level=8)),
        ("Gosper island", synthetic.gosper_island(level=9)),
        ("Koch", synthetic.koch(level=8)),
        ("Minkowski island", synthetic.minkowski_island(level=8)),
        ("Koch 1.4", synthetic.koch(1.4, level=8)),
        ("quadratic Koch 1", synthetic.quadratic_koch(1, level=7)),
        ("quadratic Koch 2", synthetic.quadratic_koch(2, level=5)),
        ("dragon boundary", synthetic.dragon_boundary(level=16)),
        ("gasket", synthetic.gasket(level=10)),
    ]
    for name, curve in ruled:
        show(name, curve.dimension, len(curve), [curve])
    for size in sizes:
        seeds = range(9_000, 9_000 + curves)
        for name in FAMILIES:
            for d in (1.05, 1.2, 1.3, 1.4, 1.5, 1.6, 1.75):
                star = "*" if name == "mixed Koch" else ""
                show(name + star, d, size, [stretched(name, d, size, seed) for seed in seeds])
        if size < 100_000:  # a walk keeps the whole square that it runs in: 5 GB at 200,000 vertices
            walks = [synthetic.loop_erased_walk(int(size**0.8), seed=seed) for seed in seeds]
            show("loop-erased walks*", 1.25, size, walks)
        borders = [synthetic.percolation_border(vertices=size, seed=seed) for seed in seeds]
        show("percolation borders*", 1.75, size, borders)


def show(name: str, truth: float, size: int, curves: list[synthetic.Curve]) -> None:
    lines = lines_of(curves)
    ladders: Ladders = box.box_ladders(lines)
    counts = box.count(lines, ladders)
    lack = lacking(ladders, counts.boxes, counts.visits)
    found = box.judge_boxes(lines, scales_of(lines), ladders, counts, counts.boxes, lack)
    given = np.isfinite(found.dimension)
    if not given.any():
        print(f"{name:22}{truth:6.3f}{size:9d}{'all refused':>12}", flush=True)
        return
    inside = (found.low[given] <= truth) & (truth <= found.high[given])
    decades = np.log10(found.ruler_max[given] / found.ruler_min[given]).mean()
    words = np.array(found.verdict_words())
    print(
        f"{name:22}{truth:6.3f}{size:9d}{decades:8.2f}{found.dimension[given].mean() - truth:+8.3f}"
        f"{found.dimension[given].std():8.3f}{inside.mean():7.2f}"
        f"{(found.high - found.low)[given].mean():7.3f}"
        f"{1 - given.mean():9.2f}{(words == 'power-law').mean():10.2f}{len(curves):7d}",
        flush=True,
    )


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("parts", nargs="*", default=["line", "features", "cells", "known"])
    parser.add_argument("--curves", type=int, default=50)
    parser.add_argument("--sizes", default="2000,20000")
    asked = parser.parse_args()
    wanted = [int(size) for size in asked.sizes.split(",")]
    tables = {
        "line": line,
        "features": features,
        "cells": cells,
        "known": lambda: known(asked.curves, wanted),
    }
    for part in asked.parts:
        print(f"\n{part}: {tables[part].__doc__ or known.__doc__}")
        tables[part]()
