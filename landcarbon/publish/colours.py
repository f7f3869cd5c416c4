"""Classes and colours of the map: rounded limits, perceptually even and safe for colour-blind readers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["ColourScale", "diverging_scale", "sequential_scale"]

_SEQUENTIAL = "cividis_r"  # pale for little, dark for much
_DIVERGING = "BrBG"  # brown for loss, pale at zero, green for gain
_CLASSES = 7
_CLASSES_EACH_SIDE = 4
# Where the largest value is further out than this many upper quartiles, even classes would put all others into one.
_SKEWED = 2.5
_NOTHING = 1e-9  # t C/ha: rounding noise, not a quantity to make a class for
_ROUND_STEPS = (1.0, 2.0, 2.5, 5.0, 10.0)


@dataclass(frozen=True)
class ColourScale:
    """Classes of a map layer.

    Attributes
    ----------
    edges : list of float
        Class limits in rising order, one more than there are colours; empty if there is nothing to show. A value on a
        limit belongs to the class above it, except the last.
    colours : list of str
        Hexadecimal colours such as ``#00204d``.
    """

    edges: list[float]
    colours: list[str]


def sequential_scale(values: ArrayLike) -> ColourScale:
    """Make classes from the least to the greatest value.

    Parameters
    ----------
    values : array_like
        Densities [t C/ha]; NaN is passed over.

    Returns
    -------
    ColourScale
        About seven classes between rounded limits.
    """
    known = _finite(values)
    if not len(known):
        return ColourScale([], [])
    low, high = float(known.min()), float(known.max())
    edges = _classed_by_count(known, _CLASSES) if low >= 0 and _is_skewed(known) else _even(low, high, _CLASSES)
    return ColourScale(edges, _sampled(_SEQUENTIAL, np.linspace(0.0, 1.0, len(edges) - 1)))


def diverging_scale(values: ArrayLike) -> ColourScale:
    """Make classes that mirror each other about zero.

    Parameters
    ----------
    values : array_like
        Changes [t C/ha per year]; NaN is passed over.

    Returns
    -------
    ColourScale
        As many classes of loss as of gain, with limits of equal size; zero is always a limit.
    """
    known = _finite(values)
    if not len(known):
        return ColourScale([], [])
    size = np.abs(known)
    upper = _classed_by_count(size, _CLASSES_EACH_SIDE) if _is_skewed(size) else _even_from_zero(size.max())
    positive = [edge for edge in upper if edge > 0]
    edges = [-edge for edge in reversed(positive)] + [0.0, *positive]
    steps = (np.arange(len(positive)) + 0.5) / len(positive) / 2
    places = np.concatenate([0.5 - steps[::-1], 0.5 + steps])
    return ColourScale(edges, _sampled(_DIVERGING, places))


def _finite(values: ArrayLike) -> NDArray[np.float64]:
    array = np.asarray(values, dtype=float).ravel()
    known = array[np.isfinite(array)]
    return np.where(np.abs(known) < _NOTHING, 0.0, known)


def _is_skewed(known: NDArray[np.float64]) -> bool:
    quartile = float(np.quantile(known, 0.75))
    return quartile > 0 and float(known.max()) > _SKEWED * quartile


def _even(low: float, high: float, classes: int) -> list[float]:
    from matplotlib.ticker import MaxNLocator

    if np.isclose(low, high):
        spread = max(abs(low) / 10, 1.0)  # one value: a single sensible class around it
        low, high = low - spread, high + spread
        classes = 1
    ticks = MaxNLocator(nbins=classes, steps=list(_ROUND_STEPS)).tick_values(low, high)
    edges = np.array([float(f"{tick:.12g}") for tick in ticks])  # 1e-05, not 9.999999999999999e-06 below it
    inner = edges[(edges > low) & (edges < high)]
    below, above = edges[edges <= low], edges[edges >= high]
    return [float(edge) + 0.0 for edge in np.concatenate([below[-1:], inner, above[:1]])]


def _even_from_zero(high: float) -> list[float]:
    return _even(0.0, high, _CLASSES_EACH_SIDE) if high > 0 else [0.0, 1.0]


def _classed_by_count(known: NDArray[np.float64], classes: int) -> list[float]:
    """Give classes about equal numbers of values, with limits rounded up to 1, 2, 5, 10, ..."""
    limits = np.quantile(known, np.linspace(0, 1, classes + 1)[1:])
    return sorted({0.0, *(_rounded_up(limit) for limit in limits if limit > 0)})


def _rounded_up(value: float) -> float:
    power = 10.0 ** np.floor(np.log10(value))
    step = next(step for step in (1.0, 2.0, 5.0, 10.0) if step * power >= value * (1 - 1e-12))
    return float(f"{step * power:.6g}")


def _sampled(name: str, places: Sequence[float] | NDArray[np.float64]) -> list[str]:
    from matplotlib import colormaps
    from matplotlib.colors import to_hex

    return [to_hex(colour) for colour in colormaps[name](np.asarray(places, dtype=float))]
