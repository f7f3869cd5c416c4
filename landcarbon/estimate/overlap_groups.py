"""Groups of sampling units that count for the same estimates, and what each group brings into covariances.

Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.ratio import MIN_PLOTS, Cells

__all__ = ["Columns", "Overlap", "alike", "patterns", "pieces"]

_Piece = tuple[np.ndarray, np.ndarray]  # (co)variances and degrees of freedom by cell

MOST_SETS = 128  # groups told apart; plots of rarer ones count as if their estimates were from different plots


@dataclass(frozen=True)
class Overlap:
    """What each sampling unit brings into each estimate. Units U, pieces F, estimates E, columns K, cells C.

    A unit is a plot or a cluster of plots within its stratum; a piece is its part in a domain. A plot that changed its
    domain between two dates has two pieces, one that changed its stratum is two units.

    Attributes
    ----------
    stratum : ndarray of int
        Of each unit; shape (U,).
    size : ndarray
        Size by estimate, 0 where the unit is not in the sample; shape (U, E).
    used : ndarray of bool
        Unit counts for the column of the estimate; shape (U, E, K).
    tells : ndarray of bool
        Unit tells about the variance of the column, whether it counts for it or not; shape (U, E, K).
    unit, cell : ndarray of int
        Of each piece; shape (F,).
    value : ndarray
        Weight times deviation of each piece; shape (F, E, K).
    beside : ndarray
        What a unit of size of the stratum outside the domain takes off; shape (C, E, K).
    cells : Cells
        Cells of the domains.
    """

    stratum: np.ndarray
    size: np.ndarray
    used: np.ndarray
    tells: np.ndarray
    unit: np.ndarray
    cell: np.ndarray
    value: np.ndarray
    beside: np.ndarray
    cells: Cells

    @property
    def whole(self) -> bool:
        """Whether each cell holds all units of its stratum, undivided."""
        one = len(np.unique(self.cells.stratum)) == len(self.cells.stratum)
        return one and len(self.unit) == len(self.stratum)

    def units(self) -> np.ndarray:
        """Units by domain that count for anything."""
        cell = self.cell[np.asarray(self.used.any(axis=(1, 2)))[self.unit]]
        return np.bincount(self.cells.domain[cell], minlength=self.cells.domains)


def alike(table: Overlap) -> bool:
    """Whether all columns were measured on the same plots."""
    return bool((table.used == table.used[:, :, :1]).all() and (table.tells == table.tells[:, :, :1]).all())


def patterns(table: Overlap, scale: np.ndarray) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    """Domains (as marks) in which a sum holds the same columns, and these columns; all at once if they are alike."""
    held = (scale != 0).any(axis=0)
    if not held.any():
        return
    if alike(table):
        yield np.ones(len(held), dtype=bool), np.flatnonzero(held.any(axis=0))
        return
    rows, place = np.unique(held, axis=0, return_inverse=True)
    for kind, row in enumerate(rows):
        if row.any():
            yield place.ravel() == kind, np.flatnonzero(row)


@dataclass(frozen=True)
class Columns:
    """Columns of estimates told apart, Q: all of all estimates, or one for each estimate where they are alike.

    ``used`` and ``tells`` have shape (U, Q), ``estimate`` and ``held`` say which estimate and columns each is of.
    """

    table: Overlap
    used: np.ndarray
    tells: np.ndarray
    estimate: np.ndarray
    held: np.ndarray
    same: bool

    @classmethod
    def of(cls, table: Overlap, held: np.ndarray) -> Columns:
        """Take the columns that a sum holds."""
        number, same = table.used.shape[1], alike(table)
        chosen = held[:1] if same else held
        wide = (len(table.stratum), number * len(chosen))
        used, tells = (marks[:, :, chosen].reshape(wide) for marks in (table.used, table.tells))
        return cls(table, used, tells, np.repeat(np.arange(number), len(chosen)), held, same)

    def scaled(self, scale: np.ndarray, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Contributions of pieces, (F, Q, S), and beside, (C, Q, S), to sums of columns times weights."""
        table, held, sums = self.table, self.held, len(scale)
        weights = np.broadcast_to(weights, (table.cells.domains, weights.shape[1], weights.shape[2]))
        weights = weights if weights.shape[2] == 1 else weights[:, :, held]
        wide = np.moveaxis(scale[:, :, held], 0, 2)  # domains, columns, sums

        def of(values: np.ndarray, domain: np.ndarray) -> np.ndarray:
            weighted = values[:, :, held] * weights[domain]
            if self.same:
                if sums == len(held) and _identity(wide):
                    return weighted * np.einsum("dkk->dk", wide)[domain][:, None]
                if len(wide) and (wide == wide[:1]).all():
                    return np.asarray(weighted @ wide[0])
                return np.stack([(weighted * wide[domain, None, :, one]).sum(axis=2) for one in range(sums)], axis=2)
            return (weighted[..., None] * wide[domain][:, None]).reshape(len(domain), -1, sums)

        return of(table.value, table.cells.domain[table.cell]), of(table.beside, table.cells.domain)

    def like(self, mask: np.ndarray) -> np.ndarray:
        """Units that tell about all columns of a set."""
        return np.asarray(self.tells[:, mask].all(axis=1))

    def sets(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Distinct sets of columns (masks), the set of each unit (-1 for none), units that no two tell about."""
        strata = max(self.table.cells.strata, 1)
        first, place, count = _distinct(self.used)
        some = self.used[first].any(axis=1) if len(first) else np.zeros(0, dtype=bool)
        order = np.sort(np.argsort(-(count * some), kind="stable")[: min(MOST_SETS, int(some.sum()))])
        new = np.full(len(first), -1)
        new[order] = np.arange(len(order))
        kinds, place = self.used[first[order]], new[place.ravel()]
        lone = (place < 0) & self.used.any(axis=1)
        for kind, mask in enumerate(kinds):
            told = np.bincount(self.table.stratum[self.like(mask)], minlength=strata)
            lone |= (place == kind) & (told < MIN_PLOTS)[self.table.stratum]
        return kinds, place, lone


def _identity(wide: np.ndarray) -> bool:
    """Whether each sum is one column, in order."""
    return not (wide * (1.0 - np.eye(wide.shape[1]))).any()


def _distinct(used: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Find the distinct rows: the first of each, which one each row is, and how many there are of each."""
    bits = np.packbits(used, axis=1)
    if bits.shape[1] == 1:
        count = np.bincount(bits[:, 0], minlength=256)  # values of a byte
        there = np.flatnonzero(count)
        first = np.zeros(len(count), dtype=np.int64)
        first[bits[::-1, 0]] = np.arange(len(bits))[::-1]  # of repeated targets the last assignment stands
        return first[there], np.searchsorted(there, bits[:, 0]), count[there]
    codes = np.pad(bits, ((0, 0), (0, 8 - bits.shape[1]))).view(np.uint64)[:, 0] if bits.shape[1] <= 8 else bits
    _, first, place, count = np.unique(codes, axis=0, return_index=True, return_inverse=True, return_counts=True)
    return first, place.ravel(), count


def pieces(columns: Columns, value: np.ndarray, beside: np.ndarray, *, full: bool) -> Iterator[_Piece]:
    """Yield what each group of units brings into the covariances (or variances alone) of sums of estimates.

    ``value`` and ``beside`` have shapes (F, Q, S) and (C, Q, S); covariances come as (C, S, S), variances as (C, S),
    degrees of freedom as (C, 1).
    """
    kinds, place, lone = columns.sets()
    for kind, mask in enumerate(kinds):
        exact = (place == kind) & ~lone
        if exact.any():
            yield _piece(columns, exact, np.flatnonzero(mask), value, beside, full)
    if lone.any():
        yield from _bounded(columns, lone, value, beside, full)


def _piece(
    columns: Columns, exact: np.ndarray, mask: np.ndarray, value: np.ndarray, beside: np.ndarray, full: bool
) -> _Piece:
    """Return what the units ``exact`` with the columns ``mask`` bring in, told by all units with at least these."""
    table, cells, like = columns.table, columns.table.cells, columns.like(mask)
    n_cells, sums = len(cells.domain), value.shape[2]
    inside = np.flatnonzero(like[table.unit])
    cell = table.cell[inside]
    own = value[inside, mask[0]]
    for column in mask[1:]:
        own = own + value[inside, column]
    mine = np.bincount(table.cell[exact[table.unit]], minlength=n_cells).astype(float)
    told = np.bincount(cell, minlength=n_cells).astype(float)
    share = np.divide(mine, told, out=np.zeros_like(mine), where=told > 0)[:, None]
    squares = share * group_sum(_products(own, full), cell, n_cells)
    total = group_sum(own, cell, n_cells)
    slope = beside[:, mask]
    if not table.whole and slope.any():
        more, added = _outside(table, like, exact, columns.estimate[mask], slope, full)
        squares, total = squares + more, total + added
    m = np.bincount(table.stratum[exact], minlength=cells.strata)[cells.stratum][:, None]
    n = np.bincount(table.stratum[like], minlength=cells.strata)[cells.stratum][:, None]
    enough = (n >= MIN_PLOTS) & (m > 0)
    n = np.where(enough, n, MIN_PLOTS).astype(float)
    made = np.where(enough, n / (n - 1.0) * (squares - m * _products(total / n, full)), 0.0)
    variances = made.reshape(n_cells, sums, sums)[:, range(sums), range(sums)] if full else made
    there = enough & ((variances > 0) | (mine > 0)[:, None])
    df = np.where(there, np.maximum(told - 1.0, 1.0)[:, None], 0.0)
    return (made.reshape(n_cells, sums, sums) if full else made), df


def _products(values: np.ndarray, full: bool) -> np.ndarray:
    """Squares of each column, or products of all pairs of columns, row by row."""
    return (values[:, :, None] * values[:, None, :]).reshape(len(values), -1) if full else values**2


def _outside(
    table: Overlap, like: np.ndarray, mine: np.ndarray, estimate: np.ndarray, slope: np.ndarray, full: bool
) -> tuple[np.ndarray, np.ndarray]:
    """Add up plots of the stratum outside each cell: products of the units ``mine``, sums of the units ``like``.

    Sizes are written as the first of the estimates and what it grew by, which is mostly zero, so that little is lost to
    rounding.
    """
    cells, used = table.cells, np.unique(estimate)
    size = table.size[:, used].copy()
    size[:, 1:] -= size[:, :1]
    by_estimate = np.stack([slope[:, estimate == one].sum(axis=1) for one in used], axis=1)
    by_estimate[:, 0] = by_estimate.sum(axis=1)
    kept = np.flatnonzero(size.any(axis=0))
    size, by_estimate, number = size[:, kept], by_estimate[:, kept], len(kept)

    def outside(chosen: np.ndarray, values: np.ndarray) -> np.ndarray:
        pieces = np.flatnonzero(chosen[table.unit])
        within = group_sum(values[table.unit[pieces]], table.cell[pieces], len(cells.domain))
        return group_sum(values[chosen], table.stratum[chosen], cells.strata)[cells.stratum] - within

    pairs = outside(mine, _products(size, full=True)).reshape(-1, number, number)
    across = np.einsum("cef,ceg->cgf", by_estimate, pairs)
    if full:
        products = np.einsum("cgf,cgh->cfh", across, by_estimate).reshape(len(pairs), -1)
    else:
        products = (across * by_estimate).sum(axis=1)
    return products, -np.einsum("cef,ce->cf", by_estimate, outside(like, size))


def _bounded(columns: Columns, lone: np.ndarray, value: np.ndarray, beside: np.ndarray, full: bool) -> Iterator[_Piece]:
    """Yield what units alone with their set bring in: columns as fully correlated, estimates as independent."""
    n_cells, sums = len(columns.table.cells.domain), value.shape[2]
    for one in np.unique(columns.estimate):
        deviation, df = np.zeros((n_cells, sums)), np.full((n_cells, sums), np.inf)
        for column in np.flatnonzero(columns.estimate == one):
            exact = lone & columns.used[:, column]
            if not exact.any():
                continue
            made, free = _piece(columns, exact, np.array([column]), value, beside, full=False)
            deviation += np.sqrt(np.maximum(made, 0.0))
            df = np.minimum(df, np.where(free > 0, free, np.inf))
        if np.isfinite(df).any():
            squares = _products(deviation, full)
            df = np.where(np.isfinite(df), df, 0.0)
            yield (squares.reshape(n_cells, sums, sums) if full else squares), df
