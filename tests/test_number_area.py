"""Number-area exponents: by formula, on laws of known exponent, and on percolation clusters."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from scipy import stats

from geofractal.errors import ConfigError
from geofractal.estimators.number_area import (
    Tail,
    better_alternative,
    cut_off_gain,
    fit_areas,
    fit_tail,
    lognormal_density,
    number_area_exponent,
)
from geofractal.kernels.tails import best_cut
from geofractal.patches import raster_patches


def pareto(exponent, n, seed, cut=100.0):
    return cut * np.random.default_rng(seed).random(n) ** (-1 / exponent)


def table(areas, **columns):
    return pd.DataFrame({"cover": "pond", "area_m2": areas, "touches_edge": False, **columns})


class TestFit:
    def test_exponent_by_its_formula(self):
        """K = n / sum ln(a / cut) above the cut, Clauset et al. 2009 equation 3.1 with alpha = K + 1."""
        x = np.sort(pareto(0.7, 500, 1))
        tail = fit_tail(x)
        above = x[x >= tail.cut]
        assert tail.count == len(above)
        assert tail.exponent == pytest.approx(len(above) / np.log(above / tail.cut).sum())

    def test_distance_is_scipys(self):
        x = np.sort(pareto(0.7, 500, 1))
        tail = fit_tail(x)
        logs = np.log(x[x >= tail.cut] / tail.cut)
        assert tail.distance == pytest.approx(
            stats.kstest(logs, "expon", args=(0, 1 / tail.exponent)).statistic
        )

    def test_the_cut_is_found_where_the_law_begins(self):
        """Uniform below 100, a law with K = 1 above, as many on either side."""
        rng = np.random.default_rng(3)
        x = np.sort(np.concatenate([rng.uniform(0, 100, 1000), pareto(1.0, 1000, 4)]))
        tail = fit_tail(x)
        assert 80 < tail.cut < 140
        assert tail.exponent == pytest.approx(1.0, abs=4 / np.sqrt(tail.count))

    @given(arrays.arrays(float, st.integers(60, 90), elements=st.floats(1, 1e4)))
    def test_compiled_kernel_equals_its_interpreted_twin(self, values):
        logs = np.sort(np.log(values))
        first = np.array([0, 3, 7])
        if logs[7] == logs[-1]:
            return
        compiled, twin = best_cut(logs, first), best_cut.py_func(logs, first)
        assert compiled[0] == twin[0]
        assert compiled[1:] == pytest.approx(twin[1:], rel=1e-9)

    def test_order_changes_no_bit(self):
        x = pareto(0.7, 300, 2)
        assert repr(fit_areas(x)) == repr(fit_areas(x[::-1].copy()))

    @pytest.mark.parametrize(
        "areas", [np.empty(0), np.ones(200), pareto(0.7, 49, 0), np.linspace(5, 40, 300)]
    )
    def test_too_few_scales(self, areas):
        """Nothing, equal areas, fewer than 50, less than a decade."""
        found = fit_areas(areas)
        assert found["number_area_verdict"] == "too-few-scales"
        assert np.isnan(found["number_area_exponent"])


class TestCalibration:
    def test_power_laws(self):
        """At the level of 0.1, p rules out about a tenth of true laws; intervals hold at least 95 %."""
        found = [fit_areas(pareto(0.6, 300, seed)) for seed in range(30)]
        inside = [one["number_area_exponent_low"] <= 0.6 <= one["number_area_exponent_high"] for one in found]
        assert np.mean(inside) >= 0.93
        assert np.mean([one["number_area_fit_p"] < 0.1 for one in found]) <= 0.25
        assert np.mean([one["number_area_verdict"] == "power-law" for one in found]) >= 0.7

    def test_exponential_areas_are_no_law(self):
        found = [fit_areas(np.random.default_rng(s).exponential(100, 1000) + 1) for s in range(5)]
        assert {one["number_area_verdict"] for one in found} <= {"curved", "too-few-scales"}

    def test_a_law_cut_off_is_told(self):
        rng = np.random.default_rng(5)
        x = pareto(0.6, 8000, 5, cut=1.0)
        x = x[rng.random(len(x)) < np.exp(-x / 100)]
        found = fit_areas(x)
        assert (found["number_area_verdict"], found["number_area_better"]) == ("curved", "cut-off")


class TestAlternatives:
    def test_lognormal_fits_at_least_as_well_as_its_parameters(self):
        """The log likelihood is no worse than under the parameters that drew the data."""
        y = stats.truncnorm.rvs(-1.5, np.inf, loc=1.5, scale=1.0, size=2000, random_state=1)
        truth = stats.truncnorm.logpdf(y, -1.5, np.inf, loc=1.5, scale=1.0).sum()
        assert lognormal_density(y).sum() >= truth - 1e-3

    def test_a_true_law_gains_nothing_from_a_cut_off(self):
        """Twice the gain is a chi-square with one degree of freedom, halved at the boundary: mean 1/2."""
        draws = [np.random.default_rng(seed).exponential(1 / 0.8, 300) for seed in range(60)]
        gains = [2 * cut_off_gain(y, len(y) / y.sum()) for y in draws]
        assert min(gains) >= 0
        assert np.mean(gains) < 1.0

    def test_a_lognormal_is_preferred_where_the_data_are_one(self):
        """Far above its median a lognormal bends away from any power law (Vuong 1989)."""
        above = np.sort(np.exp(stats.truncnorm.rvs(0, np.inf, scale=1.0, size=4000, random_state=3)))
        tail = Tail(1.0, 1 / np.log(above).mean(), 0.0, len(above))
        assert better_alternative(above, tail) in {"lognormal", "cut-off"}
        law = np.log(tail.exponent) - tail.exponent * np.log(above)
        assert lognormal_density(np.log(above)).sum() > law.sum()


class TestTables:
    def test_left_out_and_below_the_cut(self):
        areas = pareto(0.7, 400, 1)
        edge = np.arange(400) < 40
        found = number_area_exponent(table(areas, touches_edge=edge), smallest_area_m2=110).iloc[0]
        assert found.patches_left_out_small == (areas < 110).sum()
        assert found.patches_left_out_edge == (edge & (areas >= 110)).sum()
        counts = found[
            ["patches_used", "patches_below_cut", "patches_left_out_small", "patches_left_out_edge"]
        ]
        assert counts.sum() == 400

    def test_one_row_a_class(self):
        patches = table(pareto(0.7, 400, 1)).assign(cover=["a", "b"] * 200)
        assert number_area_exponent(patches).cover.tolist() == ["a", "b"]

    def test_no_patches_no_rows(self):
        assert "number_area_exponent" in number_area_exponent(table(np.empty(0)))

    def test_columns_that_are_not_there(self):
        with pytest.raises(ConfigError, match="lack the columns zone"):
            number_area_exponent(table(pareto(0.7, 400, 1)), by=("cover", "zone"))


def test_percolation_clusters():
    """Exceedance exponent of cluster masses tau - 1 = 96/91 with tau = 187/91 (Stauffer & Aharony; Ziff).

    Not D/2 of any area-perimeter dimension of the same clusters (2, 168/91, 7/4). Without the clusters that
    touch the map's edge the law is too steep, with them (cut short) too flat.
    """
    codes = (np.random.default_rng(7).random((1500, 1500)) < 0.592746).astype(np.uint8)
    plane = 'LOCAL_CS["plane",UNIT["metre",1]]'
    found = raster_patches((codes, (1, 0, 0, 0, -1, 0), plane), neighbours=4)
    clusters = found[found.cover == "1"]
    whole, all_of_them = (
        number_area_exponent(clusters, smallest_area_m2=10, edge_patches=edge).iloc[0]
        for edge in (False, True)
    )
    assert whole.number_area_exponent == pytest.approx(96 / 91, abs=0.1)
    assert all_of_them.number_area_exponent_low <= 96 / 91 <= whole.number_area_exponent_high
    assert all_of_them.number_area_exponent < whole.number_area_exponent
