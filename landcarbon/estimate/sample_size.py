"""How many sample plots a wanted precision takes.

Pure functions for planning a survey; results are not rounded, ``np.ceil`` gives whole plots. Symbols: S standard
deviation between plots, E half width of the interval in the unit of S, t quantile, N plots that would fit.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from landcarbon.errors import UserError
from landcarbon.estimate.interval import check_confidence, t_quantile

__all__ = [
    "finite_population_factor",
    "normal_quantile",
    "plots_in_area",
    "relative_size",
    "simple_size",
    "stratified_size",
    "student_size",
]

STEPS = 60  # of the search for whole plots; doubling and halving end long before


def normal_quantile(confidence: float) -> float:
    """Return the quantile of the normal distribution for a two-sided interval."""
    check_confidence(confidence)
    return float(t_quantile(np.inf, 0.5 + 0.5 * confidence))


def plots_in_area(area_ha: ArrayLike, plot_area_ha: float) -> np.ndarray:
    """Work out how many plots would fill an area.

    Parameters
    ----------
    area_ha, plot_area_ha : array_like
        Areas [ha].
    """
    if not plot_area_ha > 0:
        raise UserError(f"plot area {plot_area_ha!r} ha is not above zero", remedy="Give the area of one plot in ha.")
    return np.asarray(area_ha, dtype=float) / plot_area_ha


def finite_population_factor(plots: ArrayLike, population: ArrayLike) -> np.ndarray:
    """Return 1 - n / N, which a variance is multiplied by if plots are drawn without replacement from N distinct ones.

    The estimates of this program do without it, as points in a landscape are not exhausted.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: section 2.6; place from memory.
    """
    return 1.0 - np.asarray(plots, dtype=float) / np.asarray(population, dtype=float)


def simple_size(sd: ArrayLike, half_width: ArrayLike, *, quantile: float, population: ArrayLike = np.inf) -> np.ndarray:
    """Count the plots of a simple random sample for an interval of given half width.

    Parameters
    ----------
    sd : array_like
        Expected standard deviation between plots.
    half_width : array_like
        Half width of the interval wanted, unit of ``sd``.
    quantile : float
        Quantile of the interval, for example ``normal_quantile(0.95)``, or 2 as many guides take.
    population : array_like
        Plots that would fit; infinite without finite population correction.

    Returns
    -------
    ndarray
        Not rounded: 1 / (E^2 / (t S)^2 + 1 / N).

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: section 4.6; place from memory.
    """
    return stratified_size(
        [1.0], np.asarray(sd, dtype=float)[..., None], half_width, quantile=quantile, population=population
    )


def relative_size(
    cv: ArrayLike, relative_error: ArrayLike, *, quantile: float, population: ArrayLike = np.inf
) -> np.ndarray:
    """Count the plots of a simple random sample for a given relative error of the mean.

    Parameters
    ----------
    cv : array_like
        Coefficient of variation between plots, as a share or in percent.
    relative_error : array_like
        Half width of the interval by the mean, as ``cv``.
    quantile : float
        Quantile of the interval.
    population : array_like
        Plots that would fit.

    Returns
    -------
    ndarray
        Not rounded: 1 / (r^2 / (t CV)^2 + 1 / N).
    """
    return simple_size(cv, relative_error, quantile=quantile, population=population)


def stratified_size(
    size: ArrayLike, sd: ArrayLike, half_width: ArrayLike, *, quantile: float, population: ArrayLike = np.inf
) -> np.ndarray:
    """Count the plots of a stratified sample, shared out after Neyman, for an interval of given half width.

    Parameters
    ----------
    size : array_like
        Size of each stratum along the last axis, any unit.
    sd : array_like
        Expected standard deviation between plots of each stratum along the last axis.
    half_width : array_like
        Half width of the interval of the mean, unit of ``sd``.
    quantile : float
        Quantile of the interval.
    population : array_like
        Plots that would fit into the whole area.

    Returns
    -------
    ndarray
        Plots in all, not rounded: t^2 (sum W S)^2 / (E^2 + t^2 sum(W S^2) / N).

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: section 5.9; place from memory.
    """
    area, spread = np.asarray(size, dtype=float), np.asarray(sd, dtype=float)
    error = np.asarray(half_width, dtype=float)
    if not (error > 0).all():
        raise UserError("the half width wanted is not above zero", remedy="Give a half width above zero.")
    weight = area / area.sum(axis=-1, keepdims=True)
    mean_sd, mean_square = (weight * spread).sum(axis=-1), (weight * spread**2).sum(axis=-1)
    finite = quantile**2 * mean_square / np.asarray(population, dtype=float)
    return quantile**2 * mean_sd**2 / (error**2 + finite)


def student_size(
    sd: ArrayLike, half_width: ArrayLike, *, confidence: float, population: ArrayLike = np.inf
) -> np.ndarray:
    """Count the fewest plots whose interval by Student's t is as narrow as wanted.

    Parameters
    ----------
    sd, half_width, population : array_like
        As in ``simple_size``.
    confidence : float
        Between 0 and 1.

    Returns
    -------
    ndarray
        At least two plots: with few plots the quantile itself depends on their number.
    """
    check_confidence(confidence)
    spread, error, fit = np.broadcast_arrays(
        *(np.atleast_1d(np.asarray(value, dtype=float)) for value in (sd, half_width, population))
    )
    if not (error > 0).all():
        raise UserError("the half width wanted is not above zero", remedy="Give a half width above zero.")

    def wide(plots: np.ndarray) -> np.ndarray:
        t = t_quantile(plots - 1.0, 0.5 + 0.5 * confidence)
        factor = np.maximum(finite_population_factor(plots, fit), 0.0)
        return t * spread * np.sqrt(factor / plots) > error

    low, high = np.ones(spread.shape), np.full(spread.shape, 2.0)
    for _ in range(STEPS):  # doubling until narrow enough
        low, high = np.where(wide(high), high, low), np.where(wide(high), 2.0 * high, high)
    for _ in range(STEPS):  # halving down to neighbours
        middle = np.floor(0.5 * (low + high))
        apart = high - low > 1
        narrow = ~wide(np.maximum(middle, 2.0))
        high, low = np.where(apart & narrow, middle, high), np.where(apart & ~narrow, middle, low)
    return high
