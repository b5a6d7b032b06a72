"""Names of result columns: with a prefix before them, and of the figures of zones."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Literal

from geofractal.measure import ALL_COVERS, Column, Quantity

_SHORT_BYTES = 10
_NOTE = "why a figure is missing or limited; null where nothing is to be said"


@dataclass(frozen=True, slots=True)
class ZoneColumn:
    """A column of zones, and where in the table of figures its values stand.

    `cover`, `quantity` and `rule` (empty where the table has none) choose the rows, `field` the table's
    column. All three are empty for the note column, which gathers the reasons.
    """

    column: Column
    cover: str
    quantity: str
    rule: str
    field: Literal["estimate", "low", "high", "note"]


def zone_columns(
    covers: Sequence[str], quantities: Sequence[Quantity], stem: str, prefix: str | None
) -> tuple[ZoneColumn, ...]:
    """Return a column for each class, quantity and border rule, intervals included, and one for notes.

    Names are ``<class>_<quantity>_<rule>_low_<unit>``, of lower-case words, with the prefix before them;
    what is given once for all classes has no class in its name.
    """
    slugs: set[str] = set()
    found: list[ZoneColumn] = []
    for place, cover in enumerate(covers, start=1):
        slug = _free(_slug(cover) or f"class_{place}", slugs, None)
        slugs.add(slug)
        for quantity in (one for one in quantities if not one.together):
            found += _of_quantity(cover, slug, quantity)
    for quantity in (one for one in quantities if one.together):
        found += _of_quantity(ALL_COVERS, "", quantity)
    note = Column(f"{stem}_note", f"{stem[:5]}_note", "text", "", _NOTE)
    found.append(ZoneColumn(note, "", "", "", "note"))
    shorts: set[str] = set()
    for place, one in enumerate(found):
        start = prefix[:2] if prefix else ""
        short = _free(start + one.column.short, shorts, _SHORT_BYTES)
        shorts.add(short)
        name = f"{prefix}_{one.column.name}" if prefix else one.column.name
        found[place] = replace(one, column=replace(one.column, name=name, short=short))
    return tuple(found)


def _of_quantity(cover: str, slug: str, quantity: Quantity) -> Iterator[ZoneColumn]:
    kind: Literal["number", "text"] = quantity.kind
    unit = quantity.unit
    ending = f"_{unit}" if unit.isalnum() else ""
    for rule in quantity.border_rules or ("",):
        middle = "_".join(part for part in (slug, quantity.name, _slug(rule)) if part)
        of = f"{cover}: {quantity.meaning}" + (f"; {rule}" if rule else "")
        fields: tuple[tuple[Literal["estimate", "low", "high", "note"], str, str], ...] = (
            ("note" if kind == "text" else "estimate", "", ""),
            *((("low", "_low", "lower"), ("high", "_high", "upper")) if quantity.interval else ()),
        )
        for field, part, end in fields:
            meaning = f"{of}, {end} end of the 95 % interval" if end else of
            column = Column(
                f"{middle}{part}{ending}",
                f"{slug[:3]}{quantity.short[: 5 if part else 7]}{part[:2]}",
                kind,
                unit,
                meaning,
                quantity.formula,
                quantity.source,
            )
            yield ZoneColumn(column, cover, quantity.name, rule, field)


def _slug(text: str) -> str:
    """Return a text as lower-case words of plain letters and digits; it may be empty."""
    plain = unicodedata.normalize("NFKD", text.casefold()).encode("ascii", "ignore").decode()
    slug = re.sub(r"[^a-z0-9]+", "_", plain).strip("_")
    return f"class_{slug}" if slug[:1].isdigit() else slug


def prefixed(columns: Sequence[Column], prefix: str | None) -> tuple[Column, ...]:
    """Return the columns with ``<prefix>_`` before their names, also where meanings say these.

    Short names take the prefix's first two letters and keep as much of themselves as ten bytes hold;
    where two become one, the later ends in a number. Without a prefix nothing changes.
    """
    if prefix is None:
        return tuple(columns)
    taken: set[str] = set()
    renamed = []
    said = "|".join(column.name for column in columns if "_" in column.name)  # others are ordinary words
    for column in columns:
        short = _free(prefix[:2] + column.short, taken, _SHORT_BYTES)
        taken.add(short)
        meaning = re.sub(rf"\b({said})\b", rf"{prefix}_\1", column.meaning) if said else column.meaning
        renamed.append(replace(column, name=f"{prefix}_{column.name}", short=short, meaning=meaning))
    return tuple(renamed)


def _free(wanted: str, taken: set[str], most: int | None) -> str:
    """Return a name cut to `most` bytes and unlike those taken; the later of two ends in a number."""
    name = wanted[:most]
    number = 2
    while name in taken:
        ending = f"_{number}" if most is None else str(number)
        name = (wanted if most is None else wanted[: most - len(ending)]) + ending
        number += 1
    return name
