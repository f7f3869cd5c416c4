"""Run all checks on the canonical tables, and show that every row read is accounted for."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.check.places import plots_of_rows, rows_left, visits_of_rows
from landcarbon.check.plots import coordinates, plot_doubles, strata_of_plots, too_few_plots, unused_parcels
from landcarbon.check.remeasured import between_surveys
from landcarbon.check.rules import Outcome, joined
from landcarbon.check.stems import (
    diameters,
    diameters_of_kind,
    doubles,
    expansions,
    heights,
    tally_limit,
    weights,
)
from landcarbon.check.visits import dates, plot_areas, shares_inside, slopes, subplots
from landcarbon.errors import LandcarbonError

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = ["ROW_CHECKS", "TABLE_CHECKS", "reconcile", "run_checks"]

Check = Callable[["Inputs", "Settings"], Outcome]

# Order matters: a row is set aside once, by the first rule it meets; checks between rows see only rows still used.
# A slip is looked for before the tally limit, since a tenth of a diameter mostly falls below it.
TABLE_CHECKS: tuple[Check, ...] = (
    plot_doubles,
    coordinates,
    strata_of_plots,
    shares_inside,
    plot_areas,
    slopes,
    subplots,
)
ROW_CHECKS: tuple[Check, ...] = (
    plots_of_rows,
    visits_of_rows,
    dates,
    diameters,
    expansions,
    weights,
    doubles,
    between_surveys,
    tally_limit,
    diameters_of_kind,
    heights,
    rows_left,
    too_few_plots,
    unused_parcels,
)

_FATES = ("live", "dead", "absent")


def run_checks(inputs: Inputs, settings: Settings) -> Inputs:
    """Run all checks, one after the other.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables as read.
    settings : Settings
        The project file.

    Returns
    -------
    Inputs
        New tables: ``trees.used`` false for rows set aside, heights blank that cannot be, ``visits.visited`` false for
        visits that cannot be used, and the findings of the checks after those of reading.
    """
    for checks in (TABLE_CHECKS, ROW_CHECKS):
        parts = [inputs.findings]
        for check in checks:
            outcome = check(inputs, settings)
            parts.append(outcome.findings)
            inputs = _apply(inputs, outcome)
        inputs = replace(inputs, findings=joined(parts))
    return inputs


def reconcile(inputs: Inputs) -> pd.DataFrame:
    """Count the fate of every row read, by table and survey.

    Parameters
    ----------
    inputs : Inputs
        Tables after the checks.

    Returns
    -------
    DataFrame
        table, survey, rows_read, used, live, dead, absent, set_aside, balance (0 if all rows are accounted for); a row
        with a blank survey for rows whose survey is not known. Rows of samples are neither live nor dead: empty there.

    Raises
    ------
    LandcarbonError
        If rows do not add up, or a row was set aside without a finding: a fault of the program, not of the data.
    """
    trees = inputs.trees
    used = trees["used"].to_numpy(dtype=bool)
    fate = np.where(used, trees["status"].astype("object").to_numpy(), "set_aside")
    survey = trees["survey"].astype("object").where(trees["survey"].notna(), "")
    names = [str(name) for name in inputs.surveys["survey"]]
    names += sorted(set(survey.map(str)) - set(names))
    counts = pd.crosstab(survey.to_numpy(), fate) if len(trees) else pd.DataFrame()
    counts = counts.reindex(index=names, columns=[*_FATES, "set_aside"], fill_value=0)
    read = survey.value_counts().reindex(names, fill_value=0)
    table = pd.DataFrame({"survey": names, "rows_read": read.to_numpy(dtype=np.int64)})
    for name in counts.columns:
        table[name] = counts[name].to_numpy(dtype=np.int64)
    table["balance"] = table["rows_read"] - table[[*_FATES, "set_aside"]].sum(axis=1)
    table.insert(2, "used", table[[*_FATES]].sum(axis=1))
    findings = inputs.findings
    _refuse_losses(table, trees.loc[~used, "row_id"], findings[findings["table"] == "trees"])
    table.insert(0, "table", "trees")
    return pd.concat([table, *(_of_samples(inputs, name) for name in inputs.samples)], ignore_index=True)


def _of_samples(inputs: Inputs, name: str) -> pd.DataFrame:
    """Count the rows of one sample table by survey: used or set aside, by reading or by the module of its pool."""
    rows = inputs.samples[name]
    found = inputs.findings[(inputs.findings["table"] == name) & ~inputs.findings["used"]]
    aside = rows["row_id"].isin(found["row_id"].dropna())
    silent = ~rows["used"].to_numpy(dtype=bool) & ~aside
    if silent.any():
        raise LandcarbonError(f"{int(silent.sum())} rows of {name} were set aside without a finding")
    survey = rows["survey"].astype("object").where(rows["survey"].notna(), "").map(str)
    names = [str(label) for label in inputs.surveys["survey"]]
    names = [label for label in [*names, *sorted(set(survey) - set(names))] if (survey == label).any()]
    read = survey.value_counts().reindex(names)
    lost = aside.groupby(survey).sum().reindex(names)
    table = pd.DataFrame({"table": name, "survey": names, "rows_read": read.to_numpy(dtype=np.int64)})
    table["used"] = table["rows_read"] - lost.to_numpy(dtype=np.int64)
    table["set_aside"] = lost.to_numpy(dtype=np.int64)
    table["balance"] = table["rows_read"] - table["used"] - table["set_aside"]
    return table


def _refuse_losses(table: pd.DataFrame, aside: pd.Series, findings: pd.DataFrame) -> None:
    off = table[table["balance"] != 0]
    if len(off):
        raise LandcarbonError(f"tree rows of survey {off['survey'].iloc[0]!r} do not add up: {off.to_dict('records')}")
    explained = findings.loc[~findings["used"], "row_id"].dropna()
    unexplained = aside[~aside.isin(explained)]
    if len(unexplained):
        raise LandcarbonError(
            f"{len(unexplained)} tree rows were set aside without a finding, first row_id {unexplained.iloc[0]}"
        )


def _apply(inputs: Inputs, outcome: Outcome) -> Inputs:
    trees, visits, plots = inputs.trees, inputs.visits, inputs.plots
    if outcome.aside is not None and outcome.aside.any():
        trees = trees.assign(used=trees["used"].to_numpy(dtype=bool) & ~outcome.aside)
    if outcome.height_ignored is not None and outcome.height_ignored.any():
        trees = trees.assign(height_m=trees["height_m"].mask(outcome.height_ignored))
    if outcome.visit_unusable is not None and outcome.visit_unusable.any():
        visits = visits.assign(visited=visits["visited"].to_numpy(dtype=bool) & ~outcome.visit_unusable)
    if outcome.plot_dropped is not None and outcome.plot_dropped.any():
        plots = plots[~outcome.plot_dropped].reset_index(drop=True)
    return replace(inputs, trees=trees, visits=visits, plots=plots)
