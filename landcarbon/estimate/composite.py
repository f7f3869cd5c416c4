"""Composite figures of parcels in the tables of stocks and change.

Direct figures of parcels with few plots are drawn to a model of all parcels and brought to the total of their stratum.
Symbols and sources: ``docs/estimation.md``.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.constants import CARBON_TO_CO2, DAYS_PER_YEAR
from landcarbon.errors import UserError
from landcarbon.estimate.composite_core import Composed, Published, compose, group_of
from landcarbon.estimate.composite_detail import Detail, detail_of, join_details
from landcarbon.estimate.composite_plots import Evidence, Places, plot_evidence
from landcarbon.estimate.composite_text import REPLACED_RULES, composite_findings, composite_methods
from landcarbon.estimate.groups import label_codes
from landcarbon.estimate.interval import check_confidence, check_kind, df_of_interval, limits, t_half_width
from landcarbon.estimate.tables import ALL
from landcarbon.findings import join_findings

__all__ = ["REPLACED_RULES", "Detail", "composite_change", "composite_parcels"]


@dataclass(frozen=True)
class _Block:
    """Rows of one survey, or of one change. Positions in the table; -1 where there is no row.

    ``parcel`` has shape (P, J + 1), ``group`` (G, J + 1); a last group holds the row of the inventory.
    """

    surveys: tuple[str, ...]
    pools: list[str]
    parcel: np.ndarray
    group: np.ndarray

    def take(self, column: pd.Series, rows: np.ndarray) -> np.ndarray:
        """Values of a column; NaN, or an empty text, where there is no row."""
        values = column.to_numpy(dtype=object if column.dtype == "str" else float)
        none = "" if column.dtype == "str" else np.nan
        return np.where(rows >= 0, values[np.maximum(rows, 0)], none) if len(values) else np.full(rows.shape, none)


def composite_parcels(
    stocks: pd.DataFrame,
    parcels: pd.DataFrame | None,
    plot_parts: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    *,
    covariates: pd.DataFrame | None = None,
    offsets: pd.DataFrame | None = None,
    confidence: float,
    interval: str = "t",
) -> tuple[pd.DataFrame, Detail, pd.DataFrame]:
    """Replace the stocks of parcels by composite figures.

    Parameters
    ----------
    stocks : DataFrame
        Columns ``STOCK_COLUMNS``, with direct figures of the parcels.
    parcels : DataFrame or None
        parcel, stratum (may be empty, or not one of the strata), area_ha [ha].
    plot_parts : DataFrame
        One row per plot and survey with a column per part of a pool [t C/ha].
    sums : mapping
        Columns of each pool.
    covariates : DataFrame, optional
        survey, parcel and a column for each raster with its mean over the parcel; NaN where it has none.
    offsets : DataFrame, optional
        survey, by, unit, part and offset [t C/ha]: what to add to the plots of a parcel where ``plot_parts`` holds
        values adjusted by rasters.
    confidence : float
        Of the intervals.
    interval : {"t", "log"}
        Kind of interval.

    Returns
    -------
    stocks : DataFrame
        As given, but for the rows of parcels. Where parcels fill their stratum they add up to it, pool by pool; ``all``
        is the sum of the pools. A figure without an error (a default factor) keeps NaN there.
    detail : Detail
        Weight of the plots, model part and adjustment of each figure; and the models.
    findings : DataFrame
        The rules named in ``REPLACED_RULES`` no longer hold for these figures.

    Raises
    ------
    UserError
        If a column is missing or ``confidence`` is out of range.
    """
    check_confidence(confidence)
    check_kind(interval)
    if parcels is None or not (stocks["by"] == "parcel").any():
        return stocks, join_details([]), join_findings([])
    places = _places(stocks, parcels)
    columns = {name: stocks[name].to_numpy(dtype=float, copy=True) for name in _STOCK_VALUES}
    method = stocks["method"].to_numpy(dtype=object, copy=True)
    details, found = [], []
    for block in _blocks(stocks, ("survey",), places):
        evidence = plot_evidence(plot_parts, sums, block.surveys, places, block.pools)
        evidence = _shifted(evidence, offsets, sums, block, places)
        published = _published(block, stocks, stocks["density_t_c_ha"], stocks["density_se"])
        values, names = _covariates(covariates, block.surveys, places)
        made = compose(published, evidence, places, values, names, positive=True)
        _write_stocks(columns, block, made, places, (confidence, interval))
        method[block.parcel] = _methods(made, evidence, places, block, stocks)
        details.append(detail_of(made, evidence, places, block.pools, {"survey": block.surveys[0]}))
        found.append(composite_findings(made, evidence, places, block.pools, survey=block.surveys[0], table="estimate"))
    table = stocks.assign(**columns, method=pd.array(method, dtype="str"))
    return table, join_details(details), join_findings(found)


def composite_change(
    change: pd.DataFrame,
    parcels: pd.DataFrame | None,
    plot_parts: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    *,
    covariates: pd.DataFrame | None = None,
    offsets: pd.DataFrame | None = None,
    confidence: float,
) -> tuple[pd.DataFrame, Detail, pd.DataFrame]:
    """Replace the change of parcels by composite figures, from a model of the change itself.

    Parameters
    ----------
    change : DataFrame
        Columns ``CHANGE_COLUMNS``, of one or several pairs of surveys, with direct figures of the parcels.
    parcels, plot_parts, sums, confidence
        As for :func:`composite_parcels`.
    covariates, offsets : DataFrame, optional
        As for :func:`composite_parcels`; the change of each raster counts.

    Returns
    -------
    change, detail, findings
        As for :func:`composite_parcels`. Change is not the difference of composite stocks. Rates are the change by the
        elapsed time of the row, or of the stratum where the parcel has none.

    Raises
    ------
    UserError
        If a column is missing or ``confidence`` is out of range.
    """
    check_confidence(confidence)
    if parcels is None or not (change["by"] == "parcel").any():
        return change, join_details([]), join_findings([])
    places = _places(change, parcels)
    columns = {name: change[name].to_numpy(dtype=float, copy=True) for name in _CHANGE_VALUES}
    method = change["method"].to_numpy(dtype=object, copy=True)
    details, found = [], []
    density, se = _change_density(change)
    for block in _blocks(change, ("since", "until"), places):
        evidence = plot_evidence(plot_parts, sums, block.surveys, places, block.pools)
        evidence = _shifted(evidence, offsets, sums, block, places)
        published = _published(block, change, density, se, confidence)
        values, names = _covariates(covariates, block.surveys, places)
        made = compose(published, evidence, places, values, names, positive=False)
        _write_change(columns, block, made, places, evidence.days, confidence)
        method[block.parcel] = _methods(made, evidence, places, block, change)
        keys = dict(zip(("since", "until"), block.surveys, strict=True))
        details.append(detail_of(made, evidence, places, block.pools, keys))
        found.append(
            composite_findings(made, evidence, places, block.pools, survey=" to ".join(block.surveys), table="change")
        )
    table = change.assign(**columns, method=pd.array(method, dtype="str"))
    return table, join_details(details), join_findings(found)


_STOCK_VALUES = [
    "density_t_c_ha",
    "density_se",
    "density_low",
    "density_high",
    "stock_t_c",
    "stock_se",
    "stock_low",
    "stock_high",
    "df",
]
_CHANGE_VALUES = [
    "years",
    "change_t_c",
    "change_se",
    "change_low",
    "change_high",
    "change_t_c_yr",
    "change_t_c_ha_yr",
    "change_t_c_ha_yr_se",
    "co2_t_yr",
]


def _places(table: pd.DataFrame, parcels: pd.DataFrame) -> Places:
    lacking = [name for name in ("parcel", "area_ha") if name not in parcels]
    if lacking:
        raise UserError(f"the parcels have no column {lacking[0]}", where="parcel table", remedy="Give one.")
    names = [str(name) for name in table.loc[table["by"] == "parcel", "unit"].unique()]
    rows = table[table["by"] == "stratum"].drop_duplicates("unit")
    strata = [str(name) for name in rows["unit"]]
    given = parcels.assign(parcel=parcels["parcel"].astype("str")).set_index("parcel").reindex(names)
    code = label_codes(given["stratum"].astype("str"), strata) if "stratum" in given else np.full(len(names), -1)
    return Places(
        parcels=names,
        strata=strata,
        stratum=np.where(code >= 0, code, len(strata)).astype(np.int64),
        area_ha=given["area_ha"].to_numpy(dtype=float),
        stratum_area_ha=rows["area_ha"].to_numpy(dtype=float),
    )


def _blocks(table: pd.DataFrame, keys: tuple[str, ...], places: Places) -> list[_Block]:
    """Find the rows of each survey, or pair of surveys, in the order they come."""
    by = table["by"].to_numpy(dtype=object)
    unit = table["unit"].to_numpy(dtype=object)
    labels = table[list(keys)].astype("str")
    codes = labels.groupby(list(keys), sort=False).ngroup().to_numpy()
    found = []
    for code in range(int(codes.max(initial=-1)) + 1):
        rows = np.flatnonzero(codes == code)
        pools = [str(name) for name in pd.unique(table["pool"].iloc[rows]) if name != ALL]
        column = pd.Index([*pools, ALL]).get_indexer(pd.Index(table["pool"].iloc[rows]))
        parcel = np.full((len(places.parcels), len(pools) + 1), -1)
        group = np.full((len(places.strata) + 1, len(pools) + 1), -1)
        for level, target, names in (("parcel", parcel, places.parcels), ("stratum", group, places.strata)):
            mine = by[rows] == level
            place = pd.Index(names, dtype=object).get_indexer(pd.Index(unit[rows[mine]], dtype=object))
            target[place, column[mine]] = rows[mine]
        whole = by[rows] == "inventory"
        group[-1, column[whole]] = rows[whole]
        found.append(_Block(tuple(labels.iloc[rows[0]]), pools, parcel, group))
    return found


def _published(
    block: _Block, table: pd.DataFrame, density: pd.Series, se: pd.Series, confidence: float | None = None
) -> Published:
    stocks = "stock_t_c" in table
    level, spread = block.take(density, block.group), block.take(se, block.group)
    if stocks:
        df = block.take(table["df"], block.group)
        plots = block.take(table["plots"].astype(float), block.group)
    else:
        df = _df_of_change(block, table, confidence or 0.0)
        plots = np.minimum(*(block.take(table[f"plots_{at}"].astype(float), block.group) for at in ("since", "until")))
    return Published(
        density=block.take(density, block.parcel),
        variance=block.take(se, block.parcel) ** 2,
        level=level,
        level_variance=spread**2,
        level_df=df,
        total=block.take(table["stock_t_c" if stocks else "change_t_c"], block.group),
        area_ha=block.take(table["area_ha"], block.group),
        plots=np.nan_to_num(plots),
    )


def _df_of_change(block: _Block, table: pd.DataFrame, confidence: float) -> np.ndarray:
    half = block.take(table["change_high"] - table["change_t_c"], block.group)
    return df_of_interval(half, block.take(table["change_se"], block.group), confidence)


def _change_density(change: pd.DataFrame) -> tuple[pd.Series, pd.Series]:
    """Change per hectare and its standard error, also where the area is zero or unknown [t C/ha]."""
    area = change["area_ha"].where(change["area_ha"] > 0)
    years = change["years"].abs()
    density = (change["change_t_c"] / area).fillna(change["change_t_c_ha_yr"] * change["years"])
    return density, (change["change_se"] / area).fillna(change["change_t_c_ha_yr_se"] * years)


def _covariates(
    covariates: pd.DataFrame | None, surveys: tuple[str, ...], places: Places
) -> tuple[np.ndarray, list[str]]:
    """Raster means by parcel, or their change; NaN where one lacks."""
    if covariates is None:
        return np.zeros((len(places.parcels), 0)), []
    lacking = [name for name in ("survey", "parcel") if name not in covariates]
    if lacking:
        raise UserError(f"the raster means have no column {lacking[0]}", where="raster means", remedy="Give one.")
    names = [str(name) for name in covariates.columns if name not in ("survey", "parcel")]
    found = []
    for survey in surveys:
        rows = covariates[covariates["survey"].astype("str") == survey]
        rows = rows.assign(parcel=rows["parcel"].astype("str")).drop_duplicates("parcel").set_index("parcel")
        found.append(rows.reindex(places.parcels)[names].to_numpy(dtype=float))
    values = found[0] if len(found) == 1 else found[1] - found[0]
    some = np.isfinite(values).any(axis=0)
    return values[:, some], [name for name, yes in zip(names, some, strict=True) if yes]


def _shifted(
    evidence: Evidence,
    offsets: pd.DataFrame | None,
    sums: Mapping[str, Sequence[str]],
    block: _Block,
    places: Places,
) -> Evidence:
    """Add what rasters tell of each parcel to the means of its plots, where these are adjusted values."""
    if offsets is None or not len(offsets):
        return evidence
    pool_of = {part: at for at, pool in enumerate(block.pools) for part in sums.get(pool, [pool])}
    shift = np.zeros_like(evidence.density)
    for sign, survey in zip((-1.0, 1.0)[-len(block.surveys) :], block.surveys, strict=True):
        rows = offsets[(offsets["survey"].astype("str") == survey) & (offsets["by"] == "parcel")]
        parcel = label_codes(rows["unit"], places.parcels)
        pool = rows["part"].astype("str").map(pool_of).fillna(-1).to_numpy(dtype=np.int64)
        known = (parcel >= 0) & (pool >= 0)
        np.add.at(shift, (parcel[known], pool[known]), sign * rows["offset"].to_numpy(dtype=float)[known])
    return replace(evidence, density=evidence.density + shift)


def _methods(made: Composed, evidence: Evidence, places: Places, block: _Block, table: pd.DataFrame) -> np.ndarray:
    return composite_methods(
        made, evidence, places, block.take(table["method"], block.parcel), block.take(table["method"], block.group)
    )


def _write_stocks(
    columns: dict[str, np.ndarray], block: _Block, made: Composed, places: Places, interval: tuple[float, str]
) -> None:
    area = places.area_ha[:, None]
    se = np.sqrt(made.mse)
    found = limits(made.value, se, made.df, confidence=interval[0], kind=interval[1])
    values = {
        "density_t_c_ha": made.value,
        "density_se": se,
        "density_low": found.low,
        "density_high": found.high,
        "df": np.where(np.isfinite(se), made.df, np.nan),
    }
    for name in ("t_c", "se", "low", "high"):
        values[f"stock_{name}"] = values["density_t_c_ha" if name == "t_c" else f"density_{name}"] * area
    for name, value in values.items():
        columns[name][block.parcel] = value


def _write_change(
    columns: dict[str, np.ndarray],
    block: _Block,
    made: Composed,
    places: Places,
    days: np.ndarray,
    confidence: float,
) -> None:
    area, group = places.area_ha[:, None], group_of(places)
    se = np.sqrt(made.mse)
    half = t_half_width(se, made.df, confidence)
    known = np.isfinite(made.value)
    own = columns["years"][block.parcel]
    level = np.where(block.group >= 0, columns["years"][block.group], np.nan)[group]
    level = np.where(np.isfinite(level), level, days[:, None] / DAYS_PER_YEAR)
    years = np.where(known & ~np.isfinite(own), level, own)
    with np.errstate(divide="ignore", invalid="ignore"):
        rate = made.value / np.where(years == 0, np.nan, years)
        included = made.included[group]
        rate[:, -1] = np.where(included, rate[:, :-1], 0.0).sum(axis=1)
        rate[:, -1] = np.where(known[:, -1], rate[:, -1], np.nan)
        rate_se = se / np.where(years == 0, np.nan, np.abs(years))
    values = {
        "years": years,
        "change_t_c": made.value * area,
        "change_se": se * area,
        "change_low": (made.value - half) * area,
        "change_high": (made.value + half) * area,
        "change_t_c_yr": rate * area,
        "change_t_c_ha_yr": rate,
        "change_t_c_ha_yr_se": rate_se,
        "co2_t_yr": 0.0 - CARBON_TO_CO2 * rate * area,
    }
    for name, value in values.items():
        columns[name][block.parcel] = value
