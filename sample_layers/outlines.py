"""Lines out of grids: contours, coarser editions, and borders of labelled cells."""
# ruff: noqa: INP001 - modules of a script, not a package

from __future__ import annotations

import numpy as np
import rasterio.features

# Corners in bits: top left 1, top right 2, bottom right 4, bottom left 8; land keeps to one side.
_CROSSINGS = {
    1: "TL", 2: "RT", 3: "RL", 4: "BR", 6: "BT", 7: "BL", 8: "LB", 9: "TB",
    11: "RB", 12: "LR", 13: "TR", 14: "LT",
}  # fmt: skip
_SADDLES = {5: (("TL", "BR"), ("TR", "BL")), 10: (("RT", "LB"), ("LT", "RB"))}


def contours(field: np.ndarray) -> list[np.ndarray]:
    """Return closed rings of (column, row) along which the field is 0; positive cells keep to one side."""
    land = field > 0.0
    corners = land[:-1, :-1] + 2 * land[:-1, 1:] + 4 * land[1:, 1:] + 8 * land[1:, :-1]
    following: dict[tuple[int, int, bool], tuple[int, int, bool]] = {}
    for row, column in np.argwhere((corners > 0) & (corners < 15)).tolist():
        edges = {
            "T": (row, column, False), "B": (row + 1, column, False),
            "L": (row, column, True), "R": (row, column + 1, True),
        }  # fmt: skip
        code = int(corners[row, column])
        middle = field[row : row + 2, column : column + 2].sum() > 0.0
        pairs = _SADDLES[code][int(middle)] if code in _SADDLES else (_CROSSINGS[code],)
        for start, end in pairs:
            following[edges[start]] = edges[end]
    rings = []
    while following:
        first = next(iter(following))
        chain, edge = [], first
        while edge in following:
            chain.append(edge)
            edge = following.pop(edge)
        rings.append(np.array([_crossing(field, *at) for at in [*chain, first]]))
    return rings


def _crossing(field: np.ndarray, row: int, column: int, down: bool) -> tuple[float, float]:  # noqa: FBT001 - an edge's third coordinate
    here, there = field[row, column], field[row + down, column + (not down)]
    share = here / (here - there)
    return (column, row + share) if down else (column + share, row)


def signed_area(ring: np.ndarray) -> float:
    """Return the area of a closed ring, positive where it runs counter-clockwise."""
    x, y = (ring - ring[0]).T
    return 0.5 * float((x[:-1] * y[1:] - x[1:] * y[:-1]).sum())


def thinned(line: np.ndarray, tolerance: float) -> np.ndarray:
    """Return a line without the vertices that lie within `tolerance` of it (Douglas and Peucker 1973)."""
    keep = np.zeros(len(line), bool)
    keep[[0, -1]] = True
    closed = bool((line[0] == line[-1]).all())
    if closed:
        far = int(((line - line[0]) ** 2).sum(axis=1).argmax())
        keep[far] = True
    spans = [(0, far), (far, len(line) - 1)] if closed else [(0, len(line) - 1)]
    while spans:
        first, last = spans.pop()
        if last - first < 2:
            continue
        (x, y), chord = (line[first + 1 : last] - line[first]).T, line[last] - line[first]
        square = chord[0] * chord[0] + chord[1] * chord[1]
        share = np.minimum(np.maximum((x * chord[0] + y * chord[1]) / max(square, 1e-9), 0.0), 1.0)
        off = (x - share * chord[0]) ** 2 + (y - share * chord[1]) ** 2
        worst = int(off.argmax())
        if off[worst] > tolerance * tolerance:
            at = first + 1 + worst
            keep[at] = True
            spans += [(first, at), (at, last)]
    return line[keep]


def rounded_off(line: np.ndarray, passes: int) -> np.ndarray:
    """Return an open line with its corners rounded: each inner vertex drawn to its neighbours, ends kept."""
    line = line.copy()
    for _ in range(passes):
        line[1:-1] = 0.5 * line[1:-1] + 0.25 * (line[:-2] + line[2:])
    return line


def borders(labels: np.ndarray, passes: int) -> dict[int, list[list[np.ndarray]]]:
    """Return for each label its polygons (rings of column, row) with cell corners rounded off.

    Neighbours share every vertex: a corner of the grid moves the same way in each ring it is in, and
    where three borders meet it stays.
    """
    found: dict[int, list[list[np.ndarray]]] = {}
    for shape, label in rasterio.features.shapes(labels.astype(np.int16)):
        rings = [_stepped(np.array(ring)) for ring in shape["coordinates"]]
        found.setdefault(int(label), []).append(rings)
    width = labels.shape[1] + 1
    corners = [
        ring[:, 1] * width + ring[:, 0] for parts in found.values() for rings in parts for ring in rings
    ]
    steps = np.vstack([np.sort(np.column_stack([ring[:-1], ring[1:]]), axis=1) for ring in corners])
    meeting = np.bincount(np.unique(steps, axis=0).ravel(), minlength=(labels.shape[0] + 1) * width)
    fixed = (meeting != 2).reshape(-1, width)
    return {
        label: [[_rounded_ring(ring, fixed, passes) for ring in rings] for rings in polygons]
        for label, polygons in found.items()
    }


def _stepped(ring: np.ndarray) -> np.ndarray:
    """Return a ring of grid corners with every corner that it passes."""
    steps = []
    for (x, y), (to_x, to_y) in zip(ring[:-1].astype(int), ring[1:].astype(int), strict=True):
        count = max(abs(to_x - x), abs(to_y - y))
        along = np.arange(count)
        steps.append(np.column_stack([x + along * np.sign(to_x - x), y + along * np.sign(to_y - y)]))
    return np.vstack([*steps, steps[0][:1]]).astype(np.int64)


def _rounded_ring(ring: np.ndarray, fixed: np.ndarray, passes: int) -> np.ndarray:
    free = ~fixed[ring[:-1, 1], ring[:-1, 0]]
    points = ring[:-1].astype(float)
    for _ in range(passes):
        drawn = 0.5 * points + 0.25 * (np.roll(points, 1, 0) + np.roll(points, -1, 0))
        points = np.where(free[:, None], drawn, points)
    return np.vstack([points, points[:1]])
