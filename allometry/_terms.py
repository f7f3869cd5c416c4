"""Measured variables and the few general functions most equation forms come down to."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

__all__ = ["FloatArray", "LogTerms", "Predictors", "exp_log_terms", "exp_saturating", "hinge", "polynomial", "positive"]

FloatArray = NDArray[np.float64]


@dataclass
class Predictors:
    """Measured variables of a group of trees, with their logarithms computed once.

    Parameters
    ----------
    diameter
        Diameter in the unit the equation was printed for (shape ``n``).
    height_m
        Total height [m] or None.
    wood_density_g_cm3
        Basic wood density [g/cm3] or None.
    stress
        Bioclimatic stress E [-] or None.
    extra
        Further measured variables by name, for the few equations that use others.
    """

    diameter: FloatArray
    height_m: FloatArray | None = None
    wood_density_g_cm3: FloatArray | None = None
    stress: FloatArray | None = None
    extra: Mapping[str, FloatArray] = field(default_factory=dict)

    @cached_property
    def ln_d(self) -> FloatArray:
        """Natural logarithm of the diameter, NaN where it is not positive."""
        return np.log(positive(self.diameter))

    @cached_property
    def height(self) -> FloatArray:
        """Height with NaN where it is not positive."""
        if self.height_m is None:
            return np.full_like(self.diameter, np.nan)
        return positive(self.height_m)

    @cached_property
    def ln_h(self) -> FloatArray:
        """Natural logarithm of the height."""
        return np.log(self.height)

    @cached_property
    def rho(self) -> FloatArray:
        """Wood density with NaN where it is not positive."""
        if self.wood_density_g_cm3 is None:
            return np.full_like(self.diameter, np.nan)
        return positive(self.wood_density_g_cm3)

    @cached_property
    def ln_rho(self) -> FloatArray:
        """Natural logarithm of the wood density."""
        return np.log(self.rho)


def positive(values: FloatArray) -> FloatArray:
    """Return the values with NaN where they are not positive."""
    return np.where(values > 0, values, np.nan)


@dataclass(frozen=True)
class LogTerms:
    """Coefficients of ``ln y = constant + ln_d ln D + ln_d2 (ln D)^2 + ...``; a zero term is not computed."""

    constant: float
    ln_d: float = 0.0
    ln_d2: float = 0.0
    ln_d3: float = 0.0
    inverse_d: float = 0.0
    ln_h: float = 0.0
    ln_h2: float = 0.0
    h: float = 0.0
    ln_rho: float = 0.0
    stress: float = 0.0


def exp_log_terms(predictors: Predictors, *, terms: LogTerms) -> FloatArray:
    """Evaluate an equation that is linear in the logarithm of the result.

    Parameters
    ----------
    predictors
        Measured variables.
    terms
        Coefficients of the terms.

    Returns
    -------
    ndarray
        ``exp(constant + ln_d ln D + ln_d2 (ln D)^2 + ln_d3 (ln D)^3 + inverse_d / D + ln_h ln H + ln_h2 (ln H)^2 + h H
        + ln_rho ln rho + stress E)``.
    """
    p, t = predictors, terms
    if t.ln_d2 or t.ln_d3:
        total = t.constant + p.ln_d * (t.ln_d + p.ln_d * (t.ln_d2 + t.ln_d3 * p.ln_d))
    elif t.ln_d:
        total = t.ln_d * p.ln_d
        total += t.constant
    else:
        total = np.full_like(p.diameter, t.constant)
    if t.inverse_d:
        total = total + t.inverse_d / positive(p.diameter)
    if t.ln_h or t.ln_h2:
        total += p.ln_h * (t.ln_h + t.ln_h2 * p.ln_h) if t.ln_h2 else t.ln_h * p.ln_h
    if t.h:
        total += t.h * p.height
    if t.ln_rho:
        total += t.ln_rho * p.ln_rho
    if t.stress:
        total += t.stress * _needed(p.stress, p)
    return np.exp(total, out=total)


def _needed(values: FloatArray | None, p: Predictors) -> FloatArray:
    return np.full_like(p.diameter, np.nan) if values is None else values


def exp_saturating(
    predictors: Predictors,
    *,
    constant: float,
    slope: float,
    half: float,
    ln_h: float = 0.0,
    h: float = 0.0,
    h_ratio: tuple[float, float] = (0.0, 0.0),
    stump: tuple[float, float] = (0.0, 1.0),
) -> FloatArray:
    """Evaluate the Nordic forms with a saturating diameter term.

    Parameters
    ----------
    predictors
        Measured variables.
    constant, slope, half
        ``exp(constant + slope x/(x + half) + ...)`` with ``x`` the diameter in its printed unit.
    ln_h, h
        Coefficients of ``ln H`` and ``H``.
    h_ratio
        Coefficient and constant of ``coefficient H/(H + constant)``.
    stump
        Intercept and slope of ``x = intercept + slope D``, where the publication transforms the diameter first.

    Returns
    -------
    ndarray
        Value in the printed unit.
    """
    p = predictors
    x = stump[0] + stump[1] * positive(p.diameter)
    total = constant + slope * x / (x + half)
    if ln_h:
        total += ln_h * p.ln_h
    if h:
        total += h * p.height
    if h_ratio[0]:
        total += h_ratio[0] * p.height / (p.height + h_ratio[1])
    return np.exp(total, out=total)


_POWERS: dict[str, tuple[int, int]] = {
    "1": (0, 0),
    "D": (1, 0),
    "D^2": (2, 0),
    "H": (0, 1),
    "H^2": (0, 2),
    "D*H": (1, 1),
    "D^2*H": (2, 1),
}


def polynomial(predictors: Predictors, *, terms: tuple[str, ...], factors: tuple[float, ...]) -> FloatArray:
    """Evaluate a sum of products of diameter and height.

    Parameters
    ----------
    predictors
        Measured variables.
    terms
        Names of the terms: ``1``, ``D``, ``D^2``, ``H``, ``H^2``, ``D*H``, ``D^2*H``.
    factors
        One factor per term, sign included.

    Returns
    -------
    ndarray
        Value in the printed unit; it may be negative outside the range of the data.
    """
    p = predictors
    needs_d = any(_POWERS[t][0] for t in terms)
    diameter = positive(p.diameter) if needs_d else np.ones_like(p.diameter)
    total = np.zeros_like(p.diameter)
    for term, factor in zip(terms, factors, strict=True):
        d_power, h_power = _POWERS[term]
        value = factor * diameter**d_power
        total += value * p.height**h_power if h_power else value
    return total


def hinge(predictors: Predictors, *, factor: FloatArray | float, threshold: float, exponent: int) -> FloatArray:
    """Evaluate a component that exists only above a threshold diameter.

    Parameters
    ----------
    predictors
        Measured variables.
    factor
        Factor, or one value per tree.
    threshold
        Diameter [cm] at and below which the result is zero.
    exponent
        Exponent of the excess over the threshold.

    Returns
    -------
    ndarray
        ``factor max(D - threshold, 0)^exponent`` [printed unit].
    """
    diameter = positive(predictors.diameter)
    return factor * np.maximum(diameter - threshold, 0.0) ** exponent
