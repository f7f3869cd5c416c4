"""What the commands print."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING

import pandas as pd
from rich.text import Text

from landcarbon.publish.figures import decimals_for, figure
from landcarbon.publish.results import Results
from landcarbon.publish.terminal_tables import (
    change_table,
    findings_table,
    number_of,
    plain_text,
    reconciliation_table,
    rows_of,
    stocks_table,
    table_of,
)
from landcarbon.publish.words import CAUTIONS, NOT_ESTIMABLE, SIGN_RULE

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from allometry.catalogue import Equation
    from landcarbon.trace import Trace

__all__ = ["StepStatus", "print_check", "print_equation", "print_equations", "print_results", "print_trace"]

_MOST_FINDINGS = 20
_MOST_EQUATIONS = 60
_SEVERITY_STYLE = {"error": "red", "warning": "yellow", "note": ""}


class StepStatus:
    """Shows which step is going on while it goes on; silent where the output is not a terminal.

    Parameters
    ----------
    console : rich.console.Console
        Where to show it.
    """

    def __init__(self, console: Console) -> None:
        self._status = console.status("")

    def __enter__(self) -> StepStatus:
        """Start."""
        self._status.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Clear the line."""
        self._status.stop()

    def __call__(self, step: str) -> None:
        """Say in a few words what is being done now."""
        self._status.update(plain_text(step))


def print_results(results: Results, console: Console, *, by: str = "inventory", folder: Path | None = None) -> None:
    """Print what a reader wants to see first.

    Parameters
    ----------
    results : Results
        The run.
    console : rich.console.Console
        Where to print.
    by : {"inventory", "stratum", "parcel"}
        Inventory: the overview with reconciliation and findings. Otherwise: stocks and change of those units.
    folder : Path, optional
        Where the results were written; the place of the map is printed then.

    Raises
    ------
    UserError
        If ``by`` is none of these.
    """
    from landcarbon.errors import UserError

    if by not in ("inventory", "stratum", "parcel"):
        raise UserError(f"by {by!r} is not a unit of estimation", remedy="Use inventory, stratum or parcel")
    console.print(Text.assemble("\n", plain_text(results.name)), style="bold")
    tables = _overview(results) if by == "inventory" else [stocks_table(results, by), change_table(results, by)]
    _print_tables(tables, console)
    _print_lines(_lines(results), console)
    if folder is not None:
        # Printed without wrapping, so that the path can be copied.
        console.print(Text(f"Results: {folder}"), soft_wrap=True)
        console.print(Text(f"Map: {folder / 'map.html'}", style="bold"), soft_wrap=True)


def print_check(results: Results, console: Console) -> None:
    """Print the findings: counts by rule, then the gravest one by one, and how the rows add up.

    Parameters
    ----------
    results : Results
        The run.
    console : rich.console.Console
        Where to print.
    """
    findings = results.findings
    if findings.empty:
        console.print("No findings: every row was used.")
    rank = findings["severity"].map({"error": 0, "warning": 1, "note": 2})
    for row in findings.loc[rank.sort_values(kind="stable").index[:_MOST_FINDINGS]].itertuples(index=False):
        console.print(_finding_line(row))
    if len(findings) > _MOST_FINDINGS:
        console.print(f"... and {len(findings) - _MOST_FINDINGS} more; a run writes all of them to findings.csv.")
    _print_tables([findings_table(results), reconciliation_table(results)], console)
    _print_lines((Text(f"! {mark}", style="yellow") for mark in results.marks), console)


def print_trace(trace: Trace, console: Console, trees: int) -> None:
    """Print what a figure rests on.

    Parameters
    ----------
    trace : Trace
        The figure with its plots and trees.
    console : rich.console.Console
        Where to print.
    trees : int
        How many of the trees with the largest contribution to list.
    """
    row = trace.row
    density, se, stock = (float(row[name]) for name in ("density_t_c_ha", "density_se", "stock_t_c"))
    digits = decimals_for(se, density)
    console.print(Text.assemble("\n", (f"{row['by']} ", ""), plain_text(row["unit"])), style="bold")
    said = NOT_ESTIMABLE if pd.isna(density) else f"{figure(density, digits)} t C/ha, SE {figure(se, digits)}"
    total = "" if pd.isna(stock) else f"; {figure(stock, decimals_for(float(row['stock_se']), stock))} t C"
    console.print(plain_text(f"Survey {row['survey']}, pool {row['pool']}: {said}{total}"))
    console.print(plain_text(f"Method: {row['method']}"))
    _print_tables([_plots_of(trace), _trees_of(trace, trees)], console)
    if len(trace.set_aside):
        console.print(f"Rows on these plots that were set aside: {len(trace.set_aside)}")
        for finding in trace.set_aside.head(_MOST_FINDINGS).itertuples(index=False):
            console.print(_finding_line(finding))


def print_equations(equations: pd.DataFrame, console: Console) -> None:
    """Print a list of equations of the catalogue.

    Parameters
    ----------
    equations : DataFrame
        Rows of the catalogue.
    console : rich.console.Console
        Where to print.
    """
    names = ["equation_id", "taxon", "component", "region", "dbh_min_cm", "dbh_max_cm", "n_trees", "known"]
    headings = [("equation", "left"), ("taxon", "left"), ("component", "left"), ("region", "left")]
    table = table_of("", [*headings, ("from cm", "right"), ("to cm", "right"), ("trees", "right"), ("known", "left")])
    for row in equations.head(_MOST_EQUATIONS)[names].itertuples(index=False):
        table.add_row(*(_cell(value) for value in row))
    _print_tables([table], console)
    left = len(equations) - _MOST_EQUATIONS
    if left > 0:
        console.print(f"... and {left} more; narrow the search by words, --region or --component.")
    elif equations.empty:
        console.print("No equation matches. Search by part of a species, genus or source.")
    console.print("Show one in full with --id EQUATION.")


def print_equation(equation: Equation, console: Console) -> None:
    """Print one equation with everything the catalogue knows of it.

    Parameters
    ----------
    equation : Equation
        A row of the catalogue.
    console : rich.console.Console
        Where to print.
    """
    table = table_of("", [("", "left"), ("", "left")])
    table.show_header = False
    for name, value in asdict(equation).items():
        if not (value is None or value == "" or (isinstance(value, float) and pd.isna(value))):
            table.add_row(plain_text(name.replace("_", " ")), _cell(value))
    _print_tables([table], console)


def _overview(results: Results) -> Iterable[Table]:
    yield stocks_table(results, "inventory")
    yield change_table(results, "inventory")
    strata = rows_of(results.stocks, "stratum")["unit"].nunique()
    if strata > 1 or rows_of(results.stocks, "inventory").empty:
        yield stocks_table(results, "stratum")
    yield reconciliation_table(results)
    yield findings_table(results)


def _lines(results: Results) -> Iterable[Text]:
    yield from _not_estimable(results)
    for mark in results.marks:
        yield Text(f"! {mark}", style="yellow")
    if results.area_method:
        yield Text(results.area_method, style="dim")
    yield Text(SIGN_RULE, style="dim")
    yield Text(CAUTIONS, style="dim")


def _not_estimable(results: Results) -> Iterable[Text]:
    """Say loudly how many hectares the figures do not speak for."""
    whole = rows_of(results.stocks, "stratum")
    missing = whole[whole["pool"].astype("str").eq("all") & whole["density_t_c_ha"].isna()]
    surveys: dict[tuple[str, str], list[str]] = {}
    for survey, rows in missing.groupby(missing["survey"].astype("str"), sort=False):
        area = rows["area_ha"].sum(min_count=1)
        size = "an unknown area" if pd.isna(area) else f"{figure(area, decimals_for(float('nan'), area))} ha"
        surveys.setdefault((", ".join(rows["unit"].astype("str")), size), []).append(str(survey))
    for (names, size), when in surveys.items():
        which = f"Survey {when[0]}" if len(when) == 1 else f"Surveys {', '.join(when)}"
        yield Text(f"! {which}: {names} {NOT_ESTIMABLE}; {size} not in the total.", style="bold red")


def _finding_line(row: object) -> Text:
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


def _plots_of(trace: Trace) -> Table:
    table = table_of("Plots", [("plot", "left"), ("stratum", "left"), ("date", "left"), ("t C/ha", "right")])
    for row in trace.plots.itertuples(index=False):
        date = getattr(row, "date", pd.NaT)
        density = number_of(row, "density_t_c_ha")
        stratum = plain_text(getattr(row, "stratum", ""))
        day = Text("" if pd.isna(date) else f"{pd.Timestamp(date):%Y-%m-%d}")
        table.add_row(plain_text(row.plot), stratum, day, figure(density, decimals_for(float("nan"), density)))
    return table


def _trees_of(trace: Trace, most: int) -> Table:
    shown = trace.trees.head(most)
    title = f"Trees: {len(trace.trees)} counted" + (f", the {len(shown)} largest shares" if len(shown) else "")
    headings = [("file and line", "left"), ("plot", "left"), ("tree", "left"), ("species", "left"), ("cm", "right")]
    table = table_of(title, [*headings, ("equation", "left"), ("kg C", "right"), ("t C/ha", "right")])
    for row in shown.itertuples(index=False):
        numbers = [number_of(row, name) for name in ("carbon_kg", "density_t_c_ha")]
        table.add_row(
            plain_text(f"{row.file} {row.row}"),
            plain_text(row.plot),
            plain_text(row.tree),
            plain_text(getattr(row, "scientific_name", row.species)),
            figure(number_of(row, "dbh_cm"), 1),
            plain_text(row.equation),
            *(figure(number, decimals_for(float("nan"), number)) for number in numbers),
        )
    return table


def _cell(value: object) -> Text:
    if isinstance(value, float):
        return Text("" if pd.isna(value) else f"{value:.6g}")
    return plain_text(value)


def _print_tables(tables: Iterable[Table], console: Console) -> None:
    for table in tables:
        if table.row_count:
            console.print(table)


def _print_lines(lines: Iterable[Text], console: Console) -> None:
    for line in lines:
        console.print(line)
