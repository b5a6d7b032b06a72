"""Make the sample layers: an invented archipelago, drawn far out in the ocean where no land is.

Run ``python sample_layers/make_sample_layers.py [folder]``; without a folder the layers beside this script
are made anew. Nothing here is a real place: relief, shores, rivers, roads and names come from seeded
numbers, the same on every machine.
"""
# ruff: noqa: INP001 - a script

from __future__ import annotations

import sys
from pathlib import Path
from xml.sax.saxutils import escape

import geopandas
import numpy as np
import pyogrio
import pyproj
import rasterio
import shapely
import shapely.ops
from cover import CLASSES, EARLIER, LATER, Date, Ground, classify
from names import name
from outlines import contours, signed_area, thinned
from rasterio.transform import from_origin
from relief import EAST, NORTH, TOP, WEST, Relief, centres, shore_field
from roads import roads, settlements
from waters import Reach, basins, ground, reaches

CRS = "EPSG:32625"
SHORE_CELL = 50.0
SMALLEST_ISLAND_M2 = 2e4
MADE = "2026-01-01T00:00:00.000Z"


class Names:
    """Hands out each name once, by coast."""

    def __init__(self) -> None:
        self._used: dict[str, int] = {}

    def for_place(self, at: np.ndarray) -> str | None:
        """Return a new name, None once the coast's sixty are used up."""
        east, north = at[0] - EAST, at[1] - NORTH
        coast = name(0, east, north)
        number = self._used[coast] = self._used.get(coast, -1) + 1
        return name(number, east, north) if number < 60 else None


def islands() -> list[shapely.Polygon]:
    """Return the islands, largest first."""
    easting, northing = centres(SHORE_CELL)
    rings = [
        np.round(
            np.column_stack([easting[0] + SHORE_CELL * ring[:, 0], northing[0] - SHORE_CELL * ring[:, 1]]), 1
        )
        for ring in contours(shore_field(*np.meshgrid(easting, northing)))
    ]
    areas = np.array([signed_area(ring) for ring in rings])
    areas *= np.sign(areas[np.abs(areas).argmax()])
    return [
        shapely.Polygon(rings[i]) for i in np.argsort(-areas, kind="stable") if areas[i] > SMALLEST_ISLAND_M2
    ]


def shoreline(land: list[shapely.Polygon], names: Names) -> geopandas.GeoDataFrame:
    """Return the islands as rows."""
    found = [names.for_place(np.array(island.representative_point().coords[0])) for island in land]
    return geopandas.GeoDataFrame(
        {
            "shore_id": [f"S{i:03d}" for i in range(1, len(land) + 1)],
            "island": found,
            "kind": ["main island"] + ["island" if island.area > 1e6 else "islet" for island in land[1:]],
        },
        geometry=land,
        crs=CRS,
    )


def edition(
    shore: geopandas.GeoDataFrame, tolerance: float, smallest: float, crs: str, digits: int
) -> geopandas.GeoDataFrame:
    """Return a coarser mapping of the shores, as a smaller scale would show them, in another CRS."""
    kept = shore[shore.area > smallest].copy()
    to = pyproj.Transformer.from_crs(CRS, crs, always_xy=True)
    coarse = []
    for island in kept.geometry:
        ring = thinned(np.array(island.exterior.coords), tolerance)
        finer = tolerance
        while not shapely.Polygon(ring).is_valid:
            finer *= 0.8
            ring = thinned(np.array(island.exterior.coords), finer)
        coarse.append(shapely.Polygon(np.round(np.column_stack(to.transform(*ring.T)), digits)))
    return geopandas.GeoDataFrame(kept.drop(columns="geometry"), geometry=coarse, crs=crs)


def stretches(shore: geopandas.GeoDataFrame, mouths: dict[str, np.ndarray]) -> geopandas.GeoDataFrame:
    """Return shores as lines: the main island's cut at the mouths of its large rivers, the others whole."""
    main = shore.geometry.iloc[0].exterior
    places = sorted((main.project(shapely.Point(mouth)), river) for river, mouth in mouths.items())
    rows = []
    for (start, river), (end, following) in zip(places, places[1:] + places[:1], strict=True):
        if start < end:
            line = shapely.ops.substring(main, start, end)
        else:
            tail, head = (
                shapely.ops.substring(main, start, main.length),
                shapely.ops.substring(main, 0.0, end),
            )
            line = shapely.LineString([*tail.coords, *head.coords[1:]])
        rows.append((f"{river} to {following}", shore.island.iloc[0], line))
    rows += [
        (island, island, ring.exterior)
        for island, ring in zip(shore.island[1:], shore.geometry[1:], strict=True)
    ]
    return geopandas.GeoDataFrame(
        {
            "stretch_id": [f"L{i:03d}" for i in range(1, len(rows) + 1)],
            "stretch": [row[0] for row in rows],
            "island": [row[1] for row in rows],
        },
        geometry=[shapely.LineString(row[2]) for row in rows],
        crs=CRS,
    )


def channels(found: list[Reach], names: Names) -> geopandas.GeoDataFrame:
    """Return the reaches as rows, and one that is only planned and has no line yet."""
    by_stream = {}
    for stream in sorted({reach.stream for reach in found}):
        of_stream = [reach for reach in found if reach.stream == stream]
        long_enough = sum(shapely.LineString(reach.line).length for reach in of_stream) > 2_500.0
        by_stream[stream] = names.for_place(of_stream[0].line[-1]) if long_enough else None
    identity = {id(reach): f"R{number:04d}" for number, reach in enumerate(found, start=1)}
    by_cell = {reach.cells[0]: identity[id(reach)] for reach in found}
    planned = {"river": by_stream[STRAIGHT_CUT], "status": "planned", "width_m": 18.0}
    rows = [
        {
            "reach_id": identity[id(reach)],
            "river": by_stream[reach.stream],
            "status": reach.status,
            "width_m": round(float(2.2 * np.sqrt(reach.drained_km2)), 1),
            "upstream_km2": round(float(reach.drained_km2), 2),
            "flows_to": by_cell.get(reach.cells[-1]),
        }
        for reach in found
    ]
    rows.append({"reach_id": f"R{len(found) + 1:04d}", **planned, "upstream_km2": None, "flows_to": None})
    return geopandas.GeoDataFrame(
        rows, geometry=[*(shapely.LineString(r.line) for r in found), None], crs=CRS
    )


STRAIGHT_CUT = 2


def write_vectors(
    folder: Path, relief: Relief, found: list[Reach], land: list[shapely.Polygon]
) -> np.ndarray:
    """Write all vector layers; return the towns as easting, northing and weight."""
    names = Names()
    rivers = channels(found, names)
    shore = shoreline(land, names)
    by_mouth = {reach.cells[-2]: row for row, reach in enumerate(found)}
    drained = basins(relief, shapely.MultiPolygon(land))
    main_rivers = [rivers.river[by_mouth[cell]] for cell in drained]
    mouths = {river: found[by_mouth[cell]].line[-1] for river, cell in zip(main_rivers, drained, strict=True)}
    basin_rows = geopandas.GeoDataFrame(
        {
            "basin_id": [f"B{i}" for i in range(1, len(drained) + 1)],
            "basin": [f"{river} basin" for river in main_rivers],
            "main_river": main_rivers,
        },
        geometry=list(drained.values()),
        crs=CRS,
    )
    towns, hamlets = settlements(found)
    built = roads(relief, towns, hamlets)
    road_rows = geopandas.GeoDataFrame(
        {
            "road_id": [f"W{i:02d}" for i in range(1, len(built) + 1)],
            "road_class": [kind for kind, _ in built],
            "width_m": [14.0 if kind == "main" else 6.0 for kind, _ in built],
        },
        geometry=[shapely.LineString(line) for _, line in built],
        crs=CRS,
    )
    layers = {
        "shoreline": shore,
        "shore_stretches": stretches(shore, mouths),
        "channels": rivers,
        "basins": basin_rows,
        "roads": road_rows,
    }
    for layer, rows in layers.items():
        pyogrio.write_dataframe(rows, folder / "archipelago.gpkg", layer=layer, driver="GPKG")
    middle = edition(shore, 90.0, 1e5, "EPSG:4326", 6)
    pyogrio.write_dataframe(
        middle, folder / "shore_medium_scale.geojson", driver="GeoJSON", COORDINATE_PRECISION=6
    )
    small = edition(shore, 700.0, 1e6, "EPSG:3395", 0)
    pyogrio.write_dataframe(
        small, folder / "shore_small_scale.shp", driver="ESRI Shapefile", encoding="UTF-8",
        DBF_DATE_LAST_UPDATE=MADE[:10],
    )  # fmt: skip
    places = ground(np.array(towns))
    return np.column_stack([places, [1.25, 1.0, 0.9, 0.75, 0.7, 0.65, 0.85]])


def write_cover(path: Path, land_cover: Ground, cell: float, date: Date) -> None:
    """Write one land-cover map: a paletted GeoTIFF, its class names beside it."""
    easting, northing = centres(cell)
    profile = {
        "driver": "GTiff", "width": len(easting), "height": len(northing), "count": 1, "dtype": "uint8",
        "crs": CRS, "transform": from_origin(WEST, TOP, cell, cell), "nodata": 0, "compress": "deflate",
        "zlevel": 9, "tiled": True, "blockxsize": 256, "blockysize": 256,
    }  # fmt: skip
    codes = np.vstack([
        classify(land_cover, easting, northing[row : row + 256], date) for row in range(0, len(northing), 256)
    ])  # fmt: skip
    with rasterio.open(path, "w", **profile) as target:
        target.write(codes, 1)
        target.write_colormap(
            1, {0: (255, 255, 255, 0)} | dict(enumerate(((*c, 255) for c in CLASSES.values()), 1))
        )
    categories = "".join(f"      <Category>{escape(label)}</Category>\n" for label in ("", *CLASSES))
    path.with_name(path.name + ".aux.xml").write_text(
        '<PAMDataset>\n  <PAMRasterBand band="1">\n    <CategoryNames>\n'
        f"{categories}    </CategoryNames>\n  </PAMRasterBand>\n</PAMDataset>\n",
        encoding="utf-8",
    )


def make(folder: Path) -> None:
    """Make every sample layer in a folder, replacing those that are there."""
    folder.mkdir(parents=True, exist_ok=True)
    for stale in (*folder.glob("archipelago.*"), *folder.glob("shore_*"), *folder.glob("land_cover_*")):
        stale.unlink()
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": MADE})
    relief = Relief()
    land = islands()
    found = reaches(relief, shapely.MultiPolygon(land))
    towns = write_vectors(folder, relief, found, land)
    land_cover = Ground(relief, towns)
    write_cover(folder / "land_cover_2006.tif", land_cover, 50.0, EARLIER)
    write_cover(folder / "land_cover_2024.tif", land_cover, 25.0, LATER)


if __name__ == "__main__":
    make(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
