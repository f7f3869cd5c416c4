"""Two sets of domain means from the same or overlapping plots: what they share.

The two sets are two dates, or two pools of one date. Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.groups import group_sum, narrow, wide
from landcarbon.estimate.ratio import MIN_PLOTS, Cells, Deviations, Means, Sample, deviations, inflation, means

__all__ = ["PairSums", "Pairs", "Side", "cell_covariance", "match_plots", "pool_covariance", "side_of"]


@dataclass(frozen=True)
class Side:
    """One set (a date or a pool): the sample, its domain means and deviations.

    ``counted`` says which values of the sample enter the means.
    """

    sample: Sample
    mean: Means
    spread: Deviations
    counted: np.ndarray


@dataclass(frozen=True)
class Pairs:
    """Plots in both sets.

    ``first`` and ``second`` are positions in the samples, ``counted`` says for which pools both values count, and
    ``stratum`` is the stratum they share.
    """

    first: np.ndarray
    second: np.ndarray
    stratum: np.ndarray
    counted: np.ndarray


def side_of(sample: Sample, domain: np.ndarray, cells: Cells, area_ha: np.ndarray, allowed: np.ndarray) -> Side:
    """Estimate domain means and linearise them."""
    mean = means(sample, domain, cells, area_ha, allowed)
    return Side(sample, mean, deviations(sample, mean, cells), sample.used & allowed[sample.stratum])


def match_plots(samples: tuple[Sample, Sample], domains: tuple[np.ndarray, np.ndarray], allowed: np.ndarray) -> Pairs:
    """Match plots; one that changed its stratum, cluster or domain between the dates does not pair."""
    one, two = samples
    _, first, second = np.intersect1d(one.plot, two.plot, assume_unique=True, return_indices=True)
    same = (one.stratum[first] == two.stratum[second]) & (domains[0][first] == domains[1][second])
    if one.unit is not None and two.unit is not None:
        same &= one.unit[first] == two.unit[second]
    first, second = first[same], second[same]
    stratum = one.stratum[first]
    return Pairs(first, second, stratum, one.used[first] & two.used[second] & allowed[stratum])


@dataclass(frozen=True)
class PairSums:
    """Sums over the plots in both sets, with u the deviations and w the weights of either set.

    Attributes
    ----------
    plots_stratum : ndarray
        Plots in both sets, by stratum and pool; shape (H, K).
    plots_cell : ndarray
        The same by cell; shape (C, K), as the following.
    cross : ndarray
        Sum of u_1 u_2 over the plots of the stratum.
    direct : ndarray
        Sum of (w_2 u_2 - w_1 u_1)^2 over the plots of the stratum.
    total_1, total_2 : ndarray
        Sums of u_1 and u_2 over the plots of the stratum.
    """

    plots_stratum: np.ndarray
    plots_cell: np.ndarray
    cross: np.ndarray
    direct: np.ndarray
    total_1: np.ndarray
    total_2: np.ndarray

    @classmethod
    def of(cls, one: Side, two: Side, pairs: Pairs, domain: np.ndarray, cells: Cells) -> PairSums:
        """Add up over the plots in both sets; ``domain`` is that of the plots of the first."""
        pools, both = pairs.counted.shape[1], narrow(pairs.counted)
        size_1 = np.where(both, one.sample.size[pairs.first][:, None], 0.0)
        size_2 = np.where(both, two.sample.size[pairs.second][:, None], 0.0)
        inside: np.ndarray | slice = domain[pairs.first] >= 0
        cell = cells.find(domain[pairs.first][inside], pairs.stratum[inside])
        inside = slice(None) if len(cell) == len(pairs.first) else inside  # no copies where no plot is left out
        n_cells = len(cells.domain)

        def by_stratum(values: np.ndarray) -> np.ndarray:
            return group_sum(values, pairs.stratum, cells.strata)[cells.stratum]

        def by_cell(values: np.ndarray) -> np.ndarray:
            return group_sum(values, cell, n_cells)

        counted, s_1, s_2 = both[inside], size_1[inside], size_2[inside]
        z_1, z_2 = _of_rows(one, pairs.first[inside]), _of_rows(two, pairs.second[inside])
        if not counted.all():
            z_1, z_2 = np.where(counted, z_1, 0.0), np.where(counted, z_2, 0.0)
        r_1, r_2 = one.spread.slope, two.spread.slope
        u_1, u_2 = z_1 - r_1[cell] * s_1, z_2 - r_2[cell] * s_2
        g_1, g_2 = one.mean.weight, two.mean.weight
        # plots of the stratum outside the domain have u = -r s in either set; written with the change of size, which
        # is mostly zero, so that little is lost to rounding
        grown = size_2 - size_1
        b_11, b_1g, b_gg = (
            by_stratum(a * b) - by_cell(a[inside] * b[inside])
            for a, b in ((size_1, size_1), (size_1, grown), (grown, grown))
        )
        apart, a_2 = g_2 * r_2 - g_1 * r_1, g_2 * r_2
        beside = apart**2 * b_11 + 2.0 * apart * a_2 * b_1g + a_2**2 * b_gg
        return cls(
            plots_stratum=wide(group_sum(both, pairs.stratum, cells.strata), pools),
            plots_cell=wide(by_cell(counted), pools),
            cross=by_cell(u_1 * u_2) + r_1 * r_2 * (b_11 + b_1g),
            direct=by_cell((g_2[cell] * u_2 - g_1[cell] * u_1) ** 2) + np.maximum(beside, 0.0),
            total_1=by_cell(z_1) - r_1 * by_stratum(size_1),
            total_2=by_cell(z_2) - r_2 * by_stratum(size_2),
        )


def _of_rows(side: Side, rows: np.ndarray) -> np.ndarray:
    """Deviations of plots of the sample; the plots must lie in a domain."""
    if len(side.mean.rows) == len(side.sample.size):
        return side.spread.inside[rows]
    position = np.zeros(len(side.sample.size), dtype=np.int64)
    position[side.mean.rows] = np.arange(len(side.mean.rows))
    return side.spread.inside[position[rows]]


def cell_covariance(one: Side, two: Side, parts: PairSums, cells: Cells) -> np.ndarray:
    """Part of each cell in the covariance of the two domain means; shape (C, K).

    Notes
    -----
    w_1 w_2 m / (m - 1) sum (u_1 - mean u_1) (u_2 - mean u_2) over the m plots in both sets; 0 if m is below two.
    """
    m = parts.plots_stratum[cells.stratum]
    with np.errstate(divide="ignore", invalid="ignore"):
        centred = parts.cross - parts.total_1 * parts.total_2 / m
    return np.where(m >= MIN_PLOTS, one.mean.weight * two.mean.weight * inflation(m) * centred, 0.0)


def pool_covariance(
    sample: Sample, domain: np.ndarray, domains: int, area_ha: np.ndarray, allowed: np.ndarray
) -> np.ndarray:
    """Estimate the covariances between the domain means of all pools.

    Parameters
    ----------
    sample : Sample
        All plots of the survey.
    domain : ndarray of int
        Domain of each plot; -1 for none.
    domains : int
        Number of domains.
    area_ha : ndarray
        Area of each stratum [ha]; NaN if unknown.
    allowed : ndarray of bool
        Strata that take part, by pool; shape (strata, pools).

    Returns
    -------
    ndarray
        Shape (domains, pools, pools), symmetric [(t C/ha)^2]. Pools measured on different plots share what the plots
        measured for both tell.
    """
    pools = sample.value.shape[1]
    cells = Cells.of(domains, len(area_ha), (domain, sample.stratum))
    matrix = np.zeros((domains, pools, pools))
    first = np.arange(pools)
    one = side_of(sample, domain, cells, area_ha, allowed)
    for shift in range(pools):  # each pool with the pool `shift` columns on
        second = np.roll(first, -shift)
        other = replace(sample, value=sample.value[:, second], used=sample.used[:, second])
        both = allowed & allowed[:, second]
        two = side_of(other, domain, cells, area_ha, allowed[:, second])
        pairs = match_plots((sample, other), (domain, domain), both)
        parts = PairSums.of(one, two, pairs, domain, cells)
        covariance = group_sum(cell_covariance(one, two, parts, cells), cells.domain, domains)
        matrix[:, first, second] = covariance
        matrix[:, second, first] = covariance
    return matrix
