"""Cells of a predicted raster moved so that they add up to the figures of parcels.

A cell cut by the edge of a parcel counts in it with its share inside. Each parcel has a layer of its own: the
prediction plus a shift, or times a ratio where a shift would take cells below zero. A cell of several parcels starts
as the mean of their layers, weighted by area; what this brings into one parcel and takes from another is balanced by
:mod:`landcarbon.raster.balance`. Cells without a prediction carry the mean density of their parcel.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from landcarbon.raster.balance import Borders, balance_additive, balance_positive
from landcarbon.raster.shares import Cover
from landcarbon.raster.zones import lower_to

__all__ = ["Calibration", "CellSums", "calibrate"]


@dataclass
class CellSums:
    """What the first pass over the windows keeps: sums per parcel, and the cells lying in several parcels.

    Attributes
    ----------
    valid, missing : ndarray
        Cells of the parcel alone, with and without a prediction (sums of shares).
    total : ndarray
        Sum of share times prediction over the valid ones.
    least : ndarray
        Least prediction in the parcel, infinite without any.
    """

    valid: np.ndarray
    missing: np.ndarray
    total: np.ndarray
    least: np.ndarray
    _shared: list[tuple[np.ndarray, ...]] = field(default_factory=list)

    @classmethod
    def zero(cls, parcels: int) -> CellSums:
        """Return the sums of nothing."""
        return cls(np.zeros(parcels), np.zeros(parcels), np.zeros(parcels), np.full(parcels, np.inf))

    def add(self, cover: Cover, prediction: np.ndarray, cell: np.ndarray) -> None:
        """Add a window.

        Parameters
        ----------
        cover : Cover
            Cells and parcels of the window.
        prediction : ndarray
            One per entry of ``cover``; NaN if there is none.
        cell : ndarray of int
            Number of the cell in the whole grid, one per entry.
        """
        count = len(self.valid)
        known = np.isfinite(prediction)
        lower_to(self.least, cover.zone[known], prediction[known])
        several = shared_entries(cover)
        alone = ~several
        self.valid += _sums(cover.zone, cover.share, alone & known, count)
        self.missing += _sums(cover.zone, cover.share, alone & ~known, count)
        self.total += _sums(cover.zone, cover.share * prediction, alone & known, count)
        if several.any():
            self._shared.append((cell[several], cover.zone[several], cover.share[several], prediction[several]))

    def shared(self) -> tuple[np.ndarray, ...]:
        """Return number of the cell, parcel, share and prediction of the entries in cells of several parcels."""
        if not self._shared:
            return np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0), np.zeros(0)
        parts = tuple(np.concatenate(part) for part in zip(*self._shared, strict=True))
        order = np.lexsort((parts[1], parts[0]))
        return tuple(part[order] for part in parts)


@dataclass(frozen=True)
class Calibration:
    """How to turn predictions into cell values.

    Attributes
    ----------
    scale, shift, fill : ndarray
        Per parcel: a cell of it alone has ``scale * prediction + shift``, or ``fill`` without a prediction.
    cell, value : ndarray
        Cells of several parcels by number, in order, with their values.
    met : ndarray of bool
        Parcels whose cells add up to their figure; False where no cell values can do that.
    """

    scale: np.ndarray
    shift: np.ndarray
    fill: np.ndarray
    cell: np.ndarray
    value: np.ndarray
    met: np.ndarray

    def apply(self, cover: Cover, prediction: np.ndarray, cell: np.ndarray, cells: int) -> np.ndarray:
        """Return the values of a window of ``cells`` cells; NaN outside the parcels.

        Parameters
        ----------
        cover, prediction, cell
            As for :meth:`CellSums.add`.
        cells : int
            Number of cells in the window.
        """
        values = np.full(cells, np.nan)
        own = self.scale[cover.zone] * prediction + self.shift[cover.zone]
        values[cover.cell] = np.where(np.isfinite(prediction), own, self.fill[cover.zone])
        several = shared_entries(cover)
        if several.any():
            values[cover.cell[several]] = self.value[np.searchsorted(self.cell, cell[several])]
        return values


def shared_entries(cover: Cover) -> np.ndarray:
    """Tell which entries of a window lie in a cell of several parcels."""
    if not len(cover.cell):
        return np.zeros(0, dtype=bool)
    return np.bincount(cover.cell)[cover.cell] > 1


def calibrate(sums: CellSums, figure: np.ndarray, cell_area: float, *, signed: bool, ease: float) -> Calibration:
    """Work out the cell values that add up to the figures of the parcels.

    Parameters
    ----------
    sums : CellSums
        From a pass over all windows.
    figure : ndarray
        Stock or change of each parcel [t C], finite.
    cell_area : float
        ha.
    signed : bool
        Whether values may lie on either side of zero (change). Otherwise they are kept at or above zero; predictions
        must be so, too.
    ease : float
        How many times as readily a cell of several parcels is lowered as one of a single parcel (unsigned values).

    Returns
    -------
    Calibration
        Values in t C/ha.
    """
    cell, zone, share, prediction = sums.shared()
    known = np.isfinite(prediction)
    count = len(figure)
    valid = sums.valid + _sums(zone, share, known, count)
    area = valid + sums.missing + _sums(zone, share, ~known, count)
    total = sums.total + _sums(zone, share * prediction, known, count)
    on_grid = area > 0
    fill = _divide(figure, area * cell_area)
    scale, shift = _own_layer(fill, _divide(total, valid), total, sums.least, signed=signed)
    layer = np.where(known, scale[zone] * prediction + shift[zone], fill[zone])
    inside = scale * sums.total + shift * sums.valid + fill * sums.missing
    number, entry = np.unique(cell, return_inverse=True)
    mixed = _divide(np.bincount(entry, share * layer), np.bincount(entry, share))
    borders = Borders(entry, zone, share, mixed)
    alone = sums.valid + sums.missing
    if signed:
        moved, value, met = balance_additive(borders, inside, alone, fill * area)
        shift, fill = shift + moved, fill + moved
    else:
        factor, value, met = balance_positive(borders, inside, fill * area, ease=ease)
        scale, shift, fill = scale * factor, shift * factor, fill * factor
    return Calibration(scale, shift, fill, number, value, met & on_grid)


def _own_layer(
    density: np.ndarray, mean: np.ndarray, total: np.ndarray, least: np.ndarray, *, signed: bool
) -> tuple[np.ndarray, np.ndarray]:
    """Return scale and shift that give the valid cells of each parcel its density on average."""
    shift = np.where(np.isfinite(least), density - mean, 0.0)
    if signed:
        return np.ones(len(density)), shift
    below = (least + shift < 0) & (total > 0)
    return np.where(below, _divide(density, mean), 1.0), np.where(below, 0.0, shift)


def _divide(above: np.ndarray, below: np.ndarray) -> np.ndarray:
    return np.divide(above, below, out=np.zeros(len(below)), where=below > 0)


def _sums(zone: np.ndarray, values: np.ndarray, kept: np.ndarray, count: int) -> np.ndarray:
    return np.bincount(zone[kept], values[kept], minlength=count)
