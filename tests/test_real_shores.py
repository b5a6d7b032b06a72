"""Real shores at three mapping scales through the batch, against an independent walk of the same rings."""

import geopandas as gpd
import numpy as np
import pytest
from batches import run
from open_data import EDITIONS, gshhg, landmass

PLACES = {"Great Britain": (-1.5, 52.5), "Australia": (134.0, -25.0), "Madagascar": (46.5, -19.0)}
RULERS_KM = (2, 5, 10, 20, 50, 100)

# Great Britain (the GSHHG level-1 ring that covers 1.5 W 52.5 N), lengths in km at each of `RULERS_KM`, mean
# of 16 starts, measured by code independent of this project.
INDEPENDENT_KM = {
    "crude": (4467, 4402, 4299, 4065, 3542, 2909),
    "low": (6489, 6087, 5418, 4683, 3675, 2837),
    "intermediate": (7381, 6478, 5577, 4680, 3600, 2819),
}
MEDIAN_SEGMENT_KM = {"crude": 68.0, "low": 15.8, "intermediate": 4.0}


@pytest.fixture(scope="module")
def shores(tmp_path_factory):
    """One layer an edition, measured at `RULERS_KM`: copies by edition, indexed by place."""
    folder = tmp_path_factory.mktemp("shores")
    for letter, edition in EDITIONS.items():
        polygons = gshhg(letter, least_km2=1e5)
        gpd.GeoDataFrame(
            {"place": list(PLACES)},
            geometry=[landmass(polygons, *place) for place in PLACES.values()],
            crs=4326,
        ).to_file(folder / f"{edition}.gpkg", layer="shore")
    layers = {edition: {"source": f"{edition}.gpkg", "id": "place"} for edition in EDITIONS.values()}
    rulers_m = [1000 * ruler for ruler in RULERS_KM]
    run(
        folder,
        layers,
        [{"measure": "divider-dimension", "of": edition, "lengths-at-m": rulers_m} for edition in layers],
    )
    return {
        edition: gpd.read_file(folder / "out" / f"{edition}.gpkg").set_index("place") for edition in layers
    }


@pytest.mark.parametrize("edition", EDITIONS.values())
def test_lengths_agree_with_an_independent_walk(shores, edition):
    row = shores[edition].loc["Great Britain"]
    compared = 0
    for ruler, expected in zip(RULERS_KM, INDEPENDENT_KM[edition], strict=True):
        length = row[f"length_at_{1000 * ruler}m_ruler_km"]
        if ruler < 3 * MEDIAN_SEGMENT_KM[edition]:
            assert np.isnan(length), "a ruler below the source's detail has no length"
            continue
        compared += 1
        assert length == pytest.approx(expected, rel=0.01 if ruler <= 20 else 0.02)
    assert compared == {"crude": 0, "low": 2, "intermediate": 3}[edition]


@pytest.mark.parametrize(("place", "ruler_km"), [("Great Britain", 50), *((place, 100) for place in PLACES)])
def test_editions_agree_at_a_ruler_above_their_detail(shores, place, ruler_km):
    column = f"length_at_{1000 * ruler_km}m_ruler_km"
    low, intermediate = (shores[edition].loc[place, column] for edition in ("low", "intermediate"))
    assert low == pytest.approx(intermediate, rel=0.025)


def test_two_editions_agree_within_the_intervals_of_their_fits(shores):
    """And with the independent walk of 16 starts: 3,675 and 3,600 km at a 50 km ruler."""
    intervals = [
        shores[edition].loc["Great Britain", [f"length_at_50000m_ruler_{end}_km" for end in ("low", "high")]]
        for edition in ("low", "intermediate")
    ]
    for low, high in intervals:
        for edition, expected in (("low", 3675), ("intermediate", 3600)):
            assert low <= shores[edition].loc["Great Britain", "length_at_50000m_ruler_km"] <= high
            assert low <= expected <= high


@pytest.mark.parametrize("place", PLACES)
def test_the_crude_edition_refuses_rulers_below_its_segments(shores, place):
    row = shores["crude"].loc[place]
    assert np.isnan(row["length_at_50000m_ruler_km"])
    assert "too coarse for a ruler of 50000 m" in row["divider_note"]


def test_a_continent_is_walked_within_the_budget(shores):
    row = shores["intermediate"].loc["Australia"]
    assert row["divider_plane"] in {"feature-conic", "three-dimensions"}
    assert row["divider_distortion_percent"] <= 0.5


def test_australia_lies_in_the_historic_band(shores):
    """1.13: Richardson's data as read by Mandelbrot 1967, Science 156:636-638; a plausibility band only."""
    assert shores["intermediate"].loc["Australia", "divider_dim"] == pytest.approx(1.13, abs=0.06)
