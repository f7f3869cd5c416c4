"""Effective degrees of freedom and intervals."""

from __future__ import annotations

import numpy as np

from landcarbon.errors import UserError
from landcarbon.estimate.groups import group_sum

__all__ = ["check_confidence", "satterthwaite", "t_half_width"]


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
    from scipy.special import stdtrit  # heavy; the package must import without it

    return se * stdtrit(df, 0.5 + 0.5 * confidence)


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
