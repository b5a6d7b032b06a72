"""What mapping does to a line: generalisation, snapping and tracing from raster cells."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from geofractal.synthetic.curve import Curve, Floats, clipped


def generalised(curve: Curve, tolerance: float) -> Curve:
    """Drop vertices that lie within `tolerance` of the line without them (Douglas & Peucker 1973).

    Detail under the tolerance is gone: the regimes start there.
    """
    import shapely

    thinned = shapely.simplify(shapely.linestrings(curve.xy), tolerance, preserve_topology=False)
    return _remade(curve, shapely.get_coordinates(thinned), tolerance)


def snapped(curve: Curve, grid: float) -> Curve:
    """Round every vertex to a grid, as integer coordinates do, and drop repeats."""
    return _remade(curve, _cells(curve.xy, grid, 0.5) * grid, grid)


def traced(curve: Curve, cell: float, *, diagonal: bool = True) -> Curve:
    """Trace the curve through raster cells, as a river vectorised from a raster is.

    Parameters
    ----------
    curve : any
    cell : side of the cells
    diagonal : steps between cell centres in eight directions (as a flow path is traced); without it
        every step runs along one axis (as the outline of a polygonised class is)

    The result visits each cell in which the curve has a point, no two vertices being farther apart than one
    step; only the staircase is left below the cell, so the regimes start there.
    """
    visited = _cells(_densified(curve.xy, cell / 2), cell, 0.0)
    if not diagonal:
        visited = _square_cornered(visited)
    return _remade(curve, (visited + 0.5) * cell, cell)


def polygonised(curve: Curve, cell: float) -> Curve:
    """Rasterise a ring by its cell centres and return the outline of its largest patch, along cell edges.

    Raises
    ------
    ValueError
        The curve is open, or so small that no cell centre lies inside.
    """
    from rasterio.features import rasterize, shapes
    from rasterio.transform import from_origin

    if not curve.closed:
        raise ValueError("an open line has no inside: only a ring can be polygonised; trace it instead")
    (west, south), (east, north) = curve.xy.min(axis=0) - cell, curve.xy.max(axis=0) + cell
    rows, columns = int((north - south) / cell) + 1, int((east - west) / cell) + 1
    place = from_origin(west, north, cell, cell)
    ring = {"type": "Polygon", "coordinates": [curve.xy.tolist()]}
    inside = rasterize([ring], out_shape=(rows, columns), transform=place, dtype="uint8")
    outlines = [np.array(s["coordinates"][0]) for s, _ in shapes(inside, mask=inside == 1, transform=place)]
    if not outlines:
        raise ValueError(f"cell of {cell}: no cell centre lies inside the ring; use smaller cells")
    return _remade(curve, max(outlines, key=lambda xy: abs(_area(xy))), cell)


def _area(xy: Floats) -> float:
    x, y = (xy - xy[0]).T
    return 0.5 * float(np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]))


def _remade(curve: Curve, xy: Floats, finest: float) -> Curve:
    if len(xy) < 2:
        raise ValueError(f"nothing is left of the curve at a detail of {finest}; use a finer one")
    regimes = clipped(curve.regimes, finest, np.inf)
    return replace(curve, xy=np.ascontiguousarray(xy), regimes=regimes)


def _cells(xy: Floats, side: float, shift: float) -> Floats:
    """Return the cells that the points lie in, one after the other, without repeats."""
    cells = np.floor(xy / side + shift)
    moved = np.concatenate([[True], (cells[1:] != cells[:-1]).any(axis=1)])
    return np.ascontiguousarray(cells[moved])


def _densified(xy: Floats, step: float) -> Floats:
    """Add vertices so that no two are farther apart than `step`."""
    moves = np.diff(xy, axis=0)
    pieces = np.maximum(np.ceil(np.hypot(*moves.T) / step), 1).astype(np.int64)
    owner = np.repeat(np.arange(len(moves)), pieces)
    place = np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    dense = xy[owner] + moves[owner] * (place / pieces[owner])[:, None]
    return np.concatenate([dense, xy[-1:]])


def _square_cornered(cells: Floats) -> Floats:
    """Put a corner into every diagonal step: along the first axis, then the second."""
    diagonal = (cells[1:] != cells[:-1]).all(axis=1)
    corners = np.column_stack([cells[1:, 0], cells[:-1, 1]])[diagonal]
    return np.insert(cells, np.flatnonzero(diagonal) + 1, corners, axis=0)
