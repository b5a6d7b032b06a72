"""Print what box counting of raster cells finds on maps of exactly known dimension, and on maps without one.

Run ``python tests/benchmarks/box_cells.py [--maps N] [--sides 200 400 ...] [PART ...]``; parts: set, kept,
other. The constants were set on the families of `set` and on `other`, with other seeds; those of `kept` were
first looked at when the constants stood. A map of s cells a side has boxes of 4 to s / 8 cells: 0.8 decades
at 200, 1.1 at 400, 1.5 at 1,000 and 1.8 at 2,000.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np
from scipy import ndimage

sys.path.insert(0, str(Path(__file__).parents[2]))

from geofractal import synthetic
from geofractal.calibration import FAMILIES
from geofractal.estimators.box_cells import cell_dimensions, count_cells

Map = Callable[[int, np.random.Generator], np.ndarray]
OPEN = 0.592746
"""Share of open cells at which clusters of neighbours by a side become critical (as quoted by Ziff)."""


def seed(rng: np.random.Generator) -> int:
    return int(rng.integers(1 << 31))


def drawn(xy: np.ndarray, side: int, rng: np.random.Generator) -> np.ndarray:
    """Return the cells that a line passes through, turned and placed at random on a map."""
    turn = rng.uniform(0, 2 * np.pi)
    xy = xy @ np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]])
    xy = (xy - xy.min(axis=0)) * (side - 3) / np.ptp(xy, axis=0).max()
    xy += rng.uniform(0, 1, 2) * (side - 1 - xy.max(axis=0))
    pieces = np.maximum(np.ceil(np.hypot(*np.diff(xy, axis=0).T) / 0.35).astype(int), 1)
    at = np.repeat(np.arange(len(pieces)), pieces)
    share = (np.arange(pieces.sum()) - np.repeat(np.cumsum(pieces) - pieces, pieces)) / pieces[at]
    columns, rows = (xy[at] + (xy[at + 1] - xy[at]) * share[:, None]).astype(int).T
    cells = np.zeros((side, side), bool)
    cells[rows, columns] = True
    return cells


def vertices(side: int, dimension: float) -> int:
    """Return how many make steps shorter than a cell."""
    return int(np.clip(1.5 * (1.5 * side) ** dimension, 3_000, 1_500_000))


def line(family: str, dimension: float) -> tuple[Map, float]:
    draw = FAMILIES[family]
    return (
        lambda side, rng: drawn(draw(dimension, vertices(side, dimension), seed(rng)).xy, side, rng),
        dimension,
    )


def cluster(side: int, rng: np.random.Generator) -> np.ndarray:
    labels, _ = ndimage.label(rng.random((side, side)) < OPEN)
    return labels == np.bincount(labels.ravel())[1:].argmax() + 1


def hull(side: int, rng: np.random.Generator) -> np.ndarray:
    return drawn(synthetic.percolation_border(vertices=vertices(side, 1.75), seed=seed(rng)).xy, side, rng)


def walk(side: int, rng: np.random.Generator) -> np.ndarray:
    return drawn(synthetic.loop_erased_walk(side, seed=seed(rng)).xy, side, rng)


def window(cells: np.ndarray, side: int, rng: np.random.Generator) -> np.ndarray:
    """Cut a window at random that holds a fair part of a map that is too large."""
    for _ in range(50):
        row, column = rng.integers(0, len(cells) - side + 1, 2)
        cut = cells[row : row + side, column : column + side]
        if cut.mean() > 0.3 * cells.mean():
            break
    return cut


def random_carpet(parts: int, kept: int) -> tuple[Map, float]:
    def draw(side: int, rng: np.random.Generator) -> np.ndarray:
        level = int(np.ceil(np.log(side) / np.log(parts) - 1e-9))
        return window(synthetic.random_carpet(parts, kept, level=level, seed=seed(rng)).cells, side, rng)

    return draw, np.log(kept) / np.log(parts)


def ruled_carpet(pattern: np.ndarray) -> tuple[Map, float]:
    def draw(side: int, rng: np.random.Generator) -> np.ndarray:
        level = int(np.ceil(np.log(side) / np.log(len(pattern)) - 1e-9))
        return np.rot90(window(synthetic.carpet(pattern, level=level).cells, side, rng), rng.integers(4))

    return draw, np.log(pattern.sum()) / np.log(len(pattern))


def edge(draw: Map) -> Map:
    def cells(side: int, rng: np.random.Generator) -> np.ndarray:
        whole = draw(side, rng)
        return whole & ~ndimage.binary_erosion(whole, border_value=1)

    return cells


def ground(hurst: float) -> Map:
    """Above the median of a rough surface: its level lines have dimension 2 - H (Falconer, ch. 16)."""

    def draw(side: int, rng: np.random.Generator) -> np.ndarray:
        reach = np.hypot(np.fft.fftfreq(2 * side)[:, None], np.fft.rfftfreq(2 * side))
        reach[0, 0] = np.inf
        noise = np.fft.rfft2(rng.standard_normal((2 * side, 2 * side)))
        height = np.fft.irfft2(noise * reach ** -(hurst + 1))[:side, :side]
        return height > np.median(height)

    return draw


def disc(side: int, rng: np.random.Generator) -> np.ndarray:
    radius = rng.uniform(0.25, 0.48) * side
    row, column = rng.uniform(radius, side - radius, 2)
    y, x = np.ogrid[:side, :side]
    return (y - row) ** 2 + (x - column) ** 2 < radius**2


def squares(size: int, share: float) -> Map:
    def draw(side: int, rng: np.random.Generator) -> np.ndarray:
        cells = np.zeros((side, side), bool)
        number = int(-np.log(1 - share) * (side / size) ** 2)
        for row, column in rng.integers(0, side - size + 1, (number, 2)):
            cells[row : row + size, column : column + size] = True
        return cells

    return draw


def stripes(width: int, gap: int) -> Map:
    return lambda side, rng: np.tile((np.arange(side) + seed(rng)) % (width + gap) < width, (side, 1))


def points(share: float) -> Map:
    return lambda side, rng: rng.random((side, side)) < share


def blown_up(radius: int) -> Map:
    trail = line("fractional trails", 1.2)[0]
    return lambda side, rng: ndimage.distance_transform_edt(~trail(side, rng)) <= radius


def straight(side: int, rng: np.random.Generator) -> np.ndarray:
    return drawn(np.array([[0.0, 0.0], [1.0, 0.0]]), side, rng)


def blobs(side: int, rng: np.random.Generator) -> np.ndarray:
    return ndimage.gaussian_filter(rng.standard_normal((side, side)), 0.06 * side, mode="wrap") > 0


SET: dict[str, tuple[Map, float | None]] = {
    **{f"fractional trails {d}": line("fractional trails", d) for d in (1.1, 1.3, 1.5, 1.7)},
    **{f"random middles {d}": line("random middles", d) for d in (1.05, 1.2, 1.4)},
    "percolation clusters": (cluster, 91 / 48),
    **{f"random carpets {b}, {k}": random_carpet(b, k) for b, k in ((2, 3), (3, 6), (3, 4), (4, 6))},
    **{f"edge of ground, H {h}": (edge(ground(h)), 2 - h) for h in (0.7, 0.4)},
}
KEPT: dict[str, tuple[Map, float | None]] = {
    **{f"mixed Koch {d}": line("mixed Koch", d) for d in (1.15, 1.35, 1.5)},
    **{f"random-sided Koch {d}": line("random-sided Koch", d) for d in (1.1, 1.25, 1.45)},
    **{f"fractional trails {d}": line("fractional trails", d) for d in (1.2, 1.4, 1.6)},
    "loop-erased walks": (walk, 1.25),
    "percolation borders": (hull, 1.75),
    **{f"random carpets {b}, {k}": random_carpet(b, k) for b, k in ((2, 2), (3, 7), (3, 5), (5, 15))},
    "gasket": ruled_carpet(synthetic.GASKET),
    "carpet": ruled_carpet(synthetic.CARPET),
    "edge of ground, H 0.55": (edge(ground(0.55)), 1.45),
}
OTHER: dict[str, tuple[Map, float | None]] = {
    "filled": (lambda side, _: np.ones((side, side), bool), 2.0),
    "straight lines": (straight, 1.0),
    "edges of discs": (edge(disc), 1.0),
    "discs": (disc, None),
    "rounded blobs": (blobs, None),
    **{f"points, share {q}": (points(q), None) for q in (0.01, 0.003, 0.001)},
    **{f"squares of {n}, share {q}": (squares(n, q), None) for n, q in ((12, 0.1), (12, 0.3), (24, 0.05))},
    "edges of squares of 24": (edge(squares(24, 0.2)), None),
    **{f"stripes {a} and {b}": (stripes(a, b), None) for a, b in ((4, 25), (20, 20), (12, 60))},
    **{f"trails 1.2, {r} cells wide": (blown_up(r), None) for r in (8, 20)},
}


def show(families: dict[str, tuple[Map, float | None]], sides: list[int], maps: int, first: int) -> None:
    print(
        f"{'family':26}{'side':>6}{'D':>7}{'bias':>8}{'spread':>8}{'width':>7}{'cover':>7}"
        f"{'q = 1':>15}{'q = 2':>15}  verdicts"
    )
    for side in sides:
        for name, (draw, truth) in families.items():
            number = min(maps, max(10, int(maps * (400 / side) ** 2)))
            rngs = (np.random.default_rng([first, k, side]) for k in range(number))
            found = [cell_dimensions(count_cells(draw(side, rng))) for rng in rngs]
            words = Counter(one.found.verdict for one in found)
            said = "  ".join(f"{word} {count / number:.2f}" for word, count in words.most_common())
            breaks = [one.found.break_at for one in found if np.isfinite(one.found.break_at)]
            said += f"  (break {np.median(breaks):.0f})" if breaks and truth is None else ""
            print(f"{name:26}{side:6d}{_figures(found, truth)}  {said}", flush=True)


def _figures(found: list, truth: float | None) -> str:
    rows = [(one.found[1:4], one.information, one.correlation) for one in found]
    table = np.array(rows)[[one.found.verdict != "too-few-scales" for one in found]]
    if not len(table):
        return f"{'':65}"
    middle, low, high = table[:, 0].T
    width = (high - low).mean()
    if truth is None:
        return f"{middle.mean():7.2f}{'':8}{middle.std():8.3f}{width:7.3f}{'':37}"
    inside = ((table[:, :, 1] <= truth) & (truth <= table[:, :, 2])).mean(axis=0)
    bias = table[:, :, 0].mean(axis=0) - truth
    text = f"{truth:7.3f}{bias[0]:+8.3f}{middle.std():8.3f}{width:7.3f}{inside[0]:7.2f}"
    return text + "".join(f"{bias[q]:+9.3f}{inside[q]:6.2f}" for q in (1, 2))


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("parts", nargs="*", default=["set", "kept", "other"])
    parser.add_argument("--maps", type=int, default=40, help="fewer on maps above 400 cells a side")
    parser.add_argument("--sides", type=int, nargs="*", default=[100, 200, 400, 1000, 2000])
    asked = parser.parse_args()
    for part in asked.parts:
        print(f"\n{part}")
        families = {"set": (SET, 500), "kept": (KEPT, 600), "other": (OTHER, 700)}[part]
        show(families[0], asked.sides, asked.maps, families[1])
