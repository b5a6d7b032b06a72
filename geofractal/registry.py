"""The measures that are installed: found by entry point, loaded when asked for, checked before use."""

from __future__ import annotations

import inspect
import re
import warnings
from collections import Counter
from collections.abc import Sequence
from difflib import get_close_matches
from functools import cache
from importlib.metadata import EntryPoint, entry_points
from typing import Any, get_args

from geofractal.errors import GeofractalWarning, MeasureError
from geofractal.measure import (
    GROUPS,
    Column,
    CoverMeasure,
    LadderMeasure,
    LadderOptions,
    Measure,
    Options,
    Quantity,
)

GROUP = "geofractal.measures"

UNITS = (
    "",
    "m",
    "km",
    "m2",
    "ha",
    "km2",
    "m^D",
    "m^(1-D)",
    "percent",
    "degrees",
    "km/km2",
    "1/km2",
    "1/1000km2",
)
"""Units that a column may have; a plain word among them also ends the column's name."""

NAME_COLUMNS = ("row", "id", "group")
"""Columns that the batch puts before those of a ladder table."""

REQUEST_KEYS = ("measure", "of", "prefix")
"""Keys of a measure's entry in a batch file that are not its own options."""

COVER_KEYS = (*REQUEST_KEYS, "covers", "zones", "barriers", "class-column", "dissolve")
"""The same for measures of class maps."""

AnyMeasure = Measure[Any] | CoverMeasure[Any]

_MEASURE_WORD = re.compile(r"[a-z][a-z0-9]*(-[a-z0-9]+)*")
_COLUMN_NAME = re.compile(r"[a-z][a-z0-9]*(_[a-z0-9]+)*")
_SHORT_NAME = re.compile(r"[a-z][a-z0-9_]{0,9}")
_SHORT_QUANTITY = re.compile(r"[a-z][a-z0-9_]{0,6}")
_KINDS = get_args(inspect.get_annotations(Column, eval_str=True)["kind"])


@cache
def _entries() -> dict[str, tuple[EntryPoint, ...]]:
    """Return the entry points of each name, in the order of names; nothing is imported."""
    found: dict[str, dict[str, EntryPoint]] = {}
    for entry in entry_points(group=GROUP):
        found.setdefault(entry.name, {})[entry.value] = entry
    return {name: tuple(found[name].values()) for name in sorted(found)}


def measure_names() -> tuple[str, ...]:
    """Return the words of all installed measures, sorted, without importing any."""
    return tuple(_entries())


def load_measure(name: str) -> Measure[Any]:
    """Return the measure of lines of that word.

    Raises
    ------
    MeasureError
        as `load_any_measure`, and where it measures something else
    """
    measure = load_any_measure(name)
    if not isinstance(measure, Measure):
        raise MeasureError(f"Measure {name!r} measures class maps, not lines.")
    return measure


def load_cover_measure(name: str) -> CoverMeasure[Any]:
    """Return the measure of class maps of that word.

    Raises
    ------
    MeasureError
        as `load_any_measure`, and where it measures something else
    """
    measure = load_any_measure(name)
    if not isinstance(measure, CoverMeasure):
        raise MeasureError(f"Measure {name!r} measures lines, not class maps.")
    return measure


@cache
def load_any_measure(name: str) -> AnyMeasure:
    """Return the measure of that word.

    Raises
    ------
    MeasureError
        where no such measure is installed, it cannot be imported, or it breaks the contract
    """
    entries = _entries().get(name, ())
    if not entries:
        near = get_close_matches(name, measure_names(), n=1)
        hint = f" Did you mean {near[0]!r}?" if near else ""
        raise MeasureError(
            f"No measure {name!r} is installed; there are: {', '.join(measure_names())}.{hint}"
        )
    if len(entries) > 1:
        claims = " and ".join(entry.value for entry in entries)
        raise MeasureError(
            f"Measure {name!r}: two packages claim this name ({claims}); uninstall one of them."
        )
    try:
        measure_class = entries[0].load()
        check_measure_class(measure_class, name)
        measure: AnyMeasure = measure_class()
    except MeasureError:
        raise
    except Exception as error:
        reason = f"{type(error).__name__}: {error}"
        raise MeasureError(f"Measure {name!r}: {entries[0].value} cannot be loaded: {reason}") from error
    return measure


def load_measures() -> dict[str, AnyMeasure]:
    """Return every measure that loads, by word; each one that does not is named in a warning."""
    loaded = {}
    for name in measure_names():
        try:
            loaded[name] = load_any_measure(name)
        except MeasureError as error:
            warnings.warn(f"A plug-in is left out. {error}", GeofractalWarning, stacklevel=2)
    return loaded


def check_measure_class(measure_class: Any, name: str | None = None) -> None:
    """Check a class against the contract of `geofractal.measure.Measure` or `CoverMeasure`.

    Parameters
    ----------
    measure_class : the class that an entry point names
    name : the entry point's name; the class's own where left out

    Raises
    ------
    MeasureError
        with everything that is wrong with it
    """
    if not (isinstance(measure_class, type) and issubclass(measure_class, Measure | CoverMeasure)):
        raise MeasureError(
            f"Measure {name!r}: {measure_class!r} is not a subclass of geofractal.measure.Measure, nor of "
            "CoverMeasure."
        )
    faults = _class_faults(measure_class, name or getattr(measure_class, "name", None))
    if not faults:
        faults = _default_faults(measure_class)
    if faults:
        place = f"{measure_class.__module__}.{measure_class.__qualname__}"
        raise MeasureError(f"Measure {name!r} ({place}) breaks the contract: {'; '.join(faults)}.")


def columns_of(measure: Measure[Any], options: Options) -> tuple[Column, ...]:
    """Return a measure's columns under these options, checked.

    Raises
    ------
    MeasureError
        where they break the contract
    """
    columns = tuple(measure.columns(options))
    faults = column_faults(columns, measure.note_column().name)
    if faults:
        raise MeasureError(f"Measure {measure.name!r} breaks the contract: {'; '.join(faults)}.")
    return columns


def quantities_of(measure: CoverMeasure[Any], options: Options) -> tuple[Quantity, ...]:
    """Return a measure's quantities under these options, checked.

    Raises
    ------
    MeasureError
        where they break the contract
    """
    quantities = tuple(measure.quantities(options))
    faults = quantity_faults(quantities)
    if faults:
        raise MeasureError(f"Measure {measure.name!r} breaks the contract: {'; '.join(faults)}.")
    return quantities


def quantity_faults(quantities: Sequence[Quantity]) -> list[str]:
    """Return what is wrong with a set of quantities."""
    faults = [fault for quantity in quantities for fault in _one_quantity_faults(quantity)]
    counts = Counter(quantity.name for quantity in quantities)
    faults += [f"quantity {name!r} stands twice" for name, count in counts.items() if count > 1]
    return faults if quantities else ["there is no quantity"]


def column_faults(columns: Sequence[Column], note: str) -> list[str]:
    """Return what is wrong with a set of columns that has a note column of this name."""
    faults = [fault for column in columns for fault in _one_column_faults(column)]
    for what, names in (("column", [c.name for c in columns]), ("short name", [c.short for c in columns])):
        faults += [f"{what} {name!r} stands twice" for name, count in Counter(names).items() if count > 1]
    if columns and columns[0].name == note:
        faults.append("the note column stands first; the first column is the figure itself")
    if note not in [column.name for column in columns]:
        faults.append(f"column {note!r} (Measure.note_column) is missing")
    return faults


def _class_faults(measure_class: type[AnyMeasure], name: str | None) -> list[str]:
    faults = []
    if inspect.isabstract(measure_class):
        faults.append(f"it does not define {', '.join(sorted(measure_class.__abstractmethods__))}")
    if getattr(measure_class, "name", None) != name:
        faults.append(f"its name is {getattr(measure_class, 'name', None)!r}, its entry point's {name!r}")
    if not (isinstance(name, str) and _MEASURE_WORD.fullmatch(name)):
        faults.append(f"the name {name!r} is not made of lower-case words joined by hyphens")
    faults += [
        f"{attribute} is missing or empty"
        for attribute in ("title", "formula", "sources", "stem")
        if not getattr(measure_class, attribute, None)
    ]
    allowed = "lines" if issubclass(measure_class, Measure) else "cover"
    if measure_class.needs != allowed:
        faults.append(f"needs is {measure_class.needs!r}; allowed: {allowed!r}")
    if not (isinstance(measure_class.version, int) and measure_class.version >= 1):
        faults.append(f"version is {measure_class.version!r}; allowed: a whole number from 1")
    taken = REQUEST_KEYS if allowed == "lines" else COVER_KEYS
    faults += _options_faults(getattr(measure_class, "options", None), taken)
    return faults or _ladder_faults(measure_class)


def _ladder_faults(measure_class: type[AnyMeasure]) -> list[str]:
    """Return what is wrong with a ladder table, and with options that ask for one in vain."""
    asked = issubclass(measure_class.options, LadderOptions)
    if not issubclass(measure_class, LadderMeasure):
        return ["its options are LadderOptions, but it is no LadderMeasure"] if asked else []
    if not asked:
        return ["it is a LadderMeasure, but its options are no LadderOptions"]
    columns = getattr(measure_class, "ladder_columns", ())
    faults = [fault for column in columns for fault in _one_column_faults(column)]
    names = Counter([*NAME_COLUMNS, *(column.name for column in columns)])
    faults += [f"column {name!r} of the ladder table stands twice" for name, n in names.items() if n > 1]
    return faults if columns else ["its ladder table has no columns"]


def _options_faults(options: Any, taken: Sequence[str]) -> list[str]:
    if not (isinstance(options, type) and issubclass(options, Options)):
        return [f"options is {options!r}; allowed: a subclass of geofractal.measure.Options"]
    faults = [
        f"{options.__name__} must keep {setting}={kept!r} in its model_config"
        for setting, kept in (("frozen", True), ("extra", "forbid"), ("strict", True))
        if options.model_config.get(setting) != kept
    ]
    for field in options.model_fields.values():
        key = field.alias or ""
        if key in taken:
            faults.append(f"the option {key!r} has the name of a key that every measure has")
        if not field.description:
            faults.append(f"the option {key!r} has no description")
    return faults


def _default_faults(measure_class: type[AnyMeasure]) -> list[str]:
    """Return the faults of columns or quantities under default options, where the options have defaults."""
    measure = measure_class()
    if any(field.is_required() for field in measure.options.model_fields.values()):
        return []
    if isinstance(measure, CoverMeasure):
        return quantity_faults(measure.quantities(measure.options()))
    return column_faults(measure.columns(measure.options()), measure.note_column().name)


def _one_quantity_faults(quantity: Quantity) -> list[str]:
    where = f"quantity {quantity.name!r}"
    faults = []
    if not _COLUMN_NAME.fullmatch(quantity.name):
        faults.append(f"{where} is not in snake case")
    if not _SHORT_QUANTITY.fullmatch(quantity.short):
        faults.append(f"{where}: the short name {quantity.short!r} is not snake case of at most seven bytes")
    if quantity.group not in GROUPS:
        faults.append(f"{where}: the group is {quantity.group!r}; allowed: {', '.join(GROUPS)}")
    if quantity.kind not in {"number", "text"}:
        faults.append(f"{where}: the kind is {quantity.kind!r}; allowed: number, text")
    if quantity.unit not in UNITS:
        faults.append(f"{where}: the unit {quantity.unit!r} is unknown; allowed: {', '.join(UNITS[1:])}")
    if not quantity.meaning.strip():
        faults.append(f"{where} has no meaning")
    return faults


def _one_column_faults(column: Column) -> list[str]:
    where = f"column {column.name!r}"
    faults = []
    if not _COLUMN_NAME.fullmatch(column.name):
        faults.append(f"{where} is not in snake case")
    if not _SHORT_NAME.fullmatch(column.short):
        faults.append(f"{where}: the short name {column.short!r} is not snake case of at most ten bytes")
    if column.kind not in _KINDS:
        faults.append(f"{where}: the kind is {column.kind!r}; allowed: {', '.join(_KINDS)}")
    if column.unit not in UNITS:
        faults.append(f"{where}: the unit {column.unit!r} is unknown; allowed: {', '.join(UNITS[1:])}")
    elif column.unit.isalnum() and not column.name.endswith(f"_{column.unit}"):
        faults.append(f"{where} does not end with its unit, _{column.unit}")
    if not column.meaning.strip():
        faults.append(f"{where} has no meaning")
    return faults
