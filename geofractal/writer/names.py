"""Column names: clashes refused, names made to fit formats that tell apart or hold less of them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.reader.vector import LayerInfo

SHAPEFILE_NAME_BYTES = 10


def refuse_clashes(info: LayerInfo, columns: Sequence[Column]) -> None:
    """Raise if a new column has the name of another, upper and lower case taken as one.

    Raises
    ------
    OutputError
        Names the columns and the way out.
    """
    taken = {name.casefold() for name in (*info.field_names, info.fid_column) if name}
    clashing = []
    for column in columns:
        if column.name.casefold() in taken:
            clashing.append(column.name)
        taken.add(column.name.casefold())
    if clashing:
        raise OutputError(
            f"{info.path}: layer {info.layer!r} already has a column named {', '.join(map(repr, clashing))}; "
            "give the measure a prefix, such as prefix: new"
        )


def fitted(
    names: Sequence[str], *, taken: Iterable[str] = (), most_bytes: int | None = None
) -> tuple[str, ...]:
    """Return the names in order, each cut to `most_bytes` of UTF-8 and unlike `taken` and one another.

    Case does not make names different. A name that fits stays; of those that do not, or that come
    twice, the later end in a number.

    >>> fitted(["name", "Name", "a_very_long_one", "a_very_long_two"], most_bytes=10)
    ('name', 'Name_1', 'a_very_lon', 'a_very_l_1')
    """
    used = {name.casefold() for name in taken}
    fits = dict.fromkeys(range(len(names)), "")
    late = []
    for i, name in enumerate(names):
        if _cut(name, most_bytes) == name and name.casefold() not in used:
            fits[i] = name
            used.add(name.casefold())
        else:
            late.append(i)
    for i in late:
        fits[i] = _free(names[i], used, most_bytes)
        used.add(fits[i].casefold())
    return tuple(fits.values())


def short_names(columns: Sequence[Column], taken: Iterable[str]) -> tuple[str, ...]:
    """Return a name of at most ten bytes for each column: its own short one, numbered where that is taken."""
    return fitted([column.short for column in columns], taken=taken, most_bytes=SHAPEFILE_NAME_BYTES)


def _free(name: str, used: set[str], most_bytes: int | None) -> str:
    tails = ("", *(f"_{number}" for number in range(1, len(used) + 2)))
    tries = (_cut(name, most_bytes and most_bytes - len(tail)) + tail for tail in tails)
    return next(tried for tried in tries if tried.casefold() not in used)


def _cut(name: str, most_bytes: int | None) -> str:
    return name if most_bytes is None else name.encode()[:most_bytes].decode(errors="ignore")
