"""Box counting of lines, networks and boundaries: dimension over a ladder of box sizes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, ClassVar, NamedTuple, Self

import numpy as np
from pydantic import Field, model_validator

from geofractal.estimators.box_columns import BOX_COLUMNS, HENTSCHEL_PROCACCIA, LADDER_COLUMNS
from geofractal.estimators.divider import FEWEST_RUNGS, Metres, Notes, check_ends
from geofractal.estimators.ladder_table import ladder_rows
from geofractal.kernels.boxes import TILE, Tables, count_ladders
from geofractal.measure import PLANES, Column, LadderMeasure, LadderOptions
from geofractal.scaling.crowding import doubted, lacking, made_up
from geofractal.scaling.judge import VERDICTS, Rungs, judge
from geofractal.scaling.ladder import Ladders, finest_rulers, geometric_ladders, scales_of

if TYPE_CHECKING:
    from geofractal.measure import Floats, LadderRows, Lines, Values
    from geofractal.scaling.judge import Judgement

GRIDS = 4
"""Shifted grids of which the one with the fewest boxes counts. More of them find fewer boxes at coarse sizes
than at fine ones, where shifts matter less, and make every dimension come out too high."""

_PLACES = np.arange(GRIDS)

GRID_SHIFTS = np.column_stack([_PLACES + 0.5, (3 * _PLACES + 1) % 4 + 0.7, (_PLACES + 2) % 4 + 0.3]) / GRIDS
"""(4, 3) shifts of the grids in box sides below the corner of the feature's bounds. None begins near the
corner itself, and none shifts two axes alike: a grid laid along a figure with straight or regular sides
counts too few boxes."""

ENOUGH_BOXES = 1 << 15
"""Boxes of one size that are counted together before further grids stop paying."""

LAST_BOX_EXTENT = 1.0 / 6.0
"""Last box side as a share of the longest side of the feature's bounds: larger boxes fill up."""

LARGEST_BOX_EXTENT = 1.0 / 4.0
"""The same where half a decade of sizes, the least that is judged, would not fit else."""

_HALF_A_DECADE = 10**0.5 * (1 + 1e-6)

MOST_TILES = 1 << 21
"""Tiles of 64 boxes that the tables hold at most (1.4 GB): smaller boxes are left out."""


class Counts(NamedTuple):
    """What was counted at each rung of a set of ladders, on the grid with the fewest boxes.

    Attributes
    ----------
    boxes : (k,) fewest boxes over the grids; NaN where the rung was not counted
    even : (k,) exp(-sum p ln p) over the shares p of length in each box
    paired : (k,) 1 / sum p^2
    visits : (k,) boxes, counted again for every stretch, or row of stretches, of the line that comes back
    spread : (k,) standard deviation of ln boxes over the grids; NaN where one grid was enough
    tallies : (k, STRETCHES) boxes in each stretch of equal length of the line, on the first grid
    """

    boxes: Floats
    even: Floats
    paired: Floats
    visits: Floats
    spread: Floats
    tallies: Floats


def box_ladders(
    lines: Lines,
    *,
    size_min_m: float | None = None,
    size_max_m: float | None = None,
    rungs: int | None = None,
    scales: Floats | None = None,
) -> Ladders:
    """Choose each feature's box sizes from its own vertex spacing and extent.

    Parameters and result as in `geofractal.scaling.ladder.divider_ladders`, and the first box is as large as
    the first ruler there; the extent is the longest side of the bounds of the whole feature, so that a
    network counts as one.
    """
    finest = finest_rulers(scales_of(lines) if scales is None else scales)
    extents = _sides(lines).max(axis=1)
    n = len(lines)
    lowest = np.full(n, float(size_min_m)) if size_min_m is not None else finest
    fitting = np.minimum(_HALF_A_DECADE * lowest, LARGEST_BOX_EXTENT * extents)
    highest = np.maximum(LAST_BOX_EXTENT * extents, fitting)
    if size_max_m is not None:
        highest = np.full(n, float(size_max_m))
    highest[np.isnan(finest)] = np.nan
    return geometric_ladders(lowest, highest, rungs)


def count(lines: Lines, ladders: Ladders, *, shifts: Floats = GRID_SHIFTS) -> Counts:
    """Count the boxes that every feature passes through, at every rung of its ladder.

    Parameters
    ----------
    lines : projected lines; boxes are squares on a plane, cubes in three dimensions
    ladders : box sides of each feature, metres
    shifts : (g, 3) of the grids, in box sides below the corner of the feature's bounds

    Returns
    -------
    Counts
        One value per rung; NaN where a feature has no length, or its boxes would be more than the tables
        hold. Memory: 50 bytes a vertex, and 650 bytes for every tile of 64 boxes that the line touches
        (one line of 4.2 million vertices in 1.2 million boxes: 0.3 GB).
    """
    tiles = _tiles(lines, ladders)
    sizes = np.where(tiles <= MOST_TILES, ladders.rulers, np.nan)
    most = int(tiles[tiles <= MOST_TILES].max(initial=1))
    tables = Tables(
        slots=np.zeros(1 << (2 * most).bit_length(), dtype=np.int64),
        keys=np.zeros(most, dtype=np.int64),
        places=np.zeros(most, dtype=np.int64),
        masses=np.zeros((most, TILE)),
        seen=np.zeros((most, TILE), dtype=np.uint16),
    )
    grids, tallies = count_ladders(
        lines.xy,
        lines.part_offsets,
        lines.feature_offsets,
        ladders.offsets,
        sizes,
        shifts,
        ENOUGH_BOXES,
        tables,
    )
    return Counts(*_fewest(grids), tallies)


def _fewest(grids: Floats) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """Return the grid with the fewest boxes of each rung, and how the grids differ."""
    boxes = np.where(grids[:, :, 0] > 0, grids[:, :, 0], np.nan)
    tried = np.isfinite(boxes)
    least = np.where(tried, boxes, np.inf).argmin(axis=1) if boxes.size else np.zeros(0, dtype=np.int64)
    best = np.take_along_axis(grids, least[:, None, None], axis=1)[:, 0]
    logs: Floats = np.log(boxes, where=tried, out=np.zeros(boxes.shape))
    number = tried.sum(axis=1)
    several = np.where(number > 1, number, np.nan)
    mean = logs.sum(axis=1) / several
    spread = np.sqrt((np.where(tried, logs - mean[:, None], 0.0) ** 2).sum(axis=1) / (several - 1))
    counted = np.where(number > 0, 1.0, np.nan)
    return counted * best[:, 0], np.exp(best[:, 1]), 1 / best[:, 2], counted * best[:, 3], spread


def _sides(lines: Lines) -> Floats:
    """Return the sides of each feature's bounds, (n, axes)."""
    if len(lines) == 0:
        return np.zeros((0, lines.xy.shape[1]))
    firsts = lines.part_offsets[lines.feature_offsets[:-1]]
    sides: Floats = np.maximum.reduceat(lines.xy, firsts) - np.minimum.reduceat(lines.xy, firsts)
    return sides


def _tiles(lines: Lines, ladders: Ladders) -> Floats:
    """Return the most tiles that each rung can touch.

    Of tiles that a line of length L visits, one in 2^axes can be chosen so that no two are neighbours, and
    the line is at least one side long between any two of these; nor are there more than fill the bounds.
    """
    axes = lines.xy.shape[1]
    steps = np.sqrt(np.square(np.diff(lines.xy, axis=0)).sum(axis=1))
    along = np.concatenate([[0.0], np.cumsum(steps)])
    parts = np.diff(lines.feature_offsets)
    firsts, lasts = lines.part_offsets[:-1], lines.part_offsets[1:] - 1
    owner = np.repeat(np.arange(len(lines)), parts)
    length = np.bincount(owner, along[lasts] - along[firsts], minlength=len(lines)).astype(np.float64)
    counts = np.diff(ladders.offsets)
    side = ladders.rulers * (8 if axes == 2 else 4)
    visited = 2**axes * (np.repeat(length, counts) / side + np.repeat(parts, counts))
    filling = np.prod(np.repeat(_sides(lines), counts, axis=0) / side[:, None] + 2, axis=1)
    most: Floats = np.minimum(visited, filling) + 1
    return most


class BoxOptions(LadderOptions):
    """Options of `BoxDimension`."""

    size_min_m: Metres | None = Field(
        None,
        description="first box side of the ladder in metres; left out: the finest ruler of the source",
    )
    size_max_m: Metres | None = Field(
        None, description="last box side of the ladder in metres; left out: chosen from the feature's extent"
    )
    rungs: Annotated[int, Field(ge=FEWEST_RUNGS, le=200)] | None = Field(
        None, description="number of box sizes; left out: as many a decade as the ladder's rule says"
    )
    grids: Annotated[int, Field(ge=1, le=GRIDS)] = Field(
        GRIDS, description="shifted grids of which the one with the fewest boxes counts"
    )

    @model_validator(mode="after")
    def _lowest_below_highest(self) -> Self:
        check_ends("size", self.size_min_m, self.size_max_m)
        return self


class BoxDimension(LadderMeasure[BoxOptions]):
    """Box dimension of lines, multi-part lines, networks and boundaries, with interval and verdict."""

    name: ClassVar[str] = "box-dimension"
    title: ClassVar[str] = "Box, information and correlation dimension"
    formula: ClassVar[str] = "D = -slope of ln N(s) on ln s"
    sources: ClassVar[tuple[str, ...]] = ("common practice", HENTSCHEL_PROCACCIA)
    stem: ClassVar[str] = "box"
    one_path: ClassVar[bool] = False
    version: ClassVar[int] = 2
    holds_gil: ClassVar[bool] = False
    options: ClassVar[type[LadderOptions]] = BoxOptions
    ladder_columns: ClassVar[tuple[Column, ...]] = LADDER_COLUMNS

    def columns(self, options: BoxOptions) -> tuple[Column, ...]:  # noqa: ARG002 - the same whatever is asked
        """Return the columns of dimensions and verdict, of the plane, and the note."""
        return (*BOX_COLUMNS, self.note_column())

    def measure(self, lines: Lines, options: BoxOptions) -> Values:
        """Count every feature's boxes over its ladder, and judge what was found."""
        return _counted(lines, options)[0]

    def measure_with_ladder(self, lines: Lines, options: BoxOptions) -> tuple[Values, LadderRows]:
        """Return the same, and what was counted at every rung."""
        values, ladders, rungs, found, lack = _counted(lines, options)
        own: Values = {
            "box_size_m": ladders.rulers,
            "boxes": np.where(np.isnan(rungs.steps), -1, rungs.steps).astype(np.int64),
            "boxes_spread": rungs.noise / ladders.rulers,
            "boxes_fit": made_up(ladders, found.lengths_at_rungs(ladders) / ladders.rulers, -lack),
        }
        return values, ladder_rows(own, ladders, rungs, found)


def box_rungs(lines: Lines, scales: Floats, ladders: Ladders, counts: Counts, effective: Floats) -> Rungs:
    """Return what was counted, ready to be judged: `effective` boxes, (k,), stand for those of `counts`.

    `scales` are those of `scales_of`. A network of many lines has ends like one line: where lines meet,
    none ends.
    """
    opens = np.concatenate(([0], np.cumsum(~lines.closed)))[lines.feature_offsets]
    lengths = effective * ladders.rulers
    return Rungs(
        lengths=lengths,
        steps=counts.boxes,
        noise=counts.spread * lengths,
        tallies=counts.tallies,
        left_out=np.zeros(len(lengths)),
        detail=np.where(scales[:, 3] > 0, 0.0, scales[:, 0]),
        open_parts=np.minimum(np.diff(opens), 1).astype(np.float64),
    )


def judge_boxes(
    lines: Lines, scales: Floats, ladders: Ladders, counts: Counts, effective: Floats, lack: Floats
) -> Judgement:
    """Judge what was counted, made up for what the slope of each feature's boxes lacks, (n,).

    Other parameters as in `box_rungs`; see `geofractal.scaling.crowding`.
    """
    rungs = box_rungs(lines, scales, ladders, counts, made_up(ladders, effective, lack))
    return doubted(judge(ladders, rungs, estimator="box"), lack)


def _counted(lines: Lines, options: BoxOptions) -> tuple[Values, Ladders, Rungs, Judgement, Floats]:
    """Return a chunk's columns, the rungs that its box dimensions rest on, and what their slopes lack."""
    scales = scales_of(lines)
    notes = Notes(finest_rulers(scales))
    notes.add(scales[:, 3] > 0, "drawn along raster cells, which its ladder keeps clear of")
    ladders = box_ladders(
        lines,
        size_min_m=options.size_min_m,
        size_max_m=options.size_max_m,
        rungs=options.rungs,
        scales=scales,
    )
    counts = count(lines, ladders, shifts=GRID_SHIFTS[: options.grids])
    lack = lacking(ladders, counts.boxes, counts.visits)
    found, even, paired = (
        judge_boxes(lines, scales, ladders, counts, effective, lack)
        for effective in (counts.boxes, counts.even, counts.paired)
    )
    lost = np.bincount(ladders.owners[np.isnan(counts.boxes)], minlength=len(lines)) > 0
    notes.add(lost, "the smallest boxes are too many to count and are left out; raise size-min-m")
    notes.add(np.isnan(found.dimension), "no dimension: too few box sizes between its detail and its extent")
    values = _dimensions(found)
    values["box_information_dim"] = even.dimension
    values["box_correlation_dim"] = paired.dimension
    values["box_distortion_percent"] = 100 * lines.distortion
    values["box_plane"] = np.array(PLANES, dtype=object)[lines.plane]
    values["box_note"] = notes.texts
    return values, ladders, box_rungs(lines, scales, ladders, counts, counts.boxes), found, lack


def _dimensions(found: Judgement) -> Values:
    """Return the columns of the box dimension and its verdict."""
    return {
        "box_dim": found.dimension,
        "box_dim_low": found.low,
        "box_dim_high": found.high,
        "box_spread": found.spread,
        "box_verdict": np.array(VERDICTS, dtype=object)[found.verdict],
        "box_size_min_m": found.ruler_min,
        "box_size_max_m": found.ruler_max,
        "box_rungs": found.rungs,
        "box_r2": found.r2,
        "box_break_m": found.break_at,
        "box_break_low_m": found.break_low,
        "box_break_high_m": found.break_high,
        "box_fine_dim": found.fine_dimension,
        "box_coarse_dim": found.coarse_dimension,
    }
