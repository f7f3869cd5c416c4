"""Propagation of stated uncertainties through sums, differences and products.

Pure functions for figures that come with a half width in percent and no plots behind them, as national guidance hands
them on. Where the plots are at hand the estimates of this program carry the covariances themselves.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from landcarbon.errors import UserError
from landcarbon.estimate.interval import check_confidence, t_quantile

__all__ = ["Combined", "as_percent", "combine_difference", "combine_product", "combine_sum", "ratio_of_estimates"]


@dataclass(frozen=True)
class Combined:
    """A combined figure.

    Attributes
    ----------
    value : float
        Sum, difference or product.
    half_width : float
        Half width of its interval, same unit.
    percent : float
        Half width in percent of the value; NaN where the interval includes zero, since the percentage of a value near
        zero says nothing.
    """

    value: float
    half_width: float
    percent: float


def as_percent(half_width: ArrayLike, value: ArrayLike, *, across_zero: bool = False) -> np.ndarray:
    """Half width in percent of a value.

    Parameters
    ----------
    half_width, value : array_like
        In one unit.
    across_zero : bool
        Give the percentage also where the interval includes zero.

    Returns
    -------
    ndarray
        NaN where the value is zero and, unless ``across_zero``, where the half width reaches zero.
    """
    half, size = np.abs(np.asarray(half_width, dtype=float)), np.abs(np.asarray(value, dtype=float))
    sensible = size > 0 if across_zero else size > half
    return np.divide(100.0 * half, size, out=np.full(np.broadcast(half, size).shape, np.nan), where=sensible)


def combine_sum(values: ArrayLike, percent: ArrayLike, correlation: ArrayLike | None = None) -> Combined:
    """Sum of uncertain values.

    Parameters
    ----------
    values : array_like
        Values, in one unit.
    percent : array_like
        Half widths of their intervals in percent of the values.
    correlation : array_like, optional
        Correlation of the errors: one number for every pair, or a matrix. Default: none.

    Returns
    -------
    Combined

    Notes
    -----
    U = sqrt(sum_ij r_ij U_i x_i U_j x_j) / |sum x|; without correlation this is the simple rule of the guidelines.

    References
    ----------
    .. [1] IPCC (2006). 2006 IPCC Guidelines for National Greenhouse Gas Inventories, volume 1, chapter 3, equation
       3.2; number from memory.
    """
    given = np.asarray(values, dtype=float)
    half = given * np.asarray(percent, dtype=float) / 100.0
    total = float(given.sum())
    matrix = _correlation(correlation, given.size)
    return _combined(total, float(np.sqrt(max(half @ matrix @ half, 0.0))))


def combine_difference(earlier: Combined, later: Combined, correlation: float = 0.0) -> Combined:
    """Later value less earlier value.

    Parameters
    ----------
    earlier, later : Combined
        Values with half widths in one unit.
    correlation : float
        Correlation of the errors of the two dates: above zero where both rest on the same equations, factors or plots.

    Returns
    -------
    Combined

    References
    ----------
    .. [1] JCGM 100 (2008). Evaluation of measurement data: guide to the expression of uncertainty in measurement:
       section 5.2 (correlated input quantities); place from memory.
    """
    matrix = _correlation(correlation, 2)
    half = np.array([-earlier.half_width, later.half_width])
    return _combined(later.value - earlier.value, float(np.sqrt(max(half @ matrix @ half, 0.0))))


def combine_product(
    values: ArrayLike,
    percent: ArrayLike,
    correlation: ArrayLike | None = None,
    *,
    exact: bool = False,
    confidence: float = 0.95,
) -> Combined:
    """Product of uncertain values.

    Parameters
    ----------
    values : array_like
        Factors, each in its own unit.
    percent : array_like
        Half widths of their intervals in percent of the values.
    correlation : array_like, optional
        Correlation of the errors: one number for every pair, or a matrix. Default: none.
    exact : bool
        Variance of a product of independent factors without leaving out the products of small terms.
    confidence : float
        Confidence of the half widths; matters for ``exact`` only.

    Returns
    -------
    Combined

    Raises
    ------
    UserError
        If ``exact`` is asked for together with a correlation.

    Notes
    -----
    U = sqrt(sum_ij r_ij U_i U_j); exact for independent factors: V / x^2 = prod(1 + V_i / x_i^2) - 1.

    References
    ----------
    .. [1] IPCC (2006). 2006 IPCC Guidelines for National Greenhouse Gas Inventories, volume 1, chapter 3, equation
       3.1; number from memory.
    .. [2] Goodman, L. A. (1960). On the exact variance of products. Journal of the American Statistical Association
       55, 708-713.
    """
    given = np.asarray(values, dtype=float)
    share = np.asarray(percent, dtype=float) / 100.0
    value = float(np.prod(given))
    if not exact:
        matrix = _correlation(correlation, given.size)
        relative = float(np.sqrt(max(share @ matrix @ share, 0.0)))
        return _combined(value, abs(value) * relative)
    if correlation is not None:
        raise UserError(
            "the exact variance of a product holds for independent factors",
            remedy="Leave out either the correlation or the exact form.",
        )
    check_confidence(confidence)
    quantile = float(t_quantile(np.inf, 0.5 + 0.5 * confidence))
    relative = float(np.sqrt(np.expm1(np.log1p((share / quantile) ** 2).sum())))
    return _combined(value, abs(value) * quantile * relative)


def ratio_of_estimates(
    top: ArrayLike, bottom: ArrayLike, top_variance: ArrayLike, bottom_variance: ArrayLike, covariance: ArrayLike
) -> tuple[np.ndarray, np.ndarray]:
    """Divide one estimate by another that may share its plots.

    Parameters
    ----------
    top, bottom : array_like
        Estimates; they broadcast against each other.
    top_variance, bottom_variance, covariance : array_like
        Their variances and covariance.

    Returns
    -------
    ratio, se : ndarray
        R and sqrt(V_t - 2 R C + R^2 V_b) / |bottom|, by linearisation; NaN where the bottom is zero.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: sections 6.10 and 6.11 (combined ratio); place
       from memory.
    """
    above, below = np.asarray(top, dtype=float), np.asarray(bottom, dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(below != 0, above / below, np.nan)
        shared = 2.0 * ratio * np.asarray(covariance, dtype=float)
        variance = np.asarray(top_variance, dtype=float) - shared + ratio**2 * np.asarray(bottom_variance, dtype=float)
        return ratio, np.sqrt(np.maximum(variance, 0.0)) / np.abs(below)


def _combined(value: float, half_width: float) -> Combined:
    return Combined(value, half_width, float(as_percent(half_width, value)))


def _correlation(correlation: ArrayLike | None, number: int) -> np.ndarray:
    """Correlation matrix from nothing, one number or a matrix."""
    given = np.asarray(0.0 if correlation is None else correlation, dtype=float)
    matrix = np.full((number, number), float(given)) if given.ndim == 0 else given.copy()
    if matrix.shape != (number, number) or not (np.abs(matrix) <= 1.0).all():
        raise UserError(
            f"correlations of shape {given.shape} for {number} values",
            remedy="Give one number from -1 to 1 or a square matrix of such numbers.",
        )
    np.fill_diagonal(matrix, 1.0)
    return matrix
