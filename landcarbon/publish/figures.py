"""How figures are written for people: a standard error to two significant digits, its figure to the same decimals."""

from __future__ import annotations

import math

__all__ = ["MINUS", "decimals_for", "figure", "interval"]

MINUS = "\u2212"
_MOST_DECIMALS = 6


def decimals_for(spread: float, value: float) -> int:
    """Return how many decimals a figure deserves.

    Parameters
    ----------
    spread : float
        Standard error, in the unit of the value; NaN or 0 if there is none.
    value : float
        The figure itself; without a spread it is written to two significant digits after the first.

    Returns
    -------
    int
        0 to 6.

    Notes
    -----
    Two significant digits of the standard uncertainty, and the estimate to the same decimals, as recommended in
    JCGM 100:2008 (guide to the expression of uncertainty in measurement), section 7.2.6.
    """
    size = spread if math.isfinite(spread) and spread > 0 else abs(value) / 10
    if not math.isfinite(size) or size <= 0:
        return 1
    return min(_MOST_DECIMALS, max(0, 1 - math.floor(math.log10(size))))


def figure(value: float, decimals: int, *, sign: bool = False) -> str:
    """Write one figure with thousands separated, a true minus, and a dash where it is unknown.

    Parameters
    ----------
    value : float
        The figure.
    decimals : int
        Decimals to write.
    sign : bool
        Whether to put a plus before gains.
    """
    if value is None or not math.isfinite(value):
        return "\u2013"
    text = f"{abs(value):,.{decimals}f}"
    if not float(text.replace(",", "")):
        return text
    return (MINUS if value < 0 else "+" if sign else "") + text


def interval(low: float, high: float, decimals: int, *, sign: bool = False) -> str:
    """Write an interval, or a dash where there is none: unknown, or without width as the plots do not vary."""
    if not (math.isfinite(low) and math.isfinite(high)) or low == high:
        return "\u2013"
    return f"{figure(low, decimals, sign=sign)} to {figure(high, decimals, sign=sign)}"
