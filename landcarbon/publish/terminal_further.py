"""Further tables on the terminal: trend lines, the effect of areas that change, and what rasters are worth."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

import pandas as pd

from landcarbon.publish.figures import decimals_for, figure, interval
from landcarbon.publish.terminal_tables import number_of, plain_text, rows_of, table_of

if TYPE_CHECKING:
    from rich.table import Table

    from landcarbon.publish.results import Results

__all__ = ["further_tables"]


def further_tables(results: Results, by: str) -> Iterable[Table]:
    """Tabulate what an inventory has beyond stocks and change, for one kind of unit.

    Parameters
    ----------
    results : Results
        The run.
    by : {"inventory", "stratum", "parcel"}
        Units to show.
    """
    if "trend" in results.further:
        yield _trend(results, by)
    if "area_effect" in results.further:
        yield _area_effect(results.further["area_effect"], by)
    if "raster_worth" in results.further and by != "parcel":
        yield _worth(results.further["raster_worth"], by)


def _all_of(table: pd.DataFrame, by: str) -> pd.DataFrame:
    rows = rows_of(table, by)
    return rows[rows["pool"].astype("str").eq("all")]


def _trend(results: Results, by: str) -> Table:
    names = [] if by == "inventory" else [(by, "left")]
    columns = [*names, ("since", "right"), ("until", "right"), ("surveys", "right"), ("t C/yr", "right")]
    columns += [("SE", "right"), (results.interval_name, "right"), ("t C/ha/yr", "right"), ("t CO2/yr", "right")]
    table = table_of("Trend, straight line through the surveys (pools measured at all of them)", columns)
    for row in _all_of(results.further["trend"], by).itertuples(index=False):
        slope, se = number_of(row, "slope_t_c_yr"), number_of(row, "slope_se")
        rate, rate_se = number_of(row, "slope_t_c_ha_yr"), number_of(row, "slope_t_c_ha_yr_se")
        dioxide, places = number_of(row, "co2_t_yr"), decimals_for(se, slope)
        first = [row.since, row.until] if by == "inventory" else [row.unit, row.since, row.until]
        table.add_row(
            *map(plain_text, first),
            figure(number_of(row, "surveys"), 0),
            figure(slope, places, sign=True),
            figure(se, places),
            interval(number_of(row, "slope_low"), number_of(row, "slope_high"), places, sign=True),
            figure(rate, decimals_for(rate_se, rate), sign=True),
            figure(dioxide, decimals_for(float("nan"), dioxide), sign=True),
        )
    return table


def _area_effect(effects: pd.DataFrame, by: str) -> Table:
    columns = [(by, "left"), ("since", "right"), ("until", "right"), ("ha since", "right"), ("ha until", "right")]
    columns += [("ha common", "right"), ("t C since", "right"), ("change", "right"), ("area effect", "right")]
    table = table_of("What the change of area brings (no gain or loss of the land)", [*columns, ("t C until", "right")])
    for row in _all_of(effects, by).itertuples(index=False):
        areas = [number_of(row, f"area_{name}_ha") for name in ("since", "until", "common")]
        stocks = [number_of(row, name) for name in ("stock_since_t_c", "stock_until_t_c")]
        moves = [number_of(row, name) for name in ("change_common_t_c", "area_effect_t_c")]
        first, last = (figure(value, decimals_for(float("nan"), value)) for value in stocks)
        table.add_row(
            *map(plain_text, [row.unit, row.since, row.until]),
            *(figure(value, 2) for value in areas),
            first,
            *(figure(value, decimals_for(float("nan"), value), sign=True) for value in moves),
            last,
        )
    return table


def _worth(worth: pd.DataFrame, by: str) -> Table:
    names = [("survey", "left"), ("pool", "left")] if by == "inventory" else [("stratum", "left"), ("survey", "left")]
    columns = [*names, ("rasters", "left"), ("plots", "right"), ("worth", "right"), ("used", "left"), ("why", "left")]
    title = "Rasters at the latest survey: variance without them over that with them (2 is worth twice the plots)"
    table = table_of(title, columns)
    whole = worth["stratum"].fillna("").astype("str").eq("")
    rows = worth[whole] if by == "inventory" else worth[~whole & worth["pool"].astype("str").eq("all")]
    rows = rows[rows["survey"].astype("str") == str(worth["survey"].iloc[-1])]
    for row in rows.itertuples(index=False):
        first = [row.survey, str(row.pool).replace("_", " ")] if by == "inventory" else [row.stratum, row.survey]
        used = "yes" if bool(row.used) else "no"
        cells = [row.rasters, figure(number_of(row, "plots"), 0), figure(number_of(row, "relative_efficiency"), 2)]
        table.add_row(*map(plain_text, [*first, *cells, used, row.why]))
    return table
