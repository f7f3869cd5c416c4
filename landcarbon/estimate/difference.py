"""Difference of two domain means from plots of which all, some or none were measured on both dates.

Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.pairs import Pairs, PairSums, Side, cell_covariance, match_plots, side_of
from landcarbon.estimate.ratio import MIN_PLOTS, Cells, Sample, inflation, means

__all__ = ["Difference", "difference_of_ratios"]


@dataclass(frozen=True)
class Difference:
    """Change of domain means between two dates; every array has shape (domains, pools).

    Attributes
    ----------
    density : ndarray
        Later less earlier mean [t C/ha].
    variance, df : ndarray
        Its variance and degrees of freedom.
    days : ndarray
        Elapsed time the difference refers to [d]; NaN if visits of a stratum it rests on have no date.
    since, until, paired : ndarray of int
        Plots counted at the earlier date, at the later one, and at both.
    """

    density: np.ndarray
    variance: np.ndarray
    df: np.ndarray
    days: np.ndarray
    since: np.ndarray
    until: np.ndarray
    paired: np.ndarray


def difference_of_ratios(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    n_domains: int,
    area_ha: np.ndarray,
    allowed: np.ndarray,
) -> Difference:
    """Estimate the change of domain means.

    Parameters
    ----------
    samples : tuple of Sample
        Earlier and later survey.
    domains : tuple of ndarray
        Domain of each plot of the two samples; -1 for none.
    n_domains : int
        Number of domains.
    area_ha : ndarray
        Area of each stratum [ha]; NaN if unknown.
    allowed : ndarray of bool
        Strata estimable at both dates, by pool; shape (strata, pools).

    Returns
    -------
    Difference
        NaN where a domain has fewer than two plots at either date.

    Notes
    -----
    V = V_1 + V_2 - 2 C, with C from the deviations of the plots measured on both dates, by stratum:
    C = m / (n_1 n_2) times their sample covariance; 0 with fewer than two such plots. The share of the repeated plots,
    m / n_1 V_1 + m / n_2 V_2 - 2 C, is taken from the variance of their own differences where all plots repeat (it is
    then the same) and where it would come out negative (which few repeated plots among many can bring about).

    References
    ----------
    .. [1] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC, chapter 15 (repeated samples).
    """
    strata = len(area_ha)
    cells = Cells.of(n_domains, strata, *((d, s.stratum) for d, s in zip(domains, samples, strict=True)))
    first, second = (
        side_of(sample, domain, cells, area_ha, allowed) for sample, domain in zip(samples, domains, strict=True)
    )
    pairs = match_plots(samples, domains, allowed)
    parts = PairSums.of(first, second, pairs, domains[0], cells)
    variance, covariance = _cell_variance(first, second, parts, cells)
    plots = [group_sum(side.mean.plots_cell, cells.domain, n_domains) for side in (first, second)]
    paired = group_sum(parts.plots_cell, cells.domain, n_domains)
    part_df = _cell_df(first, second, parts, variance, covariance)
    df = np.minimum(satterthwaite(variance, part_df, cells.domain, n_domains), plots[0] + plots[1] - paired - 1)
    density = second.mean.density - first.mean.density
    enough = (plots[0] >= MIN_PLOTS) & (plots[1] >= MIN_PLOTS) & np.isfinite(density)
    days = _elapsed(samples, domains, pairs, cells, area_ha, allowed)
    return Difference(
        density=np.where(enough, density, np.nan),
        variance=np.where(enough, group_sum(variance, cells.domain, n_domains), np.nan),
        df=np.where(enough, df, np.nan),
        days=np.where(enough, days, np.nan),
        since=plots[0].astype(np.int64),
        until=plots[1].astype(np.int64),
        paired=paired.astype(np.int64),
    )


def _cell_variance(one: Side, two: Side, parts: PairSums, cells: Cells) -> tuple[np.ndarray, np.ndarray]:
    """Variance and covariance parts of each cell; shapes (C, K)."""
    v_1, v_2 = one.spread.variance, two.spread.variance
    g_1, g_2 = one.mean.weight, two.mean.weight
    n_1, n_2, m = (
        counted[cells.stratum] for counted in (one.mean.plots_stratum, two.mean.plots_stratum, parts.plots_stratum)
    )
    covariance = cell_covariance(one, two, parts, cells)
    with np.errstate(divide="ignore", invalid="ignore"):
        share_1, share_2 = m / n_1, m / n_2
        drift = (g_2 * parts.total_2 - g_1 * parts.total_1) ** 2 / m
        own = inflation(m) * np.maximum(parts.direct - drift, 0.0)  # of the paired differences themselves
        both = share_1 * v_1 + share_2 * v_2 - 2.0 * covariance
        complete = (m == n_1) & (m == n_2)
        both = np.where(complete | (both < 0), own, both)
        mixed = both + (1.0 - share_1) * v_1 + (1.0 - share_2) * v_2
    return np.where(m >= MIN_PLOTS, mixed, v_1 + v_2), covariance


def _cell_df(one: Side, two: Side, parts: PairSums, variance: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Degrees of freedom of the variance of each cell.

    The variance is the sum of what the repeated plots, the plots of the first date alone and those of the second date
    alone bring in; each is given the degrees of freedom of its own plots only, which errs on the safe side.
    """
    n_1, n_2 = one.mean.plots_cell, two.mean.plots_cell
    m = np.where(parts.plots_cell >= MIN_PLOTS, parts.plots_cell, 0.0)
    v_1, v_2 = one.spread.variance, two.spread.variance
    with np.errstate(divide="ignore", invalid="ignore"):
        share_1 = np.where(n_1 > 0, m / n_1, 0.0)
        share_2 = np.where(n_2 > 0, m / n_2, 0.0)
        both = np.maximum(share_1 * v_1 + share_2 * v_2 - 2.0 * covariance, 0.0)
        alone_1, alone_2 = (1.0 - share_1) * v_1, (1.0 - share_2) * v_2
        parts_df = [
            (both, np.maximum(m - 1.0, 1.0)),
            (alone_1, np.maximum(n_1 - m - 1.0, 1.0)),
            (alone_2, np.maximum(n_2 - m - 1.0, 1.0)),
        ]
        total = both + alone_1 + alone_2
        effective = 1.0 / sum((part / total) ** 2 / df for part, df in parts_df)
    plain = np.where(m > 0, m - 1.0, np.maximum(np.minimum(n_1, n_2) - 1.0, 1.0))
    df = np.where((total > 0) & (variance > 0), effective, plain)
    return np.where((n_1 > 0) | (n_2 > 0), df, 0.0)


def _elapsed(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    pairs: Pairs,
    cells: Cells,
    area_ha: np.ndarray,
    allowed: np.ndarray,
) -> np.ndarray:
    """Mean date of the later less that of the earlier survey, by domain and pool [d].

    The weights are those of the estimate. A repeated plot counts only with both dates, so that where all plots repeat
    the result is the mean of their own elapsed times. NaN for a domain with a cell in which no visit has a date.
    """
    used = [sample.used for sample in samples]
    paired = pairs.counted
    pools = allowed.shape[1]
    if all((table == table[:, :1]).all() for table in (*used, allowed)):  # one answer for all pools
        used, paired, allowed = [table[:, :1] for table in used], paired[:, :1], allowed[:, :1]
    dated = [table & np.isfinite(sample.day)[:, None] for table, sample in zip(used, samples, strict=True)]
    both = dated[0][pairs.first] & dated[1][pairs.second]
    for known, rows in zip(dated, (pairs.first, pairs.second), strict=True):
        known[rows] &= both | ~paired
    dates = []
    for sample, domain, known, table in zip(samples, domains, dated, used, strict=True):
        day = np.where(known, sample.day[:, None], 0.0)
        mean = means(replace(sample, value=day, used=known), domain, cells, area_ha, allowed)
        counted = table[mean.rows] & allowed[sample.stratum[mean.rows]]
        plots = group_sum(counted, mean.cell, len(cells.domain))
        undated = group_sum((plots > 0) & (mean.plots_cell == 0), cells.domain, cells.domains)
        dates.append(np.where(undated > 0, np.nan, mean.density))
    return np.broadcast_to(dates[1] - dates[0], (cells.domains, pools))
