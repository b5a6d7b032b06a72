"""Measures of class maps by their patches: area-perimeter dimension and number-area exponent."""

from __future__ import annotations

import math
from collections.abc import Callable, Collection, Iterator, Mapping, Sequence
from itertools import chain
from typing import TYPE_CHECKING, Annotated, Any, ClassVar, Literal, Self

import numpy as np
from pydantic import Field, model_validator

from geofractal.estimators.area_perimeter import (
    SMALLEST_CELLS,
    area_perimeter_dimension,
    area_perimeter_residual,
)
from geofractal.estimators.cover_quantities import AREA_PERIMETER, NUMBER_AREA, Figure
from geofractal.estimators.number_area import number_area_exponent
from geofractal.landcover.covers import asked_packs
from geofractal.landcover.zones import zone_sets
from geofractal.measure import (
    FIGURE_COLUMNS,
    WHOLE_MAP,
    CoverMap,
    CoverMeasure,
    CoverPatches,
    CoverResult,
    Floats,
    Options,
    PatchRule,
    Quantity,
)

if TYPE_CHECKING:
    import pandas as pd

SquareMetres = Annotated[float, Field(ge=0)]
NO_PATCH = "no patch of this class"


class PatchOptions(Options):
    """Options that all measures of patches have."""

    neighbours: Literal[4, 8] = Field(
        8, description="cells that are one patch: those that share an edge (4), or also a corner (8)"
    )
    smallest_area_m2: SquareMetres = Field(
        0.0, description="smaller patches are left out; one size for maps that differ in cell size"
    )
    edge_patches: bool = Field(
        False, description="use patches that touch the map's edge or cells without data"
    )


class AreaPerimeterOptions(PatchOptions):
    """Options of `AreaPerimeterDimension`."""

    perimeter: Literal["cell-edges", "outer-cell-edges", "smoothed"] = Field(
        "cell-edges",
        description="all cell edges of a patch, those of its outer outline, or the length of the line that "
        "the cells were drawn from",
    )
    map_edge: bool = Field(True, description="count edges to the map's edge and to cells without data")
    filled: bool = Field(
        False, description="take the area inside the outer outline, holes included; with outer-cell-edges"
    )
    smallest_cells: Annotated[int, Field(ge=1)] = Field(
        SMALLEST_CELLS, description="patches of fewer cells are left out: their outline is that of cells"
    )
    patches: bool = Field(False, description="also write the patches, with the residual of each")

    @model_validator(mode="after")
    def _outlines_agree(self) -> Self:
        outer = self.perimeter == "outer-cell-edges"
        if self.filled and not outer:
            raise ValueError("filled: true goes with perimeter: outer-cell-edges only")
        if outer and not self.map_edge:
            raise ValueError("map-edge: false does not go with perimeter: outer-cell-edges")
        return self


class AreaPerimeterDimension(CoverMeasure[AreaPerimeterOptions]):
    """How the perimeters of a class's patches grow with their areas."""

    name: ClassVar[str] = "area-perimeter-dimension"
    title: ClassVar[str] = "Area-perimeter dimension of patches"
    formula: ClassVar[str] = "P = c A^(D/2): D = 2 x slope of ln P on ln A"
    sources: ClassVar[tuple[str, ...]] = (
        "Cheng 1995, Mathematical Geology 27",
        "Krummel et al. 1987, Oikos 48:321-324",
        "Warton et al. 2006, Biological Reviews 81:259-291",
    )
    stem: ClassVar[str] = "area_perimeter"
    from_polygons: ClassVar[bool] = True
    options: ClassVar[type[Options]] = AreaPerimeterOptions

    def quantities(self, options: AreaPerimeterOptions) -> tuple[Quantity, ...]:  # noqa: ARG002 - the same for all
        """Return the dimension, its verdict and break, and what the fit was made of."""
        return tuple(figure.quantity for figure in AREA_PERIMETER)

    def readings(self, cover: CoverMap, options: AreaPerimeterOptions) -> int:  # noqa: ARG002 - the same for all
        """Return how often the map is read."""
        return _readings(cover)

    def measure(self, cover: CoverMap, options: AreaPerimeterOptions) -> CoverResult:
        """Fit each class on the whole map, and within each zone the patches that lie in it alone."""
        area = _area(options)

        def fit(found: CoverPatches, by: Sequence[str]) -> pd.DataFrame:
            return area_perimeter_dimension(
                found.table,
                by=by,
                smallest_cells=options.smallest_cells,
                smallest_area_m2=options.smallest_area_m2,
                edge_patches=options.edge_patches,
                area=area,
                smaller=found.smaller,
            )

        found = cover.patches(
            neighbours=options.neighbours,
            perimeter=options.perimeter,
            map_edge=options.map_edge,
            columns=("cells", area, "perimeter_m", "touches_edge"),
            smallest_cells=options.smallest_cells,
            smallest_area_m2=0.0 if options.filled else options.smallest_area_m2,
        )
        fits = _fitted(cover, found, fit)
        verdicts = fits["area_perimeter_verdict"].to_numpy(object)
        limits = fits["area_perimeter_note"].to_numpy(object)
        said = [_joined(verdict, limit) for verdict, limit in zip(verdicts, limits, strict=True)]
        return CoverResult(_figures(fits, AREA_PERIMETER, said, cover))

    def patch_rule(self, options: AreaPerimeterOptions) -> PatchRule | None:
        """Return the rule of the patches that were measured, where they are to be written."""
        if not options.patches:
            return None
        return PatchRule(options.neighbours, options.perimeter, options.map_edge)

    def patch_columns(
        self, patches: pd.DataFrame, figures: pd.DataFrame, options: AreaPerimeterOptions
    ) -> pd.DataFrame:
        """Return patches with the residual of each from the line of its class on the whole map."""
        import pandas as pd

        whole = figures[figures["reporting_unit"] == WHOLE_MAP]
        lines = {
            name: whole[whole["quantity"] == name].set_index("cover")["estimate"]
            for name in ("area_perimeter_dim", "area_perimeter_prefactor")
        }
        table = pd.DataFrame(lines, dtype=np.float64).rename_axis("cover").reset_index()
        return patches.assign(residual=area_perimeter_residual(patches, table, area=_area(options)))


class NumberAreaExponent(CoverMeasure[PatchOptions]):
    """How the number of a class's patches falls off with their area (Korčák's law)."""

    name: ClassVar[str] = "number-area-exponent"
    title: ClassVar[str] = "Number-area exponent of patches (Korčák's law)"
    formula: ClassVar[str] = "N(area >= a) proportional to a^-K, K by maximum likelihood above a cut"
    sources: ClassVar[tuple[str, ...]] = ("Clauset, Shalizi & Newman 2009, SIAM Review 51:661-703",)
    stem: ClassVar[str] = "number_area"
    from_polygons: ClassVar[bool] = True
    options: ClassVar[type[Options]] = PatchOptions

    def quantities(self, options: PatchOptions) -> tuple[Quantity, ...]:  # noqa: ARG002 - the same for all
        """Return the exponent, how well it fits, and what the fit was made of."""
        return tuple(figure.quantity for figure in NUMBER_AREA)

    def readings(self, cover: CoverMap, options: PatchOptions) -> int:  # noqa: ARG002 - the same for all
        """Return how often the map is read."""
        return _readings(cover)

    def measure(self, cover: CoverMap, options: PatchOptions) -> CoverResult:
        """Fit each class on the whole map, and within each zone the patches that lie in it alone."""

        def fit(found: CoverPatches, by: Sequence[str]) -> pd.DataFrame:
            return number_area_exponent(
                found.table,
                by=by,
                smallest_area_m2=options.smallest_area_m2,
                edge_patches=options.edge_patches,
                smaller=found.smaller,
            )

        found = cover.patches(
            neighbours=options.neighbours,
            perimeter="cell-edges",
            map_edge=True,
            columns=("area_m2", "touches_edge"),
            smallest_area_m2=options.smallest_area_m2,
        )
        fits = _fitted(cover, found, fit)
        said = [_joined(verdict, None) for verdict in fits["number_area_verdict"]]
        return CoverResult(_figures(fits, NUMBER_AREA, said, cover))


def _area(options: AreaPerimeterOptions) -> str:
    """Return the column of areas that perimeters are held against."""
    return "filled_area_m2" if options.filled else "area_m2"


def _readings(cover: CoverMap) -> int:
    """Return how often a map is read for its patches: for each pack of covers and each set of zones."""
    return len(asked_packs(cover.covers, cover.groups)) * len(zone_sets(cover.zones))


Fit = Callable[[CoverPatches, Sequence[str]], "pd.DataFrame"]


def _fitted(cover: CoverMap, found: Iterator[CoverPatches], fit: Fit) -> pd.DataFrame:
    """Return the fits of every zone and, last, the whole map, one row a unit and class."""
    import pandas as pd

    first = next(found)
    wanted = cover.covers or _met(first)
    last = 0 if cover.zones is None else len(cover.zones)
    rows = []
    for part in chain([first], found):
        if part.zones:
            names = {zone: cover.zones.names[zone] for zone in part.zones}
            rows.append(_complete(fit(part, ("zone", "cover")), names, wanted))
    rows.append(_complete(fit(first, ("cover",)).assign(zone=last), {last: WHOLE_MAP}, wanted))
    return pd.concat(rows, ignore_index=True).sort_values("zone", kind="stable", ignore_index=True)


def _met(found: CoverPatches) -> list[str]:
    """Return the covers that have patches, too small ones included."""
    met = {*found.table["cover"].unique(), *found.smaller["cover"]}
    return [name for name in found.table["cover"].cat.categories if name in met]


def _complete(fits: pd.DataFrame, units: Mapping[int, str], wanted: Collection[str]) -> pd.DataFrame:
    """Return one row for each unit and class; those without a patch have no figure."""
    import pandas as pd

    every = pd.MultiIndex.from_product([list(units), list(wanted)], names=["zone", "cover"])
    found = fits.astype({"zone": int, "cover": str}).set_index(["zone", "cover"]).reindex(every).reset_index()
    return found.assign(unit=found["zone"].map(units))


def _joined(verdict: Any, limit: Any) -> str:
    """Return what is to be said beside the main figure: the verdict and what limits it."""
    words = [word for word in (verdict, limit) if isinstance(word, str)]
    return "; ".join(words) or NO_PATCH


def _figures(
    fits: pd.DataFrame, figures: Sequence[Figure], said: Sequence[str], cover: CoverMap
) -> pd.DataFrame:
    """Return fits, one row a unit and class, as the table of figures.

    `said` stands beside the first figure of each fit, and beside all that are missing with it.
    """
    import pandas as pd

    size = math.nan if cover.raster is None else math.sqrt(math.prod(cover.raster.grid.typical_cell))
    fits = fits.reindex(columns=list(dict.fromkeys([*fits, *(figure.estimate for figure in figures)])))
    without = np.isnan(_numbers(fits, figures[0].estimate))
    tables = []
    for figure in figures:
        estimate, words = _numbers(fits, figure.estimate), fits[figure.estimate].to_numpy(object)
        text = figure.quantity.kind == "text"
        missing = np.isnan(estimate)
        reasons = np.where(without, said, figure.missing or NO_PATCH)
        beside = np.array(said if figure is figures[0] else [None] * len(fits), object)
        table = {
            "reporting_unit": fits["unit"],
            "cover": fits["cover"],
            "quantity": figure.quantity.name,
            "border_rule": "",
            "cell_size_m": size,
            "estimate": np.nan if text else estimate,
            "low": _numbers(fits, figure.low),
            "high": _numbers(fits, figure.high),
            "unit": figure.quantity.unit,
            "note": words if text else np.where(missing, reasons, beside),
        }
        rows = pd.DataFrame(table, columns=list(FIGURE_COLUMNS))
        tables.append(rows[fits[figure.estimate].notna()] if text else rows)
    return pd.concat(tables).sort_index(kind="stable").reset_index(drop=True)


def _numbers(fits: pd.DataFrame, column: str | None) -> Floats:
    """Return a column as numbers; NaN where it has none."""
    import pandas as pd

    if column is None:
        return np.full(len(fits), np.nan)
    return np.asarray(pd.to_numeric(fits[column], errors="coerce"), np.float64)
