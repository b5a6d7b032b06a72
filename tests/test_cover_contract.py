"""Measures of class maps: the contract, the kit, and the names of their columns."""

from typing import ClassVar

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import Field

from geofractal.config.columns import zone_columns
from geofractal.describe import as_dict, as_lines
from geofractal.errors import MeasureError
from geofractal.kernels.codes import count_codes
from geofractal.measure import (
    FIGURE_COLUMNS,
    WHOLE_MAP,
    CoverMeasure,
    CoverResult,
    Options,
    PatchRule,
    Quantity,
)
from geofractal.registry import (
    COVER_KEYS,
    check_measure_class,
    load_any_measure,
    load_cover_measure,
    load_measure,
)
from geofractal.testing import check_cover_measure, cover_specimens

SHIPPED = ["area-perimeter-dimension", "fragmentation", "number-area-exponent"]


class CellsOptions(Options):
    at_least: int = Field(0, description="fewer cells are no figure")


CELLS = Quantity("cells", "cells", "amount", "", "cells of all classes")


class Cells(CoverMeasure[CellsOptions]):
    """A measure that keeps the contract; the others break it in one way each."""

    name: ClassVar[str] = "cells-of-map"
    title: ClassVar[str] = "Cells of a map"
    formula: ClassVar[str] = "number of cells with data"
    sources: ClassVar[tuple[str, ...]] = ("common practice",)
    stem: ClassVar[str] = "cells"
    options: ClassVar[type[Options]] = CellsOptions
    quantity: ClassVar[Quantity] = CELLS

    def quantities(self, options):  # noqa: ARG002 - the same for all
        return (self.quantity,)

    def measure(self, cover, options):
        count = float(sum((strip.codes >= 0).sum() for strip in cover.raster.strips()))
        enough = count >= options.at_least
        row = [WHOLE_MAP, "all covers", self.quantity.name, None, 1.0]
        row += [count if enough else np.nan, np.nan, np.nan, self.quantity.unit, None if enough else "few"]
        return CoverResult(pd.DataFrame([row], columns=list(FIGURE_COLUMNS)))


cells_measure = Cells.measure


def breaking(**attributes):
    """Return `Cells` with some attributes changed, as a class that pickles by its name."""
    return type("Cells", (Cells,), {"__module__": __name__, **attributes})


def quantity(**changes):
    said = {"name": "cells", "short": "cells", "group": "amount", "unit": "", "meaning": "cells"}
    return breaking(quantity=Quantity(**(said | changes)))


@pytest.mark.parametrize(
    ("measure_class", "words"),
    [
        (breaking(needs="lines"), "needs is 'lines'; allowed: 'cover'"),
        (breaking(stem=""), "stem is missing or empty"),
        (breaking(measure=CoverMeasure.measure), "it does not define measure"),
        (breaking(quantities=lambda *_: ()), "there is no quantity"),
        (breaking(quantities=lambda *_: (CELLS, CELLS)), "quantity 'cells' stands twice"),
        (quantity(name="Cells"), "quantity 'Cells' is not in snake case"),
        (quantity(short="cellcount"), "'cellcount' is not snake case of at most seven bytes"),
        (quantity(group="size"), "the group is 'size'; allowed: amount, border"),
        (quantity(kind="count"), "the kind is 'count'; allowed: number, text"),
        (quantity(unit="acre"), "the unit 'acre' is unknown"),
        (quantity(meaning=" "), "quantity 'cells' has no meaning"),
    ],
)
def test_what_breaks_the_contract_is_named(measure_class, words):
    with pytest.raises(MeasureError, match=words):
        check_measure_class(measure_class, "cells-of-map")


@pytest.mark.parametrize("key", COVER_KEYS)
def test_options_leave_the_common_keys_alone(key):
    clashing = type(
        "Clashing",
        (Options,),
        {
            "__module__": __name__,
            "__annotations__": {key.replace("-", "_"): int},
            key.replace("-", "_"): Field(1, description="clashes"),
        },
    )
    with pytest.raises(
        MeasureError, match=f"the option '{key}' has the name of a key that every measure has"
    ):
        check_measure_class(breaking(options=clashing), "cells-of-map")


@pytest.mark.parametrize("name", SHIPPED)
def test_the_shipped_measures_pass_the_kit(name):
    check_cover_measure(type(load_cover_measure(name)))


def test_residuals_of_patches_pass_the_kit():
    measure = type(load_cover_measure("area-perimeter-dimension"))
    check_cover_measure(measure, measure.options(patches=True, smallest_cells=2))


def test_a_good_measure_passes_the_kit():
    check_cover_measure(Cells, CellsOptions(at_least=10))


def changing(change):
    """Return `Cells` whose table goes through `change(figures, cover)`."""

    def measure(self, cover, options):
        return CoverResult(change(cells_measure(self, cover, options).figures, cover))

    return breaking(measure=measure)


_calls = iter(range(10**6))


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda figures, _: figures.drop(columns="note"), "the columns are"),
        (lambda figures, _: figures.assign(quantity="rows"), "no such quantity was announced"),
        (lambda figures, _: figures.assign(unit="km2"), "unit 'km2' or rule None was not announced"),
        (lambda figures, _: figures.assign(border_rule="cut"), "rule 'cut' was not announced"),
        (lambda figures, _: figures.assign(estimate=np.nan), "its note does not say why"),
        (lambda figures, _: figures.assign(low=figures.estimate + 1), r"lies outside \[.*, nan\]"),
        (
            lambda figures, _: figures.assign(estimate=float(next(_calls))),
            "measured again: the figures differ",
        ),
        (
            lambda figures, cover: figures.assign(estimate=len(list(cover.raster.strips())) * 1.0),
            "in strips of other height: the figures differ",
        ),
    ],
)
def test_the_kit_finds_what_breaks_the_contract(change, words, monkeypatch):
    broken = changing(change)
    monkeypatch.setitem(globals(), "Cells", broken)  # so that it pickles
    with pytest.raises(AssertionError, match=words):
        check_cover_measure(broken)


class Ranked(Cells):
    """A measure with a layer of patches."""

    ranks: ClassVar = staticmethod(lambda patches: patches["cells"] + 0.5)

    def patch_rule(self, options):  # noqa: ARG002 - the same for all
        return PatchRule(4)

    def patch_columns(self, patches, figures, options):  # noqa: ARG002 - those of cells alone
        return patches.assign(rank=type(self).ranks(patches))


def test_a_measure_with_a_layer_of_patches_passes_the_kit():
    check_cover_measure(Ranked)


@pytest.mark.parametrize(
    ("ranks", "words"),
    [
        (lambda patches: patches["cells"].rank(), "rank depends on the patches beside it"),
        (lambda patches: patches["cells"].astype(str), "rank holds no numbers"),
    ],
)
def test_the_kit_finds_columns_of_patches_that_are_not_their_own(ranks, words, monkeypatch):
    monkeypatch.setattr(Ranked, "ranks", staticmethod(ranks))
    with pytest.raises(AssertionError, match=words):
        check_cover_measure(Ranked)


def test_the_specimens_have_zones_that_overlap_and_one_that_is_off_the_map():
    zones = cover_specimens()["zones and a group"].zones
    assert len(zones.sets) == 2
    assert zones.problems == ("", "", "off the map")


def test_each_kind_of_measure_is_loaded_as_its_own():
    with pytest.raises(MeasureError, match="'fragmentation' measures class maps, not lines"):
        load_measure("fragmentation")
    with pytest.raises(MeasureError, match="'sinuosity' measures lines, not class maps"):
        load_cover_measure("sinuosity")


@pytest.mark.parametrize("name", SHIPPED)
def test_a_measure_is_described_by_its_quantities(name):
    measure = load_any_measure(name)
    told, text = as_dict(measure), "\n".join(as_lines(measure))
    assert [one["name"] for one in told["quantities"]] == [
        q.name for q in measure.quantities(measure.options())
    ]
    assert all(one["meaning"] in text for one in told["quantities"])
    assert all(one["meaning"] in text for one in told["options"])


# Columns of zones

MESH = Quantity("mesh", "mesh", "connectedness", "km2", "mesh size", border_rules=("cut", "across"))
EDGE = Quantity("edge_density", "edge", "border", "km/km2", "edges", interval=True)
WORD = Quantity("verdict", "verd", "scaling", "", "verdict", kind="text")


def names(covers, quantities, prefix=None):
    return [one.column.name for one in zone_columns(covers, quantities, "broken", prefix)]


def test_columns_are_named_class_quantity_rule_end_unit():
    assert names(["Carr woodland"], [MESH, EDGE, WORD], "old") == [
        "old_carr_woodland_mesh_cut_km2",
        "old_carr_woodland_mesh_across_km2",
        "old_carr_woodland_edge_density",
        "old_carr_woodland_edge_density_low",
        "old_carr_woodland_edge_density_high",
        "old_carr_woodland_verdict",
        "old_broken_note",
    ]


def test_classes_of_any_script_and_codes_have_columns():
    found = names(["Größe", "größe", "λίμνη", "41"], [WORD])
    assert found[:-1] == ["grosse_verdict", "grosse_2_verdict", "class_3_verdict", "class_41_verdict"]


@given(
    covers=st.lists(st.text(min_size=1, max_size=30), max_size=8),
    prefix=st.sampled_from([None, "a", "year2006"]),
)
def test_columns_of_zones_keep_the_contract_of_columns(covers, prefix):
    from geofractal.registry import column_faults

    columns = [one.column for one in zone_columns(covers, [MESH, EDGE, WORD], "broken", prefix)]
    note = f"{prefix}_broken_note" if prefix else "broken_note"
    assert [fault for fault in column_faults(columns, note) if "stands first" not in fault] == []


@given(st.lists(st.integers(-1, 5), max_size=50))
def test_counting_codes_is_as_its_interpreted_twin(codes):
    values, found, expected = np.array(codes, np.int16), np.zeros(8, np.int64), np.zeros(8, np.int64)
    count_codes(values, found)
    count_codes.py_func(values, expected)
    assert found.tolist() == expected.tolist() == [codes.count(code) for code in range(-1, 7)]
