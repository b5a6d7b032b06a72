"""Parts: pure work with a content key: the same rows, options and code give the same key and bytes."""

from __future__ import annotations

import hashlib
import os
from contextlib import suppress
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any, NamedTuple, Protocol

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from geofractal.batch.ladders import LadderTable, ladder_file
from geofractal.batch.spool import FID, ROW
from geofractal.config.columns import prefixed
from geofractal.config.models import MeasureRequest, Prepare
from geofractal.measure import Column, Ints, LadderMeasure, LadderRows, Lines, Values
from geofractal.reader.geometry import PROBLEMS, SourceLines, read_lines
from geofractal.reader.groups import Bucket, group_lines
from geofractal.reader.joining import join_parts
from geofractal.reader.planes import Projector
from geofractal.registry import columns_of, load_measure
from geofractal.versions import code_digest
from geofractal.writer.commit import in_plain_words
from geofractal.writer.rows import ARROW_TYPES

NOT_WANTED = "left out by the layer's where"
LEFT_OUT = Column(
    "path_left_out_km",
    "leftout_km",
    "number",
    "km",
    "length of the group's lines that its main path leaves out",
)
_NULLS = {"number": np.nan, "count": -1, "text": None, "flag": -1}
_DTYPES = {"number": np.float64, "count": np.int64, "text": object, "flag": np.int8}


@dataclass(frozen=True)
class Features:
    """Rows of a layer and their features, in the layer's own coordinates.

    `feature` gives each row's feature, -1 where it has none and `notes` says why; `names` are those of the
    features, None where nothing names them.
    """

    rows: Ints
    fids: Ints | None
    feature: Ints
    notes: NDArray[np.object_]
    lines: SourceLines
    names: pa.Array | None

    @property
    def first_rows(self) -> Ints:
        """The row of each feature, of a group its first."""
        numbers, firsts = np.unique(self.feature, return_index=True)
        return self.rows[firsts[numbers >= 0]]


class PartInput(Protocol):
    """Rows of a layer to be measured together."""

    def content(self) -> pa.RecordBatch:
        """Return all that the part's results depend on, but options and code."""

    def features(self, prepare: Prepare) -> Features:
        """Return the part's rows and features."""


@dataclass(frozen=True)
class RowsPart:
    """Consecutive rows, each a feature of its own.

    `wanted` is the layer's ``where``, None for all; `ids` name the rows where a table is to name them.
    """

    rows: Ints
    wkb: pa.Array
    fids: Ints | None = None
    wanted: NDArray[np.bool_] | None = None
    ids: pa.Array | None = None

    def content(self) -> pa.RecordBatch:
        """Return the rows with their ids, geometry and choice."""
        held = {
            "row": self.rows,
            "fid": self.fids,
            "wanted": self.wanted,
            "id": self.ids,
            "wkb": self.wkb,
        }
        return pa.RecordBatch.from_pydict(
            {name: pa.array(values) for name, values in held.items() if values is not None}
        )

    def features(self, prepare: Prepare) -> Features:
        """Return one feature for each row that has a line to measure."""
        wkb = self.wkb
        if self.wanted is not None:
            wkb = pc.if_else(pa.array(self.wanted), wkb, pa.scalar(None, wkb.type))
        lines = read_lines(wkb, **_reading(prepare))
        notes = _TEXTS[lines.problems]
        if self.wanted is not None:
            notes[~self.wanted] = NOT_WANTED
        feature = np.full(len(self.rows), -1, np.int64)
        feature[lines.rows] = np.arange(len(lines))
        names = None if self.ids is None else self.ids.take(pa.array(lines.rows))
        return Features(self.rows, self.fids, feature, notes, lines, names)


@dataclass(frozen=True)
class GroupsPart:
    """Whole groups of rows, each group a feature."""

    bucket: Bucket

    def content(self) -> pa.RecordBatch:
        """Return the rows with their ids, groups, geometry and choice."""
        return self.bucket.read()

    def features(self, prepare: Prepare) -> Features:
        """Return one feature for each group whose rows can all be read."""
        groups = group_lines(self.bucket.read(), **_reading(prepare))
        notes = np.where(groups.wanted, groups.notes, NOT_WANTED)
        names = pa.array(groups.keys, pa.string())
        return Features(groups.rows, groups.fids, groups.feature, notes, groups.lines, names)


_TEXTS = np.array([text or None for text in PROBLEMS], dtype=object)


def _reading(prepare: Prepare) -> dict[str, Any]:
    """Return the preparing steps that belong to reading geometry."""
    return prepare.model_dump(include={"boundaries", "drop_repeated", "repair"})


@dataclass(frozen=True)
class LayerWork:
    """What every part of a layer is measured with; picklable, so that processes can share it.

    `named` is the column that names features in ladder tables, None where nothing does.
    """

    requests: tuple[MeasureRequest, ...]
    projector: Projector
    prepare: Prepare
    grouped: bool = False
    named: Column | None = None

    @cached_property
    def columns(self) -> tuple[Column, ...]:
        """All result columns of the layer, in output order."""
        measured = tuple(column for request in self.requests for column in request.columns())
        return (*measured, LEFT_OUT) if self.leaves_out else measured

    @cached_property
    def ladders(self) -> tuple[LadderTable, ...]:
        """The ladder tables that are asked for."""
        return tuple(
            LadderTable(request, self.named) for request in self.requests if request.ladder_columns()
        )

    @cached_property
    def note_names(self) -> frozenset[str]:
        """Names of the measures' note columns."""
        return frozenset(note_name(request) for request in self.requests)

    @property
    def leaves_out(self) -> bool:
        """Whether a group may be reduced to its main path."""
        return self.grouped and self.prepare.branches == "main-path"

    def joined(self, lines: Lines) -> tuple[Lines, dict[int, str], NDArray[np.float64]]:
        """Return the lines with parts that meet made one, the features left out, and the length left out."""
        if self.prepare.join_within_m is None and not self.grouped:
            return lines, {}, np.zeros(len(lines))
        return join_parts(
            lines,
            tolerance_m=self.prepare.join_within_m or 0.0,
            one_path=self.grouped,
            branches=self.prepare.branches,
        )

    @cached_property
    def digest(self) -> bytes:
        """Hash of options, measures' versions and code."""
        said = [code_digest(), *map(repr, (self.projector, self.prepare, self.grouped, self.named))]
        for request in self.requests:
            measure = load_measure(request.measure)
            said += [
                request.measure,
                str(measure.version),
                request.prefix or "",
                request.options.model_dump_json(),
            ]
        return hashlib.blake2b("\x00".join(said).encode(), digest_size=16).digest()

    @property
    def needs_processes(self) -> bool:
        """Whether a measure holds the interpreter lock, so that threads would not share the work."""
        return any(load_measure(request.measure).holds_gil for request in self.requests)


def note_name(request: MeasureRequest) -> str:
    """Return the name of a request's note column, prefix included."""
    (note,) = prefixed([load_measure(request.measure).note_column()], request.prefix)
    return note.name


def part_key(work: LayerWork, part: PartInput) -> str:
    """Return the content key of a part: equal for equal rows, options, code and library versions."""
    content = part.content()
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, content.schema) as stream:
        stream.write_batch(content)
    return hashlib.blake2b(sink.getvalue(), key=work.digest, digest_size=16).hexdigest()


class MeasuredPart(NamedTuple):
    """What a run needs of a part that was measured.

    Attributes
    ----------
    results : one row for each of its rows, columns as in `LayerWork.columns`
    key : its content key, by which `ladder_file` finds the rows of ladder tables
    """

    results: pa.RecordBatch
    key: str


class PartResults(NamedTuple):
    """All that was found in a part.

    Attributes
    ----------
    results : as in `MeasuredPart`
    ladders : the rows of each of `LayerWork.ladders`
    """

    results: pa.RecordBatch
    ladders: tuple[pa.RecordBatch, ...]


def measured_part(work: LayerWork, part: PartInput, folder: Path) -> MeasuredPart:
    """Return the results of a part; rows of ladder tables stay in `folder`, where memory need not hold them.

    Results that an earlier run left in `folder` are taken, and new ones are kept there. A file that a
    power cut left unreadable counts as none.
    """
    key = part_key(work, part)
    kept = folder / f"{key}.arrow"
    ladders = [ladder_file(folder, key, place) for place in range(len(work.ladders))]
    known = [_kept(path) for path in (kept, *ladders)]
    if None not in known:
        return MeasuredPart(known[0], key)
    found = measure_part(work, part)
    for path, rows in zip(ladders, found.ladders, strict=True):
        _keep(rows, path)
    _keep(found.results, kept)
    return MeasuredPart(found.results, key)


def _kept(path: Path) -> pa.RecordBatch | None:
    """Return what an earlier run kept, None where that is nothing or cannot be read."""
    with (
        suppress(pa.ArrowException, OSError, StopIteration),
        pa.OSFile(str(path)) as source,
        pa.ipc.open_stream(source) as stream,
    ):
        return stream.read_next_batch()
    return None


def _keep(rows: pa.RecordBatch, kept: Path) -> None:
    """Write what a part found beside its place and rename it into it when whole."""
    unfinished = kept.with_suffix(f".{os.getpid()}.part")
    with in_plain_words(kept):
        with pa.OSFile(str(unfinished), "wb") as sink, pa.ipc.new_stream(sink, rows.schema) as stream:
            stream.write_batch(rows)
        unfinished.replace(kept)


def measure_part(work: LayerWork, part: PartInput) -> PartResults:
    """Measure a part: pure, and with no regard to what other parts hold."""
    features = part.features(work.prepare)
    values, problems, rungs = _measure_features(work, features.lines)
    has = features.feature >= 0
    notes = features.notes.copy()
    notes[has] = problems[features.feature[has]]
    ids = pa.nulls(len(has), pa.int64()) if features.fids is None else pa.array(features.fids)
    arrays = [pa.array(features.rows), ids]
    for column in work.columns:
        rows = _nulls(column, len(has))
        rows[has] = values[column.name][features.feature[has]]
        if column.name in work.note_names:
            rows = np.where(notes == None, rows, notes)  # noqa: E711 - elementwise
        arrays.append(_arrow(column, rows))
    names = [ROW, FID, *(column.name for column in work.columns)]
    ladders = (_ladder_batch(table, features, rungs[note_name(table.request)]) for table in work.ladders)
    return PartResults(pa.RecordBatch.from_arrays(arrays, names=names), tuple(ladders))


Rungs = dict[str, list[LadderRows]]
"""Rows of ladder tables, by the note column of their request."""


def _measure_features(work: LayerWork, lines: SourceLines) -> tuple[Values, NDArray[np.object_], Rungs]:
    """Return every column's value for each feature, why a feature lies on no plane, and what was at rungs."""
    n = len(lines)
    values: Values = {column.name: _nulls(column, n) for column in work.columns}
    problems = np.full(n, None, dtype=object)
    rungs: Rungs = {note_name(table.request): [] for table in work.ladders}
    if not n:
        return values, problems, rungs
    chunks, refused = work.projector.lines(
        np.arange(n), lines.xy, lines.part_offsets, lines.feature_offsets, lines.closed
    )
    problems[list(refused)] = list(refused.values())
    for chunk in chunks:
        joined, unjoined, left_out_m = work.joined(chunk)
        if work.leaves_out:
            values[LEFT_OUT.name][joined.rows] = left_out_m / 1000.0
        for request in work.requests:
            if load_measure(request.measure).one_path:
                values[note_name(request)][list(unjoined)] = list(unjoined.values())
                _measure_lines(request, joined, values, rungs)
            else:
                _measure_lines(request, chunk, values, rungs)
    return values, problems, rungs


def _measure_lines(request: MeasureRequest, lines: Lines, values: Values, rungs: Rungs) -> None:
    """Fill a request's columns for the features in `lines`, and add their rungs where a table is asked."""
    if not len(lines):
        return
    measure = load_measure(request.measure)
    if isinstance(measure, LadderMeasure) and request.ladder_columns():
        found, ladder = measure.measure_with_ladder(lines, request.options)
        rungs[note_name(request)].append(LadderRows(lines.rows[ladder.features], ladder.figures))
    else:
        found = measure.measure(lines, request.options)
    for own, column in zip(columns_of(measure, request.options), request.columns(), strict=True):
        values[column.name][lines.rows] = found[own.name]


def _ladder_batch(table: LadderTable, features: Features, chunks: list[LadderRows]) -> pa.RecordBatch:
    """Return a part's rows of a ladder table, feature after feature whatever chunk each was measured in."""
    owners = np.concatenate([np.empty(0, np.int64), *(chunk.features for chunk in chunks)])
    order = np.argsort(owners, kind="stable")
    arrays = [pa.array(features.first_rows[owners[order]] + 1)]
    if features.names is not None:
        arrays.append(features.names.take(pa.array(owners[order])))
    for column in table.request.ladder_columns():
        found = np.concatenate([_nulls(column, 0), *(chunk.figures[column.name] for chunk in chunks)])
        arrays.append(_arrow(column, found[order]))
    return pa.RecordBatch.from_arrays(arrays, schema=table.schema)


def _nulls(column: Column, n: int) -> NDArray[Any]:
    return np.full(n, _NULLS[column.kind], dtype=_DTYPES[column.kind])


def _arrow(column: Column, values: NDArray[Any]) -> pa.Array:
    """Return a column's values as Arrow, its nulls as nulls."""
    kind = ARROW_TYPES[column.kind]
    if column.kind == "text":
        return pa.array(values, kind)
    missing = np.isnan(values) if column.kind == "number" else values < 0
    return pa.array(values == 1 if column.kind == "flag" else values, kind, mask=missing)
