"""Findings: what a check saw, in which row, what it does to the result and what to do about it.

One table serves every step. A step makes its findings with :func:`make_findings` and hands them on beside its result;
:func:`join_findings` puts them together. An input row that no longer counts has a finding with ``used`` false, so that
rows used plus rows set aside equal rows read.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import cache
from typing import Any

import numpy as np
import pandas as pd

__all__ = ["FINDING_COLUMNS", "SEVERITIES", "empty_findings", "join_findings", "make_findings"]

SEVERITIES = ("error", "warning", "note")

FINDING_COLUMNS = [
    "severity",  # error: not used or result wrong until mended; warning: look at it; note: good to know
    "rule",  # short fixed name of the check
    "table",  # trees, plots, visits, parcels, strata, equations, estimate, change, ...
    "file",
    "row",  # line in the user's file, header counted as 1; <NA> where the finding is not about a row
    "column",
    "value",  # the offending value as text
    "survey",
    "plot",
    "tree",
    "used",  # False: the row was set aside
    "row_id",  # key of the tree row, for the reconciliation; <NA> otherwise
    "carbon_kg",  # carbon at stake where it can be worked out, kg C of the tree or of the plot's sample
    "message",
    "remedy",
]

_TEXT = ["severity", "rule", "table", "file", "column", "value", "survey", "plot", "tree", "message", "remedy"]


@cache
def _blank() -> pd.DataFrame:
    columns: dict[str, pd.Series] = {name: pd.Series(dtype="str") for name in FINDING_COLUMNS}
    columns.update(row=pd.Series(dtype="Int64"), row_id=pd.Series(dtype="Int64"))
    columns.update(carbon_kg=pd.Series(dtype="float64"), used=pd.Series(dtype=bool))
    return pd.DataFrame(columns)


def empty_findings() -> pd.DataFrame:
    """Return a findings table without rows, with the right columns and types."""
    return _blank().copy()


def make_findings(
    rule: str,
    rows: pd.DataFrame | None = None,
    *,
    severity: str,
    table: str,
    message: str,
    remedy: str = "",
    column: str = "",
    used: bool = True,
    **fields: object,
) -> pd.DataFrame:
    """Build findings of one rule, one per row of ``rows`` (or a single one without ``rows``).

    Parameters
    ----------
    rule : str
        Short fixed name of the check.
    rows : DataFrame, optional
        The offending rows; its columns file, row, row_id, survey, plot, tree are taken over where they exist, and
        ``rows[column]`` becomes ``value``.
    severity : {"error", "warning", "note"}
        How much it matters.
    table : str
        Canonical table the rows belong to.
    message, remedy : str
        What it means for the result, and what to do.
    column : str
        Canonical column at fault.
    used : bool
        False if the rows were set aside.
    **fields
        Values for other finding columns (scalar, or one per row), e.g. ``value=`` or ``carbon_kg=``.

    Returns
    -------
    DataFrame
        Columns ``FINDING_COLUMNS``; empty if ``rows`` is empty.
    """
    if severity not in SEVERITIES:
        raise ValueError(f"severity {severity!r} is not one of {', '.join(SEVERITIES)}")
    count = 1 if rows is None else len(rows)
    if count == 0:
        return empty_findings()
    data: dict[str, Any] = {name: "" for name in _TEXT}
    data.update(row=pd.NA, row_id=pd.NA, carbon_kg=np.nan)
    if rows is not None:
        for name in ("file", "row", "row_id", "survey", "plot", "tree"):
            if name in rows:
                data[name] = rows[name].to_numpy(dtype=object)
        if column and column in rows:
            data["value"] = _as_text(rows[column])
    data.update(
        severity=severity, rule=rule, table=table, column=column, used=used, message=message, remedy=remedy, **fields
    )
    return _typed(data, count)


def join_findings(parts: Iterable[pd.DataFrame]) -> pd.DataFrame:
    """Put findings tables together, in the order given."""
    kept = [part for part in parts if len(part)]
    if not kept:
        return empty_findings()
    return pd.concat(kept, ignore_index=True)


def _as_text(values: pd.Series) -> np.ndarray:
    text = values.astype("object").where(values.notna(), "")
    return text.map(str).to_numpy(dtype=object)


def _typed(data: dict[str, Any], count: int) -> pd.DataFrame:
    index = pd.RangeIndex(count)
    columns: dict[str, Any] = {}
    for name in FINDING_COLUMNS:
        value = data[name]
        if name in _TEXT:
            text = np.full(count, value, dtype=object) if isinstance(value, str) else _text(value, index)
            columns[name] = pd.array(text, dtype="str")
        elif name == "used":
            columns[name] = np.broadcast_to(np.asarray(value, dtype=bool), count)
        elif name == "carbon_kg":
            columns[name] = np.broadcast_to(np.asarray(value, dtype="float64"), count)
        else:
            numbers = [value] * count if value is pd.NA else value
            columns[name] = pd.Series(numbers, index=index).astype("Int64")
    return pd.DataFrame(columns, index=index)


def _text(value: Any, index: pd.RangeIndex) -> np.ndarray:
    column = pd.Series(value if not isinstance(value, pd.Series) else value.to_numpy(), index=index, dtype="object")
    return column.where(column.notna(), "").map(str).to_numpy(dtype=object)
