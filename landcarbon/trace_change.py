"""Follow a published change back to the plots it was worked out from."""

from __future__ import annotations

from dataclasses import dataclass, field

import pandas as pd

from landcarbon.constants import DAYS_PER_YEAR
from landcarbon.errors import UserError
from landcarbon.publish.results import Results, sums_of_plots
from landcarbon.trace import composition_of, match_name

__all__ = ["ChangeTrace", "trace_change"]


@dataclass(frozen=True)
class ChangeTrace:
    """What stands behind one row of the change table.

    Attributes
    ----------
    row : Series
        The published row.
    plots : DataFrame
        Plots of the unit at either survey: plot, stratum, size, since_date, until_date, years, since_t_c_ha,
        until_t_c_ha (values the estimates take), change_t_c_ha, change_t_c_ha_yr; blank where a plot was measured at
        one survey only.
    adjusted : bool
        Whether the values are adjusted by rasters.
    composition : DataFrame
        How the figure of a parcel is composed, pool by pool, as for stocks; without rows where it is not.
    """

    row: pd.Series
    plots: pd.DataFrame
    adjusted: bool
    composition: pd.DataFrame = field(default_factory=pd.DataFrame)


def trace_change(
    results: Results,
    since: str,
    *,
    parcel: str | None = None,
    stratum: str | None = None,
    survey: str | None = None,
    pool: str = "above_ground",
) -> ChangeTrace:
    """Gather what one change rests on.

    Parameters
    ----------
    results : Results
        An opened results folder.
    since : str
        Earlier survey.
    parcel, stratum : str, optional
        The unit; the whole inventory if neither is given.
    survey : str, optional
        Later survey; default: the last.
    pool : str
        A pool of the change table.

    Raises
    ------
    UserError
        If both units are given, or there is no such row.
    """
    if parcel is not None and stratum is not None:
        raise UserError("a parcel and a stratum were given", remedy="Name one of them.")
    row = _published(results, (since, survey), parcel, stratum, pool)
    by, unit, pool = (str(row[name]) for name in ("by", "unit", "pool"))
    here = sums_of_plots(results.plots, pool)
    here = here[here["inside"].astype(bool)]
    if by != "inventory":
        here = here[here[by].astype("str") == unit]
    adjusted = "adjusted_t_c_ha" in here
    value = "adjusted_t_c_ha" if adjusted else "density_t_c_ha"
    return ChangeTrace(
        row, _pairs(here, row, value), adjusted and _differs(here), composition_of(results, row, "change")
    )


def _published(
    results: Results, surveys: tuple[str, str | None], parcel: str | None, stratum: str | None, pool: str
) -> pd.Series:
    rows = results.change
    names = [str(name) for name in results.surveys["survey"]]
    since = match_name(surveys[0], names, "survey")
    until = names[-1] if surveys[1] is None else match_name(str(surveys[1]), names, "survey")
    by, given = ("parcel", parcel) if parcel is not None else ("stratum", stratum)
    if given is None:
        by, unit = "inventory", results.name
    else:
        unit = match_name(given, rows.loc[rows["by"] == by, "unit"].unique(), by)
    named = match_name(pool.replace("-", "_"), rows["pool"].astype("str").unique(), "pool")
    dates = (rows["since"].astype("str") == since) & (rows["until"].astype("str") == until)
    found = rows[dates & (rows["by"] == by) & (rows["unit"] == unit) & (rows["pool"] == named)]
    if found.empty:
        told = ", ".join(f"{a} to {b}" for a, b in rows[["since", "until"]].drop_duplicates().to_numpy())
        raise UserError(
            f"there is no change of {by} {unit!r} from {since} to {until}, pool {named!r}",
            remedy=f"Change is stated for: {told or 'no pair of surveys'}.",
        )
    return found.iloc[0]


def _pairs(here: pd.DataFrame, row: pd.Series, value: str) -> pd.DataFrame:
    """Put the plots of both surveys side by side."""
    survey = here["survey"].astype("str")
    sides = [
        here.loc[survey == str(row[name]), ["plot", "stratum", "size", "date", value]] for name in ("since", "until")
    ]
    both = sides[0].merge(sides[1], on="plot", how="outer", suffixes=("_since", "_until"))
    dates = [pd.to_datetime(both[f"date_{name}"]) for name in ("since", "until")]
    years = (dates[1] - dates[0]) / pd.Timedelta(days=1) / DAYS_PER_YEAR
    grown = both[f"{value}_until"] - both[f"{value}_since"]
    return pd.DataFrame(
        {
            "plot": both["plot"].astype("str"),
            "stratum": both["stratum_until"].fillna(both["stratum_since"]).astype("str"),
            "size": both["size_until"].fillna(both["size_since"]),
            "since_date": dates[0],
            "until_date": dates[1],
            "years": years,
            "since_t_c_ha": both[f"{value}_since"],
            "until_t_c_ha": both[f"{value}_until"],
            "change_t_c_ha": grown,
            "change_t_c_ha_yr": grown / years.where(years != 0),
        }
    )


def _differs(here: pd.DataFrame) -> bool:
    return bool((here["adjusted_t_c_ha"] - here["density_t_c_ha"]).abs().gt(0).any())
