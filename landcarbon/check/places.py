"""Checks of the place of a tree row: known plot, inside the parcels, visited in that survey."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.check.keys import positions, visit_positions
from landcarbon.check.rules import Outcome, joined, rule

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = ["plots_of_rows", "rows_left", "visits_of_rows"]


def plots_of_rows(inputs: Inputs, settings: Settings) -> Outcome:
    """Set aside rows whose plot is blank, unknown, outside all parcels, or in none for want of coordinates.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Rows set aside and findings.
    """
    trees, plots = inputs.trees, inputs.plots
    used = trees["used"].to_numpy(dtype=bool)
    blank = used & (trees["plot"].astype("object") == "").to_numpy(dtype=bool)
    at = positions(trees["plot"], plots["plot"])
    unknown = used & ~blank & (at < 0)
    outside = used & ~blank & (at >= 0)
    placed = np.zeros(len(trees), dtype=bool)
    if len(plots):
        outside &= ~_inside(trees, plots, at, inputs.parcel_of)
        placed = np.isfinite(plots[["x", "y"]].to_numpy(dtype=float)).all(axis=1)[at]
    masks = {
        "plot blank": blank,
        "plot unknown": unknown,
        "plot outside": outside & placed,
        "plot without place": outside & ~placed,
    }
    return _set_aside(trees, masks)


def visits_of_rows(inputs: Inputs, settings: Settings) -> Outcome:
    """Set aside rows on a plot that was not visited in their survey, or whose visit cannot be used.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables; a visit found unusable before has ``visited`` false and a finding on the visits table.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Rows set aside and findings.
    """
    trees, visits = inputs.trees, inputs.visits
    used = trees["used"].to_numpy(dtype=bool)
    at = visit_positions(trees, visits)
    visited = np.zeros(len(trees), dtype=bool)
    refused = np.zeros(len(trees), dtype=bool)
    if len(visits):
        visited = visits["visited"].to_numpy(dtype=bool)[at] & (at >= 0)
        faults = inputs.findings
        faults = faults[(faults["table"] == "visits") & ~faults["used"]]
        refused = (visit_positions(trees, faults[["survey", "plot"]]) >= 0) & ~visited
    return _set_aside(trees, {"visit unusable": used & refused, "plot not visited": used & ~visited & ~refused})


def rows_left(inputs: Inputs, settings: Settings) -> Outcome:
    """Look for visited plots without any live or dead row, or with none left in use.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables after all row checks.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Findings only.
    """
    trees, visits = inputs.trees, inputs.visits
    visited = visits[visits["visited"].to_numpy(dtype=bool)]
    place = positions(visited["plot"], inputs.plots["plot"])
    visited = visited[(place >= 0) & _inside(visited, inputs.plots, place, inputs.parcel_of)]
    visited = visited[~visited["survey"].astype("str").isin(_of_samples_alone(inputs))]
    at = visit_positions(trees, visited)
    standing = (at >= 0) & trees["status"].isin(["live", "dead"]).to_numpy()
    counted = standing & trees["used"].to_numpy(dtype=bool)
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    nothing_there = (trees["status"] == "dead").to_numpy(dtype=bool) & (np.isnan(dbh) | (dbh == 0))
    n_standing = np.bincount(at[standing & ~nothing_there], minlength=len(visited))
    n_counted = np.bincount(at[counted], minlength=len(visited))
    lost = (n_counted == 0) & (n_standing > 0)
    counts = n_standing[lost]
    emptied = rule("all rows set aside").found_each(
        visited[lost], [{"count": int(count)} for count in counts], value=_rows_text(counts)
    )
    return Outcome(joined([rule("no rows").found(visited[n_standing == 0], value="0 trees"), emptied]))


def _inside(rows: pd.DataFrame, plots: pd.DataFrame, at: np.ndarray, parcel_of: pd.DataFrame | None) -> np.ndarray:
    """Tell whether the plot of each row was in the inventory; at the survey of the row where boundaries change."""
    if not len(plots):
        return np.zeros(len(rows), dtype=bool)
    if parcel_of is None:
        return np.asarray(plots["inside"].to_numpy(dtype=bool)[at])
    return visit_positions(rows, parcel_of[parcel_of["inside"].to_numpy(dtype=bool)]) >= 0


def _of_samples_alone(inputs: Inputs) -> list[str]:
    """Surveys with rows of samples and none of trees: a plot without trees says nothing there."""
    tallied = set(inputs.trees["survey"].dropna().astype("str"))
    sampled = {str(name) for rows in inputs.samples.values() for name in rows["survey"].dropna().unique()}
    return sorted(sampled - tallied)


def _rows_text(counts: np.ndarray) -> np.ndarray:
    return np.array([f"{count} rows" for count in counts], dtype=object)


def _set_aside(trees: pd.DataFrame, masks: dict[str, np.ndarray]) -> Outcome:
    parts = [rule(name).found(trees[mask]) for name, mask in masks.items()]
    return Outcome(joined(parts), aside=np.logical_or.reduce(list(masks.values())))
