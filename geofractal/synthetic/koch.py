"""Curves grown by replacing every piece with a scaled copy of a generator.

A generator is a row of complex numbers from 0 to 1; a piece from a to b becomes a + (b - a) times it.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import acos, log, pi, sqrt, tan

import numpy as np
from numpy.typing import NDArray

from geofractal.synthetic.curve import Curve, Floats, Regime, extent
from geofractal.synthetic.similarity import similarity_dimension

Complexes = NDArray[np.complex128]

UNIT_SIDE: tuple[complex, ...] = (0, 1)
TRIANGLE: tuple[complex, ...] = tuple(np.exp(-2j * pi * np.arange(4) / 3) / sqrt(3))
SQUARE: tuple[complex, ...] = (0, 1j, 1 + 1j, 1, 0)
HEXAGON: tuple[complex, ...] = tuple(np.exp(2j * pi * np.arange(7) / 6))

FLIPPED = (
    "; flipped pieces of a curve with D above ln 4 / ln 3 may cross, and D is then sure for walks along "
    "the line and an upper bound for the point set that boxes see"
)


def substitute(
    points: Complexes, generator: Complexes, levels: int, *, rng: np.random.Generator | None = None
) -> Complexes:
    """Replace every piece by the generator, `levels` times; with `rng` each is flipped by a fair coin."""
    for _ in range(levels):
        pieces = np.diff(points)
        shape = np.broadcast_to(generator[:-1], (len(pieces), len(generator) - 1))
        if rng is not None:
            shape = np.where(rng.random(len(pieces))[:, None] < 0.5, shape, shape.conj())
        grown = points[:-1, None] + pieces[:, None] * shape
        points = np.append(grown.ravel(), points[-1])
    return points


def as_xy(points: Complexes) -> Floats:
    """Return complex numbers as an owned (n, 2) array."""
    return points.astype(np.complex128).view(np.float64).reshape(-1, 2)


def koch_generator(dimension: float) -> Complexes:
    """Four equal pieces whose two middle ones form a tooth: cos(base angle) = 4^(1/D) / 2 - 1."""
    if not 1 <= dimension < 2:
        raise ValueError(f"dimension {dimension}: a generalised Koch curve has 1 <= D < 2")
    return _tooth(4.0 ** (-1 / dimension))


def _tooth(ratio: float) -> Complexes:
    """Return the generator of four pieces of one length, 1/4 or more."""
    angle = acos(min(1.0, 0.5 / ratio - 1))
    return np.array([0, ratio, ratio + ratio * np.exp(1j * angle), 1 - ratio, 1], dtype=np.complex128)


def _grown(
    base: Sequence[complex], generator: Complexes, levels: int, source: str, *, seed: int | None = None
) -> Curve:
    """Grow `base` and state its truth: Moran's equation over the generator's own pieces."""
    if levels < 0:
        raise ValueError(f"level {levels}: the number of replacements is 0 or more")
    ratios = np.abs(np.diff(generator))
    points = np.asarray(base, dtype=np.complex128)
    rng = None if seed is None else np.random.default_rng(seed)
    xy = as_xy(substitute(points, generator, levels, rng=rng))
    side = float(np.abs(np.diff(points)).max())
    finest = side * float(ratios.max()) ** levels
    closed = len(base) > len(UNIT_SIDE)
    if closed:
        xy[-1] = xy[0]
    coarsest = max(extent(xy), side)
    regimes = (Regime(finest, coarsest, similarity_dimension(list(ratios))),) if finest < coarsest else ()
    return Curve(xy, closed, regimes, source)


def koch(dimension: float = log(4) / log(3), *, level: int, island: bool = False) -> Curve:
    """Generalised Koch curve of any 1 <= D < 2 from (0, 0) to (1, 0): 4^level pieces.

    Parameters
    ----------
    dimension : ln 4 / ln(2 + 2 cos a) for the base angle a; 1 gives a straight line
    level : number of replacements
    island : grow the three sides of a triangle of side 1 outwards instead, as one ring

    Notes
    -----
    von Koch (1904), Arkiv Mat. Astr. Fys. 1:681-704; dimension: Moran (1946). Above D of about 1.8 the
    teeth nearly touch, and touch in the limit D = 2.
    """
    source = "von Koch 1904, four equal pieces; dimension Moran 1946"
    return _grown(TRIANGLE if island else UNIT_SIDE, koch_generator(dimension), level, source)


def random_koch(dimension: float, *, level: int, seed: int, island: bool = False) -> Curve:
    """Generalised Koch curve whose every generator is flipped to either side by a fair coin.

    Parameters and size as in `koch`. The number and size of pieces do not depend on the coins, so D is
    exact for every draw. Up to D = ln 4 / ln 3 no two pieces can cross; above, two teeth flipped towards
    each other may.

    Notes
    -----
    Falconer (1986), Math. Proc. Camb. Phil. Soc. 100:559-582 (random sides).
    """
    source = "von Koch 1904 with random sides (Falconer 1986); dimension Moran 1946" + FLIPPED
    return _grown(TRIANGLE if island else UNIT_SIDE, koch_generator(dimension), level, source, seed=seed)


def random_midpoint(dimension: float, *, level: int, seed: int) -> Curve:
    """Curve whose every piece is broken at its middle, pushed to either side by a fair coin.

    2^level pieces from (0, 0) to (1, 0), two equal pieces of ratio 2^(-1/D); 1 <= D < 2.

    Notes
    -----
    Moran (1946) for the dimension; pieces may cross, see `random_koch`.
    """
    if not 1 <= dimension < 2:
        raise ValueError(f"dimension {dimension}: two pieces with a pushed middle have 1 <= D < 2")
    height = 0.5 * tan(acos(min(1.0, 2 ** (1 / dimension) / 2)))
    generator = np.array([0, 0.5 + 1j * height, 1], dtype=np.complex128)
    return _grown(
        UNIT_SIDE, generator, level, "random middle, two equal pieces; Moran 1946" + FLIPPED, seed=seed
    )


def random_ratio_koch(dimension: float, *, vertices: int, seed: int) -> Curve:
    """Koch curve that mixes two generators, a flat and a steep one, by a fair coin, and flips them too.

    Parameters
    ----------
    dimension : 1 < D < 2, the root of 2 r_flat^D + 2 r_steep^D = 1; the flat generator alone has the
        dimension (1 + D) / 2
    vertices : about how many are wanted. Pieces are replaced until all are shorter than one limit, so that
        the number varies from draw to draw, as the content of a random set does
    seed : of the draw

    Notes
    -----
    E sum r_i^D = 1: Mauldin & Williams (1986), Falconer (1986). Pieces may cross, see `random_koch`.
    """
    if not 1 < dimension < 2:
        raise ValueError(f"dimension {dimension}: two mixed Koch generators have 1 < D < 2")
    flat = 4.0 ** (-2 / (1 + dimension))
    steep = (0.5 - flat**dimension) ** (1 / dimension)
    generators = np.stack([_tooth(flat), _tooth(steep)])
    truth = similarity_dimension([flat, steep], weights=[2, 2])
    # Pieces end between one replacement's ratio and 1 times the limit: 3 / ln 4 times as many on average.
    finest = (vertices * log(4) / 3) ** (-1 / dimension)
    rng = np.random.default_rng(seed)
    points = np.array(UNIT_SIDE, dtype=np.complex128)
    while (long := np.abs(np.diff(points)) > finest).any():
        points = _replace_some(points, long, generators, rng)
    xy = as_xy(points)
    source = "two Koch generators mixed at random (Mauldin & Williams 1986, Falconer 1986)" + FLIPPED
    return Curve(xy, False, (Regime(finest, max(1.0, extent(xy)), truth),), source)


def _replace_some(
    points: Complexes, chosen: NDArray[np.bool_], generators: Complexes, rng: np.random.Generator
) -> Complexes:
    """Replace the chosen pieces, each by one of the generators and to either side."""
    pieces = np.diff(points)[chosen]
    shape = generators[rng.integers(0, len(generators), len(pieces)), :-1]
    shape = np.where(rng.random(len(pieces))[:, None] < 0.5, shape, shape.conj())
    counts = np.where(chosen, shape.shape[1], 1)
    grown = np.repeat(points[:-1], counts)
    grown[np.repeat(chosen, counts)] += (pieces[:, None] * shape).ravel()
    return np.append(grown, points[-1])


def two_regimes(fine: float, coarse: float, *, fine_level: int, coarse_level: int, seed: int) -> Curve:
    """Random-sided Koch curve of dimension `coarse` above a scale and `fine` below it.

    Parameters
    ----------
    fine, coarse : 1 <= D < 2 each. ``fine=1`` is rough above the break only (straight pieces with many
        vertices), ``coarse=1`` rough below it only
    fine_level, coarse_level : replacements on either side of the break; 4^(both together) pieces in all
    seed : of the draw

    The break is the length of the coarse pieces, 4^(-coarse_level / coarse); walks and boxes see it
    somewhat earlier or later, by a constant factor near 1.
    """
    rng = np.random.default_rng(seed)
    points = np.array(UNIT_SIDE, dtype=np.complex128)
    points = substitute(points, koch_generator(coarse), coarse_level, rng=rng)
    xy = as_xy(substitute(points, koch_generator(fine), fine_level, rng=rng))
    at = 4.0 ** (-coarse_level / coarse)
    regimes = (Regime(at * 4.0 ** (-fine_level / fine), at, fine), Regime(at, max(1.0, extent(xy)), coarse))
    source = "two random-sided Koch curves, one grown on the other; dimension Moran 1946" + FLIPPED
    return Curve(xy, False, regimes, source)


def quadratic_koch(kind: int, *, level: int, island: bool = False) -> Curve:
    """Quadratic Koch curve: kind 1, five pieces of 1/3 (D = ln 5 / ln 3); kind 2, eight of 1/4 (D = 3/2).

    From (0, 0) to (1, 0), or with `island` on the four sides of a unit square, as one ring. Kind 1
    touches itself at corners.

    Notes
    -----
    Mandelbrot (1982), The Fractal Geometry of Nature, plates 49 to 51.
    """
    shapes = {
        1: np.array([0, 1, 1 + 1j, 2 + 1j, 2, 3]) / 3,
        2: np.array([0, 1, 1 + 1j, 2 + 1j, 2, 2 - 1j, 3 - 1j, 3, 4]) / 4,
    }
    if kind not in shapes:
        raise ValueError(f"kind {kind}: quadratic Koch curves are of kind 1 or 2")
    source = f"quadratic Koch curve {kind} (Mandelbrot 1982); dimension Moran 1946"
    return _grown(SQUARE if island else UNIT_SIDE, shapes[kind].astype(np.complex128), level, source)


def minkowski_island(*, level: int) -> Curve:
    """Draw a unit square whose sides become three pieces of 1/sqrt(5): a ring of constant area.

    Notes
    -----
    Mandelbrot (1982), The Fractal Geometry of Nature, plate 49; D = ln 3 / ln sqrt(5), Moran (1946).
    """
    generator = np.array([0, 2 + 1j, 3 - 1j, 5], dtype=np.complex128) / 5
    return _grown(SQUARE, generator, level, "three-piece Minkowski island (Mandelbrot 1982); Moran 1946")


def gosper_island(*, level: int) -> Curve:
    """Hexagon whose sides become three pieces of 1/sqrt(7): a ring, D = 2 ln 3 / ln 7.

    Notes
    -----
    Gardner (1976), Scientific American 235(6):124-133; dimension Moran (1946).
    """
    step = np.exp(1j * pi / 3)
    generator = np.array([0, 1, 1 + step, 2 + step]) / (2 + step)
    return _grown(HEXAGON, generator, level, "Gosper island (Gardner 1976); dimension Moran 1946")


def gasket(*, level: int) -> Curve:
    """Triangle gasket drawn as one line of 3^level pieces (its arrowhead curve), D = ln 3 / ln 2.

    Outer pieces of each generator are mirrored, so that the line fills the gasket and never crosses
    itself. Made for box counting; the line's walk has the same dimension.

    Notes
    -----
    Sierpinski (1915), C. R. Acad. Sci. Paris 160:302-305; dimension Moran (1946).
    """
    height = sqrt(3) / 4
    generator = np.array([0, 0.25 + 1j * height, 0.75 + 1j * height, 1], dtype=np.complex128)
    points, mirrored = np.array(UNIT_SIDE, dtype=np.complex128), np.array([False])
    for _ in range(level):
        shape = np.where(mirrored[:, None], generator[:-1].conj(), generator[:-1])
        points = np.append((points[:-1, None] + np.diff(points)[:, None] * shape).ravel(), points[-1])
        mirrored = (mirrored[:, None] ^ np.array([True, False, True])).ravel()
    source = "triangle gasket (Sierpinski 1915) as arrowhead curve; dimension Moran 1946"
    regimes = (Regime(0.5**level, 1.0, similarity_dimension([0.5] * 3)),) if level else ()
    return Curve(as_xy(points), False, regimes, source)
