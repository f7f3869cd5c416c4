"""How the tables of the demo are written: the dressings of the files, and where the planted faults stand."""

from __future__ import annotations

import zipfile
from collections.abc import Callable
from io import BytesIO
from pathlib import Path

import openpyxl
import pandas as pd

__all__ = ["FIXED_TIME", "Fault", "fault_lines", "text_of", "write_text", "write_xlsx"]

Fault = tuple[str, int, str, str, str, str]  # file, line, column, as written, what is wrong, finding

FIXED_TIME = "2024-11-04T08:00:00Z"  # stamped into the container files, so that a rerun gives the same bytes
DRESSINGS = {
    "old": {"sep": ";", "encoding": "latin-1"},
    "marked": {"encoding": "utf-8-sig"},
    "plain": {"encoding": "utf-8"},
}


def text_of(values: pd.Series, places: int = 0) -> pd.Series:
    """Write numbers as text; a missing one is a blank cell."""
    return values.map(lambda value: "" if pd.isna(value) else f"{value:.{places}f}").astype(object)


def fault_lines(file: str, table: pd.DataFrame) -> list[Fault]:
    """List the faults of one table from its column ``fault``; the header is line 1."""
    marked = table.reset_index(drop=True)
    marked = marked[marked.fault != ""]
    rows = []
    for line, row in zip(marked.index + 2, marked.to_dict("records"), strict=True):
        column, what, rule = row["fault"].split("|")
        rows.append((file, int(line), column, row[column], what, rule))
    return rows


def write_text(table: pd.DataFrame, path: Path, dressing: str, commas: tuple[str, ...] = ()) -> list[Fault]:
    """Write a table as text and return its faults; ``commas`` are the columns that get a decimal comma."""
    shown = table.drop(columns="fault")
    shown = shown.assign(**{name: shown[name].str.replace(".", ",") for name in commas})
    shown.to_csv(path, index=False, lineterminator="\n", **DRESSINGS[dressing])
    return fault_lines(path.name, table.assign(**{name: shown[name] for name in commas}))


def write_xlsx(tables: dict[str, pd.DataFrame], path: Path, numeric: dict[str, Callable[[str], object]]) -> None:
    """Write a workbook with real numbers in its cells, then repack it without the time of writing."""
    book = openpyxl.Workbook()
    book.remove(book.active)
    for title, table in tables.items():
        sheet = book.create_sheet(title)
        sheet.append(list(table.columns))
        cells = [[numeric.get(name, str)(value) if value else None for value in table[name]] for name in table.columns]
        for row in zip(*cells, strict=True):
            sheet.append(row)
    raw = BytesIO()
    book.save(raw)
    with zipfile.ZipFile(raw) as old, zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as new:
        for name in sorted(old.namelist()):
            content = old.read(name)
            if name == "docProps/core.xml":
                stamp = book.properties.modified.strftime("%Y-%m-%dT%H:%M:%SZ").encode()
                created = book.properties.created.strftime("%Y-%m-%dT%H:%M:%SZ").encode()
                content = content.replace(stamp, FIXED_TIME.encode()).replace(created, FIXED_TIME.encode())
            new.writestr(zipfile.ZipInfo(name, (2024, 11, 4, 8, 0, 0)), content, zipfile.ZIP_DEFLATED)
