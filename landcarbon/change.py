"""Change of carbon stocks between two surveys, on the area that is estimable at both."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.constants import CARBON_TO_CO2, DAYS_PER_YEAR
from landcarbon.errors import UserError
from landcarbon.estimate.combine import plan_sums
from landcarbon.estimate.difference import Difference, difference_of_ratios
from landcarbon.estimate.interval import check_confidence, t_half_width
from landcarbon.estimate.notes import few_plots_in_parcels, few_plots_in_strata, name_list, zero_variance
from landcarbon.estimate.ratio import MIN_PLOTS, Sample, counts
from landcarbon.estimate.sum_levels import sum_levels
from landcarbon.estimate.sum_notes import borrowed_parts, pools_left_out, sum_methods
from landcarbon.estimate.sums import Sums, read_sums
from landcarbon.estimate.tables import Plots, Units, read_plots
from landcarbon.findings import empty_findings, join_findings, make_findings

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

_METHOD = "difference of ratio means"
_ROUNDING = 1e-12  # a standard error below this share of the largest density is rounding noise


@dataclass(frozen=True)
class _Level:
    """Change of one level; ``area_ha`` has shape (units, pools), as ``method`` and ``rate`` [t C/ha/d]."""

    by: str
    labels: list[str]
    area_ha: np.ndarray
    change: Difference
    method: np.ndarray
    rate: np.ndarray


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
        ``confidence`` is out of range.

    Notes
    -----
    Formulas and sources: ``docs/estimation.md``.
    """
    check_confidence(confidence)
    since, until = str(since), str(until)
    chosen = None if sums is None else read_sums(sums, pools)
    plots = read_plots(plot_pools, strata, parcels, pools, parts=None if chosen is None else chosen.parts)
    _check_surveys(plots, since, until)
    samples = (plots.sample(since), plots.sample(until))
    if chosen is None:
        levels, found = _of_columns(samples, plots, (since, until), inventory_name)
    else:
        levels, found = _of_sums(samples, plots, chosen, (since, until), inventory_name)
    names = plots.pools if chosen is None else chosen.names
    rows = [_rows(level, (since, until), names, confidence) for level in levels if level.labels]
    change = pd.concat(rows, ignore_index=True)[CHANGE_COLUMNS] if rows else pd.DataFrame(columns=CHANGE_COLUMNS)
    return change, join_findings(found)


def _of_columns(
    samples: tuple[Sample, Sample], plots: Plots, surveys: tuple[str, str], inventory_name: str
) -> tuple[list[_Level], list[pd.DataFrame]]:
    """Change of each column of the plot table."""
    n_strata = len(plots.units.strata)
    by_date = [counts(sample, n_strata) for sample in samples]
    allowed = np.logical_and.reduce([count >= MIN_PLOTS for count in by_date])
    levels = [
        _Level(by, labels, area, change, _methods(change, surveys), _rate(change))
        for by, labels, area, change in _levels(samples, by_date, allowed, plots.units, inventory_name)
    ]
    levels = [_without_noise(level, samples) for level in levels]
    few = few_plots_in_strata(plots.units, plots.pools, by_date, surveys, "change")
    return levels, [few, *_findings(levels, plots.units, plots.pools, *surveys)]


def _of_sums(
    samples: tuple[Sample, Sample], plots: Plots, sums: Sums, surveys: tuple[str, str], inventory_name: str
) -> tuple[list[_Level], list[pd.DataFrame]]:
    """Change of sums of parts with their own plots each."""
    units = plots.units
    plan = plan_sums(samples, sums, units.stratum_area_ha)
    levels = []
    for level in sum_levels(samples, plan, units, inventory_name):
        made = level.estimate
        since, until = made.plots
        unused = np.full_like(made.density, np.nan)
        change = Difference(made.density, made.variance, unused, made.df, made.days, since, until, made.paired)
        kinds = np.where(made.repeated == 1, "paired", np.where(made.repeated == 0, "independent", "partly paired"))
        text = sum_methods(np.char.add(f"{_METHOD}, ", kinds), made, plan, surveys)
        levels.append(_without_noise(_Level(level.by, level.labels, level.area_ha, change, text, made.rate), samples))
        parcels = made
    inside = ~plan.out[sums.pool]
    shown = [label for label, yes in zip(sums.labels(), inside, strict=True) if yes]
    found = [
        few_plots_in_strata(units, shown, [count[:, inside] for count in plan.plots], surveys, "change"),
        *_findings(levels, units, sums.names, *surveys),
        pools_left_out(plan, surveys, "change"),
        borrowed_parts(parcels, plan, units, surveys[1], "change"),
    ]
    return levels, found


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
) -> list[tuple[str, list[str], np.ndarray, Difference]]:
    """Level, labels, areas and change of the inventory (if areas allow), the strata and the parcels."""
    strata, pools = allowed.shape

    def difference(domains: tuple[np.ndarray, np.ndarray], number: int) -> Difference:
        return difference_of_ratios(samples, domains, number, units.stratum_area_ha, allowed)

    levels = []
    if units.has_total:
        area = np.where(allowed, units.stratum_area_ha[:, None], 0.0).sum(axis=0, keepdims=True)
        whole = (np.zeros_like(samples[0].stratum), np.zeros_like(samples[1].stratum))
        levels.append(("inventory", [inventory_name], area, difference(whole, 1)))
    area = np.repeat(units.stratum_area_ha[:, None], pools, axis=1)
    change = difference((samples[0].stratum, samples[1].stratum), strata)
    change = replace(change, since=by_date[0].astype(np.int64), until=by_date[1].astype(np.int64))
    levels.append(("stratum", units.strata, area, change))
    area = np.repeat(units.parcel_area_ha[:, None], pools, axis=1)
    change = difference((samples[0].parcel, samples[1].parcel), len(units.parcels))
    levels.append(("parcel", units.parcels, area, change))
    return levels


def _without_noise(level: _Level, samples: tuple[Sample, Sample]) -> _Level:
    """Set variances to zero that are rounding noise only: every repeated plot changed by the same amount."""
    largest = max((float(np.abs(sample.value).max(initial=0.0)) for sample in samples), default=0.0)
    variance = np.where(level.change.variance <= (_ROUNDING * largest) ** 2, 0.0, level.change.variance)
    return replace(level, change=replace(level.change, variance=variance))


def _rate(change: Difference) -> np.ndarray:
    """Change by elapsed time [t C/ha/d]; NaN without either."""
    return change.density / np.where(change.days == 0, np.nan, change.days)


def _rows(level: _Level, surveys: tuple[str, str], pools: list[str], confidence: float) -> pd.DataFrame:
    """Lay the change of one level out as rows, units before pools."""
    change, area, units = level.change, level.area_ha, len(level.labels)
    se = np.sqrt(change.variance)
    half = t_half_width(se, change.df, confidence)
    years = change.days / DAYS_PER_YEAR
    span = np.where(years == 0, np.nan, years)
    yearly = level.rate * DAYS_PER_YEAR
    columns = {
        "area_ha": area,
        "plots_paired": change.paired,
        "plots_since": change.since,
        "plots_until": change.until,
        "years": years,
        "change_t_c": change.density * area,
        "change_se": se * area,
        "change_low": (change.density - half) * area,
        "change_high": (change.density + half) * area,
        "change_t_c_yr": yearly * area,
        "change_t_c_ha_yr": yearly,
        "change_t_c_ha_yr_se": se / np.abs(span),
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


def _methods(change: Difference, surveys: tuple[str, str]) -> np.ndarray:
    """Say for each figure how the plots of the two surveys were joined, or why there is none."""
    since, until, paired = change.since, change.until, change.paired
    complete = (paired == since) & (paired == until)
    kind = np.where(complete, "paired", np.where(paired == 0, "independent", "partly paired"))
    method = np.char.add(f"{_METHOD}, ", kind).astype(object)
    none = ~np.isfinite(change.density)
    few = none & ((since < MIN_PLOTS) | (until < MIN_PLOTS))
    method[none] = "not estimable: area of its strata unknown"
    method[few] = [
        f"not estimable: {first} plot(s) in {surveys[0]}, {second} in {surveys[1]}"
        for first, second in zip(since[few], until[few], strict=True)
    ]
    return method


def _findings(levels: list[_Level], units: Units, names: list[str], since: str, until: str) -> list[pd.DataFrame]:
    found = []
    for level in levels:
        found.append(zero_variance(level.by, level.labels, names, level.change.variance, until, "change"))
        found.append(_missing_dates(level, since, until))
    parcels = levels[-1].change
    found.append(few_plots_in_parcels(units, names, np.isfinite(parcels.density), until, "change"))
    found.append(_single_pairs(levels[-2], since, until))
    return found


def _missing_dates(level: _Level, since: str, until: str) -> pd.DataFrame:
    """Report units whose change has no rate, for want of dates or of elapsed time."""
    known = np.isfinite(level.change.density)
    undated = (known & ~np.isfinite(level.change.days)).any(axis=1)
    at_once = (known & (level.change.days == 0)).any(axis=1)
    found = []
    for which, why, remedy in (
        (undated, "visits without a date", "Give the date of each visit."),
        (at_once, "no time between the visits", "Check the dates of the visits."),
    ):
        names = [level.labels[unit] for unit in np.flatnonzero(which)]
        if names:
            found.append(
                make_findings(
                    "no rate of change",
                    severity="warning",
                    table="change",
                    column="date",
                    value=name_list(names),
                    survey=until,
                    message=(
                        f"Change from {since} to {until} of {len(names)} {level.by} row(s) has no yearly rate, "
                        f"because of {why}: {name_list(names)}."
                    ),
                    remedy=remedy,
                )
            )
    return join_findings(found)


def _single_pairs(strata: _Level, since: str, until: str) -> pd.DataFrame:
    """Report strata where one repeated plot cannot tell how the two dates go together."""
    change = strata.change
    one = (np.isfinite(change.density) & (change.paired == 1)).any(axis=1)
    names = [strata.labels[unit] for unit in np.flatnonzero(one)]
    if not names:
        return empty_findings()
    return make_findings(
        "single repeated plot",
        severity="note",
        table="change",
        column="stratum",
        value=name_list(names),
        survey=until,
        message=(
            f"Only one plot was measured in both {since} and {until} in stratum {name_list(names)}: the two surveys "
            "are taken as independent there, which usually overstates the standard error."
        ),
        remedy="Revisit more of the earlier plots.",
    )
