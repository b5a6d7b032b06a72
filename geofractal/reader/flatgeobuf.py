"""FlatGeobuf rows without geometry, which GDAL's Arrow reading gets wrong.

At such a row GDAL 3.12 starts the batch's buffer of geometries over: the rows before it get the bytes of
those after it, and no error is raised. In batches of one row nothing is there to be overwritten.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from itertools import islice

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc


def starts_over(batches: Iterable[pa.RecordBatch]) -> bool:
    """Tell whether a row without geometry has spoilt any batch; geometry is the last column."""
    return any(_spoilt(batch.column(batch.num_columns - 1)) for batch in batches)


def gathered(single_rows: Iterator[pa.RecordBatch], rows: int) -> Iterator[pa.RecordBatch]:
    """Yield batches of `rows` rows from batches of one, empty bytes of geometry as missing."""
    while held := list(islice(single_rows, rows)):
        batch = pa.Table.from_batches(held).combine_chunks().to_batches()[0]
        last = batch.num_columns - 1
        wkb = batch.column(last)
        there = pc.greater(pc.binary_length(wkb), 0)
        missing = pa.scalar(None, wkb.type)
        yield batch.set_column(last, batch.schema.field(last), pc.if_else(there, wkb, missing))


def _spoilt(wkb: pa.Array) -> bool:
    offsets = np.frombuffer(wkb.buffers()[1], np.int32)[wkb.offset : wkb.offset + len(wkb) + 1]
    return bool((np.diff(offsets) <= 0).any())
