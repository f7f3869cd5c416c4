"""Sampling variances of parcels with few plots: a variance function in place of what two or three plots tell.

Plots give the variance between plots by stratum and part; how many plots a parcel has gives that of its mean. Symbols
are those of ``docs/estimation.md``.
"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass, replace
from functools import cache
from importlib.resources import files

import numpy as np

from landcarbon.estimate.groups import group_sum

__all__ = [
    "Layer",
    "UnitVariance",
    "parcel_variance",
    "power_of_mean",
    "rule",
    "shrink_to_function",
    "smooth_variance",
    "unit_variance",
]

_POWERS = 81  # powers of the mean that are tried
_SMALL = 1e-20  # share of the squared mean below which a variance is rounding


@cache
def _rules() -> dict[str, float]:
    text = files("landcarbon.estimate").joinpath("small_area.toml").read_text(encoding="utf-8")
    return {name: float(row["value"]) for name, row in tomllib.loads(text).items()}


def rule(name: str) -> float:
    """Return one number of ``small_area.toml``, which states its unit and source."""
    return _rules()[name]


@dataclass(frozen=True)
class Layer:
    """Plots that bring independent errors into the means of parcels. Plots n, columns K (parts or pools), strata H.

    Attributes
    ----------
    parcel, stratum : ndarray of int
        Of each plot; parcel -1 for none.
    strata : int
        Number of strata.
    value : ndarray
        Density, or its change on the plot [t C/ha]; shape (n, K), as the following.
    used : ndarray of bool
        Plot has a value.
    size : ndarray
        What the plot counts for; 0 where not used.
    share : ndarray
        Weight of the plot in the mean of its parcel.
    level : ndarray
        What the variance between plots is a function of: density, or size of the change [t C/ha].
    """

    parcel: np.ndarray
    stratum: np.ndarray
    strata: int
    value: np.ndarray
    used: np.ndarray
    size: np.ndarray
    share: np.ndarray
    level: np.ndarray

    def summed(self, member: np.ndarray) -> Layer:
        """Add parts up to pools, on the plots that have every part of the pool.

        Parameters
        ----------
        member : ndarray of bool
            Parts of each pool; shape (pools, K).
        """
        there = np.stack([self.used[:, row].all(axis=1) & row.any() for row in member], axis=1)
        sums = self.value @ member.T
        return replace(
            self,
            value=np.where(there, sums, 0.0),
            used=there,
            size=np.where(there, np.stack([self.size[:, row].min(axis=1, initial=np.inf) for row in member], 1), 0.0),
            share=np.zeros_like(sums),
            level=np.where(there, self.level @ member.T, 0.0),
        )


@dataclass(frozen=True)
class UnitVariance:
    """Variance between plots of a stratum.

    Attributes
    ----------
    variance : ndarray
        Smoothed, by stratum and column; a last row holds the largest of each column, for parcels of no stratum of their
        own; shape (H + 1, K).
    total : ndarray
        The same about the mean of the stratum, whatever the parcel; shape (H + 1, K).
    df : ndarray
        Degrees of freedom ``variance`` rests on; the last row the smallest; shape (H + 1, K).
    correlation : ndarray
        Between columns, within strata; shape (K, K); positive semi-definite. Pairs with too few plots in common are
        taken as fully correlated.
    within : ndarray of bool
        Whether plots were compared within parcels; else about the mean of their stratum; shape (K,).
    power : ndarray
        Power of the mean in the variance function; shape (K,).
    function : ndarray
        What the variance function gives for each stratum, its own plots or not; shape (H + 1, K).
    """

    variance: np.ndarray
    total: np.ndarray
    df: np.ndarray
    correlation: np.ndarray
    within: np.ndarray
    power: np.ndarray
    function: np.ndarray


def unit_variance(layer: Layer) -> UnitVariance:
    """Estimate the variance between plots, smoothed over strata.

    Notes
    -----
    Sums of squares are pooled within parcels (and strata), so that differences between parcels do not count; if too few
    plots share a parcel, or none differ within it, about the mean of the stratum. The variance function is
    log v = a + b log m, m the mean of the stratum, by gamma quasi-likelihood with 0 <= b <= the greatest power, b drawn
    to an expected power. The variance of a stratum and the function are averaged by degrees of freedom.
    """
    strata = layer.strata
    cell = (layer.parcel + 1) * strata + layer.stratum
    _, own = np.unique(cell, return_inverse=True)
    deviation_total, squares_total, df_total = _deviations(layer, layer.stratum, strata)
    deviation, squares, df = _deviations(layer, own.ravel(), int(own.max(initial=-1)) + 1)
    outside = layer.parcel < 0
    deviation = np.where(outside[:, None], 0.0, deviation)
    inner = group_sum(np.where(outside[:, None], 0.0, squares), layer.stratum, strata)
    inner_df = group_sum(np.where(outside[:, None], 0.0, df), layer.stratum, strata)
    whole, whole_df = (group_sum(values, layer.stratum, strata) for values in (squares_total, df_total))
    within = (inner_df.sum(axis=0) >= rule("within_parcel_df")) & (inner.sum(axis=0) > 0)
    sums, free = np.where(within, inner, whole), np.where(within, inner_df, whole_df)
    level = _levels(layer)
    function, power = power_of_mean(sums, free, level)
    variance = shrink_to_function(sums, free, function)
    total = shrink_to_function(whole, whole_df, power_of_mean(whole, whole_df, level)[0])
    trusted = np.minimum(free + rule("stratum_variance_df"), free.sum(axis=0))
    apart = np.where(within, deviation, deviation_total)
    return UnitVariance(
        variance=_with_largest(variance),
        total=_with_largest(total),
        df=np.concatenate([trusted, trusted.min(axis=0, keepdims=True)]),
        correlation=_correlation(layer, apart, variance, free.sum(axis=0)),
        within=within,
        power=power,
        function=_with_largest(function),
    )


def power_of_mean(squares: np.ndarray, df: np.ndarray, level: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Fit a variance function log v = a + b log m by penalised gamma quasi-likelihood, one for each column.

    Parameters
    ----------
    squares, df : ndarray
        Sum of squares and degrees of freedom by stratum and column; shape (H, K).
    level : ndarray
        Mean m; where it is not above 0 the smallest one that is, takes its place.

    Returns
    -------
    variance : ndarray
        Of the function, by stratum and column; shape (H, K).
    power : ndarray
        b; the expected power if no more than one stratum has a variance, or all have the same mean; shape (K,).

    Notes
    -----
    The penalty is that of a normal prior on b about the expected power. Strata of the same mean have the same variance
    whatever b is. Strata whose plots are all alike have no part in the fit.
    """
    positive = np.where(level > 0, level, np.inf)
    least = positive.min(axis=0, initial=np.inf)
    log_level = np.log(np.where(level > 0, level, np.where(np.isfinite(least), least, 1.0)))
    # plots that are all alike (bare land) do not tell how variance goes with the mean
    df = np.where((squares > 0) | ~(squares > 0).any(axis=0), df, 0.0)
    tried = np.linspace(0.0, rule("greatest_power"), _POWERS)[:, None, None]
    log_shape = tried * (log_level - log_level.max(axis=0, initial=-np.inf))
    total = df.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        base = (squares / np.exp(log_shape)).sum(axis=1) / total
        # minus twice the quasi-likelihood, with a at its best: sum df (log v_function) + sum df
        loss = total * np.log(base) + (df * log_shape).sum(axis=1)
    penalty = ((tried[:, 0] - rule("expected_power")) / rule("expected_power_sd")) ** 2
    best = (np.where(np.isfinite(loss), loss, 0.0) + penalty).argmin(axis=0)
    column = np.arange(df.shape[1])
    shape = np.exp(log_shape[best, :, column].T)
    scale = np.where(total > 0, base[best, column], np.nan)
    return shape * scale, tried[best, 0, 0]


def shrink_to_function(squares: np.ndarray, df: np.ndarray, function: np.ndarray) -> np.ndarray:
    """Average the variance of each stratum with the variance function by degrees of freedom; NaN without any."""
    trust = rule("stratum_variance_df")
    return (squares + trust * function) / (df + trust)


def parcel_variance(layer: Layer, unit: UnitVariance, member: np.ndarray, parcels: int) -> np.ndarray:
    """Variance that the plots of a layer bring into the means of pools.

    Parameters
    ----------
    layer : Layer
        Plots with their shares in the means.
    unit : UnitVariance
        Variance between plots.
    member : ndarray of bool
        Columns of each pool; shape (J, K).
    parcels : int
        Number of parcels.

    Returns
    -------
    ndarray
        Sum over plots and columns k, l of share_k share_l sd_k sd_l r_kl; shape (parcels, J).
    """
    rows = np.flatnonzero(layer.parcel >= 0)
    scaled = layer.share[rows] * np.sqrt(unit.variance[layer.stratum[rows]])
    found = np.zeros((parcels, len(member)))
    for pool, columns in enumerate(member):
        mine = scaled[:, columns]
        inner = unit.correlation[np.ix_(columns, columns)]
        brought = np.einsum("ik,kl,il->i", mine, inner, mine)
        found[:, pool] = group_sum(np.maximum(brought, 0.0)[:, None], layer.parcel[rows], parcels)[:, 0]
    return found


def smooth_variance(
    own: np.ndarray, df: np.ndarray, function: np.ndarray, correction: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Smooth the variances of direct figures towards those that the plots of all parcels make likely.

    Parameters
    ----------
    own : ndarray
        Variance as published for each parcel and pool; NaN where there is none; shape (P, J).
    df : ndarray
        Its degrees of freedom: plots less one.
    function : ndarray
        Variance from the variance between plots and the number of plots.
    correction : ndarray
        Factor that frees ``own`` of the bias it has with few plots.

    Returns
    -------
    variance : ndarray
        (df own + d scale function) / (df + d), d the trust in the function; shape (P, J).
    scale : ndarray
        What the published variances are, on average over the parcels, to the function: the effect of a design or an
        estimator that the function does not know of; drawn to 1 where few plots tell it; shape (J,).
    """
    trust = rule("own_variance_df")
    counted = np.isfinite(own) & (df > 0) & (function > 0)
    weight = np.where(counted, df, 0.0)
    # parcels weigh by their degrees of freedom, whatever the size of their variance
    total = weight.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(counted, own * correction / function, 0.0)
        raw = np.where(total > 0, (weight * ratio).sum(axis=0) / np.where(total > 0, total, 1.0), 1.0)
    scale = (total * raw + trust) / (total + trust)
    smoothed = (weight * np.where(counted, own, 0.0) + trust * scale * function) / (weight + trust)
    return smoothed, scale


def _deviations(layer: Layer, code: np.ndarray, groups: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Deviations from the mean of each group, and per plot its part in the sum of squares and in its df."""
    number = group_sum(layer.used, code, groups)
    size = group_sum(layer.size, code, groups)
    with np.errstate(divide="ignore", invalid="ignore"):
        origin = np.where(number > 0, group_sum(layer.value * layer.used, code, groups) / number, 0.0)
        apart = layer.value - origin[code]
        middle = np.where(size > 0, group_sum(layer.size * apart, code, groups) / size, 0.0)
        deviation = np.where(layer.used, apart - middle[code], 0.0)
        relative = np.where(layer.used, layer.size * number[code] / size[code], 0.0)
        df = np.where(layer.used, 1.0 - 1.0 / number[code], 0.0)
    squares = relative * deviation**2
    noise = _SMALL * group_sum(layer.used * layer.value**2, code, groups)
    squares = np.where(squares <= noise[code], 0.0, squares)
    return np.where(squares > 0, deviation, 0.0), squares, df


def _levels(layer: Layer) -> np.ndarray:
    """Mean level of each stratum and column, drawn to that of all by a plot's worth; 0 without plots.

    Plots without anything say that the level is low, not how low: a further plot might be like those of the lowest
    stratum.
    """
    number = group_sum(layer.used, layer.stratum, layer.strata)
    total = group_sum(np.where(layer.used, np.abs(layer.level), 0.0), layer.stratum, layer.strata)
    own = np.divide(total, number, out=np.zeros_like(total), where=number > 0)
    lowest = np.where(own > 0, own, np.inf).min(axis=0, initial=np.inf)
    own = np.where((own <= 0) & (number > 0), np.where(np.isfinite(lowest), lowest, 0.0) / (number + 1.0), own)
    whole = total.sum(axis=0) / np.maximum(number.sum(axis=0), 1.0)
    trust = rule("level_plots")
    with np.errstate(divide="ignore"):
        drawn = own * (whole / np.where(own > 0, own, 1.0)) ** (trust / (number + trust))
    return np.where(own > 0, drawn, 0.0)


def _with_largest(values: np.ndarray) -> np.ndarray:
    """Add a last row with the largest of each column."""
    return np.concatenate([values, values.max(axis=0, keepdims=True)])


def _correlation(layer: Layer, deviation: np.ndarray, variance: np.ndarray, df: np.ndarray) -> np.ndarray:
    """Pairwise correlations of deviations in units of their standard deviation; 1 where few plots tell."""
    with np.errstate(divide="ignore", invalid="ignore"):
        scaled = deviation / np.sqrt(variance[layer.stratum])
    scaled = np.where(np.isfinite(scaled) & layer.used, scaled, 0.0)
    used = layer.used.astype(float)
    cross = scaled.T @ scaled
    squares = (scaled**2).T @ used  # of the first column, on the plots that have the second
    number = used.T @ used
    counts = np.diag(number)
    with np.errstate(divide="ignore", invalid="ignore"):
        matrix = cross / np.sqrt(squares * squares.T)
        free = number * np.sqrt(np.outer(df / counts, df / counts))  # plots less means, as far as they share plots
    told = np.isfinite(matrix) & (free >= rule("pair_df"))
    matrix = np.where(told, np.clip(matrix, -1.0, 1.0), 1.0)
    np.fill_diagonal(matrix, 1.0)
    return _semi_definite(0.5 * (matrix + matrix.T))


def _semi_definite(matrix: np.ndarray) -> np.ndarray:
    """Cut negative eigenvalues off a correlation matrix and bring its diagonal back to 1."""
    if not len(matrix):
        return matrix
    value, vector = np.linalg.eigh(matrix)
    if value[0] >= 0:
        return matrix
    cut = (vector * np.maximum(value, 0.0)) @ vector.T
    root = np.sqrt(np.diag(cut))
    return np.clip(cut / np.outer(root, root), -1.0, 1.0)
