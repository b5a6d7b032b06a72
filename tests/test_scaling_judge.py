"""What a ladder is evidence of: exact laws come out exactly, and known curves are told apart."""

import math
from dataclasses import fields

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from geofractal import synthetic
from geofractal.calibration import judge_lines, lines_of
from geofractal.kernels import ladder_evidence, ladder_fields, ladder_judge, ladder_models
from geofractal.scaling.calibrated import BOX, DIVIDER
from geofractal.scaling.judge import VERDICTS, Rungs, judge
from geofractal.scaling.ladder import Ladders

STRETCHES = ladder_judge.STRETCHES


def laid(rulers, lengths, *, open_parts=0.0, detail=0.0, left_out=None):
    """Judge one feature with the given L(r); even steps over its stretches, rings unless stated."""
    rulers, lengths = np.asarray(rulers, float), np.asarray(lengths, float)
    steps = lengths / rulers
    tallies = np.repeat(np.nan_to_num(steps)[:, None] / STRETCHES, STRETCHES, axis=1)
    rungs = Rungs(
        lengths,
        steps,
        np.full(len(rulers), np.nan),
        tallies,
        np.zeros(len(rulers)) if left_out is None else np.asarray(left_out, float),
        np.array([detail]),
        np.array([open_parts]),
    )
    return judge(Ladders(np.array([0, len(rulers)]), rulers), rungs)


RULERS = np.geomspace(1, 1000, 37)


@settings(max_examples=40, deadline=None)
@given(st.floats(1.02, 1.95), st.floats(1e8, 1e12), st.floats(1e-3, 1e3))
def test_an_exact_power_law_comes_out_exactly_in_any_unit(dimension, content, unit):
    """L(r) = C r^(1 - D); in another unit of length C changes by unit^D and nothing else."""
    found = laid(RULERS * unit, content * RULERS ** (1 - dimension) * unit)
    assert found.verdict_words() == ["power-law"]
    assert found.dimension[0] == pytest.approx(dimension, abs=1e-9)
    assert found.content[0] == pytest.approx(content * unit**dimension, rel=1e-7)
    assert found.log10_content[0] == pytest.approx(math.log10(content * unit**dimension), rel=1e-7)
    assert found.low[0] - 1e-9 <= dimension <= found.high[0] + 1e-9
    assert [found.ruler_min[0], found.ruler_max[0]] == pytest.approx([unit, 1000 * unit])


def test_length_at_a_ruler_follows_the_fit_inside_the_ladder_only():
    found = laid(RULERS, 1e6 * RULERS**-0.25)
    middle, low, high = found.length_at(50.0)
    assert middle[0] == pytest.approx(1e6 * 50**-0.25)
    assert low[0] <= middle[0] <= high[0]
    assert np.isnan(found.length_at(0.5)[0][0])
    assert np.isnan(found.length_at(1001.0)[0][0])
    beyond = found.length_at(5000.0, extrapolate=True)
    assert beyond[0][0] == pytest.approx(1e6 * 5000**-0.25)
    assert beyond[1][0] < beyond[0][0] < beyond[2][0]


@settings(max_examples=40, deadline=None)
@given(st.floats(1.0, 1.9), st.floats(0.05, 0.499), st.integers(2, 40))
def test_less_than_half_a_decade_is_always_too_few_scales(dimension, decades, rungs):
    rulers = np.geomspace(1, 10**decades, rungs)
    found = laid(rulers, 1e6 * rulers ** (1 - dimension))
    assert found.verdict_words() == ["too-few-scales"]
    assert np.isnan([found.dimension[0], found.low[0], found.high[0], found.content[0]]).all()


@pytest.mark.parametrize(
    "lengths", [np.full(37, np.nan), np.where(RULERS < 3, 1e6, np.nan), np.full(37, 3.0)]
)
def test_nothing_walked_or_too_few_steps_are_too_few_scales(lengths):
    assert laid(RULERS, lengths).verdict_words() == ["too-few-scales"]


def test_rungs_that_leave_parts_out_are_not_used():
    """From 100 m on a fifth of the length is in parts that are too short."""
    lengths = np.where(RULERS < 100, 1e6, 0.8e6) * RULERS**-0.2
    found = laid(RULERS, lengths, left_out=np.where(RULERS < 100, 0, 0.2e6))
    assert found.dimension[0] == pytest.approx(1.2, abs=1e-9)
    assert found.ruler_max[0] < 100


@pytest.mark.parametrize(("fine", "coarse"), [(1.05, 1.35), (1.4, 1.1), (1.0, 1.3)])
def test_a_hinge_is_two_regimes_with_both_dimensions(fine, coarse):
    lengths = 1e7 * RULERS ** (1 - fine) * np.maximum(RULERS / 30, 1) ** (fine - coarse)
    found = laid(RULERS, lengths)
    assert found.verdict_words() == ["two-regime"]
    assert [found.fine_dimension[0], found.coarse_dimension[0]] == pytest.approx([fine, coarse], abs=0.02)
    assert found.break_low[0] < 30 < found.break_high[0]
    assert found.low[0] <= min(fine, coarse) + 0.02
    assert found.high[0] >= max(fine, coarse) - 0.02


def test_a_ripple_is_no_break():
    """ln L with a ripple of period ln 3, as curves made of thirds have."""
    lengths = 1e7 * RULERS**-0.26 * np.exp(0.05 * np.sin(2 * np.pi * np.log(RULERS) / np.log(3)))
    assert laid(RULERS, lengths).verdict_words() == ["power-law"]


def test_an_even_bend_is_curved():
    lengths = 1e7 * np.exp(-0.08 * np.log(RULERS) ** 2)
    found = laid(RULERS, lengths)
    assert found.verdict_words() == ["curved"]
    assert found.fine_dimension[0] < found.dimension[0] < found.coarse_dimension[0]


def test_no_feature_and_empty_ladders_give_no_figures():
    empty = Rungs(
        *(np.zeros(0) for _ in range(3)), np.zeros((0, STRETCHES)), *(np.zeros(0) for _ in range(3))
    )
    assert len(judge(Ladders(np.zeros(1, np.int64), np.zeros(0)), empty)) == 0
    one = Rungs(
        *(np.zeros(0) for _ in range(3)), np.zeros((0, STRETCHES)), np.zeros(0), np.ones(1), np.ones(1)
    )
    assert judge(Ladders(np.zeros(2, np.int64), np.zeros(0)), one).verdict_words() == ["too-few-scales"]


DETERMINISTIC = [
    synthetic.koch(1.1, level=8),
    synthetic.koch(level=8),
    synthetic.koch(1.4, level=8),
    synthetic.minkowski_island(level=9),
    synthetic.gosper_island(level=8),
]


@pytest.fixture(scope="module")
def deterministic():
    return judge_lines(lines_of(DETERMINISTIC))[2]


@pytest.mark.parametrize("i", range(len(DETERMINISTIC)), ids=[c.source[:24] for c in DETERMINISTIC])
def test_exactly_known_curves(deterministic, i):
    """Koch ln 4 / ln 3, three pieces ln 3 / ln sqrt 5, Gosper 2 ln 3 / ln 7 (Mandelbrot 1982)."""
    truth = DETERMINISTIC[i].dimension
    assert deterministic.dimension[i] == pytest.approx(truth, abs=0.02)
    assert deterministic.low[i] <= truth <= deterministic.high[i]


def test_the_ripple_of_exact_curves_is_no_break(deterministic):
    """Made of equal pieces, they are power laws with a wave in ln L of period ln ratio (Moran 1946)."""
    assert deterministic.verdict_words() == ["power-law"] * len(DETERMINISTIC)
    island = synthetic.koch(1.4, level=7, island=True)
    assert judge_lines(lines_of([island]))[2].verdict_words() == ["power-law"]


@pytest.mark.parametrize("period", [0.9, 1.4, 1.8])
@pytest.mark.parametrize("phase", range(0, 6, 2))
def test_a_ripple_of_any_phase_is_no_break(period, phase):
    wave = np.sin(2 * np.pi * np.log(RULERS) / period + phase)
    found = laid(RULERS, 1e7 * RULERS**-0.3 * np.exp(0.1 * wave))
    assert found.verdict_words() == ["power-law"]


def test_rings_drawn_from_open_curves_are_found_like_them():
    """Four random middles of D = 1.1 (Moran 1946) about a square: a ring's turning back is taken out."""
    corners = np.exp(-0.5j * np.pi * np.arange(5))
    rings = []
    for seed in range(12):
        sides = [synthetic.random_midpoint(1.1, level=9, seed=4 * seed + i).xy @ [1, 1j] for i in range(4)]
        points = [corners[i] + (corners[i + 1] - corners[i]) * sides[i][:-1] for i in range(4)]
        ring = np.concatenate([*points, corners[:1]])
        rings.append(synthetic.Curve(np.column_stack([ring.real, ring.imag]), True, (), "four sides"))
    found = judge_lines(lines_of(rings))[2]
    assert found.dimension.mean() == pytest.approx(1.1, abs=0.01)
    assert ((found.low <= 1.1) & (found.high >= 1.1)).all()


def test_lines_and_arcs_are_smooth():
    curves = [synthetic.line(vertices=n, angle=a) for n, a in ((400, 0.0), (3000, 1.0))]
    curves += [synthetic.arc(turn, vertices=2000) for turn in (0.3, 1.0, 4.0)]
    curves += [synthetic.circle(vertices=3000)]
    found = judge_lines(lines_of(curves))[2]
    assert found.verdict_words() == ["smooth"] * len(curves)
    assert (found.dimension <= 1.01).all()


@pytest.mark.parametrize("amplitude", [0.5, 1.0, 1.5])
def test_a_meander_is_no_power_law_and_breaks_at_its_bends(amplitude):
    """Sine-generated curve (Langbein & Leopold 1966): half its valley wavelength, within a factor 2."""
    curve = synthetic.meander(amplitude, bends=100)
    found = judge_lines(lines_of([curve]))[2]
    assert found.verdict_words() == ["two-regime"]
    assert 0.5 < found.break_at[0] / curve.breaks[0] < 2


def test_rough_above_and_below_a_scale_are_two_regimes():
    curves = [
        synthetic.two_regimes(fine, coarse, fine_level=4, coarse_level=4, seed=1)
        for fine, coarse in ((1.0, 1.3), (1.4, 1.1))
    ]
    assert judge_lines(lines_of(curves))[2].verdict_words() == ["two-regime"] * 2


@pytest.mark.parametrize(("fine", "coarse"), [(1.0, 1.3), (1.4, 1.1)])
def test_a_break_is_placed_within_a_factor_1_5(fine, coarse):
    """Random-sided Koch curves with more than 1.5 decades on either side of the length of their pieces."""
    levels = [math.ceil(1.55 * d / math.log10(4)) + 1 for d in (fine, coarse)]
    for seed in range(3):
        curve = synthetic.two_regimes(fine, coarse, fine_level=levels[0], coarse_level=levels[1], seed=seed)
        found = judge_lines(lines_of([curve]))[2]
        assert found.verdict_words() == ["two-regime"]
        assert 1 / 1.5 < found.break_at[0] / curve.breaks[0] < 1.5


def test_intervals_of_trails_hold_the_truth():
    """D = 1 / H (Falconer, ch. 16); of 60 draws at 95 % at least 52 with probability 0.997 (binomial)."""
    draws = [synthetic.fractional_trail(1.3, vertices=2000, seed=seed) for seed in range(60)]
    found = judge_lines(lines_of(draws))[2]
    held = (found.low <= 1.3) & (found.high >= 1.3)
    assert held.sum() >= 52
    assert (found.spread < found.error).all()


def test_verdict_codes_and_constants_are_in_step():
    assert len(VERDICTS) == 5
    codes = ("POWER_LAW", "TWO_REGIME", "CURVED", "SMOOTH", "TOO_FEW")
    assert [getattr(ladder_fields, code) for code in codes] == list(range(5))
    assert BOX._fields == DIVIDER._fields
    assert all(math.isfinite(value) for value in (*DIVIDER, *BOX))
    assert {field.name for field in fields(Rungs)} >= {"lengths", "steps", "tallies"}


def test_compiled_kernels_agree_with_their_interpreted_twins(monkeypatch):
    curves = [synthetic.meander(1.2, bends=20), synthetic.koch(level=5), synthetic.line(vertices=90)]
    curves += [synthetic.two_regimes(1.0, 1.3, fine_level=3, coarse_level=3, seed=1)]
    curves += [synthetic.fractional_trail(1.4, vertices=n, seed=n) for n in (60, 700)]
    ladders, rungs, compiled = judge_lines(lines_of(curves))
    for module in (ladder_evidence, ladder_models, ladder_judge):
        for name, function in list(vars(module).items()):
            if hasattr(function, "py_func"):
                monkeypatch.setattr(module, name, function.py_func)
    monkeypatch.setattr("geofractal.scaling.judge.judge_ladders", ladder_judge.judge_ladders)
    monkeypatch.setattr("geofractal.scaling.judge.used_rungs", ladder_judge.used_rungs)
    interpreted = judge(ladders, rungs)
    for field in fields(compiled):
        one, other = getattr(compiled, field.name), getattr(interpreted, field.name)
        assert other == pytest.approx(one, rel=1e-6, nan_ok=True)
