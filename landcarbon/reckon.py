"""From plot densities to every figure: stocks, change, trend, with rasters, composite parcels and changing boundaries.

This module only decides which estimator takes which table; the arithmetic lies in ``landcarbon.estimate``.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import pandas as pd

from landcarbon.errors import LandcarbonError
from landcarbon.estimate.area_effect import area_effect
from landcarbon.estimate.assist import Assisted, assist
from landcarbon.estimate.common_area import (
    CommonArea,
    change_on_common_area,
    common_area,
    place_by_survey,
    stocks_by_survey,
    tables_at,
)
from landcarbon.estimate.composite import REPLACED_RULES, Detail, composite_change, composite_parcels
from landcarbon.estimate.offsets import add_change_offsets, add_offsets
from landcarbon.estimate.report import with_interval
from landcarbon.estimate.trend import estimate_trend
from landcarbon.estimate.visit_times import common_dates, to_common_date
from landcarbon.findings import empty_findings, join_findings, make_findings
from landcarbon.publish.results import CHANGE_COLUMNS
from landcarbon.read.rasters import RasterPlace
from landcarbon.statements import state_change, state_stocks

if TYPE_CHECKING:
    import geopandas as gpd

    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings
    from landcarbon.read.auxiliary import Auxiliary, PostClasses

__all__ = ["Figures", "Plan", "make_plan", "reckon", "reckon_change", "survey_pairs"]


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
    """

    inputs: Inputs
    settings: Settings
    plot_parts: pd.DataFrame
    sums: Mapping[str, Sequence[str]]
    assisted: Assisted | None
    auxiliary: Auxiliary | None
    findings: pd.DataFrame

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


@dataclass(frozen=True)
class Figures:
    """All figures of a run.

    Attributes
    ----------
    stocks, change, findings : DataFrame
        As published.
    further : dict of DataFrame
        Further tables by the names of ``FURTHER_FILES``.
    """

    stocks: pd.DataFrame
    change: pd.DataFrame
    findings: pd.DataFrame
    further: dict[str, pd.DataFrame] = field(default_factory=dict)


def survey_pairs(surveys: Sequence[str]) -> list[tuple[str, str]]:
    """Pairs of surveys that change is stated for: each with the next, and the first with the last."""
    pairs = list(pairwise(surveys))
    if len(surveys) > 2:
        pairs.append((surveys[0], surveys[-1]))
    return pairs


def make_plan(
    inputs: Inputs,
    settings: Settings,
    plot_parts: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    auxiliary: Auxiliary | None = None,
    classes: PostClasses | None = None,
) -> Plan:
    """Prepare the plot values: places by survey, common dates, rasters and classes.

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
    if inputs.parcel_of is not None:
        plot_parts = place_by_survey(plot_parts, inputs.parcel_of)
    if settings.estimation.dates == "common":
        plot_parts, moved = to_common_date(plot_parts, common_dates(plot_parts, surveys))
        found.append(moved)
    plan = Plan(inputs, settings, plot_parts, sums, None, auxiliary, empty_findings())
    if auxiliary is not None or classes is not None:
        if plan.moving:
            found.append(_rasters_with_moving_boundaries())
            plan = replace(plan, auxiliary=None)
        else:
            assisted = _assist(plan, classes)
            plan = replace(plan, assisted=assisted)
            found.append(assisted.findings)
    return replace(plan, findings=join_findings(found))


def _rasters_with_moving_boundaries() -> pd.DataFrame:
    return make_findings(
        "rasters not used",
        severity="warning",
        table="rasters",
        message="Rasters and classes of known area assist only where boundaries stay the same; these estimates rest on "
        "the plots alone.",
        remedy="Leave out valid_from and valid_to, or the rasters.",
    )


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


def reckon(plan: Plan) -> Figures:
    """Reckon every figure of an inventory.

    Parameters
    ----------
    plan : Plan
        Prepared plot values and settings.
    """
    stocks, found = _direct_stocks(plan)
    stocks, detail, told = _compose_stocks(plan, stocks, found)
    further, findings = _detail_tables(detail, "stocks"), [plan.findings, told]
    changes, effects = [], []
    for since, until in survey_pairs(plan.surveys):
        change, made, told, common = reckon_change(plan, since, until)
        changes.append(change)
        findings.append(told)
        further = _joined(further, _detail_tables(made, "change"))
        if common is not None:
            effects.append(area_effect(stocks, change, common))
    change = _stacked(changes, CHANGE_COLUMNS)
    stocks = _final(plan, stocks)
    if effects and any(len(part) for part in effects):
        further["area_effect"] = pd.concat([part for part in effects if len(part)], ignore_index=True)
    trend, told = _trend(plan)
    findings.append(told)
    if len(trend):
        further["trend"] = trend
    if plan.assisted is not None:
        further["raster_worth"] = plan.assisted.report
        further["raster_lines"] = plan.assisted.models
    return Figures(stocks, change, join_findings(findings), further)


def reckon_change(
    plan: Plan, since: str, until: str
) -> tuple[pd.DataFrame, Detail | None, pd.DataFrame, CommonArea | None]:
    """Reckon the change between any two surveys.

    Returns
    -------
    change : DataFrame
        As published.
    detail : Detail or None
        How the figures of parcels are composed.
    findings : DataFrame
        What was noted.
    common : CommonArea or None
        The land of both surveys, where boundaries change.
    """
    common = None
    table = plan.used_parts
    if plan.moving:
        inputs = plan.inputs
        lands = plan.boundaries
        common = common_area(
            lands.versions,
            lands.in_force,
            lands.parcel_of,
            inputs.strata,
            since=since,
            until=until,
            inventory_name=plan.settings.inventory.name,
        )

        def estimate(
            plots: pd.DataFrame, strata: pd.DataFrame, parcels: pd.DataFrame | None
        ) -> tuple[pd.DataFrame, pd.DataFrame]:
            return _state_change(plan, plots, since, until, strata=strata, parcels=parcels)

        change, found = change_on_common_area(estimate, table, common)
        parcels: pd.DataFrame | None = common.parcels
    else:
        parcels = plan.parcels
        change, found = _state_change(plan, table, since, until, strata=plan.inputs.strata, parcels=parcels)
    if plan.assisted is not None and len(change):
        plain = _plain(plan, lambda: _state_change(
            plan, plan.plot_parts, since, until, strata=plan.inputs.strata, parcels=parcels
        )[0])  # fmt: skip
        change = add_change_offsets(change, plan.assisted, plan.sums, confidence=plan.confidence, plain=plain)
    detail = None
    if plan.settings.estimation.parcels == "composite" and parcels is not None and len(change):
        at = table[table["survey"].isin([since, until])]
        change, detail, told = composite_change(change, parcels, at, plan.sums, **_composing(plan))
        found = _with_replaced(found, told)
    return _final(plan, change), detail, found, common


def _state_change(
    plan: Plan,
    table: pd.DataFrame,
    since: str,
    until: str,
    *,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    options = {**plan.options(strata, parcels), "change": plan.settings.estimation.change}
    return state_change(table, plan.sums, since, until, **options)


def _direct_stocks(plan: Plan) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Stocks of all units from their own plots, with rasters where they assist."""
    inputs = plan.inputs
    if plan.moving:

        def estimate(
            plots: pd.DataFrame, strata: pd.DataFrame, parcels: pd.DataFrame | None, survey: str
        ) -> tuple[pd.DataFrame, pd.DataFrame]:
            return state_stocks(plots, plan.sums, [survey], **plan.options(strata, parcels))

        return stocks_by_survey(
            estimate, plan.plot_parts, plan.boundaries.versions, plan.boundaries.in_force, inputs.strata
        )
    options = plan.options(inputs.strata, plan.parcels)
    stocks, found = state_stocks(plan.used_parts, plan.sums, plan.surveys, **options)
    if plan.assisted is not None:
        plain = _plain(plan, lambda: state_stocks(plan.plot_parts, plan.sums, plan.surveys, **options)[0])
        kind = plan.settings.estimation.interval
        stocks = add_offsets(stocks, plan.assisted, plan.sums, confidence=plan.confidence, kind=kind, plain=plain)
    return stocks, found


def _plain(plan: Plan, estimate: Any) -> pd.DataFrame | None:
    """Estimates without rasters, where some parcel needs them."""
    if plan.assisted is None or not plan.assisted.findings["rule"].eq("parcel without raster mean").any():
        return None
    return estimate()


def _covariates(plan: Plan) -> pd.DataFrame | None:
    """Raster means of the parcels, if the rasters are worth anything."""
    if plan.auxiliary is None or plan.assisted is None or plan.assisted.offsets.empty:
        return None
    return plan.auxiliary.covariates()


def _composing(plan: Plan) -> dict[str, Any]:
    """Arguments of the composite estimators."""
    offsets = None if plan.assisted is None else plan.assisted.offsets
    return {"covariates": _covariates(plan), "offsets": offsets, "confidence": plan.confidence}


def _compose_stocks(
    plan: Plan, stocks: pd.DataFrame, found: pd.DataFrame
) -> tuple[pd.DataFrame, Detail | None, pd.DataFrame]:
    """Composite figures of the parcels in place of direct ones."""
    if plan.settings.estimation.parcels != "composite" or plan.parcels is None:
        return stocks, None, found
    options = _composing(plan)
    if not plan.moving:
        made, detail, told = composite_parcels(stocks, plan.parcels, plan.used_parts, plan.sums, **options)
        return made, detail, _with_replaced(found, told)
    inputs, parts, details, notes = plan.inputs, [], [], [found]
    for survey in plan.surveys:
        _, parcels = tables_at(plan.boundaries.versions, plan.boundaries.in_force, inputs.strata, survey)
        rows = stocks["survey"] == survey
        at = plan.used_parts[plan.used_parts["survey"] == survey]
        made, detail, told = composite_parcels(stocks[rows], parcels, at, plan.sums, **options)
        parts.append(made.set_axis(stocks.index[rows]))
        details.append(detail)
        notes.append(told)
    detail = Detail(*(pd.concat(tables, ignore_index=True) for tables in zip(*map(_both, details), strict=True)))
    return pd.concat(parts).sort_index(), detail, _with_replaced(found, join_findings(notes[1:]))


def _both(detail: Detail) -> tuple[pd.DataFrame, pd.DataFrame]:
    return detail.parcels, detail.models


def _with_replaced(found: pd.DataFrame, told: pd.DataFrame) -> pd.DataFrame:
    """Drop findings about direct figures of parcels that composite ones have taken the place of."""
    return join_findings([found[~found["rule"].isin(REPLACED_RULES)], told])


def _final(plan: Plan, table: pd.DataFrame) -> pd.DataFrame:
    """Intervals of the kind asked for, and lower bounds."""
    options = plan.settings.estimation
    return with_interval(table, confidence=plan.confidence, kind=options.interval, lower=options.lower_confidence)


def _trend(plan: Plan) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Trend lines, where there are three surveys and boundaries stay."""
    if len(plan.surveys) < 3 or plan.moving:
        return pd.DataFrame(), empty_findings()
    pools = [pool for pool in plan.sums if pool != "all"]
    return estimate_trend(
        plan.plot_parts,
        plan.inputs.strata,
        plan.parcels,
        plan.surveys,
        pools=pools,
        sums=plan.sums,
        confidence=plan.confidence,
        inventory_name=plan.settings.inventory.name,
    )


def _detail_tables(detail: Detail | None, of: str) -> dict[str, pd.DataFrame]:
    if detail is None:
        return {}
    first = ["of", "survey", "since", "until"]
    made = {}
    for name, table in (("parcel_detail", detail.parcels), ("parcel_models", detail.models)):
        told = table.assign(of=of, **{key: "" for key in first[1:] if key not in table})
        made[name] = told[[*first, *(column for column in told if column not in first)]]
    return made


def _joined(tables: dict[str, pd.DataFrame], more: dict[str, pd.DataFrame]) -> dict[str, pd.DataFrame]:
    joined = dict(tables)
    for name, table in more.items():
        joined[name] = _stacked([joined[name], table], list(table.columns)) if name in joined else table
    return joined


def _stacked(tables: list[pd.DataFrame], columns: list[str]) -> pd.DataFrame:
    filled = [table for table in tables if len(table)]
    return pd.concat(filled, ignore_index=True) if filled else pd.DataFrame(columns=columns)
