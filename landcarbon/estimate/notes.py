"""Findings of the estimates: what was left out, what could not be estimated, and what looks too good."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from landcarbon.estimate.tables import ALL, Plots, Units
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = [
    "few_plots_in_parcels",
    "few_plots_in_strata",
    "left_out",
    "name_list",
    "parcel_sum",
    "pool_text",
    "unknown_areas",
    "zero_variance",
]

_NAMES_SHOWN = 10


def name_list(names: Sequence[str]) -> str:
    """Write out names, the first ten if there are many."""
    shown = ", ".join(names[:_NAMES_SHOWN])
    more = len(names) - _NAMES_SHOWN
    return f"{shown} and {more} more" if more > 0 else shown


def pool_text(pools: list[str], chosen: np.ndarray) -> str:
    """Write out the chosen pools; empty if they are all."""
    return "" if chosen.all() else ", ".join(name for name, yes in zip(pools, chosen, strict=True) if yes)


def left_out(plots: Plots, survey: str, table: str = "estimate") -> pd.DataFrame:
    """Report plots of a survey that enter no estimate, and pools that plots have no value of."""
    rows = np.flatnonzero(plots.survey == survey)
    inside, sized = plots.inside[rows], plots.size[rows] > 0
    reasons = [
        ("plot outside", "note", ~inside, "lie outside the population", "Nothing, if they lie outside on purpose."),
        (
            "plot without stratum",
            "warning",
            inside & (plots.stratum[rows] < 0),
            "have no stratum",
            "Give each plot a stratum, or a parcel that has one.",
        ),
        (
            "plot without area",
            "warning",
            inside & (plots.stratum[rows] >= 0) & ~sized,
            "have no sampled area",
            "Give the share of the plot that lies inside, above 0.",
        ),
    ]
    found = []
    labels = plots.frame["plot"].iloc[rows].astype("str").to_numpy(dtype=object)
    for rule, severity, which, what, remedy in reasons:
        if which.any():
            names = list(labels[which])
            found.append(
                make_findings(
                    rule,
                    severity=severity,
                    table=table,
                    value=str(len(names)),
                    survey=survey,
                    used=False,
                    message=f"{len(names)} of {len(rows)} plots {what} and enter no estimate: {name_list(names)}.",
                    remedy=remedy,
                )
            )
    taken = plots.taken()[rows]
    rest = "the sum then rests on the others" if ALL in plots.pools else "it is then estimated from those"
    missing = (~np.isfinite(plots.value[rows])[taken]).sum(axis=0)
    for count in sorted({int(number) for number in missing if number}):
        pools = pool_text(plots.pools, missing == count) or "any pool"
        found.append(
            make_findings(
                "pool not measured",
                severity="note",
                table=table,
                column="pool",
                value=str(count),
                survey=survey,
                message=f"{count} of {int(taken.sum())} plots have no value of {pools}: missing there, not zero.",
                remedy=f"Nothing, if it was sampled on part of the plots only; {rest}.",
            )
        )
    return join_findings(found)


def unknown_areas(units: Units, table: str = "estimate") -> pd.DataFrame:
    """Report strata without a known area."""
    unknown = [name for name, area in zip(units.strata, units.stratum_area_ha, strict=True) if not np.isfinite(area)]
    if not unknown:
        return empty_findings()
    effect = "densities are stated, stocks are not" if units.has_total else "there is no figure for the whole inventory"
    return make_findings(
        "area unknown",
        severity="warning",
        table=table,
        column="area_ha",
        value=name_list(unknown),
        message=f"{len(unknown)} of {len(units.strata)} strata have no known area ({name_list(unknown)}): {effect}.",
        remedy="State the areas under [strata] areas, or give parcels with polygons.",
    )


def few_plots_in_strata(
    units: Units, pools: list[str], plots: Sequence[np.ndarray], surveys: Sequence[str], table: str = "estimate"
) -> pd.DataFrame:
    """Report strata with fewer than two plots, loudly, with the hectares that are missing.

    Parameters
    ----------
    units : Units
        Strata with areas.
    pools : list of str
        Pools, in the order of the columns of ``plots``.
    plots : sequence of ndarray
        Plots by stratum and pool, for each survey.
    surveys : sequence of str
        One survey for stocks; both for change, where a stratum drops out if either is short of plots.
    table : str
        For the finding.
    """
    short = np.logical_or.reduce([count < 2 for count in plots])
    whole = float(units.stratum_area_ha.sum())
    found = []
    for unit in np.flatnonzero(short.any(axis=1)):
        area = units.stratum_area_ha[unit]
        which = pool_text(pools, short[unit])
        known = " and ".join(
            f"{int(count[unit][short[unit]].min())} plot(s) in {survey}"
            for count, survey in zip(plots, surveys, strict=True)
        )
        lost = f"{area:,.2f} ha of {whole:,.2f} ha are missing from" if np.isfinite(whole) else "it is missing from"
        found.append(
            make_findings(
                "stratum not estimable",
                severity="error",
                table=table,
                column="stratum",
                value=units.strata[unit],
                survey=surveys[-1],
                message=(
                    f"Stratum {units.strata[unit]!r} has {known}{f' with {which}' if which else ''}: not estimable, as "
                    f"a standard error needs two. {lost} the figures of the inventory, which do not speak for it."
                ),
                remedy="Measure more plots there, or fold the stratum into a like one with [strata] merge.",
            )
        )
    return join_findings(found)


def few_plots_in_parcels(
    units: Units, pools: list[str], estimable: np.ndarray, survey: str, table: str = "estimate"
) -> pd.DataFrame:
    """Report parcels without a direct estimate; ``estimable`` has shape (parcels, pools)."""
    bad = ~estimable[:, -1]  # the last pool is the sum, which needs every other
    if not bad.any():
        return empty_findings()
    names = [units.parcels[unit] for unit in np.flatnonzero(bad)]
    area = float(units.parcel_area_ha[bad].sum())
    size = f" ({area:,.2f} ha)" if np.isfinite(area) else ""
    why = "fewer than two plots" + (" at one of the dates" if table == "change" else "")
    if not np.isfinite(units.stratum_area_ha).all():
        why += ", or several strata of unknown area"
    return make_findings(
        "parcel not estimable",
        severity="warning",
        table=table,
        column="parcel",
        value=str(len(names)),
        survey=survey,
        message=(
            f"{len(names)} of {len(units.parcels)} parcels{size} get no figure of their own ({why}): "
            f"{name_list(names)}. Their plots still count in their stratum and in the inventory."
        ),
        remedy="Read these parcels from their stratum, or measure more plots in them.",
    )


def zero_variance(
    by: str, labels: list[str], pools: list[str], variance: np.ndarray, survey: str, table: str = "estimate"
) -> pd.DataFrame:
    """Report standard errors of zero; ``variance`` has shape (units, pools)."""
    zero = variance == 0
    same = "changed by the same amount of" if table == "change" else "hold the same amount of"
    found = []
    for pool in np.flatnonzero(zero.any(axis=0)):
        names = [labels[unit] for unit in np.flatnonzero(zero[:, pool])]
        found.append(
            make_findings(
                "zero variance",
                severity="warning",
                table=table,
                column=pools[pool],
                value=name_list(names),
                survey=survey,
                message=(
                    f"All plots of {by} {name_list(names)} {same} {pools[pool]}, often none at all, so the standard "
                    "error is 0. That is arithmetic, not certainty."
                ),
                remedy="Check that the equal values are real; do not quote the interval.",
            )
        )
    return join_findings(found)


def parcel_sum(units: Units, stock: np.ndarray, total: float, survey: str) -> pd.DataFrame:
    """Compare the sum of direct parcel stocks with the stock of the inventory [t C], for all pools together."""
    known = np.isfinite(stock)
    if not known.any() or not np.isfinite(total):
        return empty_findings()
    added = float(stock[known].sum())
    area = float(units.parcel_area_ha[known].sum())
    share = f" ({(added - total) / total:+.1%})" if total else ""
    return make_findings(
        "parcels and inventory",
        severity="note",
        table="estimate",
        column=ALL,
        value=f"{added - total:.6g}",
        survey=survey,
        message=(
            f"The direct stocks of {int(known.sum())} of {len(known)} parcels ({area:,.2f} ha) add up to "
            f"{added:,.1f} t C; the inventory holds {total:,.1f} t C, a difference of {added - total:+,.1f} t C{share}."
        ),
        remedy="Use the inventory figure for the whole; each parcel stands on its own few plots.",
    )
