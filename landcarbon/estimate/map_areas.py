"""Areas of land classes from sample points: behind a map with errors, or by plain proportions.

Pure functions. A map counted by its pixels gives areas with the map's errors in them; reference points inside each map
class tell how large those are.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.errors import UserError

__all__ = ["MapAreas", "adjusted_areas", "area_by_grid", "area_by_proportion"]

MIN_POINTS = 2  # a variance needs two observations


@dataclass(frozen=True)
class MapAreas:
    """Adjusted areas and accuracies; one entry per class, standard errors in the same units.

    Attributes
    ----------
    area, area_se : ndarray
        Area of each reference class, unit of the mapped areas.
    users, users_se : ndarray
        User's accuracy of each map class: share of the class on the map that is so on the ground.
    producers, producers_se : ndarray
        Producer's accuracy of each reference class: share of the class on the ground that the map shows.
    overall, overall_se : float
        Share of the whole area that is mapped right.
    proportions : ndarray
        Estimated share of the whole area in each cell, rows map classes, columns reference classes.
    """

    area: np.ndarray
    area_se: np.ndarray
    users: np.ndarray
    users_se: np.ndarray
    producers: np.ndarray
    producers_se: np.ndarray
    overall: float
    overall_se: float
    proportions: np.ndarray


def adjusted_areas(matrix: ArrayLike, mapped_area: ArrayLike) -> MapAreas:
    """Estimate areas and accuracies from a sample of points stratified by map class.

    Parameters
    ----------
    matrix : array_like
        Counts of points, rows map classes, columns reference classes in the same order.
    mapped_area : array_like
        Area of each map class, any unit.

    Returns
    -------
    MapAreas

    Raises
    ------
    UserError
        If the shapes do not fit or a map class has fewer than two points.

    Notes
    -----
    With W_i the share of map class i and p_ij = n_ij / n_i the area of reference class j is A sum_i W_i p_ij, its
    variance A^2 sum_i W_i^2 p_ij (1 - p_ij) / (n_i - 1). Producer's accuracy is a ratio of two estimated areas.

    References
    ----------
    .. [1] Olofsson, P., Foody, G. M., Stehman, S. V. & Woodcock, C. E. (2013). Making better use of accuracy data in
       land change studies. Remote Sensing of Environment 129, 122-131: equations 9 to 16.
    .. [2] Olofsson, P. et al. (2014). Good practices for estimating area and assessing accuracy of land change.
       Remote Sensing of Environment 148, 42-57: equations 5 to 11.
    """
    counts, mapped = _matrix(matrix, mapped_area)
    points = counts.sum(axis=1)
    whole = mapped.sum()
    weight = (mapped / whole)[:, None]
    share = counts / points[:, None]
    spread = share * (1.0 - share) / (points[:, None] - 1.0)  # variance of p_ij
    proportions = weight * share
    ground = proportions.sum(axis=0)
    right = np.diag(share)
    with np.errstate(divide="ignore", invalid="ignore"):
        producers = np.diag(proportions) / ground
        # deviations of a ratio: points of the class count with 1 - P if mapped right, with -P if not
        off = weight**2 * spread * producers**2
        np.fill_diagonal(off, weight[:, 0] ** 2 * np.diag(spread) * (1.0 - producers) ** 2)
        producers_se = np.sqrt(off.sum(axis=0)) / ground
    return MapAreas(
        area=whole * ground,
        area_se=whole * np.sqrt((weight**2 * spread).sum(axis=0)),
        users=right,
        users_se=np.sqrt(np.diag(spread)),
        producers=producers,
        producers_se=producers_se,
        overall=float(np.diag(proportions).sum()),
        overall_se=float(np.sqrt((weight[:, 0] ** 2 * np.diag(spread)).sum())),
        proportions=proportions,
    )


def _matrix(matrix: ArrayLike, mapped_area: ArrayLike) -> tuple[np.ndarray, np.ndarray]:
    counts, mapped = np.asarray(matrix, dtype=float), np.asarray(mapped_area, dtype=float)
    if counts.ndim != 2 or counts.shape[0] != counts.shape[1] or mapped.shape != counts.shape[:1]:
        raise UserError(
            f"an error matrix of shape {counts.shape} with {mapped.size} mapped areas",
            remedy="Give as many rows as columns, in the same order, and one mapped area per row.",
        )
    if not (counts >= 0).all() or not (mapped >= 0).all() or not mapped.sum() > 0:
        raise UserError("counts and mapped areas must not be negative or all zero", remedy="Correct the table.")
    few = np.flatnonzero(counts.sum(axis=1) < MIN_POINTS)
    if few.size:
        raise UserError(
            f"map class in row {few[0] + 1} has fewer than {MIN_POINTS} points",
            remedy="Place more points in the class or merge it with another.",
        )
    return counts, mapped


def area_by_proportion(points: ArrayLike, total_area: float) -> tuple[np.ndarray, np.ndarray]:
    """Estimate areas of classes from points spread over an area of known size.

    Parameters
    ----------
    points : array_like
        Number of points that fell into each class; together all points.
    total_area : float
        Area that the points were spread over, any unit.

    Returns
    -------
    area, se : ndarray
        A_i = p_i A and A sqrt(p_i (1 - p_i) / (n - 1)), unit of ``total_area``; the error is missing with a single
        point.

    References
    ----------
    .. [1] IPCC (2006). 2006 IPCC Guidelines for National Greenhouse Gas Inventories, volume 4, chapter 3, annex 3A.3
       (area estimation via proportions).
    """
    counts = np.asarray(points, dtype=float)
    number = counts.sum()
    if not (counts >= 0).all() or not number > 0:
        raise UserError("counts of points must not be negative or all zero", remedy="Correct the counts.")
    share = counts / number
    spread = share * (1.0 - share) / (number - 1.0) if number >= MIN_POINTS else np.full(share.shape, np.nan)
    return total_area * share, total_area * np.sqrt(spread)


def area_by_grid(points: ArrayLike, spacing_m: float) -> np.ndarray:
    """Estimate areas of classes as points of a square grid times the area one point stands for.

    Parameters
    ----------
    points : array_like
        Points of the grid in each class.
    spacing_m : float
        Distance between neighbours [m].

    Returns
    -------
    ndarray
        Area [ha].

    References
    ----------
    .. [1] IPCC (2006). 2006 IPCC Guidelines for National Greenhouse Gas Inventories, volume 4, chapter 3, annex 3A.3
       (direct estimation of area).
    """
    return np.asarray(points, dtype=float) * spacing_m**2 / M2_PER_HECTARE
