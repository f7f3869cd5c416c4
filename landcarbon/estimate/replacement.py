"""Sampling with partial replacement: the best combination of the plots of both dates and the plots of one date only.

Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.clusters import unit_counts
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.overlap import Overlap, covariance, overlap_table, weighted_variance
from landcarbon.estimate.pairs import Side, match_plots, side_of
from landcarbon.estimate.ratio import MIN_PLOTS, Cells, Sample

__all__ = [
    "Combination",
    "Panels",
    "best_weights",
    "choose_weights",
    "combine_panels",
    "panels",
    "room",
    "small_sample_factor",
    "sum_of_strata",
]

REPEATED = 3  # least number of repeated plots for their covariance to be used
OTHERS = MIN_PLOTS  # least number of plots of one date only to be weighed on their own
_RANK = 1e-10  # eigenvalues below this share of the largest variance are taken as zero

# Estimates: repeated and other plots of the earlier date, then of the later one. Means of either kind of plots
# estimate the same, so the differences between them may be added to any estimate.
_CONTRASTS = np.array([[-1.0, 1.0, 0.0, 0.0], [0.0, 0.0, -1.0, 1.0]])
_BASES = np.array([[1.0, 0.0, 0.0, 0.0], [0.0, 0.0, 1.0, 0.0]])  # mean of either date from the repeated plots alone


@dataclass(frozen=True)
class Panels:
    """Repeated and other plots of two dates in domains. Domains D, columns K, cells C, strata H.

    Attributes
    ----------
    table : Overlap
        Deviations of the four estimates: repeated and other plots of the earlier date, then of the later one.
    mean : ndarray
        The four estimates by domain and column; shape (D, 4, K). NaN where there is no plot.
    split : ndarray of bool
        Whether a stratum weighs the other plots of a date on their own; shape (2, H, K). Where it does not, all its
        plots of the date stand for either kind.
    repeated, others : ndarray
        Plots by domain, in strata that are split: shape (D, K), and by date (2, D, K).
    samples : tuple of Sample
        Plots of the four estimates.
    known : ndarray
        Degrees of freedom of the covariances, of the strata that are split; shape (D, K); see :func:`room`.
    """

    table: Overlap
    mean: np.ndarray
    split: np.ndarray
    repeated: np.ndarray
    others: np.ndarray
    known: np.ndarray
    samples: tuple[Sample, ...]


@dataclass(frozen=True)
class Combination:
    """Best linear combinations by domain D and sum S.

    Attributes
    ----------
    change, variance, df : ndarray
        Change [t C/ha], its variance and degrees of freedom; shape (D, S).
    means, covariance : ndarray
        Means of the two dates, shape (D, S, 2), and their covariance matrix, (D, S, 2, 2).
    weights : ndarray
        Of the four estimates in the mean of either date; shape (D, 2, 4).
    """

    change: np.ndarray
    variance: np.ndarray
    df: np.ndarray
    means: np.ndarray
    covariance: np.ndarray
    weights: np.ndarray


def best_weights(covariance: np.ndarray, base: np.ndarray, free: np.ndarray) -> np.ndarray:
    """Weights of the best linear unbiased combination of correlated estimates (generalised least squares).

    Parameters
    ----------
    covariance : ndarray
        Of the estimates; shape (..., E, E), positive semi-definite.
    base : ndarray
        Weights of any unbiased combination; shape (..., E).
    free : ndarray
        Rows that span the combinations with expectation zero; shape (..., F, E). Rows of zeros count for nothing.

    Returns
    -------
    ndarray
        Shape (..., E). Where several weights are as good, as with a singular covariance matrix, those nearest to
        ``base``: directions without variance are left alone.

    Notes
    -----
    w = b - F' (F C F')^+ F C b. With a regular C this is C^-1 X (X' C^-1 X)^-1 a for any X with F X = 0 and a = X' b.
    """
    largest = np.einsum("...ee->...e", covariance).max(axis=-1)[..., None, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        scaled = np.where(largest > 0, covariance / largest, 0.0)
    across = free @ scaled
    root, vectors = np.linalg.eigh(across @ np.swapaxes(free, -1, -2))
    inverse = np.divide(1.0, root, out=np.zeros_like(root), where=root > _RANK)
    cross = np.swapaxes(vectors, -1, -2) @ (across @ base[..., None])
    along = vectors @ (inverse[..., None] * cross)
    return np.asarray(base - (np.swapaxes(free, -1, -2) @ along)[..., 0])


def room(repeated: np.ndarray, others: np.ndarray) -> np.ndarray:
    """Degrees of freedom that covariances of repeated and other plots are known with.

    One less than the repeated plots, and for the others half the root of the product of the two numbers: they tell
    about variances only. A working rule, set by simulation (``docs/estimation.md``).
    """
    return np.maximum(repeated - 1.0, 0.0) + 0.5 * np.sqrt(repeated * others)


def small_sample_factor(df: np.ndarray, estimated: np.ndarray) -> np.ndarray:
    """Return what a variance by estimated weights is multiplied by; infinite without room.

    Parameters
    ----------
    df : ndarray
        Degrees of freedom of the covariances that the weights rest on.
    estimated : ndarray
        Number of weights that were estimated.

    Notes
    -----
    f (f - 1) / ((f - q) (f - q - 1)). For covariances of normal values known with f degrees of freedom the stated
    variance is on average (f - q) / f of that with known weights, the true one (f - 1) / (f - q - 1) times it.

    References
    ----------
    .. [1] Rao, C. R. (1967). Least squares theory using an estimated dispersion matrix. Proc. 5th Berkeley Symposium 1,
       355-372 (from memory).
    """
    rest = df - estimated
    there = rest > 1.0
    factor = df * (df - 1.0) / np.where(there, rest * (rest - 1.0), 1.0)
    return np.where(np.asarray(estimated) == 0, 1.0, np.where(there, factor, np.inf))


def panels(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    number: int,
    area_ha: np.ndarray,
    allowed: np.ndarray,
    *,
    variances: str = "shared",
) -> Panels:
    """Take the repeated and the other plots of two dates apart.

    Parameters
    ----------
    samples : tuple of Sample
        Earlier and later survey.
    domains : tuple of ndarray of int
        Domain of each plot; -1 for none.
    number : int
        Number of domains.
    area_ha : ndarray
        Area of each stratum [ha].
    allowed : ndarray of bool
        Strata estimable at both dates, by column; shape (H, K).
    variances : {"shared", "own", "pooled"}
        What tells about variances. "own": either kind of plots about itself. "shared": the repeated plots about
        themselves, about the others all plots of their date, which is steadier. "pooled": all plots of a date about
        either kind, the repeated ones about the correlation of the dates.

    Notes
    -----
    A stratum is split if it has three repeated plots and two others at the date.
    """
    strata = len(area_ha)
    cells = Cells.of(number, strata, *((d, s.stratum) for d, s in zip(domains, samples, strict=True)))
    pairs = match_plots(samples, domains, allowed)
    again = [np.zeros_like(sample.used) for sample in samples]
    for marks, rows in zip(again, (pairs.first, pairs.second), strict=True):
        marks[rows] = pairs.counted
    counted = [sample.used & allowed[sample.stratum] for sample in samples]
    repeated = unit_counts(replace(samples[0], used=again[0]), strata)
    others = np.stack(
        [unit_counts(replace(s, used=c & ~a), strata) for c, a, s in zip(counted, again, samples, strict=True)]
    )
    split = (repeated >= REPEATED) & (others >= OTHERS)
    sides, tellers = [], []
    for sample, domain, one, apart in zip(samples, domains, again, split, strict=True):
        whole = ~apart[sample.stratum]
        for kind in (one | whole, ~one | whole):
            sides.append(side_of(replace(sample, used=sample.used & kind), domain, cells, area_ha, allowed))
        tellers += [sides[-2], sides[-1] if variances == "own" else side_of(sample, domain, cells, area_ha, allowed)]
    by_domain = [
        [_by_domain(c & a & p[s.stratum], d, number) for a in (one, ~one)]
        for c, one, p, s, d in zip(counted, again, split, samples, domains, strict=True)
    ]
    known = np.where(split.any(axis=0), room(repeated, others.mean(axis=0)), 0.0)
    table = overlap_table(tuple(sides), (domains[0],) * 2 + (domains[1],) * 2, cells, tuple(tellers))
    if variances == "pooled":
        table = _with_variances_of_all(table, sides, tellers)
    return Panels(
        table=table,
        mean=np.stack([side.mean.density for side in sides], axis=1),
        split=split,
        repeated=np.maximum(by_domain[0][0], by_domain[1][0]),
        others=np.stack([by_domain[0][1], by_domain[1][1]]),
        known=group_sum(known[cells.stratum], cells.domain, number),
        samples=tuple(side.sample for side in sides),
    )


def _with_variances_of_all(table: Overlap, sides: list[Side], tellers: list[Side]) -> Overlap:
    """Stretch the deviations of the repeated plots to the variance between all plots of their date."""
    value, beside, at = table.value.copy(), table.beside.copy(), table.cells.stratum
    for place in (0, 2):
        mine, all_ = (
            side.spread.variance / side.mean.weight**2 / side.spread.units_stratum[at]
            for side in (sides[place], tellers[place + 1])
        )
        stretch = np.sqrt(np.divide(all_, mine, out=np.ones_like(mine), where=(mine > 0) & np.isfinite(all_)))
        value[:, place] *= stretch[table.cell]
        beside[:, place] *= stretch
    return replace(table, value=value, beside=beside)


def _by_domain(counted: np.ndarray, domain: np.ndarray, number: int) -> np.ndarray:
    inside = domain >= 0
    return group_sum(counted[inside], domain[inside], number)


def choose_weights(given: Panels, scale: np.ndarray, free: np.ndarray | None = None) -> np.ndarray:
    """Weights of the four estimates in the best means of the two dates.

    Parameters
    ----------
    given : Panels
        The four estimates.
    scale : ndarray
        What each column counts in the sum that is to be known best; shape (K,), or (D, K).
    free : ndarray of bool, optional
        Whether the other plots of a date are weighed; shape (D, 2). Where not, the repeated plots count alone.

    Returns
    -------
    ndarray
        Shape (D, 2, 4).
    """
    number = given.mean.shape[0]
    matrix = covariance(given.table, np.broadcast_to(scale, (number, scale.shape[-1])))
    contrasts = _CONTRASTS * (np.ones((number, 2, 1)) if free is None else free[:, :, None])
    return np.stack([best_weights(matrix, np.tile(base, (number, 1)), contrasts) for base in _BASES], axis=1)


def combine_panels(
    given: Panels, scale: np.ndarray, weights: np.ndarray, factor: np.ndarray | None = None
) -> Combination:
    """Combine the repeated and the other plots.

    Parameters
    ----------
    given : Panels
        The four estimates of each domain and column.
    scale : ndarray
        What each column counts in each sum; shape (S, D, K).
    weights : ndarray
        Of the four estimates in the means of the two dates, for all sums alike, so that sums of sums hold; (D, 2, 4).
    factor : ndarray, optional
        What the variance of change of each cell is multiplied by; shape (C,).

    Returns
    -------
    Combination
        Variances take the weights as known; see :func:`small_sample_factor`.

    References
    ----------
    .. [1] Gurney, M. & Daly, J. F. (1965). A multivariate approach to estimation in periodic sample surveys. Proc.
       Social Statistics Section, American Statistical Association, 242-257 (from memory).
    .. [2] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC, section 15.3.
    """
    of_change = weights[:, 1] - weights[:, 0]
    means = np.einsum("dte,dek,sdk->dst", weights, np.nan_to_num(given.mean), scale)
    told = weighted_variance(given.table, scale, of_change, factor)
    matrix = np.stack([covariance(given.table, one) for one in scale], axis=1)
    return Combination(
        change=means[:, :, 1] - means[:, :, 0],
        variance=told.variance,
        df=told.df,
        means=means,
        covariance=weights[:, None] @ matrix @ np.swapaxes(weights, 1, 2)[:, None],
        weights=weights,
    )


def sum_of_strata(strata: Combination, area_ha: np.ndarray) -> Combination:
    """Add up combinations made stratum by stratum: means over all strata, weighted by area.

    Parameters
    ----------
    strata : Combination
        With the strata as domains.
    area_ha : ndarray
        Their areas [ha].

    Returns
    -------
    Combination
        One domain; its weights are those of the strata, weighted by area.
    """
    share = area_ha / area_ha.sum()
    variance = share[:, None] ** 2 * strata.variance
    codes = np.zeros(len(share), dtype=np.int64)
    return Combination(
        change=(share @ strata.change)[None],
        variance=variance.sum(axis=0, keepdims=True),
        df=satterthwaite(variance, np.nan_to_num(strata.df), codes, 1),
        means=np.einsum("d,dst->st", share, strata.means)[None],
        covariance=np.einsum("d,dstu->stu", share**2, strata.covariance)[None],
        weights=np.einsum("d,dte->te", share, strata.weights)[None],
    )
