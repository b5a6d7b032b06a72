"""What a layer turns out to hold, where its header does not say: geometry types, order of ids, time zones."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from geofractal.errors import OutputError
from geofractal.reader.vector import LayerInfo, stream

_WORDS = (
    "",
    "Point",
    "LineString",
    "Polygon",
    "MultiPoint",
    "MultiLineString",
    "MultiPolygon",
    "GeometryCollection",
)
_ZONE = r"(Z|[+-]\d\d:?\d\d)$"


@dataclass(frozen=True, slots=True)
class Survey:
    """One reading of a layer.

    Attributes
    ----------
    types : ISO codes of the geometries there are (2 = line string, 1002 = line string Z, ...)
    rising_ids : whether the stored feature ids rise from row to row
    zones : for each column of times as text: ``all``, ``none`` or ``some`` have a zone
    """

    types: frozenset[int]
    rising_ids: bool
    zones: dict[str, str]

    @property
    def kinds(self) -> frozenset[int]:
        """Return the types without Z and M, multi-part taken as single."""
        return frozenset(_single(code % 1000) for code in self.types)

    @property
    def has_z(self) -> bool:
        """Return whether any geometry has heights."""
        return any(code // 1000 in {1, 3} for code in self.types)

    @property
    def has_m(self) -> bool:
        """Return whether any geometry has measures."""
        return any(code // 1000 in {2, 3} for code in self.types)

    @property
    def has_curves(self) -> bool:
        """Return whether any geometry is of a type beyond the seven simple ones."""
        return any(code % 1000 >= len(_WORDS) for code in self.types)

    @property
    def words(self) -> tuple[str, ...]:
        """Return the types as words, sorted: ``MultiPolygon``, ``Polygon Z``."""
        return tuple(sorted(type_word(code) for code in self.types))


def survey(info: LayerInfo, *, times: Sequence[str] = ()) -> Survey:
    """Return what a layer holds; it is read once as long as its file stays the same."""
    stat = info.path.stat()
    return _survey(info, tuple(times), (stat.st_size, stat.st_mtime_ns))


@lru_cache(maxsize=32)
def _survey(info: LayerInfo, times: tuple[str, ...], _state: tuple[int, int]) -> Survey:
    types: set[int] = set()
    found: dict[str, set[bool]] = {name: set() for name in times}
    rising, last = True, -1
    for batch in stream(info, columns=times):
        types |= type_codes(batch.wkb)
        if batch.fids is not None:
            rising = rising and bool(last < batch.fids[0] and np.all(np.diff(batch.fids) > 0))
            last = int(batch.fids[-1])
        for name in times:
            zoned = pc.match_substring_regex(batch.attributes.column(name), _ZONE)
            found[name] |= set(pc.unique(zoned.drop_null()).to_pylist())
    words = {frozenset({True}): "all", frozenset({True, False}): "some"}
    zones = {name: words.get(frozenset(seen), "none") for name, seen in found.items()}
    return Survey(frozenset(types), rising, zones)


def type_codes(wkb: pa.Array) -> set[int]:
    """Return the ISO type codes of the geometries in an array of WKB."""
    heads = pc.unique(pc.binary_slice(wkb, 0, 5)).to_pylist()
    return {_iso(int.from_bytes(head[1:], "little" if head[0] else "big")) for head in heads if head}


def type_word(code: int) -> str:
    """Return a type's word, such as ``LineString Z``; ``Unknown`` beyond the seven simple types."""
    kind, dimensions = code % 1000, code // 1000
    return _WORDS[kind] + ("", " Z", " M", " ZM")[dimensions] if kind < len(_WORDS) else "Unknown"


def declared_type(found: Survey, layout: str, named: str) -> tuple[str, bool]:
    """Return the geometry type to declare in a copy, and whether single parts must become multi-part.

    Raises
    ------
    OutputError
        The format cannot hold the layer's mixture.
    """
    if layout == "shapefile":
        _refuse_mixture(found, named)
    if layout == "flatgeobuf":
        return _flatgeobuf_type(found, named)
    if len(found.types) == 1 and not found.has_m:
        return found.words[0], False
    return "Unknown", False


def promoted(wkb: pa.Array) -> pa.Array:
    """Return WKB (little-endian or big) whose single geometries are wrapped as multi-part ones."""
    heads = {head: _multi_head(head) for head in pc.unique(pc.binary_slice(wkb, 0, 5)).to_pylist() if head}
    starts = [heads.get(head) for head in pc.binary_slice(wkb, 0, 5).to_pylist()]
    return pc.binary_join_element_wise(pa.array(starts, wkb.type), wkb, pa.scalar(b"", wkb.type))


def _multi_head(head: bytes) -> bytes:
    order = "little" if head[0] else "big"
    code = int.from_bytes(head[1:], order)  # type: ignore[arg-type]
    if code % 1000 > 3:
        return b""
    return head[:1] + (code + 3).to_bytes(4, order) + (1).to_bytes(4, order)  # type: ignore[arg-type]


def _refuse_mixture(found: Survey, named: str) -> None:
    kinds = found.kinds
    if len(kinds) > 1 or kinds & {7}:
        raise OutputError(
            f"{named} holds {', '.join(found.words)}; a Shapefile holds one kind of geometry: "
            "choose another format, such as geopackage, or split the layer"
        )


def _flatgeobuf_type(found: Survey, named: str) -> tuple[str, bool]:
    """Return the type for FlatGeobuf, which drops Z from layers that declare no type."""
    flat = not found.has_z and not found.has_m
    if len(found.types) == 1 and not found.has_m:
        return found.words[0], False
    if flat:
        return "Unknown", False
    (dimensions, *more), (kind, *others) = {code // 1000 for code in found.types}, found.kinds
    if found.has_m or more or others or kind > 3:
        raise OutputError(
            f"{named} holds {', '.join(found.words)}; a FlatGeobuf with heights holds one kind of geometry, "
            "all with heights and none with measures (M): choose another format, such as geopackage"
        )
    return type_word(1000 * dimensions + kind + 3), True


def _single(kind: int) -> int:
    return kind - 3 if kind in {4, 5, 6} else kind


def _iso(code: int) -> int:
    """Return the ISO code of an extended WKB code, which marks Z and M by its highest bits."""
    return (code & 0xFFFF) + 1000 * bool(code & 0x80000000) + 2000 * bool(code & 0x40000000)
