"""Settings of the project file, as the options the pool modules take: they know nothing of project files."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from landcarbon.pools.down_wood import DownWoodOptions, SizeClass
from landcarbon.pools.frames import FrameOptions
from landcarbon.pools.saplings import SaplingOptions
from landcarbon.pools.soil_factors import SoilOptions, SoilWindow
from landcarbon.pools.standing_dead import StandingOptions
from landcarbon.pools.stumps import StumpOptions

if TYPE_CHECKING:
    from landcarbon.inventory import Settings

__all__ = [
    "down_wood_options",
    "litter_options",
    "sapling_options",
    "soil_options",
    "standing_options",
    "stump_options",
    "vegetation_options",
]


def standing_options(settings: Settings) -> StandingOptions:
    """Options of standing dead trees."""
    given = settings.dead_wood
    return StandingOptions(standing=given.standing or "", roots=given.roots, missing_class=given.missing_class or "")


def down_wood_options(settings: Settings, *, area_m2: float, domain: str) -> DownWoodOptions:
    """Options of lines, pieces and logs; ``area_m2`` serves where the file states no area for logs."""
    given = settings.dead_wood
    classes = {
        name: SizeClass(
            line_m=_number(one.line_m),
            mean_diameter_cm=_number(one.mean_diameter_cm),
            density_g_cm3=_number(one.density_g_cm3),
            tilt_factor=one.tilt_factor,
        )
        for name, one in given.classes.items()
    }
    return DownWoodOptions(
        group=given.group,
        density=given.density,
        class_density=dict(given.class_density),
        missing_class=given.missing_class or "",
        domain=_density_domain(domain),
        classes=classes,
        line_m=_number(given.line_m),
        line_slope=given.line_slope,
        log_area_m2=given.log_area_m2 or area_m2,
        volume=given.volume,
    )


def stump_options(settings: Settings, *, area_m2: float, domain: str) -> StumpOptions:
    """Options of stumps."""
    given = settings.dead_wood
    return StumpOptions(
        group=given.group,
        density=given.density,
        class_density=dict(given.class_density),
        missing_class=given.missing_class or "",
        domain=_density_domain(domain),
        log_area_m2=given.log_area_m2 or area_m2,
    )


def litter_options(settings: Settings) -> FrameOptions:
    """Options of litter and duff."""
    given = settings.litter
    return FrameOptions(
        frame_area_m2=given.frame_area_m2,
        dry_share=given.dry_share,
        carbon_fraction=given.carbon_fraction,
        carbon_fractions=dict(given.carbon_fractions),
        carbon_basis=given.carbon_basis or "",
        carbon_set=given.carbon_set or "",
        duff=tuple(given.duff),
        bulk_densities=dict(given.bulk_densities),
        forest_floor=given.forest_floor or "",
    )


def vegetation_options(settings: Settings) -> FrameOptions:
    """Options of ground vegetation."""
    given = settings.ground_vegetation
    return FrameOptions(
        frame_area_m2=given.frame_area_m2,
        dry_share=given.dry_share,
        carbon_fraction=given.carbon_fraction,
        carbon_basis=given.carbon_basis or "",
    )


def sapling_options(settings: Settings, *, known: str) -> SaplingOptions:
    """Options of saplings."""
    return SaplingOptions(area_m2=settings.saplings.area_m2, known=known)


def soil_options(settings: Settings) -> SoilOptions:
    """Options of soil."""
    given = settings.soil
    windows = tuple(SoilWindow(one.from_cm, one.to_cm, one.top_cm, one.bottom_cm) for one in given.windows)
    return SoilOptions(
        bulk_density=given.bulk_density or "",
        depth_cm=given.depth_cm,
        mass_t_ha=given.mass_t_ha,
        coarse=given.coarse or "",
        organic_matter_per_carbon=given.organic_matter_per_carbon,
        pedotransfer=given.pedotransfer or "",
        incomplete=given.incomplete,
        windows=windows,
        organic=given.organic,
    )


def _number(value: float | None) -> float:
    return math.nan if value is None else float(value)


def _density_domain(domain: str) -> str:
    return "temperate and boreal" if domain == "default" else domain
