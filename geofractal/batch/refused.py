"""The list of rows without a figure: which, by what name, and why."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from geofractal.reader.vector import stream
from geofractal.writer import write_csv

if TYPE_CHECKING:
    from geofractal.batch.run import Measured

NAME = "refused_rows.csv"
HEADER = ("layer", "row", "id", "measure", "reason")

MOST_LISTED = 1_000
"""Rows listed of each layer and measure; the note columns of the copies have them all."""


def write_refused_rows(folder: Path, measured: Sequence[Measured]) -> None:
    """Write the first `MOST_LISTED` rows of each layer and measure that have no figure.

    Rows count from 1 in the order of the source. Rows that a layer's ``where`` leaves out are not
    listed. `id` is empty where the batch names no column for it.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    write_csv(folder / NAME, HEADER, (line for found in measured for line in _lines(found)))


def _lines(found: Measured) -> Iterator[tuple[str, int, object, str, str]]:
    plan = found.plan
    left = [min(tally.refused, MOST_LISTED) for tally in found.tallies]
    ids = [plan.layer.id] if plan.layer.id else []
    for batch in stream(plan.info, columns=ids) if any(left) else ():
        results = found.spool.read(batch.first_row, batch.first_row + len(batch))
        named = batch.attributes.column(0).to_pylist() if ids else [""] * len(batch)
        for place, tally in enumerate(found.tallies):
            refused = tally.refusals(results).to_numpy(zero_copy_only=False).nonzero()[0][: left[place]]
            left[place] -= len(refused)
            for row in refused.tolist():
                reason = results.column(tally.note)[row].as_py()
                yield plan.name, batch.first_row + row + 1, named[row], tally.request.measure, reason
        if not any(left):
            break
