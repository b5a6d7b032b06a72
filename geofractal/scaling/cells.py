"""What box counts of raster cells are evidence of: dimension, interval and verdict.

Sets of cells are no lines: their dimension may be anything from 0 to 2, they have neither ends nor length,
and their boxes are tallied by blocks of the map rather than by stretches. So they have rules of their own.

Fit
    ln N on ln s by weighted least squares. A size weighs what it covers of the ladder, in full from 50 boxes
    on. Sets that come near themselves share boxes, the more the higher the dimension and the shorter the
    ladder; half of what random families show of this is added to the slope.
Interval
    From the map's own evidence: how much the slope hangs on each of 16 blocks of the map, and for maps with
    few blocks that hold anything, what maps of known dimension scatter by. It reaches farther up by
    the half that is not corrected.
Verdict
    A hinge and a cubic stand beside the straight line. One of them wins where it leaves a small share of the
    residual, takes up more of it than grids and lattices make, and is sure by the blocks of the map. Counts
    that no straight line comes near are `curved` as well. A hinge is a break unless the cubic is far better.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from geofractal.scaling.calibrated import CELLS, CellConstants

if TYPE_CHECKING:
    from geofractal.measure import Floats, Ints

PLACES = 25
"""Places at which a break is tried."""


class CellJudgement(NamedTuple):
    """What the counts of one set of cells are evidence of; NaN where there is no figure.

    Attributes
    ----------
    verdict : a word of `geofractal.scaling.judge.VERDICTS`
    dimension, low, high : box dimension, and its 95 % interval for the process that made the map; under
        ``two-regime`` and ``curved`` the interval also holds the dimensions at either end of the ladder
    error : standard error for the process
    size_min, size_max : first and last box size used, in cells
    sizes : number of sizes used
    break_at, break_low, break_high : in cells, under ``two-regime``
    fine, coarse : dimensions below and above the break, or at both ends where curved
    """

    verdict: str = "too-few-scales"
    dimension: float = np.nan
    low: float = np.nan
    high: float = np.nan
    error: float = np.nan
    size_min: float = np.nan
    size_max: float = np.nan
    sizes: int = 0
    break_at: float = np.nan
    break_low: float = np.nan
    break_high: float = np.nan
    fine: float = np.nan
    coarse: float = np.nan


class _Ladder(NamedTuple):
    """The sizes used: ln size and ln boxes less their means, weights of sum 1, and each block's share."""

    x: Floats
    y: Floats
    weights: Floats
    shares: Floats


class _Parts(NamedTuple):
    """Curves in ln boxes: how much of each, what of the mean square it takes up, and its standard error."""

    coefficient: Floats
    gain: Floats
    error: Floats


class _Hinge(NamedTuple):
    """The best hinge: what it takes up of the mean square, if it is sure, dimensions, place and limits."""

    gain: float
    sure: bool
    fine: float
    coarse: float
    places: tuple[float, float, float]


def judge_cells(sizes: Ints, boxes: Ints, tallies: Ints, constants: CellConstants = CELLS) -> CellJudgement:
    """Judge the ladder of one set of cells.

    Parameters
    ----------
    sizes : (k,) box sides in cells, ascending
    boxes : (k,) boxes that hold cells of the set
    tallies : (k, b) those boxes by block of the map
    constants : what simulation set

    Returns
    -------
    CellJudgement
        ``too-few-scales`` and no dimension where the sizes with enough boxes span less than half a decade.

    Examples
    --------
    >>> sizes, boxes = 4 * 2 ** np.arange(6), 4 * 3 ** np.arange(8, 2, -1)
    >>> tallies = np.outer(boxes // 4, [2, 1, 1])
    >>> judge_cells(sizes, boxes, tallies).verdict
    'power-law'
    >>> judge_cells(sizes[:2], boxes[:2], tallies[:2]).verdict
    'too-few-scales'
    """
    c = constants
    used = int(np.argmin(np.append(boxes >= c.fewest_boxes, [False])))
    if used < c.fewest_sizes or sizes[used - 1] < sizes[0] * 10**c.fewest_decades * (1 - 1e-9):
        return CellJudgement(sizes=used)
    first, last = float(sizes[0]), float(sizes[used - 1])
    ladder, middle = _ladder(sizes[:used], boxes[:used], tallies[:used], c)
    line = _parts(ladder, ladder.x[None])
    square = max(float(ladder.weights @ ladder.y**2 - line.gain[0]), 0.0)
    raw, decades = -float(line.coefficient[0]), float(np.log10(last / first))
    crowding = _crowding(raw, decades, c)
    few = c.few_blocks**2 * float((ladder.shares[0] ** 2).sum())
    ripple = c.ripple**2 * square / np.log(last / first) ** 2
    error = float(np.sqrt(line.error[0] ** 2 + few + (c.doubt * crowding) ** 2 + ripple))
    dimension = raw + c.corrected * crowding
    found = CellJudgement(
        "power-law",
        dimension,
        dimension - c.quantile * error,
        dimension + c.quantile * error + (1 - c.corrected) * crowding,
        error,
        first,
        last,
        used,
    )
    found = _compared(found, ladder, raw, square, middle, c)
    low = max(0.0, np.nanmin([found.low, found.fine, found.coarse]))
    high = max(min(2.0, np.nanmax([found.high, found.fine, found.coarse])), dimension)
    return found._replace(low=float(low), high=float(high))


def effective_dimension(
    found: CellJudgement, sizes: Ints, boxes: Ints, effective: Floats, constants: CellConstants = CELLS
) -> tuple[float, float, float]:
    """Return the dimension by effective numbers of boxes, (k,), over the sizes that a judgement used.

    Weighted boxes are not crowded, so that nothing is added. The interval is the box dimension's, made wider
    for the greater scatter of shares; the verdict is that one's as well.
    """
    if np.isnan(found.dimension):
        return np.nan, np.nan, np.nan
    c, k = constants, found.sizes
    ladder, _ = _ladder(sizes[:k], boxes[:k], np.ones((k, 2), np.int64), c)
    logs = ladder._replace(y=np.log(effective[:k]))
    dimension = -float(_parts(logs, ladder.x[None]).coefficient[0])
    down = c.effective_reach * (found.dimension - found.low)
    up = max(c.effective_reach * (found.high - found.dimension), down)  # the other end may stand at 2
    return dimension, max(0.0, dimension - down), max(min(2.0, dimension + up), dimension)


def _crowding(raw: float, decades: float, c: CellConstants) -> float:
    """Return by how much boxes that are shared may flatten a slope; 0 for lines and filled areas."""
    return float(c.crowding * max(raw - 1, 0) ** 2 * max(2 - raw, 0) / decades**c.crowding_fades)


def _ladder(sizes: Ints, boxes: Ints, tallies: Ints, c: CellConstants) -> tuple[_Ladder, float]:
    """Return the ladder, and the mean of ln size that was taken off."""
    x, y = np.log(sizes), np.log(boxes)
    weights = np.gradient(x) * np.minimum(boxes / c.sure_boxes, 1.0)
    weights /= weights.sum()
    middle = float(weights @ x)
    return _Ladder(x - middle, y - weights @ y, weights, tallies / boxes[:, None]), middle


def _parts(ladder: _Ladder, curves: Floats) -> _Parts:
    """Return how much of each curve, (m, k), there is in ln boxes; curves have no mean."""
    weighed = ladder.weights * curves
    square = (weighed * curves).sum(axis=1)
    coefficient = weighed @ ladder.y / square
    # What each block does to a coefficient adds up to nothing, so blocks tell its error as a jackknife does.
    hangs = weighed @ ladder.shares / square[:, None]
    blocks = ladder.shares.shape[1]
    return _Parts(
        coefficient, coefficient**2 * square, np.sqrt((hangs**2).sum(axis=1) * blocks / (blocks - 1))
    )


def _bent(ladder: _Ladder, curves: Floats) -> tuple[Floats, Floats]:
    """Return curves without their mean and slope, and the slope that was taken off each."""
    x, w = ladder.x, ladder.weights
    slopes = curves @ (w * x) / (w @ x**2)
    return curves - (curves @ w)[:, None] - slopes[:, None] * x, slopes


def _best_hinge(ladder: _Ladder, raw: float, square: float, c: CellConstants) -> _Hinge:
    """Return the hinge that takes up most of the mean square that a line of dimension `raw` leaves."""
    x, span = ladder.x, float(np.ptp(ladder.x))
    places = np.linspace(x[0] + c.margin * span, x[-1] - c.margin * span, PLACES)
    curves, slopes = _bent(ladder, np.maximum(x - places[:, None], 0.0))
    turns = _parts(ladder, curves)
    best = int(turns.gain.argmax())
    left, turn = np.maximum(square - turns.gain, 0.0), turns.coefficient[best]
    near = places[left <= left[best] * (1 + 3.84 / max(span / 0.55 - 4, 1.0))]
    fine = raw + turn * slopes[best]
    return _Hinge(
        float(turns.gain[best]),
        bool(abs(turn) > c.sureness * turns.error[best]),
        float(fine),
        float(fine - turn),
        (float(places[best]), float(near[0]), float(near[-1])),
    )


def _cubic(ladder: _Ladder, c: CellConstants) -> tuple[float, bool]:
    """Return what a cubic takes up of the mean square, and whether a part of it is sure."""
    second = _bent(ladder, ladder.x[None] ** 2)[0]
    third = _bent(ladder, ladder.x[None] ** 3)[0]
    weighed = ladder.weights * second[0]
    third -= (third @ weighed) / (second @ weighed) * second
    parts = _parts(ladder, np.concatenate([second, third]))
    return float(parts.gain.sum()), bool((np.abs(parts.coefficient) > c.sureness * parts.error).any())


def _compared(
    found: CellJudgement, ladder: _Ladder, raw: float, square: float, middle: float, c: CellConstants
) -> CellJudgement:
    """Compare a line of dimension `raw`, which leaves a mean square, with a hinge and with a cubic."""
    hinge = _best_hinge(ladder, raw, square, c)
    cubic, cubic_sure = _cubic(ladder, c)
    least = (c.least_bend * np.log10(found.size_max / found.size_min)) ** 2
    breaks = hinge.sure and hinge.gain > max(least, (1 - c.hinge_share**2) * square)
    bends = cubic_sure and cubic > max(least, (1 - c.cubic_share**2) * square)
    if not (breaks or bends or square > c.most_residual**2):
        smooth = found.dimension <= c.smooth_below and found.high >= 1
        return found._replace(verdict="smooth") if smooth else found
    found = found._replace(verdict="curved", fine=hinge.fine, coarse=hinge.coarse)
    clear = 1 + c.clear_turn * abs(hinge.coarse - hinge.fine)
    if not breaks or square - hinge.gain > clear**2 * (square - cubic):
        return found
    at, low, high = (float(np.exp(middle + x)) for x in hinge.places)
    return found._replace(verdict="two-regime", break_at=at, break_low=low, break_high=high)
