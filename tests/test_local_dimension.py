"""Local dimension: the slope that numpy's own fit finds in the same window."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from geofractal.kernels.local_slopes import local_slopes
from geofractal.scaling.ladder import Ladders
from geofractal.scaling.local import WINDOW_DECADES, local_dimension


@given(st.integers(0, 2**32 - 1), st.integers(3, 30))
def test_it_is_the_fit_over_half_a_decade(seed, rungs):
    rng = np.random.default_rng(seed)
    rulers = np.geomspace(10, 10 ** rng.uniform(1.3, 4), rungs)
    lengths = np.exp(rng.normal(size=rungs).cumsum() / 10)
    lengths[rng.random(rungs) < 0.1] = np.nan
    found = local_dimension(Ladders(np.array([0, rungs]), rulers), lengths)
    for i, ruler in enumerate(rulers):
        near = np.abs(np.log10(rulers / ruler)) <= WINDOW_DECADES / 2 * (1 + 1e-9)
        near &= np.isfinite(lengths)
        if near.sum() < 3 or np.isnan(lengths[i]):
            assert np.isnan(found[i])
        else:
            slope = np.polyfit(np.log(rulers[near]), np.log(lengths[near]), 1)[0]
            np.testing.assert_allclose(found[i], 1 - slope, atol=1e-8)


def test_ladders_do_not_see_each_other():
    rulers = np.geomspace(1, 10, 9)
    both = Ladders(np.array([0, 9, 18]), np.concatenate([rulers, rulers]))
    found = local_dimension(both, np.concatenate([rulers**-0.2, rulers**-0.4]))
    np.testing.assert_allclose(found, np.repeat([1.2, 1.4], 9), atol=1e-12)


@given(st.integers(0, 2**32 - 1))
def test_the_kernel_equals_its_interpreted_twin(seed):
    rng = np.random.default_rng(seed)
    offsets = np.array([0, 4, 4, 15])
    x = np.concatenate([np.sort(rng.normal(size=4)), np.sort(rng.normal(size=11))])
    y = np.where(rng.random(15) < 0.2, np.nan, rng.normal(size=15))
    compiled, interpreted = (f(offsets, x, y, 0.8) for f in (local_slopes, local_slopes.py_func))
    np.testing.assert_allclose(compiled, interpreted, rtol=1e-12)
