"""Limits that decide whether rasters serve an estimate, read once from ``assist.toml`` where each has its source."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from functools import cache
from importlib import resources

__all__ = ["AssistLimits", "assist_limits"]


@dataclass(frozen=True)
class AssistLimits:
    """Limits.

    Attributes
    ----------
    relative_efficiency : float
        Least variance of the plain estimates over that of the assisted ones, stocks and changes together.
    growth_of_change : float
        Most variance of the assisted change over that of the plain one.
    own_slopes : float
        Least variance with common slopes over that with slopes of the stratum, for the latter to serve.
    plots_per_slope : float
        Plots beyond one per stratum, for each raster; a stratum with fewer is not judged by itself.
    missing_share : float
        Largest share of a stratum without raster value.
    price_of_choice : float
        What the choice of rasters by the plots at hand adds to the variance, over the plots beyond one per stratum.
    """

    relative_efficiency: float
    growth_of_change: float
    own_slopes: float
    plots_per_slope: float
    missing_share: float
    price_of_choice: float


@cache
def assist_limits() -> AssistLimits:
    """Limits of ``assist.toml``."""
    path = resources.files("landcarbon.estimate").joinpath("assist.toml")
    given = tomllib.loads(path.read_text(encoding="utf-8"))
    return AssistLimits(**{name: float(table["value"]) for name, table in given.items()})
