"""Print how edge densities at a stated cell size differ between one map at three cell sizes.

    python tests/benchmarks/edge_at_cell_size.py

Maps of 10 m cells and coarser ones made of them in two ways: one cell kept of each block, or the class that
fills most of it. Printed are estimates from the 20 m and the 40 m map over that from the 10 m map, and the
half width of the 40 m map's interval; what these are set by is in `geofractal.landcover.coarse_edges`.
"""

from __future__ import annotations

import math

import numpy as np
from raster import mosaic_of_classes

from geofractal.cover_api import fragmentation

PLANE = 'LOCAL_CS["plane",UNIT["metre",1]]'
SIDE = 1024


def relief(seed: int, roughness: float) -> np.ndarray:
    """Return a Gaussian relief cut at three levels."""
    rng = np.random.default_rng(seed)
    wave = np.hypot(*np.meshgrid(np.fft.fftfreq(SIDE), np.fft.fftfreq(SIDE)))
    wave[0, 0] = 1
    heights = np.fft.ifft2(np.fft.fft2(rng.normal(size=(SIDE, SIDE))) * wave ** -(roughness + 1)).real
    return np.digitize(heights, np.quantile(heights, [0.3, 0.5, 0.8])).astype(np.uint8)


def keep_one(codes: np.ndarray, k: int) -> np.ndarray:
    return codes[k // 2 :: k, k // 2 :: k]


def keep_most(codes: np.ndarray, k: int) -> np.ndarray:
    blocks = codes.reshape(len(codes) // k, k, len(codes) // k, k)
    return np.argmax([(blocks == code).sum(axis=(1, 3)) for code in range(codes.max() + 1)], axis=0)


def density(codes: np.ndarray, cell: float, size: float) -> tuple[float, float]:
    """Return the estimate of class 1 and the half width of its interval, logarithmic."""
    source = (codes.astype(np.uint8), (cell, 0, 0, 0, -cell, 0), PLANE)
    found = fragmentation(source, covers=["1"], edge_cell_sizes_m=[size])
    row = found[found["quantity"].str.contains("cells") & found["low"].notna()].iloc[0]
    return row["estimate"], math.log(row["high"] / row["estimate"])


def main() -> None:
    maps = {f"relief, roughness {h}": relief(1, h) for h in (0.3, 0.5, 0.7, 0.9)}
    for jitter in (0.3, 1.0):
        for doublings in (3, 5):
            name = f"mosaic, jitter {jitter}, {doublings} doublings"
            maps[name] = mosaic_of_classes(SIDE, jitter=jitter, doublings=doublings, seed=1)
    print(f"{'map':32}{'made by':>10}{'size m':>8}{'20 m':>8}{'40 m':>8}{'half':>8}")
    for name, codes in maps.items():
        for make in (keep_one, keep_most):
            for size in (50.0, 80.0, 120.0):
                fine, _ = density(codes, 10, size)
                two, _ = density(make(codes, 2), 20, size)
                four, half = density(make(codes, 4), 40, size)
                print(f"{name:32}{make.__name__:>10}{size:8g}{two / fine:8.3f}{four / fine:8.3f}{half:8.3f}")


if __name__ == "__main__":
    main()
