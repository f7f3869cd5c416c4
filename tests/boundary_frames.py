"""Invented land whose boundaries change, as outlines on a grid of hectares, with plots in every cell."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from pyproj import Geod
from read_samples import HEAD, read
from shapely.geometry import box

from landcarbon.inputs import Inputs

WEST, SOUTH, CELL = 400_000.0, 5_600_000.0, 100.0
CRS = "EPSG:25832"
SURVEYS = '[surveys.2014]\ntrees = "trees_2014.csv"\n[surveys.2024]\ntrees = "trees_2024.csv"'
PROJECT = f"""{HEAD}
[parcels]
file = "parcels.gpkg"
[plots]
file = "plots.csv"
crs = "{CRS}"
design = {{ kind = "circle", radius_m = 10 }}
{SURVEYS}
[equations]
region = "europe"
"""


def cells(west: int, south: int, east: int, north: int) -> shapely.Polygon:
    """A rectangle of cells of one hectare on the map grid."""
    return box(WEST + west * CELL, SOUTH + south * CELL, WEST + east * CELL, SOUTH + north * CELL)


def hectares(shape: shapely.Geometry) -> float:
    """Area on the ellipsoid, by pyproj from corners taken to degrees: independent of the program's own way."""
    to_degrees = gpd.GeoSeries([shape], crs=CRS).to_crs("EPSG:4258").iloc[0]
    return abs(Geod(ellps="GRS80").geometry_area_perimeter(to_degrees)[0]) / 10_000


def version(
    parcel: str, shape: shapely.Geometry, since: str | None = None, until: str | None = None, **more: Any
) -> dict[str, Any]:
    """One row of the parcels file."""
    row = {"parcel": parcel, "stratum": "oak", "land_use": "", "valid_from": since, "valid_to": until, **more}
    return {**row, "geometry": shape}


def write_land(folder: Path, versions: Iterable[dict[str, Any]], plots: pd.DataFrame) -> None:
    """Write parcels, plots (plot, x, y) and a tree on every plot at either survey."""
    frame = gpd.GeoDataFrame(list(versions), geometry="geometry", crs=CRS)
    for name in ("valid_from", "valid_to"):
        frame[name] = pd.to_datetime(frame[name])
    frame.to_file(folder / "parcels.gpkg")
    plots.to_csv(folder / "plots.csv", index=False)
    for year in (2014, 2024):
        trees = pd.DataFrame({"plot": plots["plot"], "tree": 1, "species": "oak", "dbh": 20.0, "date": f"{year}-06-15"})
        trees.to_csv(folder / f"trees_{year}.csv", index=False)


def grid_plots(east: int, north: int, per_side: int = 2) -> pd.DataFrame:
    """Plots spread evenly over every cell."""
    step = CELL / per_side
    x, y = np.meshgrid(np.arange(east * per_side), np.arange(north * per_side))
    names = [f"p{at:03d}" for at in range(x.size)]
    return pd.DataFrame({"plot": names, "x": WEST + (x.ravel() + 0.5) * step, "y": SOUTH + (y.ravel() + 0.5) * step})


def land(folder: Path, versions: Iterable[dict[str, Any]], plots: pd.DataFrame, text: str = PROJECT) -> Inputs:
    """Write the land and read it."""
    write_land(folder, versions, plots)
    return read(folder, text)


def measured(inputs: Inputs, density: Any) -> pd.DataFrame:
    """The plot table of a survey of everything: ``density(x, y, survey)`` gives t C/ha."""
    rows = inputs.parcel_of.merge(inputs.plots[["plot", "x", "y"]], on="plot")
    rows["above_ground"] = [
        density(x, y, name) for x, y, name in zip(rows["x"], rows["y"], rows["survey"], strict=True)
    ]
    day = {"2014": pd.Timestamp("2014-06-15"), "2024": pd.Timestamp("2024-06-15")}
    return rows.assign(date=rows["survey"].map(day), size=1.0, all=rows["above_ground"])


def in_cells(x: float, west: float, east: float) -> bool:
    """Whether an easting lies between two cell borders."""
    return west * CELL <= x - WEST < east * CELL


__all__ = ["PROJECT", "cells", "grid_plots", "hectares", "in_cells", "land", "measured", "version", "write_land"]
