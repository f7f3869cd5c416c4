"""Change of carbon stocks between two surveys, on the area that is estimable at both."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace

import numpy as np
import pandas as pd

from landcarbon.constants import CARBON_TO_CO2, DAYS_PER_YEAR
from landcarbon.errors import UserError
from landcarbon.estimate.change_levels import (
    ChangeLevel,
    designed,
    with_best,
    with_moved_plots,
    with_own_dates,
    without_noise,
)
from landcarbon.estimate.change_notes import DIFFERENCE, change_methods, missing_dates, moved_plots, single_pairs
from landcarbon.estimate.clusters import few_clusters, unit_counts
from landcarbon.estimate.combine import Plan, SumEstimate, plan_sums
from landcarbon.estimate.difference import Difference, difference_of_ratios
from landcarbon.estimate.interval import check_confidence, t_half_width
from landcarbon.estimate.notes import few_plots_in_parcels, few_plots_in_strata, zero_variance
from landcarbon.estimate.ratio import MIN_PLOTS, Sample, counts
from landcarbon.estimate.sum_levels import sum_levels
from landcarbon.estimate.sum_notes import borrowed_parts, pools_left_out, sum_methods
from landcarbon.estimate.sums import Sums, read_sums
from landcarbon.estimate.systematic import check_variance
from landcarbon.estimate.tables import Plots, Units, read_plots
from landcarbon.estimate.two_phase import stock_error
from landcarbon.estimate.visit_times import dates_vary
from landcarbon.findings import join_findings

__all__ = ["CHANGE_COLUMNS", "estimate_change"]

CHANGE_COLUMNS = [
    "by",
    "unit",
    "since",
    "until",
    "pool",
    "area_ha",
    "plots_paired",
    "plots_since",
    "plots_until",
    "years",
    "change_t_c",
    "change_se",
    "change_low",
    "change_high",
    "change_t_c_yr",
    "change_t_c_ha_yr",
    "change_t_c_ha_yr_se",
    "co2_t_yr",
    "method",
]

_WAYS = ("difference", "best combination")


def estimate_change(  # noqa: PLR0913  (the survey's tables, two surveys, and how to report)
    plot_pools: pd.DataFrame,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None,
    *,
    since: str,
    until: str,
    pools: Sequence[str],
    confidence: float,
    inventory_name: str,
    sums: Mapping[str, Sequence[str]] | None = None,
    change: str = "difference",
    variance: str = "random",
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Estimate the change between two surveys, next to each other or not.

    Parameters
    ----------
    plot_pools : DataFrame
        One row per visited plot and survey, as for stocks [t C/ha].
    strata : DataFrame
        stratum, area_ha [ha] (NaN if unknown).
    parcels : DataFrame or None
        parcel, area_ha [ha]; the same at both dates.
    since, until : str
        Earlier and later survey.
    pools : sequence of str
        Pools counted; ``all`` is added.
    confidence : float
        Of the intervals, for example 0.95.
    inventory_name : str
        Unit of the inventory row.
    sums : mapping, optional
        Columns that make up each pool, as for stocks. A pool has a change if all its parts were measured at both
        surveys; ``all`` is the sum of the pools that have one.
    change : {"difference", "best combination"}
        How plots measured at one survey only are joined with those of both. The difference of means of all plots, or
        the best linear combination (sampling with partial replacement), with weights of the whole for all strata and
        pools so that these add up; parcels have weights of their own. Units with too few plots of either kind keep the
        difference; ``method`` tells.
    variance : {"random", "neighbours"}
        As for stocks. A best combination keeps the former.

    Returns
    -------
    change : DataFrame
        Columns ``CHANGE_COLUMNS``; change in t C, rates in t C/yr and t C/ha/yr, ``co2_t_yr`` in t CO2/yr with the sign
        of greenhouse-gas inventories: removals negative. Strata with fewer than two plots at either survey count at
        neither.
    findings : DataFrame
        What was left out, not estimable, or looks too good.

    Raises
    ------
    UserError
        If ``since`` equals ``until``, a survey has no rows, a column is missing, a plot occurs twice in a survey, or
        ``confidence`` is out of range, or ``change`` is not one of the two.

    Notes
    -----
    Formulas and sources: ``docs/estimation.md``.
    """
    check_confidence(confidence)
    if change not in _WAYS:
        raise UserError(f"change {change!r} is not known", where="estimation", remedy=f"It is one of {_WAYS}.")
    near, surveys = check_variance(variance), (str(since), str(until))
    chosen = None if sums is None else read_sums(sums, pools)
    plots = read_plots(plot_pools, strata, parcels, pools, parts=None if chosen is None else chosen.parts)
    _check_surveys(plots, *surveys)
    samples = (plots.sample(surveys[0]), plots.sample(surveys[1]))
    if chosen is None:
        allowed, levels, found = _of_columns(samples, plots, surveys, inventory_name, near)
    else:
        plan = plan_sums(samples, chosen, plots.units.stratum_area_ha, near=near)
        allowed, levels, found = _of_sums(samples, plots, plan, surveys, inventory_name)
    names = plots.pools if chosen is None else chosen.names
    if dates_vary(samples):
        levels = [
            with_own_dates(level, samples, plots.units, allowed, columns=chosen is None, near=near) for level in levels
        ]
    levels = [with_moved_plots(level, samples, plots.units, allowed) for level in levels]
    if change == _WAYS[1]:
        levels, more = with_best(levels, samples, plots.units, allowed, surveys)
        found = [*found, more]
    levels = designed([without_noise(level, samples) for level in levels], plots.units)
    found += [
        few_clusters(plots.units, samples, surveys[1], "change"),
        *_findings(levels, plots.units, names, *surveys),
        moved_plots(samples, _plot_names(plots, surveys[1]), surveys),
    ]
    rows = [_rows(level, surveys, names, confidence) for level in levels if level.labels]
    table = pd.concat(rows, ignore_index=True)[CHANGE_COLUMNS] if rows else pd.DataFrame(columns=CHANGE_COLUMNS)
    return table, join_findings(found)


_Made = tuple[np.ndarray, list[ChangeLevel], list[pd.DataFrame]]  # strata that count by column, levels, findings


def _of_columns(
    samples: tuple[Sample, Sample], plots: Plots, surveys: tuple[str, str], inventory_name: str, near: bool
) -> _Made:
    """Change of each column of the plot table."""
    n_strata = len(plots.units.strata)
    by_date = [counts(sample, n_strata) for sample in samples]
    allowed = np.logical_and.reduce([unit_counts(sample, n_strata) >= MIN_PLOTS for sample in samples])
    levels = [
        _level(by, labels, domains, area, change, change_methods(change, surveys))
        for by, labels, domains, area, change in _levels(samples, by_date, allowed, plots.units, inventory_name, near)
    ]
    few = few_plots_in_strata(plots.units, plots.pools, by_date, surveys, "change")
    return allowed, levels, [few]


def _level(
    by: str,
    labels: list[str],
    domains: tuple[np.ndarray, np.ndarray],
    area: np.ndarray,
    change: Difference,
    method: np.ndarray,
) -> ChangeLevel:
    """Make a level of columns that are each a sum of their own."""
    columns = change.density.shape[1]
    days = np.where(change.days == 0, np.nan, change.days)
    return ChangeLevel(
        by=by,
        labels=labels,
        domains=domains,
        area_ha=area,
        change=change,
        method=method,
        rate=change.density / days,
        rate_variance=change.variance / days**2,
        scale=np.repeat(np.eye(columns)[:, None], len(labels), axis=1),
        own=np.ones(len(labels), dtype=bool),
    )


def _of_sums(
    samples: tuple[Sample, Sample], plots: Plots, plan: Plan, surveys: tuple[str, str], inventory_name: str
) -> _Made:
    """Change of sums of parts with their own plots each."""
    units, sums, levels = plots.units, plan.sums, []
    for level in sum_levels(samples, plan, units, inventory_name):
        made = level.estimate
        since, until = made.plots
        unused = np.full_like(made.density, np.nan)
        change = Difference(
            made.density, made.variance, unused, made.df, made.days, since, until, made.paired, near=made.near
        )
        kinds = np.where(made.repeated == 1, "paired", np.where(made.repeated == 0, "independent", "partly paired"))
        text = sum_methods(np.char.add(f"{DIFFERENCE}, ", kinds), made, plan, surveys)
        plain = _level(level.by, level.labels, _domains(level.by, samples), level.area_ha, change, text)
        scale, own = _scale(made, sums, whole=level.by == "inventory"), np.asarray(~made.borrowed.any(axis=1))
        levels.append(replace(plain, rate=made.rate, scale=scale, own=own))
        parcels = made
    inside = ~plan.out[sums.pool]
    shown = [label for label, yes in zip(sums.labels(), inside, strict=True) if yes]
    found = [
        few_plots_in_strata(units, shown, [count[:, inside] for count in plan.plots], surveys, "change"),
        pools_left_out(plan, surveys, "change"),
        borrowed_parts(parcels, plan, units, surveys[1], "change"),
    ]
    return plan.allowed, levels, found


def _scale(made: SumEstimate, sums: Sums, *, whole: bool) -> np.ndarray:
    """Return what each part counts in each sum; shape (S, D, K)."""
    known = made.pool_known[:, sums.pool] & ~made.borrowed
    scale = np.concatenate([sums.member[:, None, :] & known, known[None]]).astype(float)
    if whole:  # a pool may speak for a part of the area only
        area = made.area_ha[0]
        share = np.divide(area[:-1], area[-1], out=np.ones(len(area) - 1), where=area[:-1] < area[-1])
        scale[-1] *= share[sums.pool]
    return scale


def _domains(by: str, samples: tuple[Sample, Sample]) -> tuple[np.ndarray, np.ndarray]:
    """Domain of each plot at a level."""
    if by == "inventory":
        return np.zeros_like(samples[0].stratum), np.zeros_like(samples[1].stratum)
    if by == "stratum":
        return samples[0].stratum, samples[1].stratum
    return samples[0].parcel, samples[1].parcel


def _plot_names(plots: Plots, survey: str) -> pd.Series:
    """Names of the plots of a survey, in the order of its sample."""
    return plots.frame["plot"][(plots.survey == survey) & plots.taken()]


def _check_surveys(plots: Plots, since: str, until: str) -> None:
    if since == until:
        raise UserError(f"change from {since!r} to itself", remedy="Name two different surveys.")
    for name in (since, until):
        if not (plots.survey == name).any():
            known = sorted({str(survey) for survey in plots.survey})
            raise UserError(
                f"survey {name!r} has no plots", where="change", remedy=f"Surveys with plots: {', '.join(known)}."
            )


def _levels(
    samples: tuple[Sample, Sample],
    by_date: list[np.ndarray],
    allowed: np.ndarray,
    units: Units,
    inventory_name: str,
    near: bool,
) -> Iterator[tuple[str, list[str], tuple[np.ndarray, np.ndarray], np.ndarray, Difference]]:
    """Level, labels, domains, areas and change of the inventory (if areas allow), the strata and the parcels."""
    pools = allowed.shape[1]
    for by, labels, area in (
        ("inventory", [inventory_name], None),
        ("stratum", units.strata, units.stratum_area_ha),
        ("parcel", units.parcels, units.parcel_area_ha),
    ):
        if by == "inventory" and not units.has_total:
            continue
        domains = _domains(by, samples)
        whole = near and by != "parcel"  # parcels have too few neighbours of their own
        change = difference_of_ratios(samples, domains, len(labels), units.stratum_area_ha, allowed, near=whole)
        if area is None:
            wide = np.where(allowed, units.stratum_area_ha[:, None], 0.0).sum(axis=0, keepdims=True)
        else:
            wide = np.repeat(area[:, None], pools, axis=1)
        if by == "stratum":
            change = replace(change, since=by_date[0].astype(np.int64), until=by_date[1].astype(np.int64))
        yield by, labels, domains, wide, change


def _rows(level: ChangeLevel, surveys: tuple[str, str], pools: list[str], confidence: float) -> pd.DataFrame:
    """Lay the change of one level out as rows, units before pools."""
    change, area, units = level.change, level.area_ha, len(level.labels)
    se = np.sqrt(change.variance)
    total_se = stock_error(se, change.density, area, level.area_se)
    half = t_half_width(total_se, change.df, confidence)
    years = change.days / DAYS_PER_YEAR
    yearly = level.rate * DAYS_PER_YEAR
    columns = {
        "area_ha": area,
        "plots_paired": change.paired,
        "plots_since": change.since,
        "plots_until": change.until,
        "years": years,
        "change_t_c": change.density * area,
        "change_se": total_se,
        "change_low": change.density * area - half,
        "change_high": change.density * area + half,
        "change_t_c_yr": yearly * area,
        "change_t_c_ha_yr": yearly,
        "change_t_c_ha_yr_se": np.sqrt(level.rate_variance) * DAYS_PER_YEAR,
        "co2_t_yr": 0.0 - CARBON_TO_CO2 * yearly * area,
    }
    return pd.DataFrame(
        {
            "by": level.by,
            "unit": np.repeat(np.array(level.labels, dtype=object), len(pools)),
            "since": surveys[0],
            "until": surveys[1],
            "pool": np.tile(np.array(pools, dtype=object), units),
            **{name: values.ravel() for name, values in columns.items()},
            "method": level.method.ravel(),
        }
    ).astype({name: "str" for name in ("by", "unit", "since", "until", "pool", "method")})


def _findings(levels: list[ChangeLevel], units: Units, names: list[str], since: str, until: str) -> list[pd.DataFrame]:
    found = []
    for level in levels:
        found.append(zero_variance(level.by, level.labels, names, level.change.variance, until, "change"))
        found.append(missing_dates(level.by, level.labels, level.change, since, until))
    parcels = levels[-1].change
    found.append(few_plots_in_parcels(units, names, np.isfinite(parcels.density), until, "change"))
    found.append(single_pairs(levels[-2].labels, levels[-2].change, since, until))
    return found
