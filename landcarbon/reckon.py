"""From plot densities to every figure: stocks, change, trend, with rasters, composite parcels and changing boundaries.

This module only decides which estimator takes which table; the arithmetic lies in ``landcarbon.estimate``.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.estimate.area_effect import area_effect
from landcarbon.estimate.common_area import (
    CommonArea,
    change_on_common_area,
    common_area,
    on_common_area,
    stocks_by_survey,
    tables_at,
)
from landcarbon.estimate.composite import REPLACED_RULES, composite_change, composite_parcels
from landcarbon.estimate.composite_detail import Detail, join_details
from landcarbon.estimate.offsets import add_change_offsets, add_offsets, raise_trend
from landcarbon.estimate.report import with_interval
from landcarbon.estimate.trend import estimate_trend
from landcarbon.findings import empty_findings, join_findings
from landcarbon.publish.results import CHANGE_COLUMNS
from landcarbon.reckon_notes import many_replaced, units_without_change
from landcarbon.reckon_plan import Plan
from landcarbon.statements import state_change, state_stocks

__all__ = ["Figures", "reckon", "reckon_change", "survey_pairs"]


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


def reckon(plan: Plan) -> Figures:
    """Reckon every figure of an inventory.

    Parameters
    ----------
    plan : Plan
        Prepared plot values and settings.
    """
    stocks, found = _direct_stocks(plan)
    stocks, detail, told = _compose_stocks(plan, stocks, found)
    further, findings = _detail_tables(plan, detail, "stocks"), [plan.findings, told]
    changes, effects = [], []
    for since, until in survey_pairs(plan.surveys):
        change, made, told, common = reckon_change(plan, since, until)
        changes.append(change)
        findings.append(told)
        further = _joined(further, _detail_tables(plan, made, "change"))
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
    if plan.composite and parcels is not None and len(change):
        # Plots as change takes them: on the land both surveys have in common, in a parcel they stayed in.
        at = table[table["survey"].isin([since, until])] if common is None else on_common_area(table, common)
        change, detail, told = composite_change(change, parcels, at, plan.sums, **_composing(plan))
        found = _with_replaced(found, told)
    simple = plan.settings.estimation.change == "difference"
    replaced = many_replaced(change, since, until) if simple else empty_findings()
    found = join_findings([found, units_without_change(common, change), replaced])
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


def _plain(plan: Plan, estimate: Callable[[], pd.DataFrame]) -> pd.DataFrame | None:
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
    if not plan.composite or plan.parcels is None:
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
    return pd.concat(parts).sort_index(), join_details(details), _with_replaced(found, join_findings(notes[1:]))


def _with_replaced(found: pd.DataFrame, told: pd.DataFrame) -> pd.DataFrame:
    """Drop findings about direct figures of parcels that composite ones have taken the place of."""
    return join_findings([found[~found["rule"].isin(REPLACED_RULES)], told])


def _final(plan: Plan, table: pd.DataFrame) -> pd.DataFrame:
    """Intervals of the kind asked for, and lower bounds."""
    options = plan.settings.estimation
    return with_interval(table, confidence=plan.confidence, kind=options.interval, lower=options.lower_confidence)


def _trend(plan: Plan) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Trend lines, where three surveys have plots and boundaries stay."""
    # Adjusted by rasters, strata and the inventory need no offset; parcels would.
    table = plan.used_parts if plan.composite else plan.plot_parts
    seen = set(table.loc[table["inside"].to_numpy(dtype=bool), "survey"].astype("str"))
    surveys = [name for name in plan.surveys if name in seen]
    if len(surveys) < 3 or plan.moving:
        return pd.DataFrame(), empty_findings()
    pools = [pool for pool in plan.sums if pool != "all"]
    # Own plots alone would stand beside composite change and contradict it.
    parcels = None if plan.composite else plan.parcels
    trend, found = estimate_trend(
        table,
        plan.inputs.strata,
        parcels,
        surveys,
        pools=pools,
        sums=plan.sums,
        confidence=plan.confidence,
        inventory_name=plan.settings.inventory.name,
    )
    if plan.assisted is not None:
        if plan.composite:
            trend = raise_trend(trend, plan.assisted.offsets)
        else:
            trend = trend.assign(method=trend["method"] + "; plots alone, without rasters")
    return trend, found


def _detail_tables(plan: Plan, detail: Detail | None, of: str) -> dict[str, pd.DataFrame]:
    if detail is None:
        return {}
    first = ["of", "survey", "since", "until"]
    made = {}
    parcels = detail.parcels if plan.assisted is None else _with_raster_shift(detail.parcels, plan.assisted.offsets)
    for name, table in (("parcel_detail", parcels), ("parcel_models", detail.models)):
        told = table.assign(of=of, **{key: "" for key in first[1:] if key not in table})
        made[name] = told[[*first, *(column for column in told if column not in first)]]
    return made


def _with_raster_shift(parcels: pd.DataFrame, offsets: pd.DataFrame) -> pd.DataFrame:
    """Say what the rasters add to the mean of a parcel's adjusted plots, as it is not like its stratum."""
    own = offsets[offsets["by"] == "parcel"]
    pool = own["part"].str.split(".").str[0]
    shift = own["offset"].groupby([own["survey"], own["unit"], pool]).sum()

    def at(survey: pd.Series) -> np.ndarray:
        keys = pd.MultiIndex.from_arrays([survey.astype("str"), parcels["parcel"].astype("str"), parcels["pool"]])
        return shift.reindex(keys).fillna(0.0).to_numpy(dtype=float)

    moved = at(parcels["survey"]) if "survey" in parcels else at(parcels["until"]) - at(parcels["since"])
    place = list(parcels.columns).index("direct") + 1
    told = parcels.copy()
    told.insert(place, "raster_shift", np.where(parcels["direct"].notna(), moved, np.nan))
    return told


def _joined(tables: dict[str, pd.DataFrame], more: dict[str, pd.DataFrame]) -> dict[str, pd.DataFrame]:
    joined = dict(tables)
    for name, table in more.items():
        joined[name] = _stacked([joined[name], table], list(table.columns)) if name in joined else table
    return joined


def _stacked(tables: list[pd.DataFrame], columns: list[str]) -> pd.DataFrame:
    filled = [table for table in tables if len(table)]
    return pd.concat(filled, ignore_index=True) if filled else pd.DataFrame(columns=columns)
