"""Carbon stocks of the inventory, its strata and its parcels at each survey."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.estimate.clusters import few_clusters, unit_counts
from landcarbon.estimate.combine import Plan, plan_sums
from landcarbon.estimate.interval import check_confidence, t_half_width
from landcarbon.estimate.notes import (
    few_plots_in_parcels,
    few_plots_in_strata,
    left_out,
    name_list,
    parcel_sum,
    unknown_areas,
    zero_variance,
)
from landcarbon.estimate.ratio import MIN_PLOTS, RatioEstimate, Sample, counts, ratio_of_means
from landcarbon.estimate.single_columns import ratio_from_neighbours
from landcarbon.estimate.sum_levels import sum_levels
from landcarbon.estimate.sum_notes import borrowed_parts, pools_left_out, sum_methods
from landcarbon.estimate.sums import read_sums
from landcarbon.estimate.systematic import check_variance, say_neighbours
from landcarbon.estimate.tables import LEVELS, Plots, Units, read_plots
from landcarbon.estimate.two_phase import first_phase_area_se, say_two_phase, stock_error, with_first_phase
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["STOCK_COLUMNS", "estimate_stocks"]

STOCK_COLUMNS = [
    "by",
    "unit",
    "survey",
    "pool",
    "area_ha",
    "plots",
    "density_t_c_ha",
    "density_se",
    "density_low",
    "density_high",
    "stock_t_c",
    "stock_se",
    "stock_low",
    "stock_high",
    "df",
    "method",
]

_METHOD = {
    "inventory": "stratified ratio of means",
    "stratum": "ratio of means",
    "parcel": "domain ratio of means",
}


@dataclass(frozen=True)
class _Level:
    """Estimates of one level at one survey; ``area_ha``, ``method`` have shape (units, pools), ``area_se`` (units,)."""

    by: str
    labels: list[str]
    area_ha: np.ndarray
    estimate: RatioEstimate
    method: np.ndarray
    area_se: np.ndarray | None = None


def estimate_stocks(  # noqa: PLR0913  (the tables, and how to estimate and report)
    plot_pools: pd.DataFrame,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None,
    surveys: Sequence[str] | pd.DataFrame,
    *,
    pools: Sequence[str],
    confidence: float,
    inventory_name: str,
    sums: Mapping[str, Sequence[str]] | None = None,
    variance: str = "random",
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Estimate stocks at every survey.

    Parameters
    ----------
    plot_pools : DataFrame
        One row per visited plot and survey: survey, plot, parcel, stratum, date, size (relative sampled area), inside
        and one column per pool and for ``all``, or per part if ``sums`` is given [t C/ha]; NaN where not measured.
        Optional: ``weight`` (relative land a plot stands for within its stratum; multiplies ``size``), ``cluster``
        (plots with the same name in a stratum are one sampling unit; blank for none), ``x`` and ``y`` [m].
    strata : DataFrame
        stratum, area_ha [ha] (NaN if unknown). Optional: ``first_phase``, number of points of a first sample that tell
        the area; NaN where it is known exactly.
    parcels : DataFrame or None
        parcel, area_ha [ha].
    surveys : sequence of str, or DataFrame with the column survey
        In the order of time.
    pools : sequence of str
        Pools counted; ``all`` is added.
    confidence : float
        Of the intervals, for example 0.95.
    inventory_name : str
        Unit of the inventory rows.
    sums : mapping, optional
        Columns that make up each pool. Each part is then estimated from its own plots, a pool is the sum of its parts
        and ``all`` the sum of the pools that were measured at the survey.
    variance : str
        ``random`` takes the plots of a stratum as a random sample. ``neighbours`` takes the variance of strata and
        inventory from the differences of neighbouring plots, for systematic grids; parcels keep the former.

    Returns
    -------
    stocks : DataFrame
        Columns ``STOCK_COLUMNS``, by inventory, stratum and parcel; densities in t C/ha, stocks in t C. A unit with
        fewer than two units has NaN and says so in ``method``. There is no inventory row where the area of one of
        several strata is unknown.
    findings : DataFrame
        What was left out, not estimable, or looks too good.

    Raises
    ------
    UserError
        If a column is missing, a plot occurs twice in a survey, or an option is out of range.

    Notes
    -----
    Formulas and sources: ``docs/estimation.md``.
    """
    check_confidence(confidence)
    near = check_variance(variance)
    chosen = None if sums is None else read_sums(sums, pools)
    plots = read_plots(plot_pools, strata, parcels, pools, parts=None if chosen is None else chosen.parts)
    names = _survey_names(surveys)
    found = [_unlisted_surveys(plots, names), _unlisted_parcels(plots), unknown_areas(plots.units)]
    blocks: dict[str, list[pd.DataFrame]] = {by: [] for by in LEVELS}
    rows = plots.pools if chosen is None else chosen.names
    for survey in names:
        sample = plots.sample(survey)
        if chosen is None:
            levels = _levels(sample, plots.units, inventory_name, near)
            found += _findings(levels, plots, sample, survey)
        else:
            plan = plan_sums((sample,), chosen, plots.units.stratum_area_ha, near=near)
            levels, about = _levels_of_sums(sample, plots, plan, survey, inventory_name)
            found += about
        levels = _designed(levels, plots.units)
        for level in levels:
            blocks[level.by].append(_rows(level, survey, rows, confidence))
    return unit_order(blocks, len(rows), STOCK_COLUMNS), join_findings(found)


def unit_order(blocks: dict[str, list[pd.DataFrame]], pools: int, columns: list[str]) -> pd.DataFrame:
    """Put blocks of one survey each (units x pools) in the order level, unit, survey, pool."""
    parts = []
    for by in LEVELS:
        if not blocks[by] or not len(blocks[by][0]):
            continue
        whole = pd.concat(blocks[by], ignore_index=True)
        place = np.arange(len(whole)).reshape(len(blocks[by]), -1, pools)
        parts.append(whole.iloc[place.transpose(1, 0, 2).ravel()])
    if not parts:
        return pd.DataFrame(columns=columns)
    return pd.concat(parts, ignore_index=True)[columns]


def _survey_names(surveys: Sequence[str] | pd.DataFrame) -> list[str]:
    given = surveys["survey"] if isinstance(surveys, pd.DataFrame) else surveys
    return [str(name) for name in given]


def _designed(levels: list[_Level], units: Units) -> list[_Level]:
    """Add the error of estimated areas, and say how variances came about."""
    strata = next(level.estimate for level in levels if level.by == "stratum")
    done = []
    for level in levels:
        made, known = level.estimate, np.isfinite(level.estimate.density)
        text = say_two_phase(say_neighbours(level.method, known, made.near), known, level.by, units)
        if level.by == "inventory":
            made = with_first_phase(made, strata, units)
        area_se = first_phase_area_se(units) if level.by == "stratum" else None
        done.append(replace(level, estimate=made, method=text, area_se=area_se))
    return done


def _levels(sample: Sample, units: Units, inventory_name: str, near: bool) -> list[_Level]:
    """Estimate the inventory (if areas allow), the strata and the parcels."""
    strata = len(units.strata)
    allowed = unit_counts(sample, strata) >= MIN_PLOTS
    pools = allowed.shape[1]

    def estimate(domain: np.ndarray, domains: int, near: bool = False) -> RatioEstimate:
        made = ratio_of_means(sample, domain, domains, units.stratum_area_ha, allowed)
        return ratio_from_neighbours(made, sample, domain, units.stratum_area_ha, allowed) if near else made

    levels = []

    def add(by: str, labels: list[str], area: np.ndarray, made: RatioEstimate) -> None:
        levels.append(_Level(by, labels, area, made, _methods(by, made)))

    if units.has_total:
        area = np.where(allowed, units.stratum_area_ha[:, None], 0.0).sum(axis=0, keepdims=True)
        add("inventory", [inventory_name], area, estimate(np.zeros_like(sample.stratum), 1, near))
    area = np.repeat(units.stratum_area_ha[:, None], pools, axis=1)
    by_stratum = estimate(sample.stratum, strata, near)
    by_stratum = replace(by_stratum, plots=counts(sample, strata).astype(np.int64))
    add("stratum", units.strata, area, by_stratum)
    area = np.repeat(units.parcel_area_ha[:, None], pools, axis=1)
    add("parcel", units.parcels, area, estimate(sample.parcel, len(units.parcels)))
    return levels


def _methods(by: str, estimate: RatioEstimate) -> np.ndarray:
    """Say how each figure came about, or why there is none."""
    count = estimate.plots
    refused = np.array([f"not estimable: {number} plot(s)" for number in range(MIN_PLOTS)], dtype=object)
    reason = np.where(
        count < MIN_PLOTS, refused[np.minimum(count, MIN_PLOTS - 1)], "not estimable: area of its strata unknown"
    )
    if estimate.units is not None:
        reason = np.where((count >= MIN_PLOTS) & (estimate.units < MIN_PLOTS), "not estimable: one cluster", reason)
    return np.where(np.isfinite(estimate.density), _METHOD[by], reason)


def _levels_of_sums(
    sample: Sample, plots: Plots, plan: Plan, survey: str, inventory_name: str
) -> tuple[list[_Level], list[pd.DataFrame]]:
    """Estimate every level from parts with their own plots each, and say what is to be said about it."""
    units = plots.units
    levels = []
    for level in sum_levels((sample,), plan, units, inventory_name):
        made = level.estimate
        plain = np.full(made.density.shape, _METHOD[level.by], dtype=object)
        estimate = RatioEstimate(made.density, made.variance, made.df, made.plots[0], near=made.near)
        text = sum_methods(plain, made, plan, [survey])
        levels.append(_Level(level.by, level.labels, level.area_ha, estimate, text))
        borrowed = made
    about = _findings(levels, replace(plots, pools=plan.sums.labels()), sample, survey, plan)
    return levels, [*about, pools_left_out(plan, [survey]), borrowed_parts(borrowed, plan, units, survey)]


def _rows(level: _Level, survey: str, pools: list[str], confidence: float) -> pd.DataFrame:
    """Lay the estimates of one level out as rows, units before pools."""
    estimate, units = level.estimate, len(level.labels)
    density, se = estimate.density, np.sqrt(estimate.variance)
    half = t_half_width(se, estimate.df, confidence)
    area = level.area_ha
    stock_se = stock_error(se, density, area, level.area_se)
    low, high = (density - half) * area, (density + half) * area
    if level.area_se is not None:
        wide = t_half_width(stock_se, estimate.df, confidence)
        low, high = density * area - wide, density * area + wide
    columns = {
        "area_ha": area,
        "plots": estimate.plots,
        "density_t_c_ha": density,
        "density_se": se,
        "density_low": density - half,
        "density_high": density + half,
        "stock_t_c": density * area,
        "stock_se": stock_se,
        "stock_low": low,
        "stock_high": high,
        "df": estimate.df,
    }
    rows = units * len(pools)
    text = {
        "by": np.full(rows, level.by, dtype=object),
        "unit": np.repeat(np.array(level.labels, dtype=object), len(pools)),
        "survey": np.full(rows, survey, dtype=object),
        "pool": np.tile(np.array(pools, dtype=object), units),
    }
    # Made as text at once: converting columns of a finished frame copies all of it.
    return pd.DataFrame(
        {
            **{name: pd.array(values, dtype="str") for name, values in text.items()},
            **{name: values.ravel() for name, values in columns.items()},
            "method": pd.array(level.method.ravel(), dtype="str"),
        }
    )


def _findings(
    levels: list[_Level], plots: Plots, sample: Sample, survey: str, plan: Plan | None = None
) -> list[pd.DataFrame]:
    units, columns = plots.units, plots.pools
    names = columns if plan is None else plan.sums.names
    number = counts(sample, len(units.strata))
    inside = np.ones(len(columns), dtype=bool) if plan is None else ~plan.out[plan.sums.pool]
    shown = [name for name, yes in zip(columns, inside, strict=True) if yes]
    found = [
        left_out(plots, survey),
        few_plots_in_strata(units, shown, [number[:, inside]], [survey]),
        few_clusters(units, [sample], survey),
    ]
    for level in levels:
        found.append(zero_variance(level.by, level.labels, names, level.estimate.variance, survey))
    parcels = levels[-1].estimate
    found.append(few_plots_in_parcels(units, names, np.isfinite(parcels.density), survey))
    used = np.asarray(sample.used[:, -1] if plan is None else sample.used.any(axis=1))
    enough = np.asarray(number[:, -1] >= MIN_PLOTS if plan is None else plan.allowed.any(axis=1))
    found.append(_parcels_without_stratum(plots, sample, used, enough, survey))
    if levels[0].by == "inventory":
        total = float(levels[0].estimate.density[0, -1] * levels[0].area_ha[0, -1])
        found.append(parcel_sum(units, parcels.density[:, -1] * units.parcel_area_ha, total, survey))
    return found


def _parcels_without_stratum(
    plots: Plots, sample: Sample, used: np.ndarray, enough: np.ndarray, survey: str
) -> pd.DataFrame:
    """Report parcels whose figure rests on part of their plots, as some lie in a stratum that is not estimable."""
    units = plots.units
    in_parcel = (sample.parcel >= 0) & used
    lost = np.bincount(sample.parcel[in_parcel & ~enough[sample.stratum]], minlength=len(units.parcels))
    kept = np.bincount(sample.parcel[in_parcel & enough[sample.stratum]], minlength=len(units.parcels))
    hit = (lost > 0) & (kept >= MIN_PLOTS)
    names = [units.parcels[unit] for unit in np.flatnonzero(hit)]
    if not names:
        return empty_findings()
    return make_findings(
        "parcel without part of its plots",
        severity="warning",
        table="estimate",
        column="parcel",
        value=name_list(names),
        survey=survey,
        message=(
            f"{int(lost[hit].sum())} plots of {len(names)} parcels lie in strata that are not estimable and are left "
            f"out; the figures of {name_list(names)} rest on their other plots."
        ),
        remedy="Merge the stratum, or read these parcels with care.",
    )


def _unlisted_surveys(plots: Plots, names: list[str]) -> pd.DataFrame:
    other = ~np.isin(plots.survey, np.array(names, dtype=object))
    if not other.any():
        return empty_findings()
    labels = sorted({str(name) for name in plots.survey[other]})
    return make_findings(
        "survey not listed",
        severity="error",
        table="estimate",
        column="survey",
        value=name_list(labels),
        used=False,
        message=f"{int(other.sum())} plot rows belong to surveys that are not listed ({name_list(labels)}); not used.",
        remedy="List the survey, or correct its name.",
    )


def _unlisted_parcels(plots: Plots) -> pd.DataFrame:
    if not plots.units.parcels:
        return empty_findings()
    labels = plots.frame["parcel"].astype("str")
    other = plots.taken() & (plots.parcel < 0) & labels.notna().to_numpy() & (labels != "").to_numpy()
    if not other.any():
        return empty_findings()
    names = sorted(set(labels[other]))
    return make_findings(
        "parcel not listed",
        severity="warning",
        table="estimate",
        column="parcel",
        value=name_list(names),
        message=f"Plots name parcels that are not listed: {name_list(names)}. They count in their stratum only.",
        remedy="Add the parcel to the parcels file, or correct its name.",
    )
