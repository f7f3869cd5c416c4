"""The sections of ``inventory.toml`` as typed models; the attribute names are the keys of the file."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, PrivateAttr, field_validator, model_validator

from landcarbon.inventory.base import Section
from landcarbon.inventory.design import Design
from landcarbon.inventory.estimate_models import Estimation, PostStrata, Raster
from landcarbon.inventory.pool_models import (
    POOL_NAMES,
    SAMPLE_TABLES,
    DeadWood,
    GroundVegetation,
    Litter,
    Pool,
    Pools,
    SampleFiles,
    Saplings,
    Soil,
)

__all__ = [
    "POOL_NAMES",
    "SAMPLE_TABLES",
    "Carbon",
    "Dates",
    "Equations",
    "Estimation",
    "Heights",
    "Inventory",
    "Parcels",
    "Plots",
    "Pool",
    "Pools",
    "PostStrata",
    "Raster",
    "Samples",
    "Settings",
    "Species",
    "Strata",
    "Survey",
    "Trees",
    "Visits",
]

StatusName = Literal["live", "dead", "absent"]
Region = Literal["north_america", "europe", "tropics", "mangrove", "australia"]


def _to_date(value: object) -> object:
    """Take a date in quotes too; anything else is left to the type check."""
    if isinstance(value, dt.datetime):
        return value.date()
    if isinstance(value, str):
        try:
            return dt.date.fromisoformat(value)
        except ValueError:
            raise ValueError("a date is written year-month-day, e.g. 2014-05-31") from None
    return value


Day = Annotated[dt.date, BeforeValidator(_to_date)]


class Inventory(Section):
    """The inventory as a whole."""

    name: str = Field(min_length=1, description="Name of the inventory; heads the result tables")
    crs: str | None = Field(
        default=None,
        description="Coordinate system of the results, e.g. EPSG:25832; if left out that of the parcels if projected, "
        "else the UTM zone of the data",
    )
    confidence: float = Field(default=0.95, gt=0, lt=1, description="Confidence level of the intervals")
    seed: int = Field(default=1, ge=0, description="Start of the random numbers")
    allow_outside: bool = Field(
        default=False, description="true lets files lie outside the folder of this file; otherwise they are refused"
    )


class Parcels(Section):
    """Polygons of the parcels."""

    file: str = Field(min_length=1, description="GeoPackage, GeoJSON, Shapefile (may be zipped) or GeoParquet")
    layer: str | None = Field(default=None, description="Layer, if the file holds several")
    crs: str | None = Field(default=None, description="Coordinate system, if the file does not state it")


class Strata(Section):
    """Strata and their areas."""

    areas: dict[str, Annotated[float, Field(gt=0)]] = Field(default={}, description="Area of each stratum, in unit")
    file: str | None = Field(default=None, description="Table with the columns stratum and area, instead of areas")
    unit: str = Field(default="ha", description="Unit of the areas")
    merge: dict[str, str] = Field(default={}, description="small = 'large' folds stratum small into large")
    first_phase: dict[str, Annotated[int, Field(ge=0)]] = Field(
        default={},
        description="Points of a first phase (e.g. on air photos) found in each stratum; the areas are then shares of "
        "first_phase_area",
    )
    first_phase_area: float | None = Field(
        default=None, gt=0, description="Area the points of the first phase stand for, in unit"
    )

    @model_validator(mode="after")
    def _first_phase_whole(self) -> Strata:
        if bool(self.first_phase) != (self.first_phase_area is not None):
            raise ValueError("first_phase and first_phase_area go together")
        if self.first_phase and (self.areas or self.file):
            raise ValueError("areas are known or estimated by a first phase, not both")
        if self.first_phase and not sum(self.first_phase.values()):
            raise ValueError("first_phase holds no point")
        return self


class Plots(Section):
    """Plots and how they were laid out."""

    file: str = Field(min_length=1, description="Table (CSV, XLSX, Parquet) or vector file with one row per plot")
    layer: str | None = Field(default=None, description="Layer, if a vector file holds several")
    crs: str | None = Field(default=None, description="Coordinate system of x and y, or of a file that states none")
    design: Design = Field(description="How a plot is laid out; see the kinds below")
    subplots: int = Field(default=1, ge=1, description="Number of subplots of a complete plot")
    slope_correction: Literal["none", "design on slope"] = Field(
        default="none",
        description="'design on slope': lengths were laid out along the slope, so the level area shrinks by its cosine",
    )


class Trees(Section):
    """Tree rows."""

    file: str | list[str] | None = Field(default=None, description="One table (or several) for all surveys")
    stems: Literal["each", "combined"] = Field(
        default="each",
        description="'each': biomass of every stem; 'combined': one diameter per tree, the root of the sum of squares",
    )


class Visits(Section):
    """Visits of the crews."""

    file: str | None = Field(default=None, description="One table of visits for all surveys")


class Samples(SampleFiles):
    """Tables of samples that serve all surveys."""


class _SurveyFiles(Section):
    trees: str | list[str] | None = Field(default=None, description="Tree table (or several) of this survey")
    visits: str | list[str] | None = Field(default=None, description="Table of visits of this survey")


class Survey(SampleFiles, _SurveyFiles):
    """One survey."""

    since: Day | None = Field(default=None, description="First day of the survey")
    until: Day | None = Field(default=None, description="Last day of the survey")
    plots_without_rows: Literal["missing", "zero"] = Field(
        default="missing",
        description="Meaning of a plot with neither tree rows nor a visit: not visited, or visited and empty",
    )

    @model_validator(mode="after")
    def _ordered(self) -> Survey:
        if self.since and self.until and self.until < self.since:
            raise ValueError("until lies before since")
        return self


class Dates(Section):
    """How dates are written in the tables."""

    format: str | None = Field(
        default=None, description="Pattern of the dates, e.g. '%d.%m.%Y'; year-month-day if left out"
    )

    @field_validator("format")
    @classmethod
    def _usable(cls, value: str | None) -> str | None:
        if value is None:
            return None
        day = dt.date(2019, 12, 31)
        try:
            back = dt.datetime.strptime(day.strftime(value), value).date()
        except ValueError:
            back = None
        if back != day:
            raise ValueError(f"{value!r} does not tell day, month and year, as e.g. '%d.%m.%Y' does")
        return value


class Species(Section):
    """Species codes."""

    file: str | None = Field(default=None, description="Table with the columns species (code) and scientific_name")
    names: dict[str, str] = Field(default={}, description="code = 'Scientific name', written straight under [species]")

    @model_validator(mode="before")
    @classmethod
    def _gather(cls, raw: Any) -> Any:
        if not isinstance(raw, dict):
            return raw
        nested = raw.get("names")
        names = dict(nested) if isinstance(nested, dict) else {}
        names.update({key: value for key, value in raw.items() if key != "file" and value is not nested})
        if isinstance(nested, str):
            names["names"] = nested
        return {"file": raw.get("file"), "names": names}


class Equations(Section):
    """Choice of the biomass equations."""

    region: Region = Field(description="Region whose equations are used")
    country: str | None = Field(default=None, description="Country, sharpens the choice")
    sources: list[str] = Field(default=[], description="Publications to use first, in this order")
    out_of_range: Literal["flag", "cap", "stop"] = Field(
        default="flag",
        description="Trees beyond an equation's diameters: evaluate and flag, evaluate at the bound, or stop",
    )
    use_height: Literal["auto"] | bool = Field(default="auto", description="Use equations with height")
    stress: float | None = Field(
        default=None, description="Bioclimatic stress E of the pantropical equation without height"
    )
    species: dict[str, str] = Field(default={}, description="species code or scientific name = 'equation id'")
    wood_density: dict[str, Annotated[float, Field(gt=0)]] = Field(
        default={}, description="scientific name = wood density [g/cm3]"
    )


class Heights(Section):
    """Heights of trees that were not measured."""

    missing: str = Field(
        default="curve",
        description="'curve': from a curve fitted to the measured trees; 'none'; or the id of a published curve",
    )
    form: str = Field(default="naslund", description="Form of the fitted curve")
    trees_needed: int | None = Field(
        default=None,
        ge=3,
        description="Measured heights a species needs for a curve of its own; a data file has the default",
    )


class Carbon(Section):
    """Carbon in dry matter."""

    domain: Literal["default", "tropical and subtropical", "temperate and boreal"] | None = Field(
        default=None, description="Climatic domain of the carbon fractions; follows the region if left out"
    )


class Settings(Section):
    """A whole project file.

    Attributes
    ----------
    path : Path
        The file it was read from.
    folder : Path
        Its folder, to which the paths inside are relative.
    """

    inventory: Inventory = Field(description="The inventory as a whole")
    parcels: Parcels | None = Field(default=None, description="Polygons of the parcels; may be left out")
    strata: Strata = Field(default_factory=Strata, description="Areas of the strata, where no polygons give them")
    plots: Plots = Field(description="Plots and their design")
    trees: Trees = Field(default_factory=Trees, description="Tree rows")
    visits: Visits = Field(default_factory=Visits, description="Visits of the crews")
    samples: Samples = Field(
        default_factory=Samples, description="Tables of what is measured beside the trees, for all surveys"
    )
    surveys: dict[str, Survey] = Field(min_length=1, description="One table per survey, e.g. [surveys.2014]")
    columns: dict[str, dict[str, str | list[str]]] = Field(
        default={},
        description="ours = 'theirs', per table, e.g. [columns.trees]; of several names the first one in the file "
        "counts, and a blank one says there is no such column",
    )
    units: dict[str, dict[str, str]] = Field(
        default={}, description="our column = unit of the figures in the file, per table, e.g. [units.trees]"
    )
    dates: Dates = Field(default_factory=Dates, description="How dates are written")
    status: dict[str, StatusName] = Field(
        default={},
        description="their code = 'live', 'dead' or 'absent'; the table replaces the codes understood without it",
    )
    species: Species = Field(default_factory=Species, description="Species codes")
    equations: Equations = Field(description="Choice of the biomass equations")
    heights: Heights = Field(default_factory=Heights, description="Heights not measured")
    pools: Pools = Field(default_factory=Pools, description="Pools counted, and how")
    dead_wood: DeadWood = Field(default_factory=DeadWood, description="Dead wood")
    litter: Litter = Field(default_factory=Litter, description="Litter and duff from frames")
    ground_vegetation: GroundVegetation = Field(
        default_factory=GroundVegetation, description="Herbs and shrubs clipped in frames"
    )
    saplings: Saplings = Field(default_factory=Saplings, description="Stems too small for the tree table")
    soil: Soil = Field(default_factory=Soil, description="Soil organic carbon from cores and pits")
    carbon: Carbon = Field(default_factory=Carbon, description="Carbon in dry matter")
    rasters: dict[str, Raster] = Field(
        default={}, description="Rasters that cover the parcels, one table each, e.g. [rasters.canopy_height]"
    )
    post_strata: PostStrata = Field(
        default_factory=PostStrata, description="Classes of known area, told after the survey"
    )
    estimation: Estimation = Field(default_factory=Estimation, description="Estimates")

    _path: Path = PrivateAttr(default=Path("inventory.toml"))

    @property
    def path(self) -> Path:
        """File the settings were read from."""
        return self._path

    @property
    def folder(self) -> Path:
        """Folder the paths in the file are relative to."""
        return self._path.parent
