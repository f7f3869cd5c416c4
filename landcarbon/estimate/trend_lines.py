"""Straight lines through the means of three or more surveys, by generalised least squares.

Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.constants import DAYS_PER_YEAR
from landcarbon.estimate.clusters import unit_counts
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.overlap import Overlap, covariance, survey_table, weighted_variance
from landcarbon.estimate.ratio import MIN_PLOTS, Sample
from landcarbon.estimate.replacement import best_weights, small_sample_factor
from landcarbon.estimate.sums import Sums
from landcarbon.estimate.visit_times import mean_days, timed

__all__ = ["FEWEST", "Line", "TrendPlan", "line_weights", "misfit", "plan_trend", "trend_lines"]

FEWEST = 3  # surveys that a trend needs
_ROUNDING = 1e-9
_RANK = 1e-10  # eigenvalues below this share of the largest are taken as zero
_ROOM = 6.0  # degrees of freedom for each estimated weight below which ordinary least squares serves


@dataclass(frozen=True)
class TrendPlan:
    """What a trend is made of. Surveys T, strata H, columns (parts) K, pools J.

    Attributes
    ----------
    samples : tuple of Sample
        One for each survey, in the order of time.
    sums : Sums
        Pools and parts.
    area_ha : ndarray
        Of the strata [ha]; NaN if unknown.
    surveys : ndarray of bool
        Survey at which every part of a pool was measured; shape (T, J).
    units : ndarray
        Sampling units by survey, stratum and part; shape (T, H, K).
    allowed : ndarray of bool
        Strata with two units of each part of the pool at the survey; shape (T, H, K).
    covariance : ndarray
        Of the survey means of the whole, of the pools with the same surveys together; shape (J, T, T).
    factor : ndarray
        What variances are multiplied by, as weights were estimated; 1 with ordinary least squares; shape (J,).
    general : ndarray of bool
        Whether weights are those of generalised least squares; shape (J,).
    """

    samples: tuple[Sample, ...]
    sums: Sums
    area_ha: np.ndarray
    surveys: np.ndarray
    units: np.ndarray
    allowed: np.ndarray
    covariance: np.ndarray
    factor: np.ndarray
    general: np.ndarray


@dataclass(frozen=True)
class Line:
    """Trend by domain D and sum (J pools, then ``all``).

    Attributes
    ----------
    slope, variance, df : ndarray
        [t C/ha/yr], its variance and degrees of freedom; NaN where not estimable; shape (D, J + 1).
    mean, covariance : ndarray
        Survey means, shape (D, T, J + 1), and their covariances, (D, J + 1, T, T).
    known : ndarray
        Degrees of freedom of the covariances: smallest number of plots at a survey, less the strata.
    surveys : ndarray of bool
        Surveys used; shape (D, T, J + 1).
    day : ndarray
        Mean visit date by survey [d]; shape (D, T).
    """

    slope: np.ndarray
    variance: np.ndarray
    df: np.ndarray
    mean: np.ndarray
    covariance: np.ndarray
    known: np.ndarray
    surveys: np.ndarray
    day: np.ndarray

    def misfit(self) -> np.ndarray:
        """Probability of means as far from the line, were it straight, by domain and sum; see :func:`misfit`."""
        years = self.day / DAYS_PER_YEAR
        found = [
            misfit(self.mean[:, :, one], years, self.surveys[:, :, one], self.covariance[:, one], self.known[:, one])
            for one in range(self.slope.shape[1])
        ]
        return np.where(np.isfinite(self.slope), np.stack(found, axis=1), np.nan)


def line_weights(years: np.ndarray, there: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Weights of survey means in the slope of the best straight line through them.

    Parameters
    ----------
    years : ndarray
        Dates [yr]; shape (D, T).
    there : ndarray of bool
        Surveys that count; shape (D, T). Fewer than two, or all on one date, give NaN.
    covariance : ndarray
        Of the means; shape (T, T) or (D, T, T). Zeros give ordinary least squares.

    Returns
    -------
    ndarray
        Shape (D, T): sums to zero, and to one with the dates.
    """
    base, free = _directions(years, there)
    wide = np.broadcast_to(covariance, (len(years), *covariance.shape[-2:]))
    return np.where(np.isfinite(base).all(axis=1, keepdims=True), best_weights(wide, np.nan_to_num(base), free), np.nan)


def _directions(years: np.ndarray, there: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Weights of ordinary least squares, and the projection on what leaves a straight line as it is."""
    number = there.sum(axis=1, keepdims=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        centre = np.where(there, years, 0.0).sum(axis=1, keepdims=True) / number
        apart = np.where(there, years - centre, 0.0)
        square = (apart**2).sum(axis=1, keepdims=True)
        base = np.where(square > 0, apart / square, np.nan)
    one = there / np.sqrt(np.maximum(number, 1))
    other = np.nan_to_num(apart / np.sqrt(np.where(square > 0, square, 1.0)))
    free = np.eye(years.shape[1]) * there[:, :, None]
    free = free - one[:, :, None] * one[:, None, :] - other[:, :, None] * other[:, None, :]
    return base, free


def misfit(
    mean: np.ndarray, years: np.ndarray, there: np.ndarray, covariance: np.ndarray, df: np.ndarray
) -> np.ndarray:
    """Probability of survey means as far from a straight line as these, were it straight.

    Parameters
    ----------
    mean, years, there, covariance
        Survey means, dates, whether they count, and covariances, by domain: shapes (D, T) and (D, T, T).
    df : ndarray
        Degrees of freedom of the covariances; shape (D,).

    Returns
    -------
    ndarray
        NaN where the number of plots does not allow it, or the covariances say nothing.

    Notes
    -----
    Q = r' C^-1 r with r the residuals of generalised least squares; Q (f - q + 1) / (f q) follows F with q = T - 2 and
    f - q + 1 degrees of freedom (Hotelling's T squared).
    """
    from scipy.special import fdtrc  # heavy; the package must import without it

    _, free = _directions(years, there)
    root, vectors = np.linalg.eigh(free @ np.nan_to_num(covariance) @ free)
    largest = root.max(axis=1, initial=0.0)
    estimated = there.sum(axis=1) - 2
    told = root > _RANK * largest[:, None]
    regular = told.sum(axis=1) == estimated
    along = np.einsum("dts,dt->ds", vectors, np.einsum("dst,dt->ds", free, np.where(there, mean, 0.0)))
    with np.errstate(divide="ignore", invalid="ignore"):
        quadratic = np.where(told, along**2 / root, 0.0).sum(axis=1)
        rest = df - estimated + 1.0
        share = fdtrc(estimated, rest, quadratic * rest / (df * estimated))
    return np.where((estimated > 0) & regular & (df >= _ROOM * estimated) & (largest > 0), share, np.nan)


def plan_trend(samples: tuple[Sample, ...], sums: Sums, area_ha: np.ndarray) -> TrendPlan:
    """Decide which surveys and strata count for each pool, and with which covariances they are weighed.

    Notes
    -----
    One covariance matrix of the survey means of the whole serves all units: a single stratum or parcel has too few
    plots to tell its own. The weights are right for any matrix; the standard errors come from the plots of the unit.
    Where plots repeat almost perfectly, generalised least squares can give an interval between surveys a negative
    weight, and the slope then lies outside all the rates it is made of; ordinary least squares serves there.
    """
    strata, member = len(area_ha), sums.member
    units = np.stack([unit_counts(sample, strata) for sample in samples])
    measured = units.sum(axis=1) > 0
    surveys = np.stack([measured[:, row].all(axis=1) for row in member], axis=1)
    enough = np.stack([(units[:, :, row] >= MIN_PLOTS).all(axis=2) for row in member], axis=2)
    allowed = (enough & surveys[:, None])[:, :, sums.pool]
    area = area_ha if np.isfinite(area_ha).all() else np.ones(strata)
    zeros = tuple(np.zeros_like(sample.stratum) for sample in samples)
    table, _ = survey_table(samples, zeros, 1, area, allowed)
    number = len(sums.pools)
    matrix, factor = np.zeros((number, len(samples), len(samples))), np.ones(number)
    general = np.zeros(number, dtype=bool)
    for pattern in np.unique(surveys, axis=1).T:
        mine = (surveys == pattern[:, None]).all(axis=0)
        estimated = int(pattern.sum()) - 2
        if estimated < 1:
            continue
        held = mine[sums.pool]
        counted = np.where(allowed[:, :, held], units[:, :, held] - 1.0, 0.0).sum(axis=1)[pattern]
        df = counted.min(axis=1, initial=np.inf).mean()
        if df < _ROOM * estimated:
            continue
        found = covariance(table, held.astype(float)[None])[0]
        if not _within_range(found, samples, pattern):
            continue
        matrix[mine] = found
        factor[mine], general[mine] = small_sample_factor(np.array(df), np.array(estimated)), True
    return TrendPlan(samples, sums, area_ha, surveys, units, allowed, matrix, factor, general)


def _within_range(found: np.ndarray, samples: tuple[Sample, ...], pattern: np.ndarray) -> bool:
    """Whether the slope is a mean of the rates between surveys, none of which counts against the others."""
    days = [sample.day[np.isfinite(sample.day)] for sample in samples]
    if not all(len(day) for day, there in zip(days, pattern, strict=True) if there):
        return True
    years = np.array([float(day.mean()) if len(day) else 0.0 for day in days]) / DAYS_PER_YEAR
    weights = line_weights(years[None], pattern[None], found)[0][pattern]
    of_intervals = -np.cumsum(weights)[:-1] * np.diff(years[pattern])
    return bool(np.isfinite(of_intervals).all() and (of_intervals >= -_ROUNDING).all())


def trend_lines(plan: TrendPlan, domains: tuple[np.ndarray, ...], number: int, *, parts: bool = False) -> Line:
    """Trend of the pools, and of ``all`` as their sum, in domains.

    Parameters
    ----------
    plan : TrendPlan
        What counts.
    domains : tuple of ndarray of int
        Domain of each plot of the samples; -1 for none.
    number : int
        Number of domains.
    parts : bool
        Domains are parts of strata, and need two plots of each part of a pool of their own at a survey.
    """
    sums, samples = plan.sums, plan.samples
    table, mean = survey_table(samples, domains, number, plan.area_ha, plan.allowed)
    day = _days(plan, domains, table)
    there = _there(plan, domains, table, mean, parts) & np.isfinite(day)[:, :, None]
    known = there.sum(axis=1) >= FEWEST
    years = day / DAYS_PER_YEAR
    weights = np.stack(
        [line_weights(years, there[:, :, pool], plan.covariance[pool]) for pool in range(len(sums.pools))], axis=2
    )
    known &= np.isfinite(weights).all(axis=1)
    weights = np.where(known[:, None], np.nan_to_num(weights), 0.0)[:, :, sums.pool]
    by_part = np.einsum("dtk,dtk->dk", weights, np.nan_to_num(mean))
    late = tuple(
        timed(s, d, by_part / DAYS_PER_YEAR, np.repeat(day[:, t, None], len(sums.parts), axis=1), np.ones_like(by_part))
        for t, (s, d) in enumerate(zip(samples, domains, strict=True))
    )
    late_table, _ = survey_table(late, domains, number, plan.area_ha, plan.allowed)
    scale = np.concatenate([sums.member[:, None, :] & known[:, sums.pool], known[None, :, sums.pool]]).astype(float)
    factor = np.append(plan.factor, plan.factor.max(initial=1.0))
    told = weighted_variance(late_table, scale, weights)
    used = np.stack([(there[:, :, sums.pool] & (rows[:, None] != 0)).any(axis=2) for rows in scale], axis=2)
    some = np.concatenate([known, known.any(axis=1, keepdims=True)], axis=1)
    slope = np.einsum("dk,sdk->ds", by_part, scale)
    return Line(
        slope=np.where(some, slope, np.nan),
        variance=np.where(some, told.variance * factor, np.nan),
        df=np.where(some, told.df, np.nan),
        mean=np.einsum("dtk,sdk->dts", np.nan_to_num(mean), scale),
        covariance=np.stack([covariance(table, rows) for rows in scale], axis=1),
        known=_known(scale, used, _units(plan, domains, number), table),
        surveys=used,
        day=day,
    )


def _known(scale: np.ndarray, used: np.ndarray, counted: np.ndarray, table: Overlap) -> np.ndarray:
    """Degrees of freedom of the covariances by domain and sum: fewest plots of a part at a survey, less strata."""
    strata = np.bincount(table.cells.domain, minlength=table.cells.domains)
    found = []
    for one, rows in enumerate(scale):
        plots = np.where((rows[:, None] != 0) & used[:, :, [one]], counted, np.inf).min(axis=(1, 2), initial=np.inf)
        found.append(np.where(np.isfinite(plots), plots - strata, 0.0))
    return np.stack(found, axis=1)


def _days(plan: TrendPlan, domains: tuple[np.ndarray, ...], table: Overlap) -> np.ndarray:
    """Mean visit date by domain and survey, of plots with any part that counts; shape (D, T)."""
    days = []
    for sample, domain, allowed in zip(plan.samples, domains, plan.allowed, strict=True):
        some = (sample.used & allowed[sample.stratum]).any(axis=1, keepdims=True)
        sample = Sample(sample.plot, sample.stratum, sample.parcel, sample.size, np.zeros(some.shape), some, sample.day)
        days.append(mean_days(sample, domain, table.cells, plan.area_ha, allowed.any(axis=1, keepdims=True))[:, 0])
    return np.stack(days, axis=1)


def _units(plan: TrendPlan, domains: tuple[np.ndarray, ...], number: int) -> np.ndarray:
    """Count plots by domain, survey and part; shape (D, T, K)."""
    counted = []
    for sample, domain, allowed in zip(plan.samples, domains, plan.allowed, strict=True):
        inside = domain >= 0
        values = (sample.used & allowed[sample.stratum])[inside]
        counted.append(group_sum(values, domain[inside], number))
    return np.stack(counted, axis=1)


def _there(
    plan: TrendPlan, domains: tuple[np.ndarray, ...], table: Overlap, mean: np.ndarray, parts: bool
) -> np.ndarray:
    """Surveys at which each pool can be estimated in a domain, in all its strata; shape (D, T, J)."""
    cells, number = table.cells, mean.shape[0]
    lacking = np.stack([group_sum(~allowed[cells.stratum], cells.domain, number) for allowed in plan.allowed], axis=1)
    good = (lacking == 0) & np.isfinite(mean)
    if parts:
        good &= _units(plan, domains, number) >= MIN_PLOTS
    return np.stack([good[:, :, row].all(axis=2) for row in plan.sums.member], axis=2)
