"""Variance of sums of domain means whose parts were measured on different plots, at one date or between two.

Every plot brings into a sum what was measured on it: a column for each part and date. Plots with the same set of
columns make a group, and the variance is the sum over these groups. Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.pairs import Pairs, Side
from landcarbon.estimate.ratio import MIN_PLOTS, Cells

__all__ = ["Joint", "SumVariance", "joint_table", "sum_variance"]

_Piece = tuple[np.ndarray, np.ndarray]  # variance and degrees of freedom by cell

MOST_SETS = 128  # sets of columns told apart; plots with rarer ones are bounded together


@dataclass(frozen=True)
class Joint:
    """What each plot adds to the domain means. Rows n, cells C, columns Q (parts, date by date), dates T.

    Attributes
    ----------
    stratum, cell : ndarray of int
        Of each row; cell -1 outside all domains; shape (n,).
    size : ndarray
        Size at the first date, then what it grew by; 0 where the plot is not in a sample; shape (n, T).
    used : ndarray of bool
        Column counts on this plot; shape (n, Q).
    value : ndarray
        Sign times weight times deviation, for plots in a domain; shape (n, Q).
    beside : ndarray
        What a unit of size of a plot of the stratum outside the domain takes off; shape (C, Q).
    date, part : ndarray of int
        Date and part of each column; shape (Q,).
    cells : Cells
        Cells of the domains.
    """

    stratum: np.ndarray
    cell: np.ndarray
    size: np.ndarray
    used: np.ndarray
    value: np.ndarray
    beside: np.ndarray
    date: np.ndarray
    part: np.ndarray
    cells: Cells

    @property
    def whole(self) -> bool:
        """Whether each cell holds all plots of its stratum."""
        one = len(np.unique(self.cells.stratum)) == len(self.cells.stratum)
        return one and bool((self.cell >= 0).all())

    def take(self, columns: np.ndarray, scale: np.ndarray) -> Joint:
        """Keep some columns, each multiplied by a number."""
        return replace(
            self,
            used=self.used[:, columns],
            value=self.value[:, columns] * scale,
            beside=self.beside[:, columns] * scale,
            date=self.date[columns],
            part=self.part[columns],
        )

    def split(self, rows: np.ndarray) -> Joint:
        """Take the two dates of some rows apart, as if they were different plots."""
        first, second = self.used.copy(), self.used[rows]
        first[np.ix_(rows, self.date == 1)] = False
        second[:, self.date == 0] = False

        def again(values: np.ndarray) -> np.ndarray:
            return np.concatenate([values, values[rows]])

        used = np.concatenate([first, second])
        return replace(
            self,
            stratum=again(self.stratum),
            cell=again(self.cell),
            size=again(self.size),
            used=used,
            value=again(self.value),
        )


@dataclass(frozen=True)
class SumVariance:
    """Variance of sums by domain; every array has shape (domains,).

    Attributes
    ----------
    variance, df : ndarray
        Variance and degrees of freedom; df NaN where a domain has no plot.
    apart : ndarray of bool
        Whether some plot of the domain lacks some part of the sum.
    """

    variance: np.ndarray
    df: np.ndarray
    apart: np.ndarray


def joint_table(sides: tuple[Side, ...], domains: tuple[np.ndarray, ...], cells: Cells, pairs: Pairs | None) -> Joint:
    """Put the deviations of one or two dates side by side.

    Parameters
    ----------
    sides : tuple of Side
        One date, or the earlier and the later one, whose sum is then the change.
    domains : tuple of ndarray of int
        Domain of each plot of the samples; -1 for none.
    cells : Cells
        Cells of the domains.
    pairs : Pairs or None
        Plots of both dates.
    """
    rows = [np.arange(len(sides[0].sample.plot))]
    number = len(rows[0])
    if len(sides) > 1 and pairs is not None:
        place = np.full(len(sides[1].sample.plot), -1)
        place[pairs.second] = pairs.first
        new = place < 0
        place[new] = number + np.arange(int(new.sum()))
        rows.append(place)
        number += int(new.sum())
    stratum, cell = np.zeros(number, dtype=np.int64), np.full(number, -1)
    size = np.zeros((number, len(sides)))
    used, value, beside = [], [], []
    for date, (side, domain, row) in enumerate(zip(sides, domains, rows, strict=True)):
        sign = -1.0 if date < len(sides) - 1 else 1.0
        stratum[row] = side.sample.stratum
        cell[row[side.mean.rows]] = side.mean.cell
        size[row, date] = side.sample.size
        columns = side.sample.value.shape[1]
        counted, out = np.zeros((number, columns), dtype=bool), np.zeros((number, columns))
        counted[row] = side.counted
        with np.errstate(invalid="ignore"):
            per_size = sign * side.mean.weight * side.spread.slope
            here = sign * side.mean.weight[side.mean.cell] * side.spread.inside
            here = here - per_size[side.mean.cell] * side.mean.size
        out[row[side.mean.rows]] = np.where(side.counted[domain >= 0], np.nan_to_num(here), 0.0)
        used.append(counted)
        value.append(out)
        beside.append(np.nan_to_num(per_size))
    if len(sides) > 1:  # written with the growth, which is mostly zero, so that little is lost to rounding
        size[:, 1] -= size[:, 0]
    return Joint(
        stratum=stratum,
        cell=cell,
        size=size,
        used=np.concatenate(used, axis=1),
        value=np.concatenate(value, axis=1),
        beside=np.concatenate(beside, axis=1),
        date=np.repeat(np.arange(len(sides)), used[0].shape[1]),
        part=np.tile(np.arange(used[0].shape[1]), len(sides)),
        cells=cells,
    )


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
    there = table.used.any(axis=1) & (table.cell >= 0)
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
        return SumVariance(nothing, np.full(cells.domains, np.nan), nothing > 0)
    variance, df = (np.stack(arrays) for arrays in zip(*components, strict=True))
    most = np.bincount(cells.domain, weights=plots, minlength=cells.domains) - 1.0
    apart_domain = np.bincount(cells.domain, weights=apart, minlength=cells.domains) > 0
    effective = _df_of_separate(variance, df, cells)
    if apart_domain.any():
        effective = np.where(apart_domain, _df_of_shared(variance, df, _overlaps(table, sets), cells), effective)
    return SumVariance(
        variance=np.bincount(cells.domain, weights=variance.sum(axis=0), minlength=cells.domains),
        df=np.minimum(effective, np.maximum(most, 1.0)),
        apart=apart_domain,
    )


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
    held = np.bincount(position * strata + table.stratum, minlength=len(distinct) * strata)
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
        held, number = np.unique(position * max(strata, 1) + table.stratum, return_counts=True)
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
    number = np.bincount(table.stratum[both], minlength=table.cells.strata)
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
    """Variance that the rows ``exact`` bring into each cell, and its degrees of freedom; shapes (C,).

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
    m = _count(table.stratum[mine_rows], table.cells.strata)[table.cells.stratum]
    n = _count(table.stratum[like_rows], table.cells.strata)[table.cells.stratum]
    enough = (n >= MIN_PLOTS) & (m > 0)
    n = np.where(enough, n, MIN_PLOTS)
    summed = share * _count(cell, n_cells, own**2) + beside - m * (total / n) ** 2
    variance = np.where(enough, n / (n - 1.0) * np.maximum(summed, 0.0), 0.0)
    df = np.where(enough & ((variance > 0) | (mine > 0)), np.maximum(like - 1.0, 1.0), 0.0)
    return variance, df


def _beside(table: Joint, like: np.ndarray, mine: np.ndarray, columns: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Add up plots of the stratum outside each cell: squares of the rows ``mine``, sum of the rows ``like``."""
    cells = table.cells
    squares, total = np.zeros(len(cells.domain)), np.zeros(len(cells.domain))
    dates = table.size.shape[1]
    slopes = [table.beside[:, columns[table.date[columns] == date]].sum(axis=1) for date in range(dates)]
    if dates > 1:
        slopes[0] = slopes[0] + slopes[1]  # the second size is written as growth
    if table.whole or not any(slope.any() for slope in slopes):
        return squares, total

    def outside(rows: np.ndarray, values: np.ndarray) -> np.ndarray:
        cell = table.cell[rows]
        everywhere = _count(table.stratum[rows], cells.strata, values)[cells.stratum]
        return everywhere - _count(cell[cell >= 0], len(cells.domain), values[cell >= 0])

    for date, slope in enumerate(slopes):
        total -= slope * outside(like, table.size[like, date])
        for other in range(date, dates):
            twice = 1.0 if other == date else 2.0
            squares += twice * slope * slopes[other] * outside(mine, table.size[mine, date] * table.size[mine, other])
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
        deviation += np.sqrt(np.sum([variance for variance, _ in pieces], axis=0))
        for _, free in pieces:
            df = np.minimum(df, np.where(free > 0, free, np.inf))
    return [(deviation**2, np.where(np.isfinite(df), df, 0.0))]
