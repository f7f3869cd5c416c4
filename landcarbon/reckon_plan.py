"""What the figures of an inventory are reckoned from: plot values as the estimators take them, and the settings."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import pandas as pd

from landcarbon.errors import LandcarbonError
from landcarbon.estimate.assist import Assisted, assist
from landcarbon.estimate.visit_times import common_dates, to_common_date
from landcarbon.findings import empty_findings, join_findings
from landcarbon.read.rasters import RasterPlace
from landcarbon.reckon_notes import direct_because_of_clusters, rasters_with_moving_boundaries

if TYPE_CHECKING:
    import geopandas as gpd

    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings
    from landcarbon.read.auxiliary import Auxiliary, PostClasses

__all__ = ["Boundaries", "Plan", "make_plan"]


@dataclass(frozen=True)
class Boundaries:
    """Outlines of the parcels, which was in force when, and where the plots lay; as in ``Inputs``."""

    versions: gpd.GeoDataFrame
    in_force: pd.DataFrame
    parcel_of: pd.DataFrame


@dataclass(frozen=True)
class Plan:
    """What the figures are reckoned from.

    Attributes
    ----------
    inputs : Inputs
        Checked tables.
    settings : Settings
        The project file.
    plot_parts : DataFrame
        One row per plot and survey with a column per part, as measured; places by survey where boundaries change.
    sums : mapping
        Columns of each pool, and ``all``.
    assisted : Assisted or None
        Plot values adjusted by rasters or classes.
    auxiliary : Auxiliary or None
        The rasters.
    findings : DataFrame
        What preparing found.
    dates : dict
        Common date of each survey, where densities were brought to one.
    """

    inputs: Inputs
    settings: Settings
    plot_parts: pd.DataFrame
    sums: Mapping[str, Sequence[str]]
    assisted: Assisted | None
    auxiliary: Auxiliary | None
    findings: pd.DataFrame
    dates: dict[str, pd.Timestamp] = field(default_factory=dict)

    @property
    def surveys(self) -> list[str]:
        """Names of the surveys, in the order of time."""
        return [str(name) for name in self.inputs.surveys["survey"]]

    @property
    def moving(self) -> bool:
        """Whether boundaries change between the surveys."""
        return self.inputs.parcel_versions is not None

    @property
    def boundaries(self) -> Boundaries:
        """Outlines of the parcels through time; only where boundaries change."""
        inputs = self.inputs
        if inputs.parcel_versions is None or inputs.parcels_in_force is None or inputs.parcel_of is None:
            raise LandcarbonError("boundaries asked for that do not change")
        return Boundaries(inputs.parcel_versions, inputs.parcels_in_force, inputs.parcel_of)

    @property
    def used_parts(self) -> pd.DataFrame:
        """Plot values the estimators take: adjusted ones where rasters assist."""
        return self.plot_parts if self.assisted is None else self.assisted.plot_parts

    @property
    def parcels(self) -> pd.DataFrame | None:
        """Parcels without their outlines."""
        found = self.inputs.parcels
        return None if found is None else pd.DataFrame(found.drop(columns="geometry"))

    @property
    def composite(self) -> bool:
        """Whether parcels have composite figures."""
        wanted = self.settings.estimation.parcels == "composite" and self.inputs.parcels is not None
        return wanted and not self.clustered

    @property
    def clustered(self) -> bool:
        """Whether plots stand in clusters; the plots of a cluster are alike, which composite figures do not know."""
        return "cluster" in self.plot_parts and bool(self.plot_parts["cluster"].fillna("").ne("").any())

    @property
    def confidence(self) -> float:
        """Confidence of the intervals."""
        return self.settings.inventory.confidence

    @property
    def place(self) -> RasterPlace:
        """Where rasters lie, and the coordinate system of the results."""
        settings = self.settings
        return RasterPlace(settings.folder, self.inputs.crs, settings.inventory.allow_outside)

    def options(self, strata: pd.DataFrame, parcels: pd.DataFrame | None) -> dict[str, Any]:
        """Arguments of the estimators."""
        return {
            "strata": strata,
            "parcels": parcels,
            "confidence": self.confidence,
            "inventory_name": self.settings.inventory.name,
            "variance": self.settings.estimation.variance,
        }


def make_plan(
    inputs: Inputs,
    settings: Settings,
    plot_parts: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    auxiliary: Auxiliary | None = None,
    classes: PostClasses | None = None,
) -> Plan:
    """Prepare the plot values: common dates, rasters and classes.

    Parameters
    ----------
    inputs, settings, plot_parts, sums
        As in :class:`Plan`.
    auxiliary : Auxiliary, optional
        Rasters.
    classes : PostClasses, optional
        Classes of known area.
    """
    found = [] if auxiliary is None else [auxiliary.findings]
    surveys = [str(name) for name in inputs.surveys["survey"]]
    dates: dict[str, pd.Timestamp] = {}
    if settings.estimation.dates == "common":
        dates = common_dates(plot_parts, surveys)
        plot_parts, moved = to_common_date(plot_parts, dates)
        found.append(moved)
    plan = Plan(inputs, settings, plot_parts, sums, None, auxiliary, empty_findings(), dates)
    if plan.clustered and settings.estimation.parcels == "composite" and inputs.parcels is not None:
        found.append(direct_because_of_clusters())
    if auxiliary is not None or classes is not None:
        if plan.moving:
            found.append(rasters_with_moving_boundaries())
            plan = replace(plan, auxiliary=None)
        else:
            assisted = _assist(plan, classes)
            plan = replace(plan, assisted=assisted)
            found.append(assisted.findings)
    return replace(plan, findings=join_findings(found))


def _assist(plan: Plan, classes: PostClasses | None) -> Assisted:
    if plan.auxiliary is None:
        values = pd.DataFrame(columns=["survey", "plot", "raster", "value"])
        means = pd.DataFrame(columns=["survey", "by", "unit", "raster", "mean", "covered"])
    else:
        values, means = plan.auxiliary.plot_values, plan.auxiliary.unit_means
    return assist(
        plan.plot_parts,
        plan.sums,
        values,
        means,
        plan.inputs.strata,
        by_stratum=plan.settings.estimation.by_stratum,
        post_stratum=None if classes is None else (classes.plots, classes.areas),
        parcels=plan.parcels,
        engine={"variance": plan.settings.estimation.variance},
    )
