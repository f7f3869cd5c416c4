"""Clusters: plots laid out together count as one sampling unit in every variance.

A cluster may be cut by parcels. Each of its pieces in a domain keeps the size of the whole cluster beside it, as the
variance of a domain asks for what the whole unit brings in. Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.estimate.groups import group_sum
from landcarbon.findings import join_findings, make_findings

if TYPE_CHECKING:
    from landcarbon.estimate.ratio import Cells, Means, Sample
    from landcarbon.estimate.tables import Units

__all__ = [
    "Pieces",
    "few_clusters",
    "pieces_of_clusters",
    "pieces_of_plots",
    "split_by_unit",
    "unit_codes",
    "unit_counts",
]


FEWEST = 2  # a variance needs two sampling units


@dataclass(frozen=True)
class Pieces:
    """What the sampling units bring into domains. Pieces F, strata H, cells C, pools K.

    Attributes
    ----------
    cell : ndarray of int
        Cell of each piece; shape (F,).
    size : ndarray
        Size of the whole unit in its stratum; shape (F, K).
    z : ndarray
        Sum of the deviations of the plots of the piece; shape (F, K).
    units_stratum, square_stratum : ndarray
        Units that count and sum of their squared sizes, by stratum; shape (H, K).
    units_cell, square_cell : ndarray
        The same of the units with a plot in the cell; shape (C, K).
    """

    cell: np.ndarray
    size: np.ndarray
    z: np.ndarray
    units_stratum: np.ndarray
    square_stratum: np.ndarray
    units_cell: np.ndarray
    square_cell: np.ndarray


def unit_codes(cluster: pd.Series, stratum: np.ndarray, plot: np.ndarray) -> np.ndarray | None:
    """Give numbers to the sampling units: clusters within strata, and plots that are in none.

    Parameters
    ----------
    cluster : Series
        Cluster of each row; missing or blank for a plot that stands alone.
    stratum, plot : ndarray of int
        Codes of each row.

    Returns
    -------
    ndarray of int or None
        The same number wherever stratum and cluster are the same, at any survey; None if no row is in a cluster.
    """
    given = cluster.astype("category")
    blank = np.array([not str(name).strip() for name in given.cat.categories], dtype=bool)
    code = given.cat.codes.to_numpy().astype(np.int64)
    alone = (code < 0) | np.append(blank, True)[code]
    if alone.all():
        return None
    plots = int(plot.max(initial=-1)) + 1
    return np.where(alone, plot, plots + (stratum + 1) * len(blank) + code)


def unit_counts(sample: Sample, strata: int) -> np.ndarray:
    """Count sampling units with a value, by stratum and pool; shape (H, K)."""
    if sample.unit is None:
        return group_sum(sample.used, sample.stratum, strata)
    _, first, unit = np.unique(sample.unit, return_index=True, return_inverse=True)
    there = group_sum(sample.used, unit, len(first)) > 0
    return group_sum(there, sample.stratum[first], strata)


def few_clusters(units: Units, samples: Sequence[Sample], survey: str, table: str = "estimate") -> pd.DataFrame:
    """Report strata that have plots enough, but all in one cluster.

    Parameters
    ----------
    units : Units
        Strata with areas.
    samples : sequence of Sample
        One survey for stocks; both for change.
    survey : str
        For the finding.
    table : str
        For the finding.
    """
    strata, found = len(units.strata), []
    few = np.zeros(strata, dtype=bool)
    for sample in samples:
        if sample.unit is None:
            continue
        plots = group_sum(sample.used, sample.stratum, strata)
        few |= ((plots >= FEWEST) & (unit_counts(sample, strata) < FEWEST)).any(axis=1)
    for unit in np.flatnonzero(few):
        area = units.stratum_area_ha[unit]
        lost = f"{area:,.2f} ha are missing" if np.isfinite(area) else "It is missing"
        found.append(
            make_findings(
                "stratum not estimable",
                severity="error",
                table=table,
                column="cluster",
                value=units.strata[unit],
                survey=survey,
                message=(
                    f"All plots of stratum {units.strata[unit]!r} with a value of some pool lie in one cluster: not "
                    f"estimable, as a standard error needs two sampling units. {lost} "
                    "from the figures of the inventory for that pool."
                ),
                remedy="Measure another cluster there, or fold the stratum into a like one with [strata] merge.",
            )
        )
    return join_findings(found)


def split_by_unit(unit: np.ndarray, cell: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Split units into pieces by cell.

    Parameters
    ----------
    unit, cell : ndarray of int
        Unit, from 0, and cell of each row; -1 outside all domains.

    Returns
    -------
    piece : ndarray of int
        Piece of each row.
    owner, cell : ndarray of int
        Unit and cell of each piece.
    first : ndarray of bool
        One piece of each unit, to count the unit once.
    """
    number = int(unit.max(initial=0)) + 1
    keys, piece = np.unique((cell + 1) * number + unit, return_inverse=True)
    owner = keys % number
    first = np.zeros(len(keys), dtype=bool)
    first[np.unique(owner, return_index=True)[1]] = True
    return piece, owner, keys // number - 1, first


def pieces_of_plots(mean: Means, z: np.ndarray) -> Pieces:
    """Each plot is a unit of its own."""
    return Pieces(
        cell=mean.cell,
        size=mean.size,
        z=z,
        units_stratum=mean.plots_stratum,
        square_stratum=mean.square_stratum,
        units_cell=mean.plots_cell,
        square_cell=mean.square_cell,
    )


def pieces_of_clusters(unit: np.ndarray, sample: Sample, mean: Means, z: np.ndarray, cells: Cells) -> Pieces:
    """Add up the plots of each unit in each cell.

    Parameters
    ----------
    unit : ndarray of int
        Sampling unit of each plot.
    sample : Sample
        All plots of the survey.
    mean : Means
        Means of the domains.
    z : ndarray
        Deviation of each plot in a domain, times size.
    cells : Cells
        Cells of the domains.
    """
    number = len(cells.domain)
    _, first, unit = np.unique(unit, return_index=True, return_inverse=True)
    counted = sample.used & (mean.plots_stratum > 0)[sample.stratum]
    whole = group_sum(np.where(counted, sample.size[:, None], 0.0), unit, len(first))
    piece, owner, cell, _ = split_by_unit(unit[mean.rows], mean.cell)
    there = group_sum(counted[mean.rows], piece, len(owner)) > 0
    size = whole[owner]
    return Pieces(
        cell=cell,
        size=size,
        z=group_sum(z, piece, len(owner)),
        units_stratum=group_sum(whole > 0, sample.stratum[first], cells.strata),
        square_stratum=group_sum(whole**2, sample.stratum[first], cells.strata),
        units_cell=group_sum(there, cell, number),
        square_cell=group_sum(size**2, cell, number),
    )
