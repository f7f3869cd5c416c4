"""Cells of a published raster added up over parcels, read back from the file."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.publish.raster_tiff import read_grid, read_tiff
from landcarbon.raster.limits import raster_limit
from landcarbon.raster.zones import Zones, ZoneSums
from landcarbon.read.raster_files import WINDOW_COLUMNS, WINDOW_ROWS

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = ["check_raster_sums", "raster_sums"]


def raster_sums(path: Path, parcels: gpd.GeoDataFrame) -> tuple[np.ndarray, np.ndarray]:
    """Return the sum of cell value times cell area inside each parcel, and the same of absolute values [t C].

    Parameters
    ----------
    path : Path
        Raster in t C/ha.
    parcels : GeoDataFrame
        Polygons in its coordinate system, in metres.
    """
    grid = read_grid(path)
    zones = Zones(parcels.geometry.to_numpy())
    sums = ZoneSums.zero(len(parcels))
    with read_tiff(path) as read:
        for window in grid.windows(WINDOW_ROWS, WINDOW_COLUMNS):
            cover = zones.cover(grid.part(window))
            if len(cover.cell):
                sums.add(cover, read(window))
    area = grid.cell_area / M2_PER_HECTARE
    return sums.total * area, sums.size * area


def check_raster_sums(path: Path, parcels: gpd.GeoDataFrame, figure: np.ndarray) -> float:
    """Return the largest relative difference between the cells of a raster and the figures of the parcels.

    Parameters
    ----------
    path : Path
        Raster in t C/ha, read anew.
    parcels : GeoDataFrame
        Polygons.
    figure : ndarray
        Stock or change of each [t C]; NaN is passed over.

    Returns
    -------
    float
        Relative to the figure; where gains and losses of the cells cancel out nearly or wholly, to a small share
        (``sum_difference`` in the data file of limits) of their size, as rounding allows no more. 0 without parcels.
    """
    known = np.isfinite(figure)
    if not known.any():
        return 0.0
    total, size = raster_sums(path, parcels.loc[known])
    wanted = np.asarray(figure, dtype="float64")[known]
    scale = np.maximum(np.abs(wanted), raster_limit("sum_difference") * size)
    off = np.abs(total - wanted)
    return float(np.max(np.divide(off, scale, out=np.where(off > 0, np.inf, 0.0), where=scale > 0)))
