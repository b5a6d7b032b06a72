"""What a ladder is evidence of: dimension, two uncertainties, verdict, content.

Fit
    ln L on ln r by weighted least squares. A rung counts in full from 50 steps on and in proportion
    below, because the scatter of ln L between curves of one kind falls with the number of steps; over the
    first 1.2 e-folds of the ladder weights rise from a fifth to one, so that the ripple which curves made
    of equal pieces carry does not leak into the slope. Two effects of a ladder's ends are taken out
    beforehand: what the source's own detail hides of a fine ruler's length, and the last partial step of
    a line or ring. A ring turns back, which shortens its coarse rungs: for rings drawn from open curves that
    is taken out, beyond the first decade rungs need 24 steps, and what is left is added to the doubt.
Two uncertainties
    `spread` is that of this line alone: starts, directions and where the rulers happen to lie.
    `low` and `high` are the 95 % interval for the process that made the line, the one to use when two
    different lines are compared. It is made of the line's own evidence: how much the slope differs
    between stretches of the line, how large the bends of the ladder are that a power law does not have,
    and how far a ripple as large as the residuals may tilt a line over so short a ladder.
    Both were scaled once, by simulation; near dimension 1 the interval reaches farther upwards.
Verdict
    A hinge, a step and a parabola are fitted beside the straight line. The straight line stands unless
    one of them takes up more than a threshold, in units of the line's own noise, leaves less than 66 % of
    the mean square residual, and leaves less than a sine wave does that fits twice into the ladder: curves
    made of equal pieces carry such a ripple, and it is no break. R2 decides nothing.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from geofractal.kernels.ladder_fields import FIELDS
from geofractal.kernels.ladder_judge import judge_ladders, used_rungs
from geofractal.scaling.calibrated import BOX, DIVIDER
from geofractal.scaling.ladder import scales_of

if TYPE_CHECKING:
    from geofractal.measure import Bools, Floats, Ints, Lines
    from geofractal.scaling.ladder import Ladders

VERDICTS = ("power-law", "two-regime", "curved", "smooth", "too-few-scales")
"""Verdict words, indexed by `Judgement.verdict`."""

LEFT_OUT = 0.1
"""Largest share of a feature's length that may be left out of a rung, above what every rung leaves out."""

_FIELD = {name: i for i, name in enumerate(FIELDS)}
_CONSTANTS = {"divider": DIVIDER, "box": BOX}


@dataclass(frozen=True, slots=True)
class Rungs:
    """What a measure found at the rungs of a set of ladders of n features, q rungs in all.

    Attributes
    ----------
    lengths : (q,) L(r) in metres; box counting gives boxes times size. NaN where nothing was measured
    steps : (q,) whole steps, or boxes
    noise : (q,) standard error of L(r) from starts and directions, metres; NaN where unknown
    tallies : (q, STRETCHES) steps by stretch of the line, or (q, 0) where they were not counted
    left_out : (q,) length of the parts that were too short for the rung, metres
    detail : (n,) vertex spacing in metres that hides detail from fine rulers; 0 where nothing is hidden
    open_parts : (n,) number of open lines in each feature; 0 where it is made of rings alone
    rings : (n,) number of rings, whose turning back shortens the coarse rungs; None where it does not
    """

    lengths: Floats
    steps: Floats
    noise: Floats
    tallies: Floats
    left_out: Floats
    detail: Floats
    open_parts: Floats
    rings: Floats | None = None


@dataclass(frozen=True, slots=True)
class Judgement:
    """What the ladders of n features are evidence of; NaN where there is no figure.

    Attributes
    ----------
    dimension : (n,) over the rungs used, whatever the verdict; NaN under ``too-few-scales``
    low, high : (n,) 95 % interval for the process that made the line. Under ``two-regime`` and ``curved``
        it also holds the dimensions at either end of the ladder
    spread : (n,) standard error for this line alone
    error : (n,) standard error for the process, on the scale that `difference_of_two_lines` needs
    raw_dimension : (n,) before the effects of the ladder's ends are taken out
    r2 : (n,) share of variance explained, no evidence for a power law
    rungs : (n,) rungs used
    ruler_min, ruler_max : (n,) metres, first and last rung used
    verdict : (n,) index into `VERDICTS`
    break_at, break_low, break_high : (n,) metres, under ``two-regime``
    fine_dimension, coarse_dimension : (n,) below and above the break, or at both ends where curved
    evidence : (n,) how much better the best alternative is than a power law, in thresholds: at least 1
        wherever a rough line is no power law
    content : (n,) prefactor of L(r) = content r^(1 - D), in m^D
    log10_content : (n,)
    used : (q,) whether a rung is one of those used; none is where there is no dimension
    """

    dimension: Floats
    low: Floats
    high: Floats
    spread: Floats
    error: Floats
    raw_dimension: Floats
    r2: Floats
    rungs: Ints
    ruler_min: Floats
    ruler_max: Floats
    verdict: Ints
    break_at: Floats
    break_low: Floats
    break_high: Floats
    fine_dimension: Floats
    coarse_dimension: Floats
    evidence: Floats
    content: Floats
    log10_content: Floats
    used: Bools
    _mean_x: Floats
    _mean_y: Floats
    _residual: Floats

    def __len__(self) -> int:
        """Return the number of features."""
        return len(self.dimension)

    def verdict_words(self) -> list[str]:
        """Return the verdicts as words."""
        return [VERDICTS[code] for code in self.verdict]

    def length_at(
        self, ruler_m: float | Floats, *, extrapolate: bool = False
    ) -> tuple[Floats, Floats, Floats]:
        """Return the length that the fit predicts at a ruler, metres, and its 95 % interval for this line.

        The interval holds what one more walk of the same line at that ruler should find: scatter of the
        rungs about the fit and the error of its slope for this line.

        Parameters
        ----------
        ruler_m : metres, one for all or (n,)
        extrapolate : whether to predict outside the rungs used too, where the interval also carries the
            process's error of the slope over the distance; else NaN there
        """
        x = np.log(np.asarray(ruler_m, dtype=np.float64)) * np.ones(len(self))
        middle = self._mean_y + (1 - self.dimension) * (x - self._mean_x)
        first, last = np.log(self.ruler_min), np.log(self.ruler_max)
        beyond = np.maximum(np.maximum(first - x, x - last), 0.0)
        error = np.sqrt(
            self._residual**2 + (self.spread * (x - self._mean_x)) ** 2 + (self.error * beyond) ** 2
        )
        if not extrapolate:
            middle = np.where(beyond > 1e-9, np.nan, middle)
        return np.exp(middle), np.exp(middle - 2 * error), np.exp(middle + 2 * error)

    def lengths_at_rungs(self, ladders: Ladders) -> Floats:
        """Return the length that the fit gives at each rung used, metres, (q,); NaN at the others."""
        owners = ladders.owners
        x = np.log(ladders.rulers) - self._mean_x[owners]
        fitted: Floats = np.exp(self._mean_y[owners] + (1 - self.dimension[owners]) * x)
        return np.where(self.used, fitted, np.nan)


def judge(ladders: Ladders, rungs: Rungs, *, estimator: Literal["divider", "box"] = "divider") -> Judgement:
    """Judge every feature's ladder: dimension, uncertainties, verdict and content.

    Parameters
    ----------
    ladders : rulers or box sizes of n features
    rungs : what was found at them
    estimator : whose calibration holds

    Examples
    --------
    >>> import numpy as np
    >>> from geofractal.scaling.ladder import Ladders
    >>> straight = np.geomspace(1, 100, 25)
    >>> ladders = Ladders(np.array([0, 25]), straight)
    >>> unknown = np.full(25, np.nan)
    >>> found = Rungs(np.full(25, 1e4), 1e4 / straight, unknown, np.empty((25, 0)), np.zeros(25),
    ...               np.ones(1), np.ones(1))
    >>> judge(ladders, found).verdict_words()
    ['smooth']
    """
    logs = np.full(len(rungs.lengths), np.nan)
    np.log(rungs.lengths, out=logs, where=rungs.lengths > 0)
    x, constants = np.log(ladders.rulers), _CONSTANTS[estimator]
    whole = _whole_enough(ladders, rungs)
    used = used_rungs(ladders.offsets, x, logs, rungs.steps, whole, rungs.open_parts, constants)
    table = judge_ladders(
        ladders.offsets,
        x,
        logs,
        rungs.steps,
        rungs.noise / rungs.lengths,
        rungs.tallies,
        used,
        np.log(rungs.detail, where=rungs.detail > 0, out=np.full(len(rungs.detail), -np.inf)),
        rungs.open_parts,
        np.zeros(len(rungs.open_parts)) if rungs.rings is None else rungs.rings,
        constants,
    )
    return _judgement(table, used, ladders.owners)


def divider_rungs(
    lines: Lines,
    *,
    length: Floats,
    spread: Floats,
    steps: Floats,
    tallies: Floats,
    left_out: Floats,
    scales: Floats | None = None,
) -> Rungs:
    """Return what divider walks found, with what the lines' mapping hides, ready to be judged.

    Parameters as `geofractal.kernels.walk.walk_ladders` gives them, and the lines' scales where they are
    known already. A rung's mean is at least as sure as that of two walks, one each way.
    """
    scales = scales_of(lines) if scales is None else scales
    opens = np.concatenate(([0], np.cumsum(~lines.closed)))[lines.feature_offsets]
    parts = np.diff(lines.feature_offsets)
    detail = np.where(scales[:, 3] > 0, 0.0, scales[:, 0])
    open_parts = np.diff(opens).astype(float)
    return Rungs(
        length, steps, spread / np.sqrt(2), tallies, left_out, detail, open_parts, parts - open_parts
    )


def _whole_enough(ladders: Ladders, rungs: Rungs) -> Bools:
    """Whether a rung leaves out little more of its feature than the feature's first rung does."""
    first = ladders.offsets[ladders.owners]
    return ~(rungs.left_out - rungs.left_out[first] > LEFT_OUT * rungs.lengths[first])


def _judgement(table: Floats, used: Bools, owners: Ints) -> Judgement:
    def column(name: str) -> Floats:
        return table[:, _FIELD[name]].copy()

    dimension, mean_x, mean_y = column("dimension"), column("mean_x"), column("mean_y")
    ln_content = mean_y - (1 - dimension) * mean_x
    some = ~np.isnan(dimension)
    return Judgement(
        dimension=dimension,
        low=column("low"),
        high=column("high"),
        spread=column("spread"),
        error=column("process_error"),
        raw_dimension=column("raw_dimension"),
        r2=column("r2"),
        rungs=column("rungs").astype(np.int64),
        ruler_min=np.exp(np.where(some, column("first_x"), np.nan)),
        ruler_max=np.exp(np.where(some, column("last_x"), np.nan)),
        verdict=column("verdict").astype(np.int64),
        break_at=np.exp(column("break_x")),
        break_low=np.exp(column("break_low_x")),
        break_high=np.exp(column("break_high_x")),
        fine_dimension=column("fine_dimension"),
        coarse_dimension=column("coarse_dimension"),
        evidence=column("evidence"),
        content=np.exp(ln_content),
        log10_content=ln_content / np.log(10.0),
        used=used & some[owners],
        _mean_x=mean_x,
        _mean_y=mean_y,
        _residual=column("residual"),
    )
