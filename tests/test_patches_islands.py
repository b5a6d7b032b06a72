"""Real islands at three mapping scales: area-perimeter dimensions of collapsed polygons are refused."""

import numpy as np
import pytest
from open_data import gshhg

from geofractal.estimators.area_perimeter import area_perimeter_dimension
from geofractal.estimators.number_area import number_area_exponent
from geofractal.patches import polygon_patches


def islands(edition):
    """Return islands of at least 10 km2 at full resolution, GSHHG level 1."""
    return polygon_patches(gshhg(edition, least_km2=10.0), dissolve=False)


@pytest.mark.parametrize(("edition", "independent"), [("c", 0.48), ("l", 0.58)])
def test_coarse_editions_are_refused(edition, independent):
    """Independent fits give 0.48 and 0.58; no boundary has a dimension below 1."""
    found = area_perimeter_dimension(islands(edition)).iloc[0]
    assert np.isnan(found.area_perimeter_dim)
    assert found.area_perimeter_verdict is None
    fitted = float(found.area_perimeter_note.split("dimension ")[1][:4])
    assert fitted == pytest.approx(independent, abs=0.04)
    assert "below 1: outlines have collapsed" in found.area_perimeter_note


def test_the_intermediate_edition_has_a_dimension():
    """An independent fit gives 1.12; the number-area exponent of the same islands is 0.61 (n = 5,607)."""
    patches = islands("i")
    assert area_perimeter_dimension(patches).area_perimeter_dim[0] == pytest.approx(1.12, abs=0.01)
    law = number_area_exponent(patches, smallest_area_m2=10e6).iloc[0]
    assert law.number_area_exponent_low <= 0.61 <= law.number_area_exponent_high


def test_small_islands_of_a_coarse_edition_have_collapsed_where_large_ones_have_not():
    found = area_perimeter_dimension(islands("l"), smallest_area_m2=10e6).iloc[0]
    assert found.area_perimeter_verdict == "two-regime"
    assert np.isnan(found.area_perimeter_dim_below)
    assert found.area_perimeter_dim_above > 1.1
    assert "on one side of the break outlines have collapsed" in found.area_perimeter_note
