"""The house stands as the contributors' guide says: one-way imports, a fixed top level, names that exist."""

import ast
import importlib
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "geofractal"

# Each floor may import itself, what is listed for it, and what all may use.
FOR_ALL = {"errors", "measure"}
MAY_IMPORT = {
    "errors": set(),
    "versions": set(),
    "measure": set(),
    "interrupt": set(),
    "kernels": set(),
    "scaling": {"kernels"},
    "synthetic": {"kernels"},
    "landcover": {"kernels", "scaling"},
    "reader": {"kernels", "scaling", "landcover", "interrupt"},
    "estimators": {"kernels", "scaling", "landcover"},
    "writer": {"reader", "interrupt"},
    "registry": set(),
    "config": {"registry", "reader"},
}


def _floor(path):
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def _imported_floors(path):
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        names = []
        if isinstance(node, ast.ImportFrom) and node.module:
            names = [f"{node.module}.{alias.name}" for alias in node.names]
        elif isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        for name in names:
            parts = name.split(".")
            if parts[0] == "geofractal" and len(parts) > 1:
                yield parts[1]


@pytest.mark.parametrize("floor", MAY_IMPORT)
def test_imports_run_one_way(floor):
    paths = [path for path in PACKAGE.rglob("*.py") if _floor(path) == floor]
    assert paths
    for path in paths:
        assert set(_imported_floors(path)) <= MAY_IMPORT[floor] | FOR_ALL | {floor}, path


def test_the_top_level_is_as_agreed():
    agreed = {
        "pyproject.toml",
        "README.md",
        "DEVELOPERS.md",
        "geofractal",
        "tests",
        "config",
        "sample_layers",
    }
    made_by_runs = {"out", "dist"}
    found = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")}
    assert found - made_by_runs == agreed


def test_continuous_integration_runs_the_readme_command():
    blocks = re.findall(r"```sh\n(.*?)\n```", (ROOT / "README.md").read_text("utf-8"), flags=re.DOTALL)
    command = next(block for block in blocks if "pytest" in block)
    assert command in (ROOT / ".ci" / "run").read_text("utf-8")


def test_every_name_the_guide_cites_exists():
    cited = set(re.findall(r"`(geofractal(?:\.\w+)+)`", (ROOT / "DEVELOPERS.md").read_text("utf-8")))
    assert cited
    for name in cited:
        module, _, attribute = name.rpartition(".")
        try:
            importlib.import_module(name)
        except ModuleNotFoundError:
            assert hasattr(importlib.import_module(module), attribute), name
