"""Add what rasters tell of each unit to estimates made from adjusted plot values, and say so in ``method``."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from landcarbon.constants import CARBON_TO_CO2
from landcarbon.estimate.assist import Assisted
from landcarbon.estimate.interval import df_of_interval, limits, t_quantile

__all__ = ["add_change_offsets", "add_offsets", "raise_trend"]

_KEYS = ["by", "unit"]


def add_offsets(
    stocks: pd.DataFrame,
    assisted: Assisted,
    sums: Mapping[str, Sequence[str]],
    *,
    confidence: float,
    kind: str = "t",
    plain: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """Shift stocks that rest on adjusted plot values.

    Parameters
    ----------
    stocks : DataFrame
        ``STOCK_COLUMNS``, estimated from ``Assisted.plot_parts``.
    assisted : Assisted
        Offsets and what belongs to them.
    sums : mapping
        Columns of each pool, and ``all``.
    confidence : float
        Of the intervals.
    kind : str
        "t" or "log", as for ``landcarbon.estimate.interval.limits``.
    plain : DataFrame, optional
        The same rows estimated without rasters. They take the place of parcels for which no raster mean is known;
        needed where ``Assisted.findings`` has the rule "parcel without raster mean".

    Returns
    -------
    DataFrame
        The same rows: density and stock shifted, standard errors raised and degrees of freedom lowered for the fitted
        slopes, limits taken anew, rasters named in ``method``. Rows without offset are left as they are.
    """
    if assisted.offsets.empty or stocks.empty:
        return stocks
    found = _look_up(stocks, _by_pool(assisted.offsets, sums, ["survey"]), [*_KEYS, "survey", "pool"])
    density = stocks["density_t_c_ha"] + _shift_of_all(stocks, found["offset"], ["survey"])
    factor = _worst_of_all(stocks, found["inflation"], ["survey"], "max")
    share = _worst_of_all(stocks, found["df_share"], ["survey"], "min")
    hit = factor.notna() & density.notna()
    se = np.sqrt(stocks["density_se"] ** 2 * factor + _of_points(stocks, assisted, ["survey", "survey"]))
    df = np.maximum(stocks["df"] * share, 1.0)
    made = limits(density, se, df, confidence=confidence, kind=kind)
    low, high = pd.Series(made.low, index=stocks.index), pd.Series(made.high, index=stocks.index)
    area = stocks["area_ha"]
    new = {
        "density_t_c_ha": density,
        "density_se": se,
        "density_low": low,
        "density_high": high,
        "stock_t_c": density * area,
        "stock_se": se * area,
        "stock_low": low * area,
        "stock_high": high * area,
        "df": df,
    }
    text = stocks["method"].astype("str") + _texts(stocks, assisted.report, ["survey"])
    changed = {name: stocks[name].where(~hit, values) for name, values in new.items()}
    made_of = stocks.assign(**changed, method=stocks["method"].where(~hit, text).astype("str"))
    return _plain_parcels(made_of, hit, plain, [*_KEYS, "survey", "pool"])


def add_change_offsets(
    change: pd.DataFrame,
    assisted: Assisted,
    sums: Mapping[str, Sequence[str]],
    *,
    confidence: float,
    plain: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """Shift changes that rest on adjusted plot values: the later offset less the earlier one.

    Parameters
    ----------
    change : DataFrame
        ``CHANGE_COLUMNS``, estimated from ``Assisted.plot_parts``; any pairs of surveys.
    assisted, sums, confidence, plain
        As for :func:`add_offsets`.

    Returns
    -------
    DataFrame
        The same rows, with the larger raise of the two surveys for the standard errors. Only parts that are assisted
        at both surveys are shifted; a part measured at one of them has no change.
    """
    offsets = assisted.offsets
    if offsets.empty or change.empty:
        return change
    pairs = change[["since", "until"]].drop_duplicates()
    columns = ["by", "unit", "part", "survey", "offset", "inflation", "df_share"]
    both = pairs.merge(offsets[columns].rename(columns={"survey": "since"}), on="since").merge(
        offsets[columns].rename(columns={"survey": "until"}),
        on=["until", "by", "unit", "part"],
        suffixes=("_since", "_until"),
    )
    both = both.assign(
        offset=both["offset_until"] - both["offset_since"],
        inflation=both[["inflation_since", "inflation_until"]].max(axis=1),
        df_share=both[["df_share_since", "df_share_until"]].min(axis=1),
    )
    dates = ["since", "until"]
    found = _look_up(change, _by_pool(both, sums, dates), [*_KEYS, *dates, "pool"])
    area = change["area_ha"]
    years = change["years"].where(change["years"] != 0)
    shift = found["offset"].fillna(0.0)
    total = _shift_of_all(change, shift, dates) * area
    yearly = _shift_of_all(change, (shift / years).where(shift != 0, 0.0), dates)
    factor = _worst_of_all(change, found["inflation"], dates, "max")
    share = _worst_of_all(change, found["df_share"], dates, "min")
    of_points = _of_points(change, assisted, dates) * np.where(area.notna(), area, 1.0) ** 2
    before = change["change_se"].where(change["change_se"] > 0)
    factor = factor + (of_points / before**2).fillna(0.0)
    wider = np.sqrt(factor) * _wider_t(change, share, confidence)
    hit = factor.notna() & change["change_t_c"].notna()
    middle = change["change_t_c"]
    rate = change["change_t_c_ha_yr"] + yearly
    new = {
        "change_t_c": middle + total,
        "change_se": change["change_se"] * np.sqrt(factor),
        "change_low": middle + total - (middle - change["change_low"]) * wider,
        "change_high": middle + total + (change["change_high"] - middle) * wider,
        "change_t_c_yr": rate * area,
        "change_t_c_ha_yr": rate,
        "change_t_c_ha_yr_se": change["change_t_c_ha_yr_se"] * np.sqrt(factor),
        "co2_t_yr": 0.0 - CARBON_TO_CO2 * rate * area,
    }
    text = change["method"].astype("str") + _texts(change, assisted.report, dates)
    changed = {name: change[name].where(~hit, values) for name, values in new.items()}
    made = change.assign(**changed, method=change["method"].where(~hit, text).astype("str"))
    return _plain_parcels(made, hit, plain, [*_KEYS, *dates, "pool"])


def raise_trend(trend: pd.DataFrame, offsets: pd.DataFrame) -> pd.DataFrame:
    """Raise the errors of trend lines through adjusted values for the fitted slopes, and name the rasters' part.

    Parameters
    ----------
    trend : DataFrame
        Trend of the inventory and its strata, estimated from ``Assisted.plot_parts``.
    offsets : DataFrame
        ``Assisted.offsets``.

    Returns
    -------
    DataFrame
        Standard errors and intervals widened by the largest raise among the surveys and parts of the unit.
    """
    if trend.empty or offsets.empty:
        return trend
    named = offsets.assign(unit=offsets["unit"].where(offsets["by"] != "inventory", ""))  # there is only one
    most = named.groupby(["by", "unit"])["inflation"].max()
    units = trend["unit"].astype("str").where(trend["by"] != "inventory", "")
    found = most.reindex(pd.MultiIndex.from_arrays([trend["by"].astype("str"), units]))
    factor = np.sqrt(found.fillna(1.0).to_numpy(dtype=float))
    pools = set(offsets["part"].str.split(".").str[0]) | {"all"}
    there = found.notna().to_numpy() & trend["pool"].isin(pools).to_numpy() & trend["slope_t_c_yr"].notna().to_numpy()
    factor = np.where(there, factor, 1.0)
    slope = trend["slope_t_c_yr"]
    return trend.assign(
        slope_se=trend["slope_se"] * factor,
        slope_low=slope - (slope - trend["slope_low"]) * factor,
        slope_high=slope + (trend["slope_high"] - slope) * factor,
        slope_t_c_ha_yr_se=trend["slope_t_c_ha_yr_se"] * factor,
        method=trend["method"].where(~there, trend["method"] + "; model-assisted by rasters"),
    )


def _of_points(table: pd.DataFrame, assisted: Assisted, dates: list[str]) -> np.ndarray:
    """Variance of the density that raster means from points bring in, in the rows of the table."""
    if assisted.phases.empty:
        return np.zeros(len(table))
    known = assisted.phases.set_index(["since", "until", "by", "unit", "pool"])["variance"]
    unit = table["unit"].astype("str").mask(table["by"] == "inventory", "")
    columns = [table[name].astype("str") for name in (*dates, "by")]
    keys = pd.MultiIndex.from_arrays([*columns, unit, table["pool"].astype("str")])
    return known.reindex(keys).fillna(0.0).to_numpy(dtype=float)


def _plain_parcels(made: pd.DataFrame, hit: pd.Series, plain: pd.DataFrame | None, keys: list[str]) -> pd.DataFrame:
    """Put plain estimates in the place of parcels without offset."""
    which = ((made["by"] == "parcel") & ~hit).to_numpy()
    if plain is None or not which.any():
        return made
    place = pd.MultiIndex.from_frame(plain[keys].astype("str"))
    at = place.get_indexer(pd.MultiIndex.from_frame(made[keys].astype("str")))
    which = which & (at >= 0)
    row = np.where(which, len(made) + at, np.arange(len(made)))
    both = pd.concat([made, plain[list(made.columns)]], ignore_index=True)
    return both.iloc[row].set_axis(made.index)


def _by_pool(offsets: pd.DataFrame, sums: Mapping[str, Sequence[str]], dates: list[str]) -> pd.DataFrame:
    """Add up the parts of each pool; the raise is the largest of them."""
    pool_of = {str(part): pool for pool, parts in sums.items() if pool != "all" for part in parts}
    table = offsets.assign(pool=offsets["part"].map(pool_of))
    return (
        table.groupby([*_KEYS, *dates, "pool"], sort=False)
        .agg(offset=("offset", "sum"), inflation=("inflation", "max"), df_share=("df_share", "min"))
        .reset_index()
    )


def _look_up(table: pd.DataFrame, shift: pd.DataFrame, keys: list[str]) -> pd.DataFrame:
    """Offsets in the rows of the table; the inventory is found whatever its name."""
    wanted = table[keys].astype("str")
    wanted = wanted.assign(unit=wanted["unit"].mask(wanted["by"] == "inventory", ""))
    there = shift.assign(**{key: shift[key].astype("str") for key in keys})
    return wanted.merge(there, on=keys, how="left", validate="m:1").set_index(table.index)


def _groups(table: pd.DataFrame, dates: list[str]) -> list[pd.Series]:
    return [table[name].astype("str") for name in (*_KEYS, *dates)]


def _shift_of_all(table: pd.DataFrame, shift: pd.Series, dates: list[str]) -> pd.Series:
    """Density to add to each row: that of ``all`` is the sum over the pools that have a figure in the unit."""
    counts = (table["pool"] != "all") & _figure(table).notna()
    area = table["area_ha"].where(table["area_ha"].notna(), 1.0)
    weighed = (shift.fillna(0.0) * area).where(counts, 0.0)
    added = weighed.groupby(_groups(table, dates), sort=False).transform("sum")
    return shift.fillna(0.0).where(table["pool"] != "all", added / area.where(area > 0, 1.0))


def _worst_of_all(table: pd.DataFrame, values: pd.Series, dates: list[str], how: str) -> pd.Series:
    """Give ``all`` the largest (or smallest) value of the pools of the unit; NaN where none is assisted."""
    counted = values.where(_figure(table).notna())
    grouped = counted.groupby(_groups(table, dates), sort=False)
    of_all = grouped.transform("max") if how == "max" else grouped.transform("min")
    return values.where(table["pool"] != "all", of_all)


def _figure(table: pd.DataFrame) -> pd.Series:
    return table["density_t_c_ha"] if "density_t_c_ha" in table else table["change_t_c"]


def _wider_t(change: pd.DataFrame, share: pd.Series, confidence: float) -> np.ndarray:
    """Ratio of the quantiles of Student's t with fewer and with all degrees of freedom, told from the interval."""
    half = ((change["change_high"] - change["change_low"]) / 2.0).to_numpy(dtype=float)
    se = change["change_se"].to_numpy(dtype=float)
    free = df_of_interval(half, se, confidence) * share.to_numpy(dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = t_quantile(np.maximum(free, 1.0), 0.5 + 0.5 * confidence) / (half / se)
    return np.where(np.isfinite(ratio) & (ratio > 1.0), ratio, 1.0)


def _texts(table: pd.DataFrame, report: pd.DataFrame, dates: list[str]) -> pd.Series:
    """Return the words to add to ``method``; the relative efficiency is stated where it was measured."""
    later = dates[-1]
    keys = ["survey", "pool", "stratum"]
    told = report.assign(**{key: report[key].astype("str") for key in keys}).set_index(keys)
    told = told[~told.index.duplicated()]
    stratum = table["unit"].astype("str").where(table["by"] == "stratum", "")
    own = pd.MultiIndex.from_arrays([table[later].astype("str"), table["pool"].astype("str"), stratum])
    names = told["rasters"].reindex(own).fillna("").to_numpy(dtype=object)
    text = pd.Series(", model-assisted by " + names, index=table.index)
    if len(dates) > 1:
        return text
    value = told["relative_efficiency"].reindex(own).to_numpy(dtype=float)
    stated = np.isfinite(value) & (table["by"] != "parcel").to_numpy()
    ratio = np.full(len(table), "", dtype=object)
    ratio[stated] = [f" (relative efficiency {one:.1f})" for one in value[stated]]
    return text + pd.Series(ratio, index=table.index)
