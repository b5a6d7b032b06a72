"""The plane of true distances that a layer of polygons is laid on."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely

from geofractal.kernels import planes as kernels
from geofractal.landcover.polygons import Geometries, longest_edge
from geofractal.reader.conic import on_conic
from geofractal.reader.crs import Bounds, source_crs
from geofractal.reader.planes import LayerPlane, layer_plane

if TYPE_CHECKING:
    from pyproj import CRS

    from geofractal.measure import Floats


@dataclass(frozen=True)
class GroundPlane:
    """An equidistant plane for a whole layer: conic or azimuthal, whichever is off by less.

    Attributes
    ----------
    crs : of the layer; a plane without an Earth under it is taken as it is
    bounds : of the layer
    budget : worst relative distance error allowed
    """

    crs: CRS
    bounds: Bounds
    budget: float = 0.005

    @cached_property
    def _plane(self) -> LayerPlane | None:
        wkt = self.crs.to_wkt()
        return None if source_crs(wkt).kind == "as-given" else layer_plane(wkt, self.bounds)

    @property
    def name(self) -> str:
        """Return which plane it is."""
        if self._plane is None:
            return "as-given"
        return "conic" if self._plane.conic_distortion < self._plane.azimuthal_distortion else "azimuthal"

    @property
    def distortion(self) -> float:
        """Return the worst relative distance error over the bounds."""
        plane = self._plane
        return 0.0 if plane is None else min(plane.conic_distortion, plane.azimuthal_distortion)

    @property
    def problem(self) -> str | None:
        """Return why distances cannot be measured; None where they can."""
        if self.distortion <= self.budget:
            return None
        off = f"distances over the layer are off by up to {100 * self.distortion:.3g} % on its best plane"
        return f"{off} (budget: {100 * self.budget:g} %); measure smaller parts, or a raster"

    def lay(self, geometries: Geometries) -> Geometries:
        """Return geometries of the layer's CRS on the plane, in metres."""
        dense = geometries if self._plane is None else shapely.segmentize(geometries, longest_edge(self.crs))
        found: Any = shapely.transform(dense, self._lay)
        return np.asarray(found, object)

    def _lay(self, xy: Floats) -> Floats:
        source, plane = source_crs(self.crs.to_wkt()), self._plane
        if plane is None:
            return xy * source.unit
        lonlat = source.lonlat(np.ascontiguousarray(xy))
        if self.name == "conic" and plane.conic is not None:
            return on_conic(source, plane.conic, lonlat)
        xyz = kernels.geocentric(lonlat, source.a, source.e2)
        centre, runs = np.array([plane.centre]), np.array([0, len(xyz)])
        return kernels.azimuthal(xyz, runs, centre, source.a, source.e2)[0]
