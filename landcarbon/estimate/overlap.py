"""Covariances of several estimates that share plots: dates of a chain of surveys, or repeated and other plots of two.

Each estimate is a domain mean from plots of its own. A plot brings something into every estimate it counts for; plots
that count for the same estimates make a group, and what a group brings in is told by all plots that count for at least
these. Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.overlap_groups import Columns, Overlap, alike, patterns, pieces
from landcarbon.estimate.pairs import Side, side_of
from landcarbon.estimate.ratio import Cells, Sample

__all__ = ["Overlap", "Weighted", "covariance", "overlap_table", "survey_table", "weighted_variance"]


@dataclass(frozen=True)
class Weighted:
    """Variance of a weighted sum of estimates, by domain, with its degrees of freedom (NaN without plots)."""

    variance: np.ndarray
    df: np.ndarray


def overlap_table(
    sides: tuple[Side, ...], domains: tuple[np.ndarray, ...], cells: Cells, tellers: tuple[Side, ...] | None = None
) -> Overlap:
    """Put the deviations of several estimates side by side.

    Parameters
    ----------
    sides : tuple of Side
        One for each estimate, all with the same columns.
    domains : tuple of ndarray of int
        Domain of each plot of their samples; -1 for none.
    cells : Cells
        Cells of the domains, of all samples.
    tellers : tuple of Side, optional
        Sides of the same samples, whose plots tell how much the plots of an estimate vary; else its own.
    """
    tellers = tellers or sides
    strata, count = max(cells.strata, 1), cells.domains + 1
    keys = [_units(side.sample) * strata + side.sample.stratum for side in sides]
    distinct = np.unique(np.concatenate(keys))
    units = [np.searchsorted(distinct, key) for key in keys]
    split = [unit * count + domain + 1 for unit, domain in zip(units, domains, strict=True)]
    both = np.unique(np.concatenate([key[domain >= 0] for key, domain in zip(split, domains, strict=True)]))
    unit = both // count
    shape = (len(sides), sides[0].sample.value.shape[1])
    size, value = np.zeros((len(distinct), shape[0])), np.zeros((len(both), *shape))
    used, tells = (np.zeros((len(distinct), *shape), dtype=bool) for _ in range(2))
    beside = np.zeros((len(cells.domain), *shape))
    cell = cells.find(both % count - 1, distinct[unit] % strata)
    for place, (side, teller, row, key) in enumerate(zip(sides, tellers, units, split, strict=True)):
        size[:, place] = np.bincount(row, weights=side.sample.size, minlength=len(distinct))
        used[:, place] = group_sum(side.counted, row, len(distinct)) > 0
        tells[:, place] = group_sum(teller.counted, row, len(distinct)) > 0
        inside = teller.mean.rows
        weight, slope = np.nan_to_num(side.mean.weight), np.nan_to_num(teller.spread.slope)
        here = np.where(teller.counted[inside], np.nan_to_num(teller.spread.inside), 0.0)
        beside[:, place] = weight * slope
        value[:, place] = weight[cell] * group_sum(here, np.searchsorted(both, key[inside]), len(both))
        value[:, place] -= beside[cell, place] * size[unit, place][:, None] * tells[unit, place]
    return Overlap(distinct % strata, size, used, tells, unit, cell, value, beside, cells)


def _units(sample: Sample) -> np.ndarray:
    return sample.plot if sample.unit is None else sample.unit


def survey_table(
    samples: tuple[Sample, ...], domains: tuple[np.ndarray, ...], number: int, area_ha: np.ndarray, allowed: np.ndarray
) -> tuple[Overlap, np.ndarray]:
    """Means of several surveys, and what each plot brings into them.

    Parameters
    ----------
    samples : tuple of Sample
        One for each survey.
    domains : tuple of ndarray of int
        Domain of each plot of the samples; -1 for none.
    number : int
        Number of domains.
    area_ha : ndarray
        Area of each stratum [ha].
    allowed : ndarray of bool
        Strata that take part, by column, shape (H, K), or by survey too, (T, H, K).

    Returns
    -------
    table : Overlap
    mean : ndarray
        By domain, survey and column; shape (D, T, K). NaN where there is no plot.
    """
    strata = len(area_ha)
    cells = Cells.of(number, strata, *((d, s.stratum) for d, s in zip(domains, samples, strict=True)))
    every = np.broadcast_to(allowed, (len(samples), *allowed.shape[-2:]))
    sides = tuple(side_of(s, d, cells, area_ha, a) for s, d, a in zip(samples, domains, every, strict=True))
    return overlap_table(sides, domains, cells), np.stack([side.mean.density for side in sides], axis=1)


def covariance(table: Overlap, scale: np.ndarray) -> np.ndarray:
    """Covariance matrix of the estimates of a sum of columns, by domain.

    Parameters
    ----------
    table : Overlap
        Deviations by plot.
    scale : ndarray
        What each column counts in the sum; shape (D, K).

    Returns
    -------
    ndarray
        Shape (D, E, E), symmetric and positive semi-definite.

    Notes
    -----
    A group of m plots in a stratum, told by N plots with deviations c (one number for each estimate), adds
    N / (N - 1) (m / N) (sum of c c' - N mean(c) mean(c)'), the covariances of its own estimates. Every such matrix is
    positive semi-definite and so is their sum, which covariances taken pair by pair from different plots are not. For
    a part of a stratum the squares come from its own plots only; negative eigenvalues, which can then occur, are set to
    zero (the nearest matrix without).
    """
    cells, number = table.cells, table.used.shape[1]
    total = np.zeros((cells.domains, number * number))
    for hit, held in patterns(table, scale[None]):
        columns = Columns.of(table, held)
        value, beside = columns.scaled(scale[None], np.ones((1, 1, 1)))
        apart = np.eye(number)[columns.estimate]
        value, beside = value * apart, beside * apart
        for matrix, _ in pieces(columns, value, beside, full=True):
            by_domain = group_sum(matrix.reshape(len(cells.domain), -1), cells.domain, cells.domains)
            total += np.where(hit[:, None], by_domain, 0.0)
    total = total.reshape(-1, number, number)
    if table.whole or not total.size:
        return total
    root, vectors = np.linalg.eigh(total)
    fixed = (vectors * np.maximum(root, 0.0)[:, None, :]) @ np.swapaxes(vectors, 1, 2)
    return np.where(root.min(axis=1)[:, None, None] < 0, fixed, total)


def weighted_variance(
    table: Overlap, scale: np.ndarray, weights: np.ndarray, factor: np.ndarray | None = None
) -> Weighted:
    """Variance of a weighted sum of the estimates of sums of columns.

    Parameters
    ----------
    table : Overlap
        Deviations by plot.
    scale : ndarray
        What each column counts in each sum; shape (S, D, K).
    weights : ndarray
        Of the estimates, by domain; shape (D, E), or (D, E, K) where they differ between columns.
    factor : ndarray, optional
        What the variance of each cell is multiplied by; shape (C,).

    Returns
    -------
    Weighted
        Degrees of freedom by Satterthwaite over groups and strata: one less than the plots (of the domain) that tell
        about a group, and in all at most the plots less one. Shapes (D, S).
    """
    cells, number = table.cells, len(scale)
    wide = weights[:, :, None] if weights.ndim == 2 else weights
    variance, df = np.zeros((cells.domains, number)), np.full((cells.domains, number), np.nan)
    most = np.maximum(table.units() - 1.0, 1.0)[:, None]
    for sums in [slice(None)] if alike(table) else [slice(one, one + 1) for one in range(number)]:
        for hit, held in patterns(table, scale[sums]):
            columns = Columns.of(table, held)
            found = list(pieces(columns, *columns.scaled(scale[sums], wide), full=False))
            if not found:
                continue
            made = np.concatenate([np.maximum(squares, 0.0) for squares, _ in found])
            made = made if factor is None else made * np.tile(factor, len(found))[:, None]
            free = np.concatenate([told for _, told in found])
            codes = np.tile(cells.domain, len(found))
            effective = np.minimum(satterthwaite(made, free, codes, cells.domains), most)
            variance[hit, sums] = group_sum(made, codes, cells.domains)[hit]
            df[hit, sums] = effective[hit]
    return Weighted(variance, df)
