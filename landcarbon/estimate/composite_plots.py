"""What the plots of each parcel tell by themselves: means, numbers, and the variance their number makes likely.

Symbols are those of ``docs/estimation.md``. Shapes: plots n, parts K, pools J, parcels P, strata H.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.estimate.groups import group_sum, label_codes
from landcarbon.estimate.ratio import MIN_PLOTS
from landcarbon.estimate.smoothing import Layer, UnitVariance, parcel_variance, unit_variance
from landcarbon.estimate.tables import ALL

__all__ = ["Evidence", "Places", "plot_evidence"]


@dataclass(frozen=True)
class Places:
    """Parcels and strata of the tables.

    Attributes
    ----------
    parcels, strata : list of str
        Labels.
    stratum : ndarray of int
        Stratum of each parcel; H where it has none of its own; shape (P,).
    area_ha : ndarray
        Area of each parcel [ha]; shape (P,).
    stratum_area_ha : ndarray
        Area of each stratum [ha]; NaN if unknown; shape (H,).
    """

    parcels: list[str]
    strata: list[str]
    stratum: np.ndarray
    area_ha: np.ndarray
    stratum_area_ha: np.ndarray


@dataclass(frozen=True)
class Evidence:
    """Evidence of the plots of one survey, or of the change between two.

    Attributes
    ----------
    density : ndarray
        Mean of the parcel's own plots, from one plot on; parts without plots there by the mean of the stratum; NaN
        without any plot; shape (P, J) [t C/ha].
    plots : ndarray of int
        Fewest plots of a part, of those the parcel has plots of; 0 without any; shape (P, J).
    whole : ndarray of bool
        Every part of the pool has two plots or more in the parcel (at either date); shape (P, J).
    variance : ndarray
        Sampling variance of ``density`` that the variance between plots makes likely; NaN without plots; shape (P, J).
    between : ndarray
        Variance between single plots of the parcel's stratum; shape (P, J).
    scale : ndarray
        Standard deviation between single plots that the variance function gives for the parcel's stratum; shape (P, J).
    df : ndarray
        Degrees of freedom of ``variance``; shape (P, J).
    correlation : ndarray
        Of pools, between plots of a stratum; shape (J, J).
    lacking : ndarray of bool
        Part has no plots in a parcel where another part of its pool has some; shape (P, K).
    parts : list of str
        Names of the parts.
    part_pool : ndarray of int
        Pool of each part.
    power, within : ndarray
        Of the variance function, for the largest part of each pool; shape (J,).
    days : ndarray
        Mean date of the last survey less that of the first, over all plots of the parcel's stratum; shape (P,) [d].
    """

    density: np.ndarray
    plots: np.ndarray
    whole: np.ndarray
    variance: np.ndarray
    between: np.ndarray
    scale: np.ndarray
    df: np.ndarray
    correlation: np.ndarray
    lacking: np.ndarray
    parts: list[str]
    part_pool: np.ndarray
    power: np.ndarray
    within: np.ndarray
    days: np.ndarray


@dataclass(frozen=True)
class _Table:
    """Units (plots, or clusters of plots within a parcel) of one survey."""

    unit: np.ndarray
    parcel: np.ndarray
    stratum: np.ndarray
    value: np.ndarray
    used: np.ndarray
    size: np.ndarray
    share: np.ndarray
    day: np.ndarray

    def mean_day(self, strata: int) -> np.ndarray:
        """Mean date of the units of each stratum [d]; NaN without, and in the last row; shape (H + 1,)."""
        number = np.bincount(self.stratum, minlength=strata + 1)
        total = np.bincount(self.stratum, weights=self.day, minlength=strata + 1)
        return np.divide(total, number, out=np.full(strata + 1, np.nan), where=number > 0)

    def means(self, parcels: int) -> tuple[np.ndarray, np.ndarray]:
        """Mean and number of units by parcel and part; shape (P, K)."""
        rows = self.parcel >= 0
        weighted = self.share[rows] * self.value[rows]
        number = group_sum(self.used[rows], self.parcel[rows], parcels)
        mean = group_sum(weighted, self.parcel[rows], parcels)
        return np.where(number > 0, mean, np.nan), number

    def stratum_means(self, strata: int) -> np.ndarray:
        """Mean by stratum and part, shape (H + 1, K); NaN without units, and in the last row."""
        whole = group_sum(self.size, self.stratum, strata)
        total = group_sum(self.size * self.value, self.stratum, strata)
        mean = np.divide(total, whole, out=np.full_like(total, np.nan), where=whole > 0)
        return np.concatenate([mean, np.full((1, mean.shape[1]), np.nan)])


def plot_evidence(
    plot_parts: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    surveys: Sequence[str],
    places: Places,
    pools: Sequence[str],
) -> Evidence:
    """Gather what plots tell of each parcel.

    Parameters
    ----------
    plot_parts : DataFrame
        One row per plot and survey: survey, plot, parcel, stratum, inside, size, a column per part [t C/ha], and
        cluster and weight if there are any.
    sums : mapping
        Parts of each pool.
    surveys : sequence of str
        One survey, or the earlier and the later one.
    places : Places
        Parcels and strata.
    pools : sequence of str
        Pools, without ``all``.
    """
    picked = [_rows(plot_parts, survey) for survey in surveys]
    columns, part_pool = _parts(picked, sums, pools)
    picked = [part.assign(**{name: part[name].astype(float) for name in columns}) for part in picked]
    if len(columns) > len(set(part_pool)) and not any(part[columns].isna().to_numpy().any() for part in picked):
        names = {pool: [c for c, p in zip(columns, part_pool, strict=True) if p == at] for at, pool in enumerate(pools)}
        names = {pool: mine for pool, mine in names.items() if mine}
        picked = [part.assign(**{pool: part[mine].sum(axis=1) for pool, mine in names.items()}) for part in picked]
        columns, part_pool = list(names), np.array([list(pools).index(pool) for pool in names])
    tables = [_table(part, columns, places) for part in picked]
    member = np.arange(len(pools))[:, None] == np.asarray(part_pool, dtype=int)
    layers = _layers(tables, len(places.strata))
    return _evidence(tables, layers, member, places, columns)


def _rows(plot_parts: pd.DataFrame, survey: str) -> pd.DataFrame:
    size = plot_parts["size"].to_numpy(dtype=float)
    weight = plot_parts["weight"].to_numpy(dtype=float) if "weight" in plot_parts else np.ones(len(plot_parts))
    here = (plot_parts["survey"].astype("str") == survey).to_numpy() & plot_parts["inside"].to_numpy(dtype=bool)
    kept = here & (size > 0) & (weight > 0)
    return plot_parts[kept].assign(_size=(size * weight)[kept])


def _parts(
    picked: list[pd.DataFrame], sums: Mapping[str, Sequence[str]], pools: Sequence[str]
) -> tuple[list[str], np.ndarray]:
    """Parts that were measured at every survey, and the pool of each."""
    columns, part_pool = [], []
    for at, pool in enumerate(pools):
        given = sums.get(pool, [pool])
        for name in given:
            if pool != ALL and all(name in part and part[name].notna().any() for part in picked):
                columns.append(str(name))
                part_pool.append(at)
    return columns, np.array(part_pool, dtype=int)


def _table(part: pd.DataFrame, columns: list[str], places: Places) -> _Table:
    """Arrays of one survey, plots of a cluster within a parcel taken together, sorted by unit."""
    stratum, parcel = label_codes(part["stratum"], places.strata), label_codes(part["parcel"], places.parcels)
    label = part["plot"].astype("str")
    if "cluster" in part and (part["cluster"].astype("str") != "").any():
        cluster = part["cluster"].astype("str").fillna("")
        label = ("p " + label).where(cluster == "", "c " + cluster)
    rows = stratum >= 0
    value = part[columns].to_numpy(dtype=float)[rows]
    used = np.isfinite(value)
    size = np.where(used, part["_size"].to_numpy(dtype=float)[rows, None], 0.0)
    stratum, parcel = stratum[rows], parcel[rows]
    keys = pd.DataFrame({"unit": label.to_numpy(dtype=object)[rows], "parcel": parcel, "stratum": stratum})
    code = keys.groupby(["unit", "parcel", "stratum"], sort=True).ngroup().to_numpy()
    first = np.unique(code, return_index=True)[1]
    number = len(first)
    total = group_sum(size, code, number)
    origin = np.where(used, value, 0.0)
    origin = np.where(total > 0, group_sum(origin, code, number) / np.maximum(group_sum(used, code, number), 1.0), 0.0)
    apart = group_sum(size * np.where(used, value - origin[code], 0.0), code, number)
    mean = origin + np.divide(apart, total, out=np.zeros_like(total), where=total > 0)
    labels = keys["unit"].to_numpy(dtype=object)[first].astype(str)
    days = (pd.to_datetime(part["date"]) - pd.Timestamp(0)) / pd.Timedelta(days=1)
    day = days.to_numpy(dtype=float)[rows][first]
    made = _Table(labels, parcel[first], stratum[first], mean, total > 0, total, np.zeros_like(total), day)
    return replace(made, share=_shares(made, places))


def _shares(table: _Table, places: Places) -> np.ndarray:
    """Weight of each unit in the mean of its parcel: size, expanded to its stratum where areas are known."""
    area = places.stratum_area_ha
    expansion = np.ones((len(area), table.size.shape[1]))
    if np.isfinite(area).all():
        whole = group_sum(table.size, table.stratum, len(area))
        expansion = np.divide(area[:, None], whole, out=np.zeros_like(whole), where=whole > 0)
        expansion = np.where(area[:, None] > 0, expansion, 1.0)
    weight = table.size * expansion[table.stratum]
    inside = table.parcel >= 0
    total = group_sum(weight[inside], table.parcel[inside], len(places.parcels))[np.maximum(table.parcel, 0)]
    return np.divide(weight, total, out=np.zeros_like(weight), where=inside[:, None] & (total > 0))


def _layers(tables: list[_Table], strata: int) -> list[Layer]:
    """Layers with independent errors: one survey, or repeated units, those of the first date, those of the second."""

    def layer(table: _Table, share: np.ndarray) -> Layer:
        return Layer(
            table.parcel, table.stratum, strata, table.value, table.used, table.size, share, np.abs(table.value)
        )

    if len(tables) == 1:
        return [layer(tables[0], tables[0].share)]
    one, two = tables
    # a cluster may lie in several parcels, and is a unit in each
    keys = [pd.MultiIndex.from_arrays([table.unit, table.parcel, table.stratum]) for table in tables]
    at = keys[1].get_indexer(keys[0])
    first = np.flatnonzero(at >= 0)
    second = at[first]
    both = one.used[first] & two.used[second]
    change = np.where(both, two.value[second] - one.value[first], 0.0)
    repeated = Layer(
        parcel=one.parcel[first],
        stratum=one.stratum[first],
        strata=strata,
        value=change,
        used=both,
        size=np.where(both, 0.5 * (one.size[first] + two.size[second]), 0.0),
        share=np.where(both, two.share[second], 0.0),
        # strata of one density may grow, or be felled, very differently
        level=np.abs(change),
    )
    early, late = one.share.copy(), two.share.copy()
    # w2 y2 - w1 y1 = w2 (y2 - y1) + (w2 - w1) y1 on repeated units
    early[first] = np.where(both, two.share[second] - one.share[first], one.share[first])
    late[second] = np.where(both, 0.0, two.share[second])
    return [repeated, layer(one, early), layer(two, late)]


def _evidence(
    tables: list[_Table], layers: list[Layer], member: np.ndarray, places: Places, columns: list[str]
) -> Evidence:
    parcels = len(places.parcels)
    found = [table.means(parcels) for table in tables]
    number = np.minimum.reduce([count for _, count in found])
    mean = found[-1][0] - (found[0][0] if len(tables) > 1 else 0.0)
    strata = [table.stratum_means(len(places.strata)) for table in tables]
    fallback = strata[-1] - (strata[0] if len(tables) > 1 else 0.0)
    units = _units(layers)
    here = _stratum_of(tables[-1], places)
    has = number > 0
    some = np.stack([(has & row).any(axis=1) for row in member], axis=1)
    lacking = ~has & some[:, member.argmax(axis=0)]
    filled = np.where(has, mean, np.where(lacking, fallback[here], 0.0))
    brought = [parcel_variance(layer, unit, member, parcels) for layer, unit in zip(layers, units, strict=True)]
    at = 0 if units[0].df[:-1].any() else -1  # plots of the last survey where too few repeat
    main = units[at]
    variance = np.sum(brought, axis=0) + np.where(lacking, main.total[here], 0.0) @ member.T
    fewest = np.stack([np.where(row & has, number, np.inf).min(axis=1, initial=np.inf) for row in member], axis=1)
    weight = np.nan_to_num(main.total).mean(axis=0)
    empty = ~member.any(axis=1)
    largest = np.where(member, weight, -1.0).argmax(axis=1) if columns else np.zeros(len(member), dtype=int)
    wide = [np.concatenate([values, np.zeros((len(values), 1))], axis=1) for values in (main.df, main.power[None])]
    largest = np.where(empty, len(columns), largest)
    return Evidence(
        density=np.where(some, filled @ member.T, np.nan),
        plots=np.where(np.isfinite(fewest), fewest, 0).astype(np.int64),
        whole=np.stack([(number >= MIN_PLOTS)[:, row].all(axis=1) & row.any() for row in member], axis=1),
        variance=np.where(some, variance, np.nan),
        between=_of_pools(main, main.total, member)[here],
        scale=np.sqrt(_of_pools(main, main.function, member))[here],
        df=wide[0][here][:, largest],
        correlation=unit_variance(layers[at].summed(member)).correlation,
        lacking=lacking,
        parts=columns,
        part_pool=member.argmax(axis=0),
        power=wide[1][0, largest],
        within=np.append(main.within, False)[largest],
        days=(tables[-1].mean_day(len(places.strata)) - tables[0].mean_day(len(places.strata)))[here],
    )


def _units(layers: list[Layer]) -> list[UnitVariance]:
    """Variance between units of each layer; where too few repeat, their change is taken as that of two surveys."""
    units = [unit_variance(layer) for layer in layers]
    if len(units) == 1:
        return units
    both, one, two = units
    variance = np.where(np.isfinite(both.variance), both.variance, one.variance + two.variance)
    total = np.where(np.isfinite(both.total), both.total, one.total + two.total)
    function = np.where(np.isfinite(both.function), both.function, one.function + two.function)
    return [replace(both, variance=variance, total=total, function=function), one, two]


def _of_pools(unit: UnitVariance, variance: np.ndarray, member: np.ndarray) -> np.ndarray:
    """Variance between single plots of a stratum, from that of parts to that of pools; shape (H + 1, J)."""
    deviation = np.sqrt(variance)
    found = np.zeros((len(deviation), len(member)))
    for pool, row in enumerate(member):
        inner = unit.correlation[np.ix_(row, row)]
        found[:, pool] = np.einsum("hk,kl,hl->h", deviation[:, row], inner, deviation[:, row])
    return np.maximum(found, 0.0)


def _stratum_of(table: _Table, places: Places) -> np.ndarray:
    """Stratum of each parcel; for those of no stratum of their own that of most of their plots, else H."""
    strata = len(places.strata)
    rows = table.parcel >= 0
    cell = table.parcel[rows] * strata + table.stratum[rows]
    count = np.bincount(cell, minlength=len(places.parcels) * strata).reshape(-1, strata)
    told = np.where(count.any(axis=1), count.argmax(axis=1), strata) if strata else np.full(len(places.parcels), 0)
    return np.where(places.stratum < strata, places.stratum, told)
