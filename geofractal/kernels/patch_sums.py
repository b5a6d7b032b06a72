"""Sums over patches by group, exact whatever their order."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from geofractal.kernels.jit import kernel

Ints = NDArray[np.int64]

DIGIT = 31
LIMBS = 4
"""Products of areas are kept as sums of digits to the base 2^31, since they outgrow 64 bits."""


@kernel
def add_products(group: Ints, one: Ints, other: Ints, limbs: Ints) -> None:
    """Add one[i] * other[i] to row group[i] of `limbs`, (groups, LIMBS); factors are below 2^62."""
    mask = (1 << DIGIT) - 1
    for i in range(len(group)):
        a0, a1 = one[i] & mask, one[i] >> DIGIT
        b0, b1 = other[i] & mask, other[i] >> DIGIT
        low, middle, more, high = a0 * b0, a0 * b1, a1 * b0, a1 * b1
        row = group[i]
        limbs[row, 0] += low & mask
        limbs[row, 1] += (low >> DIGIT) + (middle & mask) + (more & mask)
        limbs[row, 2] += (middle >> DIGIT) + (more >> DIGIT) + (high & mask)
        limbs[row, 3] += high >> DIGIT


@kernel
def add_sums(group: Ints, values: Ints, sums: Ints) -> None:
    """Add the columns of `values` to rows of `sums`; rows whose group is negative are left out."""
    for i in range(len(group)):
        if group[i] >= 0:
            for k in range(values.shape[1]):
                sums[group[i], k] += values[i, k]


@kernel
def raise_largest(group: Ints, values: Ints, largest: Ints) -> None:
    """Bring `largest` up to the largest value of each group; negative groups are left out."""
    for i in range(len(group)):
        if group[i] >= 0 and values[i] > largest[group[i]]:
            largest[group[i]] = values[i]


@kernel
def fill_buckets(bucket: Ints, values: Ints, bucketed: Ints, offsets: Ints) -> None:
    """Bring values together by bucket, in their order; bucket i owns offsets[i]:offsets[i + 1]."""
    for i in range(len(bucket)):
        offsets[bucket[i] + 1] += 1
    for k in range(len(offsets) - 1):
        offsets[k + 1] += offsets[k]
    place = offsets[:-1].copy()
    for i in range(len(bucket)):
        bucketed[place[bucket[i]]] = values[i]
        place[bucket[i]] += 1
