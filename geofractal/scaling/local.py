"""Local dimension: what the dimension would be if only the rulers near one ruler counted."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from geofractal.kernels.local_slopes import local_slopes

if TYPE_CHECKING:
    from geofractal.measure import Floats
    from geofractal.scaling.ladder import Ladders

WINDOW_DECADES = 0.5
"""Width of the window about a rung: five rungs at eight a decade, wide enough for a slope and narrow
enough to show a bend."""


def local_dimension(ladders: Ladders, lengths: Floats) -> Floats:
    """Return 1 - slope of ln L on ln r over half a decade about each rung.

    Parameters
    ----------
    ladders : rulers of n features, q rungs in all
    lengths : (q,) L(r) in any one unit; NaN where nothing was measured

    Returns
    -------
    (q,) local dimension; NaN where fewer than three rungs of the window were measured

    Examples
    --------
    >>> from geofractal.scaling.ladder import Ladders
    >>> rulers = np.geomspace(1, 100, 17)
    >>> found = local_dimension(Ladders(np.array([0, 17]), rulers), rulers**-0.25)
    >>> bool(np.allclose(found, 1.25))
    True
    """
    logs = np.full(len(lengths), np.nan)
    np.log(lengths, out=logs, where=lengths > 0)
    half_width = 0.5 * WINDOW_DECADES * np.log(10.0) * (1.0 + 1e-9)
    return np.asarray(1.0 - local_slopes(ladders.offsets, np.log(ladders.rulers), logs, half_width))
