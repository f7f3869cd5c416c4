"""Effective degrees of freedom, two-sided intervals and one-sided lower bounds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from landcarbon.errors import UserError
from landcarbon.estimate.groups import group_sum

__all__ = [
    "KINDS",
    "SIDES",
    "Limits",
    "check_confidence",
    "check_kind",
    "check_side",
    "df_of_interval",
    "limits",
    "log_limits",
    "satterthwaite",
    "t_half_width",
    "t_limits",
    "t_quantile",
]

KINDS = ("t", "log")
SIDES = ("both", "lower")


@dataclass(frozen=True)
class Limits:
    """Confidence limits.

    Attributes
    ----------
    low, high : ndarray
        Limits in the unit of the estimate; NaN where the standard error, the degrees of freedom or the estimate is
        missing. Of a one-sided lower bound ``high`` is infinite.
    kind : ndarray of str
        "log" or "t": how each limit was really taken. A log interval was asked for in vain where the estimate is not
        above zero or a number is missing; those read "t".
    """

    low: np.ndarray
    high: np.ndarray
    kind: np.ndarray


def satterthwaite(variance: np.ndarray, df: np.ndarray, codes: np.ndarray, groups: int) -> np.ndarray:
    """Effective degrees of freedom of sums of independent variance components.

    Parameters
    ----------
    variance : ndarray
        Components, shape (components, columns).
    df : ndarray
        Degrees of freedom of each component; 0 where a component takes no part.
    codes : ndarray of int
        Sum each component belongs to.
    groups : int
        Number of sums.

    Returns
    -------
    ndarray
        Shape (groups, columns); NaN where no component takes part. Where every component is zero the degrees of
        freedom are added.

    Notes
    -----
    df = (sum V)^2 / sum(V^2 / df_V).

    References
    ----------
    .. [1] Satterthwaite, F. E. (1946). An approximate distribution of estimates of variance components. Biometrics
       Bulletin 2, 110-114. doi:10.2307/3002019
    """
    takes_part = df > 0
    total = group_sum(np.where(takes_part, variance, 0.0), codes, groups)
    with np.errstate(divide="ignore", invalid="ignore"):
        # shares, not squares of the variances themselves: those could run out of the range of a float
        share = np.where(takes_part, variance, 0.0) / total[codes]
        effective = 1.0 / group_sum(np.where(takes_part, share**2 / df, 0.0), codes, groups)
    plain = group_sum(df, codes, groups)
    effective = np.where(total > 0, effective, plain)
    return np.where(plain > 0, effective, np.nan)


def t_half_width(se: np.ndarray, df: np.ndarray, confidence: float) -> np.ndarray:
    """Half width of a two-sided interval by Student's t.

    Parameters
    ----------
    se : ndarray
        Standard errors.
    df : ndarray
        Degrees of freedom, not necessarily whole.
    confidence : float
        Between 0 and 1.

    Returns
    -------
    ndarray
        Same unit as ``se``; NaN where either is NaN.
    """
    return se * t_quantile(df, 0.5 + 0.5 * confidence)


def df_of_interval(half: np.ndarray, se: np.ndarray, confidence: float) -> np.ndarray:
    """Degrees of freedom that the half width of an interval by Student's t has been made with.

    Parameters
    ----------
    half, se : ndarray
        Half widths and standard errors.
    confidence : float
        Of the two-sided interval.

    Returns
    -------
    ndarray
        Infinite where the standard error is zero, as any number gives that interval; NaN where either is missing.
    """
    from scipy.special import stdtridf  # heavy; the package must import without it

    with np.errstate(divide="ignore", invalid="ignore"):
        found = np.asarray(stdtridf(0.5 + 0.5 * confidence, half / se), dtype=float)
    return np.where(se == 0, np.inf, found)


def t_quantile(df: ArrayLike, probability: float) -> np.ndarray:
    """Quantile of Student's t; of the normal distribution where the degrees of freedom are infinite.

    Parameters
    ----------
    df : array_like
        Degrees of freedom, not necessarily whole.
    probability : float
        Between 0 and 1.

    Returns
    -------
    ndarray
        NaN where ``df`` is missing or not above zero.
    """
    from scipy.special import ndtri, stdtrit  # heavy; the package must import without it

    given = np.asarray(df, dtype=float)
    valid = given > 0
    finite = np.where(valid & np.isfinite(given), given, 1.0)
    quantile = np.where(np.isposinf(given), ndtri(probability), stdtrit(finite, probability))
    return np.where(valid, quantile, np.nan)


def t_limits(
    estimate: ArrayLike, se: ArrayLike, df: ArrayLike, *, confidence: float, side: str = "both"
) -> tuple[np.ndarray, np.ndarray]:
    """Limits by Student's t: estimate -+ t se.

    Parameters
    ----------
    estimate, se, df : array_like
        Estimates, standard errors and degrees of freedom; they broadcast against each other.
    confidence : float
        Between 0 and 1.
    side : str
        "both", or "lower" for the bound that the true value exceeds with this confidence.

    Returns
    -------
    low, high : ndarray
        ``high`` is infinite if ``side`` is "lower".
    """
    value, error, freedom = _together(estimate, se, df)
    half = error * t_quantile(freedom, _probability(confidence, side))
    low = value - half
    return low, value + half if side == "both" else _open_end(low)


def log_limits(
    estimate: ArrayLike, se: ArrayLike, df: ArrayLike, *, confidence: float, side: str = "both"
) -> tuple[np.ndarray, np.ndarray]:
    """Limits of a positive, right-skewed estimate by way of its logarithm.

    Parameters
    ----------
    estimate, se, df : array_like
        Estimates, standard errors and degrees of freedom; they broadcast against each other.
    confidence : float
        Between 0 and 1.
    side : str
        "both" or "lower".

    Returns
    -------
    low, high : ndarray
        NaN where the estimate is not above zero; ``high`` is infinite if ``side`` is "lower".

    Notes
    -----
    exp(ln y -+ t se / y): by the delta method se / y is the standard error of ln y. The limits are never negative and
    reach further up than down, as does the distribution of means of a few right-skewed values.

    References
    ----------
    .. [1] Wolter, K. M. (2007). Introduction to Variance Estimation, 2nd ed., Springer: appendix C (transformations);
       place from memory.
    .. [2] Oehlert, G. W. (1992). A note on the delta method. The American Statistician 46, 27-29; from memory.
    """
    value, error, freedom = _together(estimate, se, df)
    positive = value > 0
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        ratio = np.where(positive, error / value, np.nan)
        factor = np.exp(ratio * t_quantile(freedom, _probability(confidence, side)))
        low, high = value / factor, value * factor
    return low, high if side == "both" else _open_end(low)


def limits(
    estimate: ArrayLike, se: ArrayLike, df: ArrayLike, *, confidence: float, kind: str = "t", side: str = "both"
) -> Limits:
    """Confidence limits of any kind.

    Parameters
    ----------
    estimate, se, df : array_like
        Estimates, standard errors and degrees of freedom (infinite for normal limits); they broadcast against each
        other.
    confidence : float
        Between 0 and 1. Of a one-sided bound the whole remainder lies on that side.
    kind : str
        "t", or "log" for positive estimates from skewed values; where a log interval cannot be taken, because the
        estimate is not above zero, Student's t stands in.
    side : str
        "both" or "lower".

    Returns
    -------
    Limits
        With the kind that was really used, element by element.

    Raises
    ------
    UserError
        If ``confidence``, ``kind`` or ``side`` is not one of those known.
    """
    check_confidence(confidence)
    check_kind(kind)
    check_side(side)
    low, high = t_limits(estimate, se, df, confidence=confidence, side=side)
    used = np.full(low.shape, "t", dtype="<U3")
    if kind == "log":
        log_low, log_high = log_limits(estimate, se, df, confidence=confidence, side=side)
        taken = np.isfinite(log_low)
        low, high = np.where(taken, log_low, low), np.where(taken, log_high, high)
        used = np.where(taken, "log", used)
    return Limits(low, high, used)


def _together(*values: ArrayLike) -> list[np.ndarray]:
    """Float arrays of one shape."""
    return list(np.broadcast_arrays(*(np.asarray(value, dtype=float) for value in values)))


def _probability(confidence: float, side: str) -> float:
    """Probability below the upper end: half of the remainder lies above a two-sided interval."""
    return 0.5 + 0.5 * confidence if side == "both" else confidence


def _open_end(low: np.ndarray) -> np.ndarray:
    """Upper end of a one-sided bound; missing where the bound is."""
    return np.where(np.isnan(low), np.nan, np.inf)


def check_kind(kind: str) -> None:
    """Refuse an unknown kind of interval.

    Raises
    ------
    UserError
        With the kinds there are.
    """
    _check_word("interval", kind, KINDS)


def check_side(side: str) -> None:
    """Refuse an unknown side of an interval.

    Raises
    ------
    UserError
        With the sides there are.
    """
    _check_word("side of an interval", side, SIDES)


def _check_word(what: str, word: str, known: Sequence[str]) -> None:
    if word not in known:
        raise UserError(f"{what} {word!r} is not known", remedy=f"Use one of: {', '.join(known)}.")


def check_confidence(confidence: float) -> None:
    """Refuse a confidence outside the open interval from 0 to 1.

    Raises
    ------
    UserError
        With the accepted range.
    """
    if not 0.0 < confidence < 1.0:
        raise UserError(
            f"confidence {confidence!r} is not a probability",
            remedy="Give a number above 0 and below 1, for example 0.95.",
        )
