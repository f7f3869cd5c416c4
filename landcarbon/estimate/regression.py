"""Generalised regression (model-assisted) estimator of a stratified sample.

The estimate is the sample mean, corrected by the slope times how far the auxiliary values of the plots lie from those
of the whole area; whatever the slope, it stays right on average. Pure functions of arrays; how they serve an inventory
with pools, parcels and surveys is in ``landcarbon.estimate.assist``, the textbook forms for one auxiliary variable are
in ``landcarbon.estimate.adjusted_means``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.errors import UserError
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.ratio import MIN_PLOTS

__all__ = [
    "Regression",
    "change_regression",
    "fit_lines",
    "independent_columns",
    "regression_estimator",
    "separate_design",
    "stratified_variance",
    "stratum_weights",
]

_LEAST_SPREAD = 1e-9  # a column that the others leave less than this share of is taken as one of them


@dataclass(frozen=True)
class Regression:
    """Generalised regression estimates of one or more variables (K).

    Attributes
    ----------
    mean : ndarray
        Estimated means; shape (K,).
    variance : ndarray
        From the residuals weighted by g; shape (K,).
    variance_residuals : ndarray
        From the plain residuals; shape (K,).
    coefficients : ndarray
        Shape (columns of x, K).
    residuals : ndarray
        Shape (n, K).
    g : ndarray
        By how much the known means change the weight of each plot; shape (n,).
    """

    mean: np.ndarray
    variance: np.ndarray
    variance_residuals: np.ndarray
    coefficients: np.ndarray
    residuals: np.ndarray
    g: np.ndarray


def stratum_weights(stratum: np.ndarray, area: np.ndarray, size: np.ndarray | None = None) -> np.ndarray:
    """Weights that add up to one: share of the stratum in the area, times share of the plot in its stratum.

    Parameters
    ----------
    stratum : ndarray of int
        Stratum of each plot, 0 to H - 1.
    area : ndarray
        Of each stratum, any unit; shape (H,).
    size : ndarray, optional
        Relative size of each plot; all equal unless given.
    """
    sizes = np.ones(len(stratum)) if size is None else np.asarray(size, dtype=float)
    held = np.bincount(stratum, weights=sizes, minlength=len(area))
    there = np.where(held > 0, area, 0.0)
    return np.asarray(sizes / held[stratum] * (there / there.sum())[stratum])


def fit_lines(x: np.ndarray, y: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Weighted least squares.

    Parameters
    ----------
    x : ndarray
        Shape (n, columns), with a column of ones if an intercept is wanted.
    y : ndarray
        Shape (n, K).
    weight : ndarray
        Shape (n,).

    Returns
    -------
    ndarray
        Shape (columns, K); of linearly dependent columns the shortest solution.
    """
    root = np.sqrt(weight)[:, None]
    # equal lengths of the columns, so that units do not decide which of them count as dependent
    length = np.sqrt(((root * x) ** 2).sum(axis=0))
    length = np.where(length > 0, length, 1.0)
    return np.linalg.lstsq(root * x / length, root * y, rcond=None)[0] / length[:, None]


def independent_columns(x: np.ndarray, least: float = _LEAST_SPREAD) -> np.ndarray:
    """Say which columns are not a combination of those before them.

    Parameters
    ----------
    x : ndarray
        Shape (n, columns), centred where an intercept is fitted beside.
    least : float
        Share of a column's length that must be left when the others are taken out.

    Returns
    -------
    ndarray of bool
        Of dependent columns the first stays.

    Notes
    -----
    Orthogonalised in the order given and twice over, for accuracy; a pivoting factorisation would pick by length and
    so let the units of the columns decide which of them stays.
    """
    kept = np.zeros(x.shape[1], dtype=bool)
    basis = np.zeros((x.shape[0], 0))
    for column in range(x.shape[1]):  # a handful of rasters
        whole = float(np.linalg.norm(x[:, column]))
        left = x[:, column]
        for _ in range(2):
            left = left - basis @ (basis.T @ left)
        length = float(np.linalg.norm(left))
        if whole > 0 and length > least * whole:
            kept[column] = True
            basis = np.column_stack([basis, left / length])
    return kept


def regression_estimator(
    y: np.ndarray,
    x: np.ndarray,
    weight: np.ndarray,
    stratum: np.ndarray,
    x_mean: np.ndarray,
    *,
    sampled: np.ndarray | None = None,
) -> Regression:
    """Generalised regression (model-assisted) estimator of means from a stratified sample.

    Parameters
    ----------
    y : ndarray
        Shape (n,) or (n, K).
    x : ndarray
        Auxiliary values, shape (n, columns). With a column of ones and one per variable it is the combined estimator;
        with :func:`separate_design` the separate one.
    weight : ndarray
        Part of the area each plot stands for; scaled to add up to one.
    stratum : ndarray of int
        0 to H - 1, each with at least two plots.
    x_mean : ndarray
        Mean of each column of ``x`` over the whole area.
    sampled : ndarray, optional
        Share of each stratum that is sampled, for the finite population correction; shape (H,).

    Returns
    -------
    Regression

    Raises
    ------
    UserError
        If a stratum has fewer than two plots.

    Notes
    -----
    B = (sum w x x')^-1 sum w x y, mean = x_mean B + sum w e with e = y - x B, and
    g_i = 1 + (x_mean - sum w x)' (sum w x x')^-1 x_i, so that mean = sum w g y.
    The variance is sum over h of n_h / (n_h - 1) sum (w u - mean of w u)^2, with u = g e; in the textbook form u = e.

    References
    ----------
    .. [1] Särndal, C.-E., Swensson, B., Wretman, J. (1992). Model Assisted Survey Sampling, Springer, chapter 6; from
       memory.
    .. [2] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC, section 10.1.
    """
    values = np.asarray(y, dtype=float).reshape(len(weight), -1)
    share = weight / weight.sum()
    coefficients = fit_lines(x, values, share)
    residuals = values - x @ coefficients
    gap = x_mean - share @ x
    moments = (share[:, None] * x).T @ x
    g = 1.0 + x @ (np.linalg.pinv(moments, hermitian=True) @ gap)
    mean = x_mean @ coefficients + share @ residuals
    return Regression(
        mean=mean,
        variance=stratified_variance((share * g)[:, None] * residuals, stratum, sampled),
        variance_residuals=stratified_variance(share[:, None] * residuals, stratum, sampled),
        coefficients=coefficients,
        residuals=residuals,
        g=g,
    )


def separate_design(x: np.ndarray, stratum: np.ndarray, strata: int) -> np.ndarray:
    """Give each stratum columns of its own: shape (n, strata x columns), zero outside the stratum.

    Parameters
    ----------
    x : ndarray
        Shape (n, columns), with the column of ones.
    stratum : ndarray of int
        Stratum of each row.
    strata : int
        Number of strata.

    Notes
    -----
    The known means to go with it are share of the stratum times its means, stratum by stratum.
    """
    wide = np.zeros((len(stratum), strata, x.shape[1]))
    wide[np.arange(len(stratum)), stratum] = x
    return wide.reshape(len(stratum), -1)


def change_regression(
    y: tuple[np.ndarray, np.ndarray],
    x: tuple[np.ndarray, np.ndarray],
    weight: np.ndarray,
    stratum: np.ndarray,
    x_mean: tuple[np.ndarray, np.ndarray],
) -> Regression:
    """Model-assisted difference of two dates measured on the same plots, each date with its own line.

    Parameters
    ----------
    y : tuple of ndarray
        Earlier and later values, shape (n,) or (n, K).
    x, x_mean : tuple of ndarray
        Auxiliary values and their known means at either date, with the column of ones.
    weight, stratum : ndarray
        As for :func:`regression_estimator`.

    Returns
    -------
    Regression
        Of later less earlier; ``coefficients`` and ``g`` are those of the later date. With the same auxiliary values
        at both dates it is the estimator of the paired differences.
    """
    first, second = (
        regression_estimator(values, given, weight, stratum, mean)
        for values, given, mean in zip(y, x, x_mean, strict=True)
    )
    share = (weight / weight.sum())[:, None]
    residuals = second.residuals - first.residuals
    weighted = share * (second.g[:, None] * second.residuals - first.g[:, None] * first.residuals)
    return Regression(
        mean=second.mean - first.mean,
        variance=stratified_variance(weighted, stratum, None),
        variance_residuals=stratified_variance(share * residuals, stratum, None),
        coefficients=second.coefficients,
        residuals=residuals,
        g=second.g,
    )


def stratified_variance(parts: np.ndarray, stratum: np.ndarray, sampled: np.ndarray | None) -> np.ndarray:
    """Variance of the sum of the rows of a sample drawn at random within strata.

    Parameters
    ----------
    parts : ndarray
        Shape (n, K).
    stratum : ndarray of int
        Stratum of each row.
    sampled : ndarray or None
        Share of each stratum that is sampled, for the finite population correction.

    Raises
    ------
    UserError
        If a stratum has fewer than two plots.
    """
    strata = int(stratum.max()) + 1
    plots = np.bincount(stratum, minlength=strata).astype(float)
    if (plots[np.unique(stratum)] < MIN_PLOTS).any():
        raise UserError(
            "a stratum has fewer than two plots", where="regression estimator", remedy="Merge it with another."
        )
    centred = parts - (group_sum(parts, stratum, strata) / np.maximum(plots, 1.0)[:, None])[stratum]
    free = np.ones(strata) if sampled is None else 1.0 - sampled
    scale = np.where(plots > 1, free * plots / np.maximum(plots - 1.0, 1.0), 0.0)
    return np.asarray((scale[stratum][:, None] * centred**2).sum(axis=0))
