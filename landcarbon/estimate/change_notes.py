"""What is said about change: how each figure came about, or why there is none."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from landcarbon.estimate.best_change import BestChange
from landcarbon.estimate.difference import Difference
from landcarbon.estimate.notes import name_list
from landcarbon.estimate.ratio import MIN_PLOTS, Sample
from landcarbon.estimate.replacement import OTHERS, REPEATED
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = [
    "BEST",
    "DIFFERENCE",
    "best_methods",
    "change_methods",
    "missing_dates",
    "moved_plots",
    "no_best_change",
    "single_pairs",
]

DIFFERENCE = "difference of ratio means"
BEST = "best combination"


def change_methods(change: Difference, surveys: tuple[str, str]) -> np.ndarray:
    """Say for each figure how the plots of the two surveys were joined, or why there is none."""
    since, until, paired = change.since, change.until, change.paired
    complete = (paired == since) & (paired == until)
    kind = np.where(complete, "paired", np.where(paired == 0, "independent", "partly paired"))
    method = np.char.add(f"{DIFFERENCE}, ", kind).astype(object)
    none = ~np.isfinite(change.density)
    few = none & ((since < MIN_PLOTS) | (until < MIN_PLOTS))
    method[none] = "not estimable: area of its strata unknown"
    method[few] = [
        f"not estimable: {first} plot(s) in {surveys[0]}, {second} in {surveys[1]}"
        for first, second in zip(since[few], until[few], strict=True)
    ]
    if change.units_since is not None and change.units_until is not None:
        lumped = np.minimum(change.units_since, change.units_until) < MIN_PLOTS
        method[none & ~few & lumped] = "not estimable: one cluster"
    return method


def best_methods(text: np.ndarray, best: BestChange, surveys: tuple[str, str]) -> np.ndarray:
    """Name the weights of the repeated plots where a best combination was made; shapes (D, S)."""
    strata, divided = best.strata[..., 0], best.strata[..., 1]
    out = text.copy()
    for domain, one in zip(*np.nonzero(best.used), strict=True):
        first, second = best.repeated[domain]
        words = f"{BEST}: {first:.0%} weight on repeated plots in {surveys[0]}, {second:.0%} in {surveys[1]}"
        if divided[domain, one] < strata[domain, one]:
            words += f" ({divided[domain, one]:.0f} of {strata[domain, one]:.0f} strata, the others by difference)"
        _, *rest = text[domain, one].split("; ")
        apart = ", parts on different plots" if ", parts on different plots" in text[domain, one] else ""
        out[domain, one] = "; ".join([words + apart, *rest])
    return out


def no_best_change(surveys: tuple[str, str]) -> pd.DataFrame:
    """Report that no unit has enough plots of either kind for a best combination."""
    return make_findings(
        "no best combination",
        severity="note",
        table="change",
        column="method",
        survey=surveys[1],
        message=(
            f"Change from {surveys[0]} to {surveys[1]} is the difference of means everywhere: a best combination needs "
            f"at least {REPEATED} plots of a stratum at both surveys and {OTHERS} at one of them only, and a few more "
            "for its weights to be worth estimating. Where all plots repeat there is nothing to combine."
        ),
    )


def missing_dates(by: str, labels: Sequence[str], change: Difference, since: str, until: str) -> pd.DataFrame:
    """Report units whose change has no rate, for want of dates or of elapsed time."""
    known = np.isfinite(change.density)
    undated = (known & ~np.isfinite(change.days)).any(axis=1)
    at_once = (known & (change.days == 0)).any(axis=1)
    found = []
    for which, why, remedy in (
        (undated, "visits without a date", "Give the date of each visit."),
        (at_once, "no time between the visits", "Check the dates of the visits."),
    ):
        names = [labels[int(unit)] for unit in np.flatnonzero(which)]
        if names:
            found.append(
                make_findings(
                    "no rate of change",
                    severity="warning",
                    table="change",
                    column="date",
                    value=name_list(names),
                    survey=until,
                    message=(
                        f"Change from {since} to {until} of {len(names)} {by} row(s) has no yearly rate, "
                        f"because of {why}: {name_list(names)}."
                    ),
                    remedy=remedy,
                )
            )
    return join_findings(found)


def single_pairs(labels: Sequence[str], change: Difference, since: str, until: str) -> pd.DataFrame:
    """Report strata where one repeated plot cannot tell how the two dates go together."""
    one = (np.isfinite(change.density) & (change.paired == 1)).any(axis=1)
    names = [labels[int(unit)] for unit in np.flatnonzero(one)]
    if not names:
        return empty_findings()
    return make_findings(
        "single repeated plot",
        severity="note",
        table="change",
        column="stratum",
        value=name_list(names),
        survey=until,
        message=(
            f"Only one plot was measured in both {since} and {until} in stratum {name_list(names)}: the two surveys "
            "are taken as independent there, which usually overstates the standard error."
        ),
        remedy="Revisit more of the earlier plots.",
    )


def moved_plots(samples: tuple[Sample, Sample], names: pd.Series, surveys: tuple[str, str]) -> pd.DataFrame:
    """Report plots that changed their stratum; ``names`` are those of the plots of the later sample."""
    one, two = samples
    _, first, second = np.intersect1d(one.plot, two.plot, assume_unique=True, return_indices=True)
    which = second[one.stratum[first] != two.stratum[second]]
    if not len(which):
        return empty_findings()
    told = name_list([str(name) for name in names.iloc[which]])
    return make_findings(
        "plot changed its stratum",
        severity="warning",
        table="change",
        column="stratum",
        value=str(len(which)),
        survey=surveys[1],
        message=(
            f"{len(which)} of {len(first)} plots measured in both {surveys[0]} and {surveys[1]} lie in another stratum "
            f"at the later one: {told}. Change of a stratum then mixes growth with what moved in and out, on areas "
            "that are taken as the same at both dates; standard errors hold that these plots moved."
        ),
        remedy="Read the change of the inventory, or state it for land that stayed in its stratum.",
    )
