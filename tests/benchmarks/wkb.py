"""WKB to ragged coordinates: our kernel against shapely, in milliseconds of processor (least of five).

``python tests/benchmarks/wkb.py``
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pyarrow as pa
import shapely

from geofractal.reader.geometry import read_lines


def least_ms(call: Callable[[], object], times: int = 5) -> float:
    spans = []
    for _ in range(times):
        start = time.thread_time()
        call()
        spans.append(time.thread_time() - start)
    return 1000 * min(spans)


def lines(features: int, vertices: int) -> pa.Array:
    steps = np.random.default_rng(1).normal(size=(features * vertices, 2))
    offsets = np.arange(0, features * vertices + 1, vertices)
    geometries = shapely.from_ragged_array(
        shapely.GeometryType.LINESTRING, np.cumsum(steps, axis=0), (offsets,)
    )
    return pa.array(shapely.to_wkb(geometries))


def by_shapely(array: pa.Array) -> object:
    return shapely.to_ragged_array(shapely.from_wkb(array.to_numpy(zero_copy_only=False)))


def main() -> None:
    read_lines(lines(2, 3))  # compile
    print(f"{'features x vertices':>22}{'kernel':>10}{'kept as is':>12}{'shapely':>10}{'ratio':>8}")
    for features, vertices in ((500_000, 20), (333_000, 30), (1_000, 10_000), (1, 10_000_000)):
        array = lines(features, vertices)
        ours = least_ms(lambda array=array: read_lines(array))
        kept = least_ms(lambda array=array: read_lines(array, drop_repeated=False))
        theirs = least_ms(lambda array=array: by_shapely(array), 2)
        print(
            f"{features:>9,} x {vertices:>10,}{ours:>10.0f}{kept:>12.0f}{theirs:>10.0f}{theirs / ours:>8.1f}"
        )


if __name__ == "__main__":
    main()
