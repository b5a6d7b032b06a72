"""Patches of a class map of any height: strips in, finished patches out.

One labeller goes through the strips in order. Patches that the present row no longer touches are handed
out, so that memory grows with the width of the map alone. What comes out, and its order, depends on the map
only: patches follow each other by their last row, then by their first cell.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError
from geofractal.kernels import patch_tables as tables
from geofractal.kernels.patch_retire import group_pieces, retire, settle
from geofractal.kernels.patch_rings import settle_rings
from geofractal.kernels.patch_tables import LINES, SUMS_FROM
from geofractal.kernels.patches import label_rows
from geofractal.landcover.grid import CellSizes
from geofractal.landcover.strips import NOT_COVERED, OUTSIDE, Strip

Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

SEVERAL_ZONES = OUTSIDE - 1
"""Zone of a patch that lies in more than one zone."""

UNKNOWN = -1
"""Value of outline sums where a patch was put together from pieces in several zones."""

LABELS = 1 << 16
"""Pieces, unfinished ones included, after which finished patches are handed out: enough of them that this
costs no time, and few enough to need no memory."""
_AT = {name: i for i, name in enumerate(LINES)}
_OUTLINE = [_AT[name] for name in ("corners", "outer_edge", "filled_area", "holes")]


@dataclass(frozen=True, slots=True)
class PatchTable:
    """Patches, one line each, in whole units of their grid.

    Columns, by name as in ``table["cells"]``:

    ``class``, ``zone`` : index of the class; zone, `OUTSIDE` or `SEVERAL_ZONES` (0 without zones)
    ``first_row``, ``first_column`` : first cell in scan order; the row is the top of the bounding box
    ``last_row``, ``left_column``, ``right_column`` : the rest of the bounding box, all inclusive
    ``cells``, ``area`` : their number and area
    ``edge`` : length of all cell edges to anything that is not the patch, holes included; of it
    ``border_edge`` : to the map's edge and to cells not covered,
    ``zone_edge`` : to the same class in another zone (of pieces cut at zone borders),
    ``barrier_edge`` : to the same class behind a barrier
    ``corners`` : what the corners of its outline shorten it by, before `outline_scale`
    ``outer_edge``, ``filled_area``, ``holes`` : outline without holes, area inside it, number of holes;
    0 unless outlines were asked for
    """

    values: Ints

    def __getitem__(self, name: str) -> Ints:
        """Return a column."""
        return self.values[:, _AT[name]]

    def __len__(self) -> int:
        """Return the number of patches."""
        return len(self.values)

    def take(self, lines: Ints | Bools) -> PatchTable:
        """Return the patches of those lines, numbers or flags."""
        return PatchTable(self.values[lines])


@dataclass(frozen=True, slots=True)
class Finished:
    """What a labeller hands out at a time.

    Attributes
    ----------
    patches : complete patches, across zone borders
    pieces : patches cut at zone borders; not all of the pieces of `patches`, some came before
    parts : what of `patches` lies in each zone, one line a patch and zone
    part_of : (len(parts),) line of the patch in `patches`
    runs : (m, 4) line of the patch in `patches`, row, first column and the column after the last of every
        run of its cells, by patch, then in scan order; None unless asked for
    """

    patches: PatchTable
    pieces: PatchTable
    parts: PatchTable
    part_of: Ints
    runs: Ints | None = None


def label_patches(
    strips: Iterable[Strip],
    *,
    neighbours: int = 8,
    outlines: bool = False,
    runs: bool = False,
    runs_of: Callable[[Ints], Bools] | None = None,
) -> Iterator[Finished]:
    """Yield the patches of a class map, exactly as labelling the whole map would find them.

    Parameters
    ----------
    strips : all strips of a map, in order; with zones or barriers in all of them or in none
    neighbours : 4 (cells that share an edge are one patch) or 8 (or a corner)
    outlines : whether to follow outlines, for holes and filled areas; costs about a third more time
    runs : whether to hand out the cells of patches as runs, for polygons; memory then holds those of all
        unfinished patches, 16 bytes a run. Not with zones.
    runs_of : tells by their classes which patches these are wanted of; those of others are soon forgotten
    """
    if neighbours not in {4, 8}:
        raise ConfigError(f"neighbours is {neighbours}; allowed are 4 and 8.")
    labeller: _Labeller | None = None
    for strip in strips:
        if labeller is None:
            labeller = _Labeller(strip, eight=neighbours == 8, outlines=outlines, runs=runs, runs_of=runs_of)
        yield from labeller.push(strip)
    if labeller is not None:
        yield from labeller.finish()


_TABLES = {
    tables.N_LABELS: ("labels", "parent"),
    tables.N_LINKS: ("links",),
    tables.N_RINGS: ("rings", "ring_parent"),
    tables.N_KEPT: ("kept",),
}
"""Tables of the labeller that may fill up, by the place of the state that tells how far."""


class _Labeller:
    """Tables of one run of the kernels, and what is between two strips."""

    def __init__(
        self,
        strip: Strip,
        *,
        eight: bool,
        outlines: bool,
        runs: bool,
        runs_of: Callable[[Ints], Bools] | None,
    ) -> None:
        columns = strip.codes.shape[1]
        self.runs_of = runs_of
        self.reach, self.outlines, self.zoned = int(eight), outlines, strip.zones is not None
        self.upper = np.zeros((tables.RUN, columns + 1), np.int64)
        self.lower, self.pairs = self.upper.copy(), np.zeros((2 * columns + 2, 2), np.int64)
        self.upper[:5, 0] = (0, columns, NOT_COVERED, 0, -1)  # above the map nothing is covered
        self.state = np.array([0, 1, 0, 0, 0], np.int64)
        if runs and self.zoned:
            raise ValueError("Runs are handed out for patches that no zone border cuts; leave zones out.")
        self.capacity = max(LABELS, columns)
        self.labels, self.parent = np.empty((self.capacity, len(LINES)), np.int64), self._room()
        rings = self.capacity if outlines else 0
        self.rings, self.ring_parent = np.empty((rings, 3), np.int64), np.empty(rings, np.int64)
        self.links = np.empty((self.capacity if self.zoned else 3 * columns + 3, 2), np.int64)
        self.group, self.pending, self.pending_of = (
            self._room(0),
            np.empty((0, len(LINES)), np.int64),
            self._room(0),
        )
        self.kept = np.empty((4 * self.capacity if runs else 0, 4), np.int32)
        self.cuts_before = np.zeros(columns if strip.cuts is not None else 0, np.uint8)
        self.end: tuple[int, CellSizes] = (0, strip.sizes)

    def _room(self, size: int | None = None) -> Ints:
        return np.empty(self.capacity if size is None else size, np.int64)

    def push(self, strip: Strip) -> Iterator[Finished]:
        """Label a strip; yield what is finished whenever a table is full."""
        none = np.empty((0, 0), np.uint8)
        cuts = none if strip.cuts is None else strip.cuts
        zones = none.astype(np.int32) if strip.zones is None else strip.zones
        if (strip.zones is not None) != self.zoned or bool(cuts.size) != bool(self.cuts_before.size):
            raise ValueError("Zones and barriers must be given for all strips of a map or for none.")
        yield from self._label(strip.codes, zones, cuts, strip.first_row, strip.sizes)
        if cuts.size:
            self.cuts_before = cuts[-1].copy()
        self.end = (strip.first_row + strip.rows, strip.sizes)

    def finish(self) -> Iterator[Finished]:
        """Close the map with a row that is not covered, and yield all that is left."""
        row, sizes = self.end
        below = CellSizes(
            sizes.area, sizes.height, sizes.width, sizes.area_line[-1:], np.repeat(sizes.edge_line[-1:], 2)
        )
        columns = self.upper.shape[1] - 1
        codes = np.full((1, columns), NOT_COVERED, np.int16)
        zones = np.full((1, columns), OUTSIDE, np.int32) if self.zoned else np.empty((0, 0), np.int32)
        cuts = np.zeros((1, columns) if self.cuts_before.size else (0, 0), np.uint8)
        yield from self._label(codes, zones, cuts, row, below)
        yield self._retire()

    def _label(
        self,
        codes: NDArray[np.int16],
        zones: NDArray[np.int32],
        cuts: NDArray[np.uint8],
        first_row: int,
        sizes: CellSizes,
    ) -> Iterator[Finished]:
        corner, row, stuck = corner_savings(sizes), 0, -1
        while row < len(codes):
            row = label_rows(
                codes, zones, cuts, self.cuts_before, row, first_row, sizes.area, sizes.height, sizes.width,
                corner, sizes.area_line, sizes.edge_line, self.reach, self.labels, self.parent,
                self.links, self.rings, self.ring_parent, self.upper, self.lower, self.pairs, self.kept,
                self.state,
            )  # fmt: skip
            if row == stuck:
                self._grow()
            elif row < len(codes):
                yield self._retire()
            stuck = row

    def _grow(self) -> None:
        """Double the tables that what is unfinished has filled."""
        row = 3 * self.upper.shape[1]  # the most that one row can need
        for place, names in _TABLES.items():
            if self.state[place] + row > len(getattr(self, names[0])):
                for name in names:
                    table = getattr(self, name)
                    setattr(self, name, np.concatenate([table, np.empty_like(table)]))

    def _retire(self) -> Finished:
        n, n_links = int(self.state[tables.N_LABELS]), int(self.state[tables.N_LINKS])
        settle(self.labels, self.parent, n)
        if self.outlines:
            settle_rings(self.rings, self.ring_parent, self.labels, self.parent, self.upper, self.state)
        group = self._room(n)
        if self.zoned:
            group[: len(self.group)] = self.group
            group_pieces(self.parent, n, group, len(self.group), self.links, n_links)
        if len(self.kept) and self.runs_of is not None:
            self._forget_runs(self.runs_of(self.labels[:n, _AT["class"]]))
        roots = self.parent[:n].copy() if len(self.kept) else self.parent
        done, done_labels, kept = retire(self.labels, self.parent, self.upper, self.rings, self.state)
        if not self.zoned:
            order = _order(done)
            table, lines = PatchTable(done[order]), np.arange(len(done))
            runs = self._finished_runs(roots, done_labels[order], kept) if len(self.kept) else None
            return Finished(table, table, table, lines, runs)
        return self._join_pieces(done, group[done_labels], group[kept], group)

    def _forget_runs(self, wanted: Bools) -> None:
        """Drop the runs of labels that are not wanted."""
        runs = self.kept[: self.state[tables.N_KEPT]]
        runs = runs[wanted[runs[:, 3]]]
        self.state[tables.N_KEPT] = len(runs)
        self.kept[: len(runs)] = runs

    def _finished_runs(self, roots: Ints, done_labels: Ints, kept: Ints) -> Ints:
        """Return the runs of finished patches, by line of the patch; hold back the others."""
        runs = self.kept[: self.state[tables.N_KEPT]]
        line = np.empty(len(roots), np.int64)
        line[done_labels], line[kept] = np.arange(len(done_labels)), -1 - np.arange(len(kept))
        of = line[roots[runs[:, 3]]]
        goes = np.flatnonzero(of >= 0)
        order = goes[np.argsort(of[goes], kind="stable")]
        finished = np.column_stack([of[order], runs[order, :3]])
        stays = np.flatnonzero(of < 0)
        self.state[tables.N_KEPT] = len(stays)
        self.kept[: len(stays)] = np.column_stack([runs[stays, :3], -1 - of[stays]])
        return finished

    def _join_pieces(self, done: Ints, done_of: Ints, kept_of: Ints, group: Ints) -> Finished:
        """Put pieces together to patches; hold back those of patches that go on."""
        live, first, number = np.unique(kept_of, return_index=True, return_inverse=True)
        self.group = first[number]
        lines = np.concatenate([self.pending, done])
        of = np.concatenate([group[self.pending_of], done_of])
        waits = np.isin(of, live)
        self.pending, pending_of, _ = merge(lines[waits], of[waits], lines[waits, _AT["zone"]])
        self.pending_of = first[np.searchsorted(live, pending_of)]
        parts, parts_of, _ = merge(lines[~waits], of[~waits], lines[~waits, _AT["zone"]])
        whole, whole_of, count = merge(parts, parts_of)
        several = count > 1
        whole[several, _AT["zone"]] = SEVERAL_ZONES
        whole[:, _AT["edge"]] -= whole[:, _AT["zone_edge"]]
        whole[:, _AT["zone_edge"]] = 0
        order = _order(whole)
        place = np.empty(len(order), np.int64)
        place[order] = np.arange(len(order))
        part_of = place[np.searchsorted(whole_of, parts_of)]
        by_patch = np.lexsort((parts[:, _AT["zone"]], part_of))
        return Finished(
            PatchTable(whole[order]),
            PatchTable(_in_order(done)),
            PatchTable(parts[by_patch]),
            part_of[by_patch],
        )


def merge(lines: Ints, of: Ints, zone: Ints | None = None) -> tuple[Ints, Ints, Ints]:
    """Add up the lines that belong to one patch (and lie in one zone).

    Returns the sums, the patch of each, and how many lines went into it; by patch, then by zone.
    """
    if not len(lines):
        return lines, of, of
    second = np.zeros_like(of) if zone is None else zone
    order = np.argsort(of, kind="stable")
    several = np.flatnonzero((np.bincount(of) > 1)[of[order]])  # the others, most of them, stay as they are
    lot = order[several]
    order[several] = lot[np.lexsort((_first_cell(lines[lot]), second[lot], of[lot]))]
    lines, of, second = lines[order], of[order], second[order]
    starts = np.flatnonzero(np.r_[True, (np.diff(of) != 0) | (np.diff(second) != 0)])
    count = np.diff(np.r_[starts, len(of)])
    merged, joined = lines[starts], np.flatnonzero(count > 1)
    if len(joined):
        begins = np.cumsum(count[joined]) - count[joined]
        lot = lines[np.repeat(count > 1, count)]
        sums = np.add.reduceat(lot[:, SUMS_FROM:], begins)
        sums[:, [column - SUMS_FROM for column in _OUTLINE]] = UNKNOWN
        merged[joined, SUMS_FROM:] = sums
        merged[joined, _AT["last_row"]] = np.maximum.reduceat(lot[:, _AT["last_row"]], begins)
        merged[joined, _AT["left_column"]] = np.minimum.reduceat(lot[:, _AT["left_column"]], begins)
        merged[joined, _AT["right_column"]] = np.maximum.reduceat(lot[:, _AT["right_column"]], begins)
    return merged, of[starts], count


def _first_cell(lines: Ints) -> Ints:
    """Return numbers in the order of first cells, row by row."""
    number: Ints = (lines[:, _AT["first_row"]] << 31) + lines[:, _AT["first_column"]]
    return number


def _order(lines: Ints) -> Ints:
    order: Ints = np.lexsort((_first_cell(lines), lines[:, _AT["last_row"]]))
    return order


def _in_order(lines: Ints) -> Ints:
    return lines[_order(lines)]


def corner_savings(sizes: CellSizes) -> Ints:
    """Return, by line of edges, (w + h - d) / 2: half of what a diagonal d saves against two cell sides."""
    columns = max(1, sizes.width.shape[1] - 1)
    width, lines = sizes.width[:, -1] / columns, np.empty(len(sizes.width))
    height = sizes.height.mean(axis=1)
    lines[sizes.edge_line[:-1]] = height[sizes.area_line]
    lines[sizes.edge_line[-1]] = height[sizes.area_line[-1]]
    saved: Ints = np.rint((width + lines - np.hypot(width, lines)) / 2).astype(np.int64)
    return saved
