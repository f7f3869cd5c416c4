"""The sections of ``inventory.toml`` about the pools, and the files their samples stand in."""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Any, Literal

from pydantic import Field, model_validator

from landcarbon.inventory.base import Section

__all__ = [
    "NO_REASON",
    "POOL_NAMES",
    "SAMPLE_TABLES",
    "DeadWood",
    "GroundVegetation",
    "Litter",
    "Pool",
    "Pools",
    "SampleFiles",
    "Saplings",
    "SizeClass",
    "Soil",
    "SoilWindow",
]

NO_REASON = "no measurements given"

Files = str | list[str] | None
Share = Annotated[float, Field(gt=0, le=1)]


class SampleFiles(Section):
    """Tables of what is measured beside the trees."""

    pieces: Files = Field(default=None, description="Table (or several) of the pieces of down wood crossed by lines")
    lines: Files = Field(
        default=None, description="Table (or several) of the lines laid out, so that one without wood counts as zero"
    )
    logs: Files = Field(default=None, description="Table (or several) of down logs measured on the area of the plot")
    stumps: Files = Field(default=None, description="Table (or several) of stumps")
    litter: Files = Field(default=None, description="Table (or several) of litter and duff taken from frames")
    ground_vegetation: Files = Field(
        default=None, description="Table (or several) of herbs and shrubs clipped in frames"
    )
    saplings: Files = Field(default=None, description="Table (or several) of stems too small for the tree table")
    soil: Files = Field(default=None, description="Table (or several) of the layers of soil cores and pits")


#: Tables of samples, in canonical order.
SAMPLE_TABLES = tuple(SampleFiles.model_fields)


class Pool(Section):
    """How one pool is obtained."""

    how: Literal["measured", "ratio", "default", "not counted"] = Field(description="How the pool is obtained")
    parts: list[str] | None = Field(
        default=None,
        min_length=1,
        description="Parts counted; if left out those with a table, and standing dead trees for dead_wood",
    )
    model: str | None = Field(default=None, description="Model of the ratio; that of the region if left out")
    value_t_c_ha: float | None = Field(
        default=None, ge=0, description="Default factor, the same for every plot [t C/ha]; needed for 'default'"
    )
    source: str | None = Field(
        default=None, min_length=1, description="Publication and table of the default factor; needed for 'default'"
    )
    reason: str | None = Field(default=None, description="Why the pool is not counted; needed then")

    @model_validator(mode="before")
    @classmethod
    def _short(cls, raw: Any) -> Any:
        return {"how": raw} if isinstance(raw, str) else raw

    @model_validator(mode="after")
    def _complete(self) -> Pool:
        if self.how == "not counted" and not self.reason:
            raise ValueError("a pool that is not counted needs a reason, e.g. reason = 'not sampled'")
        if self.how != "ratio" and self.model:
            raise ValueError("a model belongs to how = 'ratio' only")
        if self.how == "default" and (self.value_t_c_ha is None or not self.source):
            raise ValueError("a default factor needs value_t_c_ha and source, the publication and table it is from")
        if self.how != "default" and (self.value_t_c_ha is not None or self.source):
            raise ValueError("value_t_c_ha and source belong to how = 'default' only")
        if self.how != "measured" and self.parts:
            raise ValueError("parts belong to how = 'measured' only")
        return self


def _not_mentioned() -> Pool:
    return Pool(how="not counted", reason=NO_REASON)


class Pools(Section):
    """Carbon pools."""

    above_ground: Pool = Field(
        default_factory=lambda: Pool(how="measured"),
        description="Living above-ground biomass; parts: trees, saplings, ground_vegetation",
    )
    below_ground: Pool = Field(default_factory=_not_mentioned, description="Living roots")
    dead_wood: Pool = Field(
        default_factory=_not_mentioned,
        description="Dead wood; parts: standing (dead trees of the tree table), stumps, down (pieces and logs)",
    )
    litter: Pool = Field(default_factory=_not_mentioned, description="Litter; parts: litter, duff")
    soil: Pool = Field(default_factory=_not_mentioned, description="Soil organic carbon")
    harvested_wood: Pool = Field(default_factory=_not_mentioned, description="Harvested wood products")


POOL_NAMES = tuple(Pools.model_fields)


class SizeClass(Section):
    """One size class of down wood."""

    count: str | list[str] | None = Field(
        default=None, description="Column of the pieces table that holds the number of pieces of this class"
    )
    diameter: str | list[str] | None = Field(
        default=None, description="Column of the pieces table that holds the diameter of one piece of this class"
    )
    line_m: float | None = Field(
        default=None,
        gt=0,
        description="Length of the line on which this class is taken [m]; the whole line if left out",
    )
    mean_diameter_cm: float | None = Field(
        default=None, gt=0, description="Quadratic mean diameter of the pieces counted [cm]"
    )
    density_g_cm3: float | None = Field(
        default=None, gt=0, description="Dry mass per volume of the class [g/cm3]; by decay class if left out"
    )
    tilt_factor: float = Field(
        default=1.0, ge=1, description="Mean of 1 / cosine of the angle of the pieces from the horizontal"
    )

    @model_validator(mode="after")
    def _one_of_two(self) -> SizeClass:
        if self.count and self.diameter:
            raise ValueError("a size class has a column of counts or one of diameters, not both")
        if self.count and self.mean_diameter_cm is None:
            raise ValueError("pieces that are only counted need mean_diameter_cm, their quadratic mean diameter")
        if self.diameter and self.mean_diameter_cm is not None:
            raise ValueError("mean_diameter_cm belongs to a class of counts; here the diameters are measured")
        return self


class DeadWood(Section):
    """Dead wood: standing, stumps and down."""

    standing: Literal["decay class", "whole tree", "mangrove status"] | None = Field(
        default=None,
        description="Standing dead trees: reduced by decay class, like living trees, or by the three states of dead "
        "mangroves (leaves, branches, all but the bole lost); by decay class where the trees carry one if left out",
    )
    missing_class: str | None = Field(
        default=None, description="Decay class of a row that names none; a data file has the default"
    )
    class_density: dict[str, Annotated[float, Field(gt=0)]] = Field(
        default={}, description="Own densities of down wood [g/cm3] by decay class, in place of the published ratios"
    )
    roots: Literal["not counted", "dead_wood"] = Field(
        default="not counted", description="Roots of dead trees and stumps: left out, or in the pool dead_wood"
    )
    density: Literal["by decay class"] = Field(
        default="by decay class",
        description="Density of dead wood: fresh density of the species times the ratio of the decay class",
    )
    group: Literal["softwood", "hardwood", "unknown"] = Field(
        default="unknown", description="Kind of wood where neither wood nor species tells"
    )
    line_m: float | None = Field(
        default=None, gt=0, description="Length of a line [m] where no table of lines gives it"
    )
    line_slope: Literal["horizontal", "along the slope"] = Field(
        default="horizontal",
        description="How the lengths of lines are meant; along the slope they shrink by its cosine",
    )
    log_area_m2: float | None = Field(
        default=None,
        gt=0,
        description="Area on which logs and stumps were measured [m2]; the largest of the plot design if left out",
    )
    volume: Literal["auto", "huber", "smalian", "newton", "conic_paraboloid"] = Field(
        default="auto", description="Volume of logs; 'auto': by the diameters measured"
    )
    classes: dict[str, SizeClass] = Field(
        default={}, description="Size classes, one table each, e.g. [dead_wood.classes.fine]"
    )


class _Frames(Section):
    """What frame samples have in common."""

    frame_area_m2: float | None = Field(
        default=None, gt=0, description="Area of a frame [m2] where the table has no such column"
    )
    dry_share: Share | None = Field(
        default=None, description="Dry over fresh mass (above 0 to 1) where no sub-sample was dried"
    )
    carbon_fraction: Share | None = Field(
        default=None, description="Carbon per mass (above 0 to 1), see carbon_basis; a data file has the default"
    )
    carbon_basis: Literal["dry matter", "organic matter"] | None = Field(
        default=None,
        description="Mass the stated carbon fractions refer to: with its ash, or less ash; matters where ash is given",
    )


class Litter(_Frames):
    """Litter and duff from frames."""

    carbon_set: Literal["IPCC 2006", "hardwood 2009"] | None = Field(
        default=None, description="Set of default carbon fractions of litter and duff; the first if left out"
    )
    forest_floor: Literal["pine", "hardwood", "birch", "spruce"] | None = Field(
        default=None, description="Kind of forest floor whose published bulk density serves where only depth was taken"
    )
    bulk_densities: dict[str, Annotated[float, Field(gt=0)]] = Field(
        default={}, description="Own bulk densities [g/cm3] by layer, where only depth was taken"
    )

    carbon_fractions: dict[str, Share] = Field(
        default={}, description="Carbon in dry mass by layer, e.g. { litter = 0.45, duff = 0.37 }"
    )
    duff: list[str] = Field(
        default=["duff", "humus"], description="Names in the column layer that mean duff; all others are litter"
    )


class GroundVegetation(_Frames):
    """Herbs and shrubs clipped in frames."""


class Saplings(Section):
    """Stems too small for the tree table, counted on a small area."""

    area_m2: float | None = Field(
        default=None, gt=0, description="Area on which they were counted [m2] where the table has no such column"
    )


class SoilWindow(Section):
    """A stretch of the core that was sampled, and the layer it stands for."""

    from_cm: float = Field(ge=0, description="Top of what was sampled [cm]")
    to_cm: float = Field(gt=0, description="Bottom of what was sampled [cm]")
    top_cm: float = Field(ge=0, description="Top of the layer it stands for [cm]")
    bottom_cm: float = Field(gt=0, description="Bottom of the layer it stands for [cm]")

    @model_validator(mode="after")
    def _downwards(self) -> SoilWindow:
        if self.to_cm <= self.from_cm or self.bottom_cm <= self.top_cm:
            raise ValueError("depths grow downwards: to_cm lies below from_cm, and bottom_cm below top_cm")
        return self


class Soil(Section):
    """Soil organic carbon from cores and pits."""

    bulk_density: Literal["fine per whole volume", "fine per fine volume", "whole per whole volume"] | None = Field(
        default=None, description="Which mass over which volume the bulk density is; needed if soil is measured"
    )
    coarse: Literal["volume", "mass"] | None = Field(
        default=None,
        description="Share of coarse fragments by volume or by mass; needed if the bulk density asks for it",
    )
    depth_cm: float | None = Field(
        default=None, gt=0, description="Reference depth [cm], one for all surveys; this or mass_t_ha"
    )
    mass_t_ha: float | None = Field(
        default=None, gt=0, description="Reference mass of fine soil [t/ha], one for all surveys; this or depth_cm"
    )
    organic_matter_per_carbon: float | None = Field(
        default=None, gt=1, description="Organic matter over organic carbon; needed where loss on ignition is used"
    )
    pedotransfer: str | None = Field(
        default=None, description="Published function for the bulk density where it was not measured"
    )
    incomplete: Literal["set aside", "extend", "as measured"] = Field(
        default="set aside",
        description="A core that stops above the reference: not counted, its last layer extended, or as far as it goes",
    )
    organic: bool = Field(default=False, description="Peat: the limits of mineral soil do not apply")
    windows: list[SoilWindow] = Field(default=[], description="Stretches sampled and the layers they stand for")

    @model_validator(mode="after")
    def _apart(self) -> Soil:
        for first, second in (("from_cm", "to_cm"), ("top_cm", "bottom_cm")):
            spans = sorted((getattr(window, first), getattr(window, second)) for window in self.windows)
            if any(below[0] < above[1] for above, below in pairwise(spans)):
                raise ValueError(f"two windows overlap between {first} and {second}")
        return self
