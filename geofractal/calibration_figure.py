"""The figure of a calibration: one SVG drawing, made of plain text."""

from __future__ import annotations

from html import escape
from math import isnan
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Sequence

    from geofractal.calibration import CalibrationRow

ROW = 22
LEFT, MIDDLE, RIGHT = 290, 340, 150


def draw(rows: Sequence[CalibrationRow]) -> str:
    """Draw each row's bias (dot), spread (thick) and mean interval (thin) about the truth, with coverage.

    Rows without a figure keep their label.
    """
    reach = max([0.05, *(abs(row.bias) + row.width / 2 for row in rows if not isnan(row.bias))])
    height = ROW * (len(rows) + 3)
    scale = MIDDLE / 2 / reach
    centre = LEFT + MIDDLE / 2
    bottom = height - 1.5 * ROW
    head = (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {LEFT + MIDDLE + RIGHT} {height}"'
        ' font-family="sans-serif" font-size="12" role="img">'
    )
    parts = [
        head,
        "<title>Found dimension less the true one, by family, dimension and size</title>",
        _text(LEFT - 8, ROW, "family, D, vertices", "end"),
        _text(centre, ROW, "found less true dimension", "middle"),
        _text(LEFT + MIDDLE + 8, ROW, "coverage · refused"),
        f'<line x1="{centre}" x2="{centre}" y1="{1.4 * ROW:.1f}" y2="{bottom:.1f}" stroke="#888"/>',
    ]
    ticks = (-reach, -reach / 2, 0.0, reach / 2, reach)
    parts += [_text(centre + tick * scale, height - ROW / 2, f"{tick:+.2f}", "middle") for tick in ticks]
    for i, row in enumerate(rows):
        parts += _row(row, ROW * (i + 2), centre, scale)
    return "\n".join([*parts, "</svg>"])


def _text(x: float, y: float, words: str, anchor: str = "start") -> str:
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}">{escape(words)}</text>'


def _row(row: CalibrationRow, y: float, centre: float, scale: float) -> list[str]:
    label = _text(LEFT - 8, y + 4, f"{row.family}, {row.dimension:g}, {row.vertices:,}", "end")
    if isnan(row.bias):
        return [label, _text(LEFT + MIDDLE + 8, y + 4, f"none · {row.refused:.0%}")]
    at = centre + row.bias * scale

    def bar(half: float, thickness: float, colour: str) -> str:
        return (
            f'<line x1="{at - half * scale:.1f}" x2="{at + half * scale:.1f}" y1="{y}" y2="{y}"'
            f' stroke="{colour}" stroke-width="{thickness}"/>'
        )

    poor = "#b3261e" if row.coverage < 0.92 else "#1f5f8b"
    spread = 0.0 if isnan(row.spread) else row.spread
    return [
        label,
        bar(row.width / 2, 1.5, poor),
        bar(1.96 * spread, 5, "#9dbcd4"),
        f'<circle cx="{at:.1f}" cy="{y}" r="4" fill="{poor}"/>',
        _text(LEFT + MIDDLE + 8, y + 4, f"{row.coverage:.1%} · {row.refused:.1%}"),
    ]
