"""Soil carbon at one mass of fine soil: cumulated carbon over cumulated mass, read at a reference mass.

A fixed depth holds more soil after compaction and less after loosening, so that carbon seems to change where only the
density did. Carbon down to the same mass of soil does not have that fault. All cores with the same number of layers are
solved together.
"""

from __future__ import annotations

import numpy as np

from landcarbon.pools.soil_factors import limit

__all__ = ["LINE", "MONOTONE", "SPLINE", "carbon_at_mass", "monotone_cubic_at", "natural_spline_at", "straight_line_at"]

# Curve used for a core; joined by "or" over the cores of a plot.
SPLINE = 32
MONOTONE = 64
LINE = 128

_SLACK = 1e-12  # share of the mean slope below zero that is rounding


def carbon_at_mass(
    core: np.ndarray, mass_t_ha: np.ndarray, carbon_t_ha: np.ndarray, reference_t_ha: float, n_cores: int
) -> tuple[np.ndarray, np.ndarray]:
    """Carbon of each core above the depth where its cumulated mass reaches the reference.

    Parameters
    ----------
    core : ndarray of int
        Number of the core of each layer, sorted; layers in order of depth.
    mass_t_ha, carbon_t_ha : ndarray of float
        Fine soil and organic carbon of each layer [t/ha].
    reference_t_ha : float
        Reference mass of fine soil [t/ha].
    n_cores : int
        Number of cores.

    Returns
    -------
    carbon : ndarray of float, shape (n_cores,)
        Carbon [t C/ha]; NaN where the core holds less soil than the reference: nothing is extrapolated.
    curve : ndarray of int, shape (n_cores,)
        ``SPLINE``, ``MONOTONE``, ``LINE``, or 0 where there is no value.

    Notes
    -----
    The curve runs through (0, 0) and the cumulated mass and carbon at the lower limit of each layer. Three layers or
    more: natural cubic spline, replaced by a monotone piecewise cubic (Fritsch and Carlson 1980; slopes of Fritsch and
    Butland 1984) if the spline falls anywhere down to the reference. Fewer layers: straight lines.

    References
    ----------
    Wendt and Hauser (2013) European Journal of Soil Science 64:58-65; von Haden, Yang and DeLucia (2020) Global Change
    Biology 26:3759-3770. Boundary condition and monotone check are choices of this program.
    """
    carbon = np.full(n_cores, np.nan)
    curve = np.zeros(n_cores, dtype=np.int64)
    solid = mass_t_ha > 0  # a layer of stones only adds neither mass nor carbon
    core, mass, amount = core[solid], mass_t_ha[solid], carbon_t_ha[solid]
    count = np.bincount(core, minlength=n_cores)
    total = np.bincount(core, weights=mass, minlength=n_cores)
    enough = total >= reference_t_ha * (1.0 - _SLACK)
    first = np.cumsum(count) - count
    for layers in np.unique(count[enough & (count > 0)]):
        which = np.flatnonzero(enough & (count == layers))
        place = first[which][:, None] + np.arange(layers)
        x = _cumulated(mass[place])
        y = _cumulated(amount[place])
        at = np.minimum(reference_t_ha, x[:, -1])
        if layers < limit("spline layers"):
            carbon[which], curve[which] = straight_line_at(x, y, at), LINE
            continue
        value, rising = natural_spline_at(x, y, at)
        falls = np.flatnonzero(~rising)
        if len(falls):
            value[falls] = monotone_cubic_at(x[falls], y[falls], at[falls])
        carbon[which], curve[which] = value, np.where(rising, SPLINE, MONOTONE)
    return carbon, curve


def _cumulated(values: np.ndarray) -> np.ndarray:
    sums = np.zeros((values.shape[0], values.shape[1] + 1))
    np.cumsum(values, axis=1, out=sums[:, 1:])
    return sums


def straight_line_at(x: np.ndarray, y: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Interpolate each row of (x, y) by straight lines at ``at``, one value per row."""
    segment = _segment(x, at)
    x0, x1 = _pick(x, segment), _pick(x, segment + 1)
    y0, y1 = _pick(y, segment), _pick(y, segment + 1)
    return y0 + (y1 - y0) * (at - x0) / (x1 - x0)


def natural_spline_at(x: np.ndarray, y: np.ndarray, at: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Interpolate each row by a natural cubic spline (no curvature at its ends).

    Parameters
    ----------
    x, y : ndarray of float, shape (rows, knots)
        Knots; x strictly rising along each row, at least three knots.
    at : ndarray of float, shape (rows,)
        Where to read each row, within its knots.

    Returns
    -------
    value : ndarray of float, shape (rows,)
        The spline at ``at``.
    rising : ndarray of bool, shape (rows,)
        Whether it falls nowhere from the first knot to the end of the segment that holds ``at``.
    """
    h = np.diff(x, axis=1)
    slope = np.diff(y, axis=1) / h
    curvature = _natural_curvature(h, slope)
    segment = _segment(x, at)
    low = _lowest_slope(h, slope, curvature)
    checked = np.arange(h.shape[1]) <= segment[:, None]
    slack = _SLACK * (np.abs(y[:, -1] - y[:, 0]) / (x[:, -1] - x[:, 0]))[:, None]
    rising = ((low >= -slack) | ~checked).all(axis=1)
    step, width, rise = at - _pick(x, segment), _pick(h, segment), _pick(slope, segment)
    left, right = _pick(curvature, segment), _pick(curvature, segment + 1)
    start = rise - width * (2.0 * left + right) / 6.0
    value = _pick(y, segment) + step * (start + step * (left / 2.0 + step * (right - left) / (6.0 * width)))
    return value, rising


def _natural_curvature(h: np.ndarray, slope: np.ndarray) -> np.ndarray:
    """Second derivatives at the knots: the tridiagonal system of each row, solved along the knots for all rows."""
    rows, segments = h.shape
    curvature = np.zeros((rows, segments + 1))
    upper = np.zeros((rows, segments + 1))
    for knot in range(1, segments):  # elimination downwards; the loop runs over knots, not over cores
        before, after = h[:, knot - 1], h[:, knot]
        pivot = 2.0 * (before + after) - before * upper[:, knot - 1]
        upper[:, knot] = after / pivot
        right = 6.0 * (slope[:, knot] - slope[:, knot - 1])
        curvature[:, knot] = (right - before * curvature[:, knot - 1]) / pivot
    for knot in range(segments - 1, 0, -1):
        curvature[:, knot] -= upper[:, knot] * curvature[:, knot + 1]
    return curvature


def _lowest_slope(h: np.ndarray, slope: np.ndarray, curvature: np.ndarray) -> np.ndarray:
    """Lowest first derivative within each segment, where the second derivative runs straight from end to end."""
    left, right = curvature[:, :-1], curvature[:, 1:]
    at_left = slope - h * (2.0 * left + right) / 6.0
    at_right = slope + h * (left + 2.0 * right) / 6.0
    low = np.minimum(at_left, at_right)
    turns = (left < 0) & (right > 0)
    share = np.divide(left, left - right, out=np.zeros_like(left), where=turns)
    return np.where(turns, np.minimum(low, at_left + 0.5 * left * share * h), low)


def monotone_cubic_at(x: np.ndarray, y: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Interpolate each row by a piecewise cubic that rises wherever its knots do.

    Parameters
    ----------
    x, y : ndarray of float, shape (rows, knots)
        Knots; x strictly rising along each row, at least three knots.
    at : ndarray of float, shape (rows,)
        Where to read each row, within its knots.

    References
    ----------
    Fritsch and Butland (1984) SIAM Journal on Scientific and Statistical Computing 5:300-304 (from memory).
    """
    h = np.diff(x, axis=1)
    slope = np.diff(y, axis=1) / h
    knot = np.zeros_like(x)
    knot[:, 1:-1] = _inner_slopes(h, slope)
    knot[:, 0] = _end_slope(h[:, 0], h[:, 1], slope[:, 0], slope[:, 1])
    knot[:, -1] = _end_slope(h[:, -1], h[:, -2], slope[:, -1], slope[:, -2])
    segment = _segment(x, at)
    width, rise = _pick(h, segment), _pick(slope, segment)
    left, right = _pick(knot, segment), _pick(knot, segment + 1)
    step = at - _pick(x, segment)
    square = (3.0 * rise - 2.0 * left - right) / width
    cube = (left + right - 2.0 * rise) / width**2
    return _pick(y, segment) + step * (left + step * (square + step * cube))


def _inner_slopes(h: np.ndarray, slope: np.ndarray) -> np.ndarray:
    before, after = slope[:, :-1], slope[:, 1:]
    w_before = h[:, :-1] + 2.0 * h[:, 1:]
    w_after = 2.0 * h[:, :-1] + h[:, 1:]
    same = before * after > 0
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = (w_before + w_after) / (w_before / before + w_after / after)
    return np.where(same, mean, 0.0)


def _end_slope(h0: np.ndarray, h1: np.ndarray, slope0: np.ndarray, slope1: np.ndarray) -> np.ndarray:
    """One-sided three-point slope at an end, kept from turning against the first segment."""
    value = ((2.0 * h0 + h1) * slope0 - h0 * slope1) / (h0 + h1)
    value = np.where(np.sign(value) != np.sign(slope0), 0.0, value)
    steep = (np.sign(slope0) != np.sign(slope1)) & (np.abs(value) > 3.0 * np.abs(slope0))
    return np.where(steep, 3.0 * slope0, value)


def _segment(x: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Find the segment of each row that holds ``at``."""
    return (x[:, 1:-1] <= at[:, None]).sum(axis=1)


def _pick(values: np.ndarray, column: np.ndarray) -> np.ndarray:
    return values[np.arange(len(values)), column]
