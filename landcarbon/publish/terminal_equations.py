"""What the command ``equations`` prints."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pandas as pd
from rich.text import Text

from landcarbon.publish.terminal_tables import plain_text, print_wide, table_of

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from landcarbon.publish.equation_list import Found

__all__ = ["print_found", "print_published"]

_MOST = 60


def print_found(found: Found, console: Console, *, text: str = "") -> None:
    """Print what a search of the published equations found.

    Parameters
    ----------
    found : Found
        The outcome.
    console : rich.console.Console
        Where to print.
    text : str
        The words searched for.
    """
    if found.empty:
        what = f" {text!r}" if text else ""
        console.print(
            Text(
                f"Nothing matches{what}. Search by part of a species, genus, publication or id; "
                "without words everything is listed."
            )
        )
        return
    for table, rows in ((_equations(found.equations), found.equations), (_roots(found.roots), found.roots)):
        _print_some(table, rows, console)
    _print_some(_forms(found.forms), found.forms, console)
    console.print("Show one in full with --id EQUATION.")


def print_published(kind: str, facts: list[tuple[str, object]], console: Console) -> None:
    """Print one equation, root model or height curve with everything known of it.

    Parameters
    ----------
    kind : str
        What it is.
    facts : list of (name, value)
        In the order to print them.
    console : rich.console.Console
        Where to print.
    """
    table = table_of(kind[:1].upper() + kind[1:], [("", "left"), ("", "left")])
    table.show_header = False
    table.columns[0].no_wrap = True
    for name, value in facts:
        table.add_row(plain_text(name), _cell(value))
    console.print(table)


def _equations(rows: pd.DataFrame) -> Table:
    headings = [("equation", "left"), ("taxon", "left"), ("component", "left"), ("region", "left")]
    columns = [*headings, ("from cm", "right"), ("to cm", "right"), ("trees", "right"), ("known", "left")]
    names = ["equation_id", "taxon", "component", "region", "dbh_min_cm", "dbh_max_cm", "n_trees", "known"]
    return _filled(_title("Equations", rows), columns, rows[names])


def _roots(rows: pd.DataFrame) -> Table:
    columns = [("root model", "left"), ("for", "left"), ("kind", "left"), ("known", "left"), ("what", "left")]
    return _filled(_title("Root models", rows), columns, rows[["model_id", "level", "kind", "known", "title"]])


def _forms(rows: pd.DataFrame) -> Table:
    columns = [("height curve", "left"), ("name", "left"), ("formula", "left"), ("known", "left")]
    return _filled(_title("Forms of height curves to fit", rows), columns, rows[["form", "title", "formula", "known"]])


def _title(what: str, rows: pd.DataFrame) -> str:
    return f"{what}: {len(rows)}" if len(rows) <= _MOST else f"{what}: the first {_MOST} of {len(rows)}"


def _filled(title: str, columns: list[tuple[str, str]], rows: pd.DataFrame) -> Table:
    # An id is there to be copied: it is never broken across lines, the other columns give way.
    table = table_of(title, columns, whole=(columns[0][0],))
    for row in rows.head(_MOST).itertuples(index=False):
        table.add_row(*(_cell(value) for value in row))
    return table


def _print_some(table: Table, rows: pd.DataFrame, console: Console) -> None:
    if rows.empty:
        return
    print_wide(table, console)
    if len(rows) > _MOST:
        console.print(f"... and {len(rows) - _MOST} more; narrow the search by words, --region or --component.")


def _cell(value: object) -> Text:
    if isinstance(value, float):
        return Text("" if pd.isna(value) else f"{value:.6g}")
    return plain_text(value)
