"""Canopy heights of the demo woodland as two rasters, as if flown with a laser in 2014 and 2024. All of it is made up.

Between the plots the height follows their trees, parcel by parcel, and wanders a little of its own accord; the figures
have no meaning but to go with the plots about as well as such heights do.
"""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyproj
import rasterio
import shapely
from rasterio.transform import from_origin
from woodland import CRS, LARGE_RADIUS_M

__all__ = ["FLIGHTS", "write_canopy"]

# Each flight came in the coordinate system of its own contractor.
FLIGHTS = {2014: CRS, 2024: "EPSG:25833"}
CELL_M, MARGIN_M = 20.0, 60.0
NODATA, SCALE = 65535, 10.0  # heights in decimetres
REACH_M, OWN_WEIGHT = 75.0, 0.12  # how far a plot tells of its surroundings, and what its parcel counts beside it
SMOOTH_M, SMOOTH_SD_M, CELL_SD_M = 90.0, 1.0, 1.1
UNFLOWN = {2024: "Chapel Rise"}  # a corner of this parcel lay under cloud


def _plot_heights(plots: pd.DataFrame, state: pd.DataFrame) -> np.ndarray:
    """Height of the canopy over each plot [m]: taller where its living trees are thicker and stand closer."""
    live = state[state.state == "L"]
    mass = (0.1 * live.dbh**2.4).groupby(live["plot"]).sum().reindex(plots["plot"], fill_value=0.0).to_numpy()
    tonnes = mass / 1000.0 / (np.pi * LARGE_RADIUS_M**2 / 1e4) / plots.share.to_numpy()
    return 1.85 * np.sqrt(tonnes)


def _smooth_noise(x: np.ndarray, y: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Waves of random direction and length about SMOOTH_M."""
    angle, phase = rng.uniform(0.0, 2 * np.pi, (2, 24))
    length = SMOOTH_M * np.exp(rng.normal(0.0, 0.3, 24)) * 2 * np.pi / 3
    waves = [np.sin(2 * np.pi * (x * np.cos(a) + y * np.sin(a)) / size + p)
             for a, p, size in zip(angle, phase, length, strict=True)]  # fmt: skip
    return SMOOTH_SD_M * np.sum(waves, axis=0) / np.sqrt(12.0)


def _heights(x: np.ndarray, y: np.ndarray, parcels: gpd.GeoDataFrame, plots: pd.DataFrame, at_plot: np.ndarray,
             rng: np.random.Generator) -> np.ndarray:  # fmt: skip
    """Height at points [m]; low scrub outside the woodland."""
    height = np.full(len(x), 1.0)
    point, parcel = shapely.STRtree(parcels.geometry.to_numpy()).query(shapely.points(x, y), predicate="within")
    stand_mean = pd.Series(at_plot).groupby(plots.stand.to_numpy()).mean()
    for number, (name, stand) in enumerate(zip(parcels.name, parcels.stand, strict=True)):
        here, own = point[parcel == number], (plots.parcel == name).to_numpy()
        base = (at_plot[own].sum() + 2.0 * stand_mean[stand]) / (own.sum() + 2.0)
        apart = (x[here][:, None] - plots.x.to_numpy()[own]) ** 2 + (y[here][:, None] - plots.y.to_numpy()[own]) ** 2
        weight = np.exp(-0.5 * apart / REACH_M**2)
        pulled = (weight * (at_plot[own] - base)).sum(axis=1) / (weight.sum(axis=1) + OWN_WEIGHT)
        height[here] = base + pulled
    height += _smooth_noise(x, y, rng) + rng.normal(0.0, CELL_SD_M, len(x))
    return np.maximum(height, 0.0)


def write_canopy(
    parcels: gpd.GeoDataFrame, plots: pd.DataFrame, states: dict[int, pd.DataFrame], folder: Path, seed: int
) -> None:
    """Write ``canopy_2014.tif`` and ``canopy_2024.tif``: heights in decimetres on cells of 20 m.

    Parameters
    ----------
    parcels : GeoDataFrame
        name, stand and geometry.
    plots : DataFrame
        plot, x, y, parcel, stand, share.
    states : dict of DataFrame
        All stems by survey.
    folder : Path
        Where the files go.
    seed : int
        Start of the random numbers.
    """
    for survey, crs in FLIGHTS.items():
        rng = np.random.default_rng([seed, survey])
        west, south, east, north = parcels.to_crs(crs).total_bounds + MARGIN_M * np.array([-1, -1, 1, 1])
        west, north = CELL_M * np.floor(west / CELL_M), CELL_M * np.ceil(north / CELL_M)
        columns, rows = int(np.ceil((east - west) / CELL_M)), int(np.ceil((north - south) / CELL_M))
        x, y = np.meshgrid(west + CELL_M * (np.arange(columns) + 0.5), north - CELL_M * (np.arange(rows) + 0.5))
        to_plan = pyproj.Transformer.from_crs(crs, CRS, always_xy=True)
        plan_x, plan_y = to_plan.transform(x.ravel(), y.ravel())
        height = _heights(plan_x, plan_y, parcels, plots, _plot_heights(plots, states[survey]), rng)
        cells = np.round(SCALE * height).astype(np.uint16).reshape(rows, columns)
        if survey in UNFLOWN:
            outline = parcels.to_crs(crs).set_index("name").geometry[UNFLOWN[survey]]
            left, _, right, _ = outline.bounds
            cloud = shapely.intersection(outline, shapely.box(left, south, left + 0.15 * (right - left), north))
            cells[shapely.contains_xy(cloud.buffer(CELL_M), x, y)] = NODATA
        with rasterio.open(
            folder / f"canopy_{survey}.tif", "w", driver="GTiff", width=columns, height=rows, count=1, dtype="uint16",
            crs=crs, transform=from_origin(west, north, CELL_M, CELL_M), nodata=NODATA, compress="deflate", predictor=2,
        ) as raster:  # fmt: skip
            raster.write(cells, 1)
