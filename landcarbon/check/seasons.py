"""Checks of the seasons of visits: two surveys in different parts of the year, and a survey longer than a year.

Limits, and where they come from, are in ``seasons.toml``.
"""

from __future__ import annotations

import tomllib
from collections.abc import Sequence
from functools import cache
from importlib.resources import files
from itertools import combinations
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.constants import DAYS_PER_YEAR
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["months_apart", "season_findings"]

_MONTHS = 12.0  # in a year


@cache
def _limits() -> dict[str, dict[str, Any]]:
    return tomllib.loads(files("landcarbon.check").joinpath("seasons.toml").read_text(encoding="utf-8"))


def months_apart(first: pd.Series, second: pd.Series) -> np.ndarray:
    """Months between the days of the year of two dates, the shorter way round the year.

    Parameters
    ----------
    first, second : Series of datetime
        Dates, whatever their years; NaT gives NaN.

    Returns
    -------
    ndarray
        0 to 6 months.
    """
    days = [pd.to_datetime(dates).dt.day_of_year.to_numpy(dtype=float) for dates in (first, second)]
    apart = np.abs(days[1] - days[0])
    return np.minimum(apart, DAYS_PER_YEAR - apart) * _MONTHS / DAYS_PER_YEAR


def season_findings(visits: pd.DataFrame, surveys: pd.DataFrame) -> pd.DataFrame:
    """Look for plots visited in different seasons, and for surveys whose own visits are more than a year apart.

    Parameters
    ----------
    visits : DataFrame
        survey, plot, date and, if there is such a column, visited.
    surveys : DataFrame
        survey, in the order of time.

    Returns
    -------
    DataFrame
        Findings: one for each pair of surveys, one for each long survey.
    """
    rows = visits[visits["date"].notna().to_numpy(dtype=bool)]
    if "visited" in rows:
        rows = rows[rows["visited"].to_numpy(dtype=bool)]
    rows = rows.assign(survey=rows["survey"].astype("str"), plot=rows["plot"].astype("str"))
    by_survey = {str(name): rows[(rows["survey"] == str(name)).to_numpy(dtype=bool)] for name in surveys["survey"]}
    found = [_spread(name, part) for name, part in by_survey.items()]
    found += [_pair(names, (by_survey[names[0]], by_survey[names[1]])) for names in combinations(by_survey, 2)]
    return join_findings(found)


def _pair(names: tuple[str, str], parts: tuple[pd.DataFrame, pd.DataFrame]) -> pd.DataFrame:
    limits = _limits()["season"]
    first, second = (part.drop_duplicates("plot") for part in parts)
    both = first[["plot", "date"]].merge(second[["plot", "date"]], on="plot", suffixes=("_1", "_2"))
    apart = months_apart(both["date_1"], both["date_2"])
    far = apart > limits["months"]
    if not far.any() or far.mean() <= limits["share"]:
        return empty_findings()
    worst = both[far].iloc[np.argsort(-apart[far], kind="stable")]
    shown = worst.head(int(limits["plots_named"]))
    told = [
        f"{plot} ({_day(one)}, {_day(two)})"
        for plot, one, two in zip(shown["plot"], shown["date_1"], shown["date_2"], strict=True)
    ]
    return make_findings(
        "seasons differ",
        severity="warning",
        table="visits",
        column="date",
        value=f"{int(far.sum())} of {len(both)}",
        survey=" to ".join(names),
        message=(
            f"Of {len(both)} plots with dated visits in both {names[0]} and {names[1]}, {int(far.sum())} were visited "
            f"in seasons more than {limits['months']:g} months apart (up to {apart[far].max():.1f} months): "
            f"{_listed(told, int(far.sum()))}. Leaves, herbs, moisture and the growth of the year differ between "
            "seasons, so change there holds some of that difference, and its yearly rate a part of a growing season "
            "more or less than the dates say."
        ),
        remedy="Revisit in the same season, or read the rate with that in mind.",
    )


def _spread(name: str, part: pd.DataFrame) -> pd.DataFrame:
    limits = _limits()["spread"]
    if not len(part):
        return empty_findings()
    days = pd.to_datetime(part["date"])
    span = (days.max() - days.min()).days
    if span <= limits["days"]:
        return empty_findings()
    return make_findings(
        "survey longer than a year",
        severity="note",
        table="visits",
        column="date",
        value=str(span),
        survey=name,
        message=(
            f"The {len(part)} dated visits of survey {name} run from {days.min():%Y-%m-%d} to {days.max():%Y-%m-%d}, "
            f"{span / DAYS_PER_YEAR:.1f} years. Stocks of the survey mix these dates; rates of change use the dates of "
            "each plot."
        ),
        remedy="Bring the plots to a common date, or divide the survey.",
    )


def _listed(told: Sequence[str], number: int) -> str:
    more = number - len(told)
    return ", ".join(told) + (f" and {more} more" if more else "")


def _day(date: pd.Timestamp) -> str:
    return f"{date:%Y-%m-%d}"
