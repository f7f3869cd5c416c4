"""What rasters bring: variances of the plain and the assisted estimates, by the program's own estimators."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_lines import Lines
from landcarbon.estimate.stocks import estimate_stocks

__all__ = ["measure_gain"]

_CONFIDENCE = 0.95  # the intervals are not looked at


def measure_gain(
    plain: pd.DataFrame,
    adjusted: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    strata: pd.DataFrame,
    lines: dict[str, Lines],
    engine: dict[str, Any],
    *,
    phases: pd.DataFrame,
    area: np.ndarray,
) -> pd.DataFrame:
    """Compare the estimates from plain and adjusted plot values.

    Parameters
    ----------
    plain, adjusted : DataFrame
        Plot tables.
    sums : mapping
        Columns of each pool, and ``all``.
    strata : DataFrame
        stratum, area_ha.
    lines : dict
        Lines of each survey.
    engine : dict
        Further options of ``estimate_stocks``.
    phases : DataFrame
        Variance to add for raster means from a first phase of points.
    area : ndarray
        Of the strata of the lines [ha].

    Returns
    -------
    DataFrame
        survey, pool, stratum ("" for the inventory), plots, plain and assisted variance (raised for the slopes) and
        relative_efficiency.
    """
    blocks = []
    none = not any(line.used.any() for line in lines.values())
    for survey, line in lines.items():
        before = _variances(plain, sums, strata, line, survey, engine)
        after = before if none else _variances(adjusted, sums, strata, line, survey, engine)
        if before.empty or after.empty:
            continue
        joined = before[["pool", "stratum", "plots", "plain"]].merge(
            after[["pool", "stratum", "plain"]].rename(columns={"plain": "assisted"}), on=["pool", "stratum"]
        )
        raised = joined["assisted"] * _raised(joined, sums, line, area) + _of_points(joined, phases, survey)
        blocks.append(joined.assign(survey=survey, assisted=raised))
    columns = ["survey", "pool", "stratum", "plots", "plain", "assisted"]
    table = pd.concat(blocks, ignore_index=True)[columns] if blocks else pd.DataFrame(columns=columns)
    efficiency = [_ratio(one, two) for one, two in zip(table["plain"], table["assisted"], strict=True)]
    return table.assign(relative_efficiency=np.array(efficiency, dtype=float))


def _ratio(plain: float, assisted: float) -> float:
    if not np.isfinite(plain) or not np.isfinite(assisted) or plain <= 0:
        return np.nan
    return plain / assisted if assisted > 0 else np.inf


def _variances(
    table: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    strata: pd.DataFrame,
    line: Lines,
    survey: str,
    engine: dict[str, Any],
) -> pd.DataFrame:
    """Variance of the density by pool, of the strata and (stratum "") of the inventory."""
    measured = {name for name, yes in zip(line.columns, line.measured, strict=True) if yes}
    kept = {pool: [name for name in names if name in measured] for pool, names in sums.items() if pool != "all"}
    kept = {pool: names for pool, names in kept.items() if names}
    if not kept:
        return pd.DataFrame()
    columns = [name for names in kept.values() for name in names]
    part = table.iloc[line.position]
    given: dict[str, list[str]] | None = {**kept, "all": columns}
    pools = list(kept)
    if not part[columns].isna().to_numpy().any():
        totals = {pool: part[kept.get(pool, columns)].sum(axis=1) for pool in (*pools, "all")}
        part, given = part.drop(columns=columns).assign(**totals), None
    stocks, _ = estimate_stocks(
        part, strata, None, [survey], pools=pools, confidence=_CONFIDENCE, inventory_name="", sums=given, **engine
    )
    rows = stocks.assign(plain=stocks["density_se"] ** 2, stratum=stocks["unit"].where(stocks["by"] == "stratum", ""))
    if not (rows["by"] == "inventory").any():
        whole = rows.groupby("pool", sort=False).agg(plain=("plain", "sum"), plots=("plots", "sum")).reset_index()
        rows = pd.concat([whole.assign(stratum=""), rows], ignore_index=True)
    return rows


def _of_points(joined: pd.DataFrame, phases: pd.DataFrame, survey: str) -> np.ndarray:
    """Return the variance of raster means from points, in the rows of the comparison."""
    mine = phases[(phases["since"] == survey) & (phases["until"] == survey)]
    table = mine.set_index(["pool", "unit"])["variance"]
    keys = pd.MultiIndex.from_arrays([joined["pool"].astype("str"), joined["stratum"].astype("str")])
    return table.reindex(keys).fillna(0.0).to_numpy(dtype=float)


def _raised(joined: pd.DataFrame, sums: Mapping[str, Sequence[str]], line: Lines, area: np.ndarray) -> np.ndarray:
    """Return the factor of the variance for the fitted slopes: the largest of the parts of a pool."""
    factors = np.ones(len(joined))
    where = {"": -1} | {name: at for at, name in enumerate(line.labels)}
    at = joined["stratum"].map(where).to_numpy()
    whole, _ = line.whole(area)
    for pool, names in sums.items():
        parts = [line.columns.index(name) for name in names]
        table = np.column_stack([line.inflation[parts], whole[parts]])  # the last column: the inventory
        mine = (joined["pool"] == pool).to_numpy()
        factors[mine] = table.max(axis=0, initial=1.0)[at[mine]]
    return factors
