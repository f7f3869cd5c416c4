"""Change where plots changed their stratum or domain between the dates.

Plots that moved are unlike those that did not, so what they bring in cannot be told by the others. Symbols are those of
``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.pairs import Side, side_of
from landcarbon.estimate.ratio import MIN_PLOTS, Cells, Sample

__all__ = ["Moved", "find_moved", "moved_variance"]

_SIGNS = (-1.0, 1.0)  # of the two dates in a change


@dataclass(frozen=True)
class Moved:
    """Plots of both dates that changed their stratum or domain, as rows of the two samples."""

    first: np.ndarray
    second: np.ndarray

    def domains(
        self, samples: tuple[Sample, Sample], domains: tuple[np.ndarray, np.ndarray], number: int
    ) -> np.ndarray:
        """Whether a domain lies in a stratum that holds such plots at either date: they count there as plots beside."""
        touched = [sample.stratum[rows] for sample, rows in zip(samples, (self.first, self.second), strict=True)]
        marks = np.zeros(number + 1, dtype=bool)  # the last place takes plots outside all domains
        for sample, domain in zip(samples, domains, strict=True):
            marks[domain[np.isin(sample.stratum, np.concatenate(touched))]] = True
        return marks[:-1]


def find_moved(samples: tuple[Sample, Sample], domains: tuple[np.ndarray, np.ndarray]) -> Moved:
    """Find the plots that changed their stratum or domain."""
    one, two = samples
    _, first, second = np.intersect1d(one.plot, two.plot, assume_unique=True, return_indices=True)
    changed = (one.stratum[first] != two.stratum[second]) | (domains[0][first] != domains[1][second])
    return Moved(first[changed], second[changed])


def moved_variance(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    area_ha: np.ndarray,
    allowed: np.ndarray,
    scale: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Variance of change in domains, each plot as one unit wherever it lies at the two dates.

    Parameters
    ----------
    samples : tuple of Sample
        Earlier and later survey.
    domains : tuple of ndarray of int
        Domain of each plot; -1 for none.
    area_ha : ndarray
        Area of each stratum [ha].
    allowed : ndarray of bool
        Strata estimable at both dates, by column; shape (H, K).
    scale : ndarray
        What each column counts in each sum; shape (S, D, K).

    Returns
    -------
    variance, df : ndarray
        Shapes (D, S). Degrees of freedom are the plots of the domain less one.

    Notes
    -----
    Sum over all plots of n / (n - 1) (w_2 u_2 - w_1 u_1)^2, with u of the stratum and domain the plot lies in at the
    date, 0 where it was not measured, and n the plots of the stratum it was first seen in. The squares are not taken
    about their mean in that stratum: areas of strata that changed are not what plots were drawn by.
    """
    number, strata = scale.shape[1], len(area_ha)
    cells = Cells.of(number, strata, *((d, s.stratum) for d, s in zip(domains, samples, strict=True)))
    sides = [side_of(s, d, cells, area_ha, allowed) for s, d in zip(samples, domains, strict=True)]
    distinct = np.unique(np.concatenate([sample.plot for sample in samples]))
    rows = [np.searchsorted(distinct, sample.plot) for sample in samples]
    size, stratum = np.zeros((len(distinct), 2)), np.full((len(distinct), 2), -1)
    for date, (sample, row) in enumerate(zip(samples, rows, strict=True)):
        size[row, date], stratum[row, date] = sample.size, sample.stratum
    home = np.where(stratum[:, 0] >= 0, stratum[:, 0], stratum[:, 1])
    plots = np.bincount(home, minlength=strata)
    inflated = np.where(plots >= MIN_PLOTS, plots / np.maximum(plots - 1.0, 1.0), 1.0)[home]
    # pieces: plots by domain they lie in at either date
    keys = [row * (number + 1) + domain for row, domain in zip(rows, domains, strict=True)]
    both = np.unique(np.concatenate([key[domain >= 0] for key, domain in zip(keys, domains, strict=True)]))
    plot, domain = both // (number + 1), both % (number + 1)
    slope = [_slopes(side, scale, cells) for side in sides]
    own = np.zeros((len(both), len(scale)))
    for date, (side, key) in enumerate(zip(sides, keys, strict=True)):
        sign, inside = _SIGNS[date], side.mean.rows
        weighted = np.nan_to_num(side.mean.weight[side.mean.cell] * side.spread.inside)
        weighted = np.where(side.counted[inside], weighted, 0.0)
        summed = np.einsum("nk,snk->ns", weighted, scale[:, domains[date][inside]])
        np.add.at(own, np.searchsorted(both, key[inside]), sign * summed)
        own -= sign * slope[date][domain, stratum[plot, date]] * size[plot, date, None]
    squares = group_sum(inflated[plot, None] * own**2, domain, number)
    squares += _outside(slope, size, stratum, inflated, (plot, domain))
    found = np.maximum(np.bincount(domain, minlength=number) - 1.0, 1.0)
    return squares, np.repeat(found[:, None], len(scale), axis=1)


def _slopes(side: Side, scale: np.ndarray, cells: Cells) -> np.ndarray:
    """Return what a unit of size of a plot takes off, by domain and stratum; (D, H + 1, S), 0 in the last place."""
    table = np.zeros((cells.domains, cells.strata + 1, len(scale)))
    taken = np.nan_to_num(side.mean.weight * side.spread.slope)
    table[cells.domain, cells.stratum] = np.einsum("ck,sck->cs", taken, scale[:, cells.domain])
    return table


def _outside(
    slope: list[np.ndarray],
    size: np.ndarray,
    stratum: np.ndarray,
    inflated: np.ndarray,
    pieces: tuple[np.ndarray, np.ndarray],
) -> np.ndarray:
    """Add up the squares of the plots outside each domain at both dates; shape (D, S)."""
    first, second = slope
    if not first.any() and not second.any():
        return np.zeros((first.shape[0], first.shape[2]))
    paths, path = np.unique(stratum, axis=0, return_inverse=True)
    path, (plot, domain), domains = path.ravel(), pieces, first.shape[0]
    products = inflated[:, None] * np.stack([size[:, 0] ** 2, size[:, 1] ** 2, size[:, 0] * size[:, 1]], axis=1)
    every = group_sum(products, path, len(paths))
    total = np.zeros((domains, first.shape[2]))
    for one, (before, after) in enumerate(paths):
        mine = path[plot] == one
        rest = every[one] - group_sum(products[plot[mine]], domain[mine], domains)
        a, b = first[:, before], second[:, after]
        total += np.maximum(a**2 * rest[:, [0]] + b**2 * rest[:, [1]] - 2.0 * a * b * rest[:, [2]], 0.0)
    return total
