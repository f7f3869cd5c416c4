"""Tables of the results for the terminal, at most a hundred columns wide."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from rich import box
from rich.table import Table
from rich.text import Text

from landcarbon.publish.figures import decimals_for, figure, interval
from landcarbon.publish.provenance import count_findings
from landcarbon.publish.results import Results
from landcarbon.publish.words import NOT_ESTIMABLE, POOL_NAMES

if TYPE_CHECKING:
    from rich.console import Console

__all__ = [
    "change_table",
    "column_of",
    "finding_line",
    "findings_table",
    "number_of",
    "plain_text",
    "print_wide",
    "reconciliation_table",
    "rows_of",
    "stocks_table",
    "strata_table",
    "table_of",
    "table_width",
]

_SEVERITY_STYLE = {"error": "red", "warning": "yellow", "note": ""}
_TOP_FINDINGS = 20
_UNLIMITED = 10_000
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
    _remark_on_spread(table, rows["density_se"])
    return table


def strata_table(results: Results) -> Table:
    """Tabulate every counted pool of every stratum, for an inventory whose total is not known.

    Areas and stocks are left out where none is known.
    """
    rows = rows_of(results.stocks, "stratum")
    areas = bool(rows["stock_t_c"].notna().any())
    columns = [("stratum", "left"), ("survey", "left"), ("pool", "left"), *([("ha", "right")] if areas else [])]
    columns += [("plots", "right"), ("t C/ha", "right"), ("SE", "right"), (results.interval_name, "right")]
    columns += [("t C", "right")] if areas else []
    title = "Stocks by stratum, every counted pool (there is no total)"
    table = table_of(title, columns, whole=("survey", "pool"))
    keys = rows[["unit", "survey"]].astype("str")
    order = {name: place for place, name in enumerate(results.surveys["survey"].astype("str"))}
    rows = rows.assign(place=keys["survey"].map(order), first=keys["unit"].map(_places(keys["unit"])))
    before = ("", "")
    for row in rows.sort_values(["first", "place"], kind="stable").itertuples(index=False):
        here = (str(row.unit), str(row.survey))
        shown = [here[0] if here[0] != before[0] else "", here[1] if here != before else ""]
        before = here
        cells = _stock_cells(row)
        table.add_row(
            *map(plain_text, [*shown, str(row.pool).replace("_", " ")]),
            *(cells[:-1] if areas else cells[1:5]),
            style="bold" if row.pool == "all" else None,
        )
    _remark_on_spread(table, rows["density_se"])
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
    _remark_on_spread(table, rows["change_se"])
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
    """Tabulate findings by rule: errors, warnings, notes, each by the carbon at stake and then by frequency.

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
    table = table_of(f"Findings{more}", [*columns, ("set aside", "right"), ("kg C at stake", "right")])
    style = {"error": "red", "warning": "yellow"}
    for row in counts.head(top).itertuples(index=False):
        cells = [number_of(row, name) for name in ("found", "used", "set_aside")]
        table.add_row(
            Text(str(row.severity), style=style.get(str(row.severity), "")),
            plain_text(row.rule),
            plain_text(row.table),
            *(figure(cell, 0) for cell in cells),
            figure(number_of(row, "carbon_kg"), 0),
        )
    return table


def rows_of(frame: pd.DataFrame, by: str) -> pd.DataFrame:
    """Return the rows of one kind of unit."""
    return frame[frame["by"].astype("str").eq(by)]


def table_of(title: str, columns: list[tuple[str, str]], *, whole: tuple[str, ...] = ()) -> Table:
    """Make an empty table of the house form.

    Parameters
    ----------
    title : str
        Its heading.
    columns : list of tuple
        Heading and "left" (text, may wrap) or "right" (number).
    whole : tuple of str
        Headings of text columns that are never broken across lines, such as ids that are to be copied.
    """
    table = Table(title=Text(title, style="bold"), title_justify="left", box=box.SIMPLE_HEAD, pad_edge=False)
    for name, side in columns:
        number = side == "right"
        uncut = number or name in whole
        table.add_column(Text(name), justify="right" if number else "left", no_wrap=uncut, overflow="fold")
    return table


def table_width(table: Table, console: Console) -> int:
    """Return the columns a table needs if nothing in it is wrapped."""
    return console.measure(table, options=console.options.update(width=_UNLIMITED)).maximum


def print_wide(table: Table, console: Console) -> None:
    """Print a table whose rows are not to be broken.

    In a file or a pipe nothing limits the width. On a terminal too narrow for it every row becomes lines of its own:
    the first cell, then the others with their headings.
    """
    needed = table_width(table, console)
    if not console.is_terminal and needed > console.width:
        before = console.width
        console.width = needed
        try:
            console.print(table)
        finally:
            console.width = before
    elif needed > console.width:
        _print_listed(table, console)
    else:
        console.print(table)


def _print_listed(table: Table, console: Console) -> None:
    headings = [str(column.header) for column in table.columns]
    rows = zip(*(column.cells for column in table.columns), strict=True)
    console.print(table.title)
    for first, *others in rows:
        console.print(first, soft_wrap=True)
        said = [f"{name} {cell}".strip() for name, cell in zip(headings[1:], others, strict=True) if str(cell)]
        console.print(Text("  " + "; ".join(said)))


def _remark_on_spread(table: Table, errors: pd.Series) -> None:
    """Say why a figure has no interval: plots that are all alike say nothing of those not visited."""
    if errors.eq(0).any():
        table.caption = Text(f"{_DASH} no interval: no variation between plots", style="dim")
        table.caption_justify = "left"


def _places(names: pd.Series) -> dict[str, int]:
    """Place of each name in the order of first occurrence."""
    return {str(name): place for place, name in enumerate(names.unique())}


def _spread(value: float, decimals: int) -> str:
    return figure(float("nan") if value == 0 else value, decimals)


def _stock_cells(row: Any) -> list[str]:
    area, plots = number_of(row, "area_ha"), number_of(row, "plots")
    density, density_se = number_of(row, "density_t_c_ha"), number_of(row, "density_se")
    stock, stock_se = number_of(row, "stock_t_c"), number_of(row, "stock_se")
    if pd.isna(density) and area == 0:
        area = float("nan")  # no part of the land could be estimated; that it has no area would be untrue
    first, second = decimals_for(density_se, density), decimals_for(stock_se, stock)
    return [
        figure(area, decimals_for(float("nan"), area)),
        figure(plots, 0),
        NOT_ESTIMABLE if pd.isna(density) else figure(density, first),
        _spread(density_se, first),
        interval(number_of(row, "density_low"), number_of(row, "density_high"), first),
        figure(stock, second),
        _spread(stock_se, second),
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


def column_of(row: Any, name: str) -> str:
    """Return a text of a row, empty where it or the column is missing."""
    value = getattr(row, name, "")
    return "" if pd.isna(value) else str(value)


def finding_line(row: object) -> Text:
    """Write one finding as a line: severity, place, what it means, the value, what to do."""
    severity, file, line = (getattr(row, name) for name in ("severity", "file", "row"))
    place = f"{file} line {line}" if file and not pd.isna(line) else str(file)
    where = [place, *(f"{name} {getattr(row, name)}" for name in ("survey", "plot", "tree") if getattr(row, name))]
    column, value = str(getattr(row, "column", "")), str(getattr(row, "value", ""))
    shown = f" [{column} {value}]" if column and value else f" [{value}]" if value else ""
    parts = [f"{', '.join(part for part in where if part)}: ", str(getattr(row, "message", "")), shown]
    remedy = str(getattr(row, "remedy", ""))
    return Text.assemble(
        (f"{severity}: ", _SEVERITY_STYLE.get(str(severity), "")),
        plain_text("".join(parts).removeprefix(": ")),
        plain_text(f" {remedy}" if remedy else ""),
    )


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
