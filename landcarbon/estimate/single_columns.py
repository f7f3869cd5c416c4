"""Columns of the plot table one by one, with the variance from neighbouring plots."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from landcarbon.estimate.joint import column_variances, joint_table
from landcarbon.estimate.pairs import side_of
from landcarbon.estimate.ratio import Cells, RatioEstimate, Sample

__all__ = ["ratio_from_neighbours"]


def ratio_from_neighbours(
    made: RatioEstimate, sample: Sample, domain: np.ndarray, area_ha: np.ndarray, allowed: np.ndarray
) -> RatioEstimate:
    """Replace the variance of domains that are made of whole strata by that from neighbouring plots.

    Parameters
    ----------
    made : RatioEstimate
        Estimates of the domains.
    sample : Sample
        All plots of the survey.
    domain : ndarray of int
        Domain of each plot.
    area_ha : ndarray
        Area of each stratum [ha].
    allowed : ndarray of bool
        Strata that take part, by pool; shape (strata, pools).
    """
    domains, pools = made.density.shape
    cells = Cells.of(domains, len(area_ha), (domain, sample.stratum))
    side = side_of(sample, domain, cells, area_ha, allowed)
    spread = column_variances(joint_table((side,), (domain,), cells, None, near=True), pools)
    known = np.isfinite(made.density)
    return replace(
        made,
        variance=np.where(known, spread.variance, np.nan),
        df=np.where(known, spread.df, np.nan),
        near=spread.near,
    )
