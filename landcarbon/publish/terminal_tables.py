"""Tables of the results for the terminal, at most a hundred columns wide."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from rich import box
from rich.table import Table
from rich.text import Text

from landcarbon.publish.figures import decimals_for, figure, interval
from landcarbon.publish.provenance import count_findings
from landcarbon.publish.results import Results
from landcarbon.publish.words import NOT_ESTIMABLE, POOL_NAMES

__all__ = [
    "change_table",
    "findings_table",
    "number_of",
    "plain_text",
    "reconciliation_table",
    "rows_of",
    "stocks_table",
    "table_of",
]

_TOP_FINDINGS = 12
_DASH = "\u2013"


def stocks_table(results: Results, by: str) -> Table:
    """Tabulate stocks.

    Parameters
    ----------
    results : Results
        The run.
    by : {"inventory", "stratum", "parcel"}
        Inventory: every survey and pool. Otherwise: every unit at every survey, pool ``all``.

    Returns
    -------
    rich.table.Table
    """
    rows = rows_of(results.stocks, by)
    whole = by == "inventory"
    names = [("survey", "left"), ("pool", "left")] if whole else [(by, "left"), ("survey", "left")]
    columns = [*names, ("ha", "right"), ("plots", "right"), ("t C/ha", "right"), ("SE", "right")]
    columns += [(results.interval_name, "right"), ("t C", "right"), ("SE", "right")]
    title = "Stocks of the inventory" if whole else f"Stocks by {by}, {POOL_NAMES['all']}"
    table = table_of(title, columns)
    if not whole:
        rows = rows[rows["pool"].astype("str").eq("all")]
    for row in rows.itertuples(index=False):
        first = (row.survey, POOL_NAMES.get(str(row.pool), row.pool)) if whole else (row.unit, row.survey)
        table.add_row(
            *map(plain_text, first), *_stock_cells(row), style="bold" if whole and row.pool == "all" else None
        )
    return table


def change_table(results: Results, by: str) -> Table:
    """Tabulate change of the pool ``all``, with its equivalent in carbon dioxide.

    Parameters
    ----------
    results : Results
        The run.
    by : {"inventory", "stratum", "parcel"}
        Units to show.

    Returns
    -------
    rich.table.Table
    """
    rows = rows_of(results.change, by)
    rows = rows[rows["pool"].astype("str").eq("all")]
    names = [("since", "right"), ("until", "right")]
    columns = [
        *([] if by == "inventory" else [(by, "left")]),
        *names,
        ("years", "right"),
        ("paired", "right"),
        ("t C", "right"),
    ]
    columns += [(results.interval_name, "right"), ("t C/ha/yr", "right"), ("t CO2/yr", "right")]
    table = table_of(
        "Change of the inventory" if by == "inventory" else f"Change by {by} (\u2013 not estimable)", columns
    )
    for row in rows.itertuples(index=False):
        first = [row.since, row.until] if by == "inventory" else [row.unit, row.since, row.until]
        table.add_row(*map(plain_text, first), *_change_cells(row))
    return table


def reconciliation_table(results: Results) -> Table:
    """Tabulate rows read, used and set aside, as the pipeline counted them."""
    frame = results.reconciliation
    numbers = [name for name in frame.columns if pd.api.types.is_numeric_dtype(frame[name].dtype)]
    columns = [(str(name).replace("_", " "), "right" if name in numbers else "left") for name in frame.columns]
    table = table_of("Every row accounted for", columns)
    for row in frame.itertuples(index=False):
        table.add_row(*(_plain_cell(value) for value in row))
    return table


def findings_table(results: Results, top: int = _TOP_FINDINGS) -> Table:
    """Tabulate findings by rule, the gravest and most frequent first.

    Parameters
    ----------
    results : Results
        The run.
    top : int
        Most rules to show.

    Returns
    -------
    rich.table.Table
    """
    counts = count_findings(results.findings).rename(columns={"count": "found"})
    left = len(counts) - top
    more = f" ({left} more rules in findings.csv)" if left > 0 else ""
    columns = [("severity", "left"), ("finding", "left"), ("table", "left"), ("count", "right"), ("used", "right")]
    table = table_of(f"Findings{more}", [*columns, ("set aside", "right")])
    style = {"error": "red", "warning": "yellow"}
    for row in counts.head(top).itertuples(index=False):
        cells = [number_of(row, name) for name in ("found", "used", "set_aside")]
        table.add_row(
            Text(str(row.severity), style=style.get(str(row.severity), "")),
            plain_text(row.rule),
            plain_text(row.table),
            *(figure(cell, 0) for cell in cells),
        )
    return table


def rows_of(frame: pd.DataFrame, by: str) -> pd.DataFrame:
    """Return the rows of one kind of unit."""
    return frame[frame["by"].astype("str").eq(by)]


def table_of(title: str, columns: list[tuple[str, str]]) -> Table:
    """Make an empty table of the house form; a column is a heading and "left" (text, may wrap) or "right" (number)."""
    table = Table(title=Text(title, style="bold"), title_justify="left", box=box.SIMPLE_HEAD, pad_edge=False)
    for name, side in columns:
        number = side == "right"
        table.add_column(Text(name), justify="right" if number else "left", no_wrap=number, overflow="fold")
    return table


def _stock_cells(row: Any) -> list[str]:
    area, plots = number_of(row, "area_ha"), number_of(row, "plots")
    density, density_se = number_of(row, "density_t_c_ha"), number_of(row, "density_se")
    stock, stock_se = number_of(row, "stock_t_c"), number_of(row, "stock_se")
    first, second = decimals_for(density_se, density), decimals_for(stock_se, stock)
    return [
        figure(area, decimals_for(float("nan"), area)),
        figure(plots, 0),
        NOT_ESTIMABLE if pd.isna(density) else figure(density, first),
        figure(density_se, first),
        interval(number_of(row, "density_low"), number_of(row, "density_high"), first),
        figure(stock, second),
        figure(stock_se, second),
    ]


def _change_cells(row: Any) -> list[str]:
    change, se = number_of(row, "change_t_c"), number_of(row, "change_se")
    rate, rate_se = number_of(row, "change_t_c_ha_yr"), number_of(row, "change_t_c_ha_yr_se")
    dioxide, decimals = number_of(row, "co2_t_yr"), decimals_for(se, change)
    return [
        figure(number_of(row, "years"), 1),
        figure(number_of(row, "plots_paired"), 0),
        figure(change, decimals, sign=True),
        interval(number_of(row, "change_low"), number_of(row, "change_high"), decimals, sign=True),
        figure(rate, decimals_for(rate_se, rate), sign=True),
        figure(dioxide, decimals_for(float("nan"), dioxide), sign=True),
    ]


def number_of(row: Any, name: str) -> float:
    """Return a number of a row, NaN where it is missing."""
    value = getattr(row, name)
    return float("nan") if pd.isna(value) else float(value)


def plain_text(value: object) -> Text:
    """Text that the console does not take for its own markup; control characters would drive the terminal."""
    shown = "".join(sign if sign.isprintable() else "\ufffd" for sign in str(value))
    return Text(shown)


def _plain_cell(value: object) -> Text:
    if value is None or value is pd.NA or (isinstance(value, float) and pd.isna(value)):
        return Text(_DASH)
    if isinstance(value, bool) or not isinstance(value, (int, float, np.number)):
        return plain_text(value)
    number = float(value)
    return Text(figure(number, 0 if number.is_integer() else decimals_for(float("nan"), number)))
