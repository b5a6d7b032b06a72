"""Small class maps for the tests: strips cut from arrays, and patches found cell by cell."""

from collections import defaultdict

import numpy as np
from pyproj import CRS

from geofractal.landcover.grid import Grid
from geofractal.landcover.labelling import label_patches
from geofractal.landcover.strips import CUT_DOWN, CUT_DOWN_LEFT, CUT_DOWN_RIGHT, CUT_RIGHT, Strip

PLANE = CRS.from_wkt('LOCAL_CS["test plane",UNIT["metre",1]]')


def plane_grid(codes, cell=(1.0, 1.0)):
    return Grid(*codes.shape, (cell[0], 0.0, 0.0, 0.0, -cell[1], 0.0), PLANE)


def strips(codes, rows=None, *, grid=None, zones=None, cuts=None):
    """Cut a map of class indices (-1: not covered) into strips of `rows` rows."""
    codes = np.ascontiguousarray(codes, dtype=np.int16)
    grid, rows = grid or plane_grid(codes), rows or len(codes)
    for first in range(0, len(codes), rows):
        part = slice(first, first + rows)
        count = len(codes[part])
        yield Strip(
            first,
            codes[part],
            grid.sizes(first, count),
            first + count == len(codes),
            None if zones is None else np.ascontiguousarray(zones[part], dtype=np.int32),
            None if cuts is None else np.ascontiguousarray(cuts[part], dtype=np.uint8),
        )


def label(codes, rows=None, *, neighbours=8, outlines=False, **given):
    """Return all that the labeller hands out, joined: patches, pieces, parts (lines of whole numbers)."""
    found = list(label_patches(strips(codes, rows, **given), neighbours=neighbours, outlines=outlines))
    tables = ("patches", "pieces", "parts")
    return tuple(np.concatenate([getattr(part, name).values for part in found]) for name in tables)


STEPS = {(0, 1): CUT_RIGHT, (1, 0): CUT_DOWN, (1, 1): CUT_DOWN_RIGHT, (1, -1): CUT_DOWN_LEFT}


def components(codes, neighbours, *, zones=None, cuts=None):
    """Return component number of each covered cell (-1 elsewhere), by plain flooding over links."""
    rows, columns = codes.shape
    links = defaultdict(list)
    for r, c in np.ndindex(rows, columns):
        for (down, right), bit in STEPS.items():
            r2, c2 = r + down, c + right
            if not (r2 < rows and 0 <= c2 < columns) or (neighbours == 4 and down and right):
                continue
            same = codes[r, c] == codes[r2, c2] and (zones is None or zones[r, c] == zones[r2, c2])
            if same and not (cuts is not None and cuts[r, c] & bit):
                links[r, c].append((r2, c2))
                links[r2, c2].append((r, c))
    number, found = np.full(codes.shape, -1), 0
    for cell in np.ndindex(rows, columns):
        if codes[cell] < 0 or number[cell] >= 0:
            continue
        stack = [cell]
        number[cell] = found
        while stack:
            for other in links[stack.pop()]:
                if number[other] < 0:
                    number[other] = found
                    stack.append(other)
        found += 1
    return number


def lines_by_hand(codes, number, *, zones=None, unit=1, cuts=None):
    """Return (class, zone, first row, first column, last row, left, right, cells, edge, border edge,
    zone edge, barrier edge) of each component on unit cells, sorted; lengths in units of `unit`."""
    padded = np.pad(codes, 1, constant_values=-1)
    numbers = np.pad(number, 1, constant_values=-1)
    place = np.pad(np.zeros_like(codes) if zones is None else zones, 1, constant_values=-9)
    barred = np.pad(np.zeros_like(codes) if cuts is None else cuts, 1)
    lines = []
    for k in range(number.max() + 1):
        cells = np.argwhere(number == k)
        count = dict.fromkeys(("edge", "border", "zone", "barrier"), 0)
        for r, c in cells + 1:
            for dr, dc in ((0, 1), (0, -1), (1, 0), (-1, 0)):
                other = (r + dr, c + dc)
                upper_left, bit = ((r, c) if dr + dc > 0 else other), CUT_RIGHT if dc else CUT_DOWN
                closed = bool(barred[upper_left] & bit)
                if padded[other] != padded[r, c]:
                    count["edge"] += 1
                    count["border"] += padded[other] < 0
                elif closed:
                    count["edge"] += 1
                    count["barrier"] += 1
                elif place[other] != place[r, c]:
                    count["edge"] += 1
                    count["zone"] += 1
                else:
                    assert numbers[other] == k
        first = cells[0]
        zone = 0 if zones is None else zones[tuple(first)]
        box = (cells[-1][0], cells[:, 1].min(), cells[:, 1].max())
        lines.append(
            (codes[tuple(first)], zone, *first, *box, len(cells), *(v * unit for v in count.values()))
        )
    return sorted(tuple(map(int, line)) for line in lines)
