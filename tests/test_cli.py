"""The command line: what it says, where it says it, and with what exit code it ends."""

import json
import os
import signal
import subprocess
import sys
import time
import types

import geopandas
import numpy as np
import plugin_packages
import pytest
import shapely
from batches import wiggle, write_gpkg
from click.testing import CliRunner

import geofractal.batch
from geofractal.cli import cli
from geofractal.config import json_schema, load_config
from geofractal.errors import LayerError, OutputError
from geofractal.scaling.ladder import divider_ladders
from geofractal.testing import lines_of

BATCH = """\
batch: first look
layers: {shore: {source: shore.gpkg}}
measures: [{measure: vertex-spacing, of: shore}]
outputs: {folder: out}
"""


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A folder with a batch file, its source (never opened here), and the example measure installed."""
    plugin_packages.install_example(tmp_path / "site")
    plugin_packages.open_folder(tmp_path / "site", monkeypatch)
    (tmp_path / "shore.gpkg").touch()
    (tmp_path / "batch.yaml").write_text(BATCH)
    monkeypatch.chdir(tmp_path)
    yield tmp_path
    monkeypatch.undo()
    plugin_packages.forget()


@pytest.fixture
def call(folder):  # noqa: ARG001 - every call is made in the folder
    def run(*arguments):
        return CliRunner().invoke(cli, [str(argument) for argument in arguments], prog_name="geofractal")

    return run


def stand_in(monkeypatch, name, **functions):
    """Put functions in the place of a module of the batch."""
    module = types.ModuleType(f"geofractal.batch.{name}")
    vars(module).update(functions)
    monkeypatch.setitem(sys.modules, module.__name__, module)
    monkeypatch.setattr(geofractal.batch, name, module, raising=False)


def record(exit_code=0, refused=None, failed=None):
    reasons = refused or {}
    answered = 10 - sum(reasons.values())
    counts = {"rows": 10, "left_out_by_where": 0, "answered": answered}
    tally = {"measure": "vertex-spacing", "prefix": None, **counts, "refused_by_reason": reasons}
    return {
        "exit_code": exit_code,
        "layers": {"shore": {"measures": [tally]}},
        "failed_layers": failed or {},
    }


# Quick to answer


def test_help_imports_nothing_heavy():
    program = (
        "import sys, geofractal.cli\n"
        "heavy = {'numpy', 'numba', 'pandas', 'pyarrow', 'pydantic', 'pyogrio', 'pyproj', 'rich'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"


def test_help_names_the_commands_and_documents_the_exit_codes(call):
    result = call("--help")
    assert result.exit_code == 0
    for word in ("run", "check", "inspect", "measures", "schema"):
        assert f"\n  {word} " in result.stdout
    for code in (
        "0    done",
        "1    done, with refusals",
        "2    usage",
        "3    an input",
        "4    internal",
        "130  ",
    ):
        assert code in result.stdout


def test_every_command_documents_its_exit_codes_and_options(call):
    for name, command in cli.commands.items():
        assert "Exit codes:" in call(name, "--help").stdout
        options = [parameter for parameter in command.params if parameter.param_type_name == "option"]
        assert all(option.help for option in options)


# Exit codes


@pytest.mark.parametrize("code", [0, 1, 3])
def test_run_ends_with_the_code_of_the_record(call, monkeypatch, code):
    stand_in(monkeypatch, "run", run_batch=lambda batch, *, progress: record(code))  # noqa: ARG005 - its shape
    assert call("run", "batch.yaml").exit_code == code


def test_run_says_what_came_of_each_measure_and_layer(call, folder, monkeypatch):
    ended = record(3, {"zero length": 2, "missing geometry": 1}, {"rivers": "rivers.gpkg is cut off"})
    stand_in(monkeypatch, "run", run_batch=lambda batch, *, progress: ended)  # noqa: ARG005 - its shape
    assert call("run", "batch.yaml").stdout.splitlines() == [
        (
            "shore: vertex-spacing: 7 of 10 rows have figures; without figure: zero length (2);"
            " missing geometry (1)"
        ),
        "rivers: not measured: rivers.gpkg is cut off",
        f"Results and run record: {folder / 'out'}",
    ]


def test_run_tells_requests_apart_and_what_they_left_out(call, monkeypatch):
    ended = record()
    (tally,) = ended["layers"]["shore"]["measures"]
    many = {"empty geometry": 1200, "no class": 3, "missing geometry": 2, "zero length": 1}
    tally |= {"prefix": "winter", "polygons_left_out": many, "barriers_left_out": {"zero length": 2}}
    stand_in(monkeypatch, "run", run_batch=lambda batch, *, progress: ended)  # noqa: ARG005 - its shape
    assert call("run", "batch.yaml").stdout.splitlines()[0] == (
        "shore: vertex-spacing (winter): 10 of 10 rows have figures; polygons left out:"
        " empty geometry (1,200); no class (3); missing geometry (2); and 1 other reason;"
        " barriers left out: zero length (2)"
    )


def test_quiet_runs_say_nothing(call, monkeypatch):
    stand_in(monkeypatch, "run", run_batch=lambda batch, *, progress: record())  # noqa: ARG005 - its shape
    result = call("run", "batch.yaml", "--quiet")
    assert (result.stdout, result.stderr) == ("", "")


def test_a_faulty_batch_file_ends_with_2_and_all_its_faults(call, folder):
    (folder / "batch.yaml").write_text(
        BATCH.replace("out}", "out, colour: red}").replace("of: shore", "of: shoe")
    )
    result = call("run", "batch.yaml")
    assert result.exit_code == 2
    assert result.stdout == ""
    assert result.stderr.splitlines() == [
        "Error: batch.yaml: 2 problems",
        (
            "  batch.yaml:3:42: measures[0].of: no layer 'shoe' is defined under layers; allowed: shore;"
            " did you mean 'shore'?"
        ),
        "  batch.yaml:4:24: outputs.colour: unknown key 'colour'; allowed: folder, formats, tables",
    ]


@pytest.mark.parametrize("arguments", [("run",), ("rum", "batch.yaml"), ("run", "batch.yaml", "--fast")])
def test_wrong_usage_ends_with_2(call, arguments):
    assert call(*arguments).exit_code == 2


@pytest.mark.parametrize(
    ("error", "code"), [(LayerError("layer 'x' has no CRS"), 3), (OutputError("the disk is full"), 3)]
)
def test_errors_of_input_and_output_end_with_3_and_one_plain_message(call, monkeypatch, error, code):
    def fail(batch, *, progress):  # noqa: ARG001 - its shape
        raise error

    stand_in(monkeypatch, "run", run_batch=fail)
    result = call("run", "batch.yaml")
    assert result.exit_code == code
    assert result.stderr == f"Error: {error}\n"


@pytest.mark.parametrize("verbose", [True, False])
def test_an_internal_error_ends_with_4_and_a_traceback_only_when_asked(call, monkeypatch, verbose):
    def fail(batch, *, progress):  # noqa: ARG001 - its shape
        raise KeyError("rung")

    stand_in(monkeypatch, "run", run_batch=fail)
    result = call("run", "batch.yaml", *["--verbose"] * verbose)
    assert result.exit_code == 4
    assert "Internal error: KeyError: 'rung'" in result.stderr
    assert ("Traceback" in result.stderr) is verbose
    assert ("Please report it with what --verbose shows." in result.stderr) is not verbose


def test_warnings_are_plain_lines_that_quiet_hides(call, folder, monkeypatch):
    stand_in(monkeypatch, "run", run_batch=lambda batch, *, progress: record())  # noqa: ARG005 - its shape
    (folder / "batch.yaml").write_text(BATCH.replace("{shore:", "{spare: {source: shore.gpkg}, shore:"))
    said = "Warning: batch.yaml:2:10: layers.spare: no measure uses the layer 'spare'\n"
    assert call("run", "batch.yaml").stderr == said
    assert call("run", "batch.yaml", "-q").stderr == ""


@pytest.mark.parametrize(
    ("style", "expected"),
    [
        ("plain", "shore: measure: 10 features in 0.0 s\n"),
        ("auto", "shore: measure: 10 features in 0.0 s\n"),
        ("json", '"event": "end", "layer": "shore", "step": "measure", "done": 10'),
    ],
)
def test_progress_goes_to_standard_error_in_the_style_asked_for(call, monkeypatch, style, expected):
    def run_batch(batch, *, progress):  # noqa: ARG001 - its shape
        with progress.stage("shore", "measure", 10) as stage:
            stage.advance(10)
        return record()

    stand_in(monkeypatch, "run", run_batch=run_batch)
    result = call("run", "batch.yaml", "--progress", style)
    assert expected in result.stderr
    assert "measure: 10 features" not in result.stdout


@pytest.mark.parametrize(("failed", "code"), [(False, 0), (True, 3)])
def test_check_prints_its_report_and_fails_where_a_layer_cannot_be_read(call, monkeypatch, failed, code):
    def check_batch(batch):
        return types.SimpleNamespace(lines=lambda: [batch.name, "one column to come"], failed=failed)

    stand_in(monkeypatch, "check", check_batch=check_batch)
    result = call("check", "batch.yaml")
    assert (result.exit_code, result.stdout) == (code, "first look\none column to come\n")


# Measures and schema


def test_measures_lists_what_is_installed(call):
    words = [line.split()[0] for line in call("measures").stdout.splitlines()]
    assert words == sorted(words)
    assert {"divider-dimension", "sinuosity", "vertex-spacing"} <= {*words}


def test_measures_describes_one(call):
    text = call("measures", "vertex-spacing").stdout
    assert "also-quantiles (list of number; default []): further quantiles, a column each" in text
    assert "vertex_spacing_m (vtxspace_m; number, m): quantile of the distances" in text


def test_measures_are_also_json(call):
    [told] = json.loads(call("measures", "--json", "vertex-spacing").stdout)
    assert told["columns"][0]["unit"] == "m"


def test_an_unknown_measure_ends_with_2(call):
    result = call("measures", "vertex-space")
    assert result.exit_code == 2
    assert "Did you mean 'vertex-spacing'?" in result.stderr


def test_schema_prints_or_writes_the_schema_with_every_installed_measure(call, folder):
    printed = json.loads(call("schema").stdout)
    assert call("schema", "schema.json").exit_code == 0
    assert json.loads((folder / "schema.json").read_text("utf-8")) == printed == json_schema()
    entries = printed["properties"]["measures"]["items"]["oneOf"]
    assert "vertex-spacing" in [entry["properties"]["measure"]["const"] for entry in entries]


def test_a_schema_that_cannot_be_written_ends_with_3(call):
    result = call("schema", "no/such/folder.json")
    assert result.exit_code == 3
    assert result.stderr == "Error: no/such/folder.json: cannot be written: No such file or directory\n"


# Inspect


@pytest.fixture
def layers(folder):
    """Lines of 10 km with a vertex every 25 m, odd rows of each kind, a layer without CRS, a torn file."""
    along = np.linspace(0.0, 10_000.0, 401)
    straight = [np.column_stack([1.7e6 + along, np.full(401, 5.4e6 + 1000.0 * k)]) for k in range(3)]
    odd = [None, shapely.Point(1.7e6, 5.4e6), shapely.LineString([(1.7e6, 5.4e6)] * 2)]
    shapes = [*map(shapely.LineString, straight), *odd]
    rivers = geopandas.GeoDataFrame({"river": ["Ōrua"] * 6}, geometry=shapes, crs=2193)
    (folder / "data").mkdir()
    rivers.to_file(folder / "data" / "rivers.gpkg")
    box = geopandas.GeoDataFrame({"n": [1]}, geometry=[shapely.box(0, 0, 10, 10)], crs=None)
    with pytest.warns(UserWarning, match="crs"):
        box.to_file(folder / "data" / "box.shp")
    (folder / "data" / "torn.gpkg").write_bytes((folder / "data" / "rivers.gpkg").read_bytes()[:9_000])
    return folder / "data"


def test_inspect_tells_what_a_folder_holds(call, layers):
    found = json.loads(call("inspect", layers, "--json").stdout)
    by_name = {layer["layer"]: layer for layer in found["layers"]}
    rivers = by_name["rivers"]
    assert rivers["rows"] == 6
    assert rivers["kinds"] == {"lines": 4, "missing": 1, "points": 1}
    assert rivers["crs"] == "NZGD2000 / New Zealand Transverse Mercator 2000 (EPSG:2193)"
    assert rivers["bounds"] == [1.7e6, 5.4e6, 1.71e6, 5.402e6]
    assert rivers["vertices"] == 3 * 401
    wrong = ["missing geometry", "points where lines are wanted", "zero length"]
    assert rivers["problems"] == dict.fromkeys(wrong, 1)
    # 25 m apart, quantiles to half a percent, and a map scale that differs from 1 by less than 0.1 % here
    assert list(rivers["spacing_m"].values()) == pytest.approx([25.0] * 3, rel=0.01)
    assert by_name["box"]["crs"] is None
    assert by_name["box"]["problems"] == {"no CRS; state it under crs": 1}
    assert [path.rpartition(os.sep)[2] for path in found["unread"]] == ["torn.gpkg"]


def test_inspect_tells_the_ladder_that_a_measure_would_use(call, layers):
    """A straight line of 10 km with a vertex every 25 m, drawn here on a plane."""
    along = np.linspace(0.0, 10_000.0, 401)
    rulers = divider_ladders(lines_of([[np.column_stack([along, np.zeros(401)])]])).rulers
    [rivers] = json.loads(call("inspect", layers / "rivers.gpkg", "--json").stdout)["layers"]
    assert rivers["ruler_min_m"] == pytest.approx(rulers[0], rel=0.01)
    assert rivers["ruler_max_m"] == pytest.approx(rulers[-1], rel=0.01)
    assert rivers["decades"]["50%"] == pytest.approx(np.log10(rulers[-1] / rulers[0]), abs=0.01)


def test_inspect_in_text_says_the_same(call, layers):
    text = call("inspect", layers).stdout
    assert "6: 4 lines, 1 missing, 1 points" in text
    assert "problem   no CRS; state it under crs (all rows)" in text
    assert "torn.gpkg: cannot be read: " in text


def test_a_starter_is_a_batch_file_that_loads(call, folder, layers):
    assert call("inspect", layers, "--starter", "starter.yaml").exit_code == 0
    batch = load_config(folder / "starter.yaml")
    asked = [(request.measure, request.of) for request in batch.measures]
    assert asked == [("divider-dimension", "box"), ("divider-dimension", "rivers"), ("sinuosity", "rivers")]
    assert batch.layers["rivers"].source == layers / "rivers.gpkg"
    text = (folder / "starter.yaml").read_text("utf-8")
    assert text.startswith("# yaml-language-server: $schema=./geofractal.schema.json\n# $schema: ./")
    assert "# crs: EPSG:....   the layer states none" in text


def test_a_starter_never_replaces_a_file(call, folder, layers):
    (folder / "starter.yaml").write_text("mine")
    result = call("inspect", layers, "--starter", "starter.yaml")
    assert result.exit_code == 3
    assert "starter.yaml: is there already; name a new file" in result.stderr
    assert (folder / "starter.yaml").read_text() == "mine"


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("nowhere.gpkg", "nowhere.gpkg: no such file or folder"),
        ("empty", "empty: holds no vector or raster file; known endings: .gpkg"),
        ("shore.gpkg", "shore.gpkg"),
    ],
)
def test_what_cannot_be_inspected_ends_with_3(call, folder, name, words):
    (folder / "empty").mkdir()
    result = call("inspect", name)
    assert result.exit_code == 3
    assert words in result.stderr


# Interrupts

HANGING = """
import collections, itertools, sys, types
run = types.ModuleType("geofractal.batch.run")
def run_batch(batch, *, progress):
    print("running", flush=True)
    collections.deque(itertools.repeat(0, 10**12), maxlen=0)  # as GDAL does: holds the interpreter lock
run.run_batch = run_batch
sys.modules["geofractal.batch.run"] = run
from geofractal.cli import main
sys.argv = ["geofractal", "run", "batch.yaml"]
main()
"""


@pytest.mark.skipif(os.name != "posix", reason="signals reach a pipe only on POSIX")
def test_an_interrupted_run_ends_within_two_seconds_and_says_what_is_kept(folder):
    (folder / "batch.yaml").write_text(BATCH.replace("vertex-spacing", "sinuosity"))
    process = subprocess.Popen(
        [sys.executable, "-c", HANGING], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, cwd=folder
    )
    assert process.stdout.readline() == "running\n"
    began = time.monotonic()
    process.send_signal(signal.SIGINT)
    process.wait(10)
    assert time.monotonic() - began < 2.0
    assert process.stderr.read() == "\nInterrupted. Nothing was finished; earlier outputs are as they were.\n"


def test_calibrate_prints_a_table_and_writes_it_and_its_figure(tmp_path):
    table, figure = tmp_path / "found.csv", tmp_path / "found.svg"
    asked = ["--curves", "5", "--vertices", "500", "--dimension", "1.2", "--rungs", "12"]
    found = CliRunner().invoke(cli, ["calibrate", *asked, "--table", str(table), "--figure", str(figure)])
    assert found.exit_code == 0, found.output
    assert "coverage" in found.stdout.splitlines()[0]
    rows = table.read_text("utf-8").splitlines()
    assert len(rows) == len(found.stdout.splitlines())
    assert rows[1].startswith("fractional trails,1.2,500,5,")
    assert figure.read_text("utf-8").startswith("<svg")


def test_calibrate_imitates_the_lines_of_a_layer(tmp_path):
    source = write_gpkg(tmp_path / "in.gpkg", [wiggle(seed, vertices=800) for seed in range(4)])
    found = CliRunner().invoke(cli, ["calibrate", str(source), "--curves", "4"])
    assert found.exit_code == 0, found.output
    assert {line.split()[-9] for line in found.stdout.splitlines()[1:]} == {"800"}


def test_calibrate_says_what_cannot_be_drawn():
    found = CliRunner().invoke(cli, ["calibrate", "--dimension", "2.5"])
    assert found.exit_code == 2
    assert "1 < D < 2" in found.output
