"""Variance of sums of domain means whose parts were measured on different plots, at one date or between two.

Every plot brings into a sum what was measured on it: a column for each part and date. Plots with the same set of
columns make a group, and the variance is the sum over these groups. Where plots lie in clusters read cluster for plot.
Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.contributions import Joint, joint_table
from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.ratio import MIN_PLOTS, Cells
from landcarbon.estimate.systematic import MIN_NEIGHBOURS, neighbour_variance

__all__ = ["Joint", "SumVariance", "column_variances", "joint_table", "sum_variance"]

_Piece = tuple[np.ndarray, np.ndarray, np.ndarray]  # variance, degrees of freedom, from neighbours, by cell

MOST_SETS = 128  # sets of columns told apart; plots with rarer ones are bounded together


@dataclass(frozen=True)
class SumVariance:
    """Variance of sums by domain; every array has shape (domains,), or (domains, parts) of several sums at once.

    Attributes
    ----------
    variance, df : ndarray
        Variance and degrees of freedom; df NaN where a domain has no plot.
    apart : ndarray of bool
        Whether some plot of the domain lacks some part of the sum.
    near : ndarray
        Share of the pieces of the variance that come from neighbouring plots; NaN if there are none.
    """

    variance: np.ndarray
    df: np.ndarray
    apart: np.ndarray
    near: np.ndarray


def sum_variance(joint: Joint, columns: np.ndarray, scale: np.ndarray) -> SumVariance:
    """Variance of the sum of some columns.

    Parameters
    ----------
    joint : Joint
        Deviations by plot.
    columns : ndarray of int
        Columns that make up the sum.
    scale : ndarray
        Number each of these is multiplied by, for example its share of the area.

    Returns
    -------
    SumVariance

    Notes
    -----
    Let c_i be the sum of the contributions of plot i. A group p of plots has the same set of columns. Its m plots bring
    in m times the variance of c over the N plots measured for at least these columns, for which c is cut down to them:
    N / (N - 1) (sum of c^2 over the m plots - m (mean of c over the N plots)^2), where the plots of the domain stand
    for each other. The groups are added up. With all columns on all plots this is the plain variance of the sum per
    plot; for one part at two dates it is the variance of change from partly repeated plots.

    A plot that is the only one of its stratum with all its columns tells nothing about how they go together. If none of
    its parts was repeated on other plots, its two dates count as two plots. Otherwise, and within a date, its parts are
    taken as fully correlated, which overstates.
    """
    table = joint.take(columns, scale)
    cells = table.cells
    there = table.heard() & (table.cell >= 0)
    plots = _count(table.cell[there], len(cells.domain))
    apart = np.zeros(len(cells.domain))
    for date in np.unique(table.date):
        used = table.used[:, table.date == date]
        lacks = used.any(axis=1) & ~used.all(axis=1) & (table.cell >= 0)
        apart += _count(table.cell[lacks], len(cells.domain))
    sets = _Sets.of(table)
    if sets.lone.any():
        table = table.split(np.flatnonzero(sets.lone & _spans_dates(table) & ~_repeats_with_others(table)))
        sets = _Sets.of(table)
    components: list[_Piece] = [
        _component(table, (sets.code == code) & ~sets.lone, sets.above(code), sets.columns(code)) for code in sets.kept
    ]
    components += _bounded(table, sets.lone)
    if not components:
        nothing = np.zeros(cells.domains)
        return SumVariance(nothing, np.full(cells.domains, np.nan), nothing > 0, np.full(cells.domains, np.nan))
    variance, df, near = (np.stack(arrays) for arrays in zip(*components, strict=True))
    most = np.bincount(cells.domain, weights=plots, minlength=cells.domains) - 1.0
    apart_domain = np.bincount(cells.domain, weights=apart, minlength=cells.domains) > 0
    effective = _df_of_separate(variance, df, cells)
    if apart_domain.any():
        effective = np.where(apart_domain, _df_of_shared(variance, df, _overlaps(table, sets), cells), effective)
    return SumVariance(
        variance=np.bincount(cells.domain, weights=variance.sum(axis=0), minlength=cells.domains),
        df=np.minimum(effective, np.maximum(most, 1.0)),
        apart=apart_domain,
        near=_near_share(near, df, cells),
    )


def column_variances(joint: Joint, parts: int) -> SumVariance:
    """Variance of each part alone, or of its change; arrays of shape (domains, parts)."""
    dates = joint.used.shape[1] // max(parts, 1)
    made = [sum_variance(joint, part + parts * np.arange(dates), np.ones(dates)) for part in range(parts)]
    return SumVariance(
        variance=np.stack([one.variance for one in made], axis=1),
        df=np.stack([one.df for one in made], axis=1),
        apart=np.stack([one.apart for one in made], axis=1),
        near=np.stack([one.near for one in made], axis=1),
    )


def _near_share(near: np.ndarray, df: np.ndarray, cells: Cells) -> np.ndarray:
    """Share of the pieces that come from neighbours, by domain; NaN without pieces."""
    there = df > 0
    told, every = (np.bincount(cells.domain, sums, cells.domains) for sums in ((near & there).sum(0), there.sum(0)))
    return np.divide(told, every, out=np.full(cells.domains, np.nan), where=every > 0)


def _df_of_separate(variance: np.ndarray, df: np.ndarray, cells: Cells) -> np.ndarray:
    """Degrees of freedom by domain where the groups of a cell count as independent; arrays by group and cell."""
    codes = np.tile(cells.domain, len(variance))
    return satterthwaite(variance.reshape(-1, 1), df.reshape(-1, 1), codes, cells.domains)[:, 0]


def _df_of_shared(variance: np.ndarray, df: np.ndarray, overlap: np.ndarray, cells: Cells) -> np.ndarray:
    """Degrees of freedom by domain where groups of a cell know their variance in part from the same plots.

    The variances of two groups are taken to go together as far as their plots are the same: in a cell
    df = (sum V)^2 / sum over pairs of groups (r V_1 V_2 / sqrt(df_1 df_2)), with r the plots shared by the root of the
    product of their numbers. What is bounded goes with everything.
    """
    there = df > 0
    with np.errstate(divide="ignore", invalid="ignore"):
        total = np.where(there, variance, 0.0).sum(axis=0)
        share = np.where(there & (total > 0), variance / total / np.sqrt(df), 0.0)
        told, rest = share[: len(overlap)], share[len(overlap) :].sum(axis=0)
        square = rest * (2.0 * told.sum(axis=0) + rest)
        for one, beside in zip(told, overlap, strict=True):
            square += one * (beside[:, cells.stratum] * told).sum(axis=0)
        shared = np.where(total > 0, 1.0 / square, np.where(there, df, np.inf).min(axis=0))
    shared = np.where(there.any(axis=0), shared, 0.0)
    return satterthwaite(total[:, None], shared[:, None], cells.domain, cells.domains)[:, 0]


def _overlaps(table: Joint, sets: _Sets) -> np.ndarray:
    """Compare sets by the plots of a stratum they share, over the root of the product of their numbers; (P, P, H)."""
    strata = table.cells.strata
    distinct, position = np.unique(sets.code, return_inverse=True)
    once = table.once(np.arange(len(position)))
    held = np.bincount(position[once] * strata + table.stratum[once], minlength=len(distinct) * strata)
    held = held.reshape(len(distinct), strata).astype(float)
    has = (distinct & sets.kept[:, None]) == sets.kept[:, None]
    shared = np.stack([(one & has).astype(float) @ held for one in has]) if len(has) else np.zeros((0, 0, strata))
    number = np.sqrt(np.einsum("pph->ph", shared))
    product = number[:, None] * number[None]
    return np.divide(shared, product, out=np.zeros_like(shared), where=product > 0)


@dataclass(frozen=True)
class _Sets:
    """Sets of columns as bits: of each row, those handled one by one, and rows that are alone with theirs."""

    code: np.ndarray
    kept: np.ndarray
    lone: np.ndarray
    bits: np.ndarray

    @classmethod
    def of(cls, table: Joint) -> _Sets:
        bits = 1 << np.arange(table.used.shape[1], dtype=np.int64)
        code = table.used @ bits
        distinct, position, count = np.unique(code, return_inverse=True, return_counts=True)
        strata = table.cells.strata
        once = table.once(np.arange(len(code)))
        held, number = np.unique(position[once] * max(strata, 1) + table.stratum[once], return_counts=True)
        which, stratum = held // max(strata, 1), held % max(strata, 1)
        frequent = np.argsort(-count, kind="stable")
        frequent = np.sort(frequent[distinct[frequent] > 0][:MOST_SETS])
        enough = np.zeros(len(held), dtype=bool)
        for one in frequent:
            above = (distinct & distinct[one]) == distinct[one]
            plots = np.bincount(stratum, weights=number * above[which], minlength=strata)
            mine = which == one
            enough[mine] = plots[stratum[mine]] >= MIN_PLOTS
        grid = np.zeros((len(distinct), max(strata, 1)), dtype=bool)
        grid[which, stratum] = enough
        lone = ~grid[position, table.stratum] & (code > 0)
        return cls(code, distinct[frequent], lone, bits)

    def above(self, code: np.int64) -> np.ndarray:
        """Rows that have at least these columns."""
        return np.asarray((self.code & code) == code)

    def columns(self, code: np.int64) -> np.ndarray:
        return np.flatnonzero(code & self.bits)


def _spans_dates(table: Joint) -> np.ndarray:
    earlier, later = (table.used[:, table.date == date].any(axis=1) for date in (0, 1))
    return np.asarray(earlier & later)


def _pairs(table: Joint, part: int) -> tuple[np.ndarray, np.ndarray]:
    """Rows that have a part at both dates: all, and those of strata with at least two of them."""
    columns = np.flatnonzero(table.part == part)
    both = np.asarray(table.used[:, columns].all(axis=1) & (len(columns) > 1))
    number = np.bincount(table.stratum[table.once(np.flatnonzero(both))], minlength=table.cells.strata)
    return both, both & (number >= MIN_PLOTS)[table.stratum]


def _repeats_with_others(table: Joint) -> np.ndarray:
    """Rows that share a repeated part with other plots of the stratum."""
    found = np.zeros(len(table.cell), dtype=bool)
    for part in np.unique(table.part):
        found |= _pairs(table, part)[1]
    return found


def _count(codes: np.ndarray, groups: int, weights: np.ndarray | None = None) -> np.ndarray:
    """Count rows by group, or add up their weights."""
    return np.bincount(codes, weights=weights, minlength=groups).astype(float)  # without rows: integers


def _component(table: Joint, exact: np.ndarray, above: np.ndarray, columns: np.ndarray) -> _Piece:
    """Variance that the rows ``exact`` bring into each cell, its degrees of freedom and source; shapes (C,).

    ``above`` are the rows that tell about it: all that have these columns.
    """
    like_rows, mine_rows = np.flatnonzero(above), np.flatnonzero(exact)
    cell, cell_mine = table.cell[like_rows], table.cell[mine_rows]
    inside = like_rows[cell >= 0]
    cell = cell[cell >= 0]
    own = np.zeros(len(inside))
    for column in columns:
        own += table.value[inside, column]
    n_cells = len(table.cells.domain)
    mine, like = _count(cell_mine[cell_mine >= 0], n_cells), _count(cell, n_cells)
    share = np.divide(mine, like, out=np.zeros_like(mine), where=like > 0)
    beside, total_beside = _beside(table, like_rows, mine_rows, columns)
    total = _count(cell, n_cells, own) + total_beside
    m = _count(table.stratum[table.once(mine_rows)], table.cells.strata)[table.cells.stratum]
    n = _count(table.stratum[table.once(like_rows)], table.cells.strata)[table.cells.stratum]
    enough = (n >= MIN_PLOTS) & (m > 0)
    n = np.where(enough, n, MIN_PLOTS)
    summed = share * _count(cell, n_cells, own**2) + beside - m * (total / n) ** 2
    variance = np.where(enough, n / (n - 1.0) * np.maximum(summed, 0.0), 0.0)
    heard = like if table.own is None else _count(cell, n_cells, table.heard(columns)[inside])
    df = np.where(enough & ((variance > 0) | (mine > 0)), np.maximum(heard - 1.0, 1.0), 0.0)
    near = np.zeros(n_cells, dtype=bool)
    if table.place is not None:
        near = enough & (df > 0) & (n >= MIN_NEIGHBOURS) & (like == n)
        told = neighbour_variance(own, table.place[inside], cell, n_cells, near)
        near = told.known
        variance, df = np.where(near, m * told.variance, variance), np.where(near, np.minimum(told.df, df), df)
    return variance, df, near


def _beside(table: Joint, like: np.ndarray, mine: np.ndarray, columns: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Add up plots of the stratum outside each cell: squares of the rows ``mine``, sum of the rows ``like``."""
    cells = table.cells
    squares, total = np.zeros(len(cells.domain)), np.zeros(len(cells.domain))
    sizes = table.size.shape[1]
    slopes = [table.beside[:, columns[table.measure[columns] == size]].sum(axis=1) for size in range(sizes)]
    for size, base in enumerate(table.growth):
        if base >= 0:
            slopes[base] = slopes[base] + slopes[size]
    if table.whole or not any(slope.any() for slope in slopes):
        return squares, total

    def outside(rows: np.ndarray, values: np.ndarray) -> np.ndarray:
        cell = table.cell[rows]
        lead = slice(None) if table.lead is None else table.lead[rows]
        everywhere = _count(table.stratum[rows[lead]], cells.strata, values[lead])[cells.stratum]
        return everywhere - _count(cell[cell >= 0], len(cells.domain), values[cell >= 0])

    kept = [size for size, slope in enumerate(slopes) if slope.any()]
    for place, size in enumerate(kept):
        slope = slopes[size]
        total -= slope * outside(like, table.size[like, size])
        for other in kept[place:]:
            twice = 1.0 if other == size else 2.0
            squares += twice * slope * slopes[other] * outside(mine, table.size[mine, size] * table.size[mine, other])
    return np.maximum(squares, 0.0), total


def _bounded(table: Joint, lone: np.ndarray) -> list[_Piece]:
    """Return what rows alone with their set of columns bring in at most: their parts as fully correlated."""
    if not lone.any():
        return []
    deviation = np.zeros(len(table.cells.domain))
    df = np.full(len(table.cells.domain), np.inf)
    for part in np.unique(table.part):
        columns = np.flatnonzero(table.part == part)
        both, paired = _pairs(table, part)
        pieces = [_component(table, lone & paired, both, columns)] if paired.any() else []
        for column in columns:
            used = table.used[:, column]
            pieces.append(_component(table, used & lone & ~paired, used, np.array([column])))
        deviation += np.sqrt(np.sum([variance for variance, _, _ in pieces], axis=0))
        for _, free, _ in pieces:
            df = np.minimum(df, np.where(free > 0, free, np.inf))
    return [(deviation**2, np.where(np.isfinite(df), df, 0.0), np.zeros(len(df), dtype=bool))]
