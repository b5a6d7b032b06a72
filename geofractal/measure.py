"""The plug-in contract: what a measure is, what it is given and what it gives back.

A measure is a stateless class named by an entry point of the group ``geofractal.measures``; the
shipped ones use the same door as anybody else's. It never opens a file: the batch hands a `Measure` a chunk
of projected lines and takes one value per feature and column, and a `CoverMeasure` a class map with its
zones and takes a table of figures.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, ClassVar, Generic, Literal, Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field

if TYPE_CHECKING:
    import pandas as pd

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

PLANES = (
    "feature-azimuthal",
    "feature-conic",
    "layer-azimuthal",
    "layer-conic",
    "three-dimensions",
    "as-given",
)
"""Where a feature was measured: on an equidistant plane of its own or its layer's, in three
dimensions on the ellipsoid, or on the plane of a local (engineering) CRS as it is."""


@dataclass(frozen=True, slots=True)
class Lines:
    """Features as projected lines: owned arrays, metres throughout.

    Feature ``i`` owns parts ``feature_offsets[i]:feature_offsets[i + 1]``; part ``j`` owns vertices
    ``part_offsets[j]:part_offsets[j + 1]``. A feature has at least one part and a part at least two
    vertices; no coordinate is missing or infinite. A closed part repeats its first vertex at its end.

    Attributes
    ----------
    rows : (n,) source row of each feature, or the number of its group
    xy : (m, 2) metres on a plane, or (m, 3) geocentric metres; one chunk is all of one kind
    part_offsets : (p + 1,)
    feature_offsets : (n + 1,)
    closed : (p,) whether the part is a ring
    source_vertex : (m,) False for vertices added to keep long edges straight in the source's CRS
    plane : (n,) index into `PLANES`
    distortion : (n,) worst relative distance error over the feature (0.001 = 0.1 %)
    radius : (n,) radius in metres that turns a ruler into its chord; infinite on a plane
    """

    rows: Ints
    xy: Floats
    part_offsets: Ints
    feature_offsets: Ints
    closed: Bools
    source_vertex: Bools
    plane: NDArray[np.uint8]
    distortion: Floats
    radius: Floats

    def __len__(self) -> int:
        """Return the number of features."""
        return len(self.rows)


@dataclass(frozen=True, slots=True)
class Column:
    """One result column: a name of whole words with its unit last, and what a reviewer must know of it.

    `kind` is ``number`` (float64, NaN is null), ``count`` (int64, negative is null), ``text``
    (str or None) or ``flag`` (1, 0, negative is null). `short` is the name in formats that hold ten
    bytes. `unit` is empty where the column has none.
    """

    name: str
    short: str
    kind: Literal["number", "count", "text", "flag"]
    unit: str
    meaning: str
    formula: str = ""
    source: str = ""


class Options(BaseModel):
    """Base of every measure's options: frozen, strict, no free keys; YAML spells them with hyphens."""

    model_config = ConfigDict(
        frozen=True,
        strict=True,
        extra="forbid",
        allow_inf_nan=False,
        alias_generator=lambda name: name.replace("_", "-"),
        validate_by_name=True,
        validate_by_alias=True,
    )


O = TypeVar("O", bound=Options)  # noqa: E741 - the one option type of a measure

Values = dict[str, NDArray[np.generic] | NDArray[np.object_]]
"""One array per column, one value per feature of the chunk, nulls as `Column.kind` says."""


class Measure(ABC, Generic[O]):
    """A measure of lines, one result row per feature.

    Class attributes
    ----------------
    name : the word in the YAML file; equals the entry point's name
    title, formula, sources : text for the tables, the report and ``geofractal measures``
    stem : prefix of the note column, ``<stem>_note``
    version : part of the content key; raise it whenever results change
    one_path : whether lines that meet are joined before, and a group must form one path; a measure of
        sets, such as of a whole network, takes all lines as they are
    holds_gil : True (the safe default) sends the work to processes instead of threads
    """

    name: ClassVar[str]
    title: ClassVar[str]
    formula: ClassVar[str]
    sources: ClassVar[tuple[str, ...]]
    stem: ClassVar[str]
    needs: ClassVar[Literal["lines"]] = "lines"
    version: ClassVar[int] = 1
    one_path: ClassVar[bool] = True
    holds_gil: ClassVar[bool] = True
    options: ClassVar[type[Options]]

    @abstractmethod
    def columns(self, options: O) -> tuple[Column, ...]:
        """Return the columns that `measure` fills under these options, the note included."""

    @abstractmethod
    def measure(self, lines: Lines, options: O) -> Values:
        """Measure a chunk. Pure: the same chunk and options give the same values.

        Returns one array of ``len(lines)`` per column. A feature that deserves no figure has nulls
        and says why in the note; it never raises.
        """

    def note_column(self) -> Column:
        """Return the text column that says why a figure is missing or limited."""
        meaning = "why a figure is missing or limited; null where nothing is to be said"
        return Column(f"{self.stem}_note", f"{self.stem[:5]}_note", "text", "", meaning)


class LadderOptions(Options):
    """Base of the options of a `LadderMeasure`."""

    ladder_table: bool = Field(
        False, description="also write a table of what was found at every rung of each feature's ladder"
    )


L = TypeVar("L", bound=LadderOptions)


@dataclass(frozen=True, slots=True)
class LadderRows:
    """What was found at the rungs of a chunk's features, feature after feature, from fine to coarse.

    Attributes
    ----------
    features : (q,) number of each rung's feature in the chunk, never decreasing; a feature may have none
    figures : one array of q values for each of `LadderMeasure.ladder_columns`
    """

    features: Ints
    figures: Values


class LadderMeasure(Measure[L]):
    """A measure of lines that can also tell what it found at every rung of a feature's ladder.

    Class attributes are those of `Measure`, and

    ladder_columns : the columns of the ladder table; the batch puts the feature's row and name before them
    """

    ladder_columns: ClassVar[tuple[Column, ...]]
    options: ClassVar[type[LadderOptions]]

    @abstractmethod
    def measure_with_ladder(self, lines: Lines, options: L) -> tuple[Values, LadderRows]:
        """Return what `measure` returns, and the rungs that it rests on; called where a table is asked."""


FIGURE_COLUMNS = (
    "reporting_unit",
    "cover",
    "quantity",
    "border_rule",
    "cell_size_m",
    "estimate",
    "low",
    "high",
    "unit",
    "note",
)
"""Columns of the table of figures: one row a reporting unit (zone or, last, the whole map), class, quantity
and border rule; ``border_rule`` is empty where no border matters."""

WHOLE_MAP = "whole map"
"""Reporting unit of figures that are not those of a zone."""

ALL_COVERS = "all covers"
"""Cover of figures that are those of all classes together."""

GROUPS = ("amount", "border", "interior", "separation", "connectedness", "scaling")
"""What a quantity is about."""


@dataclass(frozen=True, slots=True)
class Quantity:
    """One figure of a class: a word of the table of figures, and what a reviewer must know of it.

    Attributes
    ----------
    name : as the table has it: whole words in snake case, without the unit
    short : at most seven letters, for columns of zones in formats that hold ten bytes
    group : one of `GROUPS`
    unit : empty where it has none
    kind : ``number``, or ``text`` for a word such as a verdict: the table's ``estimate`` is then null and
        its ``note`` is the word
    interval : whether ``low`` and ``high`` are filled
    border_rules : what the table's ``border_rule`` may say, a row each; empty where it says nothing
    together : whether it is given once, for `ALL_COVERS`, rather than for each
    """

    name: str
    short: str
    group: str
    unit: str
    meaning: str
    formula: str = ""
    source: str = ""
    kind: Literal["number", "text"] = "number"
    interval: bool = False
    border_rules: tuple[str, ...] = ()
    together: bool = False


Outline = Literal["cell-edges", "outer-cell-edges", "smoothed"]
"""What a patch's perimeter is: all its cell edges, those without holes, or the line under them."""


@dataclass(frozen=True, slots=True)
class PatchRule:
    """By how many neighbours cells are joined to patches, and what their perimeter is.

    `map_edge` is whether edges to the map's edge and to cells without data count.
    """

    neighbours: int = 8
    perimeter: Outline = "cell-edges"
    map_edge: bool = True


@dataclass(frozen=True, slots=True)
class CoverPatches:
    """Patches of a class map, and the zones that were told apart while they were found.

    Attributes
    ----------
    table : one row a patch: ``cover``, ``cells``, ``area_m2``, ``perimeter_m``, ``touches_edge`` and the
        place of its first cell, ``first_row`` and ``first_column``; with outer cell edges
        ``filled_area_m2`` and ``holes``; with zones ``zone``, the number of its zone, -1 in none, -2 in
        several. Of polygons, ``geometry`` in place of cells
    zones : numbers of the zones told apart; zones that overlap come one after the other
    smaller : what the table leaves out because it is too small: ``cover``, with zones ``zone``, and
        ``patches``, the number of them
    """

    table: pd.DataFrame
    zones: tuple[int, ...]
    smaller: pd.DataFrame


class CoverMap(Protocol):
    """A class map that was opened, with its zones and barriers.

    Attributes
    ----------
    raster : the map itself: its ``grid``, its ``legend`` and ``strips()``, which may be read again and again;
        None for a layer of polygons
    zones : `geofractal.landcover.zones.Zones` on the map's grid, None where there are none
    barriers : what cuts links between cells, None where there is none. Cells that those with a width take
        are of a class ``barrier`` of the raster
    groups : names for several classes taken together, and those classes
    covers : classes and groups that are asked for; empty for all of them
    """

    @property
    def raster(self) -> Any: ...  # noqa: D102 - told above

    @property
    def zones(self) -> Any: ...  # noqa: D102 - told above

    @property
    def barriers(self) -> Any: ...  # noqa: D102 - told above

    @property
    def groups(self) -> dict[str, tuple[str, ...]]: ...  # noqa: D102 - told above

    @property
    def covers(self) -> tuple[str, ...]: ...  # noqa: D102 - told above

    def patches(
        self,
        *,
        neighbours: int,
        perimeter: Outline,
        map_edge: bool,
        columns: Sequence[str] | None = None,
        smallest_cells: int = 1,
        smallest_area_m2: float = 0.0,
    ) -> Iterator[CoverPatches]:
        """Yield the patches of the covers asked for, whole, once for each set of zones without overlap.

        Memory grows with the patches that are handed out: most of those of a large map are small. A measure
        that has no use for patches of fewer cells or less area, or for some columns, says so; the small ones
        are then counted, and no more. ``cover`` and ``zone`` are always there. Polygons have no cells.
        """

    def polygons(self, rule: PatchRule) -> Iterator[pd.DataFrame]:
        """Yield all patches of the covers asked for with their polygons, table after table.

        They are those of the whole map, whatever its zones, in the columns of `CoverPatches.table`; of a
        raster while it is read once more.
        """


@dataclass(frozen=True, slots=True)
class CoverResult:
    """What a measure of class maps found.

    Attributes
    ----------
    figures : columns `FIGURE_COLUMNS`
    """

    figures: pd.DataFrame


class CoverMeasure(ABC, Generic[O]):
    """A measure of class maps: a table of figures by reporting unit and class.

    Class attributes are those of `Measure`, and

    from_polygons : whether a polygon layer will do, for which `CoverMap.raster` is None
    dissolves : whether polygons of a class that touch are always one
    """

    name: ClassVar[str]
    title: ClassVar[str]
    formula: ClassVar[str]
    sources: ClassVar[tuple[str, ...]]
    stem: ClassVar[str]
    needs: ClassVar[Literal["cover"]] = "cover"
    from_polygons: ClassVar[bool] = False
    dissolves: ClassVar[bool] = False
    version: ClassVar[int] = 1
    options: ClassVar[type[Options]]

    @abstractmethod
    def quantities(self, options: O) -> tuple[Quantity, ...]:
        """Return what the table of figures holds under these options."""

    @abstractmethod
    def measure(self, cover: CoverMap, options: O) -> CoverResult:
        """Measure a class map. Pure: the same map and options give the same table, however it is cut.

        A figure that is not deserved is null and its note says why; that never raises.
        """

    def readings(self, cover: CoverMap, options: O) -> int | None:  # noqa: ARG002 - for those that can tell
        """Return how often the map will be read, for the time left to be told; None where nobody knows."""
        return None

    def patch_rule(self, options: O) -> PatchRule | None:  # noqa: ARG002 - for those that have a layer
        """Return by which rule patches are to be written as a layer; None where none are asked for."""
        return None

    def patch_columns(self, patches: pd.DataFrame, figures: pd.DataFrame, options: O) -> pd.DataFrame:  # noqa: ARG002 - for those that have a layer
        """Return some rows of the layer of patches with further columns of numbers, NaN where null.

        Called once the figures are known, with table after table of `CoverMap.polygons`, so that no map's
        patches need be held. What stands in a row follows from that row and the figures alone.
        """
        return patches
