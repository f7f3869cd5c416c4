"""Change as best combination of repeated and other plots, for the levels of an inventory."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.overlap import weighted_variance
from landcarbon.estimate.ratio import Sample
from landcarbon.estimate.replacement import (
    OTHERS,
    REPEATED,
    Panels,
    choose_weights,
    panels,
    room,
    small_sample_factor,
)
from landcarbon.estimate.visit_times import dates_vary, mean_days, timed

__all__ = ["BestChange", "Chosen", "best_change"]

_ROOM = 2.0  # degrees of freedom for each weight, beside one, below which weights are not worth estimating


@dataclass(frozen=True)
class Chosen:
    """Weights by domain.

    Attributes
    ----------
    weights : ndarray
        Of the four estimates in the means of the two dates; shape (D, 2, 4).
    factor : ndarray
        What variances of change are multiplied by, as the weights were estimated; shape (D,).
    good : ndarray of bool
        Whether there is enough to weigh; shape (D,).
    """

    weights: np.ndarray
    factor: np.ndarray
    good: np.ndarray

    def of_one(self, number: int) -> Chosen:
        """Give the weights of a single domain to many."""
        return Chosen(*(np.repeat(values, number, axis=0) for values in (self.weights, self.factor, self.good)))


@dataclass(frozen=True)
class BestChange:
    """Change by domain D and sum S; what is not ``used`` has no meaning.

    Attributes
    ----------
    used : ndarray of bool
        Whether a best combination was made; shape (D, S).
    density, variance, df, days, rate, rate_variance : ndarray
        Change [t C/ha], its variance and degrees of freedom, elapsed time [d], rate [t C/ha/d] and its variance; NaN
        days where some visits have no date.
    repeated : ndarray
        Weight of the repeated plots at either date; shape (D, 2).
    strata : ndarray
        Number of strata, and how many of them weigh either kind of plots; shape (D, S, 2).
    chosen : Chosen
        Weights.
    """

    used: np.ndarray
    density: np.ndarray
    variance: np.ndarray
    df: np.ndarray
    days: np.ndarray
    rate: np.ndarray
    rate_variance: np.ndarray
    repeated: np.ndarray
    strata: np.ndarray
    chosen: Chosen


def best_change(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    area_ha: np.ndarray,
    allowed: np.ndarray,
    scale: np.ndarray,
    *,
    parcels: bool = False,
    chosen: Chosen | None = None,
) -> BestChange:
    """Combine repeated and other plots in the best way, where there are enough of either.

    Parameters
    ----------
    samples : tuple of Sample
        Earlier and later survey.
    domains : tuple of ndarray of int
        Domain of each plot; -1 for none.
    area_ha : ndarray
        Area of each stratum [ha].
    allowed : ndarray of bool
        Strata estimable at both dates, by column; shape (H, K).
    scale : ndarray
        What each column counts in each sum; shape (S, D, K). The last sum sets the weights for all.
    parcels : bool
        Domains are parts of strata: count plots in the domain, not in its strata.
    chosen : Chosen, optional
        Weights of the whole for its strata, so that these add up to it.

    Returns
    -------
    BestChange
    """
    given = panels(samples, domains, scale.shape[1], area_ha, allowed)
    chosen = _choose(given, scale[-1], parcels) if chosen is None else chosen.of_one(scale.shape[1])
    table = given.table
    split = np.asarray(given.split.any(axis=(0, 2)))
    factor = np.where(split[table.cells.stratum], chosen.factor[table.cells.domain], 1.0)
    strata, divided = _strata(given, scale)
    change = chosen.weights[:, 1] - chosen.weights[:, 0]
    made = weighted_variance(table, scale, change, factor)
    by_column = np.einsum("de,dek->dk", change, np.nan_to_num(given.mean))
    days = _days(given, domains, area_ha, allowed, chosen.weights)
    span = days[:, 1] - days[:, 0]
    with np.errstate(divide="ignore", invalid="ignore"):
        rates = by_column / np.where(span == 0, np.nan, span)
        held = scale != 0
        mean_span = np.where(held, span, 0.0).sum(axis=2) / held.sum(axis=2)
        rate = np.where(held, scale * rates, 0.0).sum(axis=2)
        rate_variance = made.variance / mean_span.T**2
    if dates_vary(samples):
        late = tuple(
            timed(s, d, rates, days[:, t], span) for t, (s, d) in enumerate(zip(samples, domains, strict=True))
        )
        late_table = panels((late[0], late[1]), domains, scale.shape[1], area_ha, allowed).table
        rate_variance = weighted_variance(late_table, scale, change, factor).variance
    density = np.einsum("dk,sdk->ds", by_column, scale)
    known = chosen.good[:, None] & (divided > 0) & np.isfinite(made.variance)
    return BestChange(
        used=known,
        density=density,
        variance=made.variance,
        df=made.df,
        days=mean_span.T,
        rate=rate.T,
        rate_variance=rate_variance,
        repeated=np.stack([-change[:, 0], change[:, 2]], axis=1),
        strata=np.stack([strata, divided], axis=2),
        chosen=chosen,
    )


def _choose(given: Panels, scale: np.ndarray, parcels: bool) -> Chosen:
    """Weights of each domain on its own, and whether there are plots enough for them."""
    held = scale != 0
    if parcels:
        enough = (given.repeated >= REPEATED) & (given.others >= OTHERS)
        free = (enough | ~held).all(axis=2).T & held.any(axis=1)[:, None]
        repeated = np.where(held, given.repeated, np.inf).min(axis=1)
        others = np.where(held, given.others.mean(axis=0), np.inf).min(axis=1)
        known = room(np.where(np.isfinite(repeated), repeated, 0.0), np.where(np.isfinite(others), others, 0.0))
    else:
        free = ((given.others > 0) & held).any(axis=2).T
        told = np.where(held & (given.known > 0), given.known, np.inf).min(axis=1)
        known = np.where(np.isfinite(told), told, 0.0)
    estimated = free.sum(axis=1)
    good = (estimated > 0) & (known >= _ROOM * estimated + 1.0)
    factor = np.where(good, small_sample_factor(known, estimated), 1.0)
    return Chosen(choose_weights(given, scale, free), factor, good)


def _strata(given: Panels, scale: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Strata that a domain has plots in, and those that are split for a column of the sum; shapes (D, S)."""
    cells = given.table.cells
    split = np.asarray(given.split.any(axis=0))[cells.stratum]
    here = (scale[:, cells.domain] != 0) & split
    number = np.bincount(cells.domain, minlength=cells.domains)
    divided = [np.bincount(cells.domain, weights=one, minlength=cells.domains) for one in here.any(axis=2)]
    return np.repeat(number[:, None], len(scale), axis=1), np.stack(divided, axis=1)


def _days(
    given: Panels, domains: tuple[np.ndarray, np.ndarray], area_ha: np.ndarray, allowed: np.ndarray, weights: np.ndarray
) -> np.ndarray:
    """Mean visit dates with the weights of the estimate; shape (D, 2, K). NaN if any visit has no date."""
    if not all(np.isfinite(sample.day).all() for sample in given.samples):
        return np.full((len(weights), 2, given.mean.shape[2]), np.nan)
    table = given.table
    days = [mean_days(s, domains[place // 2], table.cells, area_ha, allowed) for place, s in enumerate(given.samples)]
    there = np.isfinite(np.stack(days))
    origin = np.where(there, days, 0.0).sum(axis=0) / np.maximum(there.sum(axis=0), 1)
    apart = np.nan_to_num(np.stack(days, axis=1) - origin[:, None])
    change = weights[:, 1] - weights[:, 0]
    first = -np.einsum("de,dek->dk", change[:, :2], apart[:, :2])
    second = np.einsum("de,dek->dk", change[:, 2:], apart[:, 2:])
    return np.stack([first, second], axis=1) + origin[:, None]
