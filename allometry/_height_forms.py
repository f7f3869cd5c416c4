"""Height curves as a closed set of named functions; their bounds and sources are in ``data/height_forms.csv``."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from allometry._data import read_data

__all__ = ["FORMS", "Form", "breast_height", "height_rules"]

FloatArray = NDArray[np.float64]


@cache
def height_rules() -> dict[str, float]:
    """Read ``data/height_rules.csv``.

    Returns
    -------
    dict
        Rule -> value.
    """
    table = read_data("height_rules", numbers=("value",))
    return dict(zip(table["rule"], table["value"], strict=True))


@dataclass(frozen=True)
class Form:
    """A curve: its function of diameter, and a start for the fit from a typical diameter and the greatest height."""

    function: Callable[..., FloatArray]
    start: Callable[[float, float], list[float]]


def breast_height() -> float:
    """Height at which the diameter is measured [m].

    Returns
    -------
    float
        From ``data/height_rules.csv``.
    """
    return height_rules()["breast_height_m"]


def _naslund(d: FloatArray, a: float, b: float) -> FloatArray:
    return breast_height() + (d / (a + b * d)) ** 2


def _naslund_cubic(d: FloatArray, a: float, b: float) -> FloatArray:
    return breast_height() + (d / (a + b * d)) ** 3


def _curtis_power(d: FloatArray, a: float, b: float) -> FloatArray:
    return breast_height() + a * d**b


def _michailoff(d: FloatArray, a: float, b: float) -> FloatArray:
    return breast_height() + a * np.exp(b / d)


def _curtis(d: FloatArray, a: float, b: float) -> FloatArray:
    return breast_height() + a * (d / (1.0 + d)) ** b


def _wykoff(d: FloatArray, a: float, b: float) -> FloatArray:
    return breast_height() + np.exp(a + b / (d + 1.0))


def _chapman_richards(d: FloatArray, a: float, b: float, c: float) -> FloatArray:
    return breast_height() + a * (1.0 - np.exp(-b * d)) ** c


def _weibull(d: FloatArray, a: float, b: float, c: float) -> FloatArray:
    return breast_height() + a * (1.0 - np.exp(-b * d**c))


def _log_quadratic(d: FloatArray, a: float, b: float, c: float) -> FloatArray:
    log_d = np.log(d)
    return np.exp(a + b * log_d + c * log_d**2)


# Starts put the curve through the typical tree: half the asymptote is reached at the typical diameter.
FORMS: dict[str, Form] = {
    "naslund": Form(_naslund, lambda d, h: [0.3 * d / np.sqrt(h), 1.0 / np.sqrt(h)]),
    "naslund_cubic": Form(_naslund_cubic, lambda d, h: [0.2 * d / np.cbrt(h), 1.0 / np.cbrt(h)]),
    "curtis_power": Form(_curtis_power, lambda d, h: [h / np.sqrt(2.0 * d), 0.5]),
    "michailoff": Form(_michailoff, lambda d, h: [h, -0.5 * d]),
    "curtis": Form(_curtis, lambda d, h: [h, 0.5 * d]),
    "wykoff": Form(_wykoff, lambda d, h: [float(np.log(h)), -0.5 * d]),
    "chapman_richards": Form(_chapman_richards, lambda d, h: [h, 1.0 / d, 1.0]),
    "weibull": Form(_weibull, lambda d, h: [h, 1.0 / d, 1.0]),
    "log_quadratic": Form(_log_quadratic, lambda d, h: [float(np.log(h)) - 0.5 * float(np.log(d)), 0.5, 0.0]),
}
"""Form id -> function; a closed set that a test holds against ``data/height_forms.csv``."""
