"""Means and totals adjusted by one auxiliary variable: regression, ratio and difference, in one phase and in two.

The textbook forms for simple random samples, and the ratio of a stratified one; pure functions of arrays.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.errors import UserError
from landcarbon.estimate.regression import fit_lines, stratified_variance

__all__ = [
    "Adjusted",
    "adjusted_mean",
    "difference_estimator",
    "linear_estimator",
    "ratio_estimator",
    "stratified_ratio",
    "two_phase_ratio",
    "two_phase_regression",
]


@dataclass(frozen=True)
class Adjusted:
    """A mean adjusted by one auxiliary variable, with the coefficients used and the variance of the mean."""

    mean: float
    variance: float
    intercept: float
    slope: float


def adjusted_mean(
    mean_y: float, slope: np.ndarray | float, mean_x: np.ndarray | float, known_x: np.ndarray | float
) -> float:
    """Mean corrected by what is known of the auxiliary variables: mean_y + slope (known_x - mean_x)."""
    return float(mean_y + np.sum(np.asarray(slope) * (np.asarray(known_x) - np.asarray(mean_x))))


def linear_estimator(
    y: np.ndarray, x: np.ndarray, known_x: float, *, population: float = np.inf, lost: int = 2
) -> Adjusted:
    """Regression estimator of a simple random sample with one auxiliary variable.

    Parameters
    ----------
    y, x : ndarray
        Values of the sample.
    known_x : float
        Mean of ``x`` over the population.
    population : float
        Number of units in it; infinite unless given.
    lost : int
        Degrees of freedom taken off for the residual variance: 2 for the two coefficients; some books use 1.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley, chapter 7; from memory.
    """
    across = x - x.mean()
    slope = float(across @ y / (across @ across))
    intercept = float(y.mean() - slope * x.mean())
    residuals = y - intercept - slope * x
    variance = (1.0 - len(y) / population) * float(residuals @ residuals) / (len(y) - lost) / len(y)
    return Adjusted(intercept + slope * known_x, variance, intercept, slope)


def difference_estimator(y: np.ndarray, x: np.ndarray, known_x: float, *, population: float = np.inf) -> Adjusted:
    """Difference estimator of a simple random sample: the slope is taken to be 1."""
    apart = y - x
    variance = (1.0 - len(y) / population) * float(apart.var(ddof=1)) / len(y)
    return Adjusted(float(apart.mean() + known_x), variance, float(apart.mean()), 1.0)


def ratio_estimator(
    y: np.ndarray,
    x: np.ndarray,
    known_x: float | None = None,
    *,
    population: float = np.inf,
    mean_below: float | None = None,
) -> Adjusted:
    """Ratio estimator of a simple random sample; ``slope`` is the ratio.

    Parameters
    ----------
    y, x : ndarray
        Values of the sample.
    known_x : float, optional
        Mean of ``x`` over the population; 1 gives the ratio itself.
    population : float
        Number of units in it.
    mean_below : float, optional
        Mean of ``x`` by which the residual variance is divided; that of the sample unless given. Books that use the
        known mean get there with ``mean_below=known_x``.
    """
    target = 1.0 if known_x is None else known_x
    ratio = float(y.sum() / x.sum())
    residuals = y - ratio * x
    below = float(x.mean()) if mean_below is None else mean_below
    variance = (1.0 - len(y) / population) * float(residuals @ residuals) / (len(y) - 1) / len(y)
    return Adjusted(ratio * target, variance * (target / below) ** 2, 0.0, ratio)


def stratified_ratio(
    y: np.ndarray,
    x: np.ndarray,
    stratum: np.ndarray,
    area: np.ndarray,
    known_x: np.ndarray,
    *,
    separate: bool = False,
    finite: bool = False,
) -> tuple[float, float, np.ndarray]:
    """Total by the ratio to an auxiliary variable of known total, from a stratified sample.

    Parameters
    ----------
    y, x : ndarray
        Values of the sample; the unit of y is per unit of area.
    stratum : ndarray of int
        0 to H - 1.
    area : ndarray
        Of each stratum: hectares, or number of units.
    known_x : ndarray
        Total of ``x`` in each stratum.
    separate : bool
        One ratio per stratum, else one in all.
    finite : bool
        ``area`` counts units of which each plot is one: correct for the share sampled.

    Returns
    -------
    total, variance, ratios
        Variance of the total; ratios by stratum, or a single one.
    """
    strata = len(area)
    weight = area[stratum] / np.bincount(stratum, minlength=strata)[stratum]
    sampled = np.bincount(stratum, minlength=strata) / area if finite else None
    codes = stratum if separate else np.zeros_like(stratum)
    known = known_x if separate else known_x.sum(keepdims=True)
    expanded_y = np.bincount(codes, weights=weight * y, minlength=len(known))
    expanded_x = np.bincount(codes, weights=weight * x, minlength=len(known))
    ratios = expanded_y / expanded_x
    residuals = (y - ratios[codes] * x) * (known / expanded_x)[codes]
    variance = stratified_variance((weight * residuals)[:, None], stratum, sampled)
    return float(ratios @ known), float(variance[0]), ratios


def two_phase_regression(
    y: np.ndarray, x: np.ndarray, x_first: np.ndarray, *, population: float = np.inf, lost: int | None = None
) -> Adjusted:
    """Double sampling for regression: x is known on a large first sample, y on a random part of it.

    Parameters
    ----------
    y : ndarray
        Values of the second sample; shape (n2,).
    x : ndarray
        Auxiliary values of the second sample, shape (n2,) or (n2, p), without a column of ones.
    x_first : ndarray
        Of the whole first sample, those of the second included; shape (n1,) or (n1, p).
    population : float
        Number of units in the population; infinite unless given.
    lost : int, optional
        Degrees of freedom taken off for the residual variance; p + 1 unless given.

    Returns
    -------
    Adjusted
        ``slope`` is that of the first auxiliary variable.

    Notes
    -----
    With s_y^2 the variance of y and s_e^2 that of the residuals, both of the second sample:
    (1 - n1/N) s_y^2 / n1 + (1 - n2/n1) s_e^2 / n2. In an infinite population this is s_e^2 / n2 + (s_y^2 - s_e^2) / n1.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley, section 12.6; from memory.
    .. [2] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC, section 11.2.
    """
    small, large = (np.asarray(given, dtype=float).reshape(len(given), -1) for given in (x, x_first))
    if len(large) < len(small):
        raise UserError(
            f"first phase of {len(large)} points, second of {len(small)}",
            where="double sampling",
            remedy="The plots are a part of the points of the first phase; give all of those.",
        )
    columns = np.column_stack([np.ones(len(small)), small])
    line = fit_lines(columns, y[:, None], np.ones(len(y)))[:, 0]
    residuals = y - columns @ line
    free = len(y) - (columns.shape[1] if lost is None else lost)
    mean = float(line[0] + large.mean(axis=0) @ line[1:])
    spread = float(residuals @ residuals) / free
    return Adjusted(mean, _two_phases(y, spread, len(large), population), float(line[0]), float(line[1]))


def two_phase_ratio(y: np.ndarray, x: np.ndarray, x_first: np.ndarray, *, population: float = np.inf) -> Adjusted:
    """Double sampling for the ratio; parameters and variance as for :func:`two_phase_regression`."""
    ratio = float(y.sum() / x.sum())
    residuals = y - ratio * x
    spread = float(residuals @ residuals) / (len(y) - 1)
    return Adjusted(ratio * float(x_first.mean()), _two_phases(y, spread, len(x_first), population), 0.0, ratio)


def _two_phases(y: np.ndarray, spread: float, first: int, population: float) -> float:
    second = len(y)
    whole = float(y.var(ddof=1))
    return (1.0 - first / population) * whole / first + (1.0 - second / first) * spread / second
