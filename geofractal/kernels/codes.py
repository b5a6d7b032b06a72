"""Remap a raster's own class codes to small class indices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

UNSEEN = -2


@kernel
def remap_by_table(
    values: NDArray[np.unsignedinteger], table: NDArray[np.int16], out: NDArray[np.int16]
) -> int:
    """Fill `out` with the class index of each value; return the first place without one, or -1."""
    for i in range(values.size):
        out[i] = table[values[i]]
        if out[i] == UNSEEN:
            return i
    return -1


@kernel
def remap_by_search(
    values: NDArray[np.int64], known: NDArray[np.int64], index: NDArray[np.int16], out: NDArray[np.int16]
) -> int:
    """Do as `remap_by_table` for wide codes: `known` is sorted and not empty, `index` its class indices."""
    last, last_index = known[0], index[0]
    for i in range(values.size):
        if values[i] != last:
            at = np.searchsorted(known, values[i])
            if at == known.size or known[at] != values[i]:
                return i
            last, last_index = known[at], index[at]
        out[i] = last_index
    return -1


@kernel
def count_codes(codes: NDArray[np.int16], counts: NDArray[np.int64]) -> None:
    """Add the cells of each class index to ``counts[index + 1]``; index -1 is no class."""
    for i in range(codes.shape[0]):
        counts[codes[i] + 1] += 1
