"""Whether two dimensions differ: of two different lines, or of two surveys of one line.

The two must not be mixed. Two different shores are draws of two processes, and each brings the whole
uncertainty of its process. Two surveys of one shore share the shore: where it happens to be rough, both
find it rough, and only what differs between them counts.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from geofractal.errors import ConfigError
from geofractal.kernels.ladder_fit import fit_lines
from geofractal.kernels.line_scales import line_scales
from geofractal.kernels.walk import walk_ladders
from geofractal.scaling.ladder import RUNGS_PER_DECADE, divider_ladders

if TYPE_CHECKING:
    from geofractal.measure import Floats, Ints, Lines
    from geofractal.scaling.judge import Judgement

STRETCHES = (32, 16, 8)
"""Numbers of matching stretches tried, the most first."""

STEPS_A_STRETCH = 4.0
"""Steps of the longest ruler that a stretch should hold, by its end-to-end distance."""

RESAMPLES = 1000
SHAKES = 16


@dataclass(frozen=True, slots=True)
class Difference:
    """A difference of two dimensions, first less second, with its 95 % interval.

    Attributes
    ----------
    difference, low, high : NaN where a dimension is missing
    """

    difference: float
    low: float
    high: float

    @property
    def differs(self) -> bool:
        """Whether the interval excludes zero; False where there is no figure."""
        return bool(self.low > 0 or self.high < 0)


def difference_of_two_lines(first: Judgement, i: int, second: Judgement, j: int) -> Difference:
    """Compare the dimensions of two different lines, each with the uncertainty of its process.

    Parameters
    ----------
    first, i : the judgement that holds the one line, and its number there
    second, j : of the other

    Notes
    -----
    The interval of a difference from the intervals of its terms, which may be lopsided: Zou & Donner
    (2008), Statistics in Medicine 27:1693-1702 (from memory).
    """
    d = float(first.dimension[i] - second.dimension[j])
    down = np.hypot(first.dimension[i] - first.low[i], second.high[j] - second.dimension[j])
    up = np.hypot(first.high[i] - first.dimension[i], second.dimension[j] - second.low[j])
    return Difference(d, d - float(down), d + float(up))


def difference_of_two_surveys(
    first: Lines, second: Lines, *, position_error_m: tuple[float, float], seed: int = 0
) -> Difference:
    """Compare the dimensions that two surveys give one line.

    Both are cut into matching stretches and walked with the same rulers; the stretches are resampled
    together, and what shaking each survey by its positional error changes is added.

    Parameters
    ----------
    first, second : one feature of one part each, both projected to the same plane, metres
    position_error_m : standard deviation of each survey's positions along each axis, metres, 0 for none
    seed : of the resampling

    Returns
    -------
    Difference
        NaN where the two share no ladder of half a decade whose rulers fit into the stretches.

    Raises
    ------
    ConfigError
        The two have different numbers of axes, or lie too far apart to be one line.
    """
    if (
        len(first.part_offsets) != 2
        or len(second.part_offsets) != 2
        or first.xy.shape[1] != second.xy.shape[1]
    ):
        raise ConfigError("two surveys of one line: give one feature of one part each, on the same plane")
    rng = np.random.default_rng(seed)
    one, two = first.xy, _alike(first, second)
    ladders = [divider_ladders(lines).rulers for lines in (first, second)]
    if min(len(rulers) for rulers in ladders) == 0:
        return Difference(np.nan, np.nan, np.nan)
    lowest = max(rulers[0] for rulers in ladders)
    for stretches in STRETCHES:
        cuts = _matching_cuts(one, two, stretches)
        ends = [
            np.linalg.norm(np.diff(xy[c], axis=0), axis=1) for xy, c in zip((one, two), cuts, strict=True)
        ]
        highest = float(np.median(np.minimum(*ends))) / STEPS_A_STRETCH
        if highest >= lowest * np.sqrt(10):
            rulers = np.geomspace(lowest, highest, int(RUNGS_PER_DECADE * np.log10(highest / lowest)) + 1)
            return _resampled((one, two), cuts, rulers, position_error_m, rng)
    return Difference(np.nan, np.nan, np.nan)


def _alike(first: Lines, second: Lines) -> Floats:
    """Return the second survey's vertices in the first one's direction and, for rings, from its start."""
    xy = second.xy
    near = np.linalg.norm(xy - first.xy[0], axis=1)
    if first.closed[0] and second.closed[0]:
        ring = np.roll(xy[:-1], -int(near[:-1].argmin()), axis=0)
        turned = np.concatenate([ring, ring[:1]])
        marks = first.xy[np.linspace(0, len(first.xy) - 1, 9).astype(int)[1:-1]]
        place = [int(np.linalg.norm(turned - mark, axis=1).argmin()) for mark in marks]
        xy = turned if np.diff(place).sum() >= 0 else turned[::-1]
    elif near[0] > near[-1]:
        xy = xy[::-1]
    extents = [
        line_scales(lines.xy, lines.source_vertex, lines.part_offsets, lines.feature_offsets)[0, 1]
        for lines in (first, second)
    ]
    apart = max(np.linalg.norm(xy[0] - first.xy[0]), np.linalg.norm(xy[-1] - first.xy[-1]))
    if apart > 0.1 * max(extents):
        raise ConfigError(
            f"the two lines start or end {apart:.0f} m apart: no two surveys of one line;"
            " compare them as two different lines"
        )
    return np.ascontiguousarray(xy)


def _matching_cuts(one: Floats, two: Floats, stretches: int) -> tuple[Ints, Ints]:
    """Cut the first line into stretches of equal length, the second where it comes nearest to each cut."""
    along = np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(one, axis=0), axis=1))))
    first = np.searchsorted(along, np.linspace(0, along[-1], stretches + 1)).clip(0, len(one) - 1)
    second = np.zeros(stretches + 1, dtype=np.int64)
    share = np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(two, axis=0), axis=1))))
    share /= share[-1]
    for k in range(1, stretches):
        # Only within two stretches of its share: a line may come back on itself.
        low, high = np.searchsorted(share, [(k - 2) / stretches, (k + 2) / stretches])
        low = max(int(low), int(second[k - 1]))
        second[k] = low + np.linalg.norm(two[low : max(int(high), low + 1)] - one[first[k]], axis=1).argmin()
    second[-1] = len(two) - 1
    return first, second


def _stretch_lengths(xy: Floats, cuts: Ints, rulers: Floats) -> Floats:
    """Return L(r) of every stretch, (stretches, rulers); NaN where a stretch is too short for a ruler."""
    pieces = [xy[a : b + 1] for a, b in pairwise(cuts)]
    pieces = [piece if len(piece) > 1 else np.repeat(piece, 2, axis=0) for piece in pieces]
    n = len(pieces)
    found = walk_ladders(
        np.concatenate(pieces),
        np.concatenate(([0], np.cumsum([len(piece) for piece in pieces]))).astype(np.int64),
        np.arange(n + 1),
        np.zeros(n, np.bool_),
        np.full(n, np.inf),
        np.arange(n + 1) * len(rulers),
        np.tile(rulers, n),
        4,
        64,
        True,
        0,
    )
    return np.asarray(found)[:, 0].reshape(n, -1)


def _slopes(lengths: Floats, rulers: Floats) -> Floats:
    """Return the slope of ln L on ln r of each row."""
    rows, count = lengths.shape
    logs = np.log(lengths).ravel()
    return fit_lines(np.arange(rows + 1) * count, np.tile(np.log(rulers), rows), logs)[:, 0]


def _resampled(
    lines: tuple[Floats, Floats],
    cuts: tuple[Ints, Ints],
    rulers: Floats,
    position_error_m: tuple[float, float],
    rng: np.random.Generator,
) -> Difference:
    """Return the difference with the error of resampled stretches and of shaken positions."""

    def lengths(shaken: bool) -> tuple[Floats, Floats]:  # noqa: FBT001 - one private choice
        moved = [
            _shaken(xy, error, rulers[0], rng) if shaken else xy
            for xy, error in zip(lines, position_error_m, strict=True)
        ]
        one, two = (_stretch_lengths(xy, c, rulers) for xy, c in zip(moved, cuts, strict=True))
        return one, two

    one, two = lengths(shaken=False)
    usable = np.isfinite(one).all(axis=1) & np.isfinite(two).all(axis=1)
    if usable.sum() < 4:
        return Difference(np.nan, np.nan, np.nan)

    def difference(a: Floats, b: Floats, chosen: Ints) -> Floats:
        return _slopes(b[chosen].sum(axis=1), rulers) - _slopes(a[chosen].sum(axis=1), rulers)

    every = np.flatnonzero(usable)
    found = float(difference(one, two, every[None])[0])
    drawn = rng.choice(every, size=(RESAMPLES, len(every)))
    spread = float(difference(one, two, drawn).std(ddof=1)) * np.sqrt(len(every) / (len(every) - 1))
    shakes = np.zeros(1)
    if max(position_error_m) > 0:
        tries = (lengths(shaken=True) for _ in range(SHAKES))
        shakes = (
            np.array([np.nan_to_num(difference(a, b, every[None])[0], nan=found) for a, b in tries]) - found
        )
    from scipy.stats import t

    half = float(t.ppf(0.975, len(every) - 1)) * float(np.sqrt(spread**2 + np.mean(shakes**2)))
    return Difference(found, found - half, found + half)


def _shaken(xy: Floats, error_m: float, reach_m: float, rng: np.random.Generator) -> Floats:
    """Move a line by normal errors that are independent once a first ruler apart and drawn out between."""
    along = np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(xy, axis=0), axis=1))))
    knots = np.linspace(0, along[-1], max(2, int(along[-1] / reach_m) + 1))
    moves = rng.normal(0, error_m, (len(knots), xy.shape[1]))
    return xy + np.column_stack([np.interp(along, knots, moves[:, c]) for c in range(xy.shape[1])])
