"""Variance on systematic grids from the differences between neighbouring plots.

A grid has no unbiased variance estimator. Differences between neighbours leave out what varies slowly over the land,
which a grid catches and a random sample does not. Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.errors import UserError

__all__ = [
    "MIN_NEIGHBOURS",
    "NeighbourVariance",
    "check_variance",
    "neighbour_pairs",
    "neighbour_variance",
    "say_neighbours",
    "square_contrast_variance",
    "successive_difference_variance",
]

MIN_NEIGHBOURS = 8  # with fewer plots a stratum keeps the variance of a random sample
MOST_NEAREST = 8  # neighbours looked at for each plot; a square grid has four, a triangular one six
AS_NEAR = 1.2  # a neighbour lies within this many times the distance of the nearest; the diagonal of a square is 1.41
ON_A_LINE = 0.01  # spread across by spread along, below which plots make a line

CHOICES = ("random", "neighbours")


@dataclass(frozen=True)
class NeighbourVariance:
    """Variance of a single unit by cell, from neighbours; all of shape (cells,).

    Attributes
    ----------
    variance : ndarray
        Half the mean squared difference of neighbours.
    df : ndarray
        Degrees of freedom.
    known : ndarray of bool
        Cells that have it.
    """

    variance: np.ndarray
    df: np.ndarray
    known: np.ndarray


def check_variance(variance: str) -> bool:
    """Whether neighbours are asked for.

    Raises
    ------
    UserError
        If the word is not known.
    """
    if variance not in CHOICES:
        raise UserError(
            f"variance {variance!r} is not known", where="estimation", remedy=f"Write {' or '.join(CHOICES)}."
        )
    return variance == CHOICES[1]


def successive_difference_variance(values: np.ndarray) -> float:
    """Variance of the mean of plots on a line, in the order of the line.

    Parameters
    ----------
    values : ndarray
        At least two values.

    Notes
    -----
    sum (y_i - y_{i-1})^2 / (2 n (n - 1)).

    References
    ----------
    .. [1] Wolter, K. M. (2007). Introduction to Variance Estimation, 2nd ed., Springer: chapter 8, estimator v_2.
    """
    count = len(values)
    return float(np.sum(np.diff(values) ** 2) / (2.0 * count * (count - 1)))


def square_contrast_variance(column: np.ndarray, row: np.ndarray, values: np.ndarray) -> float:
    """Variance of the mean of plots on a square grid, after Matern.

    Parameters
    ----------
    column, row : ndarray of int
        Place of each plot on the grid; at most one plot at each node.
    values : ndarray
        Values of the plots.

    Notes
    -----
    Every square of 2 by 2 neighbouring nodes with a plot gives the contrast of its two diagonals; nodes without a plot
    take the mean. The variance is the sum over all squares of (contrast)^2 / 4, over n^2. A plane slope leaves no trace
    in it.

    References
    ----------
    .. [1] Matern, B. (1986). Spatial Variation, 2nd ed., Springer: chapter 6 (from memory).
    .. [2] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC, chapter 5.
    """
    count = len(values)
    across, up = column - column.min() + 1, row - row.min() + 1
    grid = np.zeros((across.max() + 2, up.max() + 2))
    grid[across, up] = values - values.mean()
    contrast = grid[:-1, :-1] - grid[1:, :-1] - grid[:-1, 1:] + grid[1:, 1:]
    return float(np.sum(contrast**2) / 4.0 / count**2)


def neighbour_pairs(place: np.ndarray) -> np.ndarray:
    """Pairs of neighbouring plots, each pair once.

    Parameters
    ----------
    place : ndarray
        Positions [m]; shape (plots, 2), no NaN.

    Returns
    -------
    ndarray of int
        Rows of the two plots; shape (pairs, 2).

    Notes
    -----
    Plots on a line pair with the next one along it. Otherwise each plot pairs with its nearest neighbours: all within
    1.2 times the distance of the closest, at most eight. On a square grid those are the four next to it, on a
    triangular one the six.
    """
    from scipy.spatial import cKDTree  # heavy; the package must import without it

    centred = place - place.mean(axis=0)
    _, spread, axes = np.linalg.svd(centred, full_matrices=False)
    if spread[-1] <= ON_A_LINE * spread[0]:
        order = np.argsort(centred @ axes[0], kind="stable")
        return np.stack([order[:-1], order[1:]], axis=1)
    distance, other = cKDTree(centred).query(centred, k=min(MOST_NEAREST + 1, len(place)))
    rows = np.broadcast_to(np.arange(len(place))[:, None], other.shape)
    distance = np.where(other == rows, np.inf, distance)  # itself; need not come first where plots coincide
    close = distance <= AS_NEAR * distance.min(axis=1, keepdims=True)
    pairs = np.sort(np.stack([rows[close], other[close]], axis=1), axis=1)
    return np.unique(pairs, axis=0)


def neighbour_variance(
    value: np.ndarray, place: np.ndarray, cell: np.ndarray, cells: int, wanted: np.ndarray
) -> NeighbourVariance:
    """Variance of single units from differences of neighbours, cell by cell.

    Parameters
    ----------
    value : ndarray
        Contribution of each unit.
    place : ndarray
        Positions [m], NaN if unknown; shape (units, 2).
    cell : ndarray of int
        Cell (stratum) of each unit.
    cells : int
        Number of cells.
    wanted : ndarray of bool
        Cells to look at. One in which a unit has no position is left out.

    Notes
    -----
    sum (u_i - u_j)^2 / (2 P) over the P pairs of neighbours: Geary's contiguity ratio times the variance of a random
    sample, on a line the successive differences. With d_i the pairs of unit i, equal spread and no correlation left
    between neighbours it has 4 P^2 / (sum d_i^2 + 2 P) degrees of freedom (mean and variance of the quadratic form).

    References
    ----------
    .. [1] Geary, R. C. (1954). The contiguity ratio and statistical mapping. The Incorporated Statistician 5, 115-145.
    .. [2] Wolter, K. M. (2007). Introduction to Variance Estimation, 2nd ed., Springer: chapter 8.
    .. [3] D'Orazio, M. (2003). Estimating the variance of the sample mean in two-dimensional systematic sampling.
       Journal of Agricultural, Biological, and Environmental Statistics 8, 280-295. All three from memory.
    """
    lost = np.bincount(cell, weights=~np.isfinite(place).all(axis=1), minlength=cells) > 0
    known = wanted & ~lost
    variance, df = np.zeros(cells), np.zeros(cells)
    order = np.argsort(cell, kind="stable")
    ends = np.cumsum(np.bincount(cell, minlength=cells))
    for one in np.flatnonzero(known):  # strata
        rows = order[(ends[one - 1] if one else 0) : ends[one]]
        first, second = neighbour_pairs(place[rows]).T
        pairs = len(first)
        degree = np.bincount(np.concatenate([first, second]), minlength=len(rows)).astype(float)
        variance[one] = np.sum((value[rows[first]] - value[rows[second]]) ** 2) / (2.0 * pairs)
        df[one] = 4.0 * pairs**2 / (np.sum(degree**2) + 2.0 * pairs)
    return NeighbourVariance(variance, df, known)


def say_neighbours(method: np.ndarray, known: np.ndarray, near: np.ndarray | None) -> np.ndarray:
    """Add to the method of each figure where its variance comes from.

    Parameters
    ----------
    method : ndarray of str
        Method of each figure.
    known : ndarray of bool
        Figure is estimable.
    near : ndarray or None
        Share of its variance pieces from neighbours; None if they were not asked for.
    """
    if near is None:
        return method
    words = np.array(
        [
            f", random variance (fewer than {MIN_NEIGHBOURS} plots, or plots without a position)",
            ", neighbour differences in part",
            ", neighbour differences",
        ],
        dtype=object,
    )
    kind = np.where(near == 1.0, 2, np.where(near > 0.0, 1, 0))
    return np.where(known, method.astype(object) + words[kind], method)
