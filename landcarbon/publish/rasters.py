"""Density and change as GeoTIFF, with cells that add up to the figures of the parcels.

A raster is made in three passes over windows: one for the sums per parcel, one that writes, and one that reads the file
back and adds its cells up parcel by parcel. Only then does it take its place.
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
import shapely

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.errors import LandcarbonError, SettingsError
from landcarbon.findings import join_findings
from landcarbon.publish.raster_check import check_raster_sums
from landcarbon.publish.raster_tiff import TiffLabel, read_tiff, write_tiff
from landcarbon.publish.results import RasterRequest
from landcarbon.raster.calibrate import Calibration, CellSums, calibrate
from landcarbon.raster.coefficients import model_of
from landcarbon.raster.grid import Grid, Window
from landcarbon.raster.limits import raster_limit
from landcarbon.raster.predict import predict
from landcarbon.raster.shares import Cover
from landcarbon.raster.zones import Zones
from landcarbon.read.raster_files import WINDOW_COLUMNS, WINDOW_ROWS, open_raster
from landcarbon.read.raster_notes import raster_note
from landcarbon.read.rasters import serving_files

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = ["RasterRequest", "check_raster_sums", "raster_grid", "write_change", "write_density", "write_rasters"]

Prediction = Callable[[Window, Cover], np.ndarray]


def write_rasters(
    folder: Path, request: RasterRequest, stocks: pd.DataFrame, change: pd.DataFrame, *, pool: str = "all"
) -> tuple[list[Path], pd.DataFrame]:
    """Write ``density_SURVEY.tif`` for every survey and ``change_SINCE_UNTIL.tif`` for every pair with parcel figures.

    Parameters
    ----------
    folder : Path
        Where to.
    request : RasterRequest
        Parcels, rasters and models.
    stocks, change : DataFrame
        Result tables; the rows by parcel of ``pool`` are used.
    pool : str
        Pool, or ``all``.

    Returns
    -------
    paths, findings : list of Path, DataFrame

    Raises
    ------
    InputFileError, SettingsError
        If a raster cannot be used, or the grid would be too large.
    """
    grid = raster_grid(request)
    names = request.parcels["parcel"].astype("str")
    paths: dict[str, Path] = {}
    found = []
    own = stocks[(stocks["by"] == "parcel") & (stocks["pool"] == pool)]
    for survey, rows in own.groupby("survey", sort=False, observed=True):
        figure = _figures(names, rows, "stock_t_c")
        if np.isfinite(figure).any():
            paths[str(survey)] = _path(folder, "density", [str(survey)], paths.values())
            found.append(write_density(paths[str(survey)], request, grid, str(survey), figure))
    written = list(paths.values())
    pairs = change[(change["by"] == "parcel") & (change["pool"] == pool)]
    for (since, until), rows in pairs.groupby(["since", "until"], sort=False, observed=True):
        figure = _figures(names, rows, "change_t_c")
        if np.isfinite(figure).any() and str(since) in paths and str(until) in paths:
            written.append(_path(folder, "change", [str(since), str(until)], written))
            dates, maps = (str(since), str(until)), (paths[str(since)], paths[str(until)])
            found.append(write_change(written[-1], request, grid, dates, figure, maps))
    return written, join_findings(found)


def _figures(names: pd.Series, rows: pd.DataFrame, column: str) -> np.ndarray:
    """Return the figure of each parcel named; NaN without one."""
    return names.map(rows.set_index(rows["unit"].astype("str"))[column]).to_numpy(dtype="float64")


def _path(folder: Path, what: str, labels: Iterable[str], taken: Iterable[Path]) -> Path:
    """Return a file name of labels that may hold any sign, distinct also where case does not count."""
    words = [re.sub(r"[^\w.-]+", "_", label).strip("._") or "survey" for label in labels]
    used, name = {path.stem.casefold() for path in taken}, "_".join([what, *words])
    while name.casefold() in used:
        name += "_"
    return folder / f"{name}.tif"


def raster_grid(request: RasterRequest) -> Grid:
    """Return the cells of the maps: those of the first raster where none is stated, cut to the parcels.

    Raises
    ------
    SettingsError
        If there would be too many.
    """
    shapes = request.parcels.geometry.to_numpy()
    left, bottom, right, top = (float(value) for value in shapely.total_bounds(shapes))
    bounds = (left, bottom, right, top)
    if request.cell_m is None and request.files and request.place.crs is not None:
        place = request.place
        with open_raster(
            request.files[0], place.folder, str(place.crs), bounds=bounds, allow_outside=place.allow_outside
        ) as raster:
            grid = raster.grid
    else:
        size = request.cell_m or raster_limit("cell_m")
        grid = Grid(0.0, 0.0, size, size, 1, 1).around(bounds)
    if grid.cells > raster_limit("cells_most"):
        raise SettingsError(
            f"maps of {grid.rows} x {grid.columns} cells would be too large",
            where="[estimation] map_cell_m",
            remedy=f"State cells larger than {grid.cell_x:g} m.",
        )
    return grid


def write_density(path: Path, request: RasterRequest, grid: Grid, survey: str, stock: np.ndarray) -> pd.DataFrame:
    """Write the carbon density of one survey.

    Parameters
    ----------
    path : Path
        The file; an earlier one is replaced.
    request : RasterRequest
        Parcels, rasters and models.
    grid : Grid
        Cells.
    survey : str
        Survey.
    stock : ndarray
        Stock of each parcel [t C]; NaN where there is no figure.

    Returns
    -------
    DataFrame
        Findings.
    """
    kept = np.isfinite(stock)
    strata = request.parcels["stratum"].astype("str").to_numpy(dtype=object)[kept]
    label = TiffLabel(
        quantity=f"carbon density, all counted pools, survey {survey}",
        unit="t C/ha",
        tags={"INVENTORY": request.inventory, "SURVEY": survey, "RULE": _RULE.format(what="stock [t C]")},
    )
    with _density_model(request, grid, survey, strata) as prediction:
        return _write(path, request, grid, stock, prediction, label, signed=False)


def write_change(
    path: Path, request: RasterRequest, grid: Grid, dates: tuple[str, str], change: np.ndarray, maps: tuple[Path, Path]
) -> pd.DataFrame:
    """Write the change between two surveys, from the maps of density of both.

    Where the change of a parcel is the difference of its stocks, so it is in every cell; else cells are shifted.

    Parameters
    ----------
    path, request, grid
        As for :func:`write_density`.
    dates : tuple of str
        Earlier and later survey.
    change : ndarray
        Change of each parcel [t C]; NaN where there is no figure.
    maps : tuple of Path
        Densities at both, on the same grid.
    """
    label = TiffLabel(
        quantity=f"change of carbon density, all counted pools, {dates[0]} to {dates[1]}",
        unit="t C/ha",
        tags={
            "INVENTORY": request.inventory,
            "SINCE": dates[0],
            "UNTIL": dates[1],
            "SIGN": "positive: carbon gained by the land",
            "RULE": _RULE.format(what="change [t C]"),
        },
    )
    with read_tiff(maps[0]) as since, read_tiff(maps[1]) as until:

        def difference(window: Window, cover: Cover) -> np.ndarray:
            return (until(window) - since(window)).ravel()[cover.cell]

        return _write(path, request, grid, change, difference, label, signed=True)


_RULE = "cell value x cell area inside a parcel adds up to the {what} of the parcel; shares of cells by area"


@contextmanager
def _density_model(request: RasterRequest, grid: Grid, survey: str, strata: np.ndarray) -> Iterator[Prediction]:
    """Open the rasters of a survey and yield the prediction for the entries of a window."""
    found = model_of(request.coefficients, survey, strata)
    if found is None or request.place.crs is None:
        yield lambda window, cover: np.full(len(cover.cell), np.nan)
        return
    model, variant = found
    place = request.place
    with ExitStack() as stack:
        rasters = [
            stack.enter_context(
                open_raster(
                    file, place.folder, str(place.crs), bounds=grid.bounds, grid=grid, allow_outside=place.allow_outside
                )
            )
            for file in serving_files(request.files, model.names, survey)
        ]

        def density(window: Window, cover: Cover) -> np.ndarray:
            values = [raster.read(window).ravel()[cover.cell] for raster in rasters]
            told = predict(model, values, variant[cover.zone])
            return np.maximum(told, 0.0)  # NaN stays NaN

        yield density


def _write(
    path: Path,
    request: RasterRequest,
    grid: Grid,
    figure: np.ndarray,
    prediction: Prediction,
    label: TiffLabel,
    *,
    signed: bool,
) -> pd.DataFrame:
    kept = np.isfinite(figure)
    parcels, wanted = request.parcels.loc[kept], figure[kept]
    zones = Zones(parcels.geometry.to_numpy())
    signed = signed or bool((wanted < 0).any())
    sums = CellSums.zero(len(parcels))
    for _, cover, number, told in _passes(zones, grid, prediction):
        sums.add(cover, told, number)
    found = calibrate(sums, wanted, grid.cell_area / M2_PER_HECTARE, signed=signed, ease=raster_limit("border_ease"))
    aside = path.with_name(f".{path.name}.unfinished")
    try:
        write_tiff(
            aside, grid, str(request.place.crs or ""), label, _values(zones, grid, prediction, found), double=signed
        )
        off = check_raster_sums(aside, parcels.loc[found.met], wanted[found.met])
        if off > raster_limit("sum_difference"):
            raise LandcarbonError(f"{path.name}: cells differ from the parcel figures by {off:.2g} of them")
        os.replace(aside, path)
    finally:
        aside.unlink(missing_ok=True)
    return _findings(path.stem, parcels, sums, found, int((~kept).sum()))


def _passes(zones: Zones, grid: Grid, prediction: Prediction) -> Iterator[tuple[Window, Cover, np.ndarray, np.ndarray]]:
    """Yield window, cells in parcels, their numbers in the grid and their predictions."""
    for window in grid.windows(WINDOW_ROWS, WINDOW_COLUMNS):
        cover = zones.cover(grid.part(window))
        if len(cover.cell):
            row, column = np.divmod(cover.cell, window.columns)
            number = (row + window.row) * grid.columns + column + window.column
            yield window, cover, number, prediction(window, cover)


def _values(
    zones: Zones, grid: Grid, prediction: Prediction, found: Calibration
) -> Iterator[tuple[Window, np.ndarray]]:
    for window, cover, number, told in _passes(zones, grid, prediction):
        values = found.apply(cover, told, number, window.cells)
        yield window, values.reshape(window.rows, window.columns)


def _findings(name: str, parcels: gpd.GeoDataFrame, sums: CellSums, found: Calibration, blank: int) -> pd.DataFrame:
    names = parcels["parcel"].to_numpy(dtype=object)
    words = {"name": f"{name}.tif", "count": str(blank)}
    parts = []
    if blank:
        parts.append(raster_note("raster leaves parcel blank", words=words, value=str(blank)))
    off = ~found.met
    parts.append(raster_note("raster does not add up", parcels.loc[off, ["parcel"]], words=words, value=names[off]))
    if sums.valid.any():
        share = sums.missing / np.maximum(sums.valid + sums.missing, np.finfo(float).tiny)
        some = share > raster_limit("parcel_share_missing")
        told = [f"{one:.0%}" for one in share[some]]
        parts.append(
            raster_note(
                "raster cells filled", parcels.loc[some, ["parcel"]], words=words, shares=told, value=names[some]
            )
        )
    return join_findings(parts)
