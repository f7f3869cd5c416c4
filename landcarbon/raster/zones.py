"""Polygons over a grid: cells with their shares, and sums of cell values.

Shares are those of areas on the map: a cell cut by the edge of a polygon counts with the part inside.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely

from landcarbon.raster.grid import Grid
from landcarbon.raster.shares import Cover, cell_shares

__all__ = ["ZoneSums", "Zones", "lower_to"]

# Corners of polygons worked on together: bounds the memory where a window holds very many plots.
_CORNERS_AT_ONCE = 500_000


@dataclass
class ZoneSums:
    """Sums of cell values over polygons; windows add up.

    Attributes
    ----------
    total, size : ndarray
        Sum of value times share, and of absolute value times share.
    weight : ndarray
        Sum of shares of the cells that have a value.
    least, most : ndarray
        Extremes of the values touched; infinite where there are none.
    """

    total: np.ndarray
    size: np.ndarray
    weight: np.ndarray
    least: np.ndarray
    most: np.ndarray

    @classmethod
    def zero(cls, count: int) -> ZoneSums:
        """Return the sums of nothing."""
        none = np.full(count, np.inf)
        return cls(np.zeros(count), np.zeros(count), np.zeros(count), none, -none)

    @property
    def mean(self) -> np.ndarray:
        """Mean over the part with values; NaN where there is none."""
        known = self.weight > 0
        return np.divide(self.total, self.weight, out=np.full(len(self.total), np.nan), where=known)

    def add(self, cover: Cover, values: np.ndarray) -> None:
        """Add a window.

        Parameters
        ----------
        cover : Cover
            Cells and polygons of the window.
        values : ndarray
            Of the window, shape (rows, columns); NaN where there is none.
        """
        told = values.ravel()[cover.cell]
        known = np.isfinite(told)
        zone, share, told = cover.zone[known], cover.share[known], told[known]
        count = len(self.total)
        amount = share * told
        self.total += np.bincount(zone, amount, minlength=count)
        self.size += np.bincount(zone, np.abs(amount), minlength=count)
        self.weight += np.bincount(zone, share, minlength=count)
        lower_to(self.least, zone, told)
        negative = -self.most
        lower_to(negative, zone, -told)
        self.most = -negative


class Zones:
    """Polygons, found by place.

    Parameters
    ----------
    shapes : ndarray of Polygon or MultiPolygon
        Valid polygons; empty ones cover nothing.
    """

    def __init__(self, shapes: np.ndarray) -> None:
        self.shapes = np.asarray(shapes, dtype=object)
        self._tree = shapely.STRtree(self.shapes)
        self._corners = shapely.get_num_coordinates(self.shapes)

    def __len__(self) -> int:
        """Return the number of polygons."""
        return len(self.shapes)

    def cover(self, grid: Grid) -> Cover:
        """Return every cell of a grid that lies in a polygon, with its share."""
        found = np.sort(self._tree.query(shapely.box(*grid.bounds)))
        batch = np.cumsum(self._corners[found]) // _CORNERS_AT_ONCE
        parts = [
            cell_shares(grid, self.shapes[some], some) for some in np.split(found, np.flatnonzero(np.diff(batch)) + 1)
        ]
        if len(parts) == 1:
            return parts[0]
        cell, zone, share = zip(*((part.cell, part.zone, part.share) for part in parts), strict=True)
        return Cover(np.concatenate(cell), np.concatenate(zone), np.concatenate(share))


def lower_to(least: np.ndarray, zone: np.ndarray, values: np.ndarray) -> None:
    """Lower the running minimum of each polygon, in place; entries of a polygon stand together."""
    if not len(zone):
        return
    starts = np.flatnonzero(np.r_[True, zone[1:] != zone[:-1]])
    lowest = np.minimum.reduceat(values, starts)
    least[zone[starts]] = np.minimum(least[zone[starts]], lowest)
