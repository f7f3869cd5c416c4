"""The figures and outlines of the map page: each stated once, as one JSON-able table for the script of the page."""

from __future__ import annotations

import json
import math
from collections.abc import Hashable, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from landcarbon.publish.colours import ColourScale, diverging_scale, sequential_scale
from landcarbon.publish.results import Results

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = ["CHANGE_FIELDS", "STOCK_FIELDS", "display_tolerance", "page_data"]

#: Figures of one parcel at one survey, in the order the script reads them.
STOCK_FIELDS = [
    "density_t_c_ha",
    "density_se",
    "density_low",
    "density_high",
    "stock_t_c",
    "stock_se",
    "stock_low",
    "stock_high",
    "plots",
]
#: Figures of one parcel between two surveys, in the order the script reads them.
CHANGE_FIELDS = [
    "change_t_c",
    "change_se",
    "change_low",
    "change_high",
    "change_t_c_yr",
    "change_t_c_ha_yr",
    "change_t_c_ha_yr_se",
    "co2_t_yr",
    "plots_paired",
    "plots_since",
    "plots_until",
    "years",
]
_DIGITS = 7  # significant digits on the page; the tables hold more
_DEGREE_DECIMALS = 6  # about a tenth of a metre
_LEAST_TOLERANCE_M = 0.5
_TOLERANCE_SHARE = 1 / 20_000  # of the extent: well below a pixel when the whole map is in view


def page_data(results: Results) -> dict[str, Any]:
    """Gather what the map page shows.

    Parameters
    ----------
    results : Results
        The run.

    Returns
    -------
    dict
        layers, parcels, stocks, changes, methods, shapes (GeoJSON), plots and a few words; only lists, dicts, text and
        numbers.
    """
    surveys = [str(name) for name in results.surveys["survey"]]
    pairs = _pairs(results.change)
    names = [] if results.parcels is None else [str(name) for name in results.parcels["parcel"]]
    methods: dict[str, int] = {}
    stocks = [_figures(_of(results.stocks, survey=name), names, STOCK_FIELDS, methods) for name in surveys]
    changes = [
        _figures(_of(results.change, since=since, until=until), names, CHANGE_FIELDS, methods) for since, until in pairs
    ]
    plots = _plots(results, surveys)
    return {
        "name": results.name,
        "interval": results.interval_name,
        "surveys": surveys,
        "pairs": [list(pair) for pair in pairs],
        "layers": _layers(results, surveys, pairs, stocks, changes, plots),
        "parcels": _parcel_rows(results.parcels),
        "stocks": stocks,
        "changes": changes,
        "methods": list(methods),
        "shapes": _shapes(results.parcels),
        "plots": plots,
    }


def display_tolerance(parcels: gpd.GeoDataFrame) -> float:
    """Return by how much outlines may be simplified for display.

    Parameters
    ----------
    parcels : GeoDataFrame
        In a projected system with metres.

    Returns
    -------
    float
        Metres: half a metre, or a small share of the extent where that is wide.
    """
    left, bottom, right, top = parcels.total_bounds
    extent = max(right - left, top - bottom)
    return max(_LEAST_TOLERANCE_M, float(f"{extent * _TOLERANCE_SHARE:.1g}")) if math.isfinite(extent) else 0.0


def metric(parcels: gpd.GeoDataFrame) -> gpd.GeoDataFrame:
    """Return the parcels in a projected system with metres."""
    crs = parcels.crs
    if crs is not None and crs.is_projected and crs.axis_info[0].unit_name == "metre":
        return parcels
    return parcels.to_crs(parcels.estimate_utm_crs())


def _pairs(change: pd.DataFrame) -> list[tuple[str, str]]:
    pairs = change[["since", "until"]].astype("str").drop_duplicates()
    return list(zip(pairs["since"], pairs["until"], strict=True))


def _of(frame: pd.DataFrame, **labels: str) -> pd.DataFrame:
    keep = frame["pool"].astype("str").eq("all")
    for column, label in labels.items():
        keep &= frame[column].astype("str").eq(label)
    return frame[keep]


def _figures(
    rows: pd.DataFrame, names: Sequence[str], fields: list[str], methods: dict[str, int]
) -> list[list[float | None] | None]:
    """Line the rows of the parcels up with their names; the last entry of each is the number of the method."""
    parcels = rows[rows["by"].astype("str").eq("parcel")].drop_duplicates("unit")
    table = parcels.set_index(parcels["unit"].astype("str"))
    position = table.index.get_indexer(pd.Index(list(names), dtype=table.index.dtype))
    values = np.column_stack([table[name].to_numpy(dtype=float, na_value=np.nan) for name in fields])
    described = [methods.setdefault(str(text), len(methods)) for text in table["method"]]
    return [None if at < 0 else [*map(_short, values[at]), described[at]] for at in position]


def _short(value: float) -> float | None:
    if not math.isfinite(value):
        return None
    rounded = float(f"{value:.{_DIGITS}g}")
    return int(rounded) if rounded.is_integer() else rounded


def _layers(
    results: Results,
    surveys: list[str],
    pairs: list[tuple[str, str]],
    stocks: list[list[Any]],
    changes: list[list[Any]],
    plots: list[dict[str, Any]],
) -> list[dict[str, Any]]:
    """Describe the layers. All surveys share one scale, and so do all changes, so that colours compare."""
    shown = _column(stocks, STOCK_FIELDS.index("density_t_c_ha"))
    if results.parcels is None:
        shown = [value for plot in plots for value in plot["density"] if value is not None]
    density = sequential_scale(shown)
    change = diverging_scale(_column(changes, CHANGE_FIELDS.index("change_t_c_ha_yr")))
    layers = [
        {
            "kind": "density",
            "at": at,
            "title": f"Carbon density, survey {survey}",
            "short": survey,
            "unit": "t C/ha",
            **_scale(density),
            "total": _total(_of(results.stocks, survey=survey), STOCK_FIELDS),
        }
        for at, survey in enumerate(surveys)
    ]
    if results.parcels is None:
        return layers
    return layers + [
        {
            "kind": "change",
            "at": at,
            "title": f"Change of carbon, {since} to {until}",
            "short": f"{since} to {until}",
            "unit": "t C/ha per year",
            **_scale(change),
            "total": _total(_of(results.change, since=since, until=until), CHANGE_FIELDS),
        }
        for at, (since, until) in enumerate(pairs)
    ]


def _column(tables: list[list[Any]], at: int) -> list[float]:
    return [row[at] for table in tables for row in table if row is not None and row[at] is not None]


def _scale(scale: ColourScale) -> dict[str, Any]:
    return {"edges": scale.edges, "colours": scale.colours}


def _total(rows: pd.DataFrame, fields: list[str]) -> list[float | None] | None:
    whole = rows[rows["by"].astype("str").eq("inventory")]
    return [_short(float(value)) for value in whole.iloc[0][fields]] if len(whole) else None


def _parcel_rows(parcels: gpd.GeoDataFrame | None) -> list[list[Any]]:
    if parcels is None:
        return []
    area = parcels["area_ha"].to_numpy(dtype=float, na_value=np.nan)
    texts = [_texts(parcels[name]) for name in ("parcel", "stratum", "land_use")]
    return [[*row, _short(size)] for *row, size in zip(*texts, area, strict=True)]


def _texts(column: pd.Series) -> list[str]:
    return ["" if missing else str(cell) for cell, missing in zip(column, column.isna(), strict=True)]


def _shapes(parcels: gpd.GeoDataFrame | None) -> dict[str, Any]:
    """Return the outlines in geographic coordinates, simplified for display; each knows the number of its parcel."""
    import shapely

    features: list[dict[str, Any]] = []
    if parcels is not None and len(parcels):
        flat = metric(parcels)
        simple = flat.geometry.simplify(display_tolerance(flat), preserve_topology=True)
        degrees = shapely.transform(simple.to_crs("EPSG:4326").to_numpy(), lambda xy: np.round(xy, _DEGREE_DECIMALS))
        texts = shapely.to_geojson(degrees)
        features = [
            {"type": "Feature", "properties": {"i": number}, "geometry": json.loads(text)}
            for number, text in enumerate(texts)
            if text is not None
        ]
    return {"type": "FeatureCollection", "features": features}


def _plots(results: Results, surveys: list[str]) -> list[dict[str, Any]]:
    """List the plots that have a position, with their density per survey (None where not measured)."""
    points = results.plot_points
    points = points[points["lon"].notna() & points["lat"].notna()]
    whole = _of(results.plots)
    keys = pd.MultiIndex.from_arrays([whole["survey"].astype("str"), whole["plot"].astype("str")])
    density = pd.Series(whole["density_t_c_ha"].to_numpy(dtype=float, na_value=np.nan), index=keys)
    density = density[~density.index.duplicated()]
    names = points["plot"].astype("str")
    wanted: list[tuple[Hashable, ...]] = [(survey, name) for name in names for survey in surveys]
    texts = [_texts(points[name]) for name in ("plot", "parcel", "stratum")]
    places = [points[name].astype(float) for name in ("lat", "lon")]
    inside = points["inside"].astype(bool)
    values = density.reindex(wanted).to_numpy().reshape(len(points), len(surveys)) if wanted else np.empty((0, 0))
    return [
        {
            "plot": plot,
            "parcel": parcel,
            "stratum": stratum,
            "at": [round(lat, _DEGREE_DECIMALS), round(lon, _DEGREE_DECIMALS)],
            "inside": bool(within),
            "density": [_short(value) for value in found],
        }
        for plot, parcel, stratum, lat, lon, within, found in zip(*texts, *places, inside, values, strict=True)
    ]
