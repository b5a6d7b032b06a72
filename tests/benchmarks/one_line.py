"""Time a whole ladder of divider walks on one line of 4.2 million vertices, one thread.

Run ``python tests/benchmarks/one_line.py``. The yardstick is one numpy pass over the same coordinates,
``hypot(diff(x), diff(y)).sum()``; every figure is the best of five in the same run.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np

from geofractal.estimators.divider import (
    RING_STARTS,
    DividerDimension,
    DividerOptions,
    walk,
    walk_rulers,
)
from geofractal.measure import Floats, Lines
from geofractal.scaling.ladder import Ladders, divider_ladders
from geofractal.synthetic.koch import random_koch
from geofractal.synthetic.smooth import meander
from geofractal.synthetic.trails import fractional_trail

VERTICES = 4_194_305
RUNGS = 24


def best_of_five(task: Callable[[], object]) -> float:
    """Return the least seconds that a task took."""
    seconds = []
    for _ in range(5):
        start = time.perf_counter()
        task()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def one_line(xy: Floats, *, closed: bool = False) -> Lines:
    """Return one line on a plane as a chunk."""
    count = len(xy)
    return Lines(
        rows=np.zeros(1, np.int64),
        xy=np.ascontiguousarray(xy),
        part_offsets=np.array([0, count]),
        feature_offsets=np.array([0, 1]),
        closed=np.array([closed]),
        source_vertex=np.ones(count, np.bool_),
        plane=np.zeros(1, np.uint8),
        distortion=np.zeros(1),
        radius=np.full(1, np.inf),
    )


def report(name: str, xy: Floats, *, closed: bool = False) -> None:
    """Print what a line's ladder costs, as a multiple of the numpy pass."""
    lines = one_line(xy, closed=closed)
    x, y = xy[:, 0].copy(), xy[:, 1].copy()
    ladders = divider_ladders(lines, rungs=RUNGS)
    middle = ladders.rulers[[RUNGS // 3, 2 * RUNGS // 3]]
    tasks: dict[str, Callable[[], object]] = {
        "ladder": lambda: walk(lines, ladders),
        "whole measure": lambda: DividerDimension().measure(lines, DividerOptions(rungs=RUNGS)),
        "one start each way": lambda: walk(lines, ladders, starts=1),
        "choosing the ladder": lambda: divider_ladders(lines, rungs=RUNGS),
        f"two rulers, {RING_STARTS if closed else 1} starts": lambda: walk_rulers(lines, middle),
    }
    numpy_pass = best_of_five(lambda: np.hypot(np.diff(x), np.diff(y)).sum())
    print(f"{name}: {len(xy):,} vertices, rulers {ladders.rulers[0]:.3g} to {ladders.rulers[-1]:.3g}")
    print(f"  numpy pass            {1000 * numpy_pass:8.1f} ms")
    for task, run in tasks.items():
        seconds = best_of_five(run)
        print(f"  {task:21s} {1000 * seconds:8.1f} ms  {seconds / numpy_pass:6.2f} x")


def each_rung(xy: Floats) -> None:
    """Print steps and cost rung by rung."""
    lines = one_line(xy)
    for ruler in divider_ladders(lines, rungs=RUNGS).rulers:
        ladder = Ladders(np.array([0, 1]), np.array([ruler]))
        found = walk(lines, ladder)
        seconds = best_of_five(lambda ladder=ladder: walk(lines, ladder))  # type: ignore[misc]
        print(f"  ruler {ruler:10.4g}  steps {found.steps[0]:10.0f}  {1000 * seconds:8.1f} ms")


def main() -> None:
    """Print the tables."""
    small = random_koch(1.2, level=4, seed=1).xy
    walk(one_line(small), divider_ladders(one_line(small)))
    walk_rulers(one_line(small, closed=True), np.array([0.1]))
    for dimension in (1.05, 1.25, 1.5):
        report(f"random-sided Koch, D = {dimension}", random_koch(dimension, level=11, seed=1).xy)
    trail = fractional_trail(1.25, vertices=VERTICES, seed=1).xy
    report("fractional Brownian trail, D = 1.25", trail)
    report("meander", meander(1.5, bends=VERTICES // 64, vertices_per_bend=64).xy)
    shore = random_koch(1.25, level=10, seed=1, island=True).xy
    report("random-sided Koch island, D = 1.25", shore, closed=True)
    print("rung by rung, fractional Brownian trail")
    each_rung(trail)


if __name__ == "__main__":
    main()
