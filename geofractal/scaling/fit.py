"""The straight line through a ladder on log-log axes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from geofractal.kernels.ladder_fit import fit_lines, local_slopes

if TYPE_CHECKING:
    from geofractal.measure import Floats, Ints
    from geofractal.scaling.ladder import Ladders


@dataclass(frozen=True, slots=True)
class Fit:
    """Least squares of ln y on ln r, one value per feature; NaN where fewer than two rungs have a y.

    Attributes
    ----------
    slope, intercept : (n,) of ln y on ln r, rulers in metres
    r2 : (n,) share of variance explained; says nothing about whether a power law holds
    rungs : (n,) rungs used
    """

    slope: Floats
    intercept: Floats
    r2: Floats
    rungs: Ints


def fit_power_law(ladders: Ladders, values: Floats) -> Fit:
    """Fit ln `values` on ln ruler by least squares, feature by feature.

    Parameters
    ----------
    ladders : of n features, k rungs in all
    values : (k,) positive quantity at each rung (walked length in metres, boxes counted); a NaN
        or a value that is not positive leaves its rung out

    Examples
    --------
    >>> import numpy as np
    >>> from geofractal.scaling.ladder import Ladders
    >>> ladders = Ladders(np.array([0, 3, 3]), np.array([1.0, 2.0, 4.0]))
    >>> fit_power_law(ladders, np.array([8.0, 4.0, 2.0])).slope
    array([-1., nan])
    """
    table = fit_lines(ladders.offsets, np.log(ladders.rulers), _logs(values))
    return Fit(table[:, 0].copy(), table[:, 1].copy(), table[:, 2].copy(), table[:, 3].astype(np.int64))


class LocalDimensions(NamedTuple):
    """The dimension around each of q rungs.

    Attributes
    ----------
    dimension : (q,)
    spread : (q,) its standard error for this line alone: what the walks' scatter makes of it, or how far
        the rungs lie off their straight line, whichever is more. Values of neighbours share rungs
    """

    dimension: Floats
    spread: Floats


def local_dimensions(ladders: Ladders, lengths: Floats, noise: Floats, *, reach: int = 2) -> LocalDimensions:
    """Return the dimension around each rung, 1 - slope of ln L over it and `reach` rungs on either side.

    Parameters
    ----------
    ladders : of n features, q rungs in all
    lengths : (q,) L(r); a NaN leaves its rung out
    noise : (q,) standard error of L(r) in the unit of `lengths`; NaN where unknown
    reach : 2 takes five rungs, a third of a decade of the default ladder

    Returns
    -------
    LocalDimensions
        NaN where fewer than three of those rungs have a length

    Examples
    --------
    >>> import numpy as np
    >>> from geofractal.scaling.ladder import Ladders
    >>> ladders = Ladders(np.array([0, 4]), np.array([1.0, 2.0, 4.0, 8.0]))
    >>> local_dimensions(ladders, np.array([8.0, 4.0, 2.0, np.nan]), np.zeros(4)).dimension
    array([ 2.,  2.,  2., nan])
    """
    x, y = np.log(ladders.rulers), _logs(lengths)
    slopes, spreads = local_slopes(ladders.offsets, x, y, noise / lengths, reach).T
    return LocalDimensions(1.0 - slopes, spreads.copy())


def _logs(values: Floats) -> Floats:
    logs = np.full(len(values), np.nan)
    np.log(values, out=logs, where=values > 0)
    return logs
