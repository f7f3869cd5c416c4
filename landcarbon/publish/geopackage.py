"""Parcels and plots with their figures as a GeoPackage."""

from __future__ import annotations

import re
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING

import pandas as pd

from landcarbon.errors import ResultsError
from landcarbon.publish.results import Results, sums_of_plots

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = ["parcels_layer", "plots_layer", "read_parcels", "read_plot_points", "write_geopackage"]

_PARCEL_FIELDS = ["parcel", "stratum", "land_use", "area_ha"]
_POINT_FIELDS = ["plot", "parcel", "stratum", "lon", "lat", "inside"]
_GEOGRAPHIC = "EPSG:4326"
_STOCK_FIELDS = ["density_t_c_ha", "density_se", "density_low", "density_high", "stock_t_c", "stock_se", "plots"]
_CHANGE_FIELDS = ["change_t_c", "change_se", "change_low", "change_high", "change_t_c_ha_yr", "co2_t_yr"]


def write_geopackage(results: Results, path: Path) -> None:
    """Write the layers ``parcels`` (where there are polygons) and ``plots``.

    Parameters
    ----------
    results : Results
        The run.
    path : Path
        File to write; must not exist.
    """
    import pyogrio.errors

    layers = {"parcels": parcels_layer(results), "plots": plots_layer(results)}
    try:
        _write_layers(layers, path)
    except (pyogrio.errors.DataSourceError, pyogrio.errors.DataLayerError) as error:
        raise ResultsError(
            f"the GeoPackage could not be written: {error}", where=str(path.parent), remedy="See that the disk has room"
        ) from error


def _write_layers(layers: dict[str, gpd.GeoDataFrame | None], path: Path) -> None:
    parcels, points = layers["parcels"], layers["plots"]
    if parcels is not None:
        # One geometry type per layer: mending or splitting can leave a mix of single and multiple polygons.
        parcels.to_file(path, layer="parcels", driver="GPKG", engine="pyogrio", promote_to_multi=True)
    if points is not None:
        points.to_file(path, layer="plots", driver="GPKG", engine="pyogrio", geometry_type="Point")


def parcels_layer(results: Results) -> gpd.GeoDataFrame | None:
    """Join the parcels with the stock (pool ``all``) of each survey and the change between each pair of surveys.

    Parameters
    ----------
    results : Results
        The run.

    Returns
    -------
    GeoDataFrame or None
        The parcels in their order; columns such as ``stock_t_c_2024``, ``change_t_c_2014_2024``. None without polygons.
    """
    import geopandas as gpd

    if results.parcels is None:
        return None
    parcels = results.parcels
    layer = parcels[[name for name in parcels.columns if name != parcels.geometry.name]].reset_index(drop=True)
    for column in layer.select_dtypes(include="category"):
        layer[column] = layer[column].astype("str")
    wide = [
        _widen(results.stocks, ["survey"], _STOCK_FIELDS),
        _widen(results.change, ["since", "until"], _CHANGE_FIELDS),
    ]
    for figures in wide:
        aligned = figures.reindex(layer["parcel"].astype("str")).reset_index(drop=True)
        layer = pd.concat([layer, aligned], axis="columns")
    layer.columns = _distinct(layer.columns)
    return gpd.GeoDataFrame(layer, geometry=parcels.geometry.reset_index(drop=True))


def plots_layer(results: Results) -> gpd.GeoDataFrame:
    """Make the layer of plots: position, parcel, stratum and the density (pool ``all``) of each survey.

    Parameters
    ----------
    results : Results
        The run.

    Returns
    -------
    GeoDataFrame
        In the system of the parcels, or geographic if there is none. Plots without position have no geometry.
    """
    import geopandas as gpd

    points = results.plot_points[_POINT_FIELDS].reset_index(drop=True)
    for column in points.select_dtypes(include="category"):
        points[column] = points[column].astype("str")
    whole = sums_of_plots(results.plots, "all")
    if len(whole):
        wide = whole.assign(plot=whole["plot"].astype("str"), survey=whole["survey"].astype("str"))
        table = wide.pivot_table(index="plot", columns="survey", values="density_t_c_ha", aggfunc="first", sort=False)
        table.columns = [f"density_t_c_ha_{_word(name)}" for name in table.columns]
        points = pd.concat([points, table.reindex(points["plot"].astype("str")).reset_index(drop=True)], axis="columns")
    points.columns = _distinct(points.columns)
    known = points["lon"].notna() & points["lat"].notna()
    geometry = gpd.GeoSeries(gpd.points_from_xy(points["lon"], points["lat"]), crs=_GEOGRAPHIC).where(known, None)
    layer = gpd.GeoDataFrame(points, geometry=geometry)
    return layer.to_crs(results.crs) if results.crs else layer


def read_parcels(path: Path) -> gpd.GeoDataFrame:
    """Read the parcels back, without the figures."""
    import geopandas as gpd

    layer = gpd.read_file(path, layer="parcels", engine="pyogrio")
    return layer[[*_PARCEL_FIELDS, "geometry"]]


def read_plot_points(path: Path) -> pd.DataFrame:
    """Read the positions of the plots back."""
    import pyogrio

    table = pyogrio.read_dataframe(path, layer="plots", read_geometry=False, columns=_POINT_FIELDS)
    table["inside"] = table["inside"].astype(bool)
    return table[_POINT_FIELDS]


def _widen(rows: pd.DataFrame, keys: list[str], fields: list[str]) -> pd.DataFrame:
    wanted = rows[rows["by"].eq("parcel") & rows["pool"].eq("all")]
    parts = []
    for labels, group in wanted.groupby(keys, sort=False, observed=True):
        ending = "_".join(_word(label) for label in labels)
        part = group.drop_duplicates("unit").set_index(group["unit"].astype("str").drop_duplicates())[fields]
        parts.append(part.add_suffix(f"_{ending}"))
    return pd.concat(parts, axis="columns") if parts else pd.DataFrame(index=pd.Index([], dtype="str"))


def _word(label: object) -> str:
    return re.sub(r"\W+", "_", str(label)).strip("_") or "survey"


def _distinct(names: Iterable[str]) -> list[str]:
    """Make column names distinct, also for readers that ignore case."""
    taken: set[str] = set()
    result = []
    for name in names:
        candidate, count = str(name), 1
        while candidate.lower() in taken:
            count += 1
            candidate = f"{name}_{count}"
        taken.add(candidate.lower())
        result.append(candidate)
    return result
