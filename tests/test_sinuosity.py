"""Sinuosity at a stated ruler: L(r) over the distance from end to end."""

import math

import numpy as np
import pytest
from scipy.special import j0
from test_divider import lines_of, wander

from geofractal.estimators.sinuosity import Sinuosity, SinuosityOptions
from geofractal.testing import check_measure

EARTH = 6_371_000.0


def sinuosity(*features, ruler_m=None, **kind):
    return Sinuosity().measure(lines_of(*features, **kind), SinuosityOptions(ruler_m=ruler_m))


def sine_generated(swing, bends=10, count=4000):
    """Return a sine-generated curve: direction = swing x sin(2 pi s), s the share of a bend."""
    s = (np.arange(bends * count) + 0.5) / count
    steps = np.exp(1j * swing * np.sin(2 * np.pi * s)) / count
    points = np.concatenate(([0], np.cumsum(steps)))
    return np.column_stack([points.real, points.imag])


@pytest.mark.parametrize("options", [None, SinuosityOptions(ruler_m=100.0)])
def test_it_keeps_the_contract(options):
    check_measure(Sinuosity, options)


def test_a_straight_line_has_sinuosity_one():
    straight = np.linspace(0, 1, 300)[:, None] * [3000.0, 4000.0]
    found = sinuosity(straight, ruler_m=70.0)
    assert found["sinuosity"][0] == pytest.approx(1, rel=1e-9)
    assert found["sinuosity_length_km"][0] == pytest.approx(5)
    assert found["sinuosity_end_to_end_km"][0] == pytest.approx(5)
    assert found["sinuosity_ruler_m"][0] == 70
    assert found["sinuosity_note"][0] is None


@pytest.mark.parametrize("ruler", [0.01, 0.1, 0.7])
def test_a_semicircle_is_walked_by_chords(ruler):
    angle = np.linspace(0, np.pi, 200_001)
    half = np.column_stack([np.cos(angle), np.sin(angle)])
    # a chord r spans 2 asin(r / 2); what is left of pi has its own chord
    turn = 2 * math.asin(ruler / 2)
    steps = int(math.pi / turn)
    length = steps * ruler + 2 * math.sin((math.pi - steps * turn) / 2)
    found = sinuosity(half, ruler_m=ruler)["sinuosity"][0]
    assert found == pytest.approx(length / 2, rel=1e-6)
    assert found == pytest.approx(math.pi / 2, rel=ruler**2 / 20)


@pytest.mark.parametrize("degrees", [40, 70, 90, 110])
def test_a_sine_generated_meander_has_sinuosity_one_over_j0(degrees):
    # Langbein & Leopold 1966, US Geological Survey Professional Paper 422-H, give the curve;
    # the mean of cos(w sin t) over a turn is J0(w)
    swing = math.radians(degrees)
    found = sinuosity(sine_generated(swing), ruler_m=0.002)["sinuosity"][0]
    assert found == pytest.approx(1 / j0(swing), rel=1e-4)


def test_a_longer_ruler_finds_less_of_a_bend():
    curve = sine_generated(math.radians(90))
    short, long = (sinuosity(curve, ruler_m=ruler)["sinuosity"][0] for ruler in (0.01, 0.3))
    assert 1 < long < short


def test_without_a_ruler_the_source_decides_and_the_column_says_so():
    regular = np.column_stack([np.arange(500.0) * 10, np.zeros(500)])
    assert sinuosity(regular)["sinuosity_ruler_m"][0] == pytest.approx(30)


def test_on_the_globe_both_lengths_are_arcs():
    angle = np.linspace(0, np.pi / 2, 3000)
    equator = EARTH * np.column_stack([np.cos(angle), np.sin(angle), 0 * angle])
    found = sinuosity(equator, ruler_m=100_000.0, radius=EARTH)
    assert found["sinuosity"][0] == pytest.approx(1, rel=1e-6)
    assert found["sinuosity_end_to_end_km"][0] == pytest.approx(EARTH / 1000 * math.pi / 2)


def ring():
    angle = np.linspace(0, 2 * np.pi, 400)
    circle = np.column_stack([np.cos(angle), np.sin(angle)])
    circle[-1] = circle[0]
    return circle


@pytest.mark.parametrize(
    ("feature", "closed", "ruler", "reason"),
    [
        (ring(), True, 0.1, "a ring has no distance from end to end"),
        ([wander(1), wander(2)], False, 30.0, "several parts that form no single path"),
        (ring()[:-3], False, 0.1, "its ends are nearer to each other than the ruler"),
        (ring()[:200], False, 0.01, "the source is too coarse for the ruler"),
        (np.zeros((3, 2)), False, 1.0, "the line has no length"),
        (np.array([[0.0, 0.0], [1.0, 0.0]]), False, None, "its ends are nearer to each other than the ruler"),
    ],
)
def test_what_has_no_sinuosity_says_why(feature, closed, ruler, reason):
    found = sinuosity(feature, closed=closed, ruler_m=ruler)
    assert math.isnan(found["sinuosity"][0])
    assert math.isnan(found["sinuosity_length_km"][0])
    assert found["sinuosity_note"][0] == reason
