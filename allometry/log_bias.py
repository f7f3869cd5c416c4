"""Factors that take the bias out of predictions from equations fitted to logarithms.

The antilogarithm of a prediction of ln y is a median, not a mean; added up over trees it falls short. Each factor
multiplies the back-transformed prediction.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from allometry.errors import AllometryError

__all__ = ["LogFit", "fit_log_linear", "normal_factor", "ratio_factor", "smearing_factor"]


@dataclass(frozen=True)
class LogFit:
    """Straight line through logarithms: ln y = intercept + slope ln x.

    Attributes
    ----------
    intercept, slope : float
        Coefficients, natural logarithms.
    residual_ms : float
        Residual mean square of ln y, divisor n - 2.
    residual : ndarray
        Residuals of ln y.
    """

    intercept: float
    slope: float
    residual_ms: float
    residual: np.ndarray

    def predict(self, x: ArrayLike) -> np.ndarray:
        """Back-transformed prediction without any factor, unit of y."""
        return np.exp(self.intercept + self.slope * np.log(np.asarray(x, dtype=float)))


def fit_log_linear(x: ArrayLike, y: ArrayLike) -> LogFit:
    """Fit ln y to ln x by least squares.

    Parameters
    ----------
    x, y : array_like
        Measurements, all above zero, at least three.

    Raises
    ------
    AllometryError
        If there are fewer than three pairs, values not above zero, or x does not vary.
    """
    given_x, given_y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    number, least = given_x.size, 3
    if given_x.shape != given_y.shape or number < least or not (given_x > 0).all() or not (given_y > 0).all():
        raise AllometryError("a line through logarithms needs at least three pairs of values above zero")
    log_x, log_y = np.log(given_x), np.log(given_y)
    apart = log_x - log_x.mean()
    square = float(apart @ apart)
    if not square > 0:
        raise AllometryError("a line through logarithms needs x values that differ")
    slope = float(apart @ log_y) / square
    intercept = float(log_y.mean() - slope * log_x.mean())
    residual = log_y - intercept - slope * log_x
    return LogFit(intercept, slope, float(residual @ residual) / (number - 2), residual)


def normal_factor(residual_sd: ArrayLike, base: float = np.e) -> np.ndarray:
    """Factor for normally distributed residuals: exp(s^2 / 2).

    Parameters
    ----------
    residual_sd : array_like
        Residual standard deviation of the logarithms.
    base : float
        Base of these logarithms; the standard deviation of log10 is first brought to natural logarithms.

    References
    ----------
    .. [1] Baskerville, G. L. (1972). Use of logarithmic regression in the estimation of plant biomass. Canadian
       Journal of Forest Research 2, 49-53.
    .. [2] Sprugel, D. G. (1983). Correcting for bias in log-transformed allometric equations. Ecology 64, 209-210.
    """
    return np.exp(0.5 * (np.asarray(residual_sd, dtype=float) * np.log(base)) ** 2)


def smearing_factor(residual: ArrayLike, base: float = np.e) -> float:
    """Factor without an assumed distribution: mean of the back-transformed residuals.

    Parameters
    ----------
    residual : array_like
        Residuals of the logarithms.
    base : float
        Base of these logarithms.

    References
    ----------
    .. [1] Duan, N. (1983). Smearing estimate: a nonparametric retransformation method. Journal of the American
       Statistical Association 78, 605-610.
    """
    return float(np.exp(np.asarray(residual, dtype=float) * np.log(base)).mean())


def ratio_factor(measured: ArrayLike, predicted: ArrayLike) -> float:
    """Factor that makes the fitted trees add up: sum of measured by sum of back-transformed predictions.

    Parameters
    ----------
    measured, predicted : array_like
        Values of the trees the equation was fitted to, in one unit.

    References
    ----------
    .. [1] Snowdon, P. (1991). A ratio estimator for bias correction in logarithmic regressions. Canadian Journal of
       Forest Research 21, 720-724.
    """
    return float(np.asarray(measured, dtype=float).sum() / np.asarray(predicted, dtype=float).sum())
