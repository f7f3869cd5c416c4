"""Rows of the sample tables on the terminal: where each stands, what was measured, and whether it counts."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pandas as pd
from rich.text import Text

from landcarbon.inventory.columns import ColumnSpec, table_columns
from landcarbon.publish.terminal_tables import plain_text, print_wide, table_of

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

__all__ = ["print_samples", "samples_table"]

# Shown before the measured values, or the same for all rows listed.
_APART = ("survey", "plot", "date")


def print_samples(table: str, rows: pd.DataFrame, console: Console, most: int) -> None:
    """Print the rows of one table of samples.

    Parameters
    ----------
    table : str
        A table of samples.
    rows : DataFrame
        Its rows, as published.
    console : rich.console.Console
        Where to print.
    most : int
        How many to list.
    """
    print_wide(samples_table(table, rows, most), console)
    left = len(rows) - most
    if left > 0:
        console.print(f"... and {left} more; --trees {len(rows)} lists all, --plot NAME those of one plot.")


def samples_table(table: str, rows: pd.DataFrame, most: int) -> Table:
    """Tabulate the first rows of one table of samples, with the values that were measured there at all.

    Parameters
    ----------
    table : str
        A table of samples.
    rows : DataFrame
        Its rows, as published.
    most : int
        How many to list.

    Returns
    -------
    rich.table.Table
    """
    shown = rows.head(most)
    aside = int((~rows["used"].astype(bool)).sum())
    title = f"Samples, {table.replace('_', ' ')}: {len(rows)} rows"
    title += f", {aside} of them set aside" if aside else ""
    title += f", listed: the first {len(shown)}" if len(shown) < len(rows) else ""
    cells = [_text(spec, shown[spec.becomes]) for spec in _measured(table, shown)]
    headings = [("file and line", "left"), ("plot", "left")]
    headings += [(_heading(spec), "right" if spec.kind == "number" else "left") for spec in _measured(table, shown)]
    if "density_t_c_ha" in shown and shown["density_t_c_ha"].notna().any():
        headings.append(("t C/ha", "right"))
        cells.append(["" if pd.isna(value) else f"{value:.4f}" for value in shown["density_t_c_ha"]])
    made = table_of(title, [*headings, ("used", "left")], whole=("file and line", "plot"))
    places = shown["file"].astype("str") + " " + shown["row"].astype("str")
    used = shown["used"].map({True: "yes", False: "no"})
    for row in zip(places, shown["plot"].astype("str"), *cells, used, strict=True):
        made.add_row(*(plain_text(cell) for cell in row[:-1]), Text(row[-1], style="" if row[-1] == "yes" else "red"))
    return made


def _measured(table: str, rows: pd.DataFrame) -> list[ColumnSpec]:
    """Columns of the table with anything in them."""
    specs = [spec for spec in table_columns(table).values() if spec.becomes not in _APART and spec.becomes in rows]
    return [spec for spec in specs if any(_text(spec, rows[spec.becomes]))]


def _heading(spec: ColumnSpec) -> str:
    """Name and unit; a bare share is told by the name the program gives it."""
    name = spec.becomes if spec.unit == "1" else spec.column
    unit = "" if spec.unit == "1" else spec.unit
    return f"{name} {unit}".strip().replace("_", " ")


def _text(spec: ColumnSpec, values: pd.Series) -> list[str]:
    if spec.kind == "number":
        return ["" if pd.isna(value) else f"{value:.6g}" for value in values]
    return ["" if pd.isna(value) else str(value) for value in values]
