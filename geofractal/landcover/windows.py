"""Strips with the rows around them, for measures that look beyond a strip."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from geofractal.landcover.strips import Strip


@dataclass(frozen=True, slots=True)
class Window:
    """A strip and rows around it.

    Attributes
    ----------
    strip : the strip
    codes : its codes with those of rows above and below
    zones : the same of zones, None where there are none
    offset : row of `codes` that the strip begins with
    at_top, at_bottom : whether the window begins, or ends, with the map
    """

    strip: Strip
    codes: NDArray[np.int16]
    zones: NDArray[np.int32] | None
    offset: int
    at_top: bool
    at_bottom: bool

    @property
    def stop(self) -> int:
        """Return the row of `codes` after the strip."""
        return self.offset + self.strip.rows


def windows(strips: Iterable[Strip], above: int, below: int) -> Iterator[Window]:
    """Yield every strip with at least as many rows above and below it, as far as the map has them."""
    held: deque[Strip] = deque()
    current = 0
    for strip in strips:
        held.append(strip)
        while current < len(held) and (strip.last or _rows(held, current + 1) >= below):
            yield _window(held, current)
            current += 1
            while current > 1 and _rows(held, 1, current) >= above:
                held.popleft()
                current -= 1


def _rows(held: deque[Strip], first: int, stop: int | None = None) -> int:
    return sum(strip.rows for strip in list(held)[first:stop])


def _window(held: deque[Strip], current: int) -> Window:
    strips = list(held)
    zones = [strip.zones for strip in strips if strip.zones is not None]
    return Window(
        strips[current],
        np.concatenate([strip.codes for strip in strips]),
        np.concatenate(zones) if zones else None,
        sum(strip.rows for strip in strips[:current]),
        strips[0].first_row == 0,
        strips[-1].last,
    )
