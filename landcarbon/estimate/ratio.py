"""Stratified ratio of means and domain estimates, for many pools and many domains at once.

One formula serves the inventory, its strata and its parcels: each is a domain of the stratified sample. Symbols are
those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.clusters import pieces_of_clusters, pieces_of_plots
from landcarbon.estimate.groups import group_sum, narrow, wide
from landcarbon.estimate.interval import satterthwaite

__all__ = ["Cells", "Deviations", "Means", "RatioEstimate", "Sample", "counts", "deviations", "means", "ratio_of_means"]

MIN_PLOTS = 2  # a variance needs two observations


@dataclass(frozen=True)
class Sample:
    """Plots of one survey as arrays.

    Attributes
    ----------
    plot : ndarray of int
        Number of the plot, distinct within the survey, rising.
    stratum : ndarray of int
        Stratum of each plot, 0 to H - 1.
    parcel : ndarray of int
        Parcel of each plot; -1 if none.
    size : ndarray
        What the plot counts for, above 0: its relative sampled area, times its weight if there are weights.
    value : ndarray
        Density by plot and pool [t C/ha]; 0 where not used.
    used : ndarray of bool
        Plot has a value of the pool; shape of ``value``.
    day : ndarray
        Date of the visit [d]; NaN if unknown.
    unit : ndarray of int, optional
        Sampling unit of each plot, within its stratum; without it each plot is one.
    place : ndarray, optional
        Position of each plot [m]; shape (plots, 2), NaN if unknown.
    """

    plot: np.ndarray
    stratum: np.ndarray
    parcel: np.ndarray
    size: np.ndarray
    value: np.ndarray
    used: np.ndarray
    day: np.ndarray
    unit: np.ndarray | None = None
    place: np.ndarray | None = None


@dataclass(frozen=True)
class Cells:
    """Parts of domains within strata: the distinct pairs of domain and stratum that hold a plot.

    Attributes
    ----------
    domain, stratum : ndarray of int
        One entry per cell, sorted by domain, then stratum.
    domains, strata : int
        Numbers of domains and strata.
    """

    domain: np.ndarray
    stratum: np.ndarray
    domains: int
    strata: int

    @classmethod
    def of(cls, domains: int, strata: int, *pairs: tuple[np.ndarray, np.ndarray]) -> Cells:
        """Make the cells that occur in one or several samples.

        Parameters
        ----------
        domains, strata : int
            Numbers of domains and strata.
        *pairs : tuple of ndarray
            Domain (-1 for none) and stratum of each plot, for each sample.
        """
        keys = [domain[domain >= 0] * strata + stratum[domain >= 0] for domain, stratum in pairs]
        if domains * strata <= _most_cells(sum(len(key) for key in keys)):  # marking is quicker than sorting
            there = np.zeros(domains * strata, dtype=bool)
            for key in keys:
                there[key] = True
            distinct = np.flatnonzero(there)
        else:
            distinct = np.unique(np.concatenate(keys))
        return cls(distinct // max(strata, 1), distinct % max(strata, 1), domains, strata)

    def find(self, domain: np.ndarray, stratum: np.ndarray) -> np.ndarray:
        """Cell number of each plot; domains must not be -1."""
        keys, wanted = self.domain * self.strata + self.stratum, domain * self.strata + stratum
        if self.domains * self.strata > _most_cells(len(wanted)):
            return np.searchsorted(keys, wanted)
        place = np.zeros(self.domains * self.strata, dtype=np.int64)
        place[keys] = np.arange(len(keys))
        return place[wanted]


def _most_cells(rows: int) -> int:
    """Pairs of domain and stratum up to which a table of all of them is worth its memory."""
    return 4 * rows + 1_000_000


@dataclass(frozen=True)
class Means:
    """Domain means with what the variance needs. Shapes: rows n, cells C, strata H, domains D, pools K.

    Attributes
    ----------
    rows, cell : ndarray of int
        Plots that lie in a domain, and their cell; shape (n,).
    size : ndarray
        Size, 0 where the plot is not counted; shape (n, K).
    plots_stratum, size_stratum, square_stratum : ndarray
        Counted plots, sum of size and of squared size by stratum; shape (H, K).
    plots_cell, square_cell : ndarray
        Counted plots and sum of squared size by cell; shape (C, K).
    weight : ndarray
        What one unit of size in a cell weighs in the domain mean; shape (C, K).
    density : ndarray
        Domain mean, NaN where no counted plot has weight; shape (D, K).
    """

    rows: np.ndarray
    cell: np.ndarray
    size: np.ndarray
    plots_stratum: np.ndarray
    size_stratum: np.ndarray
    square_stratum: np.ndarray
    plots_cell: np.ndarray
    square_cell: np.ndarray
    weight: np.ndarray
    density: np.ndarray


@dataclass(frozen=True)
class Deviations:
    """Linearised deviations of the plots and the variance of each cell.

    Attributes
    ----------
    inside : ndarray
        Deviation of each plot in a domain from the mean of its domain, times size; shape (n, K).
    slope : ndarray
        What a unit of size of any plot of the stratum takes off, by cell; shape (C, K).
    variance : ndarray
        Part of the cell in the variance of the domain mean; shape (C, K).
    within : ndarray
        Sum of the squared deviations of the units with a plot in the cell; shape (C, K).
    units_stratum, units_cell : ndarray
        Sampling units that count, by stratum and cell; shapes (H, K) and (C, K).
    """

    inside: np.ndarray
    slope: np.ndarray
    variance: np.ndarray
    within: np.ndarray
    units_stratum: np.ndarray
    units_cell: np.ndarray


@dataclass(frozen=True)
class RatioEstimate:
    """Domain estimates.

    Attributes
    ----------
    density, variance, df : ndarray
        Mean [t C/ha], its variance and degrees of freedom, shape (D, K); NaN where a domain has fewer than two units.
    plots : ndarray of int
        Counted plots; shape (D, K).
    units : ndarray of int, optional
        Counted sampling units; shape (D, K).
    near : ndarray, optional
        Share of the strata whose variance comes from neighbouring plots; shape (D, K). None if it was not asked for.
    """

    density: np.ndarray
    variance: np.ndarray
    df: np.ndarray
    plots: np.ndarray
    units: np.ndarray | None = None
    near: np.ndarray | None = None


def counts(sample: Sample, strata: int) -> np.ndarray:
    """Count plots with a value, by stratum and pool; shape (H, K)."""
    return group_sum(sample.used, sample.stratum, strata)


def means(sample: Sample, domain: np.ndarray, cells: Cells, area_ha: np.ndarray, allowed: np.ndarray) -> Means:
    """Weighted domain means.

    Parameters
    ----------
    sample : Sample
        All plots of the survey.
    domain : ndarray of int
        Domain of each plot; -1 for none.
    cells : Cells
        Cells of these domains.
    area_ha : ndarray
        Area of each stratum [ha]; NaN if unknown, which only spoils domains that lie in several strata.
    allowed : ndarray of bool
        Strata that take part, by pool; shape (H, K).

    Returns
    -------
    Means

    Notes
    -----
    R_d = sum_h (A_h / S_h) sum_{i in d,h} s_i y_i / sum_h (A_h / S_h) sum_{i in d,h} s_i with S_h the sum of size over
    the whole stratum. With equal sizes A_h / S_h is the usual expansion of area per plot.
    """
    pools = sample.value.shape[1]
    counted = narrow(sample.used & allowed[sample.stratum])
    size_all = np.where(counted, sample.size[:, None], 0.0)
    rows = np.flatnonzero(domain >= 0)
    cell = cells.find(domain[rows], sample.stratum[rows])
    within = slice(None) if len(rows) == len(domain) else rows  # without copies where no plot is left out
    size, inside, value = size_all[within], counted[within], sample.value[within]

    def by_stratum(values: np.ndarray) -> np.ndarray:
        return wide(group_sum(values, sample.stratum, cells.strata), pools)

    def by_cell(values: np.ndarray) -> np.ndarray:
        return wide(group_sum(values, cell, len(cells.domain)), pools)

    size_stratum, plots_cell = by_stratum(size_all), by_cell(inside)
    several = group_sum(plots_cell > 0, cells.domain, cells.domains) > 1
    area = np.where(several[cells.domain], area_ha[cells.stratum][:, None], 1.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        expansion = np.where(plots_cell > 0, area / size_stratum[cells.stratum], 0.0)
        # sums run over differences from one value of the domain: exact where all values are equal
        origin = _last_values(value, wide(inside, pools), domain[within], cells.domains)
        apart = by_cell(size * (value - origin[domain[within]]))
        whole = group_sum(expansion * by_cell(size), cells.domain, cells.domains)
        density = origin + group_sum(expansion * apart, cells.domain, cells.domains) / whole
        weight = expansion / whole[cells.domain]
    return Means(
        rows=rows,
        cell=cell,
        size=wide(size, pools),
        plots_stratum=by_stratum(counted),
        size_stratum=size_stratum,
        square_stratum=by_stratum(size_all**2),
        plots_cell=plots_cell,
        square_cell=by_cell(size**2),
        weight=weight,
        density=density,
    )


def deviations(sample: Sample, mean: Means, cells: Cells) -> Deviations:
    """Linearise domain means over the whole sample of each stratum.

    Notes
    -----
    u_i = s_i 1_d (y_i - R_d) - r s_i with r the sum of the first term over the stratum by S_h; plots of the stratum
    outside the domain count with the second term alone. The part of a stratum in the variance is
    weight^2 n_h / (n_h - 1) sum u_i^2. Plots of a cluster are added up to one u first, and n_h counts clusters.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        rows = slice(None) if len(mean.rows) == len(sample.size) else mean.rows
        z = mean.size * (sample.value[rows] - mean.density[cells.domain[mean.cell]])
        slope = group_sum(z, mean.cell, len(cells.domain)) / mean.size_stratum[cells.stratum]
        slope = np.where(mean.plots_cell > 0, slope, 0.0)
        unit = sample.unit
        parts = pieces_of_plots(mean, z) if unit is None else pieces_of_clusters(unit, sample, mean, z, cells)
        within = group_sum((parts.z - slope[parts.cell] * parts.size) ** 2, parts.cell, len(cells.domain))
        beside = slope**2 * np.maximum(parts.square_stratum[cells.stratum] - parts.square_cell, 0.0)
        variance = mean.weight**2 * inflation(parts.units_stratum)[cells.stratum] * (within + beside)
    return Deviations(z, slope, variance, within, parts.units_stratum, parts.units_cell)


def inflation(plots: np.ndarray) -> np.ndarray:
    """Return n / (n - 1); 0 where n is below two."""
    return np.divide(plots, plots - 1.0, out=np.zeros_like(plots), where=plots >= MIN_PLOTS)


def cell_df(plots_cell: np.ndarray, plots_stratum: np.ndarray) -> np.ndarray:
    """Degrees of freedom of the variance part of a cell, from its plots or, if there are clusters, its units.

    A domain with few plots in a large stratum knows its variance from those few plots only, so the number is one less
    than the plots of the cell (at least 1), never more than the stratum allows. Zero for an empty cell.
    """
    few = np.clip(plots_cell - 1.0, 1.0, np.maximum(plots_stratum - 1.0, 1.0))
    return np.where(plots_cell > 0, few, 0.0)


def ratio_of_means(
    sample: Sample, domain: np.ndarray, domains: int, area_ha: np.ndarray, allowed: np.ndarray
) -> RatioEstimate:
    """Estimate domain means with their variance.

    Parameters
    ----------
    sample : Sample
        All plots of the survey.
    domain : ndarray of int
        Domain of each plot; -1 for none.
    domains : int
        Number of domains.
    area_ha : ndarray
        Area of each stratum [ha]; NaN if unknown.
    allowed : ndarray of bool
        Strata that take part, by pool; shape (strata, pools). Strata with fewer than two units must be left out.

    Returns
    -------
    RatioEstimate

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley: sections 5A.14 (domains) and 6.11 (separate
       ratio); section numbers from memory.
    """
    cells = Cells.of(domains, len(area_ha), (domain, sample.stratum))
    mean = means(sample, domain, cells, area_ha, allowed)
    spread = deviations(sample, mean, cells)
    plots = group_sum(mean.plots_cell, cells.domain, domains)
    units = plots if sample.unit is None else group_sum(spread.units_cell, cells.domain, domains)
    part_df = cell_df(spread.units_cell, spread.units_stratum[cells.stratum])
    df = np.minimum(satterthwaite(spread.variance, part_df, cells.domain, domains), units - 1)
    enough = (units >= MIN_PLOTS) & np.isfinite(mean.density)
    return RatioEstimate(
        density=np.where(enough, mean.density, np.nan),
        variance=np.where(enough, group_sum(spread.variance, cells.domain, domains), np.nan),
        df=np.where(enough, df, np.nan),
        plots=plots.astype(np.int64),
        units=units.astype(np.int64),
    )


def _last_values(value: np.ndarray, counted: np.ndarray, codes: np.ndarray, groups: int) -> np.ndarray:
    """Return one counted value of each group and column, a late one; 0 where there is none."""
    found = np.zeros((groups, value.shape[1]))
    whole = counted.all(axis=1)
    latest = np.full(groups, -1)
    latest[codes[whole]] = np.flatnonzero(whole)  # of repeated targets the last assignment stands
    found[latest >= 0] = value[latest[latest >= 0]]
    rest = np.flatnonzero(latest[codes] < 0)
    row, column = np.nonzero(counted[rest])
    found[codes[rest[row]], column] = value[rest[row], column]
    return found
