"""What the commands print."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING

from rich.text import Text

from landcarbon.publish.results import Results
from landcarbon.publish.terminal_further import further_tables
from landcarbon.publish.terminal_tables import (
    change_table,
    finding_line,
    findings_table,
    plain_text,
    reconciliation_table,
    rows_of,
    stocks_table,
    strata_table,
)
from landcarbon.publish.words import CAUTIONS, SIGN_RULE

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

__all__ = ["StepStatus", "print_check", "print_results"]

_MOST_FINDINGS = 20


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
    if by != "inventory":
        _print_tables(further_tables(results, by), console)
    if by != "inventory" and rows_of(results.stocks, by).empty:
        plural = {"stratum": "strata", "parcel": "parcels"}[by]
        console.print(Text(f"There are no {plural} in these results; see --by inventory."))
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
        console.print(finding_line(row))
    if len(findings) > _MOST_FINDINGS:
        console.print(f"... and {len(findings) - _MOST_FINDINGS} more; a run writes all of them to findings.csv.")
    _print_tables([findings_table(results), reconciliation_table(results)], console)
    _print_lines(_marks(results), console)


def _overview(results: Results) -> Iterable[Table]:
    yield stocks_table(results, "inventory")
    yield change_table(results, "inventory")
    yield from further_tables(results, "inventory")
    if rows_of(results.stocks, "inventory")["density_t_c_ha"].isna().all():
        yield strata_table(results)
    elif rows_of(results.stocks, "stratum")["unit"].nunique() > 1:
        yield stocks_table(results, "stratum")
    yield reconciliation_table(results)
    yield findings_table(results)


def _lines(results: Results) -> Iterable[Text]:
    yield from _marks(results)
    if results.area_method:
        yield Text(results.area_method, style="dim")
    yield Text(SIGN_RULE, style="dim")
    yield Text(CAUTIONS, style="dim")


def _marks(results: Results) -> Iterable[Text]:
    for mark in results.marks:
        line = plain_text(f"! {mark}")
        # Hectares that the figures do not speak for are said loudest.
        line.stylize("bold red" if "not in the total" in mark else "yellow")
        yield line


def _print_tables(tables: Iterable[Table], console: Console) -> None:
    for table in tables:
        if table.row_count:
            console.print(table)


def _print_lines(lines: Iterable[Text], console: Console) -> None:
    for line in lines:
        console.print(line)
