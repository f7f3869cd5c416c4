"""Follow a published figure back to the plots and trees it was worked out from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.errors import UserError
from landcarbon.publish.results import Results

__all__ = ["Trace", "trace_unit"]

TREE_STATUS = {"above_ground": ("live",), "dead_wood": ("dead",), "below_ground": ("live",), "all": ("live", "dead")}


@dataclass(frozen=True)
class Trace:
    """What stands behind one row of the stocks table.

    Attributes
    ----------
    row : Series
        The published row.
    plots : DataFrame
        Plots of the unit at that survey, with density_t_c_ha of the pool.
    trees : DataFrame
        Trees counted on those plots, largest contribution first, with file, row, equation, expansion and
        density_t_c_ha, the tree's own contribution [t C per ha of its plot].
    set_aside : DataFrame
        Findings of rows on those plots that were set aside.
    """

    row: pd.Series
    plots: pd.DataFrame
    trees: pd.DataFrame
    set_aside: pd.DataFrame


def trace_unit(
    results: Results,
    *,
    parcel: str | None = None,
    stratum: str | None = None,
    survey: str | None = None,
    pool: str = "above_ground",
) -> Trace:
    """Gather what one figure rests on.

    Parameters
    ----------
    results : Results
        An opened results folder.
    parcel, stratum : str, optional
        The unit; the whole inventory if neither is given.
    survey : str, optional
        Default: the last.
    pool : str
        A pool of the stocks table.

    Raises
    ------
    UserError
        If both units are given, or there is no such row.
    """
    if parcel is not None and stratum is not None:
        raise UserError("a parcel and a stratum were given", remedy="Name one of them.")
    by, unit = _unit(results, parcel, stratum)
    surveys = [str(name) for name in results.surveys["survey"]]
    when = surveys[-1] if survey is None else str(survey)
    rows = results.stocks
    found = rows[(rows["by"] == by) & (rows["unit"] == unit) & (rows["survey"] == when) & (rows["pool"] == pool)]
    if found.empty:
        units = rows.loc[rows["by"] == by, "unit"].drop_duplicates().tolist()
        pools = rows["pool"].drop_duplicates().tolist()
        raise UserError(
            f"no figure for {by} {unit!r}, survey {when!r}, pool {pool!r}",
            remedy=f"Units: {_some(units)}. Surveys: {_some(surveys)}. Pools: {_some(pools)}.",
        )
    plots = results.plots
    here = (plots["survey"].astype("str") == when) & (plots["pool"] == pool) & plots["inside"]
    if by != "inventory":
        here &= plots[by].astype("str") == unit
    plots = plots.loc[here].reset_index(drop=True)
    names = set(plots["plot"].astype("str"))
    findings = results.findings
    aside = findings[~findings["used"] & (findings["survey"] == when) & findings["plot"].isin(names)]
    return Trace(found.iloc[0], plots, _trees(results.trees, when, names, pool), aside.reset_index(drop=True))


def _unit(results: Results, parcel: str | None, stratum: str | None) -> tuple[str, str]:
    if parcel is not None:
        return "parcel", parcel
    if stratum is not None:
        return "stratum", stratum
    return "inventory", results.name


def _trees(trees: pd.DataFrame, survey: str, plots: set[str], pool: str) -> pd.DataFrame:
    wanted = TREE_STATUS.get(pool, ())
    mask = trees["used"] & (trees["survey"].astype("str") == survey) & trees["plot"].astype("str").isin(plots)
    chosen = trees[mask & trees["status"].astype("str").isin(wanted)]
    share = chosen["carbon_kg"].to_numpy() * chosen["expansion"].to_numpy() / 1000.0
    chosen = chosen.assign(density_t_c_ha=share)
    order = np.argsort(-share, kind="stable")
    return chosen.iloc[order].reset_index(drop=True)


def _some(values: list[str], most: int = 12) -> str:
    text = ", ".join(str(value) for value in values[:most])
    return f"{text}, … ({len(values)})" if len(values) > most else text
