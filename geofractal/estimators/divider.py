"""The divider walk of lines: dimension over a ladder of rulers, and lengths at stated rulers."""

from __future__ import annotations

from decimal import Decimal
from typing import TYPE_CHECKING, Annotated, ClassVar, NamedTuple, Self

import numpy as np
from pydantic import Field, field_validator, model_validator

from geofractal.kernels.ladder_judge import STRETCHES
from geofractal.kernels.line_scales import line_scales
from geofractal.kernels.walk import walk_ladders
from geofractal.measure import PLANES, Column, Measure, Options
from geofractal.scaling.fit import fit_power_law
from geofractal.scaling.ladder import FIRST_RUNG_SEGMENTS, Ladders, divider_ladders

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from geofractal.measure import Bools, Floats, Lines, Values

RING_STARTS = 16
"""Evenly spaced starts of a ring, each walked both ways: single walks of real shores scatter by 2 %."""

ENOUGH_STEPS = 128
"""Steps that the walks of one ruler take together before further starts stop paying: walks from
different starts soon fall into each other's steps. On fractional Brownian trails of dimension 1.25 the
scatter of ln L falls from 6 % with one start each way to 3 % with 16 at 11 steps, from 2.1 % to 1.6 % at
45, and not at all above 100."""

FEWEST_RUNGS = 4
"""Rungs below which no line is fitted."""

_NO_LIMIT = 2**62

Metres = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class Walks(NamedTuple):
    """What the walks found at each rung of a set of ladders; see `walk_ladders`."""

    length: Floats
    spread: Floats
    steps: Floats
    left_out: Floats
    tallies: Floats


def walk(lines: Lines, ladders: Ladders, *, starts: int | None = None) -> Walks:
    """Walk every feature with the rulers of its own ladder.

    Parameters
    ----------
    lines : projected lines
    ladders : rulers of each feature, metres
    starts : starts of every walk; None takes one to `RING_STARTS`, the more the fewer the steps, so
        that every rung is about equally sure

    Returns
    -------
    Walks
        One value per rung, metres; NaN where no part of the feature is long enough for the ruler.
    """
    enough = ENOUGH_STEPS if starts is None else _NO_LIMIT
    return _walk(lines, ladders, starts or RING_STARTS, enough, stretches=STRETCHES)


def walk_rulers(lines: Lines, rulers_m: tuple[float, ...] | Floats) -> Walks:
    """Walk every feature with the same rulers: open lines both ways, rings from `RING_STARTS` starts.

    Returns
    -------
    Walks
        Arrays of shape (n, rulers); NaN where no part of the feature is long enough for the ruler, or
        the ruler is NaN.
    """
    n, count = len(lines), len(rulers_m)
    ladders = Ladders(np.arange(n + 1) * count, np.tile(np.asarray(rulers_m, dtype=np.float64), n))
    found = _walk(lines, ladders, RING_STARTS, _NO_LIMIT, inner_starts=False)
    return Walks(*(values.reshape(n, count, *values.shape[1:]) for values in found))


def _walk(
    lines: Lines, ladders: Ladders, starts: int, enough: int, *, inner_starts: bool = True, stretches: int = 0
) -> Walks:
    table = walk_ladders(
        lines.xy,
        lines.part_offsets,
        lines.feature_offsets,
        lines.closed,
        lines.radius,
        ladders.offsets,
        ladders.rulers,
        starts,
        enough,
        inner_starts,
        stretches,
    )
    length, spread, steps, left_out = np.ascontiguousarray(table[:, :4].T)
    return Walks(length, spread, steps, left_out, table[:, 4:])


def finest_rulers(lines: Lines) -> Floats:
    """Return each feature's finest ruler that its source supports: three median source segments, (n,).

    NaN where the feature has no length.
    """
    scales = line_scales(lines.xy, lines.source_vertex, lines.part_offsets, lines.feature_offsets)
    return FIRST_RUNG_SEGMENTS * scales[:, 0]


def too_coarse(rulers_m: float | Floats, finest_m: Floats) -> Bools:
    """Whether each feature's source is too coarse for a ruler; one of exactly three segments is not."""
    return rulers_m < finest_m * (1 - 1e-9)


def plain_number(value: float) -> str:
    """Write a number without exponent or trailing zeros: 1000, 0.5, 2500.5."""
    text = format(Decimal(repr(float(value))), "f")
    return text.rstrip("0").rstrip(".") if "." in text else text


class Notes:
    """One text a feature that says why a figure is missing or limited."""

    def __init__(self, finest_rulers_m: Floats) -> None:
        self.texts: NDArray[np.object_] = np.full(len(finest_rulers_m), None, dtype=object)
        self._length = ~np.isnan(finest_rulers_m)
        self.texts[~self._length] = "the line has no length"

    def add(self, where: Bools, text: str) -> None:
        """Append a text where a condition holds; a line without length has nothing more to say."""
        for row in np.flatnonzero(where & self._length):
            self.texts[row] = f"{self.texts[row]}; {text}" if self.texts[row] else text


class DividerOptions(Options):
    """Options of `DividerDimension`."""

    ruler_min_m: Metres | None = Field(
        None, description="first ruler of the ladder in metres; left out: three median source segments"
    )
    ruler_max_m: Metres | None = Field(
        None, description="last ruler of the ladder in metres; left out: chosen from the feature's extent"
    )
    rungs: Annotated[int, Field(ge=FEWEST_RUNGS, le=200)] | None = Field(
        None, description="number of rulers; left out: as many a decade as the ladder's rule says"
    )
    starts: Annotated[int, Field(ge=1, le=256)] | None = Field(
        None,
        description="starting points of each ruler's walks; left out: the more the fewer steps there are",
    )
    lengths_at_m: tuple[Metres, ...] = Field(
        (), description="rulers in metres at which the walked length is written"
    )

    @field_validator("lengths_at_m")
    @classmethod
    def _each_ruler_once(cls, rulers: tuple[float, ...]) -> tuple[float, ...]:
        if len(set(rulers)) < len(rulers):
            raise ValueError("a ruler stands twice; state each ruler once")
        return rulers

    @model_validator(mode="after")
    def _lowest_below_highest(self) -> Self:
        low, high = self.ruler_min_m, self.ruler_max_m
        if low is not None and high is not None and low >= high:
            raise ValueError(
                f"ruler-min-m ({plain_number(low)}) must be below ruler-max-m ({plain_number(high)})"
            )
        return self


def length_columns(ruler_m: float, index: int) -> tuple[Column, ...]:
    """Return the column of the length walked with a stated ruler; `index` makes long short names unique."""
    number = plain_number(ruler_m)
    tag = number.replace(".", "_")
    short = f"len{tag}m" if len(tag) <= 6 else f"len_{index}"
    return (
        Column(
            f"length_at_{tag}m_ruler_km",
            short,
            "number",
            "km",
            f"length walked with a ruler of {number} m; null below the source's detail",
            "L(r) = r n + d: n whole steps of r, last straight distance d; open lines: mean of both"
            f" directions; rings: from {RING_STARTS} evenly spaced starts each",
            "Mandelbrot 1967, Science 156:636-638",
        ),
    )


_FIT_COLUMNS = (
    Column(
        "divider_dim",
        "div_dim",
        "number",
        "",
        "divider dimension between the first and the last ruler",
        "D = 1 - slope of ln L(r) on ln r",
        "Mandelbrot 1967, Science 156:636-638",
    ),
    Column(
        "divider_r2",
        "div_r2",
        "number",
        "",
        "share of the variance of ln L that the fitted line explains; near 1 for any line on logarithmic"
        " axes, so no evidence that a dimension exists",
    ),
    Column("divider_ruler_min_m", "div_rmin_m", "number", "m", "first ruler of the ladder that was used"),
    Column("divider_ruler_max_m", "div_rmax_m", "number", "m", "last ruler of the ladder that was used"),
    Column("divider_rungs", "div_rungs", "count", "", "number of rulers that were used"),
)

_PLANE_COLUMNS = (
    Column(
        "divider_distortion_percent",
        "div_distor",
        "number",
        "percent",
        "worst relative distance error of the plane on which the feature was walked",
    ),
    Column("divider_plane", "div_plane", "text", "", "on what the feature was walked: " + ", ".join(PLANES)),
)


class DividerDimension(Measure[DividerOptions]):
    """Divider (Richardson) dimension of lines, and their lengths at stated rulers."""

    name: ClassVar[str] = "divider-dimension"
    title: ClassVar[str] = "Divider dimension and length at a ruler"
    formula: ClassVar[str] = "L(r) = r n + d; D = 1 - slope of ln L on ln r"
    sources: ClassVar[tuple[str, ...]] = ("Mandelbrot 1967, Science 156:636-638",)
    stem: ClassVar[str] = "divider"
    holds_gil: ClassVar[bool] = False
    options: ClassVar[type[Options]] = DividerOptions

    def columns(self, options: DividerOptions) -> tuple[Column, ...]:
        """Return the fit's columns, those of each stated ruler, the plane's and the note."""
        lengths = [column for i, r in enumerate(options.lengths_at_m) for column in length_columns(r, i + 1)]
        return (*_FIT_COLUMNS, *lengths, *_PLANE_COLUMNS, self.note_column())

    def measure(self, lines: Lines, options: DividerOptions) -> Values:
        """Walk every feature with its ladder and with the stated rulers."""
        finest = finest_rulers(lines)
        notes = Notes(finest)
        values = _fitted(lines, options, notes) | _lengths(lines, options.lengths_at_m, finest, notes)
        values["divider_distortion_percent"] = 100 * lines.distortion
        values["divider_plane"] = np.array(PLANES, dtype=object)[lines.plane]
        values["divider_note"] = notes.texts
        return values


def _fitted(lines: Lines, options: DividerOptions, notes: Notes) -> Values:
    """Return the columns of the fit through each feature's ladder."""
    ladders = divider_ladders(
        lines, ruler_min_m=options.ruler_min_m, ruler_max_m=options.ruler_max_m, rungs=options.rungs
    )
    walks = walk(lines, ladders, starts=options.starts)
    fit = fit_power_law(ladders, walks.length)
    used = np.isfinite(walks.length)
    owners = np.repeat(np.arange(len(lines)), np.diff(ladders.offsets))[used]
    lowest, highest = np.full(len(lines), np.inf), np.full(len(lines), -np.inf)
    np.minimum.at(lowest, owners, ladders.rulers[used])
    np.maximum.at(highest, owners, ladders.rulers[used])
    few = fit.rungs < FEWEST_RUNGS
    unfit = np.where(few, np.nan, 1.0)
    notes.add(few, "no dimension: too few rulers between its detail and its extent")
    return {
        "divider_dim": unfit - fit.slope,
        "divider_r2": unfit * fit.r2,
        "divider_ruler_min_m": unfit * lowest,
        "divider_ruler_max_m": unfit * highest,
        "divider_rungs": fit.rungs,
    }


def _lengths(lines: Lines, rulers_m: tuple[float, ...], finest: Floats, notes: Notes) -> Values:
    """Return the walked length at each stated ruler, null where the source is coarser than the ruler."""
    if not rulers_m:
        return {}
    walked = walk_rulers(lines, rulers_m)
    values: Values = {}
    for i, ruler in enumerate(rulers_m):
        length = walked.length[:, i] / 1000
        coarse = too_coarse(ruler, finest)
        text = plain_number(ruler)
        notes.add(coarse, f"the source is too coarse for a ruler of {text} m")
        notes.add(~coarse & np.isnan(length), f"too short for a ruler of {text} m")
        values[length_columns(ruler, i + 1)[0].name] = np.where(coarse, np.nan, length)
    return values
