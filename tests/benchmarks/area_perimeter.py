"""Print what the grid does to area-perimeter dimensions, and what their intervals and verdicts are worth.

    python tests/benchmarks/area_perimeter.py --maps 40

All families have exactly known dimensions: whole clusters of site percolation at the threshold (all edges
2, outer edges 168/91, outer edges against filled area 7/4), discs (1), and islands bounded by random-sided
Koch curves, drawn into cells coarser than their smallest segments.
"""

from __future__ import annotations

import argparse

import numpy as np
import pandas as pd
import rasterio.features
import shapely
from affine import Affine
from shapely import affinity

from geofractal.estimators.area_perimeter import area_perimeter_dimension, fit_line
from geofractal.patches import raster_patches
from geofractal.synthetic.koch import random_koch

PLANE = 'LOCAL_CS["plane",UNIT["metre",1]]'
THRESHOLD = 0.592746  # 4 neighbours, Newman & Ziff 2000
SIZES = (1, 4, 10, 30, 60, 100, 200, 600)
CANVAS = 3000


def clusters(side: int, seed: int, perimeter: str) -> pd.DataFrame:
    """Return the occupied clusters of one map; 4 neighbours."""
    codes = (np.random.default_rng(seed).random((side, side)) < THRESHOLD).astype(np.uint8)
    found = raster_patches((codes, (1, 0, 0, 0, -1, 0), PLANE), neighbours=4, perimeter=perimeter)
    return found[found.cover == "1"].assign(cover="all")


def against_filled(side: int, seed: int) -> pd.DataFrame:
    found = clusters(side, seed, "outer-cell-edges")
    return found.assign(area_m2=found.filled_area_m2)


def disc(rng: np.random.Generator) -> shapely.Polygon:
    return shapely.Point(rng.random(2)).buffer(np.exp(rng.uniform(0, np.log(150))), quad_segs=64)


def island(dimension: float, rng: np.random.Generator) -> shapely.Polygon:
    """Return a random-sided Koch island of any size whose segments are a third of a cell."""
    level = int(rng.integers(3, 7))
    xy = random_koch(dimension, level=level, seed=int(rng.integers(1 << 30)), island=True).xy
    segment = np.hypot(*(xy[1] - xy[0]))
    shape = shapely.make_valid(shapely.Polygon(xy * rng.uniform(0.2, 0.5) / segment))
    parts = [part for part in shapely.get_parts(shapely.get_parts(shape)) if part.geom_type == "Polygon"]
    return affinity.rotate(max(parts, key=lambda part: part.area), rng.uniform(0, 360))


def drawn(shapes: list[shapely.Polygon], rng: np.random.Generator) -> pd.DataFrame:
    """Draw shapes into cells, side by side on large sheets, and return the largest patch of each."""
    tables, sheet, x, y, high = [], [], 2.0, 2.0, 0.0
    for shape in sorted(shapes, key=lambda shape: shape.bounds[3] - shape.bounds[1]):
        left, bottom, right, top = shape.bounds
        wide, tall = right - left + 3, top - bottom + 3
        if x + wide > CANVAS:
            x, y, high = 2.0, y + high, 0.0
        if y + tall > CANVAS:
            tables.append(_sheet(sheet))
            sheet, x, y, high = [], 2.0, 2.0, 0.0
        shift = rng.random(2)
        sheet.append(affinity.translate(shape, x - left + shift[0], y - bottom + shift[1]))
        x, high = x + np.ceil(wide) + 1, max(high, np.ceil(tall) + 1)
    tables.append(_sheet(sheet))
    return pd.concat(tables, ignore_index=True).assign(cover="all")


def _sheet(shapes: list[shapely.Polygon]) -> pd.DataFrame:
    side = int(max(max(shape.bounds[2:]) for shape in shapes)) + 4
    numbered = [(shape, number + 1) for number, shape in enumerate(shapes)]
    codes = rasterio.features.rasterize(
        numbered, (side, side), transform=Affine(1, 0, 0, 0, 1, 0), dtype="int32"
    )
    found = raster_patches((codes, (1, 0, 0, 0, 1, 0), PLANE))
    return found[found.cover != "0"].sort_values("cells").drop_duplicates("cover", keep="last")


def family(name: str, size: int, seed: int) -> tuple[pd.DataFrame, float]:
    """Return one draw of a family and its exact dimension; `size` is a map's side or a number of shapes."""
    rng = np.random.default_rng(seed)
    if name == "clusters, all edges":
        return clusters(size, seed, "cell-edges"), 2.0
    if name == "clusters, outer edges":
        return clusters(size, seed, "outer-cell-edges"), 168 / 91
    if name == "clusters, outer on filled":
        return against_filled(size, seed), 7 / 4
    if name == "discs":
        return drawn([disc(rng) for _ in range(size)], rng), 1.0
    dimension = float(name.removeprefix("islands "))
    return drawn([island(dimension, rng) for _ in range(size)], rng), dimension


CLUSTERS = ("clusters, all edges", "clusters, outer edges", "clusters, outer on filled")
SHAPES = ("discs", "islands 1.1", "islands 1.2")  # rougher random islands cross themselves


def bias_table() -> None:
    print("error of the dimension by smallest patch in cells (and patches used)")
    print(f"{'':28}" + "".join(f"{size:>16}" for size in SIZES))
    for name in (*CLUSTERS, *SHAPES):
        patches, exact = family(name, 3000 if name in CLUSTERS else 800, 1)
        whole = patches[~patches.touches_edge]
        cells = []
        for size in SIZES:
            used = whole[whole.cells >= size]
            line = fit_line(np.log(used.area_m2.to_numpy()), np.log(used.perimeter_m.to_numpy()))
            cells.append(f"{2 * line.b - exact:+9.4f} {len(used):6}")
        print(f"{name:28}" + "".join(cells))


def coverage_table(maps: int) -> None:
    print(f"\n{maps} draws each, default smallest patch")
    heads = ("patches", "answered", "covered", "bias", "spread", "width", "needed")
    print(f"{'':28}" + "".join(f"{head:>9}" for head in heads) + "  verdicts")
    print("needed: the width that holds the exact dimension in 95 % of these draws, around the fitted one")
    for name in (*CLUSTERS, *SHAPES):
        rows = []
        for seed in range(100, 100 + maps):
            patches, exact = family(name, 700 if name in CLUSTERS else 150, seed)
            rows.append(area_perimeter_dimension(patches).iloc[0])
        table = pd.DataFrame(rows)
        answered = table[table.area_perimeter_dim.notna()]
        low, high, dim = (answered[f"area_perimeter_dim{end}"] for end in ("_low", "_high", ""))
        covered = ((low <= exact + 1e-12) & (high >= exact - 1e-12)).mean()
        needed = 2 * (dim - exact).abs().quantile(0.95)
        verdicts = table.area_perimeter_verdict.value_counts().to_dict()
        print(
            f"{name:28}{table.patches_used.mean():9.0f}{len(answered) / len(table):9.2f}{covered:9.2f}"
            f"{(dim - exact).mean():+9.4f}{dim.std():9.4f}{(high - low).mean():9.4f}{needed:9.4f}"
            f"  {verdicts}"
        )


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--maps", type=int, default=40, help="draws for coverage")
    asked = parser.parse_args()
    bias_table()
    coverage_table(asked.maps)


if __name__ == "__main__":
    main()
