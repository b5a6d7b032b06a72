"""Print how often lines are taken for drawn along raster cells: rightly, and wrongly.

Run ``python tests/benchmarks/staircases.py [--curves N]``. Every line is turned by another angle. A hit is
right where the cell's longer side is told within 20 %.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Iterator
from dataclasses import replace
from functools import partial
from pathlib import Path

import numpy as np
import shapely
from pyproj import Transformer

sys.path.insert(0, str(Path(__file__).parents[2]))

from geofractal import synthetic
from geofractal.calibration import FAMILIES, lines_of
from geofractal.scaling.ladder import scales_of
from geofractal.synthetic import Curve

DIMENSIONS = (1.05, 1.1, 1.2, np.log(4) / np.log(3), 1.3, 1.4, 1.5, 1.6, 1.75, 1.9)
SIZES = (20, 60, 500, 2_000, 20_000)
CELL = 4.0


def turned(curve: Curve, angle: float) -> Curve:
    c, s = np.cos(angle), np.sin(angle)
    return replace(curve, xy=np.ascontiguousarray(curve.xy @ np.array([[c, s], [-s, c]])))


def simplified(curve: Curve, tolerance: float) -> Curve:
    thin = shapely.simplify(shapely.linestrings(curve.xy), tolerance, preserve_topology=False)
    return replace(curve, xy=np.ascontiguousarray(shapely.get_coordinates(thin)))


def flattened(curve: Curve, aspect: float) -> Curve:
    return replace(curve, xy=np.ascontiguousarray(curve.xy * [1, aspect]))


def projected(curve: Curve, latitude: float) -> Curve:
    """Lay a line drawn in cells of `CELL` out as if each were 1/120 of a degree, on its own plane."""
    lonlat = (curve.xy - curve.xy.mean(axis=0)) / CELL / 120 + [20, latitude]
    plane = f"+proj=aeqd +lat_0={latitude} +lon_0=20 +ellps=WGS84"
    xy = np.column_stack(Transformer.from_crs(4326, plane, always_xy=True).transform(*lonlat.T))
    return replace(curve, xy=np.ascontiguousarray(xy / (40_007_863 / 360 / 120) * CELL))


def open_lines(vertices: int, seed: int) -> Iterator[tuple[str, Curve]]:
    for d in (1.05, 1.2, 1.5):
        yield f"trail {d}", synthetic.fractional_trail(d, vertices=vertices, seed=seed)
    level = round(np.log(vertices) / np.log(4))
    yield (
        "random-sided Koch 1.2",
        synthetic.random_koch(1.2, level=level, seed=seed).scaled(4 ** (level / 1.2)),
    )
    yield "meander", turned(synthetic.meander(1.2, bends=max(4, vertices // 64)).scaled(128), seed)


def rings(vertices: int, seed: int) -> Iterator[tuple[str, Curve]]:
    level = round(np.log(vertices / 3) / np.log(4))
    for d in (1.1, 1.26):
        island = synthetic.random_koch(d, level=level, seed=seed, island=True)
        yield f"Koch island {d}", turned(island.scaled(2 * 4 ** (level / d)), seed)
    yield "circle", synthetic.circle(vertices=400).scaled(vertices / 2 + 0.2 * seed)


def row(name: str, vertices: int, curves: list[Curve], cell: float | None = None) -> np.ndarray:
    """Print shares of lines taken for a staircase; return how many were rightly, and how many there are."""
    found = np.array([scales_of(lines_of([turned(c, 0.37 * i)]))[0, 3] for i, c in enumerate(curves)])
    right = found > 0 if cell is None else np.abs(found / cell - 1) <= 0.2
    print(f"{name:52}{vertices:9d}{len(curves):8d}{(found > 0).mean():9.3f}{right.mean():9.3f}", flush=True)
    return np.array([right.sum(), len(curves)])


def not_traced(curves: int) -> None:
    total = np.zeros(2)
    for name, draw in FAMILIES.items():
        for size in SIZES:
            several = curves if size < 20_000 else max(curves // 4, 5)
            for d in DIMENSIONS:
                total += row(f"{name} {d:.2f}", size, [draw(d, size, seed) for seed in range(several)])
    ruled = {f"Koch {d:.2f}": [synthetic.koch(d, level=n) for n in range(4, 8)] for d in DIMENSIONS}
    ruled["Gosper island"] = [synthetic.gosper_island(level=n) for n in range(4, 9)]
    ruled["gasket"] = [synthetic.gasket(level=n) for n in range(6, 10)]
    ruled["percolation"] = [synthetic.percolation_border(vertices=2_000, seed=n) for n in range(curves)]
    ruled["circles"] = [synthetic.circle(vertices=n) for n in (16, 24, 32, 100, 1000)]
    for bends, fineness in ((20, 64), (200, 8)):
        ruled[f"meanders of {bends} bends"] = [
            synthetic.meander(a, bends=bends, vertices_per_bend=fineness) for a in (0.3, 1.0, 1.6, 2.1)
        ]
    for fine, coarse in ((1, 1.3), (1.3, 1), (1, 1.5), (1.5, 1.1)):
        draw_two = partial(synthetic.two_regimes, fine, coarse, fine_level=3, coarse_level=3)
        ruled[f"two regimes {fine} {coarse}"] = [draw_two(seed=n) for n in range(20)]
    for name, some in ruled.items():
        total += row(name, int(np.mean([len(c) for c in some])), some)
    print(f"not drawn along cells: {total[0]:.0f} of {total[1]:.0f} taken for it, {total[0] / total[1]:.2%}")


def on_a_lattice() -> None:
    for name, some in {
        "quadratic Koch 1": [synthetic.quadratic_koch(1, level=n) for n in (4, 5, 6)],
        "quadratic Koch 2": [synthetic.quadratic_koch(2, level=n) for n in (3, 4, 5)],
        "Minkowski island": [synthetic.minkowski_island(level=n) for n in (4, 5, 6, 7)],
        "dragon boundary": [synthetic.dragon_boundary(level=n) for n in range(8, 16)],
        "loop-erased walk": [synthetic.loop_erased_walk(437, seed=n) for n in range(20)],
    }.items():
        row(f"on a square lattice by itself: {name}", int(np.mean([len(c) for c in some])), some)


def along_cells(curves: int) -> None:
    total = np.zeros(2)
    for size in (500, 2_000, 20_000):
        several = range(curves if size < 20_000 else max(curves // 4, 5))
        named: dict[str, list[Curve]] = {}
        for seed in several:
            for name, line in open_lines(size, seed):
                for aspect in (1.0, 0.6, 0.35):
                    for ways, diagonal in (("8 ways", True), ("4 ways", False)):
                        traced = synthetic.traced(flattened(line, 1 / aspect), CELL, diagonal=diagonal)
                        key = f"{name}, {ways}, cells 1 : {aspect}"
                        named.setdefault(key, []).append(flattened(traced, aspect))
                        named.setdefault(key + ", merged", []).append(
                            flattened(simplified(traced, 1e-9), aspect)
                        )
                    if aspect == 1.0:
                        named.setdefault(f"{name}, projected from 60", []).append(projected(traced, 60))
            for name, ring in rings(size, seed):
                outline = synthetic.polygonised(ring, CELL)
                named.setdefault(f"{name}, outline", []).append(outline)
                named.setdefault(f"{name}, outline, projected from 60", []).append(projected(outline, 60))
                for share in (0.5, 0.75, 1.0):
                    coarser = simplified(outline, share * CELL)
                    named.setdefault(f"{name}, outline, simplified by {share} cells", []).append(coarser)
        for name, some in named.items():
            long = [curve for curve in some if len(curve) > 32]
            if long:
                total += row(name, int(np.mean([len(c) for c in long])), long, CELL)
    print(f"drawn along cells: {total[0]:.0f} of {total[1]:.0f} are found, {total[0] / total[1]:.2%}")


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--curves", type=int, default=40)
    asked = parser.parse_args()
    print(f"{'line':52}{'vertices':>9}{'curves':>8}{'taken':>9}{'right':>9}")
    not_traced(asked.curves)
    on_a_lattice()
    along_cells(asked.curves)
