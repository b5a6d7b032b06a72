"""Proof before trust: what the figures do on curves of known dimension."""

import xml.etree.ElementTree as ET
from dataclasses import fields

import numpy as np
import pytest

from geofractal import synthetic
from geofractal.calibration import (
    FAMILIES,
    CalibrationRow,
    Settings,
    calibrate,
    calibrate_like,
    lines_of,
)
from geofractal.errors import ConfigError

SMALL = Settings(dimensions=(1.2,), vertices=(1000,), curves=12)


@pytest.fixture(scope="module")
def small():
    return calibrate(SMALL)


def test_one_row_a_family_dimension_and_size(small):
    assert [row.family for row in small.rows] == list(FAMILIES)
    assert {(row.dimension, row.vertices, row.curves) for row in small.rows} == {(1.2, 1000, 12)}


def test_shares_of_verdicts_add_up_and_refusals_are_those_without_scales(small):
    for row in small.rows:
        shares = row.power_law + row.two_regime + row.curved + row.smooth + row.too_few_scales
        assert shares == pytest.approx(1)
        assert row.refused == pytest.approx(row.too_few_scales)
        assert row.width_ratio == pytest.approx(row.width / (2 * 1.96 * row.spread))


def test_known_curves_are_found_close_to_their_dimension(small):
    """Twelve draws; the standard deviation of a trail's dimension at this size is about 0.09."""
    for row in small.rows:
        assert abs(row.bias) < 0.1
        assert row.coverage >= 0.75


def test_table_has_the_columns_of_a_row(small):
    table = small.table()
    assert table.column_names == [field.name for field in fields(CalibrationRow)]
    assert table.num_rows == len(small.rows)


def test_the_same_seed_gives_the_same_rows_and_another_others(small):
    assert calibrate(SMALL) == small
    other = calibrate(Settings(dimensions=(1.2,), vertices=(1000,), curves=12, seed=1))
    assert other.rows[0].bias != small.rows[0].bias


def test_progress_rises_to_one():
    seen = []
    calibrate(Settings(dimensions=(1.2, 1.3), vertices=(300,), curves=2), progress=seen.append)
    assert seen == sorted(seen)
    assert seen[-1] == 1


def test_figure_is_well_formed_and_names_every_row(small):
    drawing = ET.fromstring(small.figure())  # noqa: S314 - our own text
    words = " ".join(text.text for text in drawing.iter("{http://www.w3.org/2000/svg}text"))
    assert all(f"{row.family}, 1.2, 1,000" in words for row in small.rows)


def test_a_stated_ladder_changes_what_is_found():
    stated = Settings(
        dimensions=(1.2,), vertices=(1000,), curves=12, ruler_min_share=0.01, ruler_max_share=0.2, rungs=9
    )
    rows = calibrate(stated).rows
    assert [row.decades for row in rows] == pytest.approx([1.3] * len(rows), abs=0.25)


def test_curves_that_are_too_short_are_refused_not_answered():
    rows = calibrate(
        Settings(dimensions=(1.7,), vertices=(100,), curves=3, families=("random middles",))
    ).rows
    assert rows[0].refused == 1
    assert np.isnan(rows[0].bias)
    assert (
        "none"
        in calibrate(
            Settings(dimensions=(1.7,), vertices=(100,), curves=3, families=("random middles",))
        ).figure()
    )


def test_a_layer_is_imitated_in_size_and_dimension():
    layer = lines_of([synthetic.fractional_trail(1.25, vertices=800, seed=s) for s in range(5)])
    rows = calibrate_like(layer, Settings(curves=2)).rows
    assert {row.vertices for row in rows} == {800}
    assert all(1.02 <= row.dimension < 1.9 for row in rows)


def test_a_layer_without_scales_cannot_be_imitated():
    with pytest.raises(ConfigError, match="nothing to imitate"):
        calibrate_like(lines_of([synthetic.line(vertices=4)]))


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"dimensions": (1.0,)}, "1 < D < 2"),
        ({"vertices": (50,)}, "at least 100"),
        ({"curves": 1}, "at least 2"),
        ({"families": ("coasts",)}, "known are fractional trails"),
    ],
)
def test_what_cannot_be_drawn_is_refused(wrong, message):
    with pytest.raises(ConfigError, match=message):
        Settings(**wrong)
