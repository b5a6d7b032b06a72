"""Small batches for the tests: layers written by geopandas, a batch file beside them, results read back."""

import json
from pathlib import Path

import geopandas as gpd
import numpy as np
import shapely

from geofractal.batch.run import run_batch
from geofractal.config import load_config

UTM = "EPSG:32631"


def wiggle(seed=1, vertices=400, step=10.0, start=(500_000.0, 6_000_000.0)):
    """Return a rough line in metres about a place at sea."""
    steps = np.random.default_rng(seed).normal(scale=step, size=(vertices, 2))
    steps[:, 0] += step
    return shapely.LineString(np.cumsum(steps, axis=0) + start)


def write_gpkg(path, geometries, crs=UTM, layer="rivers", **columns):
    frame = gpd.GeoDataFrame(
        {"name": [f"row {i}" for i in range(len(geometries))], **columns}, geometry=list(geometries), crs=crs
    )
    frame.to_file(path, layer=layer)
    return path


def write_batch(folder, layers, measures, outputs=None, **sections):
    """Write a batch file; JSON is YAML, too."""
    said = {
        "batch": "trial",
        "layers": layers,
        "measures": measures,
        "outputs": outputs or {"folder": "out", "formats": ["geopackage"]},
        **sections,
    }
    path = Path(folder) / "batch.yaml"
    path.write_text(json.dumps(said, default=str), encoding="utf-8")
    return path


def run(folder, layers, measures, outputs=None, progress=None, **sections):
    return run_batch(
        load_config(write_batch(folder, layers, measures, outputs, **sections)), progress=progress
    )


def run_rivers(folder, geometries, *, layer=None, options=None, crs=UTM, columns=None, **sections):
    """Measure the divider dimension of one layer of geometries and return record and copy."""
    write_gpkg(Path(folder) / "in.gpkg", geometries, crs=crs, **(columns or {}))
    record = run(
        folder,
        {"rivers": {"source": "in.gpkg", **(layer or {})}},
        [{"measure": "divider-dimension", "of": "rivers", **(options or {})}],
        **sections,
    )
    return record, gpd.read_file(Path(folder) / "out" / "in.gpkg")
