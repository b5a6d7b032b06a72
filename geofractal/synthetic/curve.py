"""What a generator hands over: coordinates together with the truth about them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Regime:
    """A range of scales over which one exact dimension holds, in the units of the coordinates."""

    finest: float
    coarsest: float
    dimension: float


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """A line whose dimension is known exactly.

    Attributes
    ----------
    xy : (n, 2) vertices in order; a closed curve repeats its first vertex at its end
    closed : whether it is a ring
    regimes : ranges of scales and the exact dimension in each, from fine to coarse
    source : who published the dimension, and what limits it
    """

    xy: Floats
    closed: bool
    regimes: tuple[Regime, ...]
    source: str

    def __len__(self) -> int:
        """Return the number of vertices."""
        return len(self.xy)

    @property
    def dimension(self) -> float | None:
        """The exact dimension, or None where there are several regimes or none."""
        return self.regimes[0].dimension if len(self.regimes) == 1 else None

    @property
    def scales(self) -> tuple[float, float] | None:
        """Finest and coarsest scale of the one regime, or None where there are several or none."""
        return (self.regimes[0].finest, self.regimes[0].coarsest) if len(self.regimes) == 1 else None

    @property
    def breaks(self) -> tuple[float, ...]:
        """Scales at which one regime gives way to the next."""
        return tuple(regime.coarsest for regime in self.regimes[:-1])

    def scaled(self, factor: float) -> Curve:
        """Return the same curve, `factor` times as large."""
        regimes = (Regime(r.finest * factor, r.coarsest * factor, r.dimension) for r in self.regimes)
        return replace(self, xy=self.xy * factor, regimes=tuple(regimes))

    def stretch(self, vertices: int, *, seed: int) -> Curve:
        """Return a stretch of `vertices` consecutive vertices from a random place, as an open line.

        A stretch of a fractal curve has the dimension of the whole; the coarsest scale shrinks to the
        stretch's own extent.
        """
        if not 2 <= vertices <= len(self):
            raise ValueError(
                f"a stretch of {vertices} vertices: the curve has {len(self)}, at least 2 are needed"
            )
        start = int(np.random.default_rng(seed).integers(0, len(self) - vertices + 1))
        xy = self.xy[start : start + vertices].copy()
        return replace(self, xy=xy, closed=False, regimes=clipped(self.regimes, 0.0, extent(xy)))


@dataclass(frozen=True, slots=True, eq=False)
class CellMap:
    """A map of cells whose dimension is known exactly.

    Attributes
    ----------
    cells : (rows, columns) True where the class is
    dimension : exact, between one cell and the whole map
    source : who published the dimension, and what limits it
    """

    cells: NDArray[np.bool_]
    dimension: float
    source: str


def extent(xy: Floats) -> float:
    """Return the longer side of the bounding box."""
    return float(np.ptp(xy, axis=0).max())


def clipped(regimes: tuple[Regime, ...], finest: float, coarsest: float) -> tuple[Regime, ...]:
    """Return what is left of the regimes between two scales."""
    cut = (Regime(max(r.finest, finest), min(r.coarsest, coarsest), r.dimension) for r in regimes)
    return tuple(r for r in cut if r.finest < r.coarsest)
