"""Estimates for domains of any column of the plot table: owners, land uses, classes of a map."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.errors import UserError
from landcarbon.estimate.clusters import unit_counts
from landcarbon.estimate.combine import SumEstimate, estimate_sums, plan_sums
from landcarbon.estimate.groups import group_sum, label_codes
from landcarbon.estimate.interval import check_confidence, t_half_width
from landcarbon.estimate.joint import Joint, joint_table, sum_variance
from landcarbon.estimate.pairs import Side, side_of
from landcarbon.estimate.ratio import MIN_PLOTS, Cells, Sample, deviations
from landcarbon.estimate.sum_notes import sum_methods
from landcarbon.estimate.sums import Sums, read_sums
from landcarbon.estimate.tables import Plots, Units, pool_list, read_plots

__all__ = ["DOMAIN_COLUMNS", "estimate_domains"]

DOMAIN_COLUMNS = [
    "by",
    "unit",
    "survey",
    "pool",
    "area_ha",
    "area_se",
    "plots",
    "density_t_c_ha",
    "density_se",
    "density_low",
    "density_high",
    "stock_t_c",
    "stock_se",
    "stock_low",
    "stock_high",
    "df",
    "method",
]


@dataclass(frozen=True)
class _Totals:
    """Area of each domain, shape (D,), and stocks, shape (D, S), with their standard errors."""

    area_ha: np.ndarray
    area_se: np.ndarray
    stock: np.ndarray
    stock_se: np.ndarray


def estimate_domains(
    plot_pools: pd.DataFrame,
    strata: pd.DataFrame,
    domain_column: str,
    areas: Mapping[str, float] | None = None,
    *,
    surveys: Sequence[str],
    pools: Sequence[str],
    confidence: float,
    sums: Mapping[str, Sequence[str]] | None = None,
) -> pd.DataFrame:
    """Estimate densities and stocks of the domains that a column of the plot table names.

    Domains may cut across strata and parcels; plots of other domains take part in the variance, as for parcels.

    Parameters
    ----------
    plot_pools : DataFrame
        As for stocks, with the column of the domains; blank where a plot is in none.
    strata : DataFrame
        stratum, area_ha [ha].
    domain_column : str
        For example owner or land_use.
    areas : mapping, optional
        Known area of each domain [ha]. Without it areas are estimated from the plots.
    surveys : sequence of str
        In the order of time.
    pools : sequence of str
        Pools counted; ``all`` is added.
    confidence : float
        Of the intervals, for example 0.95.
    sums : mapping, optional
        Columns that make up each pool, as for stocks.

    Returns
    -------
    DataFrame
        Columns ``DOMAIN_COLUMNS``: densities in t C/ha, stocks in t C. With known areas the stock is density times area
        and ``area_se`` is 0. Otherwise area and stock are expanded from the plots, each with its own standard error. A
        pool that was measured on part of the plots is expanded from those, so that its stock need not be the density
        times the area.

    Raises
    ------
    UserError
        If the column is missing, or an area is not given for every domain.

    Notes
    -----
    Area: A_d = sum_h (A_h / S_h) sum_d,h(s), stock: sum_h (A_h / S_h) sum_d,h(s y); variance by linearisation over all
    plots of each stratum, u_i = s_i (1_d y_i - Y_dh) with Y_dh = sum_d,h(s y) / S_h and y = 1 for the area.

    References
    ----------
    .. [1] Särndal, C.-E., Swensson, B., Wretman, J. (1992). Model Assisted Survey Sampling, Springer: chapter 10
       (domains; from memory).
    """
    check_confidence(confidence)
    if domain_column not in plot_pools:
        raise UserError(
            f"the plot table has no column {domain_column!r}",
            where="domains",
            remedy="Name a column of the plot table.",
        )
    names = [name for name in pool_list(pools) if name != "all"]
    chosen = read_sums({name: [name] for name in names} if sums is None else sums, pools)
    plots = read_plots(plot_pools, strata, None, pools, parts=chosen.parts)
    given = plots.frame[domain_column].astype("str").where(plots.frame[domain_column].notna(), "").str.strip()
    labels = sorted({str(name) for name in given[plots.taken()]} - {""})
    known = _known_areas(labels, areas, domain_column)
    domain = label_codes(given, labels)
    blocks = [_block(plots, chosen, survey, (domain_column, labels, domain), known, confidence) for survey in surveys]
    return pd.concat(blocks, ignore_index=True) if blocks else pd.DataFrame(columns=DOMAIN_COLUMNS)


def _known_areas(labels: list[str], areas: Mapping[str, float] | None, column: str) -> np.ndarray | None:
    if areas is None:
        return None
    lacking = [name for name in labels if name not in areas]
    if lacking:
        raise UserError(
            f"no area is given for {column} {', '.join(lacking)}",
            where="domains",
            remedy="Give the area of every domain, or of none: then all are estimated.",
        )
    return np.array([float(areas[name]) for name in labels])


def _block(
    plots: Plots,
    sums: Sums,
    survey: str,
    domains: tuple[str, list[str], np.ndarray],
    area_ha: np.ndarray | None,
    confidence: float,
) -> pd.DataFrame:
    """Rows of one survey, domains before pools."""
    column, labels, codes = domains
    sample = plots.sample(str(survey))
    domain = codes[np.flatnonzero((plots.survey == str(survey)) & plots.taken())]
    plan = plan_sums((sample,), sums, plots.units.stratum_area_ha)
    made = estimate_sums((sample,), (domain,), len(labels), plan)
    se = np.sqrt(made.variance)
    half = t_half_width(se, made.df, confidence)
    if area_ha is None:
        total = _expanded(sample, domain, made, plots.units, sums, plan.allowed)
        method = "domain ratio of means, area estimated"
    else:
        total = _Totals(area_ha, np.zeros(len(labels)), made.density * area_ha[:, None], se * area_ha[:, None])
        method = "domain ratio of means"
    wide = t_half_width(total.stock_se, made.df, confidence)
    number, shape = len(sums.names), made.density.shape
    text = sum_methods(np.full(shape, method, dtype=object), made, plan, [str(survey)])
    columns = {
        "area_ha": np.broadcast_to(total.area_ha[:, None], shape),
        "area_se": np.broadcast_to(total.area_se[:, None], shape),
        "plots": made.plots[0],
        "density_t_c_ha": made.density,
        "density_se": se,
        "density_low": made.density - half,
        "density_high": made.density + half,
        "stock_t_c": total.stock,
        "stock_se": total.stock_se,
        "stock_low": total.stock - wide,
        "stock_high": total.stock + wide,
        "df": made.df,
        "method": text,
    }
    keys = {
        "by": column,
        "unit": np.repeat(np.array(labels, dtype=object), number),
        "survey": str(survey),
        "pool": np.tile(np.array(sums.names, dtype=object), len(labels)),
    }
    frame = pd.DataFrame(keys | {name: np.ravel(values) for name, values in columns.items()})
    return frame.astype({name: "str" for name in ("by", "unit", "survey", "pool", "method")})[DOMAIN_COLUMNS]


def _expanded(
    sample: Sample, domain: np.ndarray, made: SumEstimate, units: Units, sums: Sums, allowed: np.ndarray
) -> _Totals:
    """Expand area and stocks from the plots."""
    domains, area = len(made.density), units.stratum_area_ha
    cells = Cells.of(domains, len(area), (domain, sample.stratum))
    side = _totals_side(sample, domain, cells, area, allowed)
    joint = joint_table((side,), (domain,), cells, None)
    stock = _sum_by_domain(side, cells)
    # parts of each sum, where the pool is known; domains with the same parts are handled together
    member = np.concatenate([sums.member, np.ones((1, len(sums.parts)), dtype=bool)])
    counts = member[:, None, :] & made.pool_known[:, sums.pool][None]
    total = np.where(np.isfinite(made.density), np.where(counts, stock, 0.0).sum(axis=2).T, np.nan)
    se = np.stack([_error(joint, rows) for rows in counts], axis=1)
    one = replace(sample, value=np.ones((len(domain), 1)), used=np.ones((len(domain), 1), dtype=bool))
    enough = unit_counts(one, len(area)) >= MIN_PLOTS
    extent = _totals_side(one, domain, cells, area, enough)
    spread = group_sum(extent.spread.variance, cells.domain, domains)[:, 0]
    return _Totals(
        area_ha=_sum_by_domain(extent, cells)[:, 0],
        area_se=np.sqrt(spread),
        stock=total,
        stock_se=np.where(np.isfinite(total), se, np.nan),
    )


def _totals_side(sample: Sample, domain: np.ndarray, cells: Cells, area_ha: np.ndarray, allowed: np.ndarray) -> Side:
    """Linearise totals: as means about zero, with the land a unit of size stands for as weight."""
    side = side_of(sample, domain, cells, area_ha, allowed)
    size = side.mean.size_stratum[cells.stratum]
    known = (side.mean.plots_cell > 0) & (size > 0)
    weight = np.divide(area_ha[cells.stratum][:, None], size, out=np.zeros_like(size), where=known)
    mean = replace(side.mean, density=np.zeros_like(side.mean.density), weight=weight)
    return replace(side, mean=mean, spread=deviations(sample, mean, cells))


def _sum_by_domain(side: Side, cells: Cells) -> np.ndarray:
    """Return expanded totals; shape (D, K)."""
    inside = group_sum(side.spread.inside, side.mean.cell, len(cells.domain))
    return group_sum(side.mean.weight * inside, cells.domain, cells.domains)


def _error(joint: Joint, rows: np.ndarray) -> np.ndarray:
    """Return the standard error of the total of the parts that count in each domain; ``rows`` has shape (D, K)."""
    se = np.zeros(len(rows))
    chosen, place = np.unique(rows, axis=0, return_inverse=True)
    for kind, columns in enumerate(chosen):
        held = np.flatnonzero(columns)
        if len(held):
            hit = place.ravel() == kind
            se[hit] = np.sqrt(sum_variance(joint, held, np.ones(len(held))).variance[hit])
    return se
