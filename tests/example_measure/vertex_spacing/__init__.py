"""How far apart the vertices of each line lie: an example of a measure in a package of its own."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from pydantic import Field

from geofractal.measure import Column, Lines, Measure, Options, Values

Share = Annotated[float, Field(gt=0.0, lt=1.0)]


class VertexSpacingOptions(Options):
    """Options of `VertexSpacing`."""

    quantile: Share = Field(0.5, description="quantile of the spacings that is reported")
    also_quantiles: tuple[Share, ...] = Field((), description="further quantiles, a column each")


class VertexSpacing(Measure[VertexSpacingOptions]):
    """Distance from each vertex of a feature to the next, as quantiles over its parts."""

    name = "vertex-spacing"
    title = "Vertex spacing"
    formula = "quantile of |v(k+1) - v(k)|"
    sources = ("common practice",)
    stem = "vertex"
    options = VertexSpacingOptions

    def columns(self, options: VertexSpacingOptions) -> tuple[Column, ...]:
        """Return the main quantile, the further ones and the number of vertices."""
        meaning = "quantile of the distances between neighbouring vertices"
        further = [
            Column(f"vertex_spacing_{_percent(share)}_m", f"vtx{_percent(share)}m", "number", "m", meaning)
            for share in options.also_quantiles
        ]
        return (
            Column("vertex_spacing_m", "vtxspace_m", "number", "m", meaning, self.formula, *self.sources),
            *further,
            Column("vertex_count", "vtxcount", "count", "", "number of vertices"),
            self.note_column(),
        )

    def measure(self, lines: Lines, options: VertexSpacingOptions) -> Values:
        """Measure a chunk; a feature of no length has no spacing."""
        shares = (options.quantile, *options.also_quantiles)
        spacings = np.full((len(lines), len(shares)), np.nan)
        counts = np.full(len(lines), -1, np.int64)
        notes = np.full(len(lines), None, object)
        for feature in range(len(lines)):
            steps, counts[feature] = _steps(lines, feature)
            if steps.sum() > 0.0:
                spacings[feature] = np.quantile(steps, shares)
            else:
                notes[feature] = "no length"
        names = [column.name for column in self.columns(options)]
        values: Values = {name: spacings[:, k].copy() for k, name in enumerate(names[:-2])}
        return values | {"vertex_count": counts, "vertex_note": notes}


def _steps(lines: Lines, feature: int) -> tuple[np.ndarray, int]:
    parts = range(lines.feature_offsets[feature], lines.feature_offsets[feature + 1])
    bounds = [(lines.part_offsets[part], lines.part_offsets[part + 1]) for part in parts]
    steps = [np.linalg.norm(np.diff(lines.xy[start:stop], axis=0), axis=1) for start, stop in bounds]
    return np.concatenate(steps), sum(stop - start for start, stop in bounds)


def _percent(share: float) -> str:
    return f"q{round(100 * share)}"
