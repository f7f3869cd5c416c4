"""What is said about sums of parts: how each figure came about, what it leaves out, or why there is none."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from landcarbon.estimate.combine import Plan, SumEstimate
from landcarbon.estimate.notes import name_list
from landcarbon.estimate.ratio import MIN_PLOTS
from landcarbon.estimate.tables import ALL, Units
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["borrowed_parts", "pools_left_out", "sum_methods"]


def sum_methods(method: np.ndarray, estimate: SumEstimate, plan: Plan, surveys: Sequence[str]) -> np.ndarray:
    """Text for each domain and sum.

    Parameters
    ----------
    method : ndarray
        Method of the figures that are estimable; shape (domains, sums).
    estimate : SumEstimate
        Estimates of one level.
    plan : Plan
        What counts.
    surveys : sequence of str
        One for stocks, two for change.
    """
    why = _reasons(estimate, plan, surveys)
    text = np.array(method, dtype=object)
    known = np.isfinite(estimate.density)
    text[known & estimate.apart] += ", parts on different plots"
    text[known & np.isnan(estimate.repeated)] = ""  # no plots of their own
    source = "stratum mean" if len(surveys) == 1 else "change of its stratum"
    for part, label in enumerate(plan.sums.labels()):
        few = np.minimum(estimate.part_plots.min(axis=0)[:, part], MIN_PLOTS)
        for plots, own in enumerate(("no plots of its own", "one plot of its own", "its plots in one cluster")):
            hit = estimate.borrowed[:, part] & (few == plots)
            for name in (plan.sums.pool[part], len(plan.sums.pools)):
                text[hit & known[:, name] & estimate.pool_known[:, plan.sums.pool[part]], name] += (
                    f"; {label}: {source} ({own})"
                )
    for pool, name in enumerate(plan.sums.pools):
        hit = known[:, -1] & ~estimate.pool_known[:, pool]
        text[hit, -1] += "; without " + name + ": " + why[hit, pool]
        partly = _part_of_area(estimate, pool)
        text[known[:, -1] & partly, -1] += f"; {name} on {_hectares(estimate, pool)}"
    text[known] = [line.removeprefix("; ") for line in text[known]]
    text[:, :-1][~known[:, :-1]] = "not estimable: " + _named(why, plan)[~known[:, :-1]]
    text[~known[:, -1], -1] = "not estimable: " + why[~known[:, -1], -1]
    return text


def _part_of_area(estimate: SumEstimate, pool: int) -> np.ndarray:
    area = estimate.area_ha
    differs = area.shape[0] == 1 and len(estimate.density) == 1 and 0 < area[0, pool] < area[0, -1]
    return np.full(len(estimate.density), differs) & estimate.pool_known[:, pool]


def _hectares(estimate: SumEstimate, pool: int) -> str:
    return f"{estimate.area_ha[0, pool]:,.2f} of {estimate.area_ha[0, -1]:,.2f} ha"


def _named(why: np.ndarray, plan: Plan) -> np.ndarray:
    """Reasons of pools, with the name of a pool that was not measured."""
    named = why[:, :-1].copy()
    for pool in np.flatnonzero(plan.out):
        whole = plan.sums.pools[pool]
        text = named[:, pool]
        named[:, pool] = [reason if reason.startswith(f"{whole}.") else f"{whole} {reason}" for reason in text]
    return named


def _reasons(estimate: SumEstimate, plan: Plan, surveys: Sequence[str]) -> np.ndarray:
    """Why a sum is not estimable, shape (D, J + 1); what stands where it is estimable has no meaning."""
    sums, plots = plan.sums, estimate.part_plots
    domains = len(estimate.density)
    why = np.full((domains, len(sums.pools) + 1), "area of its strata unknown", dtype=object)
    fewest, units = plots.min(axis=0), estimate.part_units.min(axis=0)
    for name in range(len(sums.pools) + 1):
        mine = np.flatnonzero(sums.pool == name) if name < len(sums.pools) else np.flatnonzero(_measured(plan))
        if not len(mine):
            continue
        scarce = mine[np.argmin(fewest[:, mine], axis=1)]
        hit = np.flatnonzero(~np.isfinite(estimate.density[:, name]) | ~_pool_known(estimate, name))
        short = hit[fewest[hit, scarce[hit]] < MIN_PLOTS]
        differ = (plots[:, :, mine] != plots[:, :, mine[:1]]).any(axis=(0, 2)) & (name < len(sums.pools))
        labels = sums.labels()
        for domain in short:
            count = plots[:, domain, scarce[domain]].astype(int)
            text = f"{count[0]} plot(s)"
            if len(surveys) > 1:
                text += f" in {surveys[0]}, {count[1]} in {surveys[1]}"
            why[domain, name] = text + (f" with {labels[scarce[domain]]}" if differ[domain] else "")
        lumped = mine[np.argmin(units[:, mine], axis=1)]
        for domain in hit[(fewest[hit, scarce[hit]] >= MIN_PLOTS) & (units[hit, lumped[hit]] < MIN_PLOTS)]:
            why[domain, name] = "one cluster" + (f" with {labels[lumped[domain]]}" if differ[domain] else "")
    for pool in np.flatnonzero(plan.out):
        why[:, pool] = not_measured(plan, pool, surveys)
    return why


def _pool_known(estimate: SumEstimate, name: int) -> np.ndarray:
    known = estimate.pool_known
    return np.asarray(known[:, name] if name < known.shape[1] else known.any(axis=1))


def _measured(plan: Plan) -> np.ndarray:
    """Parts of the pools that are not left out; all, if every pool is."""
    inside = ~plan.out[plan.sums.pool]
    return inside if inside.any() else np.ones_like(inside)


def not_measured(plan: Plan, pool: int | np.integer, surveys: Sequence[str]) -> str:
    """Say of what and when there are no measurements, without the name of a pool that lacks as a whole."""
    sums = plan.sums
    mine = np.flatnonzero(sums.pool == pool)
    pieces: dict[str, list[int]] = {}
    for part in mine:
        there = plan.measured[:, part]
        if there.all():
            continue
        when = "not measured"
        if there.any():
            when = f"measured in {surveys[int(np.argmax(there))]} only"
        pieces.setdefault(when, []).append(int(part))
    texts = []
    for when, parts in pieces.items():
        whole = len(parts) == len(mine)
        texts.append(when if whole else f"{', '.join(sums.parts[part] for part in parts)} {when}")
    return ", ".join(texts)


def pools_left_out(plan: Plan, surveys: Sequence[str], table: str = "estimate") -> pd.DataFrame:
    """Report pools that no figure of the survey, or of the change, holds."""
    found = []
    for pool in np.flatnonzero(plan.out):
        name = plan.sums.pools[pool]
        reason = not_measured(plan, pool, surveys)
        what = "no change" if len(surveys) > 1 else "no stock"
        when = " to ".join(surveys)
        found.append(
            make_findings(
                "pool left out of the sum",
                severity="warning",
                table=table,
                column=name,
                value=name,
                survey=surveys[-1],
                message=(
                    f"{name}, {when}: {reason}. It has {what} there, and {ALL!r} is the sum of the other pools. "
                    "Missing is not zero."
                ),
                remedy="Compare sums of the same pools only, or measure it at every survey.",
            )
        )
    return join_findings(found)


def borrowed_parts(
    estimate: SumEstimate, plan: Plan, units: Units, survey: str, table: str = "estimate"
) -> pd.DataFrame:
    """Report parcels for which means of their strata stand."""
    found = []
    for part, label in enumerate(plan.sums.labels()):
        hit = estimate.borrowed[:, part] & estimate.pool_known[:, plan.sums.pool[part]]
        if not hit.any():
            continue
        names = [units.parcels[unit] for unit in np.flatnonzero(hit)]
        area = float(np.nansum(units.parcel_area_ha[hit]))
        found.append(
            make_findings(
                "stratum mean for a parcel",
                severity="note",
                table=table,
                column=label,
                value=str(len(names)),
                survey=survey,
                message=(
                    f"{len(names)} of {len(hit)} parcels ({area:,.2f} ha) have fewer than two plots with {label}: "
                    f"the mean of their stratum stands for it, and their standard error holds how much single plots "
                    f"differ: {name_list(names)}."
                ),
                remedy="Measure it in these parcels if their own figure matters.",
            )
        )
    return join_findings(found) if found else empty_findings()
