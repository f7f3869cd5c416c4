"""Change at the levels of an inventory: what is done to the differences before they are laid out as rows."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.estimate.best_change import BestChange, best_change
from landcarbon.estimate.change_notes import BEST, best_methods, no_best_change
from landcarbon.estimate.difference import Difference, difference_of_ratios
from landcarbon.estimate.moved_plots import find_moved, moved_variance
from landcarbon.estimate.ratio import Sample
from landcarbon.estimate.systematic import say_neighbours
from landcarbon.estimate.tables import Units
from landcarbon.estimate.two_phase import first_phase_area_se, say_two_phase, with_first_phase
from landcarbon.estimate.visit_times import late_samples, rate_variance
from landcarbon.findings import empty_findings

__all__ = ["ChangeLevel", "designed", "with_best", "with_moved_plots", "with_own_dates", "without_noise"]

_ROUNDING = 1e-12  # a standard error below this share of the largest density is rounding noise


@dataclass(frozen=True)
class ChangeLevel:
    """Change of one level, by domain D and sum S.

    ``area_ha``, ``method``, ``rate`` [t C/ha/d] and ``rate_variance`` have shape (D, S), as what ``change`` holds;
    ``scale`` says what each column counts in each sum, shape (S, D, K), and ``own`` which domains rest on plots of
    their own alone. ``area_se`` [ha] has shape (D,), None where areas are known; ``moved`` says
    which domains hold plots that changed their stratum or domain, None if none does.
    """

    by: str
    labels: list[str]
    domains: tuple[np.ndarray, np.ndarray]
    area_ha: np.ndarray
    change: Difference
    method: np.ndarray
    rate: np.ndarray
    rate_variance: np.ndarray
    scale: np.ndarray
    own: np.ndarray
    area_se: np.ndarray | None = None
    moved: np.ndarray | None = None


def with_own_dates(
    level: ChangeLevel, samples: tuple[Sample, Sample], units: Units, allowed: np.ndarray, *, columns: bool, near: bool
) -> ChangeLevel:
    """Let the standard error of rates hold that elapsed times differ between plots.

    Parameters
    ----------
    level : ChangeLevel
        Change of one level.
    samples : tuple of Sample
        Earlier and later survey.
    units : Units
        Strata and parcels.
    allowed : ndarray of bool
        Strata that count, by column.
    columns : bool
        Each column is a sum of its own.
    near : bool
        Variance of strata and of the inventory from neighbouring plots.
    """
    if not level.labels:
        return level
    number, area = len(level.labels), units.stratum_area_ha
    if columns:
        late = late_samples(samples, level.domains, number, area, allowed)
        near = near and level.by != "parcel"
        variance = difference_of_ratios(late, level.domains, number, area, allowed, near=near).variance
    else:
        of_rate, of_change = rate_variance(samples, level.domains, number, area, allowed, level.scale)
        with np.errstate(divide="ignore", invalid="ignore"):
            variance = np.where(of_change > 0, level.change.variance / of_change * of_rate, of_rate)
    there = np.isfinite(level.rate_variance) & np.isfinite(variance) & level.own[:, None]
    return replace(level, rate_variance=np.where(there, variance, level.rate_variance))


def with_moved_plots(
    level: ChangeLevel, samples: tuple[Sample, Sample], units: Units, allowed: np.ndarray
) -> ChangeLevel:
    """Take plots as one unit that changed their stratum or domain between the dates.

    Parameters
    ----------
    level : ChangeLevel
        Change of one level, in which such plots count as two.
    samples : tuple of Sample
        Earlier and later survey.
    units : Units
        Strata and parcels.
    allowed : ndarray of bool
        Strata that count, by column.

    Notes
    -----
    See :func:`landcarbon.estimate.moved_plots.moved_variance`. Plots in clusters are left as they are.
    """
    found = find_moved(samples, level.domains)
    if not len(found.first) or not level.labels or samples[0].unit is not None:
        return level
    moved = found.domains(samples, level.domains, len(level.labels))
    variance, df = moved_variance(samples, level.domains, units.stratum_area_ha, allowed, level.scale)
    change = level.change
    hit = moved[:, None] & np.isfinite(change.variance) & level.own[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        grown = np.where(hit & (change.variance > 0), variance / change.variance, 1.0)
    change = replace(
        change,
        variance=np.where(hit, variance, change.variance),
        df=np.where(hit, df, change.df),
    )
    return replace(level, change=change, rate_variance=level.rate_variance * grown, moved=moved)


def with_best(
    levels: list[ChangeLevel],
    samples: tuple[Sample, Sample],
    units: Units,
    allowed: np.ndarray,
    surveys: tuple[str, str],
) -> tuple[list[ChangeLevel], pd.DataFrame]:
    """Put best combinations in place of differences where there are plots enough for them."""
    made, whole = [], None
    moved = any(level.moved is not None for level in levels if level.by != "parcel")
    for level in levels:
        if not level.labels or (moved and level.by != "parcel"):
            made.append(level)
            continue
        best = best_change(
            samples,
            level.domains,
            units.stratum_area_ha,
            allowed,
            level.scale,
            parcels=level.by == "parcel",
            chosen=whole if level.by == "stratum" else None,
        )
        whole = best.chosen if level.by == "inventory" else None
        made.append(_put(level, best, surveys))
    changed = any(level is not other for level, other in zip(levels, made, strict=True))
    return made, empty_findings() if changed else no_best_change(surveys)


def _put(level: ChangeLevel, best: BestChange, surveys: tuple[str, str]) -> ChangeLevel:
    used = best.used & np.isfinite(level.change.density) & level.own[:, None]
    used = used if level.moved is None else used & ~level.moved[:, None]
    if not used.any():
        return level
    best = replace(best, used=used)
    dated = used & np.isfinite(best.days)
    days = np.where(dated, best.days, level.change.days)
    with np.errstate(divide="ignore", invalid="ignore"):
        span = np.where(days == 0, np.nan, days)
        undated = (
            np.where(used, best.density / span, level.rate),
            np.where(used, best.variance / span**2, level.rate_variance),
        )
    change = replace(
        level.change,
        density=np.where(used, best.density, level.change.density),
        variance=np.where(used, best.variance, level.change.variance),
        df=np.where(used, best.df, level.change.df),
        days=days,
    )
    return replace(
        level,
        change=change,
        method=best_methods(level.method, best, surveys),
        rate=np.where(dated, best.rate, undated[0]),
        rate_variance=np.where(dated, best.rate_variance, undated[1]),
    )


def without_noise(level: ChangeLevel, samples: tuple[Sample, Sample]) -> ChangeLevel:
    """Set variances to zero that are rounding noise only: every repeated plot changed by the same amount."""
    largest = max((float(np.abs(sample.value).max(initial=0.0)) for sample in samples), default=0.0)
    least = (_ROUNDING * largest) ** 2
    variance = np.where(level.change.variance <= least, 0.0, level.change.variance)
    with np.errstate(invalid="ignore"):
        of_rate = np.where(level.rate_variance * level.change.days**2 <= least, 0.0, level.rate_variance)
    return replace(level, change=replace(level.change, variance=variance), rate_variance=of_rate)


def designed(levels: list[ChangeLevel], units: Units) -> list[ChangeLevel]:
    """Add the error of estimated areas, and say how variances came about."""
    strata = next(level.change for level in levels if level.by == "stratum")
    done = []
    for level in levels:
        change, known = level.change, np.isfinite(level.change.density)
        best = np.char.startswith(level.method.astype(str), BEST)
        text = np.where(best, level.method, say_neighbours(level.method, known, change.near))
        if change.near is not None:
            text = np.where(best, text.astype(object) + ", random variance", text)
        text = say_two_phase(text, known, level.by, units)
        if level.by == "inventory":
            change = with_first_phase(change, strata, units)
        area_se = first_phase_area_se(units) if level.by == "stratum" else None
        more = change.variance - level.change.variance
        with np.errstate(divide="ignore", invalid="ignore"):
            of_rate = np.where(more > 0, level.rate_variance + more / change.days**2, level.rate_variance)
        done.append(replace(level, change=change, method=text, area_se=area_se, rate_variance=of_rate))
    return done
