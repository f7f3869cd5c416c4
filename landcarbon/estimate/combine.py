"""Estimates of sums of parts, each part from its own plots: at one date, or as change between two."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.clusters import unit_counts
from landcarbon.estimate.difference import elapsed
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.joint import Joint, SumVariance, column_variances, joint_table, sum_variance
from landcarbon.estimate.pairs import Side, match_plots, side_of
from landcarbon.estimate.ratio import MIN_PLOTS, Cells, Sample, counts
from landcarbon.estimate.ratio import means as sample_means
from landcarbon.estimate.sums import Sums

__all__ = ["Plan", "StratumMeans", "SumEstimate", "estimate_sums", "plan_sums", "stratum_means"]


@dataclass(frozen=True)
class Plan:
    """What the sums of one survey, or of the change between two, are made of.

    Attributes
    ----------
    sums : Sums
        Pools and parts.
    area_ha : ndarray
        Area of each stratum [ha]; NaN if unknown.
    plots : tuple of ndarray
        Plots by stratum and part, for each date; shape (H, K).
    measured : ndarray of bool
        Part was measured at the date; shape (T, K).
    out : ndarray of bool
        Pool that is left out everywhere, as a part of it was not measured; shape (J,).
    allowed : ndarray of bool
        Strata in which every part of the pool of a part is estimable; shape (H, K).
    units : tuple of ndarray
        Sampling units by stratum and part, for each date; shape (H, K).
    near : bool
        Variance of strata and of the inventory from neighbouring plots.
    """

    sums: Sums
    area_ha: np.ndarray
    plots: tuple[np.ndarray, ...]
    measured: np.ndarray
    out: np.ndarray
    allowed: np.ndarray
    units: tuple[np.ndarray, ...] = ()
    near: bool = False

    @property
    def allowed_pool(self) -> np.ndarray:
        """Strata in which a pool is estimable; shape (H, J)."""
        return np.stack([self.allowed[:, row].all(axis=1) for row in self.sums.member], axis=1)


@dataclass(frozen=True)
class StratumMeans:
    """Mean of each stratum and part, to stand for parcels without plots of their own; shapes (H, K).

    Attributes
    ----------
    density : ndarray
        Mean, or mean change; NaN where not estimable.
    spread : ndarray
        Variance of a single unit about it, and of the mean itself, together.
    df : ndarray
        Degrees of freedom.
    days : ndarray
        Elapsed time [d].
    """

    density: np.ndarray
    spread: np.ndarray
    df: np.ndarray
    days: np.ndarray


@dataclass(frozen=True)
class SumEstimate:
    """Estimates of pools and of ``all`` (the last column) by domain; shapes (D, J + 1) unless stated.

    Attributes
    ----------
    density, variance, df : ndarray
        Mean or change [t C/ha], its variance, degrees of freedom; NaN where not estimable.
    plots : ndarray
        Smallest number of plots of a part, by date; shape (T, D, J + 1).
    paired : ndarray
        Smallest number of plots measured for a part at both dates.
    days, rate : ndarray
        Elapsed time [d], mean of the parts; sum of the changes of the parts, each by its own elapsed time [t C/ha/d].
    area_ha : ndarray
        Area that the strata which count have together [ha], for the whole inventory.
    apart : ndarray of bool
        Whether the parts rest on different plots.
    repeated : ndarray
        1 where all plots of the parts are in both dates, 0 where none is, else 0.5; NaN without plots of their own.
    part_plots : ndarray
        Plots by date and part; shape (T, D, K).
    borrowed : ndarray of bool
        Part is a mean of the stratum; shape (D, K).
    pool_known : ndarray of bool
        Pool is estimable; shape (D, J).
    part_units : ndarray
        Sampling units by date and part; shape (T, D, K).
    near : ndarray, optional
        Share of the variance pieces from neighbouring plots; None if they were not asked for.
    """

    density: np.ndarray
    variance: np.ndarray
    df: np.ndarray
    plots: np.ndarray
    paired: np.ndarray
    days: np.ndarray
    rate: np.ndarray
    area_ha: np.ndarray
    apart: np.ndarray
    repeated: np.ndarray
    part_plots: np.ndarray
    borrowed: np.ndarray
    pool_known: np.ndarray
    part_units: np.ndarray
    near: np.ndarray | None = None


@dataclass(frozen=True)
class _Parts:
    """Estimates by part of one level; shapes (D, K), ``plots`` and ``units`` (T, D, K)."""

    sides: tuple[Side, ...]
    domains: tuple[np.ndarray, ...]
    cells: Cells
    joint: Joint
    density: np.ndarray
    plots: np.ndarray
    units: np.ndarray
    paired: np.ndarray
    days: np.ndarray


@dataclass(frozen=True)
class _Borrowed:
    """Means of strata in place of parts; ``deviation`` and ``df`` have shape (C, K), the others (D, K)."""

    which: np.ndarray
    density: np.ndarray
    days: np.ndarray
    deviation: np.ndarray
    df: np.ndarray


def plan_sums(samples: tuple[Sample, ...], sums: Sums, area_ha: np.ndarray, *, near: bool = False) -> Plan:
    """Decide which pools and strata count, from what was measured where.

    Parameters
    ----------
    samples : tuple of Sample
        One survey, or the two that change is taken between.
    sums : Sums
        Pools and parts.
    area_ha : ndarray
        Area of each stratum [ha].
    near : bool
        Take the variance of strata and of the inventory from neighbouring plots.
    """
    strata, member = len(area_ha), sums.member
    plots = tuple(counts(sample, strata) for sample in samples)
    units = tuple(unit_counts(sample, strata) for sample in samples)
    measured = np.stack([count.sum(axis=0) > 0 for count in plots])
    # without any plot at a date nothing is missing in particular: the strata are not estimable
    missing = ~measured & measured.any(axis=1, keepdims=True)
    out = np.asarray((member & missing.any(axis=0)).any(axis=1))
    enough = np.logical_and.reduce([count >= MIN_PLOTS for count in units])
    pools = np.stack([enough[:, row].all(axis=1) for row in member], axis=1) & ~out
    return Plan(sums, area_ha, plots, measured, out, pools[:, sums.pool], units, near)


def stratum_means(samples: tuple[Sample, ...], plan: Plan) -> StratumMeans:
    """Means of strata with the variance of what a parcel without plots may hold.

    Notes
    -----
    The variance is V (1 + n), with V that of the mean: n V is the variance between plots. For change n is the larger
    number of plots of the two dates. With clusters n is still the number of plots, and n V is taken as if the plots
    were not in clusters: it stands for how much single plots differ.
    """
    strata = len(plan.area_ha)
    domains = tuple(sample.stratum for sample in samples)
    parts = _parts(samples, domains, strata, plan)
    number = len(plan.sums.parts)
    mean = column_variances(parts.joint, number)
    plots = np.max(plan.plots, axis=0)
    spread = mean.variance * (1.0 + plots)
    if parts.joint.lead is not None:
        alone = _parts(tuple(replace(sample, unit=None) for sample in samples), domains, strata, plan)
        spread = mean.variance + column_variances(alone.joint, number).variance * plots
    known = plan.allowed & np.isfinite(parts.density)
    return StratumMeans(np.where(known, parts.density, np.nan), spread, mean.df, parts.days)


def estimate_sums(
    samples: tuple[Sample, ...],
    domains: tuple[np.ndarray, ...],
    number: int,
    plan: Plan,
    *,
    means: StratumMeans | None = None,
    shown: np.ndarray | None = None,
    near: bool = False,
) -> SumEstimate:
    """Estimate pools and their sum for the domains of one level.

    Parameters
    ----------
    samples : tuple of Sample
        One survey, or the earlier and the later one.
    domains : tuple of ndarray of int
        Domain of each plot of the samples; -1 for none.
    number : int
        Number of domains.
    plan : Plan
        What counts.
    means : StratumMeans, optional
        To stand for parts that a domain has fewer than two plots of, where it has two plots of another part.
    shown : ndarray, optional
        Plots by date, domain and part to state, where not only those that enter the estimate.
    near : bool
        Take the variance from neighbouring plots; for domains made of whole strata.

    Returns
    -------
    SumEstimate
    """
    parts = _parts(samples, domains, number, plan, near=near)
    fewest = parts.units.min(axis=0)
    known = (fewest >= MIN_PLOTS) & np.isfinite(parts.density)
    borrowed = _borrow(parts, known, fewest, plan, means)
    member = plan.sums.member
    there = known | borrowed.which
    pool_known = np.stack([there[:, row].all(axis=1) for row in member], axis=1) & ~plan.out
    # parts of each sum by domain: those of the pool, then those of all pools that are known; shape (J + 1, D, K)
    within = np.concatenate([member[:, None, :] & pool_known.T[:, :, None], pool_known[:, plan.sums.pool][None]])
    share, area = _areas(plan, number, means)
    weight = np.where(within, share[:, None, :], 0.0)
    density = np.where(borrowed.which, borrowed.density, parts.density)
    days = np.where(borrowed.which, borrowed.days, parts.days)
    with np.errstate(divide="ignore", invalid="ignore"):
        rate = np.where(days == 0, np.nan, density / days)
    some = within.any(axis=2)
    own = within & known
    variance, df, apart, told = _variances(parts, own, within & borrowed.which, share, borrowed)
    counted = np.where(own.any(axis=2, keepdims=True), own, _of_sum(plan))

    def added(values: np.ndarray) -> np.ndarray:
        return np.where(some, (weight * np.where(within, values, 0.0)).sum(axis=2), np.nan).T

    stated = parts.plots if shown is None else shown

    def smallest(plots: np.ndarray) -> np.ndarray:
        return np.where(counted, plots, np.inf).min(axis=2).T.astype(np.int64)

    return SumEstimate(
        density=added(density),
        variance=np.where(some, variance, np.nan).T,
        df=np.where(some, df, np.nan).T,
        plots=np.stack([smallest(plots) for plots in stated]),
        paired=smallest(parts.paired),
        days=_mean_over(days, within),
        rate=added(rate),
        area_ha=area,
        apart=apart.T,
        repeated=_repeated(parts, own),
        part_plots=stated,
        borrowed=borrowed.which,
        pool_known=pool_known,
        part_units=parts.units,
        near=told.T if near else None,
    )


def _repeated(parts: _Parts, own: np.ndarray) -> np.ndarray:
    """Whether all (1), some (0.5) or no (0) plots of the parts of a sum repeat; shape (D, J + 1)."""
    always = (parts.plots == parts.paired).all(axis=0)
    all_repeat, none_repeats = (~own | always).all(axis=2), (~own | (parts.paired == 0)).all(axis=2)
    kind = np.where(all_repeat, 1.0, np.where(none_repeats, 0.0, 0.5))
    return np.where(own.any(axis=2), kind, np.nan).T


def _of_sum(plan: Plan) -> np.ndarray:
    """Parts of each sum whose plots are counted where it is not estimable; shape (J + 1, 1, K)."""
    out = plan.out[plan.sums.pool]
    whole = ~out if not out.all() else np.ones_like(out)
    return np.concatenate([plan.sums.member, whole[None]])[:, None, :]


def _mean_over(values: np.ndarray, within: np.ndarray) -> np.ndarray:
    """Mean over the parts of each sum; shape (D, J + 1). Exact where they are equal, NaN if one is unknown."""
    first = np.argmax(within, axis=2)
    base = np.take_along_axis(values[None], first[:, :, None], axis=2)
    number = within.sum(axis=2)
    apart = np.where(within, values - base, 0.0).sum(axis=2)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(number > 0, base[:, :, 0] + apart / number, np.nan).T


def _parts(
    samples: tuple[Sample, ...], domains: tuple[np.ndarray, ...], number: int, plan: Plan, *, near: bool = False
) -> _Parts:
    """Estimate each part on its own plots."""
    area, allowed = plan.area_ha, plan.allowed
    cells = Cells.of(number, len(area), *((d, s.stratum) for d, s in zip(domains, samples, strict=True)))
    sides = tuple(side_of(s, d, cells, area, allowed) for s, d in zip(samples, domains, strict=True))
    plots = np.stack([group_sum(side.mean.plots_cell, cells.domain, number) for side in sides])
    units = np.stack([group_sum(side.spread.units_cell, cells.domain, number) for side in sides])
    if len(samples) == 1:
        joint = joint_table(sides, domains, cells, None, near=near)
        nothing = np.zeros_like(plots[0])
        return _Parts(
            sides, domains, cells, joint, sides[0].mean.density, plots, units, nothing, np.full_like(nothing, np.nan)
        )
    first, second = samples
    pairs = match_plots((first, second), (domains[0], domains[1]), allowed)
    inside = domains[0][pairs.first] >= 0
    paired = group_sum(pairs.counted[inside], domains[0][pairs.first][inside], number)
    return _Parts(
        sides=sides,
        domains=domains,
        cells=cells,
        joint=joint_table(sides, domains, cells, pairs, near=near),
        density=sides[1].mean.density - sides[0].mean.density,
        plots=plots,
        units=units,
        paired=paired,
        days=elapsed((first, second), (domains[0], domains[1]), pairs, cells, area, allowed),
    )


def _borrow(parts: _Parts, known: np.ndarray, fewest: np.ndarray, plan: Plan, means: StratumMeans | None) -> _Borrowed:
    """Take means of strata for parts with too few plots, in domains with enough plots of another part.

    Strata are weighted by the share of the domain in each, told by all plots that count for some part.
    """
    cells, number = parts.cells, known.shape[1]
    if means is None or not fewest.size:
        nothing, empty = np.zeros_like(known, dtype=float), np.zeros((len(cells.domain), number))
        return _Borrowed(np.zeros_like(known), nothing, nothing, empty, empty)
    enough = fewest.max(axis=1) >= MIN_PLOTS
    share = np.zeros(len(cells.domain))
    allowed = np.asarray(plan.allowed.any(axis=1, keepdims=True))
    for side, domain in zip(parts.sides, parts.domains, strict=True):
        sample, some = side.sample, np.asarray(side.counted.any(axis=1, keepdims=True))
        visits = replace(sample, value=np.zeros_like(some, dtype=float), used=some)
        seen = sample_means(visits, domain, cells, plan.area_ha, allowed)
        size = group_sum(seen.size, seen.cell, len(cells.domain))
        share += np.nan_to_num(seen.weight * size)[:, 0] / len(parts.sides)
    weight = share[:, None] * plan.allowed[cells.stratum]
    total = group_sum(weight, cells.domain, cells.domains)
    with np.errstate(divide="ignore", invalid="ignore"):
        weight = np.where(total[cells.domain] > 0, weight / total[cells.domain], 0.0)

    def mean(values: np.ndarray) -> np.ndarray:
        return group_sum(np.where(weight > 0, weight * values[cells.stratum], 0.0), cells.domain, cells.domains)

    which = ~known & enough[:, None] & (total > 0) & ~plan.out[plan.sums.pool]
    deviation = np.where(weight > 0, weight * np.sqrt(means.spread[cells.stratum]), 0.0)
    return _Borrowed(which, mean(means.density), mean(means.days), deviation, means.df[cells.stratum])


def _areas(plan: Plan, number: int, means: StratumMeans | None) -> tuple[np.ndarray, np.ndarray]:
    """Share of the area of a sum that each part speaks for, shape (J + 1, K), and areas of sums, (1, J + 1).

    The shares differ from 1 only for the whole inventory, if a pool is estimable in part of the strata.
    """
    pools = plan.allowed_pool
    strata = np.concatenate([pools, pools.any(axis=1, keepdims=True)], axis=1)
    area = np.where(strata, plan.area_ha[:, None], 0.0).sum(axis=0, keepdims=True)
    share = np.ones((strata.shape[1], len(plan.sums.parts)))
    if number == 1 and means is None:
        same = (pools == strata[:, -1:]).all(axis=0)
        with np.errstate(divide="ignore", invalid="ignore"):
            share[-1] = np.where(same, 1.0, area[0, :-1] / area[0, -1])[plan.sums.pool]
    return share, area


def _variances(
    parts: _Parts, own: np.ndarray, borrowed: np.ndarray, share: np.ndarray, means: _Borrowed
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Variance, degrees of freedom, whether plots differ and share from neighbours; shapes (J + 1, D).

    Domains in which the same parts have plots of their own are handled together. Means of strata are taken as
    independent of the plots of the domain, and as fully correlated with each other.
    """
    cells, dates = parts.cells, len(parts.sides)
    number = own.shape[2]
    variance, df = np.zeros(own.shape[:2]), np.full(own.shape[:2], np.nan)
    apart, near = np.zeros(own.shape[:2], dtype=bool), np.full(own.shape[:2], np.nan)
    done: dict[tuple[bytes, bytes], SumVariance] = {}
    for name, rows in enumerate(own):
        chosen, place = np.unique(rows, axis=0, return_inverse=True)
        for kind, columns in enumerate(chosen):
            held = np.flatnonzero(columns)
            if not len(held):
                continue
            scale = np.tile(share[name][held], dates)
            key = (held.tobytes(), scale.tobytes())
            if key not in done:
                wide = np.concatenate([held + number * date for date in range(dates)])
                done[key] = sum_variance(parts.joint, wide, scale)
            hit = place.ravel() == kind
            variance[name, hit] = done[key].variance[hit]
            df[name, hit] = done[key].df[hit]
            apart[name, hit] = done[key].apart[hit]
            near[name, hit] = done[key].near[hit]
        if borrowed[name].any():
            variance[name], df[name] = _with_borrowed(variance[name], df[name], borrowed[name], means, cells)
    return variance, df, apart, near


def _with_borrowed(
    variance: np.ndarray, df: np.ndarray, which: np.ndarray, means: _Borrowed, cells: Cells
) -> tuple[np.ndarray, np.ndarray]:
    """Add the variance of means of strata to that of the parts with plots of their own."""
    mine = which[cells.domain]
    added = np.where(mine, means.deviation, 0.0).sum(axis=1) ** 2
    few = np.where(mine, means.df, np.inf).min(axis=1, initial=np.inf)
    few = np.where(np.isfinite(few) & (added > 0), few, 0.0)
    codes = np.concatenate([np.arange(cells.domains), cells.domain])
    pieces, free = np.concatenate([variance, added]), np.concatenate([np.nan_to_num(df), few])
    total = np.bincount(codes, weights=pieces, minlength=cells.domains)
    effective = satterthwaite(pieces[:, None], free[:, None], codes, cells.domains)[:, 0]
    hit = which.any(axis=1)
    return np.where(hit, total, variance), np.where(hit, effective, df)
