"""What reading hands to the rest of the program: canonical tables in fixed units.

The columns of each table are listed, with unit and meaning, in ``landcarbon/read/columns.csv``.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import pandas as pd

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = ["Inputs"]


@dataclass(frozen=True)
class Inputs:
    """Field data of one inventory in canonical form. Frames are not to be changed in place.

    Attributes
    ----------
    trees : DataFrame
        One row per stem and survey; ``used`` is False where a check set the row aside.
    species : DataFrame
        species (the user's code), scientific_name.
    plots : DataFrame
        One row per plot: plot, x, y [m, in ``crs``], lon, lat [deg], parcel, stratum, inside.
    visits : DataFrame
        One row per survey and plot: date, visited, share_inside, slope_deg, n_subplots, plot_area_ha.
    parcels : GeoDataFrame or None
        parcel, stratum, land_use, area_ha, geometry.
    strata : DataFrame
        stratum, area_ha (NaN if unknown), area_source.
    surveys : DataFrame
        survey, since, until; in the order of time.
    findings : DataFrame
        Findings of reading and checking.
    files : DataFrame
        file, sheet, sha256, bytes, rows, role of every file read.
    crs : str or None
        Coordinate system of x, y and the parcels.
    area_method : str
        One sentence on where the areas come from.
    samples : dict of DataFrame
        Tables of the other pools by name (pieces, lines, logs, stumps, litter, ground_vegetation, saplings, soil); only
        those the project file names.
    parcel_versions : GeoDataFrame, optional
        Every outline the parcels have had, where the parcels file says how long each was in force: parcel, stratum,
        land_use, area_ha, valid_from, valid_to, geometry. ``parcels`` then holds those in force at the latest survey.
    parcels_in_force : DataFrame, optional
        survey, parcel, row: which rows of ``parcel_versions`` were in force at each survey.
    parcel_of : DataFrame, optional
        survey, plot, parcel, stratum, inside: where each plot lay within the boundaries of each survey. ``plots`` then
        says where it lay at the latest survey at which it was in the inventory.
    """

    trees: pd.DataFrame
    species: pd.DataFrame
    plots: pd.DataFrame
    visits: pd.DataFrame
    parcels: gpd.GeoDataFrame | None
    strata: pd.DataFrame
    surveys: pd.DataFrame
    findings: pd.DataFrame
    files: pd.DataFrame
    crs: str | None
    area_method: str
    samples: dict[str, pd.DataFrame] = field(default_factory=dict)
    parcel_versions: gpd.GeoDataFrame | None = None
    parcels_in_force: pd.DataFrame | None = None
    parcel_of: pd.DataFrame | None = None
