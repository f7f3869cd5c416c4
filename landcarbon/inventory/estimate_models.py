"""The sections of ``inventory.toml`` that say how figures are estimated."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from landcarbon.inventory.base import Section

__all__ = ["Estimation", "PostStrata", "Raster"]


class Estimation(Section):
    """Estimates."""

    design: Literal["stratified"] = Field(default="stratified", description="stratified: ratio of means by stratum")
    variance: Literal["random", "neighbours"] = Field(
        default="random",
        description="Standard errors of strata and inventory: 'random' takes the plots as a random sample (on a grid "
        "usually too large); 'neighbours' takes them from differences of neighbouring plots of a grid",
    )
    change: Literal["difference", "best combination"] = Field(
        default="difference",
        description="Change where not all plots repeat: difference of the two means, or the best linear combination "
        "of repeated and other plots",
    )
    parcels: Literal["composite", "direct"] = Field(
        default="composite",
        description="'composite': the parcel's own plots and the level of its stratum, each by what it is worth, "
        "summing to the stratum; 'direct': the parcel's own plots alone",
    )
    dates: Literal["visits", "common"] = Field(
        default="visits",
        description="'common': densities of each survey at one date, between a plot's own visits, for stands visited "
        "in different years of a survey",
    )
    interval: Literal["t", "log"] = Field(
        default="t", description="Intervals of stocks: Student's t, or on the logarithmic scale for skewed values"
    )
    lower_confidence: float | None = Field(
        default=None,
        gt=0.5,
        lt=1,
        description="Confidence of a one-sided lower bound, e.g. 0.9; adds the columns of lower bounds to the tables",
    )
    rasters: list[str] | None = Field(
        default=None, description="Rasters of [rasters] that assist the estimates; all of them if left out"
    )
    map_cell_m: float | None = Field(
        default=None,
        gt=0,
        description="Side of the cells of the rasters of density and change [m]; that of the first raster if left out. "
        "Without rasters the results hold such maps only if this is stated",
    )
    by_stratum: bool = Field(default=False, description="Fit the model of the rasters in each stratum by itself")


class Raster(Section):
    """A raster that covers the parcels, such as canopy height."""

    file: str | None = Field(default=None, description="GeoTIFF or other raster, the same for all surveys")
    files: dict[str, str] = Field(default={}, description="survey = 'file', where each survey has its own")
    band: int = Field(default=1, ge=1, description="Band to read")
    crs: str | None = Field(default=None, description="Coordinate system, if the file does not state it")

    @model_validator(mode="after")
    def _one_way(self) -> Raster:
        if (self.file is None) == (not self.files):
            raise ValueError("give either file, or files by survey")
        return self


class PostStrata(Section):
    """Classes of known area that the plots are sorted into after the survey."""

    areas: dict[str, Annotated[float, Field(gt=0)]] = Field(
        default={}, description="Area of each class of the column post_stratum of the plots, in unit"
    )
    unit: str = Field(default="ha", description="Unit of the areas")
