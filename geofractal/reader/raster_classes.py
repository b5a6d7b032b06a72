"""What a raster's codes stand for: names, groups, nodata, and the remapping to class indices."""

from __future__ import annotations

import tempfile
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from xml.etree.ElementTree import Element, parse

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError, LayerError
from geofractal.kernels.codes import UNSEEN, remap_by_search, remap_by_table
from geofractal.landcover.strips import NOT_COVERED, Codes

Members = int | str | Sequence[int | str]
"""What a class is made of: a code, a name that the raster gives, or several of them."""

MOST_CLASSES = 32_767


@dataclass
class Legend:
    """The classes of one raster, by index; grows as codes are met where none were named.

    Attributes
    ----------
    names : class names, by class index
    codes : class index of each known code; `NOT_COVERED` for nodata
    own_names : names that the raster itself gives to its codes
    closed : whether codes that are not known yet are an error
    rest : index of the class that takes every code not named, None where there is none
    """

    names: list[str]
    codes: dict[int, int]
    own_names: Mapping[int, str] = field(default_factory=dict)
    closed: bool = False
    rest: int | None = None

    def add(self, code: int, place: str) -> None:
        """Give a code that was just met its class index."""
        if self.rest is not None:
            self.codes[code] = self.rest
            return
        if self.closed:
            known = ", ".join(self.names)
            raise LayerError(
                f"Code {code} at {place} belongs to no class. Named are: {known}. Name it with the key "
                "classes, or state a class for all others with the key rest."
            )
        if len(self.names) == MOST_CLASSES:
            raise LayerError(
                f"More than {MOST_CLASSES:,} codes were met: this is not a class map. Name its classes."
            )
        self.codes[code] = len(self.names)
        self.names.append(self.own_names.get(code, str(code)))


def make_legend(
    classes: Mapping[str, Members] | Iterable[tuple[str, Members]] | None,
    rest: str | None,
    nodata: Iterable[int],
    own_names: Mapping[int, str],
) -> Legend:
    """Return the legend for a mapping of class name to codes or to the raster's own names for them.

    Raises
    ------
    ConfigError
        A name or a code is given twice, or a name is not one of the raster's.
    LayerError
        The raster gives one name to several codes and no mapping says what is meant.
    """
    codes: dict[int, int] = dict.fromkeys((int(code) for code in nodata), NOT_COVERED)
    if classes is None:
        if rest is not None:
            raise ConfigError("rest needs classes: it takes the codes that classes does not name.")
        _refuse_twins(own_names, codes)
        return Legend([], codes, own_names)
    names: list[str] = []
    for name, members in classes.items() if isinstance(classes, Mapping) else classes:
        if name.casefold() in {other.casefold() for other in names}:
            raise ConfigError(f"The class {name!r} is named twice in classes.")
        for code in _member_codes(name, members, own_names):
            if code in codes:
                other = "no data" if codes[code] == NOT_COVERED else f"class {names[codes[code]]!r}"
                raise ConfigError(
                    f"Code {code} stands for {other} and for class {name!r}; it can be one only."
                )
            codes[code] = len(names)
        names.append(name)
    if rest is None:
        return Legend(names, codes, own_names, closed=True)
    if rest not in names:
        names.append(rest)
    return Legend(names, codes, own_names, closed=True, rest=names.index(rest))


def _refuse_twins(own_names: Mapping[int, str], codes: Mapping[int, int]) -> None:
    first: dict[str, int] = {}
    for code, name in own_names.items():
        if code not in codes and first.setdefault(name, code) != code:
            raise LayerError(
                f"The raster calls both code {first[name]} and code {code} {name!r}; say with the key "
                "classes whether they are one class."
            )


def _member_codes(name: str, members: Members, own_names: Mapping[int, str]) -> list[int]:
    by_name: dict[str, list[int]] = {}
    for code, own in own_names.items():
        by_name.setdefault(own, []).append(code)
    found: list[int] = []
    for member in [members] if isinstance(members, int | str) else members:
        if isinstance(member, str) and member not in by_name:
            given = ", ".join(by_name) or "none"
            turned = f" Names stand before codes: {member}: [{name}]." if name.isdigit() else ""
            raise ConfigError(
                f"Class {name!r}: the raster has no class called {member!r}; it names: {given}.{turned}"
            )
        found += by_name[member] if isinstance(member, str) else [int(member)]
    return list(dict.fromkeys(found))


class Remapper:
    """Turn blocks of a raster's codes into class indices, extending the legend as codes are met."""

    def __init__(self, legend: Legend, dtype: np.dtype[Any]) -> None:
        self.legend = legend
        self.narrow = dtype.kind in "iub" and dtype.itemsize <= 2
        self._dtype = dtype
        self._view = np.dtype(f"u{dtype.itemsize}") if self.narrow else np.dtype(np.int64)
        self._refresh()

    def __call__(self, values: NDArray[Any], first_row: int, covered: NDArray[Any] | None = None) -> Codes:
        """Return class indices; cells where `covered` is 0 have none.

        Raises
        ------
        LayerError
            a code that belongs to no class, or a number that is not whole
        """
        if covered is not None:
            seen = values[covered != 0]
            if not seen.size:
                return np.full(values.shape, NOT_COVERED, np.int16)
            values = np.where(covered != 0, values, seen[0])
        whole = values if values.dtype.kind != "f" else self._whole(values, first_row)
        flat = np.ascontiguousarray(whole if self.narrow else whole.astype(np.int64)).ravel()
        out = np.empty(flat.size, np.int16)
        if self._remap(flat, out) >= 0:
            self._learn(flat, first_row, values.shape[1])
            self._remap(flat, out)
        codes = out.reshape(values.shape)
        if covered is not None:
            codes[covered == 0] = NOT_COVERED
        return codes

    def _learn(self, flat: NDArray[Any], first_row: int, columns: int) -> None:
        """Give every new code of a block its class, in the order of their first cells."""
        codes, first = np.unique(flat, return_index=True)
        for i in np.argsort(first):
            code = int(codes[i])
            if code not in self.legend.codes:
                row, column = divmod(int(first[i]), columns)
                self.legend.add(code, f"row {first_row + row}, column {column}")
        self._refresh()

    def _remap(self, flat: NDArray[Any], out: Codes) -> int:
        if self.narrow:
            return remap_by_table(flat.view(self._view), self._table, out)
        return remap_by_search(flat, self._known, self._index, out) if self._known.size else 0

    def _refresh(self) -> None:
        """Bring the lookup in step with the legend."""
        known = sorted(self.legend.codes)
        index = np.array([self.legend.codes[code] for code in known], np.int16)
        if not self.narrow:
            self._known, self._index = np.array(known, np.int64), index
            return
        low, high = _range(self._dtype)
        inside = np.array([low <= code <= high for code in known], bool)
        places = np.array(known, np.int64)[inside].astype(self._dtype).view(self._view)
        self._table = np.full(2 ** (8 * self._dtype.itemsize), UNSEEN, np.int16)
        self._table[places.astype(np.int64)] = index[inside]

    def _whole(self, values: NDArray[Any], first_row: int) -> NDArray[Any]:
        """Return whole numbers as such; anything else but nodata is an error."""
        nodata = [code for code, index in self.legend.codes.items() if index == NOT_COVERED]
        rounded: NDArray[Any] = np.rint(np.nan_to_num(values, nan=0.0, posinf=0.0, neginf=0.0))
        broken = (rounded != values) & ~np.isin(values, np.array(nodata, float))
        if broken.any():
            row, column = np.argwhere(broken)[0]
            raise LayerError(
                f"The value {values[row, column]} at row {first_row + row}, column {column} is not a whole "
                "number, so not a class code."
            )
        return rounded


def _range(dtype: np.dtype[Any]) -> tuple[int, int]:
    if dtype.kind == "b":
        return 0, 1
    return int(np.iinfo(dtype).min), int(np.iinfo(dtype).max)


def own_names(dataset: Any, band: int) -> dict[int, str]:
    """Return the names that a raster gives to its codes: attribute table first, then category names.

    GDAL hands both over in the header of a virtual copy, whichever format they are kept in.
    """
    import rasterio.shutil

    with tempfile.TemporaryDirectory() as folder:
        header = Path(folder) / "header.vrt"
        rasterio.shutil.copy(dataset, str(header), driver="VRT")
        root = parse(header).getroot()  # noqa: S314 - written by GDAL a line above
    node = root.find(f"VRTRasterBand[@band='{band}']")
    if node is None:
        return {}
    return _table_names(node) or _category_names(node)


def _category_names(band: Element) -> dict[int, str]:
    names = [item.text or "" for item in band.findall("CategoryNames/Category")]
    return {code: name for code, name in enumerate(names) if name}


VALUE_USES = ("5", "3")  # GDAL's usage numbers: value (MinMax); a few writers leave it at the lower bound
NAME_USE = "2"


def _table_names(band: Element) -> dict[int, str]:
    """Return code -> name of an attribute table, by its columns' stated use, else by their names."""
    table = band.find("GDALRasterAttributeTable")
    if table is None:
        return {}
    columns = [
        ((part.findtext("Name") or "").casefold(), part.findtext("Usage") or "0", part.findtext("Type"))
        for part in table.findall("FieldDefn")
    ]
    value = _column(columns, VALUE_USES, ("value", "code", "id"), text=False)
    name = _column(columns, (NAME_USE,), ("class_name", "class", "name", "label"), text=True)
    if value is None or name is None:
        return {}
    found: dict[int, str] = {}
    for row in table.findall("Row"):
        cells = [cell.text or "" for cell in row.findall("F")]
        if cells[name]:
            found[int(float(cells[value]))] = cells[name]
    return found


def _column(
    columns: list[tuple[str, str, str | None]], uses: tuple[str, ...], words: tuple[str, ...], *, text: bool
) -> int | None:
    """Return the first column of a use or, failing that, of a name; text columns have type 2."""
    for use in uses:
        for i, (_, usage, kind) in enumerate(columns):
            if usage == use and (kind == "2") == text:
                return i
    for word in words:
        for i, (title, _, kind) in enumerate(columns):
            if title == word and (kind == "2") == text:
                return i
    return None
