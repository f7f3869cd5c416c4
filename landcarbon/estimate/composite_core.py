"""Composite figures of all pools of one survey, or of one change, brought to the totals of the strata.

Symbols are those of ``docs/estimation.md``. Shapes: parcels P, pools J, groups G (strata, and a last one for parcels of
no stratum of their own).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.benchmark import Benchmarked, benchmark
from landcarbon.estimate.composite_model import Direct, Pool, compose_pool
from landcarbon.estimate.composite_plots import Evidence, Places
from landcarbon.estimate.smoothing import rule, smooth_variance

__all__ = [
    "COMPOSITE",
    "DIRECT",
    "FLAT",
    "LEVEL",
    "MISSING",
    "SYNTHETIC",
    "WHOLE",
    "Composed",
    "Published",
    "compose",
    "group_of",
    "sum_of_pools",
]

# how a figure came about
MISSING, DIRECT, COMPOSITE, SYNTHETIC, LEVEL, FLAT, WHOLE = range(7)


@dataclass(frozen=True)
class Published:
    """Figures as published, of the parcels and of their groups; the last column is ``all``.

    Attributes
    ----------
    density, variance : ndarray
        Direct figures of the parcels [t C/ha], NaN where there is none; shape (P, J + 1).
    level, level_variance, level_df : ndarray
        Those of the groups, NaN where not estimable or where there is no such row; shape (G, J + 1).
    total : ndarray
        Area times level as published [t C]; shape (G, J + 1).
    area_ha : ndarray
        Area the figure of the group speaks for [ha]; shape (G, J + 1).
    plots : ndarray
        Plots of the group; shape (G, J + 1).
    """

    density: np.ndarray
    variance: np.ndarray
    level: np.ndarray
    level_variance: np.ndarray
    level_df: np.ndarray
    total: np.ndarray
    area_ha: np.ndarray
    plots: np.ndarray


@dataclass(frozen=True)
class Composed:
    """Result of one survey, or of one change.

    Attributes
    ----------
    value, mse, df : ndarray
        Figures that add up, with ``all`` last; shape (P, J + 1).
    kind : ndarray of int
        How each came about; shape (P, J).
    direct, direct_variance, smoothed : ndarray
        Direct figure, its variance as published, and smoothed; shape (P, J).
    pools : list of Pool
        Predictions before the benchmark.
    made : Benchmarked
        The benchmark.
    tiled : ndarray of bool
        Whether the areas of the parcels add up to that of the group; shape (G, J).
    included, estimable : ndarray of bool
        Pools that ``all`` holds, and those of which the group has a figure; shape (G, J).
    scale : ndarray
        Published variances to the variance function; shape (J,).
    raised : ndarray of bool
        Prediction that was below zero and set to zero; shape (P, J).
    """

    value: np.ndarray
    mse: np.ndarray
    df: np.ndarray
    kind: np.ndarray
    direct: np.ndarray
    direct_variance: np.ndarray
    smoothed: np.ndarray
    pools: list[Pool]
    made: Benchmarked
    tiled: np.ndarray
    included: np.ndarray
    estimable: np.ndarray
    scale: np.ndarray
    raised: np.ndarray


def group_of(places: Places) -> np.ndarray:
    """Group of each parcel: its stratum, the only stratum if there is one, else the last group."""
    if len(places.strata) == 1:
        return np.zeros(len(places.parcels), dtype=np.int64)
    return places.stratum


def compose(
    published: Published,
    evidence: Evidence,
    places: Places,
    covariates: np.ndarray,
    names: list[str],
    *,
    positive: bool,
) -> Composed:
    """Make the composite figures.

    Parameters
    ----------
    published : Published
        Direct figures and totals.
    evidence : Evidence
        What the plots tell.
    places : Places
        Parcels and strata.
    covariates : ndarray
        Raster means by parcel; shape (P, Q).
    names : list of str
        Of the covariates.
    positive : bool
        Whether figures must not be negative.
    """
    group = group_of(places)
    direct, own, smoothed, scale = _direct(published, evidence, group)
    flat = _flat(published, evidence, smoothed)
    pools = []
    for pool in range(direct.shape[1]):
        given = Direct(
            density=direct[:, pool],
            variance=smoothed[:, pool],
            df=evidence.df[:, pool],
            plots=evidence.plots[:, pool],
            between=np.where(evidence.between[:, pool] > 0, evidence.between[:, pool], np.nan),
            scale=_scale_of_groups(evidence.scale[:, pool], group),
            group=group,
            area_ha=places.area_ha,
            level=published.level[:, pool],
            level_variance=published.level_variance[:, pool],
            covariates=covariates,
            names=names,
            labels=[*places.strata, ""],
        )
        pools.append(_unchanged(given) if flat[pool] else compose_pool(given))
    tiled = _tiled(published, places, group)
    made, raised = _benchmarked(pools, published, places, tiled, positive)
    df = np.stack([pool.df for pool in pools], axis=1)
    known = np.isfinite(published.level[:, :-1])
    included = known | ~known.any(axis=1, keepdims=True)
    whole = sum_of_pools(made.value, made.mse, df, included[group], evidence.correlation)
    composed = Composed(
        value=np.column_stack([made.value, whole[0]]),
        mse=np.column_stack([made.mse, whole[1]]),
        df=np.column_stack([df, whole[2]]),
        kind=_kinds(pools, np.isfinite(made.value), np.isfinite(direct), flat),
        direct=direct,
        direct_variance=own,
        smoothed=smoothed,
        pools=pools,
        made=made,
        tiled=tiled,
        included=included,
        estimable=known,
        scale=scale,
        raised=raised,
    )
    return _whole_strata(composed, published, group)


def _benchmarked(
    pools: list[Pool], published: Published, places: Places, tiled: np.ndarray, positive: bool
) -> tuple[Benchmarked, np.ndarray]:
    """Bring predictions to the totals of the groups; also where one below zero was raised first."""
    group = group_of(places)
    stop = _left_out(published, group)
    value = np.where(stop, np.nan, np.stack([pool.value for pool in pools], axis=1))
    mse = np.where(stop, np.nan, np.stack([pool.mse for pool in pools], axis=1))
    raised = np.full_like(stop, positive) & (value < 0)
    made = benchmark(
        np.where(raised, 0.0, value),
        mse,
        area_ha=places.area_ha,
        group=group,
        total=np.where(tiled, published.total[:, :-1], np.nan),
        discrepancy=np.stack([pool.discrepancy for pool in pools], axis=1),
        positive=positive,
    )
    return made, raised


def sum_of_pools(
    value: np.ndarray, mse: np.ndarray, df: np.ndarray, included: np.ndarray, correlation: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Add the pools of each parcel up, with the mean squared error of the sum.

    Parameters
    ----------
    value, mse, df : ndarray
        Shape (P, J). A pool without a mean squared error (a default factor) adds none.
    included : ndarray of bool
        Pools that count; shape (P, J).
    correlation : ndarray
        Between the pools; shape (J, J), positive semi-definite.

    Returns
    -------
    value, mse, df : ndarray
        Shape (P,). NaN where a pool that counts is missing, or none counts.

    Notes
    -----
    MSE = sum over pools j, k of r_jk sqrt(MSE_j MSE_k), at most (sum of sqrt(MSE_j))^2. Degrees of freedom are the
    mean of those of the pools weighted by MSE (harmonic): adding pools does not add plots.
    """
    there = included & np.isfinite(value)
    complete = (there == included).all(axis=1) & included.any(axis=1)
    told = there & np.isfinite(mse)
    deviation = np.sqrt(np.where(told, np.maximum(mse, 0.0), 0.0))
    spread = np.maximum(np.einsum("pj,jk,pk->p", deviation, correlation, deviation), 0.0)
    spread = np.minimum(spread, deviation.sum(axis=1) ** 2)
    weight = deviation**2
    with np.errstate(divide="ignore", invalid="ignore"):
        free = weight.sum(axis=1) / np.where(told, weight / df, 0.0).sum(axis=1)
    free = np.where(np.isfinite(free), free, np.where(told, df, np.inf).min(axis=1, initial=np.inf))
    total = np.where(there, value, 0.0).sum(axis=1)
    certain = complete & told.any(axis=1)
    return (
        np.where(complete, total, np.nan),
        np.where(certain, spread, np.nan),
        np.where(certain & np.isfinite(free), free, np.nan),
    )


def _direct(
    published: Published, evidence: Evidence, group: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Direct figure, variance as published, smoothed variance, and the scale between variances."""
    density = np.where(evidence.whole & np.isfinite(published.density[:, :-1]), published.density[:, :-1], np.nan)
    own = np.where(np.isfinite(density), published.variance[:, :-1], np.nan)
    direct = np.where(np.isfinite(density), density, evidence.density)
    plots = evidence.plots.astype(float)
    whole = published.plots[group][:, :-1].astype(float)
    with np.errstate(divide="ignore", invalid="ignore"):
        correction = plots * (whole - 1.0) / ((plots - 1.0) * whole)
    correction = np.where(np.isfinite(correction) & (correction > 1.0), correction, 1.0)
    smoothed, scale = smooth_variance(own, np.maximum(plots - 1.0, 0.0), evidence.variance, correction)
    return direct, own, np.where(smoothed > 0, smoothed, np.nan), scale


def _scale_of_groups(scale: np.ndarray, group: np.ndarray) -> np.ndarray:
    """Scale of the group of each parcel, root mean square over its parcels; 1 where none is known."""
    known = np.isfinite(scale) & (scale > 0)
    number = np.bincount(group, weights=known)
    total = np.bincount(group, weights=np.where(known, scale, 0.0) ** 2)
    mean = np.sqrt(np.divide(total, number, out=np.ones_like(total), where=number > 0))
    return np.asarray(mean[group])


def _flat(published: Published, evidence: Evidence, smoothed: np.ndarray) -> np.ndarray:
    """Pools that are the same everywhere: default factors, or equal on all plots of each stratum; shape (J,)."""
    level, variance = published.level[:, :-1], published.level_variance[:, :-1]
    known = np.isfinite(level)
    factor = known.any(axis=0) & (~known | ~np.isfinite(variance)).all(axis=0)
    equal = ~np.isfinite(smoothed).any(axis=0) & ~(evidence.between > 0).any(axis=0)
    return factor | equal


def _unchanged(given: Direct) -> Pool:
    """Pass a pool through: the figure of the group, else of the parcel, without an error."""
    unknown = np.full(len(given.density), np.nan)
    level = given.level[given.group]
    value = np.where(np.isfinite(level), level, np.where(given.plots > 1, given.density, np.nan))
    return Pool(
        value=value,
        mse=unknown,
        df=unknown,
        synthetic=unknown,
        gamma=np.zeros(len(unknown)),
        discrepancy=np.zeros(len(given.level)),
        models=[],
        by_model=np.full(len(unknown), -1),
    )


def _left_out(published: Published, group: np.ndarray) -> np.ndarray:
    """Pools without a figure in a group that has one of another pool: the total of the group does not hold them."""
    known = np.isfinite(published.level[:, :-1])
    stop = ~known & known.any(axis=1, keepdims=True)
    return stop[group]


def _tiled(published: Published, places: Places, group: np.ndarray) -> np.ndarray:
    """Whether the parcels of a group cover what its total speaks for; shape (G, J)."""
    groups = len(published.total)
    area = np.bincount(group, weights=places.area_ha, minlength=groups)[:, None]
    whole = published.area_ha[:, :-1]
    return np.asarray(np.abs(area - whole) <= rule("area_tolerance") * whole) & (area > 0)


def _kinds(pools: list[Pool], known: np.ndarray, has: np.ndarray, flat: np.ndarray) -> np.ndarray:
    gamma = np.stack([pool.gamma for pool in pools], axis=1)
    modelled = np.stack([pool.by_model >= 0 for pool in pools], axis=1)
    kind = np.where(has & (gamma > 0), COMPOSITE, SYNTHETIC)
    kind = np.where(gamma >= rule("direct_weight"), DIRECT, kind)
    kind = np.where(modelled, kind, LEVEL)
    kind = np.where(flat, FLAT, kind)
    return np.where(known, kind, MISSING)


def _whole_strata(composed: Composed, published: Published, group: np.ndarray) -> Composed:
    """Give a parcel that is its whole stratum the figures of the stratum, error and all."""
    alone = np.bincount(group, minlength=len(published.level))[group] == 1
    hit = alone[:, None] & composed.tiled[group] & np.isfinite(published.level[group][:, :-1])
    hit &= composed.kind != FLAT
    if not hit.any():
        return composed
    every = (hit | ~composed.included[group] | (composed.kind == FLAT)).all(axis=1) & hit.any(axis=1)
    wide = np.column_stack([hit, every & np.isfinite(published.level[group, -1])])
    return replace(
        composed,
        value=np.where(wide, published.level[group], composed.value),
        mse=np.where(wide, published.level_variance[group], composed.mse),
        df=np.where(wide, published.level_df[group], composed.df),
        kind=np.where(hit, WHOLE, composed.kind),
    )
