"""The intervals that are published: of the kind asked for, and one-sided lower bounds."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from landcarbon.estimate.interval import df_of_interval, limits

__all__ = ["with_interval"]


def with_interval(table: pd.DataFrame, *, confidence: float, kind: str, lower: float | None) -> pd.DataFrame:
    """Take the limits of stocks anew if another kind is asked for, and add lower bounds.

    Parameters
    ----------
    table : DataFrame
        Stocks with standard errors and df, or change with standard errors and intervals.
    confidence : float
        Of the two-sided intervals.
    kind : str
        "t", or "log" for stocks; changes can be negative and keep Student's t.
    lower : float or None
        Confidence of the lower bounds; none are added if it is None.

    Returns
    -------
    DataFrame
        ``density_at_least`` and ``stock_at_least``, or ``change_at_least``, are what the true value is not below with
        the confidence ``lower``.
    """
    if table.empty or (kind == "t" and lower is None):
        return table
    return _stocks(table, confidence, kind, lower) if "stock_t_c" in table else _change(table, confidence, lower)


def _stocks(table: pd.DataFrame, confidence: float, kind: str, lower: float | None) -> pd.DataFrame:
    density, se, df, area = (
        table[name].to_numpy(dtype=float) for name in ("density_t_c_ha", "density_se", "df", "area_ha")
    )
    made: dict[str, Any] = {}
    if kind != "t":
        both = limits(density, se, df, confidence=confidence, kind=kind)
        made = {"density_low": both.low, "density_high": both.high}
        made |= {"stock_low": both.low * area, "stock_high": both.high * area}
        logs = (both.kind == "log") & np.isfinite(both.low)
        made["method"] = table["method"].where(~logs, table["method"] + "; log interval")
    if lower is not None:
        least = limits(density, se, df, confidence=lower, kind=kind, side="lower").low
        made |= {"density_at_least": least, "stock_at_least": least * area}
    return table.assign(**made)


def _change(table: pd.DataFrame, confidence: float, lower: float | None) -> pd.DataFrame:
    if lower is None:
        return table
    change, se, high = (table[name].to_numpy(dtype=float) for name in ("change_t_c", "change_se", "change_high"))
    df = df_of_interval(high - change, se, confidence)
    return table.assign(change_at_least=limits(change, se, df, confidence=lower, side="lower").low)
