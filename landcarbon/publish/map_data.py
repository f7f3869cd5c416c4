"""The figures of the map page: each stated once, as one JSON-able table for the script of the page."""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.publish.colours import ColourScale, diverging_scale, sequential_scale
from landcarbon.publish.map_shapes import DEGREE_DECIMALS, name_places, outlines
from landcarbon.publish.results import Results, sums_of_plots
from landcarbon.publish.tables import FLOAT_FORMAT
from landcarbon.publish.words import POOL_NAMES

__all__ = ["CHANGE_FIELDS", "STOCK_FIELDS", "page_data"]

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
# Above this many figures of parcels the page would grow too heavy with every pool; it then shows the sum alone.
_MOST_ROWS = 20_000


def page_data(results: Results) -> dict[str, Any]:
    """Gather what the map page shows.

    Parameters
    ----------
    results : Results
        The run.

    Returns
    -------
    dict
        parcels, strata, plots, shapes (GeoJSON), pools (each with its layers and figures), methods and a few words;
        only lists, dicts, text and numbers.
    """
    surveys = [str(name) for name in results.surveys["survey"]]
    pairs = _pairs(results.change)
    points = _placed(results.plot_points)
    strata = _strata_rows(results.stocks)
    methods: dict[str, int] = {}
    pools, left_out = _pools(results, len(surveys) + len(pairs))
    return {
        "name": results.name,
        "interval": results.interval_name,
        "surveys": surveys,
        "pairs": [list(pair) for pair in pairs],
        "parcels": _parcel_rows(results),
        "strata": strata,
        "pools": [_pool(results, name, surveys, pairs, [row[0] for row in strata], methods) for name in pools],
        "methods": list(methods),
        "shapes": outlines(results.parcels),
        "plots": _plots(points),
        "counts": {
            "plots": len(results.plot_points),
            "outside": int((~results.plot_points["inside"].astype(bool)).sum()),
            "unplaced": len(results.plot_points) - len(points),
        },
        "pools_left_out": left_out,
    }


def _pools(results: Results, times: int) -> tuple[list[str], bool]:
    """Name the pools of the page, the sum first, and tell whether some are left out for their weight."""
    known = results.stocks[results.stocks["density_t_c_ha"].notna()]
    present = set(known["pool"].astype("str"))
    single = [name for name in POOL_NAMES if name in present and name != "all"]
    if len(single) < 2:  # one pool is its own sum
        return ["all"], False
    parcels = 0 if results.parcels is None else len(results.parcels)
    if parcels * times * (len(single) + 1) > _MOST_ROWS:
        return ["all"], True
    return ["all", *single], False


def _pool(
    results: Results,
    pool: str,
    surveys: list[str],
    pairs: list[tuple[str, str]],
    strata: list[str],
    methods: dict[str, int],
) -> dict[str, Any]:
    parcels = [] if results.parcels is None else [str(name) for name in results.parcels["parcel"]]
    stocks, changes = _of(results.stocks, pool=pool), _of(results.change, pool=pool)
    at = [_of(stocks, survey=name) for name in surveys]
    between = [_of(changes, since=since, until=until) for since, until in pairs]
    by_parcel = {
        "stocks": [_figures(rows, "parcel", parcels, STOCK_FIELDS, methods) for rows in at],
        "changes": [_figures(rows, "parcel", parcels, CHANGE_FIELDS, methods) for rows in between],
    }
    density = _plot_density(results, pool, surveys)
    shown = _column(by_parcel["stocks"], STOCK_FIELDS.index("density_t_c_ha"))
    if results.parcels is None:
        shown = [value for row in density for value in row if value is not None]
    # All surveys share one scale, and so do all changes, so that colours compare.
    scales = {
        "density": sequential_scale(shown),
        "change": diverging_scale(_column(by_parcel["changes"], CHANGE_FIELDS.index("change_t_c_ha_yr"))),
    }
    of_pool = "" if pool == "all" else f" of {POOL_NAMES[pool]}"
    layers = [
        _layer("density", number, f"Carbon density{of_pool}, survey {name}", name, "t C/ha")
        | _scale(scales["density"])
        | {"total": _total(at[number], STOCK_FIELDS)}
        for number, name in enumerate(surveys)
    ] + [
        _layer(
            "change", number, f"Change of carbon{of_pool}, {since} to {until}", f"{since} to {until}", "t C/ha per year"
        )
        | _scale(scales["change"])
        | {"total": _total(between[number], CHANGE_FIELDS)}
        for number, (since, until) in enumerate(pairs)
    ]
    return {
        "pool": pool,
        "name": POOL_NAMES[pool],
        "layers": layers,
        "parcels": by_parcel,
        "strata": {
            "stocks": [_figures(rows, "stratum", strata, STOCK_FIELDS, methods) for rows in at],
            "changes": [_figures(rows, "stratum", strata, CHANGE_FIELDS, methods) for rows in between],
        },
        "density": density,
    }


def _layer(kind: str, at: int, title: str, short: str, unit: str) -> dict[str, Any]:
    return {"kind": kind, "at": at, "title": title, "short": short, "unit": unit}


def _pairs(change: pd.DataFrame) -> list[tuple[str, str]]:
    pairs = change[["since", "until"]].astype("str").drop_duplicates()
    return list(zip(pairs["since"], pairs["until"], strict=True))


def _of(frame: pd.DataFrame, **labels: str) -> pd.DataFrame:
    keep = pd.Series(True, index=frame.index)
    for column, label in labels.items():
        keep &= frame[column].astype("str").eq(label)
    return frame[keep]


def _figures(
    rows: pd.DataFrame, by: str, names: Sequence[str], fields: list[str], methods: dict[str, int]
) -> list[list[float | None] | None]:
    """Line the rows of the units up with their names; the last entry of each is the number of the method."""
    units = rows[rows["by"].astype("str").eq(by)].drop_duplicates("unit")
    table = units.set_index(units["unit"].astype("str"))
    position = table.index.get_indexer(pd.Index(list(names), dtype=table.index.dtype))
    values = np.column_stack([table[name].to_numpy(dtype=float, na_value=np.nan) for name in fields])
    described = [methods.setdefault(str(text), len(methods)) for text in table["method"]]
    return [None if at < 0 else [*map(_short, values[at]), described[at]] for at in position]


def _short(value: float) -> float | None:
    if not math.isfinite(value):
        return None
    # By way of the digits of the tables, so that a page made from the tables is the same to the last byte.
    rounded = float(f"{float(FLOAT_FORMAT % value):.{_DIGITS}g}")
    return int(rounded) if rounded.is_integer() else rounded


def _column(tables: list[list[Any]], at: int) -> list[float]:
    return [row[at] for table in tables for row in table if row is not None and row[at] is not None]


def _scale(scale: ColourScale) -> dict[str, Any]:
    return {"edges": scale.edges, "colours": scale.colours}


def _total(rows: pd.DataFrame, fields: list[str]) -> list[float | None] | None:
    whole = rows[rows["by"].astype("str").eq("inventory")]
    return [_short(float(value)) for value in whole.iloc[0][fields]] if len(whole) else None


def _parcel_rows(results: Results) -> list[list[Any]]:
    """List name, stratum, land use, area and the place of the name."""
    parcels = results.parcels
    if parcels is None:
        return []
    area = parcels["area_ha"].to_numpy(dtype=float, na_value=np.nan)
    texts = [_texts(parcels[name]) for name in ("parcel", "stratum", "land_use")]
    places = name_places(parcels)
    return [[*row, _short(size), place] for *row, size, place in zip(*texts, area, places, strict=True)]


def _strata_rows(stocks: pd.DataFrame) -> list[list[Any]]:
    """List name and area, which may differ from survey to survey: the last known is taken."""
    rows = stocks[stocks["by"].astype("str").eq("stratum")]
    areas = rows.groupby(rows["unit"].astype("str"), sort=False)["area_ha"].last()
    return [[str(name), _short(float(area))] for name, area in areas.items()]


def _texts(column: pd.Series) -> list[str]:
    return ["" if missing else str(cell) for cell, missing in zip(column, column.isna(), strict=True)]


def _placed(points: pd.DataFrame) -> pd.DataFrame:
    return points[points["lon"].notna() & points["lat"].notna()]


def _plots(points: pd.DataFrame) -> list[dict[str, Any]]:
    """List the plots that have a position."""
    texts = [_texts(points[name]) for name in ("plot", "parcel", "stratum")]
    places = [points[name].astype(float) for name in ("lat", "lon")]
    inside = points["inside"].astype(bool)
    return [
        {
            "plot": plot,
            "parcel": parcel,
            "stratum": stratum,
            "at": [round(lat, DEGREE_DECIMALS), round(lon, DEGREE_DECIMALS)],
            "inside": bool(within),
        }
        for plot, parcel, stratum, lat, lon, within in zip(*texts, *places, inside, strict=True)
    ]


def _plot_density(results: Results, pool: str, surveys: list[str]) -> list[list[float | None]]:
    """List the density of every placed plot at each survey; None where the pool was not measured."""
    rows = sums_of_plots(results.plots, pool)
    keys = pd.MultiIndex.from_arrays([rows["survey"].astype("str"), rows["plot"].astype("str")])
    density = pd.Series(rows["density_t_c_ha"].to_numpy(dtype=float, na_value=np.nan), index=keys)
    density = density[~density.index.duplicated()]
    names = _placed(results.plot_points)["plot"].astype("str")
    wanted: list[tuple[Hashable, ...]] = [(survey, name) for name in names for survey in surveys]
    if not wanted:
        return []
    values = density.reindex(wanted).to_numpy().reshape(len(names), len(surveys))
    return [[_short(value) for value in found] for found in values]
