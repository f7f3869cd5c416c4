"""Trend of carbon stocks over three or more surveys."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.constants import CARBON_TO_CO2, DAYS_PER_YEAR
from landcarbon.errors import UserError
from landcarbon.estimate.interval import check_confidence, satterthwaite, t_half_width
from landcarbon.estimate.notes import name_list
from landcarbon.estimate.sums import read_sums
from landcarbon.estimate.tables import ALL, Plots, Units, pool_list, read_plots
from landcarbon.estimate.trend_lines import FEWEST, Line, TrendPlan, plan_trend, trend_lines
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["TREND_COLUMNS", "estimate_trend"]

TREND_COLUMNS = [
    "by",
    "unit",
    "pool",
    "area_ha",
    "surveys",
    "since",
    "until",
    "years",
    "slope_t_c_yr",
    "slope_se",
    "slope_low",
    "slope_high",
    "slope_t_c_ha_yr",
    "slope_t_c_ha_yr_se",
    "df",
    "lack_of_fit",
    "co2_t_yr",
    "method",
]

_TEXT = ("by", "unit", "pool", "since", "until", "method")


@dataclass(frozen=True)
class _Level:
    """Trend of one level; ``area_ha`` has the shape of the slopes."""

    by: str
    labels: list[str]
    area_ha: np.ndarray
    line: Line


def estimate_trend(
    plot_pools: pd.DataFrame,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None,
    surveys: Sequence[str],
    *,
    pools: Sequence[str],
    confidence: float,
    inventory_name: str,
    sums: Mapping[str, Sequence[str]] | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Estimate the yearly change as the slope of a straight line through the means of all surveys.

    Parameters
    ----------
    plot_pools : DataFrame
        One row per visited plot and survey, as for stocks [t C/ha].
    strata : DataFrame
        stratum, area_ha [ha] (NaN if unknown).
    parcels : DataFrame or None
        parcel, area_ha [ha]; the same at all dates.
    surveys : sequence of str
        Three or more, in the order of time.
    pools : sequence of str
        Pools counted; ``all`` is the sum of those that have a trend.
    confidence : float
        Of the intervals, for example 0.95.
    inventory_name : str
        Unit of the inventory row.
    sums : mapping, optional
        Columns that make up each pool, as for stocks.

    Returns
    -------
    trend : DataFrame
        Columns ``TREND_COLUMNS``. Slopes in t C/yr and t C/ha/yr; ``lack_of_fit`` is the probability of survey means as
        far from a straight line, were it straight; ``co2_t_yr`` has the sign of greenhouse-gas inventories.
    findings : DataFrame
        Pools and units without a trend, and lines that are not straight.

    Raises
    ------
    UserError
        If there are fewer than three surveys, one of them twice or without plots, or ``confidence`` is out of range.

    Notes
    -----
    Each stratum has a line through its own means at its own mean visit dates; the inventory is the sum of the strata.
    Surveys are weighed by generalised least squares with the covariances of the survey means of the whole, alike for
    all units and pools with the same surveys, so that pools and strata add up. See ``docs/estimation.md``.
    """
    check_confidence(confidence)
    names = [str(name) for name in surveys]
    counted = [name for name in pool_list(pools) if name != ALL]
    chosen = read_sums({name: [name] for name in counted} if sums is None else sums, counted)
    plots = read_plots(plot_pools, strata, parcels, pools, parts=chosen.parts)
    _check_surveys(plots, names)
    plan = plan_trend(tuple(plots.sample(name) for name in names), chosen, plots.units.stratum_area_ha)
    levels = _levels(plan, plots.units, inventory_name)
    rows = [_rows(level, plan, names, confidence) for level in levels if level.labels]
    found = [_pools_left_out(plan, names), *(_not_estimable(level, names) for level in levels)]
    found += [_not_straight(level, chosen.names, confidence) for level in levels]
    trend = pd.concat(rows, ignore_index=True)[TREND_COLUMNS] if rows else pd.DataFrame(columns=TREND_COLUMNS)
    return trend, join_findings(found)


def _check_surveys(plots: Plots, names: list[str]) -> None:
    if len(names) < FEWEST:
        raise UserError(f"a trend needs {FEWEST} surveys, given: {', '.join(names)}", where="trend")
    for name in names:
        if names.count(name) > 1:
            raise UserError(f"survey {name!r} is given twice", where="trend", remedy="Name each survey once.")
        if not (plots.survey == name).any():
            raise UserError(
                f"survey {name!r} has no plots",
                where="trend",
                remedy="Leave it out, or see why its plots do not count.",
            )


def _levels(plan: TrendPlan, units: Units, inventory_name: str) -> list[_Level]:
    number = len(plan.sums.names)
    strata = trend_lines(plan, tuple(sample.stratum for sample in plan.samples), len(units.strata))
    area = np.repeat(units.stratum_area_ha[:, None], number, axis=1)
    levels = [_Level("stratum", units.strata, area, strata)]
    if units.has_total:
        levels.insert(0, _whole(plan, strata, area, inventory_name))
    domains = tuple(sample.parcel for sample in plan.samples)
    if units.parcels:
        area = np.repeat(units.parcel_area_ha[:, None], number, axis=1)
        levels.append(_Level("parcel", units.parcels, area, trend_lines(plan, domains, len(units.parcels), parts=True)))
    return levels


def _whole(plan: TrendPlan, strata: Line, area_ha: np.ndarray, name: str) -> _Level:
    """Sum of the lines of the strata, over the area of those that have one."""
    known = np.isfinite(strata.slope)
    area = np.where(known, area_ha, 0.0)
    total = area.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(known, area / total, 0.0)
    if len(area_ha) == 1:  # the area of a single stratum need not be known
        share = known.astype(float)
    # ``all`` is stated for the strata that have a trend of some pool; a pool may be missing from some of them
    variance = share**2 * np.where(known, strata.variance, 0.0)
    codes = np.zeros(len(area_ha), dtype=np.int64)
    some = known.any(axis=0)
    day = np.einsum("h,ht->t", share[:, -1], np.where(known[:, -1:], strata.day, 0.0))[None]
    used = (strata.surveys & known[:, None]).any(axis=0)[None]
    alike = ((strata.surveys == used) | ~known[:, None]).all(axis=(0, 1))
    line = Line(
        slope=np.where(some, (share * np.where(known, strata.slope, 0.0)).sum(axis=0), np.nan)[None],
        variance=np.where(some, variance.sum(axis=0), np.nan)[None],
        df=satterthwaite(variance, np.where(known, np.nan_to_num(strata.df), 0.0), codes, 1),
        mean=np.einsum("hs,hts->ts", share, strata.mean)[None],
        covariance=np.einsum("hs,hstu->stu", share**2, strata.covariance)[None],
        known=np.where(alike, np.where(known, strata.known, 0.0).sum(axis=0), 0.0)[None],
        surveys=used,
        day=day,
    )
    return _Level("inventory", [name], np.where(some, total, np.nan)[None], line)


def _rows(level: _Level, plan: TrendPlan, names: list[str], confidence: float) -> pd.DataFrame:
    """Lay the trend of one level out as rows, units before pools."""
    line, area, pools = level.line, level.area_ha, plan.sums.names
    se = np.sqrt(line.variance)
    half = t_half_width(se, line.df, confidence)
    count, known = line.surveys.sum(axis=1), np.isfinite(line.slope)
    first, last = np.argmax(line.surveys, axis=1), len(names) - 1 - np.argmax(line.surveys[:, ::-1], axis=1)
    rows = np.arange(len(area))[:, None]
    label = np.array([*names, ""], dtype=object)
    columns = {
        "area_ha": area,
        "surveys": np.where(known, count, 0),
        "since": label[np.where(known, first, -1)],
        "until": label[np.where(known, last, -1)],
        "years": np.where(known, line.day[rows, last] - line.day[rows, first], np.nan) / DAYS_PER_YEAR,
        "slope_t_c_yr": line.slope * area,
        "slope_se": se * area,
        "slope_low": (line.slope - half) * area,
        "slope_high": (line.slope + half) * area,
        "slope_t_c_ha_yr": line.slope,
        "slope_t_c_ha_yr_se": se,
        "df": line.df,
        "lack_of_fit": line.misfit(),
        "co2_t_yr": 0.0 - CARBON_TO_CO2 * line.slope * area,
    }
    return pd.DataFrame(
        {
            "by": level.by,
            "unit": np.repeat(np.array(level.labels, dtype=object), len(pools)),
            "pool": np.tile(np.array(pools, dtype=object), len(area)),
            **{name: values.ravel() for name, values in columns.items()},
            "method": _methods(level, plan, names).ravel(),
        }
    ).astype({name: "str" for name in _TEXT})


def _methods(level: _Level, plan: TrendPlan, names: list[str]) -> np.ndarray:
    """Say how each slope came about, or why there is none."""
    pools, used = plan.sums.pools, level.line.surveys
    general = np.append(plan.general, plan.general.any())
    kind = np.where(general, "generalised least squares", "least squares")
    known = np.isfinite(level.line.slope)
    text = np.full(known.shape, f"not estimable: fewer than {FEWEST} surveys with two dated plots", dtype=object)
    for lacking in np.flatnonzero(plan.surveys.sum(axis=0) < FEWEST):
        text[:, lacking] = f"not estimable: measured at {int(plan.surveys[:, lacking].sum())} of {len(names)} surveys"
    codes, place = np.unique(np.swapaxes(used, 1, 2).reshape(-1, len(names)), axis=0, return_inverse=True)
    spoken = np.array([", ".join(np.array(names, dtype=object)[row]) for row in codes], dtype=object)
    told = np.char.add(np.char.add(kind.astype(str), " over "), spoken[place.ravel()].reshape(known.shape).astype(str))
    text[known] = told.astype(object)[known]
    for pool, name in enumerate(pools):
        text[known[:, -1] & ~known[:, pool], -1] += f"; without {name}"
        part = known[:, -1] & known[:, pool] & (level.area_ha[:, pool] < level.area_ha[:, -1])
        text[part, -1] += f"; {name} on part of the area"
    return text


def _pools_left_out(plan: TrendPlan, names: list[str]) -> pd.DataFrame:
    """Report pools that were measured at too few surveys."""
    found = []
    for pool in np.flatnonzero(plan.surveys.sum(axis=0) < FEWEST):
        name, at = plan.sums.pools[pool], [n for n, yes in zip(names, plan.surveys[:, pool], strict=True) if yes]
        found.append(
            make_findings(
                "pool without a trend",
                severity="note",
                table="trend",
                column=name,
                value=name,
                survey=names[-1],
                message=(
                    f"{name} was measured at {len(at)} of {len(names)} surveys{f' ({name_list(at)})' if at else ''}; a "
                    f"trend needs {FEWEST}. It is not in the trend of {ALL!r}."
                ),
                remedy="Measure it at every survey.",
            )
        )
    return join_findings(found)


def _not_estimable(level: _Level, names: list[str]) -> pd.DataFrame:
    """Report units without a trend, with their area."""
    lacking = ~np.isfinite(level.line.slope[:, -1])
    if not lacking.any():
        return empty_findings()
    units = [level.labels[unit] for unit in np.flatnonzero(lacking)]
    area = float(level.area_ha[lacking, -1].sum())
    size = f" ({area:,.2f} ha)" if np.isfinite(area) else ""
    return make_findings(
        "unit without a trend",
        severity="note" if level.by == "parcel" else "warning",
        table="trend",
        column=level.by,
        value=name_list(units),
        survey=names[-1],
        message=(
            f"{len(units)} of {len(level.labels)} {level.by} row(s){size} have no trend, for want of "
            f"{FEWEST} surveys with two dated plots each: {name_list(units)}."
            + (" They are missing from the trend of the inventory." if level.by == "stratum" else "")
        ),
        remedy="Read them from the changes between two surveys.",
    )


def _not_straight(level: _Level, pools: list[str], confidence: float) -> pd.DataFrame:
    """Report lines that the survey means do not follow."""
    with np.errstate(invalid="ignore"):
        bent = level.line.misfit() < 1.0 - confidence
    found = []
    for pool in np.flatnonzero(bent.any(axis=0)):
        units = [level.labels[unit] for unit in np.flatnonzero(bent[:, pool])]
        found.append(
            make_findings(
                "trend not straight",
                severity="note",
                table="trend",
                column=pools[pool],
                value=name_list(units),
                message=(
                    f"The survey means of {pools[pool]} of {level.by} {name_list(units)} lie further from a straight "
                    f"line than sampling explains (lack_of_fit below {1.0 - confidence:.2g}): the slope is an average "
                    "over the time, not a rate that held throughout."
                ),
                remedy="Read the changes between the surveys one by one.",
            )
        )
    return join_findings(found)
