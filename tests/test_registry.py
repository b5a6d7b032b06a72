"""Measures: found by entry point, checked against the contract, run against the specimens."""

import importlib.metadata
from typing import ClassVar

import numpy as np
import plugin_packages
import pytest
from pydantic import ConfigDict, Field

from geofractal import registry
from geofractal.errors import GeofractalWarning, MeasureError
from geofractal.measure import Column, Measure, Options
from geofractal.registry import (
    check_measure_class,
    column_faults,
    columns_of,
    load_measure,
    load_measures,
    measure_names,
)
from geofractal.testing import check_measure, lines_of, specimens, take


class PlainOptions(Options):
    factor: float = Field(1.0, description="what the figure is multiplied by")


FIGURE = Column("plain_figure_m", "plainfig", "number", "m", "distance from the first vertex to the last")


class Plain(Measure[PlainOptions]):
    """A measure that keeps the contract; the others break it in one way each."""

    name: ClassVar[str] = "plain-figure"
    title: ClassVar[str] = "Plain figure"
    formula: ClassVar[str] = "|last - first| x factor"
    sources: ClassVar[tuple[str, ...]] = ("common practice",)
    stem: ClassVar[str] = "plain"
    options: ClassVar[type[Options]] = PlainOptions
    figure: ClassVar[Column] = FIGURE

    def columns(self, options):  # noqa: ARG002 - the same for all
        return (self.figure, self.note_column())

    def measure(self, lines, options):
        first = lines.xy[lines.part_offsets[lines.feature_offsets[:-1]]]
        last = lines.xy[lines.part_offsets[lines.feature_offsets[1:]] - 1]
        figure = np.linalg.norm(last - first, axis=1) * options.factor
        figure[figure == 0.0] = np.nan
        notes = np.where(np.isnan(figure), "no length", None).astype(object)
        return {self.figure.name: figure, "plain_note": notes}


plain_measure = Plain.measure


def breaking(**attributes):
    """Return `Plain` with some attributes changed, as a class that pickles by its name."""
    return type("Plain", (Plain,), {"__module__": __name__, **attributes})


def with_figure(**changes):
    column = {
        "name": "plain_figure_m",
        "short": "plainfig",
        "kind": "number",
        "unit": "m",
        "meaning": "a figure",
    }
    return breaking(figure=Column(**(column | changes)))


@pytest.fixture
def site(tmp_path, monkeypatch):
    """A folder that stands on the path for the test, as if pip had installed into it."""
    plugin_packages.open_folder(tmp_path, monkeypatch)
    yield tmp_path
    monkeypatch.undo()
    plugin_packages.forget()


# Found by entry point


def test_a_third_partys_measure_is_found_by_its_entry_point(site):
    assert "vertex-spacing" not in measure_names()
    plugin_packages.install_example(site)
    plugin_packages.forget()
    assert "vertex-spacing" in measure_names()
    assert load_measure("vertex-spacing").title == "Vertex spacing"


def test_the_shipped_measures_use_the_same_door(monkeypatch):
    assert {"divider-dimension", "sinuosity"} <= set(measure_names())
    monkeypatch.setattr(registry, "entry_points", lambda **_: importlib.metadata.EntryPoints())
    plugin_packages.forget()
    assert measure_names() == ()
    monkeypatch.undo()
    plugin_packages.forget()


def test_listing_names_imports_no_measure(site):
    plugin_packages.install(site, "torn", {"torn-measure": "no_such_module:Torn"})
    plugin_packages.forget()
    assert "torn-measure" in measure_names()


def test_a_broken_plug_in_is_named_in_a_warning_and_the_rest_load(site):
    plugin_packages.install_example(site)
    plugin_packages.install(site, "torn", {"torn-measure": "no_such_module:Torn"})
    plugin_packages.forget()
    words = r"left out\. Measure 'torn-measure': no_such_module:Torn cannot be loaded: ModuleNotFoundError"
    with pytest.warns(GeofractalWarning, match=words):
        loaded = load_measures()
    assert "vertex-spacing" in loaded
    assert "torn-measure" not in loaded


def test_a_broken_plug_in_that_is_asked_for_is_an_error(site):
    plugin_packages.install(site, "torn", {"torn-measure": "no_such_module:Torn"})
    plugin_packages.forget()
    with pytest.raises(MeasureError, match="Measure 'torn-measure': no_such_module:Torn cannot be loaded"):
        load_measure("torn-measure")


def test_a_plug_in_that_fails_while_it_is_checked_is_named(site):
    (site / "failing.py").write_text(
        "from test_registry import Plain\n"
        "class Failing(Plain):\n"
        "    name = 'failing-figure'\n"
        "    def columns(self, options):\n"
        "        return 1 / 0\n"
    )
    plugin_packages.install(site, "failing", {"failing-figure": "failing:Failing"})
    plugin_packages.forget()
    with pytest.raises(
        MeasureError, match="failing:Failing cannot be loaded: ZeroDivisionError: division by zero"
    ):
        load_measure("failing-figure")


def test_a_name_that_two_packages_claim_is_nobodys(site):
    for package in ("one", "two"):
        plugin_packages.install(site, package, {"twice-claimed": f"{package}:Measure"})
    plugin_packages.forget()
    words = r"two packages claim this name \((one:Measure and two:Measure|two:Measure and one:Measure)\)"
    with pytest.raises(MeasureError, match=words):
        load_measure("twice-claimed")


def test_an_unknown_measure_lists_the_known_and_the_nearest():
    with pytest.raises(
        MeasureError, match=r"'sinosity' is installed; there are: .*Did you mean 'sinuosity'\?"
    ):
        load_measure("sinosity")


# Checked


def test_a_measure_that_keeps_the_contract_passes():
    check_measure_class(Plain, "plain-figure")


@pytest.mark.parametrize(
    ("measure_class", "words"),
    [
        (PlainOptions, "is not a subclass of geofractal.measure.Measure"),
        (Plain(), "is not a subclass of geofractal.measure.Measure"),
        (breaking(name="other-figure"), "its name is 'other-figure', its entry point's 'plain-figure'"),
        (breaking(title=""), "title is missing or empty"),
        (breaking(sources=()), "sources is missing or empty"),
        (breaking(needs="cells"), "needs is 'cells'; allowed: 'lines'"),
        (breaking(version=0), "version is 0; allowed: a whole number from 1"),
        (breaking(measure=Measure.measure), "it does not define measure"),
        (
            breaking(options=dict),
            "options is <class 'dict'>; allowed: a subclass of geofractal.measure.Options",
        ),
        (with_figure(name="Plain_m"), "column 'Plain_m' is not in snake case"),
        (with_figure(name="plain_figure"), "column 'plain_figure' does not end with its unit, _m"),
        (with_figure(short="plain_figur"), "'plain_figur' is not snake case of at most ten bytes"),
        (with_figure(short="größe"), "'größe' is not snake case of at most ten bytes"),
        (with_figure(kind="real"), "the kind is 'real'; allowed: number, count, text, flag"),
        (with_figure(unit="furlong"), "the unit 'furlong' is unknown; allowed: m, km, m2"),
        (with_figure(meaning=" "), "column 'plain_figure_m' has no meaning"),
        (with_figure(short="plain_note"), "short name 'plain_note' stands twice"),
        (breaking(columns=lambda *_: (FIGURE,)), r"column 'plain_note' \(Measure.note_column\) is missing"),
        (breaking(columns=lambda self, _: (self.note_column(), FIGURE)), "the note column stands first"),
    ],
)
def test_what_breaks_the_contract_is_named(measure_class, words):
    with pytest.raises(MeasureError, match=words):
        check_measure_class(measure_class, "plain-figure")


@pytest.mark.parametrize("name", ["Plain", "plain_figure", "plain--figure", "-plain", ""])
def test_a_measures_word_is_lower_case_words_with_hyphens(name):
    with pytest.raises(MeasureError, match="is not made of lower-case words joined by hyphens"):
        check_measure_class(breaking(name=name), name)


def test_options_stay_frozen_strict_and_closed():
    class Loose(Options):
        model_config = ConfigDict(frozen=False, extra="allow", strict=False)

    words = (
        "keep frozen=True in its model_config; Loose must keep extra='forbid'.*; Loose must keep strict=True"
    )
    with pytest.raises(MeasureError, match=words):
        check_measure_class(breaking(options=Loose), "plain-figure")


def test_options_are_described_and_leave_the_common_keys_alone():
    class Clashing(Options):
        of: str = Field("x", description="clashes")
        silent: bool = False

    words = (
        "the option 'of' has the name of a key that every measure has; the option 'silent' has no description"
    )
    with pytest.raises(MeasureError, match=words):
        check_measure_class(breaking(options=Clashing), "plain-figure")


def test_all_faults_are_told_at_once():
    with pytest.raises(MeasureError, match="title is missing or empty; version is 0"):
        check_measure_class(breaking(title="", version=0), "plain-figure")


def test_columns_that_follow_from_options_are_checked_when_they_are_known():
    class Needed(Options):
        figure: str = Field(description="name of the column")

    measure_class = breaking(
        options=Needed,
        columns=lambda self, o: (Column(o.figure, "fig", "number", "", "m"), self.note_column()),
    )
    check_measure_class(measure_class, "plain-figure")
    assert columns_of(measure_class(), Needed(figure="fine"))[0].name == "fine"
    with pytest.raises(MeasureError, match="column 'Bad Name' is not in snake case"):
        columns_of(measure_class(), Needed(figure="Bad Name"))


def test_a_plain_unit_ends_the_name_and_a_compound_one_need_not():
    columns = (Column("content", "content", "number", "m^D", "prefactor"), Plain().note_column())
    assert column_faults(columns, "plain_note") == []


# Run against the specimens


def test_a_good_measure_passes_the_kit():
    check_measure(Plain, PlainOptions(factor=2.0))


def test_the_example_package_passes_the_kit(site):
    plugin_packages.install_example(site)
    plugin_packages.forget()
    measure = load_measure("vertex-spacing")
    check_measure(type(measure))
    check_measure(type(measure), type(measure).options(also_quantiles=(0.1, 0.9)))


@pytest.mark.parametrize("name", ["divider-dimension", "sinuosity"])
def test_the_shipped_measures_pass_the_kit(name):
    check_measure(type(load_measure(name)))


def test_lengths_at_rulers_pass_the_kit():
    measure = load_measure("divider-dimension")
    check_measure(type(measure), type(measure).options(lengths_at_m=(100.0, 1000.0)))


def changing(change):
    """Return `Plain` whose values go through `change(values, lines)`."""

    def measure(self, lines, options):
        values = plain_measure(self, lines, options)
        return change(values, lines) or values

    return breaking(measure=measure)


def _set(name, value):
    def change(values, lines):  # noqa: ARG001 - one shape for all
        values[name] = value(values[name])

    return change


def _disturb(values, lines):  # noqa: ARG001 - one shape for all
    lines.xy[:] += 1.0


def _look_aside(values, lines):  # noqa: ARG001 - one shape for all
    values["plain_figure_m"] = values["plain_figure_m"] - np.nanmean([0.0, *values["plain_figure_m"]])


def _sort(values, lines):  # noqa: ARG001 - one shape for all
    figure = values["plain_figure_m"]
    figure[~np.isnan(figure)] = np.sort(figure[~np.isnan(figure)])


_calls = iter(range(10**6))


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda values, _: {"plain_figure_m": values["plain_figure_m"]}, "but the columns are"),
        (_set("plain_figure_m", lambda v: v.astype(np.float32)), "is a number of type float32, not float64"),
        (_set("plain_figure_m", lambda v: v[:, None]), r"has shape \(4, 1\), not \(4,\)"),
        (_set("plain_figure_m", lambda v: np.where(np.isnan(v), np.inf, v)), "is infinite somewhere"),
        (_set("plain_figure_m", np.nan_to_num), "a line without length: plain_figure_m is not null"),
        (_set("plain_note", lambda v: np.full(len(v), None)), "is null and plain_note does not say why"),
        (_set("plain_note", lambda v: np.full(len(v), 1, object)), "something other than text and None"),
        (_set("plain_figure_m", lambda v: v + next(_calls)), "measured again: plain_figure_m differs"),
        (_disturb, "ordinary, its input: xy differs"),
        (_look_aside, "alone: plain_figure_m differs"),
        (_sort, "reverse order: plain_figure_m differs"),
    ],
)
def test_the_kit_finds_what_breaks_the_contract(change, words, monkeypatch):
    broken = changing(change)
    monkeypatch.setitem(globals(), "Plain", broken)  # so that it pickles
    with pytest.raises(AssertionError, match=words):
        check_measure(broken)


def test_the_kit_refuses_a_measure_that_does_not_pickle():
    class Hidden(PlainOptions):
        pass

    with pytest.raises(AttributeError, match="Hidden"):
        check_measure(Plain, Hidden())


# The specimens


def test_lines_of_finds_rings_and_offsets():
    lines = lines_of([[[(0, 0), (1, 0), (1, 1), (0, 0)]], [[(0, 0), (1, 0)], [(5, 5), (6, 6), (7, 7)]]])
    assert lines.closed.tolist() == [True, False, False]
    assert lines.feature_offsets.tolist() == [0, 1, 3]
    assert lines.part_offsets.tolist() == [0, 4, 6, 9]


def test_take_picks_features_whole():
    lines = lines_of([[[(0, 0), (1, 0)]], [[(0, 0), (2, 0)], [(5, 5), (6, 6), (7, 7)]], [[(9, 9), (8, 8)]]])
    taken = take(lines, [2, 1])
    assert taken.rows.tolist() == [2, 1]
    assert taken.xy.tolist() == [[9, 9], [8, 8], [0, 0], [2, 0], [5, 5], [6, 6], [7, 7]]
    assert taken.feature_offsets.tolist() == [0, 1, 3]


@pytest.mark.parametrize("name", sorted(specimens()))
def test_specimens_keep_the_contract_of_lines(name):
    lines = specimens()[name]
    assert lines.feature_offsets[-1] == len(lines.part_offsets) - 1 == len(lines.closed)
    assert lines.part_offsets[-1] == len(lines.xy) == len(lines.source_vertex)
    assert (np.diff(lines.part_offsets) >= 2).all()
    assert (np.diff(lines.feature_offsets) >= 1).all()
    assert np.isfinite(lines.xy).all()
    assert lines.xy.shape[1] == (3 if name == "three dimensions" else 2)
    for part, closed in enumerate(lines.closed):
        first, last = lines.part_offsets[part], lines.part_offsets[part + 1] - 1
        assert not closed or (lines.xy[first] == lines.xy[last]).all()
