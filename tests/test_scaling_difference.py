"""Two different lines bring the whole of both processes; two surveys of one line share it."""

import numpy as np
import pytest

from geofractal import synthetic
from geofractal.calibration import judge_lines, lines_of
from geofractal.errors import ConfigError
from geofractal.scaling.difference import difference_of_two_lines, difference_of_two_surveys
from geofractal.synthetic import Curve


def survey(xy, *, closed=False):
    return lines_of([Curve(np.ascontiguousarray(xy), closed, (), "")])


def smoothed(xy, count=25):
    weights = np.ones(count) / count
    return np.column_stack([np.convolve(xy[:, c], weights, "valid") for c in (0, 1)])


@pytest.fixture(scope="module")
def trail():
    return synthetic.fractional_trail(1.25, vertices=20_000, seed=4).xy


def test_two_lines_differ_by_the_root_of_both_squared_reaches():
    """low = d - hypot(D1 - low1, high2 - D2), Zou & Donner 2008 (from memory)."""
    found = judge_lines(lines_of([synthetic.koch(1.1, level=7), synthetic.koch(1.5, level=7)]))[2]
    there, back = difference_of_two_lines(found, 0, found, 1), difference_of_two_lines(found, 1, found, 0)
    assert there.differs
    assert there.difference == pytest.approx(found.dimension[0] - found.dimension[1])
    reach = np.hypot(found.dimension[0] - found.low[0], found.high[1] - found.dimension[1])
    assert there.difference - there.low == pytest.approx(reach)
    assert (back.difference, back.low, back.high) == pytest.approx(
        (-there.difference, -there.high, -there.low)
    )


def test_a_missing_dimension_gives_no_difference():
    found = judge_lines(lines_of([synthetic.koch(level=5), synthetic.line(vertices=5)]))[2]
    nothing = difference_of_two_lines(found, 0, found, 1)
    assert np.isnan([nothing.difference, nothing.low, nothing.high]).all()
    assert not nothing.differs


def test_the_same_survey_twice_does_not_differ_whichever_way_it_is_drawn(trail):
    found = difference_of_two_surveys(survey(trail), survey(trail[::-1]), position_error_m=(0, 0))
    assert found.difference == pytest.approx(0, abs=2e-3)
    assert not found.differs


def test_a_smoothed_survey_differs_and_the_order_turns_the_sign(trail):
    one, two = survey(trail[12:-12]), survey(smoothed(trail))
    there = difference_of_two_surveys(one, two, position_error_m=(0, 0))
    back = difference_of_two_surveys(two, one, position_error_m=(0, 0))
    assert there.differs
    assert there.low > 0 > back.high
    assert back.difference == pytest.approx(-there.difference, abs=0.02)


def test_pairing_is_sharper_than_two_lines_and_positional_error_blunts_it(trail):
    rng = np.random.default_rng(0)
    one, two = survey(trail), survey(trail + rng.normal(0, 0.3, trail.shape))
    found = judge_lines(one)[2]
    apart = difference_of_two_lines(found, 0, found, 0)
    exact = difference_of_two_surveys(one, two, position_error_m=(0, 0))
    rough = difference_of_two_surveys(one, two, position_error_m=(1.0, 1.0))
    assert exact.high - exact.low < (apart.high - apart.low) / 3
    assert rough.high - rough.low > exact.high - exact.low


def test_rings_are_matched_from_any_start_and_way_around():
    ring = synthetic.random_koch(1.2, level=6, seed=1, island=True).xy[:-1]
    other = np.roll(ring, 1234, axis=0)[::-1]
    closed = [survey(np.concatenate([xy, xy[:1]]), closed=True) for xy in (ring, other)]
    assert difference_of_two_surveys(*closed, position_error_m=(0, 0)).difference == pytest.approx(
        0, abs=2e-3
    )


def test_surveys_of_different_places_are_refused(trail):
    with pytest.raises(ConfigError, match="m apart: no two surveys of one line"):
        difference_of_two_surveys(survey(trail), survey(trail + np.array([9e9, 0])), position_error_m=(0, 0))
    both = lines_of([synthetic.koch(level=3), synthetic.koch(level=3)])
    with pytest.raises(ConfigError, match="one feature of one part each"):
        difference_of_two_surveys(survey(trail), both, position_error_m=(0, 0))


def test_surveys_without_a_common_ladder_have_no_difference():
    short = survey(synthetic.fractional_trail(1.3, vertices=60, seed=1).xy)
    assert np.isnan(difference_of_two_surveys(short, short, position_error_m=(0, 0)).difference)
