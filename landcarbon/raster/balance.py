"""Cells of several parcels set so that every parcel adds up: a small sparse system, no pass over the raster.

What lies in one parcel only enters as a single number per parcel; what lies in several enters cell by cell. Of all ways
to meet the figures the one closest to the start is taken: in the sense of least squares where values may have either
sign, else of the Kullback-Leibler divergence, under which what is positive stays so.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from scipy.sparse import csr_array

__all__ = ["Borders", "balance_additive", "balance_positive"]

# Numerical settings. The sums are asked for far more closely than a raster in single precision can hold them.
_EXACT = 1e-12
_CLOSE = 1e-9
_STEPS = 100
_HALVINGS = 40
_LARGEST_EXPONENT = 600.0


@dataclass(frozen=True)
class Borders:
    """Cells that lie in several parcels.

    Attributes
    ----------
    cell, parcel : ndarray of int
        One entry for every cell and parcel it lies in; cells are numbered from 0.
    share : ndarray
        Share of the cell inside the parcel.
    value : ndarray
        Starting value of each cell.
    """

    cell: np.ndarray
    parcel: np.ndarray
    share: np.ndarray
    value: np.ndarray

    def matrix(self, parcels: int) -> csr_array:
        """Return the shares as a sparse matrix, cells by parcels."""
        from scipy.sparse import csr_array

        return csr_array((self.share, (self.cell, self.parcel)), shape=(len(self.value), parcels))


def balance_additive(
    borders: Borders, inside: np.ndarray, alone: np.ndarray, wanted: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Move values by sums.

    Parameters
    ----------
    borders : Borders
        Cells of several parcels.
    inside : ndarray
        What the other cells of each parcel add up to, in units of cells.
    alone : ndarray
        Number of these cells (sum of shares).
    wanted : ndarray
        Sum each parcel must have.

    Returns
    -------
    move : ndarray
        To add to every cell that lies in one parcel only, per parcel.
    value : ndarray
        Values of the border cells.
    met : ndarray of bool
        Parcels that add up.
    """
    from scipy.sparse import diags_array

    shares = borders.matrix(len(wanted))
    lacking = wanted - inside - shares.T @ borders.value
    system = diags_array(alone) + shares.T @ shares
    move = _solve(system, lacking)
    value = borders.value + shares @ move
    left = wanted - inside - alone * move - shares.T @ value
    scale = np.abs(wanted) + np.abs(inside) + shares.T @ np.abs(borders.value)
    return move, value, np.abs(left) <= _CLOSE * scale


def balance_positive(
    borders: Borders, inside: np.ndarray, wanted: np.ndarray, *, ease: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Multiply values by factors, so that none falls below zero.

    Parameters
    ----------
    borders, inside, wanted
        As for :func:`balance_additive`; not negative. A parcel with a sum of zero gets zero in all its cells.
    ease : float
        How many times as readily border cells are lowered as those inside. Between a parcel of little and one of much,
        the mean of both is more than the former can bear; without this its inside would be emptied to make up.

    Returns
    -------
    factor, value, met : ndarray
        As for :func:`balance_additive`, but a factor for the cells that lie in one parcel only.
    """
    shares = borders.matrix(len(wanted))
    inside = np.maximum(inside, 0.0)
    empty = wanted <= 0
    start = np.where(shares @ empty.astype("float64") > 0, 0.0, np.maximum(borders.value, 0.0))
    factor = np.where(empty, 0.0, 1.0)
    active = ~empty & ((inside > 0) | (shares.T @ start > 0))
    exponent, value, met = _scale(shares, inside, wanted, start, active, ease)
    if not met[active].all():
        # A parcel made up of border cells only may ask for what its neighbours cannot grant. It is told, not met.
        active &= met | (inside > 0)
        exponent, value, met = _scale(shares, inside, wanted, start, active, ease)
    factor[active] = np.exp(exponent)
    return factor, value, met


def _scale(
    shares: csr_array, inside: np.ndarray, wanted: np.ndarray, start: np.ndarray, active: np.ndarray, ease: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Minimise the dual of the divergence by Newton's method with halved steps; it is smooth and convex."""
    from scipy.sparse import diags_array

    part, own, sums = shares[:, active], inside[active], wanted[active]
    exponent = np.zeros(len(own))

    def state(at: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
        outer = own * np.exp(np.minimum(at, _LARGEST_EXPONENT))
        pull = part @ at
        slope = np.where(pull < 0, ease, 1.0)  # down readily, up no more than what lies inside
        cells = start * np.exp(np.minimum(slope * pull, _LARGEST_EXPONENT))
        integral = np.where(pull < 0, cells / ease, cells + start * (1 / ease - 1))
        return outer, cells, cells * slope, float(outer.sum() + integral.sum() - at @ sums)

    outer, cells, steep, height = state(exponent)
    for _ in range(_STEPS):
        off = outer + part.T @ cells - sums
        if not len(off) or np.max(np.abs(off) / sums) <= _EXACT:
            break
        step = _solve(diags_array(outer) + part.T @ (diags_array(steep) @ part), -off)
        slope = float(step @ off)
        length = 1.0
        for _ in range(_HALVINGS):
            trial = state(exponent + length * step)
            if trial[3] <= height + 1e-4 * length * slope or abs(length * slope) <= _EXACT * abs(height):
                break
            length /= 2
        exponent = exponent + length * step
        outer, cells, steep, height = trial
    reached = inside * active + shares.T @ cells
    reached[active] += outer - own
    met = np.abs(reached - wanted) <= _CLOSE * wanted
    return exponent, cells, met


def _solve(system: Any, right: np.ndarray) -> np.ndarray:
    """Solve a symmetric system; the shortest least-squares solution if it is singular."""
    from scipy.sparse.linalg import MatrixRankWarning, lsmr, spsolve

    if not len(right):
        return right
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", MatrixRankWarning)
        found = np.atleast_1d(spsolve(system.tocsc(), right))
    size = np.max(np.abs(right), initial=0.0)
    if np.isfinite(found).all() and np.max(np.abs(system @ found - right)) <= _CLOSE * max(size, 1e-300):
        return found
    return lsmr(system, right, atol=_EXACT, btol=_EXACT, conlim=0)[0]
