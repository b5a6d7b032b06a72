"""Print how well the break between two regimes is placed, and how well it could be at best.

Run ``python tests/benchmarks/breaks.py [--curves N]``. The best is an oracle: generalised least squares for
the break alone, with both dimensions and the covariance of this very family's ladders known, from other
curves. It says what noise allows. What noise does not explain is where a family's hinge stands: half a
replacement below the size of the coarse pieces, a factor that no ladder tells.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable

import numpy as np

from geofractal import synthetic
from geofractal.calibration import judge_lines, lines_of
from geofractal.scaling.judge import VERDICTS
from geofractal.synthetic.koch import UNIT_SIDE, as_xy, substitute

PAIRS = ((1.0, 1.3), (1.3, 1.0), (1.1, 1.4), (1.4, 1.1), (1.05, 1.25), (1.25, 1.05), (1.5, 1.2), (1.2, 1.5))
PAIRS += ((1.2, 1.35), (1.35, 1.2))
DECADES = 1.6
WITHIN = np.log(1.5)
KNOTS = 36


def koch_pair(fine: float, coarse: float, seed: int) -> tuple[synthetic.Curve, float]:
    levels = [int(np.ceil(1.55 * d / np.log10(4))) + 1 for d in (fine, coarse)]
    curve = synthetic.two_regimes(fine, coarse, fine_level=levels[0], coarse_level=levels[1], seed=seed)
    return curve, curve.breaks[0]


def middles_pair(fine: float, coarse: float, seed: int) -> tuple[synthetic.Curve, float]:
    """Random middles of one dimension above a size and of another below it."""
    rng = np.random.default_rng(seed)
    level = int(np.ceil(1.6 * DECADES * coarse / np.log10(2)))
    points = substitute(np.array(UNIT_SIDE, dtype=complex), middle(coarse), level, rng=rng)
    finer = int(np.ceil((DECADES + 0.55) * fine / np.log10(2)))
    points = substitute(points, middle(fine), finer, rng=rng)
    return synthetic.Curve(as_xy(points), False, (), "two regimes of random middles"), 2 ** (-level / coarse)


def middle(dimension: float) -> np.ndarray:
    return np.array([0, 0.5 + 0.5j * np.sqrt(max(4 ** (1 - 1 / dimension) - 1, 0)), 1])


def oracle(x: np.ndarray, known: np.ndarray, tried: np.ndarray, fine: float, coarse: float) -> np.ndarray:
    """ln(break / true) of each of `tried`; rows of ln L on x = ln(ruler / true break)."""
    level = known - known.mean(axis=1, keepdims=True)
    covariance = np.cov(level.T)
    covariance += np.diag(0.3 * np.diag(covariance) + 0.02 * np.trace(covariance) / len(x))
    weight = np.linalg.inv(covariance)
    places = np.linspace(-1.5, 1.5, 151)
    costs = []
    for place in places:
        rest = tried - (1 - fine) * x - (fine - coarse) * np.maximum(x - place, 0)
        rest = rest - (rest @ weight.sum(axis=0) / weight.sum())[:, None]
        costs.append(np.einsum("ij,jk,ik->i", rest, weight, rest))
    return places[np.argmin(costs, axis=0)]


def measured(draw: Callable[..., tuple], fine: float, coarse: float, curves: int) -> tuple:
    """The product's ln(break / true) and verdicts, the oracle's ln(break / true), decades on either side."""
    offs, right, sides, ladders_x, ladders_y = [], [], [], [], []
    for seed in range(curves):
        curve, at = draw(fine, coarse, 500 + seed)
        ladders, rungs, found = judge_lines(lines_of([curve]))
        usable = np.isfinite(rungs.lengths) & (rungs.steps >= 4)
        ladders_x.append(np.log(ladders.rulers[usable] / at))
        ladders_y.append(np.log(rungs.lengths[usable]))
        offs.append(float(np.log(found.break_at[0] / at)))
        right.append(VERDICTS[found.verdict[0]] == "two-regime")
        sides.append(np.log10([at / found.ruler_min[0], found.ruler_max[0] / at]))
    x = np.linspace(max(v[0] for v in ladders_x), min(v[-1] for v in ladders_x), KNOTS)
    y = np.array([np.interp(x, *pair) for pair in zip(ladders_x, ladders_y, strict=True)])
    half = np.arange(curves) % 2 == 0
    best = np.empty(curves)
    best[~half] = oracle(x, y[half], y[~half], fine, coarse)
    best[half] = oracle(x, y[~half], y[half], fine, coarse)
    return np.array(offs), np.array(right), best, np.median(sides, axis=0)


def share(offsets: np.ndarray) -> float:
    return float(np.mean(np.abs(offsets) <= WITHIN))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--curves", type=int, default=24)
    curves = parser.parse_args().curves
    print(
        f"{'family':10}{'fine':>6}{'coarse':>7}{'decades':>12}  called | product: median, spread, within 1.5",
        end="",
    )
    print(" | oracle: median, spread, within 1.5 of its own median")
    best = {}
    for name, draw in (("Koch", koch_pair), ("middles", middles_pair)):
        for fine, coarse in PAIRS:
            offsets, right, ideal, sides = measured(draw, fine, coarse, curves)
            best[name, fine, coarse] = ideal
            middling = np.median(ideal)
            print(
                f"{name:10}{fine:6.2f}{coarse:7.2f}{sides[0]:7.2f}{sides[1]:5.2f}  {right.mean():6.2f}"
                f" | {np.exp(np.nanmedian(offsets)):6.2f} {np.nanstd(offsets):5.2f} {share(offsets):5.2f}"
                f" | {np.exp(middling):6.2f} {ideal.std():5.2f} {share(ideal - middling):5.2f}",
                flush=True,
            )
    shifts = np.linspace(0, 1.2, 121)
    pooled = [np.mean([share(v + shift) for v in best.values()]) for shift in shifts]
    shift = shifts[int(np.argmax(pooled))]
    print(f"\nThe oracle with one shift for all families, the best, a factor {np.exp(shift):.2f}: within 1.5")
    for (name, fine, coarse), ideal in best.items():
        print(f"{name:10}{fine:6.2f}{coarse:7.2f}  {share(ideal + shift):.2f}")


if __name__ == "__main__":
    main()
