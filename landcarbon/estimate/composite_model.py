"""Composite figures of all parcels for the pools of one survey, or of one change: model, prediction, benchmark.

Symbols are those of ``docs/estimation.md``. Shapes: parcels P, pools J, groups G (strata, and a last one for parcels of
no stratum of their own).
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.small_area import (
    FayHerriot,
    fit_fay_herriot,
    fit_with_variance,
    independent_columns,
    predict_areas,
)
from landcarbon.estimate.smoothing import rule

__all__ = ["Direct", "Fitted", "Pool", "compose_pool", "fit_to_scale"]

_ALIKE = 1e-3  # scale of groups that do not differ at all, so that they do not tell how much others do
_LEAST = 1e-9  # a smoothed variance below this share of the typical one is raised to it


@dataclass(frozen=True)
class Direct:
    """One pool before the model.

    Attributes
    ----------
    density, variance : ndarray
        Direct figure and smoothed sampling variance; NaN where there is none; shape (P,).
    df : ndarray
        Degrees of freedom of ``variance``; shape (P,).
    plots : ndarray
        Plots of each parcel; shape (P,).
    between : ndarray
        Variance between single plots of the parcel's stratum; shape (P,).
    scale : ndarray
        What differences between parcels of a group are proportional to, above 0 and the same for all parcels of a
        group; in any unit; shape (P,).
    group : ndarray of int
        Group of each parcel; shape (P,).
    area_ha : ndarray
        Shape (P,).
    level, level_variance : ndarray
        Figure of each group as published, and its variance; NaN where there is none; shape (G,).
    covariates : ndarray
        Raster means by parcel, NaN where they lack; shape (P, Q).
    names, labels : list of str
        Of the covariates and of the groups.
    """

    density: np.ndarray
    variance: np.ndarray
    df: np.ndarray
    plots: np.ndarray
    between: np.ndarray
    scale: np.ndarray
    group: np.ndarray
    area_ha: np.ndarray
    level: np.ndarray
    level_variance: np.ndarray
    covariates: np.ndarray
    names: list[str]
    labels: list[str]


@dataclass(frozen=True)
class Fitted:
    """One model and the parcels it speaks for.

    Attributes
    ----------
    fit : FayHerriot
        The model.
    rows : ndarray of int
        Parcels it was fitted on.
    served : ndarray of int
        Parcels it predicts, those of ``rows`` first where it predicts them.
    design : ndarray
        Covariates of ``served``.
    refvar : ndarray
        Variance between parcels of the groups of ``served``.
    columns : list of str
        Names of the coefficients.
    bound : bool
        The variance component is a bound, as parcels were too few for a model.
    dropped : list of str
        Covariates left out as they say nothing new, or nothing at all.
    """

    fit: FayHerriot
    rows: np.ndarray
    served: np.ndarray
    design: np.ndarray
    refvar: np.ndarray
    columns: list[str]
    bound: bool
    dropped: list[str] = field(default_factory=list)

    @property
    def share_explained(self) -> float:
        """1 less the weighted sum of squares about the model over that about the weighted mean."""
        fit = self.fit
        weight = 1.0 / fit.total
        with np.errstate(divide="ignore", invalid="ignore"):
            direct = np.where(fit.gamma > 0, (fit.eblup - (1.0 - fit.gamma) * fit.synthetic) / fit.gamma, np.nan)
        mean = (weight * direct).sum() / weight.sum()
        whole = float((weight * (direct - mean) ** 2).sum())
        left = float((weight * (direct - fit.synthetic) ** 2).sum())
        return 1.0 - left / whole if whole > 0 else np.nan


@dataclass(frozen=True)
class Pool:
    """Composite figures of one pool before benchmarking; shapes (P,).

    Attributes
    ----------
    value, mse, df : ndarray
        Prediction [t C/ha], mean squared error, degrees of freedom; NaN where there is no figure.
    synthetic, gamma : ndarray
        Model part, and weight of the plots.
    discrepancy : ndarray
        Variance of the total of a group less the sum of its parcels [(t C)^2]; shape (G,).
    models : list of Fitted
        That were used.
    by_model : ndarray of int
        Which one serves each parcel; -1 for the mean of the group as published.
    """

    value: np.ndarray
    mse: np.ndarray
    df: np.ndarray
    synthetic: np.ndarray
    gamma: np.ndarray
    discrepancy: np.ndarray
    models: list[Fitted]
    by_model: np.ndarray


def compose_pool(given: Direct) -> Pool:
    """Predict one pool of every parcel.

    Parameters
    ----------
    given : Direct
        The pool before the model.

    Returns
    -------
    Pool
        Parcels whose covariates are all known are predicted with them, if such parcels with plots are many enough;
        the others from groups alone. A parcel of a group in which no parcel has plots gets the figure of the group.
    """
    given = _with_positive_variance(given)
    has = np.isfinite(given.density) & np.isfinite(given.variance)
    count = len(given.density)
    models: list[Fitted] = []
    by_model = np.full(count, -1)
    plain = _fitted(given, has, np.ones(count, dtype=bool), [])
    if plain is not None:
        models.append(plain)
        by_model[plain.served] = 0
    full = np.isfinite(given.covariates).all(axis=1) if given.names else np.zeros(count, dtype=bool)
    if plain is not None and not plain.bound and full.any():
        wide = _fitted(given, has & full, full, given.names)
        if wide is None:
            models[0] = replace(plain, dropped=given.names)
        elif not wide.bound:
            models.append(wide)
            by_model[wide.served] = 1
    return _predicted(given, has, models, by_model)


def _with_positive_variance(given: Direct) -> Direct:
    usable = given.variance[np.isfinite(given.variance) & (given.variance > 0)]
    if not len(usable):
        return given
    floor = _LEAST * float(np.median(usable))
    variance = np.where(given.variance < floor, floor, given.variance)
    return replace(given, variance=variance)


def _fitted(given: Direct, has: np.ndarray, serve: np.ndarray, names: list[str]) -> Fitted | None:
    """Fit groups (and covariates) to the parcels of ``has``; None if there are none, or no covariate is left."""
    rows = np.flatnonzero(has)
    if not len(rows):
        return None
    groups = np.unique(given.group[rows])
    served = np.flatnonzero(serve & np.isin(given.group, groups))
    dummies = (given.group[:, None] == groups).astype(float)
    columns, dropped = [given.labels[group] for group in groups], []
    design = dummies
    if names:
        centre = given.covariates[rows].mean(axis=0)
        spread = given.covariates[rows].std(axis=0)
        scaled = (given.covariates - centre) / np.where(spread > 0, spread, 1.0)
        wide = np.concatenate([dummies, scaled], axis=1)
        kept = independent_columns(wide[rows])
        if len(kept) == len(groups):
            return None
        dropped = [name for at, name in enumerate(names) if at + len(groups) not in kept]
        design, columns = wide[:, kept], [(columns + names)[at] for at in kept]
    y, psi = given.density[rows], given.variance[rows]
    few = len(rows) - design.shape[1] < rule("residual_df")
    refvar = given.between[served]
    if few:
        fit = fit_with_variance(y, psi, design[rows], given.between[rows])
    else:
        scale = np.where(_alike(given, rows), _ALIKE, 1.0) * given.scale
        scale = scale / np.sqrt((scale[rows] ** 2).mean())
        fit = fit_to_scale(y, psi, design[rows], scale[rows], len(groups))
        refvar = fit.refvar[0] * (scale[served] / scale[rows[0]]) ** 2
    return Fitted(fit, rows, served, design[served], refvar, columns, few, dropped)


def _alike(given: Direct, rows: np.ndarray) -> np.ndarray:
    """Parcels of groups in which all direct figures are the same, as on bare land, if such parcels are many."""
    groups = len(given.level)
    number = np.bincount(given.group[rows], minlength=groups)
    high, low = np.full(groups, -np.inf), np.full(groups, np.inf)
    np.maximum.at(high, given.group[rows], given.density[rows])
    np.minimum.at(low, given.group[rows], given.density[rows])
    alike = (number >= rule("residual_df")) & (high - low <= _LEAST * np.abs(high))
    return np.asarray(alike[given.group])


def fit_to_scale(
    direct: np.ndarray, variance: np.ndarray, design: np.ndarray, scale: np.ndarray, groups: int
) -> FayHerriot:
    """Fit the model with a variance A scale^2 of each area, by REML, or adjusted REML where that gives zero.

    Parameters
    ----------
    direct, variance, design
        As for :func:`fit_fay_herriot`; the leading columns of ``design`` are groups.
    scale : ndarray
        Above 0, the same for all areas of a group; shape (m,).
    groups : int
        Number of groups.

    Returns
    -------
    FayHerriot
        In the unit of ``direct``; ``refvar`` is A scale^2, ``refvar_variance`` is that of A.

    Notes
    -----
    direct / scale has sampling variance variance / scale^2, covariates design / scale and one variance A, so that the
    plain model holds for it. Columns of groups are left at 1; their coefficients take the scale instead.
    """
    relative = np.column_stack([design[:, :groups], design[:, groups:] / scale[:, None]])
    fit = fit_fay_herriot(direct / scale, variance / scale**2, relative)
    if fit.refvar[0] <= 0:
        fit = fit_fay_herriot(direct / scale, variance / scale**2, relative, method="adjusted REML")
    factor = np.ones(design.shape[1])
    factor[:groups] = scale[design[:, :groups].argmax(axis=0)]
    return replace(
        fit,
        refvar=fit.refvar * scale**2,
        beta=fit.beta * factor,
        beta_cov=fit.beta_cov * np.outer(factor, factor),
        synthetic=fit.synthetic * scale,
        eblup=fit.eblup * scale,
        mse=fit.mse * scale**2,
        design=design,
        total=fit.total * scale**2,
    )


def _predicted(given: Direct, has: np.ndarray, models: list[Fitted], by_model: np.ndarray) -> Pool:
    count, groups = len(given.density), len(given.level)
    synthetic, mse = given.level[given.group], given.level_variance[given.group] + given.between
    value, gamma = synthetic.copy(), np.zeros(count)
    df = np.where(np.isfinite(given.df), np.maximum(given.df, 1.0), 1.0)
    refvar, contrast = given.between.copy(), np.zeros((groups, count))
    for number, model in enumerate(models):
        fit, mine = model.fit, by_model[model.served] == number
        served = model.served[mine]
        own = model.refvar[mine]
        synthetic[served], mse[served] = predict_areas(fit, model.design[mine], own)
        value[served], refvar[served] = synthetic[served], own
        if not model.bound:
            df[served] = float(fit.residual_df)
        inside = by_model[model.rows] == number
        rows = model.rows[inside]
        value[rows], gamma[rows], mse[rows] = fit.eblup[inside], fit.gamma[inside], fit.mse[inside]
        plots = fit.gamma[inside] ** 2 * given.variance[rows]
        if not model.bound:  # else both parts rest on the same variance between plots
            df[rows] = _joint_df(plots, given.df[rows], mse[rows] - plots, df[rows])
        contrast += _weights(given, model, served, model.design[mine], rows, fit.gamma[inside])
    total = given.variance + refvar
    discrepancy = _discrepancy(given, has, contrast, total, by_model)
    return Pool(value, mse, df, synthetic, np.where(has, gamma, 0.0), discrepancy, models, by_model)


def _joint_df(first: np.ndarray, first_df: np.ndarray, second: np.ndarray, second_df: np.ndarray) -> np.ndarray:
    """Satterthwaite's degrees of freedom of two parts of a mean squared error."""
    share = np.divide(first, first + second, out=np.zeros_like(first), where=first + second > 0)
    share = np.clip(share, 0.0, 1.0)
    inverse = share**2 / np.maximum(first_df, 1.0) + (1.0 - share) ** 2 / second_df
    return np.asarray(1.0 / inverse)


def _weights(
    given: Direct, model: Fitted, served: np.ndarray, design: np.ndarray, rows: np.ndarray, gamma: np.ndarray
) -> np.ndarray:
    """Weight of each direct figure in the sum of area times prediction, by group; shape (G, P)."""
    groups = len(given.level)
    area = np.nan_to_num(given.area_ha)
    left = area.copy()
    left[rows] *= 1.0 - gamma
    total = group_sum(left[served, None] * design, given.group[served], groups)
    weighted = model.fit.design / model.fit.total[:, None]
    found = np.zeros((groups, len(area)))
    found[:, model.rows] = total @ model.fit.beta_cov @ weighted.T
    found[given.group[rows], rows] += area[rows] * gamma
    return found


def _discrepancy(
    given: Direct, has: np.ndarray, contrast: np.ndarray, total: np.ndarray, by_model: np.ndarray
) -> np.ndarray:
    """Variance of the total of each group, taken as the mean of its plots, less the sum of its predictions."""
    groups = len(given.level)
    area = np.nan_to_num(given.area_ha)
    plots = np.where(has & (by_model >= 0), given.plots, 0).astype(float)
    by_group = np.bincount(given.group, weights=plots, minlength=groups)
    whole = np.bincount(given.group, weights=area, minlength=groups)
    share = np.divide(whole, by_group, out=np.zeros(groups), where=by_group > 0)
    wanted = np.zeros_like(contrast)
    wanted[given.group, np.arange(len(area))] = plots * share[given.group]
    return ((wanted - contrast) ** 2 * np.where(has, np.nan_to_num(total), 0.0)).sum(axis=1)
