"""Batch files: what they become, and how everything that is wrong with them is told."""

import copy
import json
import pickle
import re
import subprocess
import sys
from pathlib import Path

import jsonschema
import plugin_packages
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from geofractal.config import Batch, json_schema, load_config, wrong_kinds
from geofractal.config.columns import prefixed
from geofractal.config.yaml_tree import MAX_BYTES, described, read_yaml
from geofractal.errors import ConfigError, GeofractalWarning
from geofractal.measure import Column

CONFIG = Path(__file__).parents[1] / "config"

GOOD = """\
batch: Bericht für 2026
layers:
  shore: {source: data/shoreline.gpkg, layer: shoreline, id: shore_id}
  channels:
    source: data/rivers.gpkg
    group-by: river
    where: "status = 'natural'"
    prepare: {join-within-m: 2, branches: main-path}
measures:
  - {measure: vertex-spacing, of: shore, also-quantiles: [0.1, 0.9]}
  - {measure: vertex-spacing, of: channels}
  - {measure: vertex-spacing, of: channels, quantile: 0.9, prefix: upper}
outputs: {folder: ../out, formats: [geopackage, shapefile]}
run: {workers: 2, refusals: fail}
"""


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A folder for batch files beside data, with the example measure installed."""
    plugin_packages.install_example(tmp_path / "site")
    plugin_packages.open_folder(tmp_path / "site", monkeypatch)
    (tmp_path / "work" / "data").mkdir(parents=True)
    for name in ("shoreline.gpkg", "rivers.gpkg"):
        (tmp_path / "work" / "data" / name).touch()
    yield tmp_path / "work"
    monkeypatch.undo()
    plugin_packages.forget()


@pytest.fixture
def load(folder):
    """Load a text as a batch file."""

    def load_text(text):
        path = folder / "batch.yaml"
        path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
        return load_config(path)

    return load_text


@pytest.fixture
def problems(load):
    """Return what is wrong with a batch file, as ``line:column: key: ...``."""

    def problems_of(text):
        with pytest.raises(ConfigError, match=r"batch\.yaml: (1 problem|\d+ problems)\n") as caught:
            load(text)
        lines = str(caught.value).splitlines()[1:]
        assert lines == [f"  {problem}" for problem in caught.value.problems]
        return [re.sub(r".*batch\.yaml:?", "", line, count=1).strip() for line in lines]

    return problems_of


def changed(old, new):
    assert GOOD.count(old) == 1
    return GOOD.replace(old, new)


# What a good file becomes


def test_a_good_file_becomes_a_batch_with_absolute_paths(load, folder):
    batch = load(GOOD)
    assert batch.name == "Bericht für 2026"
    assert batch.layers["shore"].source == folder / "data" / "shoreline.gpkg"
    assert batch.outputs.folder == folder.parent / "out"
    assert batch.outputs.formats == ("geopackage", "shapefile")
    assert batch.layers["channels"].prepare.join_within_m == 2
    assert [request.of for request in batch.measures] == ["shore", "channels", "channels"]
    assert batch.measures[0].options.also_quantiles == (0.1, 0.9)
    assert batch.run.workers == 2


def test_what_is_left_out_has_the_stated_defaults(load):
    batch = load(
        "batch: b\nlayers: {shore: {source: data/rivers.gpkg}}\n"
        "measures: [{measure: vertex-spacing, of: shore}]\noutputs: {folder: out}\n"
    )
    assert batch.model_dump(mode="json", by_alias=True, exclude={"layers": {"shore": {"source"}}}) == {
        "batch": "b",
        "layers": {
            "shore": {
                "layer": None,
                "crs": None,
                "override-crs": False,
                "id": None,
                "group-by": None,
                "where": None,
                "encoding": None,
                "groups": {},
                "edges": "straight",
                "prepare": {
                    "repair": False,
                    "join-within-m": None,
                    "drop-repeated": False,
                    "boundaries": "all",
                    "branches": "refuse",
                },
            }
        },
        "projection": {"plane": "feature", "budget-percent": 0.5, "three-dimensions": True},
        "outputs": {"folder": str(batch.outputs.folder), "formats": ["geopackage"], "tables": ["csv"]},
        "run": {"workers": "auto", "refusals": "keep"},
        "measures": [
            {
                "measure": "vertex-spacing",
                "of": "shore",
                "prefix": None,
                "options": {"quantile": 0.5, "also-quantiles": []},
            }
        ],
    }


def test_a_batch_is_frozen(load):
    batch = load(GOOD)
    with pytest.raises(ValueError, match="frozen"):
        batch.name = "other"
    with pytest.raises(ValueError, match="frozen"):
        batch.layers["shore"].edges = "geodesic"


def test_a_batch_crosses_process_borders(load):
    batch = load(GOOD)
    twin = pickle.loads(pickle.dumps(batch))  # noqa: S301 - our own bytes
    assert twin == batch
    assert str(twin.problem(("layers", "shore", "id"), "said")).endswith(
        "batch.yaml:3:62: layers.shore.id: said"
    )


def test_requests_of_a_layer_keep_the_order_of_the_file(load):
    batch = load(GOOD)
    assert [request.prefix for request in batch.requests_of("channels")] == [None, "upper"]


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("yes", "yes"),
        ("2026-01-31", "2026-01-31"),
        ("12:30", "12:30"),
        ("'012'", "012"),
        ("~x", "~x"),
        ("on", "on"),
    ],
)
def test_plain_words_stay_text_as_in_yaml_1_2(load, text, value):
    assert load(changed("Bericht für 2026", text)).name == value


def test_an_alias_repeats_what_it_names(load):
    text = changed("id: shore_id}", "prepare: &steps {repair: true}}")
    batch = load(text.replace("prepare: {join-within-m: 2, branches: main-path}", "prepare: *steps"))
    assert batch.layers["shore"].prepare.repair
    assert batch.layers["channels"].prepare.repair


# One problem at a time


LAYER_KEYS = "source, layer, crs, override-crs, id, group-by, where, encoding, groups, edges, prepare"
TOP_KEYS = "batch, layers, projection, outputs, run, measures"
SPACING_KEYS = "measure, of, prefix, quantile, also-quantiles"
PREPARE_KEYS = "repair, join-within-m, drop-repeated, boundaries, branches"
STEP = "layers.channels.prepare"
FORMATS = "'geopackage', 'shapefile', 'flatgeobuf', 'geojson', 'geojson-lines' or 'geoparquet'"
ENCODINGS = "the name of an encoding, such as UTF-8 or ISO-8859-1"
CRS = "an authority code such as EPSG:3035, or WKT, that PROJ knows"
ONLY_WITH_CRS = "true only beside crs, which says what replaces the layer's own"
PREFIX = "lower-case words and digits joined by single underscores"

# what is replaced, by what (^ marks the place that is to be told), and what is said of which key
FAULTS = [
    # unknown and misspelt keys
    ("run:", "^rum:", f"rum: unknown key 'rum'; allowed: {TOP_KEYS}; run?"),
    (
        "group-by: river",
        "^group_by: river",
        (
            "layers.channels.group_by: keys are spelled with hyphens,"
            f" not 'group_by'; allowed: {LAYER_KEYS}; group-by?"
        ),
    ),
    (
        "also-quantiles",
        "^also-quantile",
        f"measures[0].also-quantile: unknown key 'also-quantile'; allowed: {SPACING_KEYS}; also-quantiles?",
    ),
    (
        "branches: main-path",
        "^branch: main-path",
        f"{STEP}.branch: unknown key 'branch'; allowed: {PREPARE_KEYS}; branches?",
    ),
    (
        "{folder",
        "{^forlder",
        "outputs.forlder: unknown key 'forlder'; allowed: folder, formats, tables; folder?",
    ),
    # missing keys
    ("batch: Bericht für 2026\n", "^", "batch: the key 'batch' is missing: title of the batch"),
    (
        "{measure: vertex-spacing, of: shore",
        "^{measure: vertex-spacing",
        "measures[0].of: the key 'of' is missing: name of the layer to measure",
    ),
    # values of the wrong type
    ("workers: 2", "workers: ^two", "run.workers: found 'two'; allowed: 'auto' or a whole number"),
    ("workers: 2", "workers: ^autp", "run.workers: found 'autp'; allowed: 'auto' or a whole number; auto?"),
    ("workers: 2", "workers: ^0", "run.workers: found 0; allowed: 'auto' or 1 or more"),
    ("workers: 2", "workers: ^true", "run.workers: found true; allowed: 'auto' or a whole number"),
    ("Bericht für 2026", "^2026", "batch: found 2026; allowed: text; write it in quotes"),
    ("Bericht für 2026", "^''", "batch: found ''; allowed: text that is not empty"),
    ("Bericht für 2026", "^~", "batch: found nothing (null); allowed: text"),
    ("join-within-m: 2", "join-within-m: ^two", f"{STEP}.join-within-m: found 'two'; allowed: a number"),
    ("join-within-m: 2", "join-within-m: ^-2", f"{STEP}.join-within-m: found -2; allowed: 0 or more"),
    (
        "join-within-m: 2",
        "join-within-m: ^.inf",
        f"{STEP}.join-within-m: found inf; allowed: a finite number",
    ),
    ("join-within-m: 2", "repair: ^yes", f"{STEP}.repair: found 'yes'; allowed: true or false"),
    ("[0.1, 0.9]", "^0.9", "measures[0].also-quantiles: found 0.9; allowed: a list"),
    ("[0.1, 0.9]", "[0.1, ^1.9]", "measures[0].also-quantiles[1]: found 1.9; allowed: less than 1"),
    (
        "[geopackage, shapefile]",
        "[geopackage, ^shapfile]",
        f"outputs.formats[1]: found 'shapfile'; allowed: {FORMATS}; shapefile?",
    ),
    ("[geopackage, shapefile]", "^[]", "outputs.formats: found a list; allowed: at least 1 of them"),
    (
        "{folder: ../out, formats: [geopackage, shapefile]}",
        "^out",
        "outputs: found 'out'; allowed: a mapping (key: value)",
    ),
    # values that mean nothing
    ("prefix: upper", "prefix: ^Upper reach", f"measures[2].prefix: found 'Upper reach'; allowed: {PREFIX}"),
    ("id: shore_id", "encoding: ^latin-11", f"layers.shore.encoding: found 'latin-11'; allowed: {ENCODINGS}"),
    ("id: shore_id", "crs: ^EPSG:99999999", f"layers.shore.crs: found 'EPSG:99999999'; allowed: {CRS}"),
    (
        "id: shore_id",
        "override-crs: ^true",
        f"layers.shore.override-crs: found true; allowed: {ONLY_WITH_CRS}",
    ),
    (
        "of: shore,",
        "of: ^shor,",
        "measures[0].of: no layer 'shor' is defined under layers; allowed: shore, channels; shore?",
    ),
    # duplicates, tags, keys that are no text
    (
        "workers: 2",
        "workers: 2, ^workers: 3",
        "run.workers: the key 'workers' stands twice; first at line 14; allowed: each key once",
    ),
    (
        "workers: 2",
        "workers: ^!!python/object:os.system 2",
        "run.workers: the tag '!!python/object:os.system' stands here; allowed: values without tags",
    ),
    (
        "workers: 2",
        "workers: ^!!int '2'",
        "run.workers: the tag '!!int' stands here; allowed: values without tags",
    ),
    ("run: {", "? ^[run]\n: {", "a list or mapping stands as a key; allowed: text"),
]


@pytest.mark.parametrize(("old", "new", "said"), FAULTS)
def test_one_fault_is_told_with_its_place_and_what_is_allowed(problems, old, new, said):
    text = changed(old, new)
    before = text[: text.index("^")]
    place = f"{before.count(chr(10)) + 1}:{len(before) - before.rfind(chr(10))}"
    said = re.sub(r"; ([\w-]+)\?$", r"; did you mean '\1'?", said)
    found = problems(text.replace("^", ""))
    assert f"{place}: {said}" in found
    # what follows from it stands on that line, too
    assert {line.partition(":")[0] for line in found} == {place.partition(":")[0]}


def test_a_path_that_is_not_there_is_told_with_the_nearest_name(problems, folder):
    [found] = problems(changed("data/rivers.gpkg", "data/river.gpkg"))
    assert found == (
        "5:13: layers.channels.source: found 'data/river.gpkg'; allowed: a path that exists, seen from the"
        f" batch file's folder; {folder / 'data'} has no 'river.gpkg'; did you mean 'rivers.gpkg'?"
    )


def test_a_path_whose_folder_is_not_there_names_the_folder(problems, folder):
    [found] = problems(changed("data/rivers.gpkg", "dat/2026/rivers.gpkg"))
    assert found.endswith(f"{folder} has no 'dat'; did you mean 'data'?")


def test_an_output_folder_that_is_a_file_is_refused(problems):
    [found] = problems(changed("../out", "data/rivers.gpkg"))
    assert found.startswith(
        "13:19: outputs.folder: found 'data/rivers.gpkg'; allowed: a folder, existing or new;"
    )


@pytest.mark.parametrize("name", ["a/b", "a\\b", ".hidden", "con:", " ", "ends.", "tab\\t"])
def test_layer_names_must_be_file_names_everywhere(problems, name):
    found = problems(changed("  shore:", f'  "{name}":'.replace("a\\b", "a\\\\b")))
    assert any("allowed: a name without / \\ : * ?" in line for line in found)


def test_layer_names_may_be_of_any_script(load):
    text = changed("  shore:", "  Küste 岸 2:").replace("of: shore,", "of: Küste 岸 2,")
    assert "Küste 岸 2" in load(text).layers


def test_layers_that_differ_only_by_case_are_refused(problems):
    text = changed("  shore:", "  Channels: {source: data/rivers.gpkg}\n  shore:")
    assert problems(text) == [
        (
            "5:3: layers.channels: the layers 'Channels' and 'channels' differ only by case, and so would"
            " their files; allowed: names that differ otherwise"
        )
    ]


def test_a_layer_that_no_measure_uses_is_a_warning(load):
    text = changed("  shore:", "  spare: {source: data/rivers.gpkg}\n  shore:")
    with pytest.warns(
        GeofractalWarning, match=r"batch\.yaml:3:3: layers\.spare: no measure uses the layer 'spare'"
    ):
        load(text)


def test_an_unknown_measure_lists_the_known_ones(problems):
    [found] = problems(changed("vertex-spacing, of: shore", "vertex_spacing, of: shore"))
    assert found.startswith("10:15: measures[0].measure: no measure 'vertex_spacing' is installed;")
    assert found.endswith("; did you mean 'vertex-spacing'?")


def test_two_measures_that_would_write_one_column_need_a_prefix(problems):
    assert problems(changed(", prefix: upper", "")) == [
        (
            "12:15: measures[2].measure: this layer has the column 'vertex_spacing_m' already, from"
            " the measure at line 11; allowed: a prefix that sets the two apart"
        )
    ]


def test_prefixes_that_start_alike_clash_in_short_names(problems):
    text = changed(
        "  - {measure: vertex-spacing, of: channels}\n",
        "  - {measure: vertex-spacing, of: channels, prefix: up}\n",
    )
    [found] = problems(text)
    assert "the short column name 'upvtxspace' already, from the measure at line 11" in found


def test_the_words_of_an_options_own_validator_are_told(problems):
    """A validator that compares two options speaks of the entry."""
    text = changed(
        "{measure: vertex-spacing, of: channels}",
        "{measure: divider-dimension, of: channels, ruler-min-m: 9, ruler-max-m: 3}",
    )
    assert problems(text) == ["11:5: measures[1]: ruler-min-m (9) must be below ruler-max-m (3)"]


def test_a_measure_that_cannot_be_loaded_is_told_where_it_is_asked_for(problems, folder):
    plugin_packages.install(folder.parent / "site", "broken", {"torn-measure": "no_such_module:Torn"})
    plugin_packages.forget()
    [found] = problems(
        changed("vertex-spacing, of: shore, also-quantiles: [0.1, 0.9]", "torn-measure, of: shore")
    )
    assert found.startswith(
        "10:15: measures[0].measure: Measure 'torn-measure': no_such_module:Torn cannot be loaded:"
    )


# All problems at once


def test_all_problems_of_a_file_are_told_at_once_in_the_order_of_its_lines(problems):
    text = (
        GOOD.replace("Bericht für 2026", "2026")
        .replace("layer: shoreline", "layr: shoreline")
        .replace("data/rivers.gpkg", "data/no.gpkg")
        .replace("of: channels}", "of: canals}")
        .replace("quantile: 0.9", "quantile: 9")
        .replace("[geopackage, shapefile]", "[geopackage, paper]")
        .replace("workers: 2", "workers: 2, workers: 3")
    )
    places = [line.partition(":")[0] for line in problems(text)]
    assert places == ["1", "3", "5", "11", "12", "13", "14"]


# Files that are no batch files at all


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("", ":1:1: the file is empty; allowed: a mapping with keys such as layers: and measures:"),
        (
            "# only a remark\n",
            ":1:1: the file is empty; allowed: a mapping with keys such as layers: and measures:",
        ),
        ("- a\n- b\n", ":1:1: the file holds a list at its top; allowed: a mapping with keys such as"),
        ("\n  shore\n", ":2:3: the file holds 'shore' at its top; allowed: a mapping with keys such as"),
        (
            "a: 1\n---\nb: 2\n",
            ":2:1: this is not YAML: expected a single document in the stream but found another document",
        ),
        ("a: {b: 1\n", ":2:1: this is not YAML: while parsing a flow mapping"),
        ("a:\n\tb: 1\n", ":2:1: this is not YAML: while scanning for the next token found character '\\t'"),
        ("a: b: c\n", ":1:5: this is not YAML: mapping values are not allowed here"),
        ("a: *nobody\n", ":1:4: this is not YAML: found undefined alias 'nobody'"),
        ("a: \x07\n", ": this is not YAML: unacceptable character #x0007"),
        ("a: " + "[" * 500, ": lists or mappings are nested too deeply"),
        ("a: &a [1, *a]\n", ":1:4: a[1]: an alias stands inside what it names"),
        (
            b"a: f\xfcr\n",
            ":1:5: byte 0xFC is not UTF-8 text; allowed: UTF-8; save the file with this encoding",
        ),
        ("a: b".encode("utf-16"), ":1:1: byte 0xFF is not UTF-8 text; allowed: UTF-8"),
        (
            b"a: '" + b"x" * MAX_BYTES + b"'",
            ": the file is too large for a batch file; allowed: at most 1,000,000 bytes",
        ),
    ],
)
def test_what_is_no_batch_file_is_refused_in_plain_words(load, text, expected):
    with pytest.raises(ConfigError, match=r"1 problem\n.*batch\.yaml" + re.escape(expected)):
        load(text)


def test_an_alias_bomb_is_refused_before_it_unfolds(load):
    """Nine levels of nine aliases each would unfold to 9^9 values ("billion laughs")."""
    levels = ["l0: &l0 [x, x, x, x, x, x, x, x, x]"]
    levels += [f"l{k}: &l{k} [{', '.join([f'*l{k - 1}'] * 9)}]" for k in range(1, 9)]
    with pytest.raises(
        ConfigError, match="the file unfolds to more than 100,000 values; allowed: fewer aliases"
    ):
        load("\n".join(levels))


def test_a_byte_order_mark_is_no_fault(load):
    assert load(b"\xef\xbb\xbf" + GOOD.encode()).name == "Bericht für 2026"


def test_a_file_that_is_not_there_is_a_config_error(tmp_path):
    with pytest.raises(
        ConfigError, match=r"no\.yaml: the batch file cannot be read: No such file or directory"
    ):
        load_config(tmp_path / "no.yaml")


# Properties


@given(st.text(alphabet=st.sampled_from("ab:-[]{},&*!?#|>'\" \n\t%@`~0.é\x00"), max_size=60))
@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_text_is_read_or_refused(tmp_path, text):
    path = tmp_path / "any.yaml"
    path.write_text(text, "utf-8")
    try:
        tree, _ = read_yaml(path)
    except ConfigError as error:
        assert error.exit_code == 2  # noqa: PT017 - most texts are refused, and that is right, too
    else:
        assert isinstance(tree.data, dict)
        json.dumps(tree.data)


PLAIN = {
    "batch": "b",
    "layers": {"shore": {"source": "data/rivers.gpkg", "prepare": {"repair": True}}},
    "measures": [{"measure": "vertex-spacing", "of": "shore", "quantile": 0.25, "also-quantiles": [0.5]}],
    "projection": {"plane": "layer", "budget-percent": 1},
    "outputs": {"folder": "out", "formats": ["geojson"]},
    "run": {"workers": 1},
}
ODD = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=5),
    st.just([]),
    st.just({}),
    st.just([[{}]]),
)


def places(value, at=()):
    yield at
    if isinstance(value, dict | list):
        for key, inner in value.items() if isinstance(value, dict) else enumerate(value):
            yield from places(inner, (*at, key))


@given(at=st.sampled_from([place for place in places(PLAIN) if place]), odd=ODD)
@settings(max_examples=100, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_value_anywhere_is_taken_or_refused_at_a_line(load, at, odd):
    """JSON is YAML 1.2, so each file is written as JSON, one value a line."""
    changed_data = copy.deepcopy(PLAIN)
    inner = changed_data
    for step in at[:-1]:
        inner = inner[step]
    inner[at[-1]] = odd
    text = json.dumps(changed_data, indent=1).replace("NaN", ".nan").replace("-Infinity", "-.inf")
    try:
        batch = load(text.replace("Infinity", ".inf"))
    except ConfigError as error:
        lines = [problem.line for problem in error.problems]
        assert min(lines) >= 1
    else:
        assert isinstance(batch, Batch)


# Kinds of layers


def test_a_measure_of_lines_asked_of_points_is_told_with_its_place(load):
    found = wrong_kinds(load(GOOD), {"shore": {"points"}, "channels": {"lines"}})
    assert [str(problem).partition("batch.yaml:")[2] for problem in found] == [
        (
            "10:35: measures[0].of: vertex-spacing measures lines; layer 'shore' holds points;"
            " allowed: a layer of lines or polygons"
        )
    ]


@pytest.mark.parametrize("kinds", [{"lines", "points"}, {"unknown"}, {"polygons"}, set()])
def test_a_layer_that_may_hold_lines_is_not_refused(load, kinds):
    assert wrong_kinds(load(GOOD), {"shore": kinds}) == []


# Prefixes


def test_a_prefix_goes_before_names_and_keeps_short_names_short_and_apart():
    columns = [
        Column(name, short, "number", "", "m")
        for name, short in (("a_low", "abcdefghij"), ("a", "abcdefghkl"))
    ]
    assert [(c.name, c.short) for c in prefixed(columns, "winter")] == [
        ("winter_a_low", "wiabcdefgh"),
        ("winter_a", "wiabcdefg2"),
    ]
    assert prefixed(columns, None) == tuple(columns)


def test_prefixed_meanings_name_the_prefixed_columns():
    columns = [
        Column("a_dim", "a_dim", "number", "", "dimension"),
        Column("note", "note", "text", "", "logarithm of a_dim, not of a_dim_low; a note"),
    ]
    assert prefixed(columns, "winter")[1].meaning == "logarithm of winter_a_dim, not of a_dim_low; a note"


@given(
    st.lists(st.text("abc", min_size=1, max_size=10), unique=True, max_size=30),
    st.text("wxyz", min_size=1, max_size=9),
)
def test_prefixed_short_names_are_unique_and_hold_ten_bytes(shorts, prefix):
    columns = [Column(f"c_{short}", short, "number", "", "m") for short in shorts]
    found = [column.short for column in prefixed(columns, prefix)]
    assert len(set(found)) == len(shorts)
    assert all(len(short.encode()) <= 10 for short in found)


@pytest.mark.parametrize(
    ("value", "words"),
    [(None, "nothing (null)"), (True, "true"), ([1], "a list"), ("x" * 99, repr("x" * 57 + "..."))],
)
def test_what_stood_there_is_told_in_words(value, words):
    assert described(value) == words


# The schema


@pytest.fixture(scope="module")
def schema():
    return json_schema()


def parts(node):
    yield node
    for inner in node.values() if isinstance(node, dict) else node if isinstance(node, list) else ():
        yield from parts(inner)


def test_the_kept_schema_is_that_of_the_models(schema):
    kept = (CONFIG / "geofractal.schema.json").read_text("utf-8")
    assert json.loads(kept) == schema, "run: geofractal schema config/geofractal.schema.json"


def test_the_schema_is_draft_07(schema):
    assert schema["$schema"] == "http://json-schema.org/draft-07/schema#"
    jsonschema.Draft7Validator.check_schema(schema)
    newer = {"prefixItems", "$defs", "unevaluatedProperties", "dependentRequired", "$dynamicRef"}
    assert not [node for node in parts(schema) if isinstance(node, dict) and newer & set(node)]
    assert not [node for node in parts(schema) if isinstance(node, dict) and "$ref" in node and len(node) > 1]


def test_every_key_of_the_schema_is_described(schema):
    for node in parts(schema):
        if isinstance(node, dict) and isinstance(node.get("properties"), dict):
            assert all(part.get("description") for part in node["properties"].values())


def test_the_schema_takes_what_the_models_take(load):
    batch = load(GOOD)
    plain = read_yaml(batch.file)[0].data
    jsonschema.validate(plain, json_schema(), cls=jsonschema.Draft7Validator)


@pytest.mark.parametrize(
    ("barrier", "good"),
    [
        ("roads", True),
        ({"layer": "roads"}, True),
        ({"layer": "roads", "width-m": 12}, True),
        ({"layer": "roads", "width-m": -1}, False),
        ({"layer": "roads", "width": 12}, False),
        ({"width-m": 12}, False),
        (3, False),
    ],
)
def test_the_schema_takes_barriers_with_and_without_a_width(schema, barrier, good):
    asked = {"measure": "fragmentation", "of": "cover", "barriers": [barrier]}
    layers = {"cover": {"source": "cover.tif"}, "roads": {"source": "roads.gpkg"}}
    batch = {"batch": "trial", "layers": layers, "measures": [asked], "outputs": {"folder": "out"}}
    assert jsonschema.Draft7Validator(schema).is_valid(batch) == good


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("quantile: 0.9", "quantile: 9"),
        ("quantile: 0.9", "quantil: 0.9"),
        ("group-by", "group_by"),
        ("workers: 2", "workers: many"),
        ("of: shore, ", ""),
        ("  shore:", "  a/b:"),
        ("measure: vertex-spacing, of: shore", "measure: vertex, of: shore"),
    ],
)
def test_the_schema_refuses_what_the_models_refuse(folder, problems, old, new):
    text = changed(old, new)
    assert problems(text)
    plain = read_yaml(folder / "batch.yaml")[0].data
    with pytest.raises(jsonschema.ValidationError, match=r"."):
        jsonschema.validate(plain, json_schema(), cls=jsonschema.Draft7Validator)


@pytest.mark.parametrize("path", sorted(CONFIG.glob("*.yaml")), ids=lambda path: path.name)
def test_the_shipped_batch_files_hold_to_models_and_schema(path, schema):
    first = path.read_text("utf-8").splitlines()[:2]
    assert first == [
        "# yaml-language-server: $schema=./geofractal.schema.json",
        "# $schema: ./geofractal.schema.json",
    ]
    jsonschema.validate(read_yaml(path)[0].data, schema, cls=jsonschema.Draft7Validator)
    assert load_config(path).measures


def test_a_config_needs_no_heavy_library():
    """Reading a batch file of somebody else's measure loads neither readers nor frames."""
    program = (
        "import sys, geofractal.config\n"
        "print(sorted({'numba', 'pandas', 'pyarrow', 'pyogrio', 'pyproj'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"
