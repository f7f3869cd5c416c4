"""Layout of the page of the coverage simulation: tables, filled paragraphs, figures with their errors."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence
from typing import Any

import pandas as pd

WIDTH = 120
JOINED = "\N{NO-BREAK SPACE}%"
MISSES = ["coverage %", "truth above %", "truth below %"]
FIGURES = ["bias %", "RMSE %", "SE / SD", *MISSES]


def reflow(text: str) -> str:
    """Fill paragraphs and list items; tables and headings stay as they are."""
    lines: list[str] = []
    for block in re.split(r"\n\s*\n", text.strip()):
        lines += ["", *_block(block)]
    return "\n".join(lines[1:]) + "\n"


def _block(block: str) -> list[str]:
    if block.startswith(("|", "#")):
        return block.split("\n")
    items = re.split(r"\n(?=- )", block)
    return [line for item in items for line in _filled(item)]


def _filled(item: str) -> list[str]:
    indent = "  " if item.startswith("- ") else ""
    whole = " ".join(item.split())
    whole = whole.replace(" %", JOINED)  # a number keeps its sign on the line
    lines = textwrap.wrap(whole, WIDTH, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False)
    return [line.replace(JOINED, " %") for line in lines]


def markdown(head: Sequence[str], rows: Sequence[Sequence[Any]], text_columns: int) -> str:
    """Lay out a table; the first columns are text."""
    lines = ["| " + " | ".join(head) + " |"]
    lines.append("|" + "|".join(["---"] * text_columns + ["---:"] * (len(head) - text_columns)) + "|")
    lines += ["| " + " | ".join(str(cell) for cell in row) + " |" for row in rows]
    return "\n".join(lines) + "\n"


def percent(value: float, digits: int = 1) -> str:
    text = f"{100 * value:.{digits}f}"
    return "0.0" if text == "-0.0" else text


def held(row: pd.Series, settings: dict[str, Any]) -> str:
    """Coverage with its Monte Carlo error, bold where out of order."""
    low, high = settings["accepted"]
    text = percent(row["coverage"])
    text = text if low <= row["coverage"] <= high else f"**{text}**"
    return f"{text} ± {percent(row['coverage_error'])}"


def figures(row: pd.Series, settings: dict[str, Any]) -> tuple[str, ...]:
    """Cells of the columns ``FIGURES``."""
    return (
        f"{row['bias']:+.1f} ± {row['bias_error']:.1f}",
        f"{row['rmse']:.1f}",
        f"{row['se_ratio']:.2f}",
        held(row, settings),
        percent(row["below"]),
        percent(row["above"]),
    )


def outside(table: pd.DataFrame, settings: dict[str, Any]) -> pd.DataFrame:
    low, high = settings["accepted"]
    return table[(table["coverage"] < low) | (table["coverage"] > high)]


def span(table: pd.DataFrame) -> str:
    return f"{percent(table['coverage'].min())} to {percent(table['coverage'].max())} %"


def named(table: pd.DataFrame, columns: Sequence[str]) -> str:
    """List lines by their labels, with the coverage of each."""
    lines = []
    for _, row in table.iterrows():
        labels = ", ".join(f"n = {row[name]}" if name == "plots" else str(row[name]) for name in columns)
        lines.append(f"{labels}: {percent(row['coverage'])} ± {percent(row['coverage_error'])} %")
    return "; ".join(lines)


def of(table: pd.DataFrame, **where: Any) -> pd.DataFrame:
    """Rows with the given labels; a list means any of its members."""
    for name, wanted in where.items():
        table = table[table[name].isin(wanted if isinstance(wanted, list) else [wanted])]
    return table
