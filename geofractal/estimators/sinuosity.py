"""Sinuosity of lines at a stated ruler."""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar

import numpy as np
from pydantic import Field

from geofractal.estimators.divider import Metres, Notes, finest_rulers, too_coarse, walk_rulers
from geofractal.measure import Column, Measure, Options

if TYPE_CHECKING:
    from geofractal.measure import Floats, Lines, Values

_COLUMNS = (
    Column(
        "sinuosity",
        "sinuosity",
        "number",
        "",
        "length at the ruler over the distance from end to end; compares channel with valley only where"
        " the straight line between the ends stands for the valley",
        "L(r) / distance from end to end",
        "Leopold & Wolman 1957, US Geological Survey Professional Paper 282-B",
    ),
    Column(
        "sinuosity_ruler_m",
        "sin_rul_m",
        "number",
        "m",
        "ruler of the length; figures compare between lines and sources only at one ruler",
    ),
    Column(
        "sinuosity_length_km",
        "sin_len_km",
        "number",
        "km",
        "length walked with the ruler, mean of both directions",
        "L(r) = r n + d: n whole steps of r, last straight distance d",
    ),
    Column("sinuosity_end_to_end_km", "sin_end_km", "number", "km", "distance from one end to the other"),
    Column(
        "sinuosity_distortion_percent",
        "sin_distor",
        "number",
        "percent",
        "worst relative distance error of the plane on which the line was walked",
    ),
)


class SinuosityOptions(Options):
    """Options of `Sinuosity`."""

    ruler_m: Metres | None = Field(
        None, description="ruler in metres; left out: three median source segments of each line, as written"
    )


class Sinuosity(Measure[SinuosityOptions]):
    """Length of a line at a ruler over the distance between its ends."""

    name: ClassVar[str] = "sinuosity"
    title: ClassVar[str] = "Sinuosity at a stated ruler"
    formula: ClassVar[str] = "L(r) / distance from end to end"
    sources: ClassVar[tuple[str, ...]] = (
        "Leopold & Wolman 1957, US Geological Survey Professional Paper 282-B",
    )
    stem: ClassVar[str] = "sinuosity"
    version: ClassVar[int] = 2
    holds_gil: ClassVar[bool] = False
    options: ClassVar[type[Options]] = SinuosityOptions

    def columns(self, options: SinuosityOptions) -> tuple[Column, ...]:  # noqa: ARG002 - the same for all
        """Return the columns of the ratio, its two lengths, its ruler and the note."""
        return (*_COLUMNS, self.note_column())

    def measure(self, lines: Lines, options: SinuosityOptions) -> Values:
        """Walk every line with its ruler, both ways; rings and features of several parts have none."""
        finest = finest_rulers(lines)
        rulers = finest if options.ruler_m is None else np.full(len(lines), options.ruler_m)
        first_part = lines.feature_offsets[:-1]
        many = np.diff(lines.feature_offsets) > 1
        ring = lines.closed[first_part] & ~many
        ends = _end_to_end(lines)
        near = ~many & ~ring & (ends < rulers)
        coarse = too_coarse(rulers, finest)
        refused = many | ring | near | coarse | np.isnan(finest)
        length = walk_rulers(lines, np.where(refused, np.nan, rulers)[:, None])[:, 0]
        notes = Notes(finest)
        notes.add(ring, "a ring has no distance from end to end")
        notes.add(many, "several parts that form no single path")
        notes.add(near, "its ends are nearer to each other than the ruler")
        notes.add(coarse, "the source is too coarse for the ruler")
        notes.add(~refused & np.isnan(length), "too short for the ruler")
        return {
            "sinuosity": length / ends,
            "sinuosity_ruler_m": rulers,
            "sinuosity_length_km": length / 1000,
            "sinuosity_end_to_end_km": np.where(many | ring, np.nan, ends) / 1000,
            "sinuosity_distortion_percent": 100 * lines.distortion,
            "sinuosity_note": notes.texts,
        }


def _end_to_end(lines: Lines) -> Floats:
    """Return the distance between the ends of each feature's first part, (n,) metres."""
    first_part = lines.feature_offsets[:-1]
    first = lines.part_offsets[first_part]
    last = lines.part_offsets[first_part + 1] - 1
    straight: Floats = np.sqrt(((lines.xy[last] - lines.xy[first]) ** 2).sum(axis=1))
    globe = np.isfinite(lines.radius)
    arc = 2 * lines.radius[globe] * np.arcsin(np.minimum(straight[globe] / (2 * lines.radius[globe]), 1))
    straight[globe] = arc
    return straight
