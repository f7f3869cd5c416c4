"""Sums of parts at the levels inventory, stratum and parcel."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.combine import Plan, SumEstimate, estimate_sums, stratum_means
from landcarbon.estimate.ratio import Sample
from landcarbon.estimate.tables import Units

__all__ = ["SumLevel", "sum_levels"]


@dataclass(frozen=True)
class SumLevel:
    """Estimates of one level; ``area_ha`` has shape (units, sums)."""

    by: str
    labels: list[str]
    area_ha: np.ndarray
    estimate: SumEstimate


def sum_levels(samples: tuple[Sample, ...], plan: Plan, units: Units, inventory_name: str) -> list[SumLevel]:
    """Estimate the inventory (if areas allow), the strata and the parcels.

    Parameters
    ----------
    samples : tuple of Sample
        One survey, or the earlier and the later one.
    plan : Plan
        What counts.
    units : Units
        Strata and parcels.
    inventory_name : str
        Label of the whole.
    """
    sums = len(plan.sums.names)

    def of(labels: Sequence[str], area: np.ndarray) -> np.ndarray:
        return np.repeat(area[:, None], sums, axis=1) if len(labels) else np.zeros((0, sums))

    levels = []
    if units.has_total:
        domains = tuple(np.zeros_like(sample.stratum) for sample in samples)
        estimate = estimate_sums(samples, domains, 1, plan, near=plan.near)
        levels.append(SumLevel("inventory", [inventory_name], estimate.area_ha, estimate))
    domains = tuple(sample.stratum for sample in samples)
    shown = np.stack(plan.plots)
    estimate = estimate_sums(samples, domains, len(units.strata), plan, shown=shown, near=plan.near)
    levels.append(SumLevel("stratum", units.strata, of(units.strata, units.stratum_area_ha), estimate))
    domains = tuple(sample.parcel for sample in samples)
    means = stratum_means(samples, plan)
    estimate = estimate_sums(samples, domains, len(units.parcels), plan, means=means)
    levels.append(SumLevel("parcel", units.parcels, of(units.parcels, units.parcel_area_ha), estimate))
    return levels
