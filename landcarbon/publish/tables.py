"""Plain-text tables: the same bytes on every rerun, and no cell a spreadsheet would take for a formula."""

from __future__ import annotations

import re
from collections.abc import Iterable
from pathlib import Path

import pandas as pd

from landcarbon.errors import ResultsError
from landcarbon.findings import FINDING_COLUMNS
from landcarbon.publish.results import CHANGE_COLUMNS, OPTIONAL_COLUMNS, STOCK_COLUMNS

__all__ = ["FLOAT_FORMAT", "TEXT_COLUMNS", "read_table", "restore_text", "safe_text", "table_columns", "write_table"]

#: Columns of the published tables that hold text; all others are numbers, except where named below.
TEXT_COLUMNS = frozenset(
    {"by", "unit", "survey", "since", "until", "pool", "method", "severity", "rule", "table", "file", "column", "value"}
    | {
        "plot",
        "tree",
        "message",
        "remedy",
        "step",
        "parcel",
        "stratum",
        "of",
        "model",
        "coefficients",
        "term",
        "rasters",
    }
    | {"why", "plots_compared"}
)
_TRUTH_COLUMNS = frozenset({"used"})
_WHOLE_COLUMNS = frozenset({"row", "row_id"})
_NUMBER_COLUMNS = (
    frozenset([*OPTIONAL_COLUMNS, *STOCK_COLUMNS, *CHANGE_COLUMNS, *FINDING_COLUMNS]) - TEXT_COLUMNS - _TRUTH_COLUMNS
)

# Ten significant digits: far beyond what a sample can tell, short enough to hide the last-bit noise of summation.
FLOAT_FORMAT = "%.10g"
_DANGEROUS = re.compile(r"'*[=+\-@\t\r\n]")
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_RESTORED = re.compile(r"'('*[=+\-@\t\r\n])")


def table_columns(file_name: str) -> list[str] | None:
    """Return the fixed columns of a published table, or None where they are free."""
    return {"stocks.csv": STOCK_COLUMNS, "change.csv": CHANGE_COLUMNS, "findings.csv": FINDING_COLUMNS}.get(file_name)


def safe_text(text: str) -> str:
    """Put an apostrophe before a text that a spreadsheet would run as a formula.

    Parameters
    ----------
    text : str
        Cell content. A text that is wholly a number is harmless and stays as it is.

    Returns
    -------
    str
        The cell as written. :func:`restore_text` gives the text back, except for carriage returns and NUL.
    """
    if _DANGEROUS.match(text) and not _NUMBER.fullmatch(text):
        text = "'" + text
    # A bare carriage return or a NUL inside a cell breaks readers of CSV files.
    return text.replace("\r\n", "\n").replace("\r", " ").replace("\x00", "\ufffd")


def restore_text(text: str) -> str:
    """Take off the apostrophe that :func:`safe_text` put before a text."""
    return _RESTORED.sub(r"\1", text, count=1) if _RESTORED.match(text) else text


def write_table(frame: pd.DataFrame, path: Path) -> None:
    """Write a frame as UTF-8 CSV with line feeds, in the column order of the published table.

    Parameters
    ----------
    frame : DataFrame
        The table; the index is not written.
    path : Path
        File to write; its name decides the columns (:func:`table_columns`).
    """
    columns = table_columns(path.name)
    if columns is not None:
        columns = columns + [name for name in OPTIONAL_COLUMNS if name in frame]
    shown = frame if columns is None else frame[columns]
    written = {str(name): _written(shown[name]) for name in shown.columns}
    table = pd.DataFrame(written, columns=[str(name) for name in shown.columns])
    table = table.rename(columns=safe_text)
    table.to_csv(
        path,
        index=False,
        encoding="utf-8",
        errors="backslashreplace",
        lineterminator="\n",
        float_format=FLOAT_FORMAT,
    )


def _written(column: pd.Series) -> pd.Series:
    column = column.reset_index(drop=True)
    if pd.api.types.is_float_dtype(column.dtype):
        return column + 0.0  # turns -0.0 into 0.0
    if pd.api.types.is_bool_dtype(column.dtype) or pd.api.types.is_numeric_dtype(column.dtype):
        return column
    if pd.api.types.is_datetime64_any_dtype(column.dtype):
        return column.dt.strftime("%Y-%m-%d").fillna("")
    plain = column.astype("object")
    missing = plain.isna()
    text = plain.where(~missing, "").map(str)
    return text.map({cell: safe_text(cell) for cell in text.unique()})


def read_table(path: Path) -> pd.DataFrame:
    """Read a published table back.

    Parameters
    ----------
    path : Path
        A file made by :func:`write_table`.

    Returns
    -------
    DataFrame
        Text columns as str (a unit called ``NA`` stays a name), the others as numbers or bool.

    Raises
    ------
    ResultsError
        If the file lacks a column of its published form, or a number cannot be read.
    """
    try:
        # The Python-level converters of read_csv are slow; all cells come as text and are converted column by column.
        raw = pd.read_csv(path, dtype=str, keep_default_na=False, na_filter=False, encoding="utf-8")
        _require(raw.columns, table_columns(path.name))
        return pd.DataFrame({name: _parsed(raw[name]) for name in raw.columns}, columns=list(raw.columns))
    except (OSError, ValueError) as error:
        raise ResultsError(
            f"{path.name} cannot be read ({error})",
            where=str(path.parent),
            remedy="Run the inventory again to write the results anew",
        ) from error


def _require(found: Iterable[str], wanted: list[str] | None) -> None:
    missing = [name for name in wanted or [] if name not in set(found)]
    if missing:
        raise ValueError(f"no column {', '.join(missing)}")


def _parsed(column: pd.Series) -> pd.Series:
    name = str(column.name)
    if name in TEXT_COLUMNS:
        return _as_text(column)
    if column.isin(["True", "False"]).all() and (len(column) or name in _TRUTH_COLUMNS):
        return column.eq("True")
    filled = column.where(column.ne(""), None)
    if name in _NUMBER_COLUMNS:
        number = pd.to_numeric(filled)
        return number.astype("Int64") if name in _WHOLE_COLUMNS else number
    number = pd.to_numeric(filled, errors="coerce")
    return number if number.isna().equals(column.eq("")) else _as_text(column)


def _as_text(column: pd.Series) -> pd.Series:
    return column.map({cell: restore_text(cell) for cell in column.unique()}).astype("str")
