"""Checks of the visits: share inside, area, slope, subplots and dates."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.check.keys import positions, survey_order
from landcarbon.check.rules import Outcome, joined, rule

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = ["dates", "plot_areas", "shares_inside", "slopes", "subplots"]


def shares_inside(inputs: Inputs, settings: Settings) -> Outcome:
    """Refuse visits whose share inside the population is not above 0 and at most 1.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Visits that cannot be used, and findings.
    """
    share = inputs.visits["share_inside"].to_numpy(dtype=float)
    return _refuse(inputs, "share inside invalid", ~((share > 0) & (share <= 1)))


def plot_areas(inputs: Inputs, settings: Settings) -> Outcome:
    """Refuse visits whose plot area is given and not above zero.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Visits that cannot be used, and findings.
    """
    area = inputs.visits["plot_area_ha"].to_numpy(dtype=float)
    return _refuse(inputs, "plot area invalid", (area <= 0) | np.isinf(area))


def slopes(inputs: Inputs, settings: Settings) -> Outcome:
    """Refuse visits with an impossible slope; point at very steep ones.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Visits that cannot be used, and findings.
    """
    limits, steep = rule("slope invalid").limits, rule("slope very steep")
    visits = inputs.visits
    slope = visits["slope_deg"].to_numpy(dtype=float)
    refused = _refuse(inputs, "slope invalid", ~((slope >= limits["low"]) & (slope < limits["high"])))
    very = visits["visited"].to_numpy(dtype=bool) & (slope > steep.limits["degree"]) & (slope < limits["high"])
    findings = joined([refused.findings, steep.found(visits[very])])
    return Outcome(findings, visit_unusable=refused.visit_unusable)


def subplots(inputs: Inputs, settings: Settings) -> Outcome:
    """Refuse visits with fewer than one subplot; point at those with more than a complete plot has.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file: ``plots.subplots``.

    Returns
    -------
    Outcome
        Visits that cannot be used, and findings.
    """
    visits, complete = inputs.visits, settings.plots.subplots
    number = visits["n_subplots"].to_numpy(dtype=float)
    refused = _refuse(inputs, "subplots invalid", ~(number >= 1))
    more = visits["visited"].to_numpy(dtype=bool) & (number > complete)
    above = rule("subplots above design").found(visits[more], fill={"complete": complete})
    return Outcome(joined([refused.findings, above]), visit_unusable=refused.visit_unusable)


def dates(inputs: Inputs, settings: Settings) -> Outcome:
    """Look at the dates of visits and trees: missing, outside the window of the survey, not after the survey before.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Findings only.
    """
    visits = inputs.visits[inputs.visits["visited"].to_numpy(dtype=bool)]
    off = _outside_window(visits, inputs.surveys)
    parts = [
        _not_after(visits, inputs.surveys),
        rule("date outside window").found(visits[off], value=_date_text(visits.loc[off, "date"])),
        _tree_dates(inputs),
        _missing(visits, inputs.surveys),
    ]
    return Outcome(joined(parts))


def _refuse(inputs: Inputs, name: str, bad: np.ndarray) -> Outcome:
    bad = bad & inputs.visits["visited"].to_numpy(dtype=bool)
    return Outcome(rule(name).found(inputs.visits[bad]), visit_unusable=bad)


def _not_after(visits: pd.DataFrame, surveys: pd.DataFrame) -> pd.DataFrame:
    dated = visits[visits["date"].notna().to_numpy()]
    order = survey_order(dated["survey"], surveys)
    plot, _ = pd.factorize(dated["plot"])
    line = np.lexsort((order, plot))
    day = dated["date"].to_numpy()[line]
    wrong = np.zeros(len(dated), dtype=bool)
    wrong[1:] = (plot[line][1:] == plot[line][:-1]) & (day[1:] <= day[:-1])
    before = pd.Series(day).shift()[wrong]
    rows = dated.iloc[line[wrong]]
    text = _date_text(rows["date"])
    if len(rows):
        text = np.array([f"{now}, before {then}" for now, then in zip(text, _date_text(before), strict=True)])
    return rule("date before last survey").found(rows, value=text)


def _outside_window(rows: pd.DataFrame, surveys: pd.DataFrame) -> np.ndarray:
    at = positions(rows["survey"], surveys["survey"])
    if len(rows) == 0 or len(surveys) == 0:
        return np.zeros(len(rows), dtype=bool)
    day = rows["date"].dt.normalize().to_numpy()
    since = pd.to_datetime(surveys["since"]).to_numpy()[at]
    until = pd.to_datetime(surveys["until"]).to_numpy()[at]
    result: np.ndarray = (at >= 0) & ((day < since) | (day > until))  # a comparison with NaT is false
    return result


def _tree_dates(inputs: Inputs) -> pd.DataFrame:
    outside = rule("tree dates outside window")
    trees = inputs.trees[inputs.trees["used"].to_numpy(dtype=bool)]
    off = trees[_outside_window(trees, inputs.surveys)]
    parts = []
    for survey, rows in off.groupby("survey", observed=True, sort=False):
        span = f"{rows['date'].min():%Y-%m-%d} to {rows['date'].max():%Y-%m-%d}"
        fill = {"count": len(rows), "survey": survey}
        parts.append(outside.found(fill=fill, survey=survey, value=span))
    return joined(parts)


def _missing(visits: pd.DataFrame, surveys: pd.DataFrame) -> pd.DataFrame:
    parts = []
    for survey in surveys["survey"]:
        rows = visits.loc[(visits["survey"] == survey).to_numpy(dtype=bool), "date"]
        count = int(rows.isna().sum())
        if count:
            fill = {"count": count, "total": len(rows), "survey": survey}
            parts.append(rule("date missing").found(fill=fill, survey=survey))
    return joined(parts)


def _date_text(days: pd.Series) -> np.ndarray:
    return pd.to_datetime(days).dt.strftime("%Y-%m-%d").to_numpy(dtype=object)
