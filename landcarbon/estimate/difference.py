"""Difference of two domain means from plots of which all, some or none were measured on both dates.

Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.groups import group_sum, narrow, wide
from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.joint import SumVariance, column_variances, joint_table
from landcarbon.estimate.pairs import Pairs, PairSums, Side, cell_covariance, match_plots, side_of
from landcarbon.estimate.ratio import MIN_PLOTS, Cells, Sample, inflation, means

__all__ = ["Difference", "difference_of_ratios", "elapsed"]


@dataclass(frozen=True)
class Difference:
    """Change of domain means between two dates; every array has shape (domains, pools).

    Attributes
    ----------
    density : ndarray
        Later less earlier mean [t C/ha].
    variance, df : ndarray
        Its variance and degrees of freedom.
    variance_all_plots : ndarray
        Variance by the textbook form, for comparison; NaN with clusters or variance from neighbours.
    days : ndarray
        Elapsed time the difference refers to [d]; NaN if visits of a stratum it rests on have no date.
    since, until, paired : ndarray of int
        Plots counted at the earlier date, at the later one, and at both.
    units_since, units_until : ndarray of int, optional
        Sampling units counted at the two dates.
    near : ndarray, optional
        Share of the variance pieces from neighbouring plots; None if they were not asked for.
    """

    density: np.ndarray
    variance: np.ndarray
    variance_all_plots: np.ndarray
    df: np.ndarray
    days: np.ndarray
    since: np.ndarray
    until: np.ndarray
    paired: np.ndarray
    units_since: np.ndarray | None = None
    units_until: np.ndarray | None = None
    near: np.ndarray | None = None


def difference_of_ratios(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    n_domains: int,
    area_ha: np.ndarray,
    allowed: np.ndarray,
    *,
    near: bool = False,
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
    near : bool
        Take the variance from differences of neighbouring plots, where there are enough of them. For domains that are
        made of whole strata.

    Returns
    -------
    Difference
        NaN where a domain has fewer than two units at either date.

    Notes
    -----
    In each stratum V is the sum of three independent parts: what the m plots measured on both dates bring in, from the
    variance of their own weighted differences w_2 u_2 - w_1 u_1; and what the plots measured on one date only bring in,
    as many times the mean squared deviation of all plots of that date. Where all plots repeat this is the variance of
    the mean paired difference; where none does, or one only, it is V_1 + V_2. ``variance_all_plots`` is the textbook
    form V_1 + V_2 - 2 C with C = m / (n_1 n_2) times the covariance of the repeated plots. It agrees in those cases
    and on average, but mixes variances of different sets of plots: at the high correlations of repeated plots it
    swings more and can be negative.

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
    plots, units = (
        [group_sum(number, cells.domain, n_domains) for number in numbers]
        for numbers in (
            (first.mean.plots_cell, second.mean.plots_cell),
            (first.spread.units_cell, second.spread.units_cell),
        )
    )
    if near or samples[0].unit is not None:
        spread = _by_units((first, second), domains, cells, pairs, near)
        textbook = np.full(spread.variance.shape, np.nan)
        inside = domains[0][pairs.first] >= 0
        paired = group_sum(pairs.counted[inside], domains[0][pairs.first[inside]], n_domains)
    else:
        parts = PairSums.of(first, second, pairs, domains[0], cells)
        paired = group_sum(parts.plots_cell, cells.domain, n_domains)
        spread = _by_plots(first, second, pairs, parts, cells, most=plots[0] + plots[1] - paired - 1)
        textbook = first.spread.variance + second.spread.variance - 2.0 * cell_covariance(first, second, parts, cells)
        textbook = group_sum(textbook, cells.domain, n_domains)
    density = second.mean.density - first.mean.density
    enough = (units[0] >= MIN_PLOTS) & (units[1] >= MIN_PLOTS) & np.isfinite(density)
    days = elapsed(samples, domains, pairs, cells, area_ha, allowed)
    return Difference(
        density=np.where(enough, density, np.nan),
        variance=np.where(enough, spread.variance, np.nan),
        variance_all_plots=np.where(enough, textbook, np.nan),
        df=np.where(enough, spread.df, np.nan),
        days=np.where(enough, days, np.nan),
        since=plots[0].astype(np.int64),
        until=plots[1].astype(np.int64),
        paired=paired.astype(np.int64),
        units_since=units[0].astype(np.int64),
        units_until=units[1].astype(np.int64),
        near=spread.near if near else None,
    )


def _by_units(
    sides: tuple[Side, Side], domains: tuple[np.ndarray, np.ndarray], cells: Cells, pairs: Pairs, near: bool
) -> SumVariance:
    """Variance where plots lie in clusters, or comes from neighbours."""
    return column_variances(joint_table(sides, domains, cells, pairs, near=near), sides[0].sample.value.shape[1])


def _by_plots(one: Side, two: Side, pairs: Pairs, parts: PairSums, cells: Cells, *, most: np.ndarray) -> SumVariance:
    """Variance and degrees of freedom where each plot is a unit, all pools at once."""
    variance, part_df = _components(one, two, pairs, parts, cells)
    codes = np.tile(cells.domain, 3)
    return SumVariance(
        variance=group_sum(variance, codes, cells.domains),
        df=np.minimum(satterthwaite(variance, part_df, codes, cells.domains), most),
        apart=np.zeros(most.shape, dtype=bool),
        near=np.full(most.shape, np.nan),
    )


def _components(one: Side, two: Side, pairs: Pairs, parts: PairSums, cells: Cells) -> tuple[np.ndarray, np.ndarray]:
    """Three variance parts of each cell with their degrees of freedom; shapes (3 C, K).

    The parts are the plots of both dates, those of the first alone and those of the second alone. The first knows its
    variance from the repeated plots of the domain, the others from all plots of the domain at their date.
    """
    m = parts.plots_stratum[cells.stratum]
    with np.errstate(divide="ignore", invalid="ignore"):
        drift = (two.mean.weight * parts.total_2 - one.mean.weight * parts.total_1) ** 2 / m
        both = np.where(m >= MIN_PLOTS, inflation(m) * np.maximum(parts.direct - drift, 0.0), 0.0)
    paired = np.where(m >= MIN_PLOTS, parts.plots_cell, 0.0)
    single = pairs.counted & (parts.plots_stratum[pairs.stratum] >= MIN_PLOTS)
    variance, df = [both], [_part_df(both, paired)]
    for side, rows in ((one, pairs.first), (two, pairs.second)):
        alone, plots = _alone(side, rows, single, cells)
        variance.append(alone)
        df.append(np.where((alone > 0) | (plots > 0), np.maximum(side.mean.plots_cell - 1.0, 1.0), 0.0))
    return np.concatenate(variance), np.concatenate(df)


def _part_df(variance: np.ndarray, plots: np.ndarray) -> np.ndarray:
    """One less than the plots, at least 1; 0 for a part that is not there."""
    return np.where((variance > 0) | (plots > 0), np.maximum(plots - 1.0, 1.0), 0.0)


def _alone(side: Side, rows: np.ndarray, paired: np.ndarray, cells: Cells) -> tuple[np.ndarray, np.ndarray]:
    """Variance part of the plots of one date that are not paired, and their number; shapes (C, K).

    ``rows`` are the sample's plots that occur at both dates, ``paired`` says for which pools they pair. What one such
    plot adds is taken from all plots of the date: a few plots alone tell little about their own variance.
    """
    sample, mean = side.sample, side.mean
    free = sample.used & (mean.plots_stratum >= MIN_PLOTS)[sample.stratum]
    free[rows] &= ~paired
    if not free.any():  # all plots repeat
        return np.zeros_like(mean.weight), np.zeros_like(mean.weight)
    pools, free = free.shape[1], narrow(free)
    square = np.where(free, sample.size[:, None], 0.0) ** 2
    slope = side.spread.slope
    n_cells = len(cells.domain)
    squares = side.spread.within
    plots = wide(group_sum(free[mean.rows], mean.cell, n_cells), pools)
    share = np.divide(plots, mean.plots_cell, out=np.zeros_like(squares), where=mean.plots_cell > 0)
    outside = group_sum(square, sample.stratum, cells.strata)[cells.stratum]
    outside = outside - group_sum(square[mean.rows], mean.cell, n_cells)
    total = share * squares + slope**2 * np.maximum(outside, 0.0)
    return mean.weight**2 * inflation(mean.plots_stratum)[cells.stratum] * total, plots


def elapsed(
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
