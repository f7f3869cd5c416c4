"""Bring the figures of parcels to the total of their stratum."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.groups import group_sum

__all__ = ["ADDED", "AS_IS", "SCALED", "Benchmarked", "benchmark"]

AS_IS, ADDED, SCALED = 0, 1, 2  # how the parcels of a group came to their total


@dataclass(frozen=True)
class Benchmarked:
    """Figures that add up. Parcels P, pools J, groups G.

    Attributes
    ----------
    value, mse : ndarray
        Density [t C/ha] and its mean squared error; shape (P, J).
    adjustment : ndarray
        What was added to each figure; 0 in a group without a total; shape (P, J).
    how : ndarray of int
        ``AS_IS`` (no total, or a figure or area missing), ``ADDED``, or ``SCALED``; shape (G, J).
    """

    value: np.ndarray
    mse: np.ndarray
    adjustment: np.ndarray
    how: np.ndarray


def benchmark(
    value: np.ndarray,
    mse: np.ndarray,
    *,
    area_ha: np.ndarray,
    group: np.ndarray,
    total: np.ndarray,
    discrepancy: np.ndarray,
    positive: bool,
) -> Benchmarked:
    """Adjust figures so that area times figure adds up to the total of each group.

    Parameters
    ----------
    value, mse : ndarray
        Figures of the parcels [t C/ha] and their mean squared errors; shape (P, J). A mean squared error that is
        unknown counts as 0.
    area_ha : ndarray
        Area of each parcel [ha], not negative; shape (P,).
    group : ndarray of int
        Group of each parcel; shape (P,).
    total : ndarray
        Total of each group [t C]; NaN where there is none to be met; shape (G, J).
    discrepancy : ndarray
        Variance of the total less the sum of the parcels [(t C)^2]; shape (G, J).
    positive : bool
        Whether figures must not be negative.

    Returns
    -------
    Benchmarked

    Notes
    -----
    With d the total less the sum, value + l d with l = a MSE / sum(a^2 MSE) changes the figures least, each measured by
    its MSE. If a figure became negative, all figures of the group are multiplied by the same factor instead (l = value
    / sum(a value)). As d is uncorrelated with the error of a best linear unbiased predictor, the mean squared error
    grows by l^2 var(d).

    References
    ----------
    .. [1] Pfeffermann, D., Barnard, C. H. (1991). Journal of Business and Economic Statistics 9, 73-84.
    .. [2] Wang, J., Fuller, W. A., Qu, Y. (2008). Survey Methodology 34, 29-36.
    .. [3] Rao, J. N. K., Molina, I. (2015). Small Area Estimation, 2nd ed., Wiley, section 6.4.6 (section from memory).
    """
    groups = len(total)
    area = area_ha[:, None]
    known = np.isfinite(value) & np.isfinite(area)
    complete = group_sum(~known, group, groups) == 0
    plain = np.where(known, value, 0.0)
    size = np.where(np.isfinite(area), area, 0.0)
    wanted = np.isfinite(total) & complete & (group_sum(size, group, groups) > 0)

    def gap(figures: np.ndarray) -> np.ndarray:
        return np.where(wanted, total - group_sum(size * figures, group, groups), 0.0)

    def per_unit(shape: np.ndarray) -> np.ndarray:
        whole = group_sum(size * shape, group, groups)
        return np.divide(shape, whole[group], out=np.zeros_like(shape), where=whole[group] > 0)

    weight = np.where(np.isfinite(mse) & (mse > 0), mse, 0.0)
    none = group_sum(size * weight, group, groups) <= 0
    by_mse = per_unit(np.where(none[group], 1.0, size * weight / _largest(weight, size)))
    by_value = per_unit(np.maximum(plain, 0.0))
    moved = plain + by_mse * gap(plain)[group]
    below = group_sum(known & (moved < 0), group, groups) > 0
    scaled = np.full_like(below, positive) & below & wanted & (group_sum(size * (plain > 0), group, groups) > 0)
    share = np.where(scaled[group], by_value, by_mse)
    start = np.where(scaled[group], np.maximum(plain, 0.0), plain)
    moved = start + share * gap(start)[group]
    moved = moved + share * gap(moved)[group]  # what rounding left
    spread = np.where(wanted, np.nan_to_num(discrepancy), 0.0)
    how = np.where(wanted, np.where(scaled, SCALED, ADDED), AS_IS)
    moved = np.where(wanted[group], moved, plain)
    return Benchmarked(
        value=np.where(known, moved, value),
        mse=mse + np.where(wanted[group], share**2 * spread[group], 0.0),
        adjustment=np.where(known, moved - plain, 0.0),
        how=how,
    )


def _largest(weight: np.ndarray, size: np.ndarray) -> np.ndarray:
    """Largest product of area and weight of each pool, so that none runs out of the range of a float; above 0."""
    most = (weight * size).max(axis=0, initial=0.0)
    return np.where(most > 0, most, 1.0)
