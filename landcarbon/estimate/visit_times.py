"""Plots visited at different times within a survey: rates as ratios, and densities at a common date.

Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache
from importlib import resources

import numpy as np
import pandas as pd

from landcarbon.constants import DAYS_PER_YEAR
from landcarbon.errors import UserError
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.notes import name_list
from landcarbon.estimate.overlap import survey_table, weighted_variance
from landcarbon.estimate.ratio import Cells, Sample, means
from landcarbon.estimate.tables import POOL_ORDER
from landcarbon.findings import join_findings, make_findings

__all__ = [
    "MOVED",
    "common_dates",
    "dates_vary",
    "late_samples",
    "mean_days",
    "plot_rates",
    "rate_variance",
    "timed",
    "to_common_date",
]

#: What :func:`to_common_date` did with a row, in its column ``date_kind``.
MOVED = ("as visited", "interpolated", "extrapolated", "not moved")

_SECONDS_PER_DAY = 86400.0


def dates_vary(samples: Sequence[Sample]) -> bool:
    """Whether the visits of a survey are spread so far that elapsed times differ between plots.

    The limit is in ``visit_times.toml``; below it, elapsed time is as good as exact.
    """
    known = [day[np.isfinite(day)] for day in (sample.day for sample in samples)]
    if not all(len(day) for day in known):
        return False
    spread = np.sqrt(sum(float(np.var(day)) for day in known))
    span = abs(float(np.mean(known[-1])) - float(np.mean(known[0])))
    return bool(spread > _least_spread() * span)


@cache
def _least_spread() -> float:
    text = resources.files("landcarbon.estimate").joinpath("visit_times.toml").read_text(encoding="utf-8")
    return float(tomllib.loads(text)["spread"]["value"])


def mean_days(sample: Sample, domain: np.ndarray, cells: Cells, area_ha: np.ndarray, allowed: np.ndarray) -> np.ndarray:
    """Mean visit date of each domain and column, with the weights of the estimate [d]; shape (D, K).

    Visits without a date do not count; NaN for a domain with a cell in which no visit of the column has a date.
    """
    used, taken = sample.used, allowed
    if (used == used[:, :1]).all() and (taken == taken[:, :1]).all():  # one answer for all columns
        used, taken = used[:, :1], taken[:, :1]
    dated = used & np.isfinite(sample.day)[:, None]
    day = np.where(dated, sample.day[:, None], 0.0)
    mean = means(replace(sample, value=day, used=dated), domain, cells, area_ha, taken)
    counted = used[mean.rows] & taken[sample.stratum[mean.rows]]
    undated = (group_sum(counted, mean.cell, len(cells.domain)) > 0) & (mean.plots_cell == 0)
    found = np.where(group_sum(undated, cells.domain, cells.domains) > 0, np.nan, mean.density)
    return np.broadcast_to(found, (cells.domains, allowed.shape[1]))


def timed(sample: Sample, domain: np.ndarray, rate: np.ndarray, day: np.ndarray, span: np.ndarray) -> Sample:
    """Take off from each plot what the domain grew by between its mean visit date and the plot's own.

    Parameters
    ----------
    sample : Sample
        Plots of one survey.
    domain : ndarray of int
        Domain of each plot; -1 for none, whose values do not matter.
    rate, day, span : ndarray
        Rate of change [t C/ha/d], mean visit date [d] and what values are divided by, by domain and column, (D, K).

    Returns
    -------
    Sample
        With values (y - rate (day - mean day)) / span: the variance of a change of these is the linearised variance of
        change / elapsed time. Plots without a date count as visited on the mean date.
    """
    at = np.maximum(domain, 0)
    if not len(rate):
        return sample
    late = np.nan_to_num(np.nan_to_num(rate)[at] * (sample.day[:, None] - day[at]))
    with np.errstate(divide="ignore", invalid="ignore"):
        value = (sample.value - late) / span[at]
    return replace(sample, value=np.where(sample.used & np.isfinite(value), value, 0.0))


def late_samples(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    number: int,
    area_ha: np.ndarray,
    allowed: np.ndarray,
) -> tuple[Sample, Sample]:
    """Return the samples with values whose change is the rate, and has its variance; see :func:`timed`."""
    strata = len(area_ha)
    cells = Cells.of(number, strata, *((d, s.stratum) for d, s in zip(domains, samples, strict=True)))
    both = list(zip(samples, domains, strict=True))
    mean = [means(s, d, cells, area_ha, allowed).density for s, d in both]
    day = [mean_days(s, d, cells, area_ha, allowed) for s, d in both]
    span = day[1] - day[0]
    with np.errstate(divide="ignore", invalid="ignore"):
        rate = (mean[1] - mean[0]) / span
    first, second = (timed(s, d, rate, on, span) for (s, d), on in zip(both, day, strict=True))
    return first, second


def rate_variance(
    samples: tuple[Sample, Sample],
    domains: tuple[np.ndarray, np.ndarray],
    number: int,
    area_ha: np.ndarray,
    allowed: np.ndarray,
    scale: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Variance of rates as ratios: sum of changes over sum of elapsed times.

    Parameters
    ----------
    samples : tuple of Sample
        Earlier and later survey.
    domains : tuple of ndarray of int
        Domain of each plot; -1 for none.
    number : int
        Number of domains.
    area_ha : ndarray
        Area of each stratum [ha].
    allowed : ndarray of bool
        Strata estimable at both dates, by column; shape (H, K).
    scale : ndarray
        What each column counts in each sum; shape (S, D, K).

    Returns
    -------
    of_rate, of_change : ndarray
        Shapes (D, S) [(t C/ha/d)^2 and (t C/ha)^2]. With equal intervals their ratio is the squared elapsed time.

    Notes
    -----
    The rate r = D / T has the variance of D - r T over T^2, D the change and T the elapsed time, each plot bringing in
    both. The rate of a sum is the sum of the rates of its columns.
    """
    late = late_samples(samples, domains, number, area_ha, allowed)
    wide = [
        replace(s, value=np.hstack([other.value, s.value]), used=np.hstack([s.used, s.used]))
        for s, other in zip(samples, late, strict=True)
    ]
    table, _ = survey_table((wide[0], wide[1]), domains, number, area_ha, np.hstack([allowed, allowed]))
    nothing = np.zeros_like(scale)
    double = np.concatenate([np.concatenate([scale, nothing], axis=2), np.concatenate([nothing, scale], axis=2)])
    told = weighted_variance(table, double, np.tile([-1.0, 1.0], (number, 1))).variance
    return told[:, : len(scale)], told[:, len(scale) :]


def plot_rates(plot_parts: pd.DataFrame, *, since: str, until: str) -> pd.DataFrame:
    """Rates of change of the plots measured at two surveys, each over its own elapsed time.

    Parameters
    ----------
    plot_parts : DataFrame
        One row per visited plot and survey: survey, plot, date and columns of densities [t C/ha].
    since, until : str
        Earlier and later survey.

    Returns
    -------
    DataFrame
        plot, since_date, until_date, years, and a column for each density [t C/ha/yr]; NaN where it was not measured
        at both surveys, or elapsed time is unknown or zero. The mean of these is not the rate of the land where
        intervals differ: long intervals would count too little. The estimate of change takes the ratio of sums.
    """
    columns = _densities(plot_parts)
    first, second = (
        plot_parts[(plot_parts["survey"] == survey).to_numpy(dtype=bool)].assign(
            plot=lambda rows: rows["plot"].astype("str")
        )
        for survey in (since, until)
    )
    both = first.merge(second, on="plot", suffixes=("_since", "_until"), validate="1:1")
    dates = [pd.to_datetime(both[f"date_{name}"]) for name in ("since", "until")]
    years = (dates[1] - dates[0]).dt.total_seconds().to_numpy() / _SECONDS_PER_DAY / DAYS_PER_YEAR
    span = np.where(years == 0, np.nan, years)
    rates = {name: (both[f"{name}_until"] - both[f"{name}_since"]).to_numpy(dtype=float) / span for name in columns}
    return pd.DataFrame({"plot": both["plot"], "since_date": dates[0], "until_date": dates[1], "years": years, **rates})


def common_dates(plot_parts: pd.DataFrame, surveys: Sequence[str]) -> dict[str, pd.Timestamp]:
    """Mean visit date of each survey, to the day; surveys without a date are left out."""
    dates = pd.to_datetime(plot_parts["date"]).groupby(plot_parts["survey"].astype("str")).mean()
    return {name: dates[name].round("D") for name in surveys if name in dates.index and pd.notna(dates[name])}


def to_common_date(
    plot_parts: pd.DataFrame, dates_by_survey: Mapping[str, object], *, extrapolate: bool = False
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Densities of the plots of a survey at one date, by straight lines between the visits of each plot.

    Parameters
    ----------
    plot_parts : DataFrame
        One row per visited plot and survey: survey, plot, date and columns of densities [t C/ha].
    dates_by_survey : mapping
        Common date of each survey that is to have one (see :func:`common_dates`).
    extrapolate : bool
        Whether to draw the line of the two nearest visits on where the date lies before the first or after the last
        one. Otherwise such rows stay as they are and are named.

    Returns
    -------
    plot_parts : DataFrame
        The same rows, with new densities and ``date`` where they could be moved, and ``date_kind``, one of ``MOVED``.
    findings : DataFrame
        What was moved, and what could not be.

    Raises
    ------
    UserError
        If a date cannot be read or is missing.

    Notes
    -----
    y* = y_1 + (y_2 - y_1) (t* - t_1) / (t_2 - t_1) with the last visit not after the common date t* and the first one
    not before it at which the part was measured. A part measured at no other visit of its plot keeps its value, a row
    without a second visit stays as it is. A row moves as a whole or not at all. Densities do not become negative.
    """
    frame = plot_parts.reset_index(drop=True)
    columns = _densities(frame)
    target = _targets(frame["survey"], dates_by_survey)
    day, plot = _days(frame["date"]), pd.factorize(frame["plot"].astype("str"))[0]
    value = frame[columns].to_numpy(dtype=float)
    lines = [_Lines.of(plot, day, value[:, place], target, extrapolate) for place in range(len(columns))]
    wanted = np.isfinite(target)
    repeated = np.stack([line.repeated for line in lines], axis=1) if lines else np.zeros((len(frame), 0), dtype=bool)
    inside = np.stack([line.inside for line in lines], axis=1) if lines else repeated
    made = np.stack([line.value for line in lines], axis=1) if lines else value
    some = wanted & repeated.any(axis=1)
    within = some & (inside | ~repeated).all(axis=1)
    drawn = some & ~within & (np.isfinite(made) | ~repeated).all(axis=1)
    moved = within | drawn
    kind = np.where(wanted & ~moved, 3, np.where(drawn, 2, np.where(within, 1, 0)))
    kind = np.where(wanted & (target == day), 0, kind)
    new = np.where(moved[:, None] & repeated, made, value)
    date = np.where(moved, target, day)
    out = frame.assign(
        **{name: new[:, place] for place, name in enumerate(columns)},
        date=pd.to_datetime(pd.Series(date), unit="D", origin="unix").astype(frame["date"].dtype),
        date_kind=pd.Categorical([MOVED[code] for code in kind.tolist()], list(MOVED)),
    )
    once = wanted & moved & (kind > 0) & (np.isfinite(value) & ~repeated).any(axis=1)
    out.index = plot_parts.index
    return out, _told(frame, kind, np.abs(target - day), once, ~np.isfinite(day))


@dataclass(frozen=True)
class _Lines:
    """Values of one column on the lines between visits; ``inside`` says where they lie between two visits."""

    value: np.ndarray
    inside: np.ndarray
    repeated: np.ndarray

    @classmethod
    def of(cls, plot: np.ndarray, day: np.ndarray, value: np.ndarray, target: np.ndarray, extrapolate: bool) -> _Lines:
        measured = np.isfinite(value) & np.isfinite(day)
        rows = np.flatnonzero(measured)
        rows = rows[np.lexsort((day[rows], plot[rows]))]
        made, inside = np.full(len(value), np.nan), np.zeros(len(value), dtype=bool)
        visits = np.bincount(plot[rows], minlength=int(plot.max(initial=-1)) + 1)
        repeated = measured & (visits[plot] > 1)
        wanted = np.flatnonzero(repeated & np.isfinite(target))
        if not len(wanted):
            return cls(made, inside, repeated)
        origin = min(day[rows].min(), target[wanted].min())
        width = max(day[rows].max(), target[wanted].max()) - origin + 1.0
        keys, own = plot[rows] * width + day[rows] - origin, plot[wanted]
        sought = own * width + target[wanted] - origin
        before = np.searchsorted(keys, sought, side="right") - 1  # last visit not after the date
        after = np.searchsorted(keys, sought, side="left")  # first visit not before it
        has_before = (before >= 0) & (plot[rows[np.maximum(before, 0)]] == own)
        has_after = (after < len(rows)) & (plot[rows[np.minimum(after, len(rows) - 1)]] == own)
        inside[wanted] = has_before & has_after
        first = np.where(has_before, np.where(has_after, before, before - 1), after)
        second = np.where(has_before, np.where(has_after, after, before), after + 1)
        ends = [rows[np.clip(end, 0, len(rows) - 1)] for end in (first, second)]
        (day_1, day_2), (value_1, value_2) = ([column[end] for end in ends] for column in (day, value))
        span = day_2 - day_1
        share = np.divide(target[wanted] - day_1, span, out=np.zeros_like(span), where=span != 0)
        line = np.maximum(value_1 + (value_2 - value_1) * share, 0.0)
        made[wanted] = np.where(inside[wanted] | (extrapolate & (span != 0)), line, np.nan)
        return cls(made, inside, repeated)


def _densities(frame: pd.DataFrame) -> list[str]:
    """Columns that hold densities: parts, pools, and the shoot biomass they rest on."""
    named = [name for name in frame if "." in str(name) or name in POOL_ORDER or name == "biomass_t_ha"]
    return [str(name) for name in named if pd.api.types.is_numeric_dtype(frame[name])]


def _days(dates: pd.Series) -> np.ndarray:
    stamp = pd.to_datetime(dates).to_numpy(dtype="datetime64[s]")
    return np.where(np.isnat(stamp), np.nan, stamp.astype(np.int64) / _SECONDS_PER_DAY)


def _targets(survey: pd.Series, dates_by_survey: Mapping[str, object]) -> np.ndarray:
    """Return the common date of each row [d since 1970]; NaN where its survey has none."""
    days = {}
    for name, date in dates_by_survey.items():
        stamp = pd.to_datetime(str(date), errors="coerce")
        if pd.isna(stamp):
            raise UserError(
                f"the common date {date!r} of survey {name!r} is not a date", remedy="Write it as in 2014-07-01."
            )
        days[str(name)] = float(_days(pd.Series([stamp]))[0])
    return survey.astype("str").map(days).to_numpy(dtype=float)


#: Rule, severity, message and remedy of what is found.
_TEXTS = (
    (
        "moved to a common date",
        "note",
        "{count} of {total} plots of survey {survey} were moved to its common date, on straight lines between their "
        "own visits, by {mean:.0f} days on average and {most:.0f} at most.",
        "",
    ),
    (
        "beyond the visits of a plot",
        "warning",
        "The common date of survey {survey} lies before the first or after the last visit of {count} of {total} plots; "
        "their values were drawn on from the two nearest visits: {names}.",
        "Choose a date between the visits, or do without extrapolation.",
    ),
    (
        "not moved to the common date",
        "warning",
        "{count} of {total} plots of survey {survey} keep the values and date of their visit, up to {most:.0f} days "
        "from the common date, which does not lie between two visits of theirs: {names}.",
        "Choose a date between the visits, or take the values as they are.",
    ),
    (
        "visit without a date",
        "warning",
        "{count} of {total} plots of survey {survey} have no date and could not be moved to a common date: {names}.",
        "Give the date of each visit.",
    ),
    (
        "part measured once",
        "note",
        "{count} of {total} plots of survey {survey} have parts measured at no other visit; these keep their values "
        "while the others were moved to the common date: {names}.",
        "",
    ),
)


def _told(
    frame: pd.DataFrame, kind: np.ndarray, shift: np.ndarray, once: np.ndarray, undated: np.ndarray
) -> pd.DataFrame:
    """Report by survey the rows moved, drawn beyond the visits, and left where they are."""
    names, labels = frame["plot"].astype("str").to_numpy(dtype=object), frame["survey"].astype("str")
    which = (kind == 1, kind == 2, (kind == 3) & ~undated, (kind == 3) & undated, once)
    found = []
    for survey in labels.unique():
        mine = (labels == survey).to_numpy(dtype=bool)
        for (rule, severity, text, remedy), rows in zip(_TEXTS, which, strict=True):
            hit = np.flatnonzero(mine & rows)
            if not len(hit):
                continue
            days = shift[hit]
            words = {
                "count": len(hit),
                "total": int(mine.sum()),
                "survey": survey,
                "names": name_list(list(names[hit])),
                "mean": days.mean(),
                "most": days.max(),
            }
            found.append(
                make_findings(
                    rule,
                    severity=severity,
                    table="plots",
                    column="date",
                    value=str(len(hit)),
                    survey=str(survey),
                    message=text.format(**words),
                    remedy=remedy,
                )
            )
    return join_findings(found)
