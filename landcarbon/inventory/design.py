"""Plot designs, as written under ``plots.design``."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from landcarbon.inventory.base import Section

__all__ = [
    "AngleCountDesign",
    "CensusDesign",
    "Circle",
    "CircleDesign",
    "Design",
    "NestedDesign",
    "RectangleDesign",
    "WeightedDesign",
]


class Circle(Section):
    """One circle of a nested plot."""

    radius_m: float = Field(gt=0, description="Radius [m]")
    dbh_min_cm: float = Field(ge=0, description="Smallest diameter recorded in this circle [cm]")


class CircleDesign(Section):
    """One circle of fixed radius."""

    kind: Literal["circle"] = Field(description="One circle of fixed radius")
    radius_m: float = Field(gt=0, description="Radius [m]")


class RectangleDesign(Section):
    """One rectangle."""

    kind: Literal["rectangle"] = Field(description="One rectangle")
    width_m: float = Field(gt=0, description="Width [m]")
    length_m: float = Field(gt=0, description="Length [m]")


class NestedDesign(Section):
    """Circles about one centre, each with its diameter limit."""

    kind: Literal["nested"] = Field(description="Circles about one centre, the larger ones for larger trees only")
    circles: list[Circle] = Field(min_length=1, description="The circles, from small to large")

    @model_validator(mode="after")
    def _increasing(self) -> NestedDesign:
        pairs = list(zip(self.circles, self.circles[1:], strict=False))
        if any(b.radius_m <= a.radius_m or b.dbh_min_cm <= a.dbh_min_cm for a, b in pairs):
            raise ValueError("each circle must have a larger radius_m and a larger dbh_min_cm than the one before")
        return self


class AngleCountDesign(Section):
    """Trees tallied if they appear wider than a fixed angle."""

    kind: Literal["angle_count"] = Field(description="Trees counted by a fixed angle of sight")
    basal_area_factor: float = Field(gt=0, description="Basal area each counted tree stands for, per unit of land area")
    # No default: read in the wrong one of the two, every figure would be off by a factor of more than four.
    unit: Literal["m2/ha", "ft2/ac"] = Field(description="Unit of basal_area_factor")


class CensusDesign(Section):
    """Every tree of the plot, no circle or rectangle laid out."""

    kind: Literal["census"] = Field(description="All trees of a plot of known area, e.g. the squares of a grid")
    area_ha: float | None = Field(
        default=None, gt=0, description="Area of each plot [ha]; may be left out if the plots table has an area column"
    )


class WeightedDesign(Section):
    """Trees per hectare supplied with each row."""

    kind: Literal["weighted"] = Field(description="Each tree row brings its own trees per hectare (column expansion)")


Design = Annotated[
    CircleDesign | RectangleDesign | NestedDesign | AngleCountDesign | CensusDesign | WeightedDesign,
    Field(discriminator="kind"),
]
