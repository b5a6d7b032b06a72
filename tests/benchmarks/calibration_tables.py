"""Print what dimension, interval and verdict do on curves of exactly known dimension.

Run ``python tests/benchmarks/calibration_tables.py [--quick] [--curves N] [--sizes 2000,20000] [PART ...]``;
parts are deterministic, verdicts, cost, random, rings, mapped. Families marked * were kept apart: no
constant was set on them.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np
from calibration_families import (
    DIMENSIONS,
    ONE_DIMENSION,
    RINGS,
    RINGS_OF_ONE_DIMENSION,
    SET_ON,
)

from geofractal import synthetic
from geofractal.calibration import CalibrationRow, judge_lines, lines_of, summarise
from geofractal.estimators.divider import walk
from geofractal.scaling.fit import fit_power_law
from geofractal.scaling.judge import VERDICTS, Judgement
from geofractal.scaling.ladder import divider_ladders
from geofractal.synthetic import Curve

TOGETHER = 2_000_000


def judged(draw: Callable[[int], Curve], curves: int, size: int) -> list[Judgement]:
    together = max(1, TOGETHER // size)
    return [
        judge_lines(lines_of([draw(seed) for seed in range(first, min(first + together, curves))]))[2]
        for first in range(0, curves, together)
    ]


HEAD = (
    f"{'family':24}{'D':>6}{'vertices':>9}{'decades':>8}{'bias':>8}{'spread':>8}{'cover':>7}"
    f"{'width':>7}{'ratio':>7}{'refused':>8}  power-law two-regime curved smooth"
)


def show(row: CalibrationRow) -> None:
    flags = "".join(
        flag
        for flag, wrong in (
            (" COVERAGE", row.coverage < 0.92),
            (" REFUSED", row.refused > 0.05),
            (" BIAS", abs(row.bias) > 0.02 and row.dimension <= 1.4),
            (" WIDTH", row.width_ratio > 1.5 and row.family == "fractional trails"),
            (" VERDICT", row.decades >= 1.5 and row.power_law < 0.9),
        )
        if wrong
    )
    print(
        f"{row.family:24}{row.dimension:6.2f}{row.vertices:9d}{row.decades:8.2f}{row.bias:+8.3f}"
        f"{row.spread:8.4f}{row.coverage:7.3f}{row.width:7.3f}{row.width_ratio:7.2f}{row.refused:8.3f}"
        f"  {row.power_law:9.2f} {row.two_regime:10.2f} {row.curved:6.2f} {row.smooth:6.2f}{flags}",
        flush=True,
    )


def random_families(curves: int, sizes: list[int]) -> None:
    print("\nRandom families, true D known\n" + HEAD)
    for size in sizes:
        for name, draw in SET_ON.items():
            for d in DIMENSIONS:
                show(summarise(name, d, size, judged(partial(draw, d, size), curves, size)))
        for name, (d, single) in ONE_DIMENSION.items():
            if name.startswith("loop-erased") and size > 50_000:
                continue  # needs 16 bytes times the square of the radius
            show(summarise(name, d, size, judged(partial(single, size), curves, size)))


def rings(curves: int, sizes: list[int]) -> None:
    print("\nRings\n" + HEAD)
    for size in sizes:
        for name, draw in RINGS.items():
            for d in DIMENSIONS:
                show(summarise(name, d, size, judged(partial(draw, d, size), curves, size)))
        for name, (d, single) in RINGS_OF_ONE_DIMENSION.items():
            show(summarise(name, d, size, judged(partial(single, size), curves, size)))


def mapped(curves: int, sizes: list[int]) -> None:
    """Curves as real sources hold them: 16 times as many vertices, then thinned, snapped or traced."""
    size = min(sizes)

    maps: dict[str, Callable[[Curve], Curve]] = {
        "generalised": lambda c: synthetic.generalised(c, 4 * step(c)),
        "snapped": lambda c: synthetic.snapped(c, 4 * step(c)),
        "traced, 8 ways": lambda c: synthetic.traced(c, 4 * step(c)),
        "traced, 4 ways": lambda c: synthetic.traced(c, 4 * step(c), diagonal=False),
    }
    for how, change in maps.items():
        print(f"\n{how}, drawn with {16 * size} vertices\n" + HEAD)
        for name in ("fractional trails", "random-sided Koch", "mixed Koch", "Gaussian middles"):
            draw = SET_ON[name]
            for d in DIMENSIONS:
                found = judged(lambda s, f=draw, d=d, c=change: c(f(d, 16 * size, s)), curves, 16 * size)
                show(summarise(name, d, 16 * size, found))


def exact_curves() -> list[Curve]:
    koch, dimensions = synthetic.koch, np.round(np.arange(1.05, 1.76, 0.05), 2)
    curves = [koch(d, level=8) for d in (*dimensions, np.log(4) / np.log(3))]
    curves += [koch(d, level=7, island=True) for d in (1.05, 1.2, np.log(4) / np.log(3), 1.4, 1.6)]
    curves += [synthetic.quadratic_koch(1, level=7), synthetic.quadratic_koch(2, level=5)]
    curves += [synthetic.quadratic_koch(1, level=6, island=True)]
    curves += [synthetic.quadratic_koch(2, level=5, island=True)]
    curves += [synthetic.minkowski_island(level=9), synthetic.gosper_island(level=8)]
    return [*curves, synthetic.gosper_island(level=9), synthetic.dragon_boundary(level=18)]


def deterministic() -> None:
    print("\nDeterministic curves")
    curves = exact_curves()
    _, _, found = judge_lines(lines_of(curves))
    for i, curve in enumerate(curves):
        truth = curve.dimension or np.nan
        error, held = found.dimension[i] - truth, found.low[i] <= truth <= found.high[i]
        print(
            f"{curve.source[:40]:42}{len(curve):8d}  D {truth:.4f}  found {found.dimension[i]:.4f}"
            f" [{found.low[i]:.3f}, {found.high[i]:.3f}]  error {error:+.4f}  {found.verdict_words()[i]}"
            f"{'' if held else ' OUTSIDE'}{' ERROR' if abs(error) > 0.02 and truth <= 1.4 else ''}"
        )
    changes: dict[str, Callable[[Curve], Curve]] = {
        "whole": lambda c: c,
        "a stretch of each": lambda c: Curve(c.xy[len(c) // 8 : 5 * len(c) // 7], False, c.regimes, c.source),
        "generalised": lambda c: synthetic.generalised(c, 4 * step(c)),
        "snapped": lambda c: synthetic.snapped(c, 4 * step(c)),
        "traced, 8 ways": lambda c: synthetic.traced(c, 4 * step(c)),
    }
    for how, change in changes.items():
        changed = [change(curve) for curve in curves]
        _, _, found = judge_lines(lines_of(changed))
        truth = np.array([curve.dimension for curve in curves])
        long = found.ruler_max / found.ruler_min >= 10**1.5
        given = np.isfinite(found.dimension)
        held = (found.low <= truth) & (truth <= found.high)
        print(
            f"{how:20} {given.sum()} answered, held {held[given].mean():.3f}; {long.sum()} with 1.5 decades,"
            f" power-law {(found.verdict[long] == 0).mean():.3f}"
        )


def step(curve: Curve) -> float:
    return float(np.median(np.hypot(*np.diff(curve.xy, axis=0).T)))


@dataclass
class Case:
    name: str
    draws: list[Curve]
    wanted: tuple[str, ...]
    break_at: float = np.nan
    factor: float = np.nan


def verdict_cases(curves: int) -> Iterator[Case]:
    some = min(curves, 60)
    rng = np.random.default_rng(1)
    sizes = rng.integers(300, 5000, some)
    yield Case(
        "straight lines",
        [synthetic.line(vertices=int(n), angle=rng.uniform(0, 3)) for n in sizes],
        ("smooth",),
    )
    yield Case("arcs", [synthetic.arc(rng.uniform(0.1, 5), vertices=int(n)) for n in sizes], ("smooth",))
    yield Case("circles", [synthetic.circle(vertices=int(n)) for n in sizes], ("smooth",))
    for amplitude in (0.5, 0.8, 1.1, 1.5, 1.9):
        for bends in (30, 100, 300):
            curve = synthetic.meander(amplitude, bends=bends)
            yield Case(
                f"meander {amplitude} rad, {bends} bends",
                [curve],
                ("two-regime", "curved"),
                curve.breaks[0],
                2.0,
            )
    for fine, coarse in (
        (1.0, 1.3),
        (1.3, 1.0),
        (1.1, 1.4),
        (1.4, 1.1),
        (1.05, 1.25),
        (1.5, 1.2),
        (1.2, 1.35),
    ):
        levels = [int(np.ceil(1.55 * d / np.log10(4))) + 1 for d in (fine, coarse)]
        draws = [
            synthetic.two_regimes(fine, coarse, fine_level=levels[0], coarse_level=levels[1], seed=s)
            for s in range(min(curves, 20))
        ]
        yield Case(f"two regimes {fine} | {coarse}", draws, ("two-regime",), draws[0].breaks[0], 1.5)
    for d in (1.2, 1.4, 1.6):
        yield Case(f"smooth below {d}", [smooth_below(d, s) for s in range(some)], ("two-regime",), 1.25, 1.5)
    short = [synthetic.fractional_trail(d, vertices=60, seed=s) for s in range(some) for d in (1.1, 1.5)]
    yield Case("trails of 60 vertices", short, ("too-few-scales", "power-law"))


def smooth_below(dimension: float, seed: int) -> Curve:
    """A trail of 2,000 vertices about 1.25 apart, with 64 vertices on a smooth curve between any two."""
    from scipy.interpolate import CubicSpline

    xy = synthetic.fractional_trail(dimension, vertices=2000, seed=seed).xy
    fine = CubicSpline(np.arange(len(xy)), xy)(np.arange(0, len(xy) - 1, 1 / 64))
    return Curve(np.ascontiguousarray(fine), False, (), "smooth below a scale")


def verdicts(curves: int) -> None:
    print("\nVerdicts: share of each, median D, break over the true one, share within factor and interval")
    for case in verdict_cases(curves):
        found = judge_lines(lines_of(case.draws))[2]
        shares = np.bincount(found.verdict, minlength=5) / len(found)
        right = sum(shares[VERDICTS.index(word)] for word in case.wanted)
        ratio = found.break_at / case.break_at
        within = np.mean((ratio <= case.factor) & (ratio >= 1 / case.factor))
        held = np.mean((found.break_low <= case.break_at) & (case.break_at <= found.break_high))
        dims = np.nanmedian(found.dimension)
        tail = (
            f" break x {np.nanmedian(ratio):5.2f}, within {within:.2f}, held {held:.2f}"
            if case.factor > 0
            else ""
        )
        print(
            f"{case.name:28} right {right:.2f}  "
            + " ".join(f"{w} {s:.2f}" for w, s in zip(VERDICTS, shares, strict=True))
            + f"  D {dims:.4f}{tail}"
        )
    print("\nPower laws called so, by length of ladder")
    for name, draw in SET_ON.items():
        tried: dict[float, list[tuple[bool, bool]]] = {}
        for size in (200, 500, 1000, 2000, 5000, 20_000):
            for d in (1.1, 1.2, 1.3, 1.4, 1.6) if name != "Gaussian middles" else (1.12, 1.2, 1.3, 1.4, 1.6):
                for one in judged(lambda s, f=draw, d=d, n=size: f(d, n, s), min(curves, 40), size):
                    length = np.log10(one.ruler_max / one.ruler_min)
                    for decades, code in zip(np.nan_to_num(length), one.verdict, strict=True):
                        key = float(np.floor(2 * decades) / 2)
                        tried.setdefault(key, []).append((code == 0, code == 4))
        for key in sorted(tried):
            called = np.array(tried[key])
            print(
                f"{name:24} {key:3.1f} to {key + 0.5:3.1f} decades: {len(called):5d} curves, power-law"
                f" {called[:, 0].mean():.3f}, too-few-scales {called[:, 1].mean():.3f}"
            )


def cost(curves: int) -> None:
    """What intervals and verdicts cost on lines of 600 vertices, like groups of river reaches."""
    dimensions = np.random.default_rng(0).uniform(1.05, 1.4, 100 * curves)
    draws = [synthetic.fractional_trail(d, vertices=600, seed=i) for i, d in enumerate(dimensions)]
    lines = lines_of(draws)
    judge_lines(lines_of(draws[:10]))
    seconds = {"fit alone": np.inf, "intervals and verdicts": np.inf}
    for _ in range(3):
        start = time.perf_counter()
        ladders = divider_ladders(lines)
        fit_power_law(ladders, walk(lines, ladders).length)
        seconds["fit alone"] = min(seconds["fit alone"], time.perf_counter() - start)
        start = time.perf_counter()
        found = judge_lines(lines)[2]
        seconds["intervals and verdicts"] = min(
            seconds["intervals and verdicts"], time.perf_counter() - start
        )
    ratio = seconds["intervals and verdicts"] / seconds["fit alone"]
    print(f"\n{len(lines)} lines of 600 vertices: answered {np.isfinite(found.dimension).mean():.3f}")
    print("; ".join(f"{name} {1e6 * s / len(lines):.0f} us a line" for name, s in seconds.items()), end="")
    print(f"; ratio {ratio:.2f}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument(
        "parts", nargs="*", default=["deterministic", "verdicts", "cost", "random", "rings", "mapped"]
    )
    parser.add_argument("--curves", type=int, default=200)
    parser.add_argument("--sizes", default="2000,20000,200000")
    parser.add_argument("--quick", action="store_true", help="40 curves a family, 2000 and 20000 vertices")
    asked = parser.parse_args()
    curves = 40 if asked.quick else asked.curves
    sizes = [2000, 20_000] if asked.quick else [int(n) for n in asked.sizes.split(",")]
    start = time.perf_counter()
    for part in asked.parts:
        {
            "deterministic": deterministic,
            "verdicts": lambda: verdicts(curves),
            "cost": lambda: cost(curves),
            "random": lambda: random_families(curves, sizes),
            "rings": lambda: rings(curves, sizes),
            "mapped": lambda: mapped(curves, sizes),
        }[part]()
    print(f"\n{time.perf_counter() - start:.0f} s")


if __name__ == "__main__":
    main()
