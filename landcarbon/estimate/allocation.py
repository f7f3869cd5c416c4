"""How to share out sample plots over strata.

Pure functions for planning a survey. Symbols: N_h size of stratum h (area or number of plots that would fit), S_h
standard deviation between plots, c_h cost of a plot.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from landcarbon.errors import UserError

__all__ = [
    "anticipated_se",
    "cost_optimal",
    "neyman",
    "proportional",
    "repeated_share",
    "repeated_variance",
    "rounded",
    "whole_plots",
]


def proportional(plots: float, size: ArrayLike) -> np.ndarray:
    """Share out plots in proportion to the size of the strata.

    Parameters
    ----------
    plots : float
        Number of plots in all.
    size : array_like
        Size of each stratum, any unit.

    Returns
    -------
    ndarray
        Plots by stratum, not rounded: n N_h / N.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: section 5.6; place from memory.
    """
    return _shared(plots, _positive("stratum sizes", size))


def neyman(plots: float, size: ArrayLike, sd: ArrayLike) -> np.ndarray:
    """Share out plots so that the stratified mean gets the smallest variance.

    Parameters
    ----------
    plots : float
        Number of plots in all.
    size : array_like
        Size of each stratum, any unit.
    sd : array_like
        Expected standard deviation between plots of each stratum, in one unit.

    Returns
    -------
    ndarray
        Plots by stratum, not rounded: n N_h S_h / sum(N S).

    References
    ----------
    .. [1] Neyman, J. (1934). On the two different aspects of the representative method. Journal of the Royal
       Statistical Society 97, 558-625.
    """
    return _shared(plots, _positive("stratum sizes", size) * _positive("standard deviations", sd))


def cost_optimal(
    size: ArrayLike, sd: ArrayLike, cost: ArrayLike, *, budget: float | None = None, plots: float | None = None
) -> np.ndarray:
    """Share out plots that differ in cost so that the stratified mean gets the smallest variance for the money.

    Parameters
    ----------
    size : array_like
        Size of each stratum, any unit.
    sd : array_like
        Expected standard deviation between plots of each stratum, in one unit.
    cost : array_like
        Cost of one plot of each stratum.
    budget : float, optional
        Money for the plots, without the overhead of the survey, in the unit of ``cost``.
    plots : float, optional
        Number of plots in all. One of ``budget`` and ``plots`` must be given.

    Returns
    -------
    ndarray
        Plots by stratum, not rounded; in proportion to N_h S_h / sqrt(c_h).

    Raises
    ------
    UserError
        If none or both of ``budget`` and ``plots`` are given.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: section 5.5, theorem 5.6; place from memory.
    """
    if (budget is None) == (plots is None):
        raise UserError("an allocation by cost needs a limit", remedy="Give either the budget or the number of plots.")
    price = _positive("costs", cost)
    share = _positive("stratum sizes", size) * _positive("standard deviations", sd) / np.sqrt(price)
    if plots is not None:
        return _shared(plots, share)
    return _shared(float(budget or 0.0), share * price) / price


def anticipated_se(size: ArrayLike, sd: ArrayLike, plots: ArrayLike, *, population: ArrayLike = np.inf) -> float:
    """Work out the standard error of the stratified mean that an allocation promises.

    Parameters
    ----------
    size : array_like
        Size of each stratum, any unit.
    sd : array_like
        Expected standard deviation between plots of each stratum.
    plots : array_like
        Plots by stratum.
    population : array_like
        Plots that would fit into each stratum; infinite leaves the finite population correction out.

    Returns
    -------
    float
        Unit of ``sd``: sqrt(sum W_h^2 S_h^2 / n_h (1 - n_h / N_h)).
    """
    area = _positive("stratum sizes", size)
    number = np.asarray(plots, dtype=float)
    with np.errstate(divide="ignore"):
        part = (area / area.sum() * _positive("standard deviations", sd)) ** 2 / number
    return float(np.sqrt(np.sum(part * (1.0 - number / np.asarray(population, dtype=float)))))


def repeated_share(correlation: ArrayLike) -> np.ndarray:
    """Return the share of plots to measure again on a second date for the best figure of that date.

    Parameters
    ----------
    correlation : array_like
        Correlation between the two dates on the same plots.

    Returns
    -------
    ndarray
        sqrt(1 - r^2) / (1 + sqrt(1 - r^2)); the rest of the plots are new. For the change between the dates it is best
        to measure all plots again, if r is above zero.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: section 12.11; place from memory.
    """
    root = np.sqrt(1.0 - np.asarray(correlation, dtype=float) ** 2)
    return root / (1.0 + root)


def repeated_variance(correlation: ArrayLike, share: ArrayLike | None = None) -> np.ndarray:
    """Return the variance of the second date's mean, as a share of that without the plots of the first date.

    Parameters
    ----------
    correlation : array_like
        Correlation between the two dates on the same plots.
    share : array_like, optional
        Share of plots measured again; the best one unless given. Plots at both dates are as many and vary as much.

    Returns
    -------
    ndarray
        (1 - u r^2) / (1 - u^2 r^2) with u the share of new plots, for the best combination of both dates; one half of
        1 + sqrt(1 - r^2) at the best share.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: section 12.11; place from memory.
    """
    square = np.asarray(correlation, dtype=float) ** 2
    if share is None:
        return 0.5 * (1.0 + np.sqrt(1.0 - square))
    new = 1.0 - np.asarray(share, dtype=float)
    return (1.0 - new * square) / (1.0 - new**2 * square)


def rounded(plots: ArrayLike) -> np.ndarray:
    """Round to whole plots, halves upwards, without minding the sum."""
    return np.floor(np.asarray(plots, dtype=float) + 0.5).astype(np.int64)


def whole_plots(plots: ArrayLike, total: int, *, rule: str = "remainder", least: int = 0) -> np.ndarray:
    """Round an allocation to whole plots that add up.

    Parameters
    ----------
    plots : array_like
        Plots by stratum, not rounded.
    total : int
        Number of plots in all.
    rule : str
        "remainder": the largest remainders are rounded up. "largest": each number is rounded to the nearest, then the
        largest stratum makes good what the sum lacks or has too much.
    least : int
        Plots that every stratum gets at the very least; taken from the strata with most plots.

    Returns
    -------
    ndarray of int

    Raises
    ------
    UserError
        If the rule is not known or ``total`` does not reach for ``least`` plots in every stratum.

    References
    ----------
    .. [1] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC: section 4.3 (rule "largest").
    """
    given = np.asarray(plots, dtype=float)
    if rule not in ("remainder", "largest"):
        raise UserError(f"rule {rule!r} of rounding is not known", remedy="Use one of: remainder, largest.")
    if total < least * given.size:
        raise UserError(
            f"{total} plots do not reach for {least} in each of {given.size} strata",
            remedy="Take more plots, merge strata or lower the least number.",
        )
    if rule == "largest":
        number = rounded(given)
        number[np.argmax(number)] += total - number.sum()
    else:
        number = _by_remainder(given, total)
    return _with_least(number, least)


def _by_remainder(given: np.ndarray, total: int) -> np.ndarray:
    number = np.floor(given).astype(np.int64)
    order = np.argsort(-(given - number), kind="stable")
    short = total - int(number.sum())
    every, some = divmod(short, given.size)
    number += every
    number[order[:some]] += 1
    return number


def _with_least(number: np.ndarray, least: int) -> np.ndarray:
    """Lift small strata to the least number; the strata with most above it pay, one plot after the other."""
    lifted = np.maximum(number, least)
    owed = int(lifted.sum() - number.sum())
    # water filling: the level at which the largest strata are cut, then single plots for the rest of the debt
    levels = np.arange(least, int(lifted.max()) + 1)
    taken = np.maximum(lifted[:, None] - levels, 0).sum(axis=0)
    level = levels[np.flatnonzero(taken >= owed)[-1]]
    cut = np.minimum(lifted, level)
    back = int(lifted.sum() - owed - cut.sum())
    cut[np.flatnonzero(lifted > level)[:back]] += 1
    return cut


def _shared(amount: float, share: np.ndarray) -> np.ndarray:
    whole = share.sum()
    if not whole > 0:
        raise UserError("nothing to share plots out by", remedy="Sizes and standard deviations must not all be zero.")
    return amount * share / whole


def _positive(what: str, values: ArrayLike) -> np.ndarray:
    array = np.asarray(values, dtype=float)
    if not (np.isfinite(array) & (array >= 0)).all():
        raise UserError(f"{what} must be numbers that are not negative", remedy="Correct or leave out the stratum.")
    return array
