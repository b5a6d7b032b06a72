"""Rows of one group measured as one feature: a river of many reaches, wherever in the layer they stand.

Rows are spooled to one file, in buckets by a hash of their group's key, so that a group is whole in
one bucket and memory does not grow with the layer.
"""

from __future__ import annotations

import zlib
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from geofractal.errors import LayerError, OutputError
from geofractal.measure import Bools, Ints
from geofractal.reader.geometry import HARMLESS, PROBLEMS, SourceLines, read_lines
from geofractal.reader.layers import Batch, LayerInfo

NO_KEY = "no value in the group-by column"

_BATCHES_A_BUCKET = 4
_HELD_BYTES = 8_000_000
_SCHEMA = pa.schema(
    [
        ("row", pa.int64()),
        ("fid", pa.int64()),
        ("wanted", pa.bool_()),
        ("key", pa.string()),
        ("wkb", pa.large_binary()),
    ]
)


@dataclass(frozen=True, slots=True)
class Bucket:
    """Whole groups in a spool file; small and picklable, the rows stay on disk until they are read."""

    path: Path
    places: tuple[tuple[int, int], ...]

    def read(self) -> pa.RecordBatch:
        """Return row, fid, wanted, key and wkb, sorted by key and row, rows of no group at the end."""
        with self.path.open("rb") as file:
            batches = []
            for start, size in self.places:
                file.seek(start)
                batches.append(pa.ipc.read_record_batch(pa.py_buffer(file.read(size)), _SCHEMA))
        table = pa.Table.from_batches(batches).combine_chunks()
        by_key = pc.sort_indices(table, sort_keys=[("key", "ascending"), ("row", "ascending")])
        return table.take(by_key).combine_chunks().to_batches()[0]


@dataclass(frozen=True, slots=True)
class Groups:
    """The groups of a bucket as features.

    Attributes
    ----------
    rows : (n,) source rows, increasing
    fids : (n,) their stored feature ids, None where they are only positions
    wanted : (n,) False for rows that the layer's ``where`` leaves out; they belong to no group
    feature : (n,) the feature that each row belongs to, -1 where it has none
    notes : (n,) why a row has no feature, else None
    keys : the group of each feature
    lines : one feature for each group, its parts in the order of the rows
    """

    rows: Ints
    fids: Ints | None
    wanted: Bools
    feature: Ints
    notes: NDArray[np.object_]
    keys: tuple[str, ...]
    lines: SourceLines


def bucket_rows(
    batches: Iterable[tuple[Batch, Bools | None]], key: str, info: LayerInfo, path: Path
) -> tuple[Bucket, ...]:
    """Spool a layer's rows by their group and return the buckets.

    Which rows share a bucket depends on the keys and on the layer's size alone.

    Parameters
    ----------
    batches : rows with the column `key`, and which of them are wanted, None for all
    key : the group-by column
    info : the layer
    path : the spool file to write; whoever names it removes it

    Raises
    ------
    LayerError
        The column's values cannot name a group.
    OutputError
        The spool cannot be written.
    """
    buckets = max(1, -(-info.features // (_BATCHES_A_BUCKET * info.rows_per_batch)))
    places: list[list[tuple[int, int]]] = [[] for _ in range(buckets)]
    try:
        with path.open("wb") as file:
            for held in _held(_keyed(batch, wanted, key, info) for batch, wanted in batches):
                bucket = _bucket_of(held, buckets)
                order = np.argsort(bucket, kind="stable")
                sorted_rows = held.take(pa.array(order))
                stops = np.searchsorted(bucket[order], np.arange(buckets), side="right")
                for i, (start, stop) in enumerate(zip([0, *stops[:-1]], stops, strict=True)):
                    if stop > start:
                        at = file.tell()
                        size = file.write(sorted_rows.slice(start, stop - start).serialize())
                        places[i].append((at, size))
    except OSError as error:
        raise OutputError(f"{path}: groups cannot be spooled: {error}; make room in that folder") from error
    return tuple(Bucket(path, tuple(found)) for found in places if found)


def group_lines(
    rows: pa.RecordBatch,
    *,
    boundaries: Literal["all", "outer"] = "all",
    drop_repeated: bool = True,
    repair: bool = False,
) -> Groups:
    """Return the groups of a bucket as read, one feature each, with all the parts of its rows.

    A group of which a row cannot be read is left out whole: its length would be short without a
    sign. Rows of no length take nothing away.

    Parameters
    ----------
    rows : from `Bucket.read`
    boundaries, drop_repeated, repair : as in `read_lines`
    """
    lines = read_lines(rows["wkb"], boundaries=boundaries, drop_repeated=drop_repeated, repair=repair)
    encoded = rows["key"].dictionary_encode()
    group = encoded.indices.fill_null(-1).to_numpy(zero_copy_only=False).astype(np.int64)
    keys = encoded.dictionary.to_pylist()
    whole, notes = _judge(lines, group, len(keys))
    lines = lines.take(whole[group[lines.rows]])
    members, first = np.unique(group[lines.rows], return_index=True)
    feature_of = np.full(len(keys) + 1, -1, np.int64)
    feature_of[members] = np.arange(len(members))
    by_row = np.argsort(rows["row"].to_numpy())
    fids = rows["fid"]
    return Groups(
        rows=rows["row"].to_numpy()[by_row],
        fids=None if fids.null_count else fids.to_numpy()[by_row],
        wanted=rows["wanted"].to_numpy(zero_copy_only=False)[by_row],
        feature=feature_of[group][by_row],
        notes=notes[by_row],
        keys=tuple(keys[i] for i in members),
        lines=replace(
            lines,
            rows=members,
            feature_offsets=np.append(lines.feature_offsets[first], lines.feature_offsets[-1]),
        ),
    )


def _judge(lines: SourceLines, group: Ints, groups: int) -> tuple[Bools, NDArray[np.object_]]:
    """Return which groups can be measured, with False at the end for rows of none, and each row's note."""
    notes = np.array([PROBLEMS[code] or None for code in lines.problems], dtype=object)
    unread = ~np.isin(lines.problems, HARMLESS) & (group >= 0)
    whole = np.append(np.ones(groups, np.bool_), False)
    whole[group[unread]] = False
    reason = np.full(groups + 1, None, dtype=object)
    reason[group[unread][::-1]] = notes[unread][::-1]  # of a group's rows the first is named
    for row in np.flatnonzero(~whole[group] & ~unread & (group >= 0)):
        notes[row] = f"a row of the group has {reason[group[row]]}"
    has_line = np.zeros(groups + 1, np.bool_)
    has_line[group[lines.rows]] = True
    notes[whole[group] & has_line[group]] = None
    notes[group < 0] = NO_KEY
    return whole, notes


def _keyed(batch: Batch, wanted: Bools | None, key: str, info: LayerInfo) -> pa.RecordBatch:
    """Return the rows as the spool holds them; a blank key is none, and so is one of an unwanted row."""
    column = batch.attributes.column(key)
    if pa.types.is_floating(column.type):
        column = pc.if_else(pc.is_nan(column), None, column)
    try:
        text = column.cast(pa.string())
    except pa.ArrowException:
        raise LayerError(
            f"{info.path}: layer {info.layer!r}: column {key!r} of type {column.type} cannot name groups; "
            "group-by takes text or numbers"
        ) from None
    text = pc.if_else(pc.equal(pc.utf8_trim_whitespace(text), ""), None, text)
    if wanted is not None:
        text = pc.if_else(pa.array(wanted), text, None)
    columns = {
        "row": pa.array(batch.rows),
        "fid": pa.nulls(len(batch), pa.int64()) if batch.fids is None else pa.array(batch.fids),
        "wanted": pa.array(np.ones(len(batch), np.bool_) if wanted is None else wanted),
        "key": text,
        "wkb": pc.if_else(text.is_valid(), batch.wkb.cast(pa.large_binary()), None),
    }
    return pa.RecordBatch.from_pydict(columns, schema=_SCHEMA)


def _held(batches: Iterable[pa.RecordBatch]) -> Iterator[pa.RecordBatch]:
    """Yield the same rows in larger batches, so that each bucket gets a decent share at a time."""
    held: list[pa.RecordBatch] = []
    for batch in batches:
        held.append(batch)
        if sum(part.nbytes for part in held) >= _HELD_BYTES:
            yield from pa.Table.from_batches(held).combine_chunks().to_batches()
            held = []
    if held:
        yield from pa.Table.from_batches(held).combine_chunks().to_batches()


def _bucket_of(rows: pa.RecordBatch, buckets: int) -> Ints:
    """Return each row's bucket by a hash that is the same everywhere; rows of no group are dealt out."""
    encoded = rows["key"].dictionary_encode()
    hashes = [zlib.crc32(key.encode()) % buckets for key in encoded.dictionary.to_pylist()]
    places = encoded.indices.fill_null(len(hashes)).to_numpy(zero_copy_only=False)
    bucket: Ints = np.array([*hashes, -1], np.int64)[places]
    return np.where(bucket < 0, rows["row"].to_numpy() % buckets, bucket)
