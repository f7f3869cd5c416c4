"""Stocks and change of an inventory whose parts were not all measured at every survey.

A pool is stated from the parts measured at the survey, a change from those measured at both, and what is left out is
named in ``method``: a small part that one survey skipped must not take the whole pool with it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.change import estimate_change
from landcarbon.estimate.domains import DOMAIN_COLUMNS, estimate_domains
from landcarbon.estimate.stocks import estimate_stocks
from landcarbon.findings import empty_findings, join_findings, make_findings
from landcarbon.publish.results import CHANGE_COLUMNS

__all__ = ["measured_columns", "state_change", "state_domains", "state_stocks"]

_LEVELS = ("inventory", "stratum", "parcel")
_STOCK_SPREAD = ["density_se", "density_low", "density_high", "stock_se", "stock_low", "stock_high", "df"]
_CHANGE_SPREAD = ["change_se", "change_low", "change_high", "change_t_c_ha_yr_se"]


def state_stocks(
    plot_parts: pd.DataFrame, sums: Mapping[str, Sequence[str]], surveys: Sequence[str], **options: Any
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Estimate stocks at every survey.

    Parameters
    ----------
    plot_parts : DataFrame
        One row per plot and survey with a column per part.
    sums : mapping
        Columns of each pool, and ``all``.
    surveys : sequence of str
        In the order of time.
    **options
        strata, parcels, confidence and inventory_name of ``estimate_stocks``.

    Returns
    -------
    stocks, findings : DataFrame
    """
    measured = measured_columns(plot_parts)
    groups: dict[tuple[tuple[str, tuple[str, ...]], ...], list[str]] = {}
    for survey in surveys:
        kept = _kept(sums, [measured.get(survey, set())])
        groups.setdefault(tuple((pool, tuple(columns)) for pool, columns in kept.items()), []).append(survey)
    tables, findings = [], []
    for chosen, names in groups.items():
        part = plot_parts if len(groups) == 1 else plot_parts[plot_parts["survey"].isin(names)]
        pools = [pool for pool, _ in chosen if pool != "all"]
        part, given = _summed(part, dict(chosen))
        table, found = estimate_stocks(part, surveys=names, pools=pools, sums=given, **options)
        table = _with_defaults(table, dict(chosen), _STOCK_SPREAD)
        found = _without_flat(found, dict(chosen))
        tables.append(_with_gaps(table, sums, dict(chosen), "not measured, or no usable rows"))
        findings.append(found)
    if len(tables) == 1:
        return tables[0], join_findings(findings)
    return _in_order(pd.concat(tables, ignore_index=True), sums, surveys), join_findings(findings)


def state_change(
    plot_parts: pd.DataFrame, sums: Mapping[str, Sequence[str]], since: str, until: str, **options: Any
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Estimate the change between two surveys from the parts measured at both.

    Parameters
    ----------
    plot_parts, sums
        As for :func:`state_stocks`.
    since, until : str
        The surveys.
    **options
        strata, parcels, confidence and inventory_name of ``estimate_change``.

    Returns
    -------
    change, findings : DataFrame
        Without rows, and with a finding that says so, where one of the surveys has no plot to count.
    """
    lacking = [survey for survey in (since, until) if not (plot_parts["survey"] == survey).any()]
    if lacking:
        return pd.DataFrame(columns=CHANGE_COLUMNS), make_findings(
            "survey without plots",
            severity="error",
            table="change",
            survey=lacking[0],
            message=f"No plot counts at survey {', '.join(lacking)}: change {since} to {until} cannot be stated.",
            remedy="See the other findings for why its plots do not count.",
        )
    measured = measured_columns(plot_parts)
    kept = _kept(sums, [measured.get(survey, set()) for survey in (since, until)])
    pools = [pool for pool in kept if pool != "all"]
    part, given = _summed(plot_parts[plot_parts["survey"].isin([since, until])], kept)
    table, findings = estimate_change(part, since=since, until=until, pools=pools, sums=given, **options)
    table = _with_gaps(_with_defaults(table, kept, _CHANGE_SPREAD), sums, kept, "not measured at both surveys")
    findings = _without_flat(findings, kept)
    return table, join_findings([findings, _gap_finding(sums, kept, since, until)])


def state_domains(
    plot_parts: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    surveys: Sequence[str],
    column: str,
    *,
    strata: pd.DataFrame,
    areas: Mapping[str, float] | None,
    confidence: float,
) -> pd.DataFrame:
    """Estimate densities and stocks of domains at every survey, from the parts measured there.

    Parameters
    ----------
    plot_parts, sums, surveys
        As for :func:`state_stocks`.
    column : str
        Column of the plot table that names the domains; blank where a plot is in none.
    strata : DataFrame
        stratum, area_ha.
    areas : mapping or None
        Area of each domain [ha]; estimated from the plots if it is None.
    confidence : float
        Of the intervals.

    Returns
    -------
    DataFrame
        ``DOMAIN_COLUMNS`` of ``landcarbon.estimate.domains``; pools of which nothing was measured have no row.
    """
    measured = measured_columns(plot_parts)
    tables = []
    for survey in surveys:  # over surveys
        there = measured.get(survey, set())
        kept = {
            pool: [name for name in columns if name in there]
            for pool, columns in sums.items()
            if pool != "all" and there.intersection(columns)
        }
        if kept:
            given = {**kept, "all": [name for columns in kept.values() for name in columns]}
            part = plot_parts[(plot_parts["survey"] == survey).to_numpy(dtype=bool)]
            table = estimate_domains(
                part, strata, column, areas, surveys=[survey], pools=list(kept), confidence=confidence, sums=given
            )
            asked = {pool: sums[pool] for pool in kept}
            tables.append(_with_gaps(table, asked, given, "not measured, or no usable rows"))
    return pd.concat(tables, ignore_index=True) if tables else pd.DataFrame(columns=DOMAIN_COLUMNS)


def measured_columns(plot_parts: pd.DataFrame) -> dict[str, set[str]]:
    """Columns with a figure on some plot that counts, by survey."""
    columns = [name for name in plot_parts.columns if "." in str(name)]
    there = plot_parts[columns].notna().to_numpy() & plot_parts["inside"].to_numpy(dtype=bool)[:, None]
    codes, labels = pd.factorize(plot_parts["survey"])
    found = {}
    for code, label in enumerate(labels):  # over surveys
        found[str(label)] = {
            str(name) for name, any_ in zip(columns, there[codes == code].any(axis=0), strict=True) if any_
        }
    return found


def _kept(sums: Mapping[str, Sequence[str]], measured: list[set[str]]) -> dict[str, list[str]]:
    """Drop parts that are missing; a pool that is missing as a whole stays, for the estimator to say so."""
    kept = {}
    for pool, columns in sums.items():
        if pool != "all":
            there = [column for column in columns if all(column in names for names in measured)]
            kept[pool] = there or list(columns)
    return {**kept, "all": [column for columns in kept.values() for column in columns]}


def _summed(
    plot_parts: pd.DataFrame, sums: Mapping[str, Sequence[str]]
) -> tuple[pd.DataFrame, Mapping[str, Sequence[str]] | None]:
    """Add up the parts on the plots where all were measured on all of them: same figures, much less work."""
    if plot_parts[list(sums["all"])].isna().to_numpy().any():
        return plot_parts, sums
    totals = {pool: plot_parts[list(columns)].sum(axis=1) for pool, columns in sums.items()}
    return plot_parts.drop(columns=list(sums["all"])).assign(**totals), None


def _gaps(sums: Mapping[str, Sequence[str]], kept: Mapping[str, Sequence[str]]) -> dict[str, list[str]]:
    gaps = {pool: [name for name in sums[pool] if name not in kept[pool]] for pool in sums if pool != "all"}
    gaps = {pool: names for pool, names in gaps.items() if names}
    return {**gaps, "all": [name for names in gaps.values() for name in names]}


def _flat(kept: Mapping[str, Sequence[str]]) -> list[str]:
    """Pools that are a default factor and nothing else."""
    return [pool for pool, columns in kept.items() if pool != "all" and all(c.endswith(".default") for c in columns)]


def _without_flat(findings: pd.DataFrame, kept: Mapping[str, Sequence[str]]) -> pd.DataFrame:
    """Drop the warning that a default factor does not vary: it is meant not to."""
    return findings[~((findings["rule"] == "zero variance") & findings["column"].isin(_flat(kept)))]


def _with_defaults(table: pd.DataFrame, kept: Mapping[str, Sequence[str]], spread: list[str]) -> pd.DataFrame:
    """Take away the error of a flat default factor: it has none from sampling, and zero would be untrue."""
    rows = table["pool"].isin(_flat(kept))
    if not rows.any():
        return table
    blank = {name: table[name].mask(rows) for name in spread}
    told = "default factor, the same on every plot; its uncertainty is not stated"
    return table.assign(**blank, method=table["method"].mask(rows, told))


def _with_gaps(
    table: pd.DataFrame, sums: Mapping[str, Sequence[str]], kept: Mapping[str, Sequence[str]], why: str
) -> pd.DataFrame:
    method = table["method"]
    for pool, names in _gaps(sums, kept).items():
        if names:
            method = method.where(table["pool"] != pool, method + f"; without {', '.join(names)}: {why}")
    return table.assign(method=method)


def _gap_finding(
    sums: Mapping[str, Sequence[str]], kept: Mapping[str, Sequence[str]], since: str, until: str
) -> pd.DataFrame:
    names = _gaps(sums, kept)["all"]
    if not names:
        return empty_findings()
    return make_findings(
        "part measured at one survey",
        severity="warning",
        table="change",
        survey=f"{since} to {until}",
        message=f"Change leaves out what was not measured at both surveys: {', '.join(names)}.",
        remedy="Measure the same parts at every survey.",
    )


def _in_order(table: pd.DataFrame, sums: Mapping[str, Sequence[str]], surveys: Sequence[str]) -> pd.DataFrame:
    level, survey, pool = (
        table[name].map({label: at for at, label in enumerate(order)}).to_numpy()
        for name, order in (("by", _LEVELS), ("survey", surveys), ("pool", list(sums)))
    )
    unit = pd.factorize(table["by"].astype("str") + "\n" + table["unit"].astype("str"))[0]
    return table.iloc[np.lexsort((pool, survey, unit, level))].reset_index(drop=True)
