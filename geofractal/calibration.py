"""Proof before trust: what the dimension, its interval and its verdict do on curves of known dimension.

`calibrate` draws random curves of the stated size and dimension from several families, measures them as a
batch would, and tells bias, spread, coverage and how often the verdict errs. `calibrate_like` takes size and
dimension from a user's own lines.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass, fields, replace
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from geofractal.errors import ConfigError
from geofractal.measure import Lines
from geofractal.scaling.judge import VERDICTS, Judgement, Rungs, divider_rungs, judge
from geofractal.scaling.ladder import Ladders, divider_ladders, scales_of
from geofractal.synthetic import fractional_trail, random_koch, random_midpoint, random_ratio_koch

if TYPE_CHECKING:
    import pyarrow as pa

    from geofractal.measure import Floats
    from geofractal.synthetic import Curve

Draw = Callable[[float, int, int], "Curve"]
"""Draws a curve of a dimension with about so many vertices from a seed."""


def _level(pieces: float, vertices: int) -> int:
    return max(1, round(float(np.log(vertices) / np.log(pieces))))


FAMILIES: dict[str, Draw] = {
    "fractional trails": lambda d, n, s: fractional_trail(d, vertices=n, seed=s),
    "random-sided Koch": lambda d, n, s: random_koch(d, level=_level(4, n), seed=s),
    "random middles": lambda d, n, s: random_midpoint(d, level=_level(2, n), seed=s),
    "mixed Koch": lambda d, n, s: random_ratio_koch(d, vertices=n, seed=s),
}
"""Random families whose dimension is known exactly, drawn by dimension, vertices and seed."""

CHUNK_VERTICES = 2_000_000
"""Vertices measured together at most."""

MOST_VERTICES = 50_000
"""Vertices of a curve like a user's own at most, so that a calibration stays under a minute."""


@dataclass(frozen=True, slots=True)
class CalibrationRow:
    """What was found on curves of one family, dimension and size.

    Attributes
    ----------
    family, dimension, vertices, curves : what was drawn
    decades : mean length of the ladders
    bias : mean of the dimensions found, less the truth; NaN where none was given
    spread : standard deviation of the dimensions found
    coverage : share of the answered curves whose 95 % interval holds the truth
    width : mean width of that interval
    width_ratio : width over 2 x 1.96 x spread
    refused : share of curves without a dimension
    power_law, two_regime, curved, smooth, too_few_scales : share of each verdict; every curve is a power law
    """

    family: str
    dimension: float
    vertices: int
    curves: int
    decades: float
    bias: float
    spread: float
    coverage: float
    width: float
    width_ratio: float
    refused: float
    power_law: float
    two_regime: float
    curved: float
    smooth: float
    too_few_scales: float


@dataclass(frozen=True, slots=True)
class Calibration:
    """The rows of a calibration, as a table and a figure."""

    rows: tuple[CalibrationRow, ...]

    def table(self) -> pa.Table:
        """Return one row per family, dimension and size; columns as in `CalibrationRow`."""
        import pyarrow as pa

        return pa.Table.from_pylist([asdict(row) for row in self.rows])

    def lines(self) -> Iterator[str]:
        """Yield the table as text, a line a row."""
        head = "dimension vertices decades    bias  spread coverage   width x spread refused power-law"
        yield f"{'family':18} {head}"
        for row in self.rows:
            yield (
                f"{row.family:18} {row.dimension:9.3f} {row.vertices:8,} {row.decades:7.2f} {row.bias:+7.3f} "
                f"{row.spread:7.3f} {row.coverage:8.1%} {row.width:7.3f} {row.width_ratio:8.2f} "
                f"{row.refused:7.1%} {row.power_law:9.1%}"
            )

    def csv(self) -> str:
        """Return the table as CSV, columns as in `CalibrationRow`."""
        names = [item.name for item in fields(CalibrationRow)]
        rows = [[str(getattr(row, name)) for name in names] for row in self.rows]
        return "\n".join(",".join(row) for row in [names, *rows]) + "\n"

    def figure(self) -> str:
        """Return an SVG drawing: error bars of each row about the truth, with its coverage."""
        from geofractal.calibration_figure import draw

        return str(draw(self.rows))


def lines_of(curves: Sequence[Curve]) -> Lines:
    """Return curves as a chunk of lines on a plane, one feature each."""
    counts = [len(curve) for curve in curves]
    n, m = len(curves), sum(counts)
    return Lines(
        rows=np.arange(n, dtype=np.int64),
        xy=np.ascontiguousarray(np.concatenate([curve.xy for curve in curves])),
        part_offsets=np.concatenate(([0], np.cumsum(counts))).astype(np.int64),
        feature_offsets=np.arange(n + 1, dtype=np.int64),
        closed=np.array([curve.closed for curve in curves]),
        source_vertex=np.ones(m, np.bool_),
        plane=np.zeros(n, np.uint8),
        distortion=np.zeros(n),
        radius=np.full(n, np.inf),
    )


def judge_lines(
    lines: Lines,
    *,
    ruler_min_m: float | None = None,
    ruler_max_m: float | None = None,
    rungs: int | None = None,
) -> tuple[Ladders, Rungs, Judgement]:
    """Walk a chunk of lines with their ladders and judge them, as `divider-dimension` does."""
    from geofractal.estimators.divider import walk

    scales = scales_of(lines)
    ladders = divider_ladders(
        lines, ruler_min_m=ruler_min_m, ruler_max_m=ruler_max_m, rungs=rungs, scales=scales
    )
    walks = walk(lines, ladders)
    found = divider_rungs(lines, **walks._asdict(), scales=scales)
    return ladders, found, judge(ladders, found)


@dataclass(frozen=True, slots=True)
class Settings:
    """What to draw and how to measure it.

    Attributes
    ----------
    dimensions, vertices : every combination is drawn; 1 < D < 2, at least 100 vertices
    curves : of each family, dimension and size
    families : names out of `FAMILIES`
    ruler_min_share, ruler_max_share : first and last ruler as shares of a curve's extent; None chooses
        them from the curve, as for a layer
    rungs : number of rulers; None takes the default a decade
    seed : of all draws
    """

    dimensions: tuple[float, ...] = (1.1, 1.25, 1.4)
    vertices: tuple[int, ...] = (2_000, 20_000)
    curves: int = 100
    families: tuple[str, ...] = tuple(FAMILIES)
    ruler_min_share: float | None = None
    ruler_max_share: float | None = None
    rungs: int | None = None
    seed: int = 0

    def __post_init__(self) -> None:
        """Refuse what cannot be drawn."""
        if odd := [d for d in self.dimensions if not 1 < d < 2]:
            raise ConfigError(f"dimensions {odd}: a curve in the plane has 1 < D < 2")
        if few := [n for n in self.vertices if n < 100]:
            raise ConfigError(f"vertices {few}: a curve to calibrate with has at least 100")
        if wrong := [name for name in self.families if name not in FAMILIES]:
            raise ConfigError(f"families {wrong}: known are {', '.join(FAMILIES)}")
        if self.curves < 2:
            raise ConfigError(f"curves {self.curves}: a spread needs at least 2")


def calibrate(settings: Settings, *, progress: Callable[[float], None] | None = None) -> Calibration:
    """Draw curves of known dimension, measure them as a batch would and tell how right the figures are.

    Parameters
    ----------
    settings : what to draw; the default takes well under a minute on one core
    progress : called with the share that is done, 0 to 1

    Examples
    --------
    >>> settings = Settings(dimensions=(1.3,), vertices=(2000,), curves=20, families=("random middles",))
    >>> calibrate(settings).rows[0].refused
    0.0
    """
    sets = list(product(settings.families, settings.dimensions, settings.vertices))
    weights = np.cumsum([0] + [size for *_, size in sets])
    rows = []
    for i, (family, dimension, size) in enumerate(sets):
        seeds = np.random.SeedSequence([settings.seed, i]).generate_state(settings.curves).tolist()
        judged = _measured(settings, family, dimension, size, seeds)
        rows.append(summarise(family, dimension, size, judged))
        if progress is not None:
            progress(float(weights[i + 1] / weights[-1]))
    return Calibration(tuple(rows))


def calibrate_like(
    lines: Lines, settings: Settings | None = None, *, progress: Callable[[float], None] | None = None
) -> Calibration:
    """Calibrate on curves like a user's own lines: their median and largest size, their dimensions.

    Parameters
    ----------
    lines : a layer's features, or a sample of them
    settings : its dimensions and vertices are replaced by the lines' own

    Raises
    ------
    ConfigError
        No feature has a dimension to imitate.
    """
    _, _, judged = judge_lines(lines)
    found = np.isfinite(judged.dimension)
    if not found.any():
        raise ConfigError("no feature of this layer has a ladder of half a decade: nothing to imitate")
    vertices = np.diff(lines.part_offsets[lines.feature_offsets])[found]
    sizes = np.quantile(vertices, [0.5, 1.0], method="nearest").clip(100, MOST_VERTICES)
    dimensions = np.quantile(judged.dimension[found], [0.1, 0.5, 0.9]).clip(1.02, 1.9).round(2)
    return calibrate(
        replace(
            settings or Settings(),
            dimensions=tuple(float(d) for d in np.unique(dimensions)),
            vertices=tuple(int(n) for n in np.unique(sizes)),
        ),
        progress=progress,
    )


def _measured(
    settings: Settings, family: str, dimension: float, size: int, seeds: Sequence[int]
) -> list[Judgement]:
    """Draw and judge curves, so many at a time that memory stays bounded."""
    judged = []
    together = max(1, CHUNK_VERTICES // size)
    for first in range(0, len(seeds), together):
        curves = [FAMILIES[family](dimension, size, seed) for seed in seeds[first : first + together]]
        lines = lines_of(curves)
        extent = max(float(np.ptp(curve.xy, axis=0).max()) for curve in curves)
        low, high = settings.ruler_min_share, settings.ruler_max_share
        _, _, judgement = judge_lines(
            lines,
            ruler_min_m=None if low is None else low * extent,
            ruler_max_m=None if high is None else high * extent,
            rungs=settings.rungs,
        )
        judged.append(judgement)
    return judged


def summarise(family: str, truth: float, vertices: int, judged: Sequence[Judgement]) -> CalibrationRow:
    """Return how right the judgements of curves of one known dimension are."""

    def joined(name: str) -> Floats:
        return np.concatenate([getattr(one, name) for one in judged])

    dimension, verdict = joined("dimension"), joined("verdict")
    given = np.isfinite(dimension)
    low, high, found = joined("low")[given], joined("high")[given], dimension[given]
    spread = float(found.std(ddof=1)) if given.sum() > 1 else np.nan
    width = float((high - low).mean()) if given.any() else np.nan
    decades = np.log10(joined("ruler_max")[given] / joined("ruler_min")[given])
    return CalibrationRow(
        family,
        truth,
        vertices,
        len(dimension),
        decades=float(decades.mean()) if given.any() else np.nan,
        bias=float(found.mean() - truth) if given.any() else np.nan,
        spread=spread,
        coverage=float(((low <= truth) & (truth <= high)).mean()) if given.any() else np.nan,
        width=width,
        width_ratio=width / (2 * 1.96 * spread),
        refused=float(1 - given.mean()),
        **{word.replace("-", "_"): float((verdict == code).mean()) for code, word in enumerate(VERDICTS)},
    )
