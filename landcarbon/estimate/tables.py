"""From tables to arrays: plots, strata and parcels as the estimators need them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.errors import UserError
from landcarbon.estimate.clusters import unit_codes
from landcarbon.estimate.groups import label_codes
from landcarbon.estimate.ratio import Sample

__all__ = ["ALL", "LEVELS", "POOL_ORDER", "Plots", "Units", "pool_list", "read_plots"]

POOL_ORDER = ("above_ground", "below_ground", "dead_wood", "litter", "soil", "harvested_wood", "all")
ALL = "all"
LEVELS = ("inventory", "stratum", "parcel")

_REQUIRED = ("survey", "plot", "parcel", "stratum", "date", "size", "inside")


@dataclass(frozen=True)
class Units:
    """Strata and parcels with their areas.

    Attributes
    ----------
    strata : list of str
        In the order of the strata table, then those only plots name.
    stratum_area_ha : ndarray
        NaN if unknown.
    parcels : list of str
        In the order of the parcels table; empty if there is none.
    parcel_area_ha : ndarray
        NaN if unknown.
    first_phase : ndarray, optional
        Points of the first phase that tell the area of each stratum; NaN where the area is known exactly.
    """

    strata: list[str]
    stratum_area_ha: np.ndarray
    parcels: list[str]
    parcel_area_ha: np.ndarray
    first_phase: np.ndarray | None = None

    @property
    def has_total(self) -> bool:
        """Whether areas allow an estimate for the whole inventory."""
        return len(self.strata) == 1 or bool(np.isfinite(self.stratum_area_ha).all())


@dataclass(frozen=True)
class Plots:
    """Plot table prepared once for all surveys, sorted by plot.

    Attributes
    ----------
    frame : DataFrame
        The rows, sorted by plot; columns as given.
    pools : list of str
        Pools to estimate, in canonical order; or their parts.
    units : Units
        Strata and parcels.
    survey : ndarray of str
        Survey of each row.
    plot, stratum, parcel : ndarray of int
        Codes of each row; -1 for none.
    size : ndarray
        Relative sampled area, times the weight of the plot if there are weights.
    value : ndarray
        Density by row and pool [t C/ha]; NaN if not measured.
    inside : ndarray of bool
        Whether the plot lies in the population.
    day : ndarray
        Date of the visit [d since 1970]; NaN if unknown.
    unit : ndarray of int, optional
        Sampling unit of each row; None if there are no clusters.
    place : ndarray, optional
        Position of each row [m]; shape (rows, 2). None if there are no positions.
    """

    frame: pd.DataFrame
    pools: list[str]
    units: Units
    survey: np.ndarray
    plot: np.ndarray
    stratum: np.ndarray
    parcel: np.ndarray
    size: np.ndarray
    value: np.ndarray
    inside: np.ndarray
    day: np.ndarray
    unit: np.ndarray | None = None
    place: np.ndarray | None = None

    def taken(self) -> np.ndarray:
        """Rows that can enter an estimate, whatever the pool."""
        return self.inside & (self.stratum >= 0) & (self.size > 0)

    def sample(self, survey: str) -> Sample:
        """Return the plots of one survey as arrays.

        Raises
        ------
        UserError
            If a plot occurs twice in the survey.
        """
        rows = np.flatnonzero((self.survey == survey) & self.taken())
        plot = self.plot[rows]
        twice = np.flatnonzero(plot[1:] == plot[:-1])
        if len(twice):
            name = self.frame["plot"].iloc[rows[twice[0]]]
            raise UserError(
                f"plot {name!r} occurs more than once in survey {survey!r}",
                where="plot table",
                remedy="Give one row per plot and survey.",
            )
        used = np.isfinite(self.value[rows])
        return Sample(
            plot=plot,
            stratum=self.stratum[rows],
            parcel=self.parcel[rows],
            size=self.size[rows],
            value=np.where(used, self.value[rows], 0.0),
            used=used,
            day=self.day[rows],
            unit=None if self.unit is None else self.unit[rows],
            place=None if self.place is None else self.place[rows],
        )


def pool_list(pools: Sequence[str]) -> list[str]:
    """Pools in canonical order with ``all`` last.

    Raises
    ------
    UserError
        If a name is not a pool.
    """
    wrong = [name for name in pools if name not in POOL_ORDER]
    if wrong:
        raise UserError(f"{wrong[0]!r} is not a pool", where="pools", remedy=f"Pools are {', '.join(POOL_ORDER)}.")
    return [name for name in POOL_ORDER if name in pools or name == ALL]


def read_plots(
    plot_pools: pd.DataFrame,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None,
    pools: Sequence[str],
    *,
    parts: Sequence[str] | None = None,
) -> Plots:
    """Turn the plot table into arrays.

    Parameters
    ----------
    plot_pools : DataFrame
        One row per visited plot and survey: survey, plot, parcel, stratum, date, size, inside and one column per pool.
        Optional: weight (relative land a plot stands for within its stratum, 1 if missing from the table), cluster
        (blank for none), x and y [m].
    strata : DataFrame
        stratum, area_ha; optional first_phase (points that tell the area, NaN where it is known exactly).
    parcels : DataFrame or None
        parcel, area_ha.
    pools : sequence of str
        Pools counted; ``all`` is added.
    parts : sequence of str, optional
        Columns to take instead of those of the pools.

    Returns
    -------
    Plots

    Raises
    ------
    UserError
        If a column is missing, a label is listed twice, an area is negative, a weight is not above 0, or a count of
        points of the first phase is negative.
    """
    names = pool_list(pools) if parts is None else list(parts)
    lacking = [name for name in (*_REQUIRED, *names) if name not in plot_pools]
    if lacking:
        raise UserError(
            f"the plot table has no column {', '.join(lacking)}",
            where="plot table",
            remedy=f"It needs {', '.join(_REQUIRED)} and one column per {'pool' if parts is None else 'part'}.",
        )
    code, _ = pd.factorize(plot_pools["plot"].astype("category"), sort=True)
    order = np.argsort(code, kind="stable")
    frame = plot_pools.iloc[order]
    inside = frame["inside"].to_numpy(dtype=bool)
    units = _units(frame["stratum"][inside], strata, parcels)
    dates = pd.to_datetime(frame["date"]).to_numpy(dtype="datetime64[ns]")
    day = np.where(np.isnat(dates), np.nan, dates.astype(np.int64) / (24 * 3600 * 1e9))  # nanoseconds to days
    plot, stratum = code[order].astype(np.int64), label_codes(frame["stratum"], units.strata)
    return Plots(
        frame=frame,
        pools=names,
        units=units,
        survey=frame["survey"].astype("str").to_numpy(dtype=object),
        plot=plot,
        stratum=stratum,
        parcel=label_codes(frame["parcel"], units.parcels),
        size=_sizes(frame),
        value=frame[names].to_numpy(dtype=float),
        inside=inside,
        day=day,
        unit=unit_codes(frame["cluster"], stratum, plot) if "cluster" in frame else None,
        place=frame[["x", "y"]].to_numpy(dtype=float) if {"x", "y"} <= set(frame) else None,
    )


def _sizes(frame: pd.DataFrame) -> np.ndarray:
    """Return sampled area times weight, if there are weights."""
    size = frame["size"].to_numpy(dtype=float)
    if "weight" not in frame:
        return size
    weight = frame["weight"].to_numpy(dtype=float)
    bad = ~(weight > 0) | ~np.isfinite(weight)
    if bad.any():
        name = frame["plot"].iloc[int(np.argmax(bad))]
        raise UserError(
            f"the weight of plot {name!r} is not a number above 0",
            where="plot table, column weight",
            remedy="Give the land each plot stands for, relative to the other plots of its stratum; 1 for all alike.",
        )
    return size * weight


def _units(named: pd.Series, strata: pd.DataFrame, parcels: pd.DataFrame | None) -> Units:
    listed = [str(name) for name in strata["stratum"]]
    _check_units("stratum", listed, strata["area_ha"])
    extra = sorted({str(name) for name in named.dropna().unique()} - set(listed) - {""})
    area = np.append(strata["area_ha"].to_numpy(dtype=float), np.full(len(extra), np.nan))
    points = _first_phase(strata, listed, len(extra))
    if parcels is None:
        return Units(listed + extra, area, [], np.zeros(0), points)
    names = [str(name) for name in parcels["parcel"]]
    _check_units("parcel", names, parcels["area_ha"])
    return Units(listed + extra, area, names, parcels["area_ha"].to_numpy(dtype=float), points)


def _first_phase(strata: pd.DataFrame, names: list[str], extra: int) -> np.ndarray | None:
    """Points of the first phase by stratum; None if no area rests on any."""
    if "first_phase" not in strata:
        return None
    points = strata["first_phase"].to_numpy(dtype=float)
    low = points < 0
    if low.any():
        raise UserError(
            f"stratum {names[int(np.argmax(low))]!r} has a negative number of points of the first phase",
            where="strata table, column first_phase",
            remedy="Give the number of points, or leave the cell empty where the area is known exactly.",
        )
    return np.append(points, np.full(extra, np.nan)) if np.isfinite(points).any() else None


def _check_units(kind: str, names: list[str], area: pd.Series) -> None:
    twice = pd.Index(names, dtype=object).duplicated()
    if twice.any():
        raise UserError(
            f"{kind} {names[int(np.argmax(twice))]!r} is listed twice",
            where=f"{kind} table",
            remedy="Give each one row.",
        )
    low = area.to_numpy(dtype=float) < 0
    if low.any():
        raise UserError(
            f"{kind} {names[int(np.argmax(low))]!r} has a negative area", where=f"{kind} table", remedy="Mend the area."
        )
