"""The plots: where they are, in which parcel and stratum, and what is known of their shape."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from pyproj import CRS

from landcarbon.errors import InputFileError, SettingsError
from landcarbon.inventory.models import Settings
from landcarbon.inventory.nearest import suggestion
from landcarbon.read.crs import WGS84, is_metric, metric_crs, move_points, parse_crs, utm_for
from landcarbon.read.limits import limit
from landcarbon.read.mapping import Mapped, coordinates_used, left_blank, map_raw, not_readable, read_mapped
from landcarbon.read.notes import note
from landcarbon.read.source import FileLog, Source, find_source, has_geometry

if TYPE_CHECKING:
    import geopandas as gpd

    from landcarbon.read.parcels import Boundaries, ParcelTable

__all__ = ["PlotTable", "place_by_survey", "place_plots", "read_plots"]

_ALL = "all"
_COLUMNS = ["plot", "x", "y", "lon", "lat", "parcel", "stratum", "inside"]
_DESIGN = ("cluster", "weight", "post_stratum")  # columns of the sampling design, handed on where the file has them
_LISTED = 10


@dataclass
class PlotTable:
    """Plots read.

    Attributes
    ----------
    frame : DataFrame
        As ``Inputs.plots``, but for ``inside``; parcel and stratum as the file gives them, until the plots are placed.
    extra : DataFrame
        plot, slope_deg, share_inside, plot_area_ha as far as the plots file gives them (NaN if not).
    crs : CRS or None
        Coordinate system of x and y.
    findings : list of DataFrame
        What was noted.
    """

    frame: pd.DataFrame
    extra: pd.DataFrame
    crs: CRS | None
    findings: list[pd.DataFrame]


def read_plots(settings: Settings, parcels: CRS | None, log: FileLog) -> PlotTable:
    """Read the plots; :func:`place_plots` puts them into parcels and strata.

    Parameters
    ----------
    settings : Settings
        The project file.
    parcels : CRS or None
        Coordinate system of the parcels, if there are any.
    log : FileLog
        Notes what was read.

    Raises
    ------
    InputFileError
        If the file cannot be used, or a plot stands twice with different entries.
    SettingsError
        If the coordinate system is missing.
    """
    source = find_source(settings.plots.file, settings.folder, "plots", allow_outside=settings.inventory.allow_outside)
    mapped, crs = _read(source, settings, log)
    placing = coordinates_used(mapped.given, source)
    findings = [*mapped.findings, *left_blank(mapped, "plots", placing)]
    findings += [
        not_readable("coordinate not readable", mapped, "plots", name) for name in placing if name in mapped.bad
    ]
    findings.append(note("ragged row of plots", mapped.frame[mapped.ragged]))
    table, repeats = _unique(mapped.frame, source.name)
    findings += repeats
    if table.empty:
        raise InputFileError("the file holds no plot", where=source.name)
    if crs is None:
        findings.append(note("no locations", file=source.name))
    target = _target(settings, parcels, table, crs)
    table["x"], table["y"], table["lon"], table["lat"] = _moved(table, crs, target)
    findings += _far_out(table, crs, target)
    extra = table[["plot", "slope_deg", "share_inside", "plot_area_ha", "file", "row"]].copy()
    design = [name for name in _DESIGN if name in mapped.given]
    return PlotTable(table[[*_COLUMNS[:-1], *design, "file", "row"]].copy(), extra, target, findings)


def place_plots(
    plots: PlotTable, parcels: ParcelTable | None, settings: Settings
) -> tuple[pd.DataFrame, list[pd.DataFrame]]:
    """Fill in parcel, stratum and whether a plot lies inside.

    Parameters
    ----------
    plots : PlotTable
        As read.
    parcels : ParcelTable or None
        Parcels, if there are any.
    settings : Settings
        The project file.

    Returns
    -------
    DataFrame, list of DataFrame
        ``Inputs.plots`` and findings.
    """
    table = plots.frame.copy()
    findings: list[pd.DataFrame] = []
    table["inside"] = True
    if parcels is not None:
        findings = _into_parcels(table, parcels)
        _take_stratum(table, parcels.frame)
    elif (table["stratum"] == "").all():
        table["stratum"] = pd.Series([_ALL] * len(table), dtype="str")
    table["stratum"] = table["stratum"].replace(dict(settings.strata.merge))
    return _tidy(table), findings


def _tidy(table: pd.DataFrame) -> pd.DataFrame:
    return table[[*_COLUMNS, *(name for name in _DESIGN if name in table)]].reset_index(drop=True)


def place_by_survey(
    plots: PlotTable, boundaries: Boundaries, settings: Settings
) -> tuple[pd.DataFrame, pd.DataFrame, list[pd.DataFrame]]:
    """Place the plots within the boundaries of each survey.

    The location decides. The parcel the plots table names counts for a plot without coordinates, and for one that lies
    in no parcel, as far as that parcel is in force.

    Parameters
    ----------
    plots : PlotTable
        As read.
    boundaries : Boundaries
        Outlines in force at each survey.
    settings : Settings
        The project file.

    Returns
    -------
    plots : DataFrame
        ``Inputs.plots``: where they lie at the latest survey at which they are in the inventory.
    places : DataFrame
        ``Inputs.parcel_of``.
    findings : list of DataFrame
        What was noted.
    """
    surveys = list(dict.fromkeys(boundaries.in_force["survey"]))
    known = set(boundaries.versions["parcel"])
    strange = plots.frame[(plots.frame["parcel"] != "") & ~plots.frame["parcel"].isin(known)]
    findings = [_unknown_parcels(strange, sorted(known)), _without_place(plots.frame, boundaries)]
    parts = []
    for survey in surveys:
        table = plots.frame.copy()
        parcels = boundaries.at(survey)
        seen = _seen_in(table, parcels)
        given = table["parcel"].where(table["parcel"].isin(list(parcels["parcel"])), "")
        table["parcel"] = seen.where(seen != "", given)
        table["inside"] = table["parcel"] != ""
        _take_stratum(table, parcels)
        table["stratum"] = table["stratum"].replace(dict(settings.strata.merge))
        parts.append(table.assign(survey=survey, seen=seen))
    places = pd.concat(parts, ignore_index=True).astype({"survey": "str"})
    findings += [*_against_boundaries(plots.frame, places, known), *_moving(places, len(surveys))]
    last = parts[-1]
    for earlier in reversed(parts[:-1]):
        last = last.where(last["inside"], earlier)
    frame = _tidy(last.astype(parts[0].dtypes.to_dict()))
    return frame, places[["survey", "plot", "parcel", "stratum", "inside"]], findings


def _read(source: Source, settings: Settings, log: FileLog) -> tuple[Mapped, CRS | None]:
    """Return the table with x and y in the coordinate system returned beside it (None: no locations)."""
    if has_geometry(source):
        return _read_vector(source, settings, log)
    mapped = read_mapped(source, "plots", settings, log)
    frame, given = mapped.frame, mapped.given
    if "x" in given and "y" in given:
        if settings.plots.crs is None:
            raise SettingsError(
                f"{source.name} gives x and y, but not in which coordinate system",
                where=f"{settings.path.name}, plots.crs",
                remedy="Give crs = 'EPSG:...' under [plots], or map lon and lat instead.",
            )
        return mapped, parse_crs(settings.plots.crs, "plots.crs")
    if "lon" in given and "lat" in given:
        frame["x"], frame["y"] = frame["lon"], frame["lat"]
        return mapped, parse_crs(settings.plots.crs or WGS84, "plots.crs")
    if {"x", "y", "lon", "lat"} & set(given):
        raise InputFileError(
            "only one of two coordinates is given", where=source.name, remedy="Map x and y, or lon and lat."
        )
    return mapped, None


def _read_vector(source: Source, settings: Settings, log: FileLog) -> tuple[Mapped, CRS]:
    from landcarbon.read.vectors import read_vector

    geometry, raw = read_vector(source, layer=settings.plots.layer, crs=settings.plots.crs)
    mapped = map_raw(raw, "plots", source, settings, log)
    geometry = geometry[mapped.frame["row"].to_numpy() - 1].reset_index(drop=True)
    kinds = set(geometry.geom_type.dropna()) - {"Point"}
    if kinds:
        shapes = ", ".join(sorted(kinds))
        mapped.findings.append(note("plots not drawn as points", file=source.name, value=shapes))
        if CRS.from_user_input(geometry.crs).is_geographic:
            flat = geometry.to_crs(geometry.estimate_utm_crs())
            geometry = flat.centroid.to_crs(geometry.crs)
        else:
            geometry = geometry.centroid
    mapped.frame["x"], mapped.frame["y"] = geometry.x.to_numpy(), geometry.y.to_numpy()
    return mapped, CRS.from_user_input(geometry.crs)


def _unique(table: pd.DataFrame, file: str) -> tuple[pd.DataFrame, list[pd.DataFrame]]:
    """Keep one row per plot: equal rows are told, differing ones stop the run."""
    blank = table["plot"] == ""
    findings = [note("row without plot", table[blank])]
    table = table[~blank]
    entries = [name for name in table if name not in ("file", "row")]
    same = table.duplicated(entries)
    findings.append(note("plot repeated", table[same]))
    table = table[~same]
    twice = table[table["plot"].duplicated(keep=False)]
    if len(twice):
        name = twice["plot"].iloc[0]
        lines = ", ".join(str(row) for row in twice.loc[twice["plot"] == name, "row"])
        more = twice["plot"].nunique() - 1
        raise InputFileError(
            f"plot {name!r} stands more than once with different entries (lines {lines})"
            + (f", and so do {more} more" if more else ""),
            where=file,
            remedy="Keep one row per plot.",
        )
    return table.reset_index(drop=True), findings


def _target(settings: Settings, parcels: CRS | None, table: pd.DataFrame, crs: CRS | None) -> CRS | None:
    """Choose the coordinate system of the results."""
    if parcels is not None:
        return parcels
    if settings.inventory.crs:
        return metric_crs(settings.inventory.crs)
    if crs is None or not (table["x"].notna() & table["y"].notna()).any():
        return None
    if is_metric(crs):
        return crs
    lon, lat = move_points(table["x"].to_numpy(), table["y"].to_numpy(), crs, CRS.from_user_input(WGS84))
    return None if np.isnan(lon).all() else utm_for(lon, lat)


def _moved(table: pd.DataFrame, crs: CRS | None, target: CRS | None) -> tuple[np.ndarray, ...]:
    x, y = table["x"].to_numpy(dtype="float64"), table["y"].to_numpy(dtype="float64")
    nowhere = np.full(len(table), np.nan)
    if crs is None:
        return nowhere, nowhere, nowhere, nowhere
    lon, lat = move_points(x, y, crs, CRS.from_user_input(WGS84))
    if target is None:
        return nowhere, nowhere, lon, lat
    return (*move_points(x, y, crs, target), lon, lat)


def _far_out(table: pd.DataFrame, crs: CRS | None, target: CRS | None) -> list[pd.DataFrame]:
    """Mark plots that lie where no place on earth is, or where one of the two coordinate systems is not meant for."""
    if crs is None:
        return []
    margin = limit("location", "area_of_use_margin_deg")
    lon, lat = table["lon"].to_numpy(dtype="float64"), table["lat"].to_numpy(dtype="float64")
    where = np.full(len(table), "", dtype=object)
    where[(np.abs(lat) > 90) | (np.abs(lon) > 180)] = "nowhere on earth: latitudes end at 90, longitudes at 180 degrees"
    systems = ((crs, "the system of its coordinates"), (target, "the system of the results"))
    for system, role in systems:
        area = system.area_of_use if system is not None else None
        if system is not None and area is not None and area.west <= area.east:
            far = (lon < area.west - margin) | (lon > area.east + margin)
            far |= (lat < area.south - margin) | (lat > area.north + margin)
            where[far & (where == "")] = f"far outside the area for which {system.name} ({role}) is made"
    rows = table[where != ""]
    value = [f"longitude {x:.4f}, latitude {y:.4f}" for x, y in zip(rows["lon"], rows["lat"], strict=True)]
    words = pd.DataFrame({"where": where[where != ""]})
    return [note("implausible location", rows, value=value, fill=words)]


def _take_stratum(table: pd.DataFrame, parcels: pd.DataFrame) -> None:
    """Give plots without a stratum that of their parcel."""
    of_parcel = dict(zip(parcels["parcel"], parcels["stratum"], strict=True))
    taken = table["parcel"].map(of_parcel).fillna("").astype("str")
    table["stratum"] = table["stratum"].where(table["stratum"] != "", taken)


def _seen_in(table: pd.DataFrame, parcels: gpd.GeoDataFrame) -> pd.Series:
    """Return the parcel each plot lies in, blank for none."""
    from landcarbon.read.parcels import locate

    names = parcels["parcel"].to_numpy(dtype=object)
    found = locate(parcels, table["x"].to_numpy(), table["y"].to_numpy())
    return pd.Series(np.append(names, "")[found], index=table.index, dtype="str")


def _unknown_parcels(strange: pd.DataFrame, names: Sequence[str]) -> pd.DataFrame:
    hints = [" " + suggestion(name, names) for name in strange["parcel"]]
    return note("unknown parcel", strange, fill=pd.DataFrame({"hint": pd.Series(hints, dtype="str").str.rstrip()}))


def _into_parcels(table: pd.DataFrame, parcels: ParcelTable) -> list[pd.DataFrame]:
    """Take the parcel given where it is known, else that of the location."""
    names = list(parcels.frame["parcel"])
    seen = _seen_in(table, parcels.frame)
    given = table["parcel"] != ""
    known = given & table["parcel"].isin(names)
    apart = table[known & (seen != table["parcel"]) & table["x"].notna() & table["y"].notna()]
    where = [f"lies in {place}" if place else "lies in no parcel" for place in seen[apart.index]]
    findings = [
        _unknown_parcels(table[given & ~known], names),
        note("parcel against location", apart, fill=pd.DataFrame({"parcel": list(apart["parcel"]), "where": where})),
    ]
    table["parcel"] = table["parcel"].where(known, seen)
    table["inside"] = table["parcel"] != ""
    return findings


def _without_place(plots: pd.DataFrame, boundaries: Boundaries) -> pd.DataFrame:
    """Tell plots that only a name puts into a parcel whose outline changes: nobody knows on which side they lie."""
    rows = boundaries.in_force.drop_duplicates(["parcel", "row"])["parcel"].value_counts()
    nowhere = plots["x"].isna() | plots["y"].isna()
    return note("changing parcel without location", plots[nowhere & plots["parcel"].isin(list(rows.index[rows > 1]))])


def _against_boundaries(plots: pd.DataFrame, places: pd.DataFrame, known: set[str]) -> list[pd.DataFrame]:
    """Tell plots that lie at no survey in the parcel the plots table names, though they have a location."""
    agrees = (places["seen"] == places["plot"].map(plots.set_index("plot")["parcel"])).groupby(places["plot"]).any()
    located = plots["x"].notna() & plots["y"].notna() & plots["parcel"].isin(list(known))
    apart = plots[located & ~plots["plot"].map(agrees).astype(bool)]
    where = places.groupby("plot", sort=False)["seen"].agg(lambda seen: ", ".join(dict.fromkeys(seen[seen != ""])))
    told = [f"lies in {names}" if names else "lies in no parcel" for names in apart["plot"].map(where)]
    return [
        note("parcel against boundaries", apart, fill=pd.DataFrame({"parcel": list(apart["parcel"]), "where": told}))
    ]


def _moving(places: pd.DataFrame, surveys: int) -> list[pd.DataFrame]:
    """Tell how many plots are in another parcel or stratum, or in or out, from one survey to another."""
    distinct = places.drop_duplicates(["plot", "parcel", "stratum", "inside"])["plot"].value_counts(sort=False)
    names = list(distinct.index[distinct > 1])
    if not names:
        return []
    shown = ", ".join(names[:_LISTED]) + (" ..." if len(names) > _LISTED else "")
    return [note("plots in changing parcels", value=shown, fill={"count": len(names), "surveys": surveys})]
