"""What each sampling unit brings into domain means.

A row stands for a plot or a piece of a cluster, a column for a part and date.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from landcarbon.estimate.clusters import split_by_unit
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.pairs import Pairs, Side
from landcarbon.estimate.ratio import Cells

__all__ = ["Joint", "joint_table"]


@dataclass(frozen=True)
class Joint:
    """What each plot adds to the domain means. Rows n, cells C, columns Q (parts, date by date), sizes V.

    With clusters a row is what the plots of one cluster in one cell add together.

    Attributes
    ----------
    stratum, cell : ndarray of int
        Of each row; cell -1 outside all domains; shape (n,).
    size : ndarray
        Sizes: of plots one for each date, 0 where the plot is not in a sample; of whole clusters one for each column.
        Those of the second date are written as what they grew by since the first. Shape (n, V).
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
    measure : ndarray of int
        Which size goes with each column; shape (Q,).
    growth : ndarray of int
        The size on which a size is written as growth, -1 for none; shape (V,).
    lead : ndarray of bool, optional
        One row of each cluster, to count it once in its stratum; None if each row is a unit.
    own : ndarray of bool, optional
        Column counts on a plot of the piece itself, not only elsewhere in its cluster; shape (n, Q).
    place : ndarray, optional
        Position of each row [m], if the variance is to come from neighbours; shape (n, 2).
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
    measure: np.ndarray
    growth: np.ndarray
    lead: np.ndarray | None = None
    own: np.ndarray | None = None
    place: np.ndarray | None = None

    @property
    def whole(self) -> bool:
        """Whether each cell holds all plots of its stratum."""
        one = len(np.unique(self.cells.stratum)) == len(self.cells.stratum)
        return one and bool((self.cell >= 0).all())

    def once(self, rows: np.ndarray) -> np.ndarray:
        """Of some rows those that count their unit in its stratum."""
        return rows if self.lead is None else rows[self.lead[rows]]

    def heard(self, columns: np.ndarray | slice = slice(None)) -> np.ndarray:
        """Rows with plots of their own that have some of the columns."""
        return np.asarray((self.used if self.own is None else self.own)[:, columns].any(axis=1))

    def take(self, columns: np.ndarray, scale: np.ndarray) -> Joint:
        """Keep some columns, each multiplied by a number."""
        return replace(
            self,
            used=self.used[:, columns],
            own=None if self.own is None else self.own[:, columns],
            value=self.value[:, columns] * scale,
            beside=self.beside[:, columns] * scale,
            date=self.date[columns],
            part=self.part[columns],
            measure=self.measure[columns],
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
            lead=None if self.lead is None else again(self.lead),
            own=None if self.own is None else again(self.own) & used,
            place=None if self.place is None else again(self.place),
        )


def joint_table(
    sides: tuple[Side, ...],
    domains: tuple[np.ndarray, ...],
    cells: Cells,
    pairs: Pairs | None,
    *,
    near: bool = False,
) -> Joint:
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
    near : bool
        Keep positions, so that the variance comes from neighbours.
    """
    rows, number = _rows(sides, pairs)
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
    unit, place = _units_and_places(sides, rows, number)
    table = Joint(
        stratum=stratum,
        cell=cell,
        size=size,
        used=np.concatenate(used, axis=1),
        value=np.concatenate(value, axis=1),
        beside=np.concatenate(beside, axis=1),
        date=np.repeat(np.arange(len(sides)), used[0].shape[1]),
        part=np.tile(np.arange(used[0].shape[1]), len(sides)),
        cells=cells,
        measure=np.repeat(np.arange(len(sides)), used[0].shape[1]),
        growth=np.arange(len(sides)) - 1,
        place=place if near else None,
    )
    return table if unit is None else _by_clusters(table, unit)


def _rows(sides: tuple[Side, ...], pairs: Pairs | None) -> tuple[list[np.ndarray], int]:
    """Row of each plot of each date, and the number of rows; a plot of both dates has one row."""
    rows = [np.arange(len(sides[0].sample.plot))]
    number = len(rows[0])
    if len(sides) > 1 and pairs is not None:
        place = np.full(len(sides[1].sample.plot), -1)
        place[pairs.second] = pairs.first
        new = place < 0
        place[new] = number + np.arange(int(new.sum()))
        rows.append(place)
        number += int(new.sum())
    return rows, number


def _units_and_places(
    sides: tuple[Side, ...], rows: list[np.ndarray], number: int
) -> tuple[np.ndarray | None, np.ndarray]:
    """Return the sampling unit of each row (None without clusters), and its position, NaN if unknown."""
    unit, place = np.zeros(number, dtype=np.int64), np.full((number, 2), np.nan)
    clustered = False
    for side, row in zip(sides, rows, strict=True):
        sample = side.sample
        if sample.unit is not None:
            unit[row], clustered = sample.unit, True
        if sample.place is not None:
            place[row] = np.where(np.isfinite(sample.place), sample.place, place[row])
    return (unit if clustered else None), place


def _by_clusters(table: Joint, unit: np.ndarray) -> Joint:
    """Add up the plots of each unit in each cell.

    A piece of a cluster takes off its domain's mean what the whole cluster counts for, not only the plots of the piece.
    """
    _, owner_of_row = np.unique(unit, return_inverse=True)
    piece, owner, cell, lead = split_by_unit(owner_of_row, table.cell)
    pieces, units = len(owner), int(owner_of_row.max(initial=-1)) + 1
    size = np.where(table.used, np.cumsum(table.size, axis=1)[:, table.date], 0.0)
    whole, part = group_sum(size, owner_of_row, units)[owner], group_sum(size, piece, pieces)
    stratum = np.zeros(pieces, dtype=np.int64)
    stratum[piece] = table.stratum
    value, inside = group_sum(table.value, piece, pieces), cell >= 0
    value[inside] -= table.beside[cell[inside]] * (whole - part)[inside]
    columns = size.shape[1]
    growth = np.full(columns, -1)
    used = whole > 0
    if table.date.max(initial=0) > 0:
        first = columns // 2
        whole = np.concatenate([whole[:, :first], whole[:, first:] - whole[:, :first]], axis=1)
        growth[first:] = np.arange(first)
    return replace(
        table,
        stratum=stratum,
        cell=cell,
        size=whole,
        used=used,
        value=value,
        own=part > 0,
        measure=np.arange(columns),
        growth=growth,
        lead=lead,
        place=None if table.place is None else _centres(table.place, owner_of_row, units)[owner],
    )


def _centres(place: np.ndarray, unit: np.ndarray, units: int) -> np.ndarray:
    """Mean position of each unit; NaN if that of one of its plots is unknown."""
    number = np.bincount(unit, minlength=units)[:, None]
    return group_sum(place, unit, units) / number
