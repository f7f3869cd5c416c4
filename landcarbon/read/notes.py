"""Findings of reading, made from the rules."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import pandas as pd

from landcarbon.findings import empty_findings, make_findings
from landcarbon.read.rules import read_rules

__all__ = ["note"]


def note(
    name: str,
    rows: pd.DataFrame | None = None,
    *,
    fill: Mapping[str, object] | pd.DataFrame | None = None,
    **fields: Any,
) -> pd.DataFrame:
    """Make findings of one rule.

    Parameters
    ----------
    name : str
        Rule, as in the data file.
    rows : DataFrame, optional
        Offending rows, one finding each; a single finding without.
    fill : mapping or DataFrame, optional
        Words for the braces: one for all, or a frame with a row for each of ``rows``.
    **fields
        Values of finding columns, e.g. ``value`` or ``file``; ``table`` and ``column`` go before those of the rule.

    Returns
    -------
    DataFrame
        Findings; without rows if ``rows`` has none.
    """
    if rows is not None and rows.empty:
        return empty_findings()
    rule = read_rules()[name]
    column = str(fields.pop("column", rule.column))
    table = str(fields.pop("table", rule.table))
    found = make_findings(
        rule.rule, rows, severity=rule.severity, table=table, message="", column=column, used=rule.used, **fields
    )
    each = isinstance(fill, pd.DataFrame)
    words = fill.to_dict("records") if isinstance(fill, pd.DataFrame) else [dict(fill or {})]
    for part, text in (("message", rule.message), ("remedy", rule.remedy)):
        told = [text.format_map({str(key): word for key, word in line.items()}) for line in words]
        found[part] = pd.Series(told if each else told * len(found), dtype="str")
    return found
