"""Packages of measures, installed for one test: a folder on the path with the metadata pip would leave."""

import shutil
import sys
import tomllib
from pathlib import Path

from geofractal import registry

EXAMPLE = Path(__file__).parent / "example_measure"


def install(folder, name, entries):
    """Write the metadata of an installed package whose entry points are `entries` (name: object)."""
    info = folder / f"{name}-0.1.0.dist-info"
    info.mkdir(parents=True)
    (info / "METADATA").write_text(f"Metadata-Version: 2.1\nName: {name}\nVersion: 0.1.0\n")
    lines = [f"{key} = {value}" for key, value in entries.items()]
    (info / "entry_points.txt").write_text("\n".join([f"[{registry.GROUP}]", *lines, ""]))


def install_example(folder):
    """Install the example measure as its own pyproject.toml describes it."""
    project = tomllib.loads((EXAMPLE / "pyproject.toml").read_text())["project"]
    shutil.copytree(EXAMPLE / "vertex_spacing", folder / "vertex_spacing")
    install(folder, project["name"], project["entry-points"][registry.GROUP])


def forget():
    """Make the registry look again at what is installed."""
    registry._entries.cache_clear()
    registry.load_any_measure.cache_clear()


def open_folder(folder, monkeypatch):
    """Put `folder` on the path, as if pip had installed into it, until the test ends."""
    monkeypatch.syspath_prepend(folder)
    for name in [name for name in sys.modules if name.split(".")[0] == "vertex_spacing"]:
        monkeypatch.delitem(sys.modules, name)
    forget()
